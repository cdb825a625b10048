"""The contract's messages and stubs, generated from proto/modewright/v1 by proto/generate.py."""
