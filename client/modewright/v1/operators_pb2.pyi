from modewright.v1 import basis_pb2 as _basis_pb2
from modewright.v1 import transforms_pb2 as _transforms_pb2
from google.protobuf.internal import containers as _containers
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Iterable as _Iterable, Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class FetchOperatorRequest(_message.Message):
    __slots__ = ("basis", "analysis", "synthesis", "dtype", "offset")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    ANALYSIS_FIELD_NUMBER: _ClassVar[int]
    SYNTHESIS_FIELD_NUMBER: _ClassVar[int]
    DTYPE_FIELD_NUMBER: _ClassVar[int]
    OFFSET_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    analysis: AnalysisOperator
    synthesis: SynthesisOperator
    dtype: _transforms_pb2.Dtype
    offset: int
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., analysis: _Optional[_Union[AnalysisOperator, _Mapping]] = ..., synthesis: _Optional[_Union[SynthesisOperator, _Mapping]] = ..., dtype: _Optional[_Union[_transforms_pb2.Dtype, str]] = ..., offset: _Optional[int] = ...) -> None: ...

class AnalysisOperator(_message.Message):
    __slots__ = ("mesh", "method", "family")
    MESH_FIELD_NUMBER: _ClassVar[int]
    METHOD_FIELD_NUMBER: _ClassVar[int]
    FAMILY_FIELD_NUMBER: _ClassVar[int]
    mesh: _transforms_pb2.Mesh
    method: _transforms_pb2.ProjectionMethod
    family: _transforms_pb2.ModeFamily
    def __init__(self, mesh: _Optional[_Union[_transforms_pb2.Mesh, _Mapping]] = ..., method: _Optional[_Union[_transforms_pb2.ProjectionMethod, str]] = ..., family: _Optional[_Union[_transforms_pb2.ModeFamily, str]] = ...) -> None: ...

class SynthesisOperator(_message.Message):
    __slots__ = ("points", "cells", "quantity", "side", "family", "filter")
    POINTS_FIELD_NUMBER: _ClassVar[int]
    CELLS_FIELD_NUMBER: _ClassVar[int]
    QUANTITY_FIELD_NUMBER: _ClassVar[int]
    SIDE_FIELD_NUMBER: _ClassVar[int]
    FAMILY_FIELD_NUMBER: _ClassVar[int]
    FILTER_FIELD_NUMBER: _ClassVar[int]
    points: _transforms_pb2.Array
    cells: _transforms_pb2.CellMesh
    quantity: _transforms_pb2.Quantity
    side: _transforms_pb2.Side
    family: _transforms_pb2.ModeFamily
    filter: _transforms_pb2.SummationFilter
    def __init__(self, points: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., cells: _Optional[_Union[_transforms_pb2.CellMesh, _Mapping]] = ..., quantity: _Optional[_Union[_transforms_pb2.Quantity, str]] = ..., side: _Optional[_Union[_transforms_pb2.Side, str]] = ..., family: _Optional[_Union[_transforms_pb2.ModeFamily, str]] = ..., filter: _Optional[_Union[_transforms_pb2.SummationFilter, str]] = ...) -> None: ...

class FetchOperatorResponse(_message.Message):
    __slots__ = ("header", "data", "offset")
    HEADER_FIELD_NUMBER: _ClassVar[int]
    DATA_FIELD_NUMBER: _ClassVar[int]
    OFFSET_FIELD_NUMBER: _ClassVar[int]
    header: OperatorHeader
    data: bytes
    offset: int
    def __init__(self, header: _Optional[_Union[OperatorHeader, _Mapping]] = ..., data: _Optional[bytes] = ..., offset: _Optional[int] = ...) -> None: ...

class OperatorHeader(_message.Message):
    __slots__ = ("operator_key", "basis_key", "dtype", "shape", "left_lump", "right_lump", "algorithm_version", "api_version")
    OPERATOR_KEY_FIELD_NUMBER: _ClassVar[int]
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    DTYPE_FIELD_NUMBER: _ClassVar[int]
    SHAPE_FIELD_NUMBER: _ClassVar[int]
    LEFT_LUMP_FIELD_NUMBER: _ClassVar[int]
    RIGHT_LUMP_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    operator_key: str
    basis_key: str
    dtype: _transforms_pb2.Dtype
    shape: _containers.RepeatedScalarFieldContainer[int]
    left_lump: _transforms_pb2.Array
    right_lump: _transforms_pb2.Array
    algorithm_version: str
    api_version: str
    def __init__(self, operator_key: _Optional[str] = ..., basis_key: _Optional[str] = ..., dtype: _Optional[_Union[_transforms_pb2.Dtype, str]] = ..., shape: _Optional[_Iterable[int]] = ..., left_lump: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., right_lump: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ...) -> None: ...

class ProjectStreamRequest(_message.Message):
    __slots__ = ("header", "chunk")
    HEADER_FIELD_NUMBER: _ClassVar[int]
    CHUNK_FIELD_NUMBER: _ClassVar[int]
    header: ProjectStreamHeader
    chunk: FieldChunk
    def __init__(self, header: _Optional[_Union[ProjectStreamHeader, _Mapping]] = ..., chunk: _Optional[_Union[FieldChunk, _Mapping]] = ...) -> None: ...

class ProjectStreamHeader(_message.Message):
    __slots__ = ("basis", "mesh", "method", "family")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    MESH_FIELD_NUMBER: _ClassVar[int]
    METHOD_FIELD_NUMBER: _ClassVar[int]
    FAMILY_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    mesh: _transforms_pb2.Mesh
    method: _transforms_pb2.ProjectionMethod
    family: _transforms_pb2.ModeFamily
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., mesh: _Optional[_Union[_transforms_pb2.Mesh, _Mapping]] = ..., method: _Optional[_Union[_transforms_pb2.ProjectionMethod, str]] = ..., family: _Optional[_Union[_transforms_pb2.ModeFamily, str]] = ...) -> None: ...

class FieldChunk(_message.Message):
    __slots__ = ("number", "values", "left_lump", "right_lump")
    NUMBER_FIELD_NUMBER: _ClassVar[int]
    VALUES_FIELD_NUMBER: _ClassVar[int]
    LEFT_LUMP_FIELD_NUMBER: _ClassVar[int]
    RIGHT_LUMP_FIELD_NUMBER: _ClassVar[int]
    number: int
    values: _transforms_pb2.Array
    left_lump: _transforms_pb2.Array
    right_lump: _transforms_pb2.Array
    def __init__(self, number: _Optional[int] = ..., values: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., left_lump: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ..., right_lump: _Optional[_Union[_transforms_pb2.Array, _Mapping]] = ...) -> None: ...

class ProjectStreamResponse(_message.Message):
    __slots__ = ("number", "projection")
    NUMBER_FIELD_NUMBER: _ClassVar[int]
    PROJECTION_FIELD_NUMBER: _ClassVar[int]
    number: int
    projection: _transforms_pb2.ProjectResponse
    def __init__(self, number: _Optional[int] = ..., projection: _Optional[_Union[_transforms_pb2.ProjectResponse, _Mapping]] = ...) -> None: ...

class ReconstructStreamRequest(_message.Message):
    __slots__ = ("header", "chunk")
    HEADER_FIELD_NUMBER: _ClassVar[int]
    CHUNK_FIELD_NUMBER: _ClassVar[int]
    header: ReconstructStreamHeader
    chunk: FieldChunk
    def __init__(self, header: _Optional[_Union[ReconstructStreamHeader, _Mapping]] = ..., chunk: _Optional[_Union[FieldChunk, _Mapping]] = ...) -> None: ...

class ReconstructStreamHeader(_message.Message):
    __slots__ = ("basis", "operator")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    OPERATOR_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    operator: SynthesisOperator
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., operator: _Optional[_Union[SynthesisOperator, _Mapping]] = ...) -> None: ...

class ReconstructStreamResponse(_message.Message):
    __slots__ = ("number", "reconstruction")
    NUMBER_FIELD_NUMBER: _ClassVar[int]
    RECONSTRUCTION_FIELD_NUMBER: _ClassVar[int]
    number: int
    reconstruction: _transforms_pb2.ReconstructResponse
    def __init__(self, number: _Optional[int] = ..., reconstruction: _Optional[_Union[_transforms_pb2.ReconstructResponse, _Mapping]] = ...) -> None: ...
