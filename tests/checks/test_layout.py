"""The rules about files find what they forbid."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.checks import layout

DEMO = "python3 -m venv .venv && .venv/bin/pip install . && .venv/bin/modewright demo"
CORE = "python3 -m venv .venv && .venv/bin/pip install . && .venv/bin/pytest -m core"


def _file(root: Path, name: str, text: str) -> Path:
    path = root / name
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text, encoding="utf-8")
    return path


def test_long_files_are_found_and_generated_ones_are_not(tmp_path: Path) -> None:
    files = [
        _file(tmp_path, "long.py", "pass\n" * (layout.LONGEST_FILE + 1)),
        _file(tmp_path, "full.py", "pass\n" * layout.LONGEST_FILE),
        _file(tmp_path, "messages_pb2.py", "pass\n" * (layout.LONGEST_FILE + 1)),
    ]
    assert layout.length_faults(tmp_path, files) == ["long.py: 601 lines, at most 600"]


def test_a_folder_without_a_readme_is_found(tmp_path: Path) -> None:
    files = [
        _file(tmp_path, "a/README.md", "why\n"),
        _file(tmp_path, "a/x.py", ""),
        _file(tmp_path, "b/y.py", ""),
    ]
    assert layout.readme_faults(tmp_path, files) == ["b: no README.md"]


@pytest.mark.parametrize("word", ["TO" + "DO", "FIX" + "ME", "/wo" + "rk/main", "/tm" + "p/mw"])
def test_a_forbidden_word_is_found_with_its_line(tmp_path: Path, word: str) -> None:
    files = [_file(tmp_path, "module.py", f"ok\n# {word} here\n"), _file(tmp_path, "image.png", word)]
    found = layout.word_faults(tmp_path, files)
    assert len(found) == 1
    assert found[0].startswith("module.py:2:")


@pytest.mark.parametrize(
    ("text", "count"),
    [
        (f"```sh\n{DEMO}\n```\n\n```sh\n{CORE}\n```\n", 0),
        (f"```sh\n{CORE}\n```\n\n```sh\n{DEMO}\n```\n", 2),
        (f"```sh\n{DEMO}\n```\n", 1),
        (f"```sh\ncd x\n{DEMO}\n```\n\n```sh\n{CORE}\n```\n", 2),
    ],
)
def test_the_two_commands_of_the_readme(tmp_path: Path, text: str, count: int) -> None:
    _file(tmp_path, "README.md", text)
    assert len(layout.command_faults(tmp_path)) == count
