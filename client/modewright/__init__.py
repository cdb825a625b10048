"""Modewright: eigenbases of -(p u')' + q u = lambda w u, served over gRPC.

::

    import modewright

    problem = modewright.Problem.load("pipe.toml")
    with modewright.connect() as service:
        basis = service.solve(problem, modes=24)
        c = basis.project(snapshots, x=mesh)
        u = basis.reconstruct(c, x=points)

The names below are the public ones. They are imported when first used, so that ``import modewright`` itself
needs neither NumPy nor gRPC.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from modewright.basis import Basis as Basis
    from modewright.basis import Projection as Projection
    from modewright.basis import load_basis as load_basis
    from modewright.channels import Tls as Tls
    from modewright.client import Check as Check
    from modewright.client import Progress as Progress
    from modewright.client import Service as Service
    from modewright.client import connect as connect
    from modewright.errors import BasisNotFound as BasisNotFound
    from modewright.errors import Cancelled as Cancelled
    from modewright.errors import DeadlineExceeded as DeadlineExceeded
    from modewright.errors import HandshakeFailed as HandshakeFailed
    from modewright.errors import InternalError as InternalError
    from modewright.errors import InvalidProblem as InvalidProblem
    from modewright.errors import InvalidRequest as InvalidRequest
    from modewright.errors import LimitExceeded as LimitExceeded
    from modewright.errors import ModewrightError as ModewrightError
    from modewright.errors import NotConverged as NotConverged
    from modewright.errors import ServiceClosed as ServiceClosed
    from modewright.errors import ServiceNotInstalled as ServiceNotInstalled
    from modewright.errors import SpectrumExhausted as SpectrumExhausted
    from modewright.errors import StartFailed as StartFailed
    from modewright.errors import TransportError as TransportError
    from modewright.errors import Unavailable as Unavailable
    from modewright.errors import Unsupported as Unsupported
    from modewright.errors import VersionMismatch as VersionMismatch
    from modewright.errors import Violation as Violation
    from modewright.problem import Bounded as Bounded
    from modewright.problem import Coupling as Coupling
    from modewright.problem import Dirichlet as Dirichlet
    from modewright.problem import Film as Film
    from modewright.problem import Interface as Interface
    from modewright.problem import Layer as Layer
    from modewright.problem import Lump as Lump
    from modewright.problem import Neumann as Neumann
    from modewright.problem import Problem as Problem
    from modewright.problem import Robin as Robin
    from modewright.problem import Samples as Samples
    from modewright.stack import Stack as Stack
    from modewright.stack import StackLayer as StackLayer

_HOMES = {
    "basis": ("Basis", "Projection", "load_basis"),
    "channels": ("Tls",),
    "client": ("Check", "Progress", "Service", "connect"),
    "errors": (
        "BasisNotFound",
        "Cancelled",
        "DeadlineExceeded",
        "HandshakeFailed",
        "InternalError",
        "InvalidProblem",
        "InvalidRequest",
        "LimitExceeded",
        "ModewrightError",
        "NotConverged",
        "ServiceClosed",
        "ServiceNotInstalled",
        "SpectrumExhausted",
        "StartFailed",
        "TransportError",
        "Unavailable",
        "Unsupported",
        "VersionMismatch",
        "Violation",
    ),
    "problem": (
        "Bounded",
        "Coupling",
        "Dirichlet",
        "Film",
        "Interface",
        "Layer",
        "Lump",
        "Neumann",
        "Problem",
        "Robin",
        "Samples",
    ),
    "stack": ("Stack", "StackLayer"),
}
_HOME = {name: module for module, names in _HOMES.items() for name in names}

__all__ = sorted([*_HOME, "__version__"])


def __getattr__(name: str) -> Any:
    """Imports a public name from its home (PEP 562)."""
    if name == "__version__":
        from importlib.metadata import version

        value: Any = version("modewright")
    elif name in _HOME:
        value = getattr(import_module(f"modewright.{_HOME[name]}"), name)
    else:
        raise AttributeError(f"module 'modewright' has no attribute {name!r}")
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
