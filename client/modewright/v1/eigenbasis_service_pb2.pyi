from modewright.v1 import couple_pb2 as _couple_pb2
from modewright.v1 import dynamics_pb2 as _dynamics_pb2
from modewright.v1 import operators_pb2 as _operators_pb2
from modewright.v1 import sensitivity_pb2 as _sensitivity_pb2
from modewright.v1 import solve_pb2 as _solve_pb2
from modewright.v1 import sweep_pb2 as _sweep_pb2
from modewright.v1 import transforms_pb2 as _transforms_pb2
from google.protobuf import descriptor as _descriptor
from typing import ClassVar as _ClassVar

DESCRIPTOR: _descriptor.FileDescriptor
