"""``python -m modewright_service``: run the service, embed it, or probe one.

Nothing heavy is imported before the workers are started: they import the solver while this process imports
gRPC, and a fresh service answers its first solve the sooner.
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Final

from modewright_service import __version__
from modewright_service.process.settings import Settings, SettingsError, add_flags, parse

__all__ = ["main"]

# What embedding changes: one user, on this machine, who wants it started and stopped at once.
_EMBEDDED: Final = {"drain_seconds": 0.0, "reflection": False, "log_format": "text", "metrics": ""}


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="modewright-service",
        description="Serves eigenbases of -(p u')' + q u = lambda w u over gRPC.",
        epilog="Every setting can also be given by the environment variable named with it.",
    )
    parser.add_argument("--version", action="version", version=__version__)
    add_flags(parser)
    embedded = parser.add_argument_group("embedded mode, for the client library")
    embedded.add_argument(
        "--embedded", action="store_true", help="serve the parent process only, on a Unix socket"
    )
    embedded.add_argument(
        "--ready-fd", type=int, metavar="FD", help="inherited socket or pipe for the ready line"
    )
    embedded.add_argument("--socket", metavar="PATH", help="path of the Unix socket")
    embedded.add_argument(
        "--folder", metavar="PATH", help="folder of this service alone, removed when the parent is gone"
    )
    probe = parser.add_argument_group("probe")
    probe.add_argument(
        "--probe", metavar="ADDRESS", help="ask the service there for its health; exit status 0 or 1"
    )
    probe.add_argument("--probe-service", metavar="NAME", default="", help="ask about this service only")
    probe.add_argument("--probe-timeout", metavar="SECONDS", type=float, default=5.0)
    probe.add_argument("--probe-ca", metavar="PATH", default="", help="PEM file of the authority, for TLS")
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run what the arguments say. Returns the exit status: 2 for settings that cannot be used."""
    parser = _parser()
    flags = parser.parse_args(arguments)
    if flags.probe:
        from modewright_service.process.probe import probe

        return probe(flags.probe, service=flags.probe_service, timeout=flags.probe_timeout, ca=flags.probe_ca)
    try:
        if flags.embedded:
            if flags.ready_fd is None or not flags.socket:
                parser.error("--embedded needs --ready-fd and --socket")
            try:
                os.fstat(flags.ready_fd)
            except OSError:
                parser.error(f"--ready-fd: {flags.ready_fd} is not open")
            # The parent's environment may be meant for a service it runs elsewhere: only flags count here.
            settings = parse(flags, {}, listen=f"unix:{flags.socket}", **_EMBEDDED)
            return _run(settings, flags.ready_fd, Path(flags.folder) if flags.folder else None)
        return _run(parse(flags, os.environ))
    except SettingsError as error:
        print(f"modewright-service: {error}", file=sys.stderr)
        return 2


def _run(settings: Settings, ready_fd: int | None = None, folder: Path | None = None) -> int:
    from modewright_service.process import logs
    from modewright_service.process.crew import hire
    from modewright_service.process.spawn import SINGLE_THREADED

    logs.configure(settings.log_level, settings.log_format)
    crew = hire(settings)
    # Products for callers run in a few threads of their own; BLAS must not start more for each.
    for name, value in SINGLE_THREADED.items():
        os.environ.setdefault(name, value)

    import asyncio

    from modewright_service.process.lifecycle import serve

    asyncio.run(serve(settings, crew, ready_fd, folder))
    return 0


if __name__ == "__main__":
    sys.exit(main())
