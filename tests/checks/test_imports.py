"""The import rules find what they forbid, and the repository keeps them."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.checks import imports

ROOT = Path(__file__).resolve().parents[2]


def _plant(root: Path, path: str, source: str) -> None:
    (root / path).parent.mkdir(parents=True, exist_ok=True)
    (root / path).write_text(source, encoding="utf-8")


@pytest.mark.parametrize(
    ("path", "source"),
    [
        ("service/modewright_service/core/mesh.py", "import grpc\n"),
        ("service/modewright_service/core/mesh.py", "from google.protobuf import message\n"),
        ("service/modewright_service/core/mesh.py", "from modewright_service.store import memory\n"),
        ("service/modewright_service/core/mesh.py", "from ..store import memory\n"),
        ("service/modewright_service/core/__init__.py", "from ..rpc import status\n"),
        ("service/modewright_service/store/memory.py", "from modewright_service.rpc import status\n"),
        ("service/modewright_service/store/memory.py", "import grpc.aio\n"),
        ("service/modewright_service/rpc/status.py", "from modewright_service import process\n"),
        ("service/modewright_service/rpc/status.py", "from modewright.client import Service\n"),
        ("service/modewright_service/process/pool.py", "import modewright\n"),
        ("client/modewright/client.py", "from modewright_service.core import solve\n"),
        ("client/modewright/client.py", "def late():\n    import scipy\n"),
        ("client/modewright/record.py", "from modewright import errors\n"),
        ("client/modewright/pieces.py", "import grpc\n"),
        ("client/modewright/demo/picture.py", "import matplotlib\n"),
        ("client/other/module.py", "import os\n"),
    ],
)
def test_a_forbidden_import_is_found(tmp_path: Path, path: str, source: str) -> None:
    _plant(tmp_path, path, source)
    found = imports.violations(tmp_path)
    assert len(found) == 1
    assert found[0].startswith(path)


@pytest.mark.parametrize(
    ("path", "source"),
    [
        (
            "service/modewright_service/core/mesh.py",
            "import math\nimport numpy as np\nfrom scipy import linalg\n",
        ),
        (
            "service/modewright_service/core/mesh.py",
            "from modewright.pieces import Pieces\nfrom . import elements\n",
        ),
        (
            "service/modewright_service/rpc/status.py",
            "from modewright.v1 import solve_pb2\nfrom ..core import errors\n",
        ),
        (
            "service/modewright_service/process/pool.py",
            "from modewright_service.rpc import servicer\nimport grpc\n",
        ),
        ("client/modewright/demo/picture.py", "def draw():\n    import matplotlib\n"),
        ("client/modewright/client.py", "import grpc\nfrom modewright.v1 import solve_pb2\n"),
    ],
)
def test_an_allowed_import_is_not(tmp_path: Path, path: str, source: str) -> None:
    _plant(tmp_path, path, source)
    assert imports.violations(tmp_path) == []


def test_the_repository_keeps_the_rules() -> None:
    assert imports.violations(ROOT) == []
