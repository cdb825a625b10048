"""What a service reports about the two ends of a problem."""

from __future__ import annotations

from dataclasses import dataclass

from modewright.document.messages import word_of
from modewright.record import EndInfo, Record
from modewright.v1 import basis_pb2, problem_pb2

__all__ = ["Ends", "ends_from_message", "ends_from_record"]


@dataclass(frozen=True)
class Ends:
    """Both ends as they were solved, geometry factor included (:class:`modewright.record.EndInfo`)."""

    left: EndInfo
    right: EndInfo


def ends_from_message(message: basis_pb2.Ends) -> Ends:
    """The ends in an answer."""
    return Ends(_end(message.left), _end(message.right))


def ends_from_record(record: Record) -> Ends:
    """The ends in a record."""
    return Ends(record.left, record.right)


def _end(report: basis_pb2.EndReport) -> EndInfo:
    return EndInfo(
        kind=word_of(problem_pb2.EndKind, "END_KIND", report.kind),
        stiffness=report.stiffness,
        mass=report.mass,
        resistance=report.resistance,
        film=report.film,
        classification=word_of(basis_pb2.EndClass, "END_CLASS", report.end_class),
    )
