"""The commands on the real service: files in, files and a JSON summary out, exit codes and messages.

Expected numbers: the string with fixed ends, lambda_n = ((n + 1) pi)^2, phi_n = sqrt(2) sin((n + 1) pi x),
and the Fourier sine coefficients of x (1 - x), sqrt(2) 4 / ((n + 1) pi)^3 for even n and zero for odd n
(H. S. Carslaw, J. C. Jaeger, Conduction of Heat in Solids, chapter III; elementary integrals).
"""

import json
import os
import re
import signal
import socket
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import modewright
from modewright.cli import main

MODES = 6
NUMBERS = np.arange(1, MODES + 1)
EIGENVALUES = (NUMBERS * np.pi) ** 2
PARABOLA = np.where(NUMBERS % 2 == 1, np.sqrt(2.0) * 4.0 / (NUMBERS * np.pi) ** 3, 0.0)


@pytest.fixture
def document(tmp_path: Path) -> Path:
    path = tmp_path / "string.toml"
    path.write_text(
        '[[layers]]\nstart = 0.0\nend = 1.0\n[left]\nkind = "dirichlet"\n[right]\nkind = "dirichlet"\n',
        encoding="utf-8",
    )
    return path


@pytest.fixture
def run(service: modewright.Service, capsys: pytest.CaptureFixture[str]) -> Any:
    """Run a command that must succeed, on the suite's service: its summary."""

    def command(*arguments: object) -> dict[str, Any]:
        code = main([*map(str, arguments), "--service", service.address])
        printed = capsys.readouterr()
        assert code == 0, printed.err
        assert printed.err == ""
        summary: dict[str, Any] = json.loads(printed.out)
        return summary

    return command


@pytest.fixture
def fail(service: modewright.Service, capsys: pytest.CaptureFixture[str]) -> Any:
    """Run a command that must fail: its exit code and its one message."""

    def command(*arguments: object) -> tuple[int, str]:
        code = main([*map(str, arguments), "--service", service.address])
        printed = capsys.readouterr()
        assert printed.out == ""
        assert "Traceback" not in printed.err
        return code, printed.err

    return command


def test_check_solves_nothing(run: Any, document: Path) -> None:
    summary = run("check", document, "--modes", 6)
    assert summary["valid"] is True
    assert summary["modes"] == 6
    assert summary["ends"]["left"]["kind"] == "dirichlet"


def test_solve_to_npz_with_modes(run: Any, document: Path, tmp_path: Path) -> None:
    out = tmp_path / "basis.npz"
    summary = run("solve", document, "--modes", MODES, "-o", out, "--points", 41)
    np.testing.assert_allclose(summary["eigenvalues"], EIGENVALUES, rtol=1e-9)
    with np.load(out) as arrays:
        assert np.all(arrays["lower"] <= EIGENVALUES)
        assert np.all(arrays["upper"] >= EIGENVALUES)
        assert arrays["zeros"].tolist() == list(range(MODES))
        expected = np.sqrt(2.0) * np.sin(np.pi * np.outer(NUMBERS, arrays["x"]))
        np.testing.assert_allclose(arrays["modes"], expected, atol=1e-8)
        assert str(arrays["basis_key"]) == summary["basis_key"]


def test_solve_to_csv(run: Any, document: Path, tmp_path: Path) -> None:
    out = tmp_path / "basis.csv"
    run("solve", document, "--modes", MODES, "-o", out)
    lines = out.read_text(encoding="utf-8").splitlines()
    assert lines[0] == "n,eigenvalues,lower,upper,zeros,groups,tolerance_met"
    table = np.array([[float(cell) for cell in line.split(",")] for line in lines[1:]])
    np.testing.assert_allclose(table[:, 1], EIGENVALUES, rtol=1e-9)


def test_solve_at_another_tolerance(run: Any, document: Path) -> None:
    assert run("solve", document, "--modes", 3, "--rtol", "1e-12")["rtol"] == 1e-12


def test_saved_basis_is_the_same_basis(run: Any, document: Path, tmp_path: Path) -> None:
    summary = run("solve", document, "--modes", MODES, "--save-basis", tmp_path / "basis.record")
    basis = modewright.load_basis(tmp_path / "basis.record")
    assert basis.key == summary["basis_key"]
    np.testing.assert_array_equal(basis.eigenvalues, summary["eigenvalues"])


def test_expression_there_and_back(run: Any, document: Path, tmp_path: Path) -> None:
    coefficients, fields = tmp_path / "c.npz", tmp_path / "u.npz"
    summary = run("project", document, "--modes", MODES, "--expression", "x*(1-x)", "-o", coefficients)
    with np.load(coefficients) as arrays:
        np.testing.assert_allclose(arrays["coefficients"], PARABOLA, atol=1e-11)
    # The squared norm of x (1 - x) is 1/30; what is left is the rest of the sine series.
    expected = np.sqrt(1.0 / 30.0 - np.sum(PARABOLA**2)) * np.sqrt(30.0)
    assert summary["relative_residual_largest"] == pytest.approx(expected, rel=1e-6)
    run("reconstruct", document, "--coefficients", coefficients, "--points", 21, "-o", fields)
    with np.load(fields) as arrays:
        expected_field = PARABOLA @ (np.sqrt(2.0) * np.sin(np.pi * np.outer(NUMBERS, arrays["x"])))
        np.testing.assert_allclose(arrays["values"], expected_field, atol=1e-9)


def test_points_from_csv_to_csv_and_back(run: Any, document: Path, tmp_path: Path) -> None:
    x = np.linspace(0.0, 1.0, 81)
    snapshots, coefficients, fields = (tmp_path / name for name in ("u.csv", "c.csv", "v.csv"))
    rows = [
        f"{a!r},{b!r},{c!r}" for a, b, c in zip(x.tolist(), (x * (1 - x)).tolist(), x.tolist(), strict=True)
    ]
    snapshots.write_text("x,arch,ramp\n" + "\n".join(rows) + "\n", encoding="utf-8")
    summary = run("project", document, "--modes", MODES, "--snapshots", snapshots, "-o", coefficients)
    assert summary["shape"] == [2, MODES]
    # A cubic spline is exact for a parabola and a line: c_n of x is sqrt(2) (-1)^n / ((n + 1) pi).
    lines = coefficients.read_text(encoding="utf-8").splitlines()
    assert lines[0].startswith("snapshot,captured,residual,norm,c0,c1")
    table = np.array([[float(cell) for cell in line.split(",")] for line in lines[1:]])
    np.testing.assert_allclose(table[0, 4:], PARABOLA, atol=1e-11)
    np.testing.assert_allclose(
        table[1, 4:], np.sqrt(2.0) * (-1.0) ** (NUMBERS + 1) / (NUMBERS * np.pi), atol=1e-11
    )
    points = tmp_path / "points.csv"
    points.write_text("x\n0.25\n0.5\n", encoding="utf-8")
    options = ("--at", points, "--quantity", "derivative")
    run("reconstruct", document, "--coefficients", coefficients, *options, "-o", fields)
    derivative = np.loadtxt(fields, delimiter=",", skiprows=1)
    frequencies = NUMBERS * np.pi
    expected = PARABOLA @ (np.sqrt(2.0) * frequencies[:, None] * np.cos(np.outer(frequencies, [0.25, 0.5])))
    np.testing.assert_allclose(derivative[:, 1], expected, atol=1e-8)


def test_cell_averages_along_the_first_axis(run: Any, document: Path, tmp_path: Path) -> None:
    edges = np.linspace(0.0, 1.0, 31) ** 1.3
    integral = edges**2 / 2.0 - edges**3 / 3.0
    averages = np.diff(integral) / np.diff(edges)
    np.savez(tmp_path / "u.npz", T=np.stack([averages, 2.0 * averages], axis=1), faces=edges)
    out = tmp_path / "c.npz"
    names = ("--values", "T", "--edges", "faces", "--axis", 0, "--measure", "length")
    run("project", document, "--modes", MODES, "--snapshots", tmp_path / "u.npz", *names, "-o", out)
    with np.load(out) as arrays:
        np.testing.assert_allclose(arrays["coefficients"], np.outer([1.0, 2.0], PARABOLA), atol=1e-6)


def test_lump_by_name_by_number_or_not_at_all(run: Any, tmp_path: Path) -> None:
    path = tmp_path / "vessel.json"
    ends = {"left": {"kind": "lump", "mass": 2.0, "resistance": 0.5}, "right": {"kind": "film", "film": 1.0}}
    path.write_text(json.dumps({"layers": [{"start": 0.0, "end": 1.0}], **ends}), encoding="utf-8")
    x = np.linspace(0.0, 1.0, 21)
    np.savez(tmp_path / "u.npz", x=x, values=np.ones((2, 21)), tank=np.array([3.0, 3.0]))
    given = ("project", path, "--modes", MODES, "--snapshots", tmp_path / "u.npz", "-o", tmp_path / "c.npz")
    assert run(*given)["lumps_extrapolated"] is True
    norms = []
    for option in ((), ("--left-lump", "tank"), ("--left-lump", 3.0)):
        run(*given, *option)
        with np.load(tmp_path / "c.npz") as arrays:
            norms.append(arrays["norm"].copy())
    # <1, 1> over the wall is 1; the lump adds 2 u^2.
    np.testing.assert_allclose(norms[0], np.sqrt(1.0 + 2.0), rtol=1e-12)
    np.testing.assert_allclose(norms[1], np.sqrt(1.0 + 18.0), rtol=1e-12)
    np.testing.assert_array_equal(norms[2], norms[1])


def test_coefficients_of_another_problem_are_refused(
    run: Any, fail: Any, document: Path, tmp_path: Path
) -> None:
    run("project", document, "--modes", MODES, "--expression", "x", "-o", tmp_path / "c.npz")
    other = tmp_path / "other.toml"
    other.write_text(document.read_text(encoding="utf-8").replace("1.0", "2.0"), encoding="utf-8")
    target = ("--coefficients", tmp_path / "c.npz", "--points", 5, "-o", tmp_path / "u.npz")
    code, message = fail("reconstruct", other, *target)
    assert code == 3
    assert "belongs to problem" in message
    # without the digest, as another program may have written it
    with np.load(tmp_path / "c.npz") as arrays:
        kept = {name: arrays[name] for name in arrays.files if name != "problem_digest"}
    np.savez(tmp_path / "c.npz", **kept)
    code, message = fail("reconstruct", other, *target)
    assert code == 3
    assert "belongs to basis" in message


REFUSED = {
    "negative weight": ("w = 1.0\np = 1.0", "w = -3.5\np = 1.0", r"layers\[0\]\.w.*-3\.5"),
    "unknown name": ("w = 1.0", 'w = "1 + y"', r"layers\[0\]\.w.*y"),
    "unknown field": ("w = 1.0", "weight = 1.0", r"weight"),
    "unknown end": ('"dirichlet"', '"open"', r"left\.kind.*open"),
    "not TOML": ("w = 1.0", "w = = 1", r"string\.toml"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused_documents_name_field_and_number(fail: Any, document: Path, name: str) -> None:
    old, new, pattern = REFUSED[name]
    text = document.read_text(encoding="utf-8").replace("end = 1.0\n", "end = 1.0\nw = 1.0\np = 1.0\n")
    assert old in text
    document.write_text(text.replace(old, new, 1), encoding="utf-8")
    code, message = fail("check", document)
    assert code == 3
    assert re.search(pattern, message), message


def test_refused_requests_name_field_and_number(fail: Any, document: Path, tmp_path: Path) -> None:
    code, message = fail("solve", document, "--modes", 10**9)
    assert code == 3
    assert "modes" in message
    assert "1000000000" in message
    np.savez(tmp_path / "u.npz", x=[0.0, 0.5, 1.5], values=[1.0, 2.0, 3.0])
    given = ("project", document, "--modes", 3, "--snapshots", tmp_path / "u.npz", "-o", tmp_path / "c.npz")
    code, message = fail(*given)
    assert code == 3
    assert "1.5" in message
    code, message = fail(*given, "--axis", 4)
    assert code == 3
    assert "no axis 4" in message
    assert not (tmp_path / "c.npz").exists()


def test_expression_without_a_value_somewhere(fail: Any, document: Path, tmp_path: Path) -> None:
    options = ("--modes", 3, "--expression", "1/(x-0.5)", "-o", tmp_path / "c.npz")
    code, message = fail("project", document, *options)
    assert code == 3
    assert re.fullmatch(r"modewright: error: expression: .* at x = 0\.5\n", message)


def test_a_second_equal_solve_is_answered_without_solving(run: Any, document: Path) -> None:
    options = ("solve", document, "--modes", 5, "--rtol", "1e-6")
    first, second = run(*options), run(*options)
    assert second["answered_from_cache"] is True
    assert second["server_solve_count"] == first["server_solve_count"]
    assert second["basis_key"] == first["basis_key"]


def test_a_failed_start_is_told_in_two_lines(document: Path) -> None:
    script = (
        "import sys\n"
        "from modewright import embedded\n"
        "from modewright.cli import main\n"
        "embedded._MODULE = 'modewright_service.no_such_part'\n"
        "sys.exit(main(sys.argv[1:]))\n"
    )
    environment = {k: v for k, v in os.environ.items() if not k.startswith("MODEWRIGHT_")}
    done = subprocess.run(
        [sys.executable, "-c", script, "check", str(document)],
        capture_output=True,
        text=True,
        check=False,
        env=environment,
    )
    assert done.returncode == 4
    assert done.stderr.startswith("modewright: error: the embedded service ended with exit code 1")
    assert "no_such_part" in done.stderr
    assert len(done.stderr.splitlines()) == 2


def test_missing_files_are_named(fail: Any, tmp_path: Path) -> None:
    code, message = fail("check", tmp_path / "nowhere.toml")
    assert code == 3
    assert "nowhere.toml" in message


def test_unreachable_service_has_its_own_code(document: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        address = f"127.0.0.1:{free.getsockname()[1]}"
    assert main(["check", str(document), "--service", address, "--timeout", "2"]) == 4
    assert "modewright: error:" in capsys.readouterr().err


@pytest.mark.parametrize(
    "arguments",
    [
        ["solve", "a.toml"],
        ["solve", "a.toml", "--modes", "none"],
        ["solve", "a.toml", "--modes", "0"],
        ["solve", "a.toml", "--modes", "3", "-o", "basis.txt"],
        ["solve", "a.toml", "--modes", "3", "--rtol", "inf"],
        ["solve", "a.toml", "--modes", "3", "--points", "1000000000", "-o", "basis.npz"],
        ["project", "a.toml", "--modes", "3", "-o", "c.npz"],
        ["reconstruct", "a.toml", "--coefficients", "c.npz", "--points", "3", "--at", "x.csv", "-o", "u.npz"],
        ["melt"],
        [],
    ],
)
def test_wrong_command_lines(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(arguments) == 2
    assert "usage: modewright" in capsys.readouterr().err


def test_modes_on_points_need_an_archive(document: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["solve", str(document), "--modes", "3", "--points", "5"]) == 3
    assert "--points needs --output" in capsys.readouterr().err


def test_too_many_numbers_are_refused_before_the_service_is_asked(
    document: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out = ("--points", "1000000", "-o", str(tmp_path / "out.npz"), "--service", "127.0.0.1:1")
    assert main(["solve", str(document), "--modes", "101", *out]) == 3
    message = capsys.readouterr().err
    assert "--points: 1000000 points for 101 modes are 101000000 numbers, more than 100000000" in message
    for shape, what in (((101,), "101 modes"), ((102, 3), "102 fields")):
        np.savez(tmp_path / "c.npz", coefficients=np.ones(shape))
        given = ("--coefficients", str(tmp_path / "c.npz"))
        assert main(["reconstruct", str(document), *given, *out]) == 3
        assert f"--points: 1000000 points for {what} are" in capsys.readouterr().err
    assert not (tmp_path / "out.npz").exists()


def test_help_and_version(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--help"]) == 0
    assert "exit codes" in capsys.readouterr().out
    assert main(["--version"]) == 0
    assert re.fullmatch(r"\d+\.\d+\.\d+\S*\n", capsys.readouterr().out)


def _await_listening(serving: subprocess.Popen[bytes], address: str) -> None:
    """Wait until the port takes connections, as long as the process lives."""
    host, _, port = address.partition(":")
    while serving.poll() is None:
        with socket.socket() as probe:
            if probe.connect_ex((host, int(port))) == 0:
                return
        time.sleep(0.05)


def test_served_by_one_command_and_asked_by_another(document: Path) -> None:
    """``serve`` as a process of its own on a free port; ``check`` through the installed entry point."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        address = f"127.0.0.1:{free.getsockname()[1]}"
    program = [sys.executable, "-c", "import sys; from modewright.cli import main; sys.exit(main())"]
    environment = {k: v for k, v in os.environ.items() if not k.startswith("MODEWRIGHT_")}
    serving = subprocess.Popen(
        [*program, "serve", "--listen", address, "--drain-seconds", "0", "--workers", "1", "--metrics", ""],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        env=environment,
    )
    try:
        _await_listening(serving, address)
        asked = subprocess.run(
            [*program, "check", str(document), "--service", address, "--timeout", "30"],
            capture_output=True,
            text=True,
            check=False,
            env=environment,
        )
        assert asked.returncode == 0, asked.stderr
        assert json.loads(asked.stdout)["valid"] is True
    finally:
        serving.send_signal(signal.SIGTERM)
        log, _ = serving.communicate(timeout=60)
    assert serving.returncode == 0, log.decode()
