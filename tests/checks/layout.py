"""House rules about files: length, a README in every folder, words that no file carries, and that the
two commands of README.md are what they promise to be.
"""

from __future__ import annotations

import re
import subprocess
from pathlib import Path

LONGEST_FILE = 600
_TEXT = {".py", ".pyi", ".proto", ".md", ".toml", ".json", ".yaml", ".yml", ".txt", ".sh", ".csv", ""}
# Unfinished work, places of one machine, and package registries: none belongs in the repository.
_FORBIDDEN = re.compile(
    r"\bTO" r"DO\b|\bFIX" r"ME\b|\bX" r"XX\b"
    r"|/wo" r"rk/|/tm" r"p/mw|/ro" r"ot/|bash" r"_jobs"
    r"|py" r"pi\.org|pythonh" r"osted\.org|npmj" r"s\.(?:org|com)|deb\.debi" r"an\.org"
)  # fmt: skip
_FENCE = re.compile(r"^```sh\n(.*?)^```", re.MULTILINE | re.DOTALL)


def tracked(root: Path) -> list[Path]:
    """Files that git tracks below `root` and that exist."""
    listed = subprocess.run(["git", "ls-files", "-z"], cwd=root, check=True, capture_output=True, text=True)
    return [root / name for name in listed.stdout.split("\0") if name and (root / name).is_file()]


def _is_generated(path: Path) -> bool:
    return path.stem.endswith(("_pb2", "_pb2_grpc"))


def length_faults(root: Path, files: list[Path]) -> list[str]:
    """Source files longer than the limit."""
    faults = []
    for path in files:
        if path.suffix not in {".py", ".proto"} or _is_generated(path):
            continue
        lines = path.read_text(encoding="utf-8").count("\n")
        if lines > LONGEST_FILE:
            faults.append(f"{path.relative_to(root)}: {lines} lines, at most {LONGEST_FILE}")
    return faults


def readme_faults(root: Path, files: list[Path]) -> list[str]:
    """Folders with files of their own but no README.md. A Python package may explain itself in the
    docstring of its ``__init__`` only where it holds generated code; data folders count as folders.
    """
    folders = {path.parent for path in files}
    exempt = {root / ".ci", root / "proto/modewright/v1", root / "client/modewright/v1"}
    return [
        f"{folder.relative_to(root) or '.'}: no README.md"
        for folder in sorted(folders - exempt)
        if not (folder / "README.md").is_file()
    ]


def word_faults(root: Path, files: list[Path]) -> list[str]:
    """Lines with a forbidden word."""
    faults = []
    for path in files:
        if path.suffix not in _TEXT:
            continue
        for number, line in enumerate(path.read_text(encoding="utf-8").splitlines(), start=1):
            match = _FORBIDDEN.search(line)
            if match:
                faults.append(f"{path.relative_to(root)}:{number}: {match.group()}")
    return faults


def readme_commands(root: Path) -> list[str]:
    """The fenced ``sh`` blocks of README.md, stripped."""
    return [block.strip() for block in _FENCE.findall((root / "README.md").read_text(encoding="utf-8"))]


def command_faults(root: Path) -> list[str]:
    """The first two ``sh`` blocks of README.md: one line each; the demonstration, then the core tests."""
    commands = readme_commands(root)[:2]
    if len(commands) < 2:
        return ["README.md: two sh blocks are wanted, the demonstration and the core tests"]
    faults = [f"README.md: more than one line in: {text!r}" for text in commands if "\n" in text]
    for text, wanted in zip(commands, ("modewright demo", "pytest -m core"), strict=True):
        if wanted not in text or not text.startswith("python3 -m venv "):
            faults.append(f"README.md: expected a set-up and {wanted!r} in: {text!r}")
    return faults


def faults(root: Path) -> list[str]:
    """Everything above, over the tracked files below `root`."""
    files = tracked(root)
    return [
        *length_faults(root, files),
        *readme_faults(root, files),
        *word_faults(root, files),
        *command_faults(root),
    ]
