from modewright.v1 import basis_pb2 as _basis_pb2
from modewright.v1 import problem_pb2 as _problem_pb2
from google.protobuf.internal import containers as _containers
from google.protobuf.internal import enum_type_wrapper as _enum_type_wrapper
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Iterable as _Iterable, Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class SolveStage(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    SOLVE_STAGE_UNSPECIFIED: _ClassVar[SolveStage]
    SOLVE_STAGE_QUEUED: _ClassVar[SolveStage]
    SOLVE_STAGE_COMPUTING: _ClassVar[SolveStage]
    SOLVE_STAGE_STARTING: _ClassVar[SolveStage]
SOLVE_STAGE_UNSPECIFIED: SolveStage
SOLVE_STAGE_QUEUED: SolveStage
SOLVE_STAGE_COMPUTING: SolveStage
SOLVE_STAGE_STARTING: SolveStage

class CheckRequest(_message.Message):
    __slots__ = ("problem", "specification")
    PROBLEM_FIELD_NUMBER: _ClassVar[int]
    SPECIFICATION_FIELD_NUMBER: _ClassVar[int]
    problem: _problem_pb2.Problem
    specification: _basis_pb2.BasisSpecification
    def __init__(self, problem: _Optional[_Union[_problem_pb2.Problem, _Mapping]] = ..., specification: _Optional[_Union[_basis_pb2.BasisSpecification, _Mapping]] = ...) -> None: ...

class CheckResponse(_message.Message):
    __slots__ = ("problem_digest", "basis_key", "algorithm_version", "api_version", "specification", "ends", "scale", "cached", "cost", "remarks")
    PROBLEM_DIGEST_FIELD_NUMBER: _ClassVar[int]
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    SPECIFICATION_FIELD_NUMBER: _ClassVar[int]
    ENDS_FIELD_NUMBER: _ClassVar[int]
    SCALE_FIELD_NUMBER: _ClassVar[int]
    CACHED_FIELD_NUMBER: _ClassVar[int]
    COST_FIELD_NUMBER: _ClassVar[int]
    REMARKS_FIELD_NUMBER: _ClassVar[int]
    problem_digest: str
    basis_key: str
    algorithm_version: str
    api_version: str
    specification: _basis_pb2.ResolvedSpecification
    ends: _basis_pb2.Ends
    scale: float
    cached: bool
    cost: CostEstimate
    remarks: _containers.RepeatedScalarFieldContainer[str]
    def __init__(self, problem_digest: _Optional[str] = ..., basis_key: _Optional[str] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ..., specification: _Optional[_Union[_basis_pb2.ResolvedSpecification, _Mapping]] = ..., ends: _Optional[_Union[_basis_pb2.Ends, _Mapping]] = ..., scale: _Optional[float] = ..., cached: bool = ..., cost: _Optional[_Union[CostEstimate, _Mapping]] = ..., remarks: _Optional[_Iterable[str]] = ...) -> None: ...

class CostEstimate(_message.Message):
    __slots__ = ("pieces", "unknowns", "seconds")
    PIECES_FIELD_NUMBER: _ClassVar[int]
    UNKNOWNS_FIELD_NUMBER: _ClassVar[int]
    SECONDS_FIELD_NUMBER: _ClassVar[int]
    pieces: int
    unknowns: int
    seconds: float
    def __init__(self, pieces: _Optional[int] = ..., unknowns: _Optional[int] = ..., seconds: _Optional[float] = ...) -> None: ...

class SolveRequest(_message.Message):
    __slots__ = ("problem", "specification")
    PROBLEM_FIELD_NUMBER: _ClassVar[int]
    SPECIFICATION_FIELD_NUMBER: _ClassVar[int]
    problem: _problem_pb2.Problem
    specification: _basis_pb2.BasisSpecification
    def __init__(self, problem: _Optional[_Union[_problem_pb2.Problem, _Mapping]] = ..., specification: _Optional[_Union[_basis_pb2.BasisSpecification, _Mapping]] = ...) -> None: ...

class SolveResponse(_message.Message):
    __slots__ = ("basis_key", "problem_digest", "algorithm_version", "api_version", "specification", "eigenvalues", "lower", "upper", "zeros", "groups", "confirmed", "scale", "ends", "answered_from_cache", "server_solve_count", "solve_seconds", "remarks", "tolerance_met")
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    PROBLEM_DIGEST_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    SPECIFICATION_FIELD_NUMBER: _ClassVar[int]
    EIGENVALUES_FIELD_NUMBER: _ClassVar[int]
    LOWER_FIELD_NUMBER: _ClassVar[int]
    UPPER_FIELD_NUMBER: _ClassVar[int]
    ZEROS_FIELD_NUMBER: _ClassVar[int]
    GROUPS_FIELD_NUMBER: _ClassVar[int]
    CONFIRMED_FIELD_NUMBER: _ClassVar[int]
    SCALE_FIELD_NUMBER: _ClassVar[int]
    ENDS_FIELD_NUMBER: _ClassVar[int]
    ANSWERED_FROM_CACHE_FIELD_NUMBER: _ClassVar[int]
    SERVER_SOLVE_COUNT_FIELD_NUMBER: _ClassVar[int]
    SOLVE_SECONDS_FIELD_NUMBER: _ClassVar[int]
    REMARKS_FIELD_NUMBER: _ClassVar[int]
    TOLERANCE_MET_FIELD_NUMBER: _ClassVar[int]
    basis_key: str
    problem_digest: str
    algorithm_version: str
    api_version: str
    specification: _basis_pb2.ResolvedSpecification
    eigenvalues: _containers.RepeatedScalarFieldContainer[float]
    lower: _containers.RepeatedScalarFieldContainer[float]
    upper: _containers.RepeatedScalarFieldContainer[float]
    zeros: _containers.RepeatedScalarFieldContainer[int]
    groups: _containers.RepeatedScalarFieldContainer[int]
    confirmed: _containers.RepeatedScalarFieldContainer[_basis_pb2.CountConfirmation]
    scale: float
    ends: _basis_pb2.Ends
    answered_from_cache: bool
    server_solve_count: int
    solve_seconds: float
    remarks: _containers.RepeatedScalarFieldContainer[str]
    tolerance_met: _containers.RepeatedScalarFieldContainer[bool]
    def __init__(self, basis_key: _Optional[str] = ..., problem_digest: _Optional[str] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ..., specification: _Optional[_Union[_basis_pb2.ResolvedSpecification, _Mapping]] = ..., eigenvalues: _Optional[_Iterable[float]] = ..., lower: _Optional[_Iterable[float]] = ..., upper: _Optional[_Iterable[float]] = ..., zeros: _Optional[_Iterable[int]] = ..., groups: _Optional[_Iterable[int]] = ..., confirmed: _Optional[_Iterable[_Union[_basis_pb2.CountConfirmation, str]]] = ..., scale: _Optional[float] = ..., ends: _Optional[_Union[_basis_pb2.Ends, _Mapping]] = ..., answered_from_cache: bool = ..., server_solve_count: _Optional[int] = ..., solve_seconds: _Optional[float] = ..., remarks: _Optional[_Iterable[str]] = ..., tolerance_met: _Optional[_Iterable[bool]] = ...) -> None: ...

class WatchSolveRequest(_message.Message):
    __slots__ = ("problem", "specification", "interval_seconds")
    PROBLEM_FIELD_NUMBER: _ClassVar[int]
    SPECIFICATION_FIELD_NUMBER: _ClassVar[int]
    INTERVAL_SECONDS_FIELD_NUMBER: _ClassVar[int]
    problem: _problem_pb2.Problem
    specification: _basis_pb2.BasisSpecification
    interval_seconds: float
    def __init__(self, problem: _Optional[_Union[_problem_pb2.Problem, _Mapping]] = ..., specification: _Optional[_Union[_basis_pb2.BasisSpecification, _Mapping]] = ..., interval_seconds: _Optional[float] = ...) -> None: ...

class WatchSolveResponse(_message.Message):
    __slots__ = ("progress", "answer")
    PROGRESS_FIELD_NUMBER: _ClassVar[int]
    ANSWER_FIELD_NUMBER: _ClassVar[int]
    progress: SolveProgress
    answer: SolveResponse
    def __init__(self, progress: _Optional[_Union[SolveProgress, _Mapping]] = ..., answer: _Optional[_Union[SolveResponse, _Mapping]] = ...) -> None: ...

class SolveProgress(_message.Message):
    __slots__ = ("stage", "queue_position", "elapsed_seconds", "steps")
    STAGE_FIELD_NUMBER: _ClassVar[int]
    QUEUE_POSITION_FIELD_NUMBER: _ClassVar[int]
    ELAPSED_SECONDS_FIELD_NUMBER: _ClassVar[int]
    STEPS_FIELD_NUMBER: _ClassVar[int]
    stage: SolveStage
    queue_position: int
    elapsed_seconds: float
    steps: int
    def __init__(self, stage: _Optional[_Union[SolveStage, str]] = ..., queue_position: _Optional[int] = ..., elapsed_seconds: _Optional[float] = ..., steps: _Optional[int] = ...) -> None: ...

class FetchBasisRequest(_message.Message):
    __slots__ = ("basis", "offset")
    BASIS_FIELD_NUMBER: _ClassVar[int]
    OFFSET_FIELD_NUMBER: _ClassVar[int]
    basis: _basis_pb2.BasisReference
    offset: int
    def __init__(self, basis: _Optional[_Union[_basis_pb2.BasisReference, _Mapping]] = ..., offset: _Optional[int] = ...) -> None: ...

class FetchBasisResponse(_message.Message):
    __slots__ = ("data", "offset", "total_size", "basis_key", "algorithm_version", "api_version")
    DATA_FIELD_NUMBER: _ClassVar[int]
    OFFSET_FIELD_NUMBER: _ClassVar[int]
    TOTAL_SIZE_FIELD_NUMBER: _ClassVar[int]
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    ALGORITHM_VERSION_FIELD_NUMBER: _ClassVar[int]
    API_VERSION_FIELD_NUMBER: _ClassVar[int]
    data: bytes
    offset: int
    total_size: int
    basis_key: str
    algorithm_version: str
    api_version: str
    def __init__(self, data: _Optional[bytes] = ..., offset: _Optional[int] = ..., total_size: _Optional[int] = ..., basis_key: _Optional[str] = ..., algorithm_version: _Optional[str] = ..., api_version: _Optional[str] = ...) -> None: ...
