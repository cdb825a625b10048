from modewright.v1 import basis_pb2 as _basis_pb2
from modewright.v1 import errors_pb2 as _errors_pb2
from modewright.v1 import problem_pb2 as _problem_pb2
from modewright.v1 import solve_pb2 as _solve_pb2
from modewright.v1 import transforms_pb2 as _transforms_pb2
from google.protobuf.internal import containers as _containers
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Iterable as _Iterable, Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class SweepRequest(_message.Message):
    __slots__ = ("header", "item")
    HEADER_FIELD_NUMBER: _ClassVar[int]
    ITEM_FIELD_NUMBER: _ClassVar[int]
    header: SweepHeader
    item: SweepItem
    def __init__(self, header: _Optional[_Union[SweepHeader, _Mapping]] = ..., item: _Optional[_Union[SweepItem, _Mapping]] = ...) -> None: ...

class SweepHeader(_message.Message):
    __slots__ = ("specification", "problem", "track")
    SPECIFICATION_FIELD_NUMBER: _ClassVar[int]
    PROBLEM_FIELD_NUMBER: _ClassVar[int]
    TRACK_FIELD_NUMBER: _ClassVar[int]
    specification: _basis_pb2.BasisSpecification
    problem: _problem_pb2.Problem
    track: bool
    def __init__(self, specification: _Optional[_Union[_basis_pb2.BasisSpecification, _Mapping]] = ..., problem: _Optional[_Union[_problem_pb2.Problem, _Mapping]] = ..., track: bool = ...) -> None: ...

class SweepItem(_message.Message):
    __slots__ = ("number", "problem", "parameters", "profiles")
    NUMBER_FIELD_NUMBER: _ClassVar[int]
    PROBLEM_FIELD_NUMBER: _ClassVar[int]
    PARAMETERS_FIELD_NUMBER: _ClassVar[int]
    PROFILES_FIELD_NUMBER: _ClassVar[int]
    number: int
    problem: _problem_pb2.Problem
    parameters: ParameterValues
    profiles: _transforms_pb2.SampledField
    def __init__(self, number: _Optional[int] = ..., problem: _Optional[_Union[_problem_pb2.Problem, _Mapping]] = ..., parameters: _Optional[_Union[ParameterValues, _Mapping]] = ..., profiles: _Optional[_Union[_transforms_pb2.SampledField, _Mapping]] = ...) -> None: ...

class ParameterValues(_message.Message):
    __slots__ = ("values",)
    VALUES_FIELD_NUMBER: _ClassVar[int]
    values: _containers.RepeatedCompositeFieldContainer[_problem_pb2.Parameter]
    def __init__(self, values: _Optional[_Iterable[_Union[_problem_pb2.Parameter, _Mapping]]] = ...) -> None: ...

class SweepResponse(_message.Message):
    __slots__ = ("number", "solved", "failure", "projection", "tracks")
    NUMBER_FIELD_NUMBER: _ClassVar[int]
    SOLVED_FIELD_NUMBER: _ClassVar[int]
    FAILURE_FIELD_NUMBER: _ClassVar[int]
    PROJECTION_FIELD_NUMBER: _ClassVar[int]
    TRACKS_FIELD_NUMBER: _ClassVar[int]
    number: int
    solved: _solve_pb2.SolveResponse
    failure: SweepFailure
    projection: _transforms_pb2.ProjectResponse
    tracks: _containers.RepeatedScalarFieldContainer[int]
    def __init__(self, number: _Optional[int] = ..., solved: _Optional[_Union[_solve_pb2.SolveResponse, _Mapping]] = ..., failure: _Optional[_Union[SweepFailure, _Mapping]] = ..., projection: _Optional[_Union[_transforms_pb2.ProjectResponse, _Mapping]] = ..., tracks: _Optional[_Iterable[int]] = ...) -> None: ...

class SweepFailure(_message.Message):
    __slots__ = ("reason", "message", "violations")
    REASON_FIELD_NUMBER: _ClassVar[int]
    MESSAGE_FIELD_NUMBER: _ClassVar[int]
    VIOLATIONS_FIELD_NUMBER: _ClassVar[int]
    reason: _errors_pb2.ErrorReason
    message: str
    violations: _containers.RepeatedCompositeFieldContainer[SweepViolation]
    def __init__(self, reason: _Optional[_Union[_errors_pb2.ErrorReason, str]] = ..., message: _Optional[str] = ..., violations: _Optional[_Iterable[_Union[SweepViolation, _Mapping]]] = ...) -> None: ...

class SweepViolation(_message.Message):
    __slots__ = ("field", "message")
    FIELD_FIELD_NUMBER: _ClassVar[int]
    MESSAGE_FIELD_NUMBER: _ClassVar[int]
    field: str
    message: str
    def __init__(self, field: _Optional[str] = ..., message: _Optional[str] = ...) -> None: ...
