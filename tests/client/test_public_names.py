"""What ``import modewright`` offers, and what it costs."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import modewright

PUBLIC = {
    *("Basis", "Check", "Progress", "Projection", "Service", "connect", "load_basis"),
    *("Bounded", "Coupling", "Dirichlet", "Film", "Interface", "Layer", "Lump", "Neumann", "Problem"),
    *("Robin", "Samples", "Stack", "StackLayer", "Tls", "Violation", "__version__"),
    *("BasisNotFound", "Cancelled", "DeadlineExceeded", "HandshakeFailed", "InternalError"),
    *("InvalidProblem", "InvalidRequest", "LimitExceeded", "ModewrightError", "NotConverged"),
    *("ServiceClosed", "ServiceNotInstalled", "SpectrumExhausted", "StartFailed", "TransportError"),
    *("Unavailable", "Unsupported", "VersionMismatch"),
}


def test_the_public_names_are_these() -> None:
    assert set(modewright.__all__) == PUBLIC
    assert set(dir(modewright)) >= PUBLIC


@pytest.mark.parametrize("name", sorted(PUBLIC))
def test_every_public_name_can_be_imported(name: str) -> None:
    assert getattr(modewright, name) is not None


def test_type_checkers_see_the_same_names() -> None:
    assert modewright.__file__ is not None
    tree = ast.parse(Path(modewright.__file__).read_text(encoding="utf-8"))
    guard = next(node for node in tree.body if isinstance(node, ast.If))
    imported = {
        alias.asname: node.module
        for node in guard.body
        if isinstance(node, ast.ImportFrom)
        for alias in node.names
    }
    assert set(imported) == PUBLIC - {"__version__"}
    for name, module in imported.items():
        assert getattr(modewright, name) is getattr(sys.modules[str(module)], name)


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'Bases'"):
        _ = modewright.Bases


def test_import_loads_neither_numpy_nor_grpc() -> None:
    code = (
        "import sys, modewright\n"
        "heavy = {'numpy', 'scipy', 'grpc', 'google.protobuf', 'modewright.v1'} & set(sys.modules)\n"
        "assert not heavy, heavy\n"
        "modewright.Problem\n"
        "assert 'numpy' in sys.modules and 'grpc' not in sys.modules\n"
        "modewright.connect\n"
        "assert 'grpc' in sys.modules\n"
        "assert not {'scipy', 'modewright_service'} & set(sys.modules)\n"
    )
    subprocess.run([sys.executable, "-W", "error", "-c", code], check=True)
