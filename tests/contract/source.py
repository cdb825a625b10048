"""The contract's own text, read for what the descriptors do not carry: headings and comments."""

from __future__ import annotations

import re
from pathlib import Path

FOLDER = Path(__file__).resolve().parents[2] / "proto/modewright/v1"
_HEADING = re.compile(r"  // --- ([A-Z_, ]+?)(?::.*)? ---$")
_OWN_STATUS = re.compile(r"  // ([A-Z_]{8,}): ")
_VALUE = re.compile(r"  ERROR_REASON_(\w+) = \d+;")
_METHOD = re.compile(r"((?:^  //.*\n)+)  rpc (\w+)\(", re.MULTILINE)


def reason_statuses() -> dict[str, set[str]]:
    """Reason -> the gRPC statuses that its own comment, or else its heading, allows in errors.proto."""
    statuses: dict[str, set[str]] = {}
    headed: set[str] = set()
    own: set[str] = set()
    for line in (FOLDER / "errors.proto").read_text(encoding="utf-8").splitlines():
        if match := _HEADING.match(line):
            headed = set(match[1].split(", "))
        elif match := _OWN_STATUS.match(line):
            own = {match[1]}
        elif (match := _VALUE.match(line)) and match[1] != "UNSPECIFIED":
            statuses[match[1]] = own or headed
            own = set()
    return statuses


def commented_calls() -> dict[str, str]:
    """Call -> its comment."""
    text = (FOLDER / "eigenbasis_service.proto").read_text(encoding="utf-8")
    return {name: comment for comment, name in _METHOD.findall(text)}


def drafted_calls() -> set[str]:
    """Calls whose comment opens with 'Draft.'."""
    return {name for name, comment in commented_calls().items() if comment.lstrip().startswith("// Draft.")}
