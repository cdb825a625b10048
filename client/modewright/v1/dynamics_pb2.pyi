from modewright.v1 import basis_pb2 as _basis_pb2
from modewright.v1 import transforms_pb2 as _transforms_pb2
from google.protobuf.internal import containers as _containers
from google.protobuf.internal import enum_type_wrapper as _enum_type_wrapper
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Iterable as _Iterable, Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class TimeInterpolation(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    TIME_INTERPOLATION_UNSPECIFIED: _ClassVar[TimeInterpolation]
    TIME_INTERPOLATION_STEPS: _ClassVar[TimeInterpolation]
    TIME_INTERPOLATION_LINES: _ClassVar[TimeInterpolation]
TIME_INTERPOLATION_UNSPECIFIED: TimeInterpolation
TIME_INTERPOLATION_STEPS: TimeInterpolation
TIME_INTERPOLATION_LINES: TimeInterpolation

class AdvanceRequest(_message.Message):
    __slots__ = ("basis", "coefficients", "velocities", "diffusion", "wave", "schrodinger", "duct", "times", "source", "left", "right")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    COEFFICIENTS_FIELD_NUMBER: _ClassVar[int]
    VELOCITIES_FIELD_NUMBER: _ClassVar[int]
    DIFFUSION_FIELD_NUMBER: _ClassVar[int]
    WAVE_FIELD_NUMBER: _ClassVar[int]
    SCHRODINGER_FIELD_NUMBER: _ClassVar[int]
    DUCT_FIELD_NUMBER: _ClassVar[int]
    TIMES_FIELD_NUMBER: _ClassVar[int]
    SOURCE_FIELD_NUMBER: _ClassVar[int]
    LEFT_FIELD_NUMBER: _ClassVar[int]
    RIGHT_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    coefficients: _transforms_pb2.Array
    velocities: _transforms_pb2.Array
    diffusion: DiffusionLaw
    wave: WaveLaw
    schrodinger: SchrodingerLaw
    duct: DuctLaw
    times: _transforms_pb2.Array
    source: TimeSource
    left: EndSource
    right: EndSource
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., coefficients: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., velocities: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., diffusion: _Optional[_Union[DiffusionLaw, _Mapping]] = ..., wave: _Optional[_Union[WaveLaw, _Mapping]] = ..., schrodinger: _Optional[_Union[SchrodingerLaw, _Mapping]] = ..., duct: _Optional[_Union[DuctLaw, _Mapping]] = ..., times: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., source: _Optional[_Union[TimeSource, _Mapping]] = ..., left: _Optional[_Union[EndSource, _Mapping]] = ..., right: _Optional[_Union[EndSource, _Mapping]] = ...) -> None: ...

class DiffusionLaw(_message.Message):
    __slots__ = ()
    def __init__(self) -> None: ...

class WaveLaw(_message.Message):
    __slots__ = ("damping",)
    DAMPING_FIELD_NUMBER: _ClassVar[int]
    damping: float
    def __init__(self, damping: _Optional[float] = ...) -> None: ...

class SchrodingerLaw(_message.Message):
    __slots__ = ("hbar",)
    HBAR_FIELD_NUMBER: _ClassVar[int]
    hbar: float
    def __init__(self, hbar: _Optional[float] = ...) -> None: ...

class DuctLaw(_message.Message):
    __slots__ = ("wavenumber_squared",)
    WAVENUMBER_SQUARED_FIELD_NUMBER: _ClassVar[int]
    wavenumber_squared: _transforms_pb2.Array
    def __init__(self, wavenumber_squared: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ...) -> None: ...

class TimeSource(_message.Message):
    __slots__ = ("times", "coefficients", "interpolation")
    TIMES_FIELD_NUMBER: _ClassVar[int]
    COEFFICIENTS_FIELD_NUMBER: _ClassVar[int]
    INTERPOLATION_FIELD_NUMBER: _ClassVar[int]
    times: _transforms_pb2.Array
    coefficients: _transforms_pb2.Array
    interpolation: TimeInterpolation
    def __init__(self, times: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., coefficients: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., interpolation: _Optional[_Union[TimeInterpolation, str]] = ...) -> None: ...

class EndSource(_message.Message):
    __slots__ = ("times", "values", "interpolation")
    TIMES_FIELD_NUMBER: _ClassVar[int]
    VALUES_FIELD_NUMBER: _ClassVar[int]
    INTERPOLATION_FIELD_NUMBER: _ClassVar[int]
    times: _transforms_pb2.Array
    values: _transforms_pb2.Array
    interpolation: TimeInterpolation
    def __init__(self, times: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., values: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., interpolation: _Optional[_Union[TimeInterpolation, str]] = ...) -> None: ...

class AdvanceResponse(_message.Message):
    __slots__ = ("basis_key", "coefficients", "velocities", "quasi_steady", "algorithm_version", "api_version")
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    COEFFICIENTS_FIELD_NUMBER: _ClassVar[int]
    VELOCITIES_FIELD_NUMBER: _ClassVar[int]
    QUASI_STEADY_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    basis_key: str
    coefficients: _transforms_pb2.Array
    velocities: _transforms_pb2.Array
    quasi_steady: _transforms_pb2.Array
    algorithm_version: str
    api_version: str
    def __init__(self, basis_key: _Optional[str] = ..., coefficients: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., velocities: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., quasi_steady: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ...) -> None: ...

class RespondRequest(_message.Message):
    __slots__ = ("basis", "mu", "sampled", "expression", "coefficients", "left", "right", "sources", "points", "quantity", "side")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    MU_FIELD_NUMBER: _ClassVar[int]
    SAMPLED_FIELD_NUMBER: _ClassVar[int]
    EXPRESSION_FIELD_NUMBER: _ClassVar[int]
    COEFFICIENTS_FIELD_NUMBER: _ClassVar[int]
    LEFT_FIELD_NUMBER: _ClassVar[int]
    RIGHT_FIELD_NUMBER: _ClassVar[int]
    SOURCES_FIELD_NUMBER: _ClassVar[int]
    POINTS_FIELD_NUMBER: _ClassVar[int]
    QUANTITY_FIELD_NUMBER: _ClassVar[int]
    SIDE_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    mu: _transforms_pb2.Array
    sampled: _transforms_pb2.SampledField
    expression: str
    coefficients: _transforms_pb2.Array
    left: float
    right: float
    sources: _containers.RepeatedCompositeFieldContainer[PointSource]
    points: _transforms_pb2.Array
    quantity: _transforms_pb2.Quantity
    side: _transforms_pb2.Side
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., mu: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., sampled: _Optional[_Union[_transforms_pb2.SampledField, _Mapping]] = ..., expression: _Optional[str] = ..., coefficients: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., left: _Optional[float] = ..., right: _Optional[float] = ..., sources: _Optional[_Iterable[_Union[PointSource, _Mapping]]] = ..., points: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., quantity: _Optional[_Union[_transforms_pb2.Quantity, str]] = ..., side: _Optional[_Union[_transforms_pb2.Side, str]] = ...) -> None: ...

class PointSource(_message.Message):
    __slots__ = ("x", "value_jump", "flux_jump")
    X_FIELD_NUMBER: _ClassVar[int]
    VALUE_JUMP_FIELD_NUMBER: _ClassVar[int]
    FLUX_JUMP_FIELD_NUMBER: _ClassVar[int]
    x: float
    value_jump: float
    flux_jump: float
    def __init__(self, x: _Optional[float] = ..., value_jump: _Optional[float] = ..., flux_jump: _Optional[float] = ...) -> None: ...

class RespondResponse(_message.Message):
    __slots__ = ("basis_key", "values", "coefficients", "algorithm_version", "api_version")
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    VALUES_FIELD_NUMBER: _ClassVar[int]
    COEFFICIENTS_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    basis_key: str
    values: _transforms_pb2.Array
    coefficients: _transforms_pb2.Array
    algorithm_version: str
    api_version: str
    def __init__(self, basis_key: _Optional[str] = ..., values: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., coefficients: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ...) -> None: ...
