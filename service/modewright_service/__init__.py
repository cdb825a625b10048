"""The Modewright service: numerical core, stores, gRPC adapters and process, in that order of dependence."""

__version__ = "0.1.0"
