"""The static half of the one check command: ``python -m tests.checks [name ...]``.

Runs every check, or those named, prints what each found, and fails if any did. Nothing is changed;
``--fix`` lets ruff repair what it can first.
"""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

from tests.checks import imports, layout

ROOT = Path(__file__).resolve().parents[2]
_BESIDE = Path(sys.executable).parent


def _program(name: str, *arguments: str, folder: str = ".") -> Callable[[], bool]:
    """A check that runs a program of this environment and passes if it does."""

    def run() -> bool:
        path = _BESIDE / name
        if not path.exists():
            print(f"{name} is missing: pip install -e '.[dev,checks]'")
            return False
        return subprocess.run([str(path), *arguments], cwd=ROOT / folder, check=False).returncode == 0

    return run


def _listed(find: Callable[[Path], list[str]]) -> Callable[[], bool]:
    """A check that passes if `find` finds nothing."""

    def run() -> bool:
        found = find(ROOT)
        print(*found, sep="\n", end="\n" if found else "")
        return not found

    return run


CHECKS: dict[str, Callable[[], bool]] = {
    "lint": _program("ruff", "check", "--output-format=concise", "."),
    "format": _program("ruff", "format", "--check", "."),
    "types": _program("mypy"),
    "imports": _listed(imports.violations),
    "layout": _listed(layout.faults),
    "contract": _program("buf", "lint", folder="proto"),
    "contract-format": _program("buf", "format", "--diff", "--exit-code", folder="proto"),
    "generated": _program(Path(sys.executable).name, "proto/generate.py", "--check"),
    "image": _program("hadolint", "deploy/Dockerfile"),
}


def main(arguments: list[str]) -> int:
    if "--fix" in arguments:
        arguments = [argument for argument in arguments if argument != "--fix"]
        _program("ruff", "check", "--fix", "--quiet", ".")()
        _program("ruff", "format", "--quiet", ".")()
    unknown = [name for name in arguments if name not in CHECKS]
    if unknown:
        print(f"no such check: {', '.join(unknown)}; there are {', '.join(CHECKS)}", file=sys.stderr)
        return 2
    failed = []
    for name in arguments or CHECKS:
        print(f"-- {name}", flush=True)
        if not CHECKS[name]():
            failed.append(name)
    print(f"failed: {', '.join(failed)}" if failed else "all static checks passed")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
