"""The client's whole job through either service."""

from __future__ import annotations

import pickle
from typing import Any

import numpy as np
import pytest

import modewright

# -u'' = lambda u with u = 0 at both ends of (0, 1): lambda_n = (n+1)^2 pi^2, phi_n = sqrt(2) sin((n+1) pi x)
# (separation of variables; any text on partial differential equations).
STRING = modewright.Problem.layered(
    modewright.Layer(0, 1), left=modewright.Dirichlet(), right=modewright.Dirichlet(), name="string"
)
# A rod fixed at the left with a mass m at its right end: u = sin(k x), u'(1) = lambda m u(1) and lambda = k^2
# give tan(k) = 1 / (m k).
TIP = modewright.Problem.layered(
    modewright.Layer(0, 1), left=modewright.Dirichlet(), right=modewright.Lump(0.7)
)
N = np.arange(1, 13)
X = np.linspace(0.0, 1.0, 301)


def sine(n: Any, x: Any) -> Any:
    return np.sqrt(2) * np.sin(np.pi * np.multiply.outer(n, x))


@pytest.fixture(scope="module")
def string(either: modewright.Service) -> modewright.Basis:
    return either.solve(STRING, modes=12)


# ---- solving ----


def test_eigenvalues_bounds_and_what_is_said_about_them(string: modewright.Basis) -> None:
    exact = (N * np.pi) ** 2
    assert string.count == 12
    np.testing.assert_allclose(string.eigenvalues, exact, rtol=1e-9)
    assert (string.lower <= exact).all()
    assert (exact <= string.upper).all()
    assert string.zeros.tolist() == list(range(12))
    assert len(set(string.groups.tolist())) == 12
    assert string.scale == pytest.approx(np.pi**2, rel=1e-12)
    assert string.rtol == 1e-9
    assert (string.ends.left.kind, string.ends.right.kind) == ("dirichlet", "dirichlet")
    assert string.ends.left.classification == "regular"


def test_fewer_modes_come_from_the_same_basis_without_a_solve(
    either: modewright.Service,
) -> None:
    # Of a length that no other test has: the service is shared, and any basis with enough modes may answer.
    string = modewright.Problem.layered(
        modewright.Layer(0.0, 1.0625), left=modewright.Dirichlet(), right=modewright.Dirichlet()
    )
    more = either.solve(string, modes=12)
    fewer = either.solve(string, modes=5)
    assert fewer.answered_from_cache
    assert fewer.key == more.key
    assert fewer.eigenvalues.tolist() == more.eigenvalues[:5].tolist()
    assert fewer.server_solve_count == more.server_solve_count


def test_a_document_is_as_good_as_a_problem(either: modewright.Service, string: modewright.Basis) -> None:
    assert either.solve(STRING.to_dict(), modes=12).key == string.key


def test_progress_ends_in_the_same_answer(either: modewright.Service) -> None:
    stretched = modewright.Problem.layered(
        modewright.Layer(0, 3.5, p="1+x**2"), left=modewright.Neumann(), right=modewright.Film(2.0)
    )
    seen: list[modewright.Progress] = []
    watched = either.solve(stretched, modes=6, progress=seen.append)
    assert watched.eigenvalues.tolist() == either.solve(stretched, modes=6).eigenvalues.tolist()
    assert {report.stage for report in seen} <= {"starting", "queued", "computing"}


def test_check_solves_nothing(either: modewright.Service, string: modewright.Basis) -> None:
    fresh = modewright.Problem.layered(
        modewright.Layer(0, 1.25), left=modewright.Dirichlet(), right=modewright.Neumann()
    )
    before = either.solve(STRING, modes=2).server_solve_count
    checked = either.check(fresh, modes=20)
    assert not checked.cached
    assert (checked.modes, checked.rung >= 20, checked.rtol) == (20, True, 1e-9)
    assert checked.scale == pytest.approx((np.pi / 1.25) ** 2, rel=1e-12)
    assert (checked.ends.left.kind, checked.ends.right.kind) == ("dirichlet", "neumann")
    assert either.solve(STRING, modes=2).server_solve_count == before
    assert either.check(STRING, modes=12).cached
    assert either.check(STRING, modes=12).basis_key == string.key


# ---- modes ----


@pytest.mark.parametrize("shape", [(), (7,), (3, 4)])
def test_modes_have_the_shape_of_the_points(string: modewright.Basis, shape: tuple[int, ...]) -> None:
    points = np.linspace(0.05, 0.95, int(np.prod(shape))).reshape(shape)
    phi = string.modes(points)
    assert phi.shape == (12, *shape)
    np.testing.assert_allclose(phi, sine(N, points), rtol=0, atol=1e-10)


def test_derivatives_and_fluxes(string: modewright.Basis) -> None:
    slope = np.sqrt(2) * np.pi * N[:, None] * np.cos(np.pi * np.multiply.outer(N, X))
    np.testing.assert_allclose(string.modes(X, quantity="derivative"), slope, rtol=0, atol=1e-8)
    np.testing.assert_allclose(string.modes(X, quantity="flux"), slope, rtol=0, atol=1e-8)
    np.testing.assert_allclose(string.modes(X, quantity="flux-density"), -slope, rtol=0, atol=1e-8)


# ---- projecting and reconstructing ----

# f = sum a_n phi_n with these a_n.
WEIGHTS = np.array([1.0, -0.5, 0.25, 0.0, 2.0])
FIELD = WEIGHTS @ sine(N[:5], X)


@pytest.mark.parametrize("shape", [(), (4,), (2, 3), (2, 0), (2, 3, 2)])
@pytest.mark.parametrize("axis", [-1, 0, 1])
def test_any_rank_and_any_axis(string: modewright.Basis, shape: tuple[int, ...], axis: int) -> None:
    if axis > len(shape):
        axis = 0
    factors = np.arange(1.0, 1.0 + np.prod(shape)).reshape(shape)
    fields = np.moveaxis(factors[..., None] * FIELD, -1, axis)
    c = string.project(fields, x=X, axis=axis)
    assert c.shape == (*shape, 12)
    expected = np.zeros((*shape, 12))
    expected[..., :5] = factors[..., None] * WEIGHTS
    # The spline through 301 points of a field whose fifth mode has 2.5 waves.
    np.testing.assert_allclose(c, expected, rtol=0, atol=3e-5)
    back = string.reconstruct(np.moveaxis(c, -1, axis), X, axis=axis)
    np.testing.assert_allclose(back, factors[..., None] * FIELD, rtol=0, atol=3e-4)


@pytest.mark.parametrize(
    ("dtype", "result"),
    [("float32", "f"), (">f8", "f"), ("int32", "f"), ("complex64", "c"), (">c16", "c")],
)
def test_types_of_fields(string: modewright.Basis, dtype: str, result: str) -> None:
    values = (1000 * FIELD).astype(dtype)
    reference = string.project(values.astype("complex128").real, x=X)
    c = string.project(values, x=X)
    assert c.dtype.kind == result
    np.testing.assert_allclose(c, reference, rtol=0, atol=1e-4)
    assert string.reconstruct(c, 0.3).dtype.kind == result


def test_complex_fields_keep_their_parts(string: modewright.Basis) -> None:
    c = string.project(FIELD * (1 - 2j), x=X)
    np.testing.assert_allclose(c, string.project(FIELD, x=X) * (1 - 2j), rtol=0, atol=1e-13)


def test_views_and_orders_of_memory(string: modewright.Basis) -> None:
    fields = np.asfortranarray(np.outer([1.0, 2.0, 3.0], FIELD))
    plain = string.project(np.ascontiguousarray(fields), x=X)
    # A matrix product rounds a row differently at another place of the batch.
    np.testing.assert_allclose(string.project(fields, x=X), plain, rtol=0, atol=1e-13)
    np.testing.assert_allclose(string.project(fields[::-1], x=X), plain[::-1], rtol=0, atol=1e-13)


def test_an_expression(string: modewright.Basis) -> None:
    # int_0^1 x (1-x) sqrt(2) sin(n pi x) dx = 4 sqrt(2) / (n pi)^3 for odd n, else 0 (integration by parts).
    result = string.project("x*(1-x)", details=True)
    expected = np.where(N % 2 == 1, 4 * np.sqrt(2) / (N * np.pi) ** 3, 0.0)
    np.testing.assert_allclose(result.coefficients, expected, rtol=0, atol=1e-11)
    # int_0^1 x^2 (1-x)^2 dx = 1/30.
    assert result.norm == pytest.approx(np.sqrt(1 / 30), rel=1e-10)
    assert result.captured == pytest.approx(30 * (expected**2).sum(), rel=1e-10)
    assert result.residual == pytest.approx(np.sqrt(1 / 30 - (expected**2).sum()), rel=1e-6)
    assert result.key == string.key


@pytest.mark.parametrize("interpolation", ["conservative", "constant"])
def test_cell_averages(string: modewright.Basis, interpolation: str) -> None:
    edges = np.linspace(0, 1, 501) ** 1.3
    # Averages of x (1-x) from its integral x^2/2 - x^3/3.
    averages = np.diff(edges**2 / 2 - edges**3 / 3) / np.diff(edges)
    c = string.project([averages, -averages], edges=edges, measure="length", interpolation=interpolation)
    expected = np.where(N % 2 == 1, 4 * np.sqrt(2) / (N * np.pi) ** 3, 0.0)
    # Constant in a cell of width h <= 0.0026: an error of (n pi h)^2 / 24 of each coefficient at most.
    np.testing.assert_allclose(
        c, [expected, -expected], rtol=0, atol=1e-4 if interpolation == "constant" else 1e-8
    )


@pytest.mark.parametrize("points", [0.3, [0.3], [0.9, 0.1, 0.1], []])
def test_points_of_a_reconstruction(string: modewright.Basis, points: Any) -> None:
    got = string.reconstruct(np.eye(5), points)
    assert got.shape == (5, *np.shape(points))
    np.testing.assert_allclose(got, sine(N[:5], points), rtol=0, atol=1e-10)


def test_reconstructed_fluxes(string: modewright.Basis) -> None:
    # d/dx of FIELD.
    slope = (WEIGHTS * np.pi * N[:5]) @ (np.sqrt(2) * np.cos(np.pi * np.multiply.outer(N[:5], X)))
    for quantity, sign in (("derivative", 1), ("flux", 1), ("flux-density", -1)):
        got = string.reconstruct(WEIGHTS, X, quantity=quantity)
        np.testing.assert_allclose(got, sign * slope, rtol=0, atol=1e-8)


def test_a_large_batch_goes_in_several_calls(string: modewright.Basis) -> None:
    factors = np.random.default_rng(7).normal(size=(40, 50))
    fields = factors[..., None] * FIELD
    c = string.project(fields, x=X, details=True)
    assert c.coefficients.shape == (40, 50, 12)
    assert c.captured.shape == c.residual.shape == c.norm.shape == (40, 50)
    np.testing.assert_allclose(c.coefficients[..., :5], factors[..., None] * WEIGHTS, rtol=0, atol=3e-4)
    np.testing.assert_allclose(c.captured, 1.0, rtol=0, atol=1e-9)
    np.testing.assert_allclose(string.reconstruct(c.coefficients, X), fields, rtol=0, atol=3e-3)


def test_one_field_at_very_many_points(string: modewright.Basis) -> None:
    x = np.linspace(0, 1, 300_001)
    np.testing.assert_allclose(string.reconstruct(WEIGHTS, x), WEIGHTS @ sine(N[:5], x), rtol=0, atol=1e-9)


def test_a_lump_s_own_value_counts(either: modewright.Service) -> None:
    basis = either.solve(TIP, modes=8)
    k = np.sqrt(basis.eigenvalues)
    np.testing.assert_allclose(np.tan(k) * 0.7 * k, 1.0, rtol=1e-7)
    fields = np.outer([1.0, 2.0], X)
    guessed = basis.project(fields, x=X, details=True)
    assert guessed.lumps_extrapolated == (False, True)
    given = basis.project(fields, x=X, right_lump=[1.0, 2.0], details=True)
    assert given.lumps_extrapolated == (False, False)
    np.testing.assert_allclose(given.coefficients, guessed.coefficients, rtol=0, atol=1e-12)
    # <x, x> = 1/3 + m.
    np.testing.assert_allclose(given.norm**2, (1 / 3 + 0.7) * np.array([1.0, 4.0]), rtol=1e-9)
    other = basis.project(fields, x=X, right_lump=[0.0, 0.0], details=True)
    np.testing.assert_allclose(other.norm**2, np.array([1.0, 4.0]) / 3, rtol=1e-9)
    with pytest.raises(modewright.InvalidRequest, match="left_lump"):
        basis.project(fields, x=X, left_lump=1.0)


# ---- refusals ----


@pytest.mark.parametrize(
    ("call", "kind", "field"),
    [
        (lambda b: b.project(FIELD, x=X * 1.1), modewright.InvalidRequest, "x["),
        (lambda b: b.project(FIELD, x=X[::-1]), modewright.InvalidRequest, "x["),
        (lambda b: b.project(FIELD[:-1], edges=X, measure="spherical"), None, ""),
        (lambda b: b.project("exp(-y)"), modewright.InvalidRequest, "expression"),
        (lambda b: b.project(FIELD[:-1], edges=X * 2), modewright.InvalidRequest, "edges"),
        (lambda b: b.reconstruct(WEIGHTS, [0.5, 2.0]), modewright.InvalidRequest, "x[1]"),
        (lambda b: b.service.solve(STRING, modes=10**9), modewright.InvalidRequest, "modes"),
        (lambda b: b.service.solve(STRING, modes=3, rtol=0.5), modewright.InvalidRequest, "rtol"),
        (
            lambda b: b.service.solve(
                {**STRING.to_dict(), "layers": [{"start": 0, "end": 1, "w": -2.0}]}, modes=3
            ),
            modewright.InvalidProblem,
            "layers[0].w",
        ),
    ],
)
def test_refusals_name_the_caller_s_own_argument(
    string: modewright.Basis, call: Any, kind: type[modewright.ModewrightError] | None, field: str
) -> None:
    if kind is None:
        assert call(string).shape == (12,)
        return
    with pytest.raises(kind) as caught:
        call(string)
    assert caught.value.violations[0].field.startswith(field)
    assert caught.value.reason
    again = pickle.loads(pickle.dumps(caught.value))
    assert str(again) == str(caught.value)


def test_a_stack_s_fault_is_named_in_its_own_words(either: modewright.Service) -> None:
    stack = modewright.Stack.of(
        modewright.StackLayer(0.1, 1.0, 1.0),
        modewright.StackLayer(0.1, -0.5, 1.0),
        inner=modewright.Neumann(),
        outer=modewright.Film(-2.0),
    )
    with pytest.raises(modewright.InvalidProblem) as caught:
        either.solve(stack, modes=3)
    fields = {violation.field for violation in caught.value.violations}
    assert fields == {"stack.layers[1].conductivity", "stack.outer.film"}


def test_a_deadline_is_kept(either: modewright.Service) -> None:
    heavy = modewright.Problem.layered(
        modewright.Layer(0, 1, p="1+0.5*sin(300*x)"),
        left=modewright.Dirichlet(),
        right=modewright.Dirichlet(),
    )
    with pytest.raises(modewright.DeadlineExceeded):
        either.solve(heavy, modes=1500, timeout=0.05)
    # The service is free again for others.
    assert either.solve(STRING, modes=3).count == 3


# ---- both alike ----


def test_equal_keys_mean_equal_bytes(service: modewright.Service, remote: modewright.Service) -> None:
    for problem in (STRING, TIP):
        here, there = service.solve(problem, modes=9), remote.solve(problem, modes=9)
        assert here.key == there.key
        assert here.eigenvalues.tolist() == there.eigenvalues.tolist()
        assert here.record().to_bytes() == there.record().to_bytes()


def test_a_basis_solved_by_one_is_recomputed_by_the_other(
    service: modewright.Service, remote: modewright.Service
) -> None:
    problem = modewright.Problem.layered(
        modewright.Layer(0, 0.77, w="1+x"), left=modewright.Dirichlet(), right=modewright.Neumann()
    )
    here = service.solve(problem, modes=5)
    moved = modewright.Basis.__new__(modewright.Basis)
    moved.__dict__.update({**here.__dict__, "_service": remote, "_record": None})
    np.testing.assert_allclose(moved.project("x"), here.project("x"), rtol=0, atol=1e-14)
    assert moved.record().to_bytes() == here.record().to_bytes()
