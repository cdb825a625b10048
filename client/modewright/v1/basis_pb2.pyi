from modewright.v1 import problem_pb2 as _problem_pb2
from google.protobuf.internal import enum_type_wrapper as _enum_type_wrapper
from google.protobuf import descriptor as _descriptor
from google.protobuf import message as _message
from collections.abc import Mapping as _Mapping
from typing import ClassVar as _ClassVar, Optional as _Optional, Union as _Union

DESCRIPTOR: _descriptor.FileDescriptor

class CountConfirmation(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    COUNT_CONFIRMATION_UNSPECIFIED: _ClassVar[CountConfirmation]
    COUNT_CONFIRMATION_DISCRETE: _ClassVar[CountConfirmation]
    COUNT_CONFIRMATION_COMPARISON: _ClassVar[CountConfirmation]

class EndClass(int, metaclass=_enum_type_wrapper.EnumTypeWrapper):
    __slots__ = ()
    END_CLASS_UNSPECIFIED: _ClassVar[EndClass]
    END_CLASS_REGULAR: _ClassVar[EndClass]
    END_CLASS_LIMIT_CIRCLE: _ClassVar[EndClass]
    END_CLASS_LIMIT_POINT: _ClassVar[EndClass]
    END_CLASS_UNDETERMINED: _ClassVar[EndClass]
COUNT_CONFIRMATION_UNSPECIFIED: CountConfirmation
COUNT_CONFIRMATION_DISCRETE: CountConfirmation
COUNT_CONFIRMATION_COMPARISON: CountConfirmation
END_CLASS_UNSPECIFIED: EndClass
END_CLASS_REGULAR: EndClass
END_CLASS_LIMIT_CIRCLE: EndClass
END_CLASS_LIMIT_POINT: EndClass
END_CLASS_UNDETERMINED: EndClass

class BasisSpecification(_message.Message):
    __slots__ = ("modes", "below", "window", "index_range", "rtol")
    MODES_FIELD_NUMBER: _ClassVar[int]
    BELOW_FIELD_NUMBER: _ClassVar[int]
    WINDOW_FIELD_NUMBER: _ClassVar[int]
    INDEX_RANGE_FIELD_NUMBER: _ClassVar[int]
    RTOL_FIELD_NUMBER: _ClassVar[int]
    modes: int
    below: float
    window: EigenvalueWindow
    index_range: IndexRange
    rtol: float
    def __init__(self, modes: _Optional[int] = ..., below: _Optional[float] = ..., window: _Optional[_Union[EigenvalueWindow, _Mapping]] = ..., index_range: _Optional[_Union[IndexRange, _Mapping]] = ..., rtol: _Optional[float] = ...) -> None: ...

class EigenvalueWindow(_message.Message):
    __slots__ = ("lower", "upper")
    LOWER_FIELD_NUMBER: _ClassVar[int]
    UPPER_FIELD_NUMBER: _ClassVar[int]
    lower: float
    upper: float
    def __init__(self, lower: _Optional[float] = ..., upper: _Optional[float] = ...) -> None: ...

class IndexRange(_message.Message):
    __slots__ = ("first", "end")
    FIRST_FIELD_NUMBER: _ClassVar[int]
    END_FIELD_NUMBER: _ClassVar[int]
    first: int
    end: int
    def __init__(self, first: _Optional[int] = ..., end: _Optional[int] = ...) -> None: ...

class ResolvedSpecification(_message.Message):
    __slots__ = ("modes", "rung", "rtol")
    MODES_FIELD_NUMBER: _ClassVar[int]
    RUNG_FIELD_NUMBER: _ClassVar[int]
    RTOL_FIELD_NUMBER: _ClassVar[int]
    modes: int
    rung: int
    rtol: float
    def __init__(self, modes: _Optional[int] = ..., rung: _Optional[int] = ..., rtol: _Optional[float] = ...) -> None: ...

class BasisReference(_message.Message):
    __slots__ = ("basis_key", "problem", "specification", "count")
    BASIS_KEY_FIELD_NUMBER: _ClassVar[int]
    PROBLEM_FIELD_NUMBER: _ClassVar[int]
    SPECIFICATION_FIELD_NUMBER: _ClassVar[int]
    COUNT_FIELD_NUMBER: _ClassVar[int]
    basis_key: str
    problem: _problem_pb2.Problem
    specification: BasisSpecification
    count: int
    def __init__(self, basis_key: _Optional[str] = ..., problem: _Optional[_Union[_problem_pb2.Problem, _Mapping]] = ..., specification: _Optional[_Union[BasisSpecification, _Mapping]] = ..., count: _Optional[int] = ...) -> None: ...

class EndReport(_message.Message):
    __slots__ = ("kind", "end_class", "stiffness", "mass", "resistance", "film")
    KIND_FIELD_NUMBER: _ClassVar[int]
    END_CLASS_FIELD_NUMBER: _ClassVar[int]
    STIFFNESS_FIELD_NUMBER: _ClassVar[int]
    MASS_FIELD_NUMBER: _ClassVar[int]
    RESISTANCE_FIELD_NUMBER: _ClassVar[int]
    FILM_FIELD_NUMBER: _ClassVar[int]
    kind: _problem_pb2.EndKind
    end_class: EndClass
    stiffness: float
    mass: float
    resistance: float
    film: float
    def __init__(self, kind: _Optional[_Union[_problem_pb2.EndKind, str]] = ..., end_class: _Optional[_Union[EndClass, str]] = ..., stiffness: _Optional[float] = ..., mass: _Optional[float] = ..., resistance: _Optional[float] = ..., film: _Optional[float] = ...) -> None: ...

class Ends(_message.Message):
    __slots__ = ("left", "right", "essential_spectrum_start", "eigenvalues_below_it")
    LEFT_FIELD_NUMBER: _ClassVar[int]
    RIGHT_FIELD_NUMBER: _ClassVar[int]
    ESSENTIAL_SPECTRUM_START_FIELD_NUMBER: _ClassVar[int]
    EIGENVALUES_BELOW_IT_FIELD_NUMBER: _ClassVar[int]
    left: EndReport
    right: EndReport
    essential_spectrum_start: float
    eigenvalues_below_it: int
    def __init__(self, left: _Optional[_Union[EndReport, _Mapping]] = ..., right: _Optional[_Union[EndReport, _Mapping]] = ..., essential_spectrum_start: _Optional[float] = ..., eigenvalues_below_it: _Optional[int] = ...) -> None: ...
