from modewright.v1 import basis_pb2 as _basis_pb2
from google.protobuf.internal import containers as _containers
from google.protobuf.internal import enum_type_wrapper as _enum_type_wrapper
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Iterable as _Iterable, Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class Dtype(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    DTYPE_UNSPECIFIED: _ClassVar[Dtype]
    DTYPE_FLOAT32: _ClassVar[Dtype]
    DTYPE_FLOAT64: _ClassVar[Dtype]
    DTYPE_COMPLEX128: _ClassVar[Dtype]

class PointInterpolation(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    POINT_INTERPOLATION_UNSPECIFIED: _ClassVar[PointInterpolation]
    POINT_INTERPOLATION_LINEAR: _ClassVar[PointInterpolation]
    POINT_INTERPOLATION_CUBIC: _ClassVar[PointInterpolation]

class CellMeasure(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    CELL_MEASURE_UNSPECIFIED: _ClassVar[CellMeasure]
    CELL_MEASURE_LENGTH: _ClassVar[CellMeasure]
    CELL_MEASURE_CYLINDRICAL: _ClassVar[CellMeasure]
    CELL_MEASURE_SPHERICAL: _ClassVar[CellMeasure]
    CELL_MEASURE_WEIGHT: _ClassVar[CellMeasure]

class CellReconstruction(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    CELL_RECONSTRUCTION_UNSPECIFIED: _ClassVar[CellReconstruction]
    CELL_RECONSTRUCTION_CONSTANT: _ClassVar[CellReconstruction]
    CELL_RECONSTRUCTION_CONSERVATIVE: _ClassVar[CellReconstruction]

class ProjectionMethod(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    PROJECTION_METHOD_UNSPECIFIED: _ClassVar[ProjectionMethod]
    PROJECTION_METHOD_INTEGRATE: _ClassVar[ProjectionMethod]
    PROJECTION_METHOD_FIT: _ClassVar[ProjectionMethod]

class ModeFamily(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    MODE_FAMILY_UNSPECIFIED: _ClassVar[ModeFamily]
    MODE_FAMILY_MODES: _ClassVar[ModeFamily]
    MODE_FAMILY_FLUX: _ClassVar[ModeFamily]

class Quantity(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    QUANTITY_UNSPECIFIED: _ClassVar[Quantity]
    QUANTITY_VALUE: _ClassVar[Quantity]
    QUANTITY_DERIVATIVE: _ClassVar[Quantity]
    QUANTITY_FLUX: _ClassVar[Quantity]
    QUANTITY_FLUX_DENSITY: _ClassVar[Quantity]

class Side(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    SIDE_UNSPECIFIED: _ClassVar[Side]
    SIDE_LEFT: _ClassVar[Side]
    SIDE_RIGHT: _ClassVar[Side]

class SummationFilter(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    SUMMATION_FILTER_UNSPECIFIED: _ClassVar[SummationFilter]
    SUMMATION_FILTER_NONE: _ClassVar[SummationFilter]
    SUMMATION_FILTER_LANCZOS: _ClassVar[SummationFilter]
    SUMMATION_FILTER_EXPONENTIAL: _ClassVar[SummationFilter]
DTYPE_UNSPECIFIED: Dtype
DTYPE_FLOAT32: Dtype
DTYPE_FLOAT64: Dtype
DTYPE_COMPLEX128: Dtype
POINT_INTERPOLATION_UNSPECIFIED: PointInterpolation
POINT_INTERPOLATION_LINEAR: PointInterpolation
POINT_INTERPOLATION_CUBIC: PointInterpolation
CELL_MEASURE_UNSPECIFIED: CellMeasure
CELL_MEASURE_LENGTH: CellMeasure
CELL_MEASURE_CYLINDRICAL: CellMeasure
CELL_MEASURE_SPHERICAL: CellMeasure
CELL_MEASURE_WEIGHT: CellMeasure
CELL_RECONSTRUCTION_UNSPECIFIED: CellReconstruction
CELL_RECONSTRUCTION_CONSTANT: CellReconstruction
CELL_RECONSTRUCTION_CONSERVATIVE: CellReconstruction
PROJECTION_METHOD_UNSPECIFIED: ProjectionMethod
PROJECTION_METHOD_INTEGRATE: ProjectionMethod
PROJECTION_METHOD_FIT: ProjectionMethod
MODE_FAMILY_UNSPECIFIED: ModeFamily
MODE_FAMILY_MODES: ModeFamily
MODE_FAMILY_FLUX: ModeFamily
QUANTITY_UNSPECIFIED: Quantity
QUANTITY_VALUE: Quantity
QUANTITY_DERIVATIVE: Quantity
QUANTITY_FLUX: Quantity
QUANTITY_FLUX_DENSITY: Quantity
SIDE_UNSPECIFIED: Side
SIDE_LEFT: Side
SIDE_RIGHT: Side
SUMMATION_FILTER_UNSPECIFIED: SummationFilter
SUMMATION_FILTER_NONE: SummationFilter
SUMMATION_FILTER_LANCZOS: SummationFilter
SUMMATION_FILTER_EXPONENTIAL: SummationFilter

class Array(_message.Message):
    __slots__ = ("data", "dtype", "shape")
    DATA_FIELD_NUMBER: _ClassVar[int]
    DTYPE_FIELD_NUMBER: _ClassVar[int]
    SHAPE_FIELD_NUMBER: _ClassVar[int]
    data: bytes
    dtype: Dtype
    shape: _containers.RepeatedScalarFieldContainer[int]
    def __init__(self, data: _Optional[bytes] = ..., dtype: _Optional[_Union[Dtype, str]] = ..., shape: _Optional[_Iterable[int]] = ...) -> None: ...

class Mesh(_message.Message):
    __slots__ = ("points", "cells", "elements")
    POINTS_FIELD_NUMBER: _ClassVar[int]
    CELLS_FIELD_NUMBER: _ClassVar[int]
    ELEMENTS_FIELD_NUMBER: _ClassVar[int]
    points: PointMesh
    cells: CellMesh
    elements: ElementMesh
    def __init__(self, points: _Optional[_Union[PointMesh, _Mapping]] = ..., cells: _Optional[_Union[CellMesh, _Mapping]] = ..., elements: _Optional[_Union[ElementMesh, _Mapping]] = ...) -> None: ...

class PointMesh(_message.Message):
    __slots__ = ("x", "interpolation")
    X_FIELD_NUMBER: _ClassVar[int]
    INTERPOLATION_FIELD_NUMBER: _ClassVar[int]
    x: Array
    interpolation: PointInterpolation
    def __init__(self, x: _Optional[_Union[Array, _Mapping]] = ..., interpolation: _Optional[_Union[PointInterpolation, str]] = ...) -> None: ...

class CellMesh(_message.Message):
    __slots__ = ("edges", "measure", "reconstruction")
    EDGES_FIELD_NUMBER: _ClassVar[int]
    MEASURE_FIELD_NUMBER: _ClassVar[int]
    RECONSTRUCTION_FIELD_NUMBER: _ClassVar[int]
    edges: Array
    measure: CellMeasure
    reconstruction: CellReconstruction
    def __init__(self, edges: _Optional[_Union[Array, _Mapping]] = ..., measure: _Optional[_Union[CellMeasure, str]] = ..., reconstruction: _Optional[_Union[CellReconstruction, str]] = ...) -> None: ...

class ElementMesh(_message.Message):
    __slots__ = ("edges", "degree")
    EDGES_FIELD_NUMBER: _ClassVar[int]
    DEGREE_FIELD_NUMBER: _ClassVar[int]
    edges: Array
    degree: int
    def __init__(self, edges: _Optional[_Union[Array, _Mapping]] = ..., degree: _Optional[int] = ...) -> None: ...

class ProjectRequest(_message.Message):
    __slots__ = ("basis", "sampled", "expression", "left_lump", "right_lump", "method", "family", "further_axes")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    SAMPLED_FIELD_NUMBER: _ClassVar[int]
    EXPRESSION_FIELD_NUMBER: _ClassVar[int]
    LEFT_LUMP_FIELD_NUMBER: _ClassVar[int]
    RIGHT_LUMP_FIELD_NUMBER: _ClassVar[int]
    METHOD_FIELD_NUMBER: _ClassVar[int]
    FAMILY_FIELD_NUMBER: _ClassVar[int]
    FURTHER_AXES_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    sampled: SampledField
    expression: str
    left_lump: Array
    right_lump: Array
    method: ProjectionMethod
    family: ModeFamily
    further_axes: _containers.RepeatedCompositeFieldContainer[AxisBasis]
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., sampled: _Optional[_Union[SampledField, _Mapping]] = ..., expression: _Optional[str] = ..., left_lump: _Optional[_Union[Array, _Mapping]] = ..., right_lump: _Optional[_Union[Array, _Mapping]] = ..., method: _Optional[_Union[ProjectionMethod, str]] = ..., family: _Optional[_Union[ModeFamily, str]] = ..., further_axes: _Optional[_Iterable[_Union[AxisBasis, _Mapping]]] = ...) -> None: ...

class SampledField(_message.Message):
    __slots__ = ("values", "mesh", "axis")
    VALUES_FIELD_NUMBER: _ClassVar[int]
    MESH_FIELD_NUMBER: _ClassVar[int]
    AXIS_FIELD_NUMBER: _ClassVar[int]
    values: Array
    mesh: Mesh
    axis: int
    def __init__(self, values: _Optional[_Union[Array, _Mapping]] = ..., mesh: _Optional[_Union[Mesh, _Mapping]] = ..., axis: _Optional[int] = ...) -> None: ...

class AxisBasis(_message.Message):
    __slots__ = ("basis", "mesh", "axis")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    MESH_FIELD_NUMBER: _ClassVar[int]
    AXIS_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    mesh: Mesh
    axis: int
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., mesh: _Optional[_Union[Mesh, _Mapping]] = ..., axis: _Optional[int] = ...) -> None: ...

class ProjectResponse(_message.Message):
    __slots__ = ("basis_key", "coefficients", "captured", "norm2", "residual2", "left_lump_extrapolated", "right_lump_extrapolated", "algorithm_version", "api_version", "tail_estimate", "unresolved", "covariance", "operator_key")
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    COEFFICIENTS_FIELD_NUMBER: _ClassVar[int]
    CAPTURED_FIELD_NUMBER: _ClassVar[int]
    NORM2_FIELD_NUMBER: _ClassVar[int]
    RESIDUAL2_FIELD_NUMBER: _ClassVar[int]
    LEFT_LUMP_EXTRAPOLATED_FIELD_NUMBER: _ClassVar[int]
    RIGHT_LUMP_EXTRAPOLATED_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    TAIL_ESTIMATE_FIELD_NUMBER: _ClassVar[int]
    UNRESOLVED_FIELD_NUMBER: _ClassVar[int]
    COVARIANCE_FIELD_NUMBER: _ClassVar[int]
    OPERATOR_KEY_FIELD_NUMBER: _ClassVar[int]
    basis_key: str
    coefficients: Array
    captured: Array
    norm2: Array
    residual2: Array
    left_lump_extrapolated: bool
    right_lump_extrapolated: bool
    algorithm_version: str
    api_version: str
    tail_estimate: Array
    unresolved: _containers.RepeatedScalarFieldContainer[bool]
    covariance: Array
    operator_key: str
    def __init__(self, basis_key: _Optional[str] = ..., coefficients: _Optional[_Union[Array, _Mapping]] = ..., captured: _Optional[_Union[Array, _Mapping]] = ..., norm2: _Optional[_Union[Array, _Mapping]] = ..., residual2: _Optional[_Union[Array, _Mapping]] = ..., left_lump_extrapolated: bool = ..., right_lump_extrapolated: bool = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ..., tail_estimate: _Optional[_Union[Array, _Mapping]] = ..., unresolved: _Optional[_Iterable[bool]] = ..., covariance: _Optional[_Union[Array, _Mapping]] = ..., operator_key: _Optional[str] = ...) -> None: ...

class ReconstructRequest(_message.Message):
    __slots__ = ("basis", "coefficients", "points", "cells", "quantity", "side", "family", "filter")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    COEFFICIENTS_FIELD_NUMBER: _ClassVar[int]
    POINTS_FIELD_NUMBER: _ClassVar[int]
    CELLS_FIELD_NUMBER: _ClassVar[int]
    QUANTITY_FIELD_NUMBER: _ClassVar[int]
    SIDE_FIELD_NUMBER: _ClassVar[int]
    FAMILY_FIELD_NUMBER: _ClassVar[int]
    FILTER_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    coefficients: Array
    points: Array
    cells: CellMesh
    quantity: Quantity
    side: Side
    family: ModeFamily
    filter: SummationFilter
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., coefficients: _Optional[_Union[Array, _Mapping]] = ..., points: _Optional[_Union[Array, _Mapping]] = ..., cells: _Optional[_Union[CellMesh, _Mapping]] = ..., quantity: _Optional[_Union[Quantity, str]] = ..., side: _Optional[_Union[Side, str]] = ..., family: _Optional[_Union[ModeFamily, str]] = ..., filter: _Optional[_Union[SummationFilter, str]] = ...) -> None: ...

class ReconstructResponse(_message.Message):
    __slots__ = ("basis_key", "values", "algorithm_version", "api_version", "left_lump", "right_lump", "truncation_estimate")
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    VALUES_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    LEFT_LUMP_FIELD_NUMBER: _ClassVar[int]
    RIGHT_LUMP_FIELD_NUMBER: _ClassVar[int]
    TRUNCATION_ESTIMATE_FIELD_NUMBER: _ClassVar[int]
    basis_key: str
    values: Array
    algorithm_version: str
    api_version: str
    left_lump: Array
    right_lump: Array
    truncation_estimate: Array
    def __init__(self, basis_key: _Optional[str] = ..., values: _Optional[_Union[Array, _Mapping]] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ..., left_lump: _Optional[_Union[Array, _Mapping]] = ..., right_lump: _Optional[_Union[Array, _Mapping]] = ..., truncation_estimate: _Optional[_Union[Array, _Mapping]] = ...) -> None: ...
