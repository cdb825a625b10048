"""README.md keeps its word: its commands are commands, and its Python runs as it stands there."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

from tests.checks import layout

ROOT = Path(__file__).resolve().parents[2]
PYTHON = re.compile(r"^```python\n(.*?)^```", re.MULTILINE | re.DOTALL)
LINKS = re.compile(r"\]\((?!https?:)([^)#]+)\)")


def _text(name: str) -> str:
    return (ROOT / name).read_text(encoding="utf-8")


def test_the_first_two_blocks_are_the_two_commands() -> None:
    assert layout.command_faults(ROOT) == []


def test_the_client_lines_run(tmp_path: Path) -> None:
    """The lines themselves, then what they should have made: all modes inside their bounds, a loss of heat
    to the air at zero on both sides (outdoors along -x, indoors along +x).
    """
    (lines,) = PYTHON.findall(_text("README.md"))
    check = """
assert c.shape == (24,) and heat.shape == (2,)
assert np.all(basis.lower <= basis.eigenvalues) and np.all(basis.eigenvalues <= basis.upper)
assert heat[0] < 0.0 < heat[1]
"""
    script = tmp_path / "lines.py"
    script.write_text(lines + check, encoding="utf-8")
    ran = subprocess.run(
        [sys.executable, "-W", "error", str(script)],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert ran.returncode == 0, ran.stderr


@pytest.mark.parametrize("page", ["README.md", "DEVELOPERS.md", "deploy/README.md", "proto/README.md"])
def test_links_lead_somewhere(page: str) -> None:
    missing = [
        target for target in LINKS.findall(_text(page)) if not (ROOT / page).parent.joinpath(target).exists()
    ]
    assert missing == []
