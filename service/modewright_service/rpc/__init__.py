"""gRPC at the edge: servicers, interceptors, conversion of messages, mapping of errors."""
