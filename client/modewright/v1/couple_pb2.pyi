from modewright.v1 import basis_pb2 as _basis_pb2
from modewright.v1 import problem_pb2 as _problem_pb2
from modewright.v1 import transforms_pb2 as _transforms_pb2
from google.protobuf.internal import containers as _containers
from google.protobuf.internal import enum_type_wrapper as _enum_type_wrapper
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Iterable as _Iterable, Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class CoupleForm(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    COUPLE_FORM_UNSPECIFIED: _ClassVar[CoupleForm]
    COUPLE_FORM_PRODUCT: _ClassVar[CoupleForm]
    COUPLE_FORM_DERIVATIVES: _ClassVar[CoupleForm]
    COUPLE_FORM_MIXED: _ClassVar[CoupleForm]
COUPLE_FORM_UNSPECIFIED: CoupleForm
COUPLE_FORM_PRODUCT: CoupleForm
COUPLE_FORM_DERIVATIVES: CoupleForm
COUPLE_FORM_MIXED: CoupleForm

class CoupleRequest(_message.Message):
    __slots__ = ("first", "second", "form", "factor")
    FIRST_FIELD_NUMBER: _ClassVar[int]
    SECOND_FIELD_NUMBER: _ClassVar[int]
    FORM_FIELD_NUMBER: _ClassVar[int]
    FACTOR_FIELD_NUMBER: _ClassVar[int]
    first: _basis_pb2.BasisReference
    second: _basis_pb2.BasisReference
    form: CoupleForm
    factor: _containers.RepeatedCompositeFieldContainer[FunctionPiece]
    def __init__(self, first: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., second: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., form: _Optional[_Union[CoupleForm, str]] = ..., factor: _Optional[_Iterable[_Union[FunctionPiece, _Mapping]]] = ...) -> None: ...

class FunctionPiece(_message.Message):
    __slots__ = ("start", "end", "value")
    START_FIELD_NUMBER: _ClassVar[int]
    END_FIELD_NUMBER: _ClassVar[int]
    VALUE_FIELD_NUMBER: _ClassVar[int]
    start: float
    end: float
    value: _problem_pb2.Coefficient
    def __init__(self, start: _Optional[float] = ..., end: _Optional[float] = ..., value: _Optional[_Union[_problem_pb2.Coefficient, _Mapping]] = ...) -> None: ...

class CoupleResponse(_message.Message):
    __slots__ = ("first_basis_key", "second_basis_key", "matrix", "algorithm_version", "api_version")
    FIRST_BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    SECOND_BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    MATRIX_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    first_basis_key: str
    second_basis_key: str
    matrix: _transforms_pb2.Array
    algorithm_version: str
    api_version: str
    def __init__(self, first_basis_key: _Optional[str] = ..., second_basis_key: _Optional[str] = ..., matrix: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ...) -> None: ...
