from modewright.v1 import solve_pb2 as _solve_pb2
from modewright.v1 import transforms_pb2 as _transforms_pb2
from google.protobuf import descriptor as _descriptor
from typing import ClassVar as _ClassVar

DESCRIPTOR: _descriptor.FileDescriptor
