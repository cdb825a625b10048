"""The numerical core: free of I/O, of gRPC and of protobuf."""
