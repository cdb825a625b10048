"""Keys: golden values in two processes, what makes a difference and what must not."""

import itertools
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

from modewright_service.core.digest import (
    ALGORITHM_VERSION,
    basis_key,
    canonical_bytes,
    problem_digest,
    rtol_rung,
    rung,
)
from modewright_service.core.errors import InvalidProblem, InvalidRequest, Reason
from modewright_service.core.problem import (
    Constant,
    Expression,
    Film,
    Geometry,
    Interface,
    Interpolation,
    Layer,
    Lump,
    Neumann,
    Problem,
    Robin,
    Samples,
)

# The same text runs here and in a fresh interpreter.
BUILD = """
import numpy as np
from modewright_service.core.problem import *

plain = Problem((Layer("rod", 0.0, 1.0),))
wall = Problem(
    (
        Layer("steel", 0.1, 0.105, Constant(50.0), w=Constant(3.7e6)),
        Layer("foam", 0.105, 0.16, Samples(np.array([0.105, 0.13, 0.16]), np.array([0.025, 0.026, 0.03])),
              Expression("1e-3*exp(-x / 0.01)"), Constant(6e4)),
    ),
    left=Lump(2.1e5, 0.0, 0.002),
    right=Film(12.5),
    interfaces=(Interface(0.105, resistance=1e-4),),
    geometry=Geometry.CYLINDRICAL,
)
"""
GOLDEN = {
    "plain": "2a719bb6a1d73312c1a5332d3e8129e7daaa2a6fcc06f314da8980620d39b825",
    "wall": "ee0c9e46ef8d74e6d84e5997bc07b78b8fbb7432a1fb2c8c7bdfd8496689843a",
}
GOLDEN_KEY = "5bc4ef37d93f2c2e9e39ae11b0c9c39a96dde37e513063aa37de9086431e0472"
space: dict[str, Problem] = {}
exec(BUILD, space)  # noqa: S102 - our own text, above
PLAIN, WALL = space["plain"], space["wall"]


def test_golden_values() -> None:
    assert {"plain": problem_digest(PLAIN), "wall": problem_digest(WALL)} == GOLDEN
    assert basis_key(GOLDEN["wall"], 24, 1e-9) == GOLDEN_KEY
    assert ALGORITHM_VERSION == "1"


def test_golden_values_in_another_process() -> None:
    script = BUILD + (
        "from modewright_service.core.digest import basis_key, problem_digest\n"
        "print(problem_digest(plain), problem_digest(wall), basis_key(problem_digest(wall), 24, 1e-9))\n"
    )
    command = [sys.executable, "-c", script]
    answer = subprocess.run(command, capture_output=True, text=True, check=True, timeout=120)
    assert answer.stdout.split() == [*GOLDEN.values(), GOLDEN_KEY]


def with_q(text: str) -> Problem:
    return Problem((Layer("", 0.0, 1.0, q=Expression(text)),))


@pytest.mark.parametrize(
    ("first", "second"),
    [
        ("1+2*x", " 1 +\t( 2 * (x) ) "),
        ("100*x", "1e2*x"),
        ("0.5*x", ".50*x"),
        ("-x", "-(x)"),
        ("2*pi*x", "2*3.141592653589793*x"),
    ],
)
def test_spelling_makes_no_difference(first: str, second: str) -> None:
    assert problem_digest(with_q(first)) == problem_digest(with_q(second))


@pytest.mark.parametrize(
    ("first", "second"),
    [("1+x", "x+1"), ("x*2", "2*x"), ("x-1", "1-x"), ("x**2", "x*x"), ("where(x<1,0,1)", "where(x<=1,0,1)")],
)
def test_another_expression_is_another_problem(first: str, second: str) -> None:
    assert problem_digest(with_q(first)) != problem_digest(with_q(second))


def test_a_number_is_a_number_however_given() -> None:
    number = Problem((Layer("", 0.0, 1.0, q=Constant(2.0)),))
    assert problem_digest(with_q("(2.0)")) == problem_digest(number)


def test_minus_zero_is_zero() -> None:
    plus, minus = (Problem((Layer("", zero, 1.0, q=Constant(zero)),)) for zero in (0.0, -0.0))
    assert canonical_bytes(plus) == canonical_bytes(minus)


def test_ends_enter_as_resolved() -> None:
    film = Problem((Layer("", 0.0, 1.0),), right=Film(2.0))
    assert canonical_bytes(film) == canonical_bytes(replace(film, right=Film(2)))
    scaled = [replace(film, right=Robin(a, b)) for a, b in ((2.0, 1.0), (4.0, 2.0), (-2.0, -1.0))]
    assert len({problem_digest(problem) for problem in scaled}) == 1


CHANGES = [
    {"left": Neumann()},
    {"right": Film(12.6)},
    {"left": Lump(2.1e5, 0.0, 0.0021)},
    {"geometry": Geometry.SPHERICAL},
    {"interfaces": ()},
    {"interfaces": (Interface(0.105, spring=1e-4),)},
    {"layers": (WALL.layers[0], replace(WALL.layers[1], name="wool"))},
    {"layers": (WALL.layers[0], replace(WALL.layers[1], reciprocal_p=True))},
    {"layers": (WALL.layers[0], replace(WALL.layers[1], end=np.nextafter(0.16, 1.0)))},
    {
        "layers": (
            WALL.layers[0],
            replace(
                WALL.layers[1],
                p=Samples(
                    np.array([0.105, 0.13, 0.16]), np.array([0.025, 0.026, 0.03]), Interpolation.STEP_LEFT
                ),
            ),
        )
    },
]


def test_every_change_changes_the_digest() -> None:
    found = [problem_digest(WALL), *(problem_digest(replace(WALL, **change)) for change in CHANGES)]
    assert len(set(found)) == len(found)


def test_nan_is_refused() -> None:
    with pytest.raises(InvalidProblem) as caught:
        problem_digest(Problem((Layer("", 0.0, 1.0, q=Constant(float("nan"))),)))
    assert caught.value.reason is Reason.NOT_FINITE


def test_rungs_are_a_ladder() -> None:
    ladder = sorted({rung(n) for n in range(1, 3000)})
    assert ladder[:9] == [8, 12, 16, 24, 32, 48, 64, 96, 128]
    assert all(rung(step) == step for step in ladder)
    assert all(b / a <= 1.5 for a, b in itertools.pairwise(ladder))
    assert all(rung(n) >= n for n in range(1, 3000))


@pytest.mark.parametrize(
    ("rtol", "expected"),
    [(0.1, 1e-6), (1e-6, 1e-6), (9e-7, 1e-9), (1e-9, 1e-9), (1e-10, 1e-12), (1e-12, 1e-12)],
)
def test_tolerances_round_to_the_tighter_rung(rtol: float, expected: float) -> None:
    assert rtol_rung(rtol) == expected


@pytest.mark.parametrize("rtol", [0.0, -1e-9, 1e-13, 1.0, float("nan"), float("inf")])
def test_bad_tolerances(rtol: float) -> None:
    with pytest.raises(InvalidRequest) as caught:
        rtol_rung(rtol)
    assert caught.value.reason is Reason.BAD_TOLERANCE


@pytest.mark.parametrize("modes", [0, -3])
def test_bad_counts(modes: int) -> None:
    with pytest.raises(InvalidRequest):
        rung(modes)


def test_keys_depend_on_all_their_parts() -> None:
    digest, other = problem_digest(PLAIN), problem_digest(WALL)
    keys = {basis_key(d, n, r) for d, n, r in itertools.product((digest, other), (8, 12), (1e-6, 1e-9))}
    assert len(keys) == 8
