"""Entry point: parses arguments, runs one command, and turns every failure into a line and an exit code."""

from __future__ import annotations

import json
import logging
import os
import sys
from collections.abc import Sequence
from typing import Any

from modewright.cli.arguments import build_parser

__all__ = ["main"]

REFUSED = 3
SERVICE_FAILED = 4
DEFECT = 5
INTERRUPTED = 130

_log = logging.getLogger("modewright.cli")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line; the process's exit code. ``arguments``: default the process's own."""
    given = list(sys.argv[1:] if arguments is None else arguments)
    if given[:1] == ["serve"]:
        return _guarded(lambda: _serve(given[1:]), verbose=False)
    parser = build_parser()
    try:
        options = parser.parse_args(given)
    except SystemExit as stop:  # argparse has said what is wrong, or printed its help
        return int(stop.code or 0)
    if options.version:
        from importlib.metadata import version

        print(version("modewright"))
        return 0
    if options.command is None:
        parser.print_help(sys.stderr)
        return 2
    logging.basicConfig(
        stream=sys.stderr,
        level=logging.INFO if options.verbose else logging.WARNING,
        format="modewright: %(levelname)s: %(message)s",
    )

    def run() -> int:
        from modewright.cli import commands

        summary = commands.COMMANDS[options.command](options)
        if summary is not None:
            print(json.dumps(summary, indent=2, allow_nan=True))
            sys.stdout.flush()
        return 0

    return _guarded(run, verbose=options.verbose)


def _serve(arguments: list[str]) -> int:
    """Become the service; returns only where it cannot."""
    from modewright.embedded import missing_distributions
    from modewright.errors import ServiceNotInstalled

    missing = missing_distributions()
    if missing:
        names = ", ".join(missing)
        raise ServiceNotInstalled(f"the service needs {names}: pip install 'modewright[service]'")
    sys.stdout.flush()
    os.execv(sys.executable, [sys.executable, "-m", "modewright_service", *arguments])


def _guarded(run: Any, *, verbose: bool) -> int:
    """The exit code of ``run()``, every exception being said in words."""
    # Imported here: --help and a wrong command line need none of it.
    from modewright import errors
    from modewright.cli.files import InputFileError

    refusals = (
        errors.InvalidProblem,
        errors.InvalidRequest,
        errors.Unsupported,
        errors.SpectrumExhausted,
        errors.LimitExceeded,
        errors.NotConverged,
        InputFileError,
    )
    try:
        return int(run())
    except refusals as error:
        return _say(error, REFUSED, verbose)
    except errors.ModewrightError as error:
        return _say(error, SERVICE_FAILED, verbose)
    except BrokenPipeError:
        # The reader of standard output has left; nothing more can be said there, not even at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except OSError as error:
        place = f"{error.filename}: " if error.filename else ""
        return _say(f"{place}{error.strerror or error}", REFUSED, verbose)
    except KeyboardInterrupt:
        print("modewright: interrupted", file=sys.stderr)
        return INTERRUPTED
    except Exception as error:
        _log.info("where it happened", exc_info=verbose)
        return _say(f"a defect of this program: {type(error).__name__}: {error}", DEFECT, verbose=False)


def _say(error: Exception | str, code: int, verbose: bool) -> int:
    """Print one message: the field and the number are in the text of every error of this package."""
    lines = str(error).splitlines() or [type(error).__name__]
    if len(lines) > 2 and not verbose:
        # The tail of a service's log: its last line says what happened, the rest is for --verbose.
        lines = [lines[0], f"... {lines[-1].strip()}"]
    print(f"modewright: error: {lines[0]}", *lines[1:], sep="\n", file=sys.stderr)
    reason = getattr(error, "reason", "")
    if verbose and reason:
        print(f"modewright: reason {reason}", file=sys.stderr)
    return code
