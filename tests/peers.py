"""Programs that tests of the peers tier talk to.

Where such a program is missing the test skips and says so; with MODEWRIGHT_PEERS=required, as in
`.ci/run`, it fails instead, so that a green run there has met every peer.
"""

from __future__ import annotations

import os
import shutil
import sys
from pathlib import Path

import pytest


def program(name: str) -> str:
    """Path of the program `name`, from this Python environment or the search path."""
    beside = Path(sys.executable).parent / name
    found = str(beside) if beside.exists() else shutil.which(name)
    if found is not None:
        return found
    message = f"{name} is not installed here (see the peers tier in DEVELOPERS.md)"
    if os.environ.get("MODEWRIGHT_PEERS") == "required":
        pytest.fail(message)
    pytest.skip(message)
