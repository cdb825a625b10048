"""The command line's arguments. Importing this needs nothing beyond the standard library."""

from __future__ import annotations

import argparse
import math
from pathlib import Path

__all__ = ["build_parser"]

SUFFIXES = (".npz", ".csv")
MEASURES = ("length", "cylindrical", "spherical", "weight")
QUANTITIES = ("value", "derivative", "flux", "flux-density")

_EPILOG = """\
A problem document (JSON or TOML) describes -(p u')' + q u = lambda w u on named layers. Without --service
a service is started for the one command, which needs the 'service' extra. The summary goes to standard output
as JSON, messages to standard error.

exit codes: 0 done; 2 wrong command line; 3 document, file or number refused; 4 service failed or unreachable;
5 defect of this program; 130 interrupted
"""


# The points themselves; the commands limit points times modes or fields.
_MOST_POINTS = 1_000_000


def _count(text: str) -> int:
    try:
        value = int(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number") from None
    if value < 1:
        raise argparse.ArgumentTypeError(f"{text!r} is not positive")
    return value


def _points(text: str) -> int:
    value = _count(text)
    if value > _MOST_POINTS:
        raise argparse.ArgumentTypeError(f"{text!r} is more than {_MOST_POINTS} points")
    return value


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"{text!r} is not a number") from None
    if not (math.isfinite(value) and value > 0.0):
        raise argparse.ArgumentTypeError(f"{text!r} is not positive and finite")
    return value


def _output(text: str) -> Path:
    path = Path(text)
    if path.suffix.lower() not in SUFFIXES:
        raise argparse.ArgumentTypeError(f"{text!r} must end in {' or '.join(SUFFIXES)}")
    if not path.parent.is_dir():
        raise argparse.ArgumentTypeError(f"the folder of {text!r} does not exist")
    return path


def _name_or_number(text: str) -> str | float:
    try:
        return float(text)
    except ValueError:
        return text


def _common(parser: argparse.ArgumentParser, modes: str, *, required: bool = True) -> None:
    """Document, service, tolerance and number of modes, ``modes`` being the help for the last."""
    parser.add_argument("document", metavar="FILE", type=Path, help="problem document, .json or .toml")
    parser.add_argument("--modes", type=_count, metavar="N", required=required, help=modes)
    parser.add_argument(
        "--rtol",
        type=_positive,
        metavar="R",
        help="relative tolerance of the eigenvalues (default: the service's)",
    )
    _service(parser)


def _service(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--service",
        metavar="ADDRESS",
        help="host:port of a running service (default: start one for this command)",
    )
    parser.add_argument(
        "--timeout",
        type=_positive,
        metavar="S",
        help="seconds that one call may take (default: the client's)",
    )


def _write(parser: argparse.ArgumentParser, content: str, *, required: bool) -> None:
    parser.add_argument(
        "-o",
        "--output",
        type=_output,
        metavar="OUT",
        required=required,
        help=f"write {content} to OUT (.npz or .csv)",
    )


def build_parser() -> argparse.ArgumentParser:
    """The parser of everything but the arguments after ``serve``, which are the service's own."""
    parser = argparse.ArgumentParser(
        prog="modewright",
        description="Eigenbases of layered problems with bounds, and what is projected on them.",
        epilog=_EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    parser.add_argument("-v", "--verbose", action="store_true", help="say more on standard error")
    parser.add_argument("--version", action="store_true", help="print the version and stop")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND")

    def command(name: str, text: str) -> argparse.ArgumentParser:
        return commands.add_parser(
            name, help=text, description=text[0].upper() + text[1:] + ".", allow_abbrev=False
        )

    command("serve", "run the service in the foreground (its own options follow: modewright serve --help)")

    check = command(
        "check", "validate a problem document and say what the service makes of it, solving nothing"
    )
    _common(check, "also say whether this many modes are at hand", required=False)

    solve = command("solve", "solve for the lowest modes: eigenvalues, bounds, counted zeros")
    _common(solve, "number of modes, the lowest ones")
    _write(solve, "eigenvalues, bounds and zeros", required=False)
    solve.add_argument("--points", type=_points, metavar="M", help="add the modes on M equal steps (NPZ)")
    solve.add_argument(
        "--save-basis", type=Path, metavar="PATH", help="keep the whole basis as a record file"
    )

    project = command(
        "project", "project snapshots on the lowest modes: coefficients, captured share, residual"
    )
    _common(project, "number of modes, the lowest ones")
    _write(project, "coefficients", required=True)
    source = project.add_mutually_exclusive_group(required=True)
    source.add_argument("--snapshots", type=Path, metavar="FILE", help="NPZ or CSV file of snapshots")
    source.add_argument("--expression", metavar="TEXT", help="project this expression in x instead")
    project.add_argument(
        "--values", default="values", metavar="NAME", help="array of the snapshots (default: values)"
    )
    project.add_argument("--x", default="x", metavar="NAME", help="array of the points (default: x)")
    project.add_argument(
        "--edges",
        default="edges",
        metavar="NAME",
        help="array of the cell edges, for cell averages (default: edges)",
    )
    project.add_argument(
        "--measure",
        choices=MEASURES,
        help="measure of the cell averages (default: the file's, else the geometry's)",
    )
    project.add_argument(
        "--interpolation", choices=("linear", "cubic"), help="between points (default: cubic)"
    )
    project.add_argument(
        "--axis", type=int, default=-1, metavar="K", help="axis of the coordinate (default: -1)"
    )
    for side in ("left", "right"):
        project.add_argument(
            f"--{side}-lump",
            type=_name_or_number,
            metavar="NAME|NUMBER",
            help=f"value of the lump at the {side} end in each snapshot: an array of the file or one number",
        )

    reconstruct = command("reconstruct", "put fields together again from coefficients")
    _common(reconstruct, "number of modes (default: as many as there are coefficients)", required=False)
    _write(reconstruct, "the fields", required=True)
    reconstruct.add_argument(
        "--coefficients", type=Path, required=True, metavar="FILE", help="NPZ or CSV file that project wrote"
    )
    place = reconstruct.add_mutually_exclusive_group(required=True)
    place.add_argument(
        "--points", type=_points, metavar="M", help="M equally spaced points, both ends included"
    )
    place.add_argument(
        "--at", type=Path, metavar="FILE", help="NPZ (array x) or CSV (first column) of the points"
    )
    reconstruct.add_argument("--quantity", choices=QUANTITIES, default="value", help="default: value")
    reconstruct.add_argument(
        "--side",
        choices=("left", "right"),
        default="right",
        help="which side of an interface is meant (default: right)",
    )

    demo = command(
        "demo", "cool a buried pipe: the whole job on invented data, with tables, files and a picture"
    )
    _service(demo)
    demo.add_argument(
        "--output",
        type=Path,
        default=Path("modewright-demo"),
        metavar="DIR",
        help="folder for the results (default: modewright-demo)",
    )
    return parser
