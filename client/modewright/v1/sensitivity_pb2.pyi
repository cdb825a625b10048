from modewright.v1 import basis_pb2 as _basis_pb2
from modewright.v1 import transforms_pb2 as _transforms_pb2
from google.protobuf.internal import containers as _containers
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Iterable as _Iterable, Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class DifferentiateRequest(_message.Message):
    __slots__ = ("basis", "parameters", "points")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    PARAMETERS_FIELD_NUMBER: _ClassVar[int]
    POINTS_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    parameters: _containers.RepeatedScalarFieldContainer[str]
    points: _transforms_pb2.Array
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., parameters: _Optional[_Iterable[str]] = ..., points: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ...) -> None: ...

class DifferentiateResponse(_message.Message):
    __slots__ = ("basis_key", "derivatives", "kernel_p", "kernel_q", "kernel_w", "algorithm_version", "api_version")
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    DERIVATIVES_FIELD_NUMBER: _ClassVar[int]
    KERNEL_P_FIELD_NUMBER: _ClassVar[int]
    KERNEL_Q_FIELD_NUMBER: _ClassVar[int]
    KERNEL_W_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    basis_key: str
    derivatives: _transforms_pb2.Array
    kernel_p: _transforms_pb2.Array
    kernel_q: _transforms_pb2.Array
    kernel_w: _transforms_pb2.Array
    algorithm_version: str
    api_version: str
    def __init__(self, basis_key: _Optional[str] = ..., derivatives: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., kernel_p: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., kernel_q: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., kernel_w: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ...) -> None: ...
