from google.protobuf.internal import containers as _containers
from google.protobuf.internal import enum_type_wrapper as _enum_type_wrapper
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Iterable as _Iterable, Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class Geometry(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    GEOMETRY_UNSPECIFIED: _ClassVar[Geometry]
    GEOMETRY_PLANE: _ClassVar[Geometry]
    GEOMETRY_CYLINDRICAL: _ClassVar[Geometry]
    GEOMETRY_SPHERICAL: _ClassVar[Geometry]

class Interpolation(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    INTERPOLATION_UNSPECIFIED: _ClassVar[Interpolation]
    INTERPOLATION_STEP_LEFT: _ClassVar[Interpolation]
    INTERPOLATION_STEP_RIGHT: _ClassVar[Interpolation]
    INTERPOLATION_LINEAR: _ClassVar[Interpolation]
    INTERPOLATION_MONOTONE_CUBIC: _ClassVar[Interpolation]
    INTERPOLATION_CUBIC_SPLINE: _ClassVar[Interpolation]

class EndKind(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    END_KIND_UNSPECIFIED: _ClassVar[EndKind]
    END_KIND_DIRICHLET: _ClassVar[EndKind]
    END_KIND_NEUMANN: _ClassVar[EndKind]
    END_KIND_ROBIN: _ClassVar[EndKind]
    END_KIND_FILM: _ClassVar[EndKind]
    END_KIND_LUMP: _ClassVar[EndKind]
    END_KIND_BOUNDED: _ClassVar[EndKind]
    END_KIND_COUPLED: _ClassVar[EndKind]

class CouplingKind(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    COUPLING_KIND_UNSPECIFIED: _ClassVar[CouplingKind]
    COUPLING_KIND_PERIODIC: _ClassVar[CouplingKind]
    COUPLING_KIND_ANTIPERIODIC: _ClassVar[CouplingKind]
    COUPLING_KIND_BLOCH: _ClassVar[CouplingKind]
GEOMETRY_UNSPECIFIED: Geometry
GEOMETRY_PLANE: Geometry
GEOMETRY_CYLINDRICAL: Geometry
GEOMETRY_SPHERICAL: Geometry
INTERPOLATION_UNSPECIFIED: Interpolation
INTERPOLATION_STEP_LEFT: Interpolation
INTERPOLATION_STEP_RIGHT: Interpolation
INTERPOLATION_LINEAR: Interpolation
INTERPOLATION_MONOTONE_CUBIC: Interpolation
INTERPOLATION_CUBIC_SPLINE: Interpolation
END_KIND_UNSPECIFIED: EndKind
END_KIND_DIRICHLET: EndKind
END_KIND_NEUMANN: EndKind
END_KIND_ROBIN: EndKind
END_KIND_FILM: EndKind
END_KIND_LUMP: EndKind
END_KIND_BOUNDED: EndKind
END_KIND_COUPLED: EndKind
COUPLING_KIND_UNSPECIFIED: CouplingKind
COUPLING_KIND_PERIODIC: CouplingKind
COUPLING_KIND_ANTIPERIODIC: CouplingKind
COUPLING_KIND_BLOCH: CouplingKind

class Problem(_message.Message):
    __slots__ = ("name", "geometry", "layers", "left", "right", "interfaces", "coupling", "parameters")
    NAME_FIELD_NUMBER: _ClassVar[int]
    GEOMETRY_FIELD_NUMBER: _ClassVar[int]
    LAYERS_FIELD_NUMBER: _ClassVar[int]
    LEFT_FIELD_NUMBER: _ClassVar[int]
    RIGHT_FIELD_NUMBER: _ClassVar[int]
    INTERFACES_FIELD_NUMBER: _ClassVar[int]
    COUPLING_FIELD_NUMBER: _ClassVar[int]
    PARAMETERS_FIELD_NUMBER: _ClassVar[int]
    name: str
    geometry: Geometry
    layers: _containers.RepeatedCompositeFieldContainer[Layer]
    left: EndCondition
    right: EndCondition
    interfaces: _containers.RepeatedCompositeFieldContainer[Interface]
    coupling: Coupling
    parameters: _containers.RepeatedCompositeFieldContainer[Parameter]
    def __init__(self, name: _Optional[str] = ..., geometry: _Optional[_Union[Geometry, str]] = ..., layers: _Optional[_Iterable[_Union[Layer, _Mapping]]] = ..., left: _Optional[_Union[EndCondition, _Mapping]] = ..., right: _Optional[_Union[EndCondition, _Mapping]] = ..., interfaces: _Optional[_Iterable[_Union[Interface, _Mapping]]] = ..., coupling: _Optional[_Union[Coupling, _Mapping]] = ..., parameters: _Optional[_Iterable[_Union[Parameter, _Mapping]]] = ...) -> None: ...

class Layer(_message.Message):
    __slots__ = ("name", "start", "end", "p", "q", "w", "reciprocal_p")
    NAME_FIELD_NUMBER: _ClassVar[int]
    START_FIELD_NUMBER: _ClassVar[int]
    END_FIELD_NUMBER: _ClassVar[int]
    P_FIELD_NUMBER: _ClassVar[int]
    Q_FIELD_NUMBER: _ClassVar[int]
    W_FIELD_NUMBER: _ClassVar[int]
    RECIPROCAL_P_FIELD_NUMBER: _ClassVar[int]
    name: str
    start: float
    end: float
    p: Coefficient
    q: Coefficient
    w: Coefficient
    reciprocal_p: bool
    def __init__(self, name: _Optional[str] = ..., start: _Optional[float] = ..., end: _Optional[float] = ..., p: _Optional[_Union[Coefficient, _Mapping]] = ..., q: _Optional[_Union[Coefficient, _Mapping]] = ..., w: _Optional[_Union[Coefficient, _Mapping]] = ..., reciprocal_p: bool = ...) -> None: ...

class Coefficient(_message.Message):
    __slots__ = ("constant", "expression", "samples")
    CONSTANT_FIELD_NUMBER: _ClassVar[int]
    EXPRESSION_FIELD_NUMBER: _ClassVar[int]
    SAMPLES_FIELD_NUMBER: _ClassVar[int]
    constant: float
    expression: str
    samples: Samples
    def __init__(self, constant: _Optional[float] = ..., expression: _Optional[str] = ..., samples: _Optional[_Union[Samples, _Mapping]] = ...) -> None: ...

class Samples(_message.Message):
    __slots__ = ("x", "values", "interpolation")
    X_FIELD_NUMBER: _ClassVar[int]
    VALUES_FIELD_NUMBER: _ClassVar[int]
    INTERPOLATION_FIELD_NUMBER: _ClassVar[int]
    x: _containers.RepeatedScalarFieldContainer[float]
    values: _containers.RepeatedScalarFieldContainer[float]
    interpolation: Interpolation
    def __init__(self, x: _Optional[_Iterable[float]] = ..., values: _Optional[_Iterable[float]] = ..., interpolation: _Optional[_Union[Interpolation, str]] = ...) -> None: ...

class EndCondition(_message.Message):
    __slots__ = ("kind", "alpha", "beta", "film", "mass", "resistance", "exponents")
    KIND_FIELD_NUMBER: _ClassVar[int]
    ALPHA_FIELD_NUMBER: _ClassVar[int]
    BETA_FIELD_NUMBER: _ClassVar[int]
    FILM_FIELD_NUMBER: _ClassVar[int]
    MASS_FIELD_NUMBER: _ClassVar[int]
    RESISTANCE_FIELD_NUMBER: _ClassVar[int]
    EXPONENTS_FIELD_NUMBER: _ClassVar[int]
    kind: EndKind
    alpha: float
    beta: float
    film: float
    mass: float
    resistance: float
    exponents: EndExponents
    def __init__(self, kind: _Optional[_Union[EndKind, str]] = ..., alpha: _Optional[float] = ..., beta: _Optional[float] = ..., film: _Optional[float] = ..., mass: _Optional[float] = ..., resistance: _Optional[float] = ..., exponents: _Optional[_Union[EndExponents, _Mapping]] = ...) -> None: ...

class EndExponents(_message.Message):
    __slots__ = ("p", "q", "w")
    P_FIELD_NUMBER: _ClassVar[int]
    Q_FIELD_NUMBER: _ClassVar[int]
    W_FIELD_NUMBER: _ClassVar[int]
    p: float
    q: float
    w: float
    def __init__(self, p: _Optional[float] = ..., q: _Optional[float] = ..., w: _Optional[float] = ...) -> None: ...

class Interface(_message.Message):
    __slots__ = ("x", "resistance", "spring", "mass")
    X_FIELD_NUMBER: _ClassVar[int]
    RESISTANCE_FIELD_NUMBER: _ClassVar[int]
    SPRING_FIELD_NUMBER: _ClassVar[int]
    MASS_FIELD_NUMBER: _ClassVar[int]
    x: float
    resistance: float
    spring: float
    mass: float
    def __init__(self, x: _Optional[float] = ..., resistance: _Optional[float] = ..., spring: _Optional[float] = ..., mass: _Optional[float] = ...) -> None: ...

class Coupling(_message.Message):
    __slots__ = ("kind", "phase")
    KIND_FIELD_NUMBER: _ClassVar[int]
    PHASE_FIELD_NUMBER: _ClassVar[int]
    kind: CouplingKind
    phase: float
    def __init__(self, kind: _Optional[_Union[CouplingKind, str]] = ..., phase: _Optional[float] = ...) -> None: ...

class Parameter(_message.Message):
    __slots__ = ("name", "value")
    NAME_FIELD_NUMBER: _ClassVar[int]
    VALUE_FIELD_NUMBER: _ClassVar[int]
    name: str
    value: float
    def __init__(self, name: _Optional[str] = ..., value: _Optional[float] = ...) -> None: ...
