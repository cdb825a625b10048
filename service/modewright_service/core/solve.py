"""Solve: from a problem to the record of the eigenpairs selected.

Coefficients become polynomials on a mesh (:mod:`.approximation`), the mesh is refined until the highest
lambda is resolved in every layer (:mod:`.mesh`), elements are decomposed once (:mod:`.elements`), eigenvalues
counted and found on the condensed chain (:mod:`.condensed`, :mod:`.spectrum`), modes and flux defects built
(:mod:`.modes`), bounds computed (:mod:`.bounds`). Where a bound's width is the discretisation's fault, the
elements with the largest defects are halved and the step repeated.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import NoReturn

import numpy as np
from numpy.typing import NDArray

from modewright.record import EndInfo, Record
from modewright_service.core.approximation import CoefficientMesh, approximate, restrict
from modewright_service.core.bounds import Bounds, bound
from modewright_service.core.clusters import OpenChain
from modewright_service.core.condensed import Chain, build_chain
from modewright_service.core.digest import ALGORITHM_VERSION, problem_digest, selection_key
from modewright_service.core.elements import build_elements
from modewright_service.core.end_elements import EndMap
from modewright_service.core.end_mesh import comparable_weight, roomy
from modewright_service.core.end_plan import EndPlan, plan_ends
from modewright_service.core.errors import (
    CoreError,
    InvalidProblem,
    InvalidRequest,
    NotConverged,
    Reason,
    SpectrumExhausted,
    Unsupported,
)
from modewright_service.core.mesh import (
    bisect_elements,
    choose_degree,
    fundamental,
    phase_at,
    refine_for,
    top_for_phase,
)
from modewright_service.core.modes import FluxDefect, Modes, flux_defects, interior_zeros, make_modes
from modewright_service.core.problem import EndTerm, Problem, Resolved, resolve, validate
from modewright_service.core.rings import Ring
from modewright_service.core.selection import (
    Below,
    IndexRange,
    Lowest,
    Selection,
    Window,
    check_selection,
)
from modewright_service.core.spectrum import System, eigenvalues, floor_below
from modewright_service.core.unbounded import unbounded_below

__all__ = ["SolveOptions", "solve"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class SolveOptions:
    """How the discretisation is chosen; the defaults serve every tolerance rung.

    degree: of the polynomials on each element, at least 2; 0 chooses it, and the phase, by cost.
    phase: radians of the highest mode that an element may hold.
    max_elements: refinement stops there. passes: halvings after the first solve.
    max_modes: a selection that holds more is refused.
    """

    degree: int = 0
    phase: float = 20.0
    max_elements: int = 20_000
    passes: int = 8
    max_modes: int = 100_000


@dataclass(frozen=True, eq=False)
class _Pass:
    """What one mesh gave; first: the index of the first mode, count: how many were asked for."""

    first: int
    count: int
    mesh: CoefficientMesh
    chain: Chain
    values: Array
    modes: Modes
    defect: FluxDefect
    bounds: Bounds


def _nothing() -> None:
    return None


# The share of the tolerance that the discretisation may use up; rounding and coefficients have the rest.
_SHARE = 0.1
# Lambda beyond this or its inverse leaves no room for the squares and products of a solve.
_SMALLEST_SCALE = 1e-200
_EPS = float(np.finfo(float).eps)


def solve(
    problem: Problem,
    selection: Selection | int,
    rtol: float,
    *,
    options: SolveOptions | None = None,
    poll: Callable[[], None] = _nothing,
) -> Record:
    """The eigenpairs of `problem` that `selection` names (a number: so many of the lowest), none missed, each
    with bounds.

    rtol: width wanted for every pair of bounds, relative to max(|lambda|, Lambda). Where rounding, the
    resolution of the coefficients or the effort allowed do not reach it, the bounds are as wide as they have
    to be, and :attr:`Record.tolerance_met` says so. Bounds that are not finite are an error, not an answer.
    poll is called inside the loops and may raise.

    Raises InvalidProblem, InvalidRequest, Unsupported, SpectrumExhausted, NotConverged, and whatever poll
    raises.
    """
    started = time.perf_counter()
    chosen = options or SolveOptions()
    wish = Lowest(selection) if isinstance(selection, int) else selection
    check_selection(wish)
    validate(problem)
    resolved = resolve(problem)
    plans = plan_ends(problem)
    coefficients = approximate(problem, ends=(plans[0].map, plans[1].map), poll=poll)
    if not coefficients.w.any():
        raise Unsupported.at(
            Reason.UNSUPPORTED_COEFFICIENT,
            "layers",
            "w is zero in every layer: only lumped masses carry lambda, which this version does not solve",
        )
    _check_resolved(coefficients, rtol)
    scale = fundamental(coefficients)
    if not _SMALLEST_SCALE <= scale <= 1.0 / _SMALLEST_SCALE:
        message = "lambda would be of the size of Lambda = (pi / int sqrt(w/p) dx)^2: use other units"
        raise InvalidProblem.at(Reason.BAD_DOMAIN, "layers", message, scale)
    moved, shift = (coefficients, 0.0) if _has_mass(resolved) else _without_offset(coefficients, scale)
    try:
        result = _adapt(moved, resolved, _moved(wish, -shift), rtol, scale, chosen, poll)
    except (np.linalg.LinAlgError, NotConverged) as error:
        fault = unbounded_below(problem, resolved, coefficients)
        if fault is None and isinstance(error, NotConverged):
            raise
        if fault is None:
            e = int(np.argmax(np.abs(coefficients.q).max(axis=1)))
            fault = f"layers[{coefficients.layer[e]}].q", float(coefficients.q[e, 0])
        raise NotConverged.at(
            Reason.NOT_CONVERGED,
            fault[0],
            "too large to be solved with, or too negative where w is zero: no lowest eigenvalue was found",
            fault[1],
        ) from error
    _check_bounds(result, rtol)
    record = _record(problem, resolved, plans, result, wish, rtol, scale, time.perf_counter() - started)
    return record if shift == 0.0 else _moved_back(record, shift, coefficients)


def _without_offset(mesh: CoefficientMesh, scale: float) -> tuple[CoefficientMesh, float]:
    """The mesh with q - c w for q, and c, where q has an offset of more than `scale`; else as it is, and 0.

    Then lambda - c is solved for, with a mesh and bounds that know nothing of the offset. c is the number
    nearest to 0 between the least and the largest q / w, so that |q - c w| is nowhere larger than |q|.
    """
    original, mesh = mesh, roomy(mesh)
    t = np.linspace(-1.0, 1.0, 2 * mesh.q.shape[1] + 1)
    vander = np.polynomial.legendre.legvander(t, mesh.q.shape[1] - 1).T
    weight = comparable_weight(mesh)
    q, w = mesh.q @ vander, weight @ vander
    heavy = w > 0.0
    with np.errstate(over="ignore"):
        ratio = q[heavy] / w[heavy]
    c = float(np.clip(0.0, ratio.min(), ratio.max()))
    if not scale < abs(c) < np.inf:
        return original, 0.0
    rounding = 2.0 * _EPS * (np.abs(mesh.q).sum(axis=1) + abs(c) * np.abs(weight).sum(axis=1))
    error = mesh.q_error + abs(c) * mesh.w_absolute + rounding
    return replace(mesh, q=mesh.q - c * weight, q_error=error), c


def _moved_back(record: Record, c: float, coefficients: CoefficientMesh) -> Record:
    """The record of q from that of q - c w."""
    rounding = _EPS * (np.abs(record.eigenvalues) + abs(c))
    return replace(
        record,
        eigenvalues=record.eigenvalues + c,
        lower=record.lower + c - rounding,
        upper=record.upper + c + rounding,
        q=restrict(coefficients, record.edges).q,
    )


def _has_mass(resolved: Resolved) -> bool:
    """Whether something else than w carries lambda."""
    ends = _has_lump(resolved.left) or _has_lump(resolved.right)
    return ends or any(joint.mass > 0.0 for joint in resolved.joints)


def _asked(selection: Selection) -> str:
    word, numbers = selection.canonical
    return " ".join([word, *(f"{number:.17g}" for number in numbers)])


def _moved(selection: Selection, by: float) -> Selection:
    """The same eigenvalues where every lambda has moved."""
    match selection:
        case Below(limit):
            return Below(limit + by)
        case Window(lower, upper):
            return Window(lower + by, upper + by)
        case _:
            return selection


def _adapt(
    coefficients: CoefficientMesh,
    resolved: Resolved,
    wish: Selection,
    rtol: float,
    scale: float,
    chosen: SolveOptions,
    poll: Callable[[], None],
) -> _Pass:
    """The first mesh, then elements halved where a bound needs it, as often as the options allow."""
    chain, top = _resolve_top(coefficients, resolved, wish, scale, chosen, poll)
    poll()
    result = _one_pass(chain, resolved, wish, top, scale, poll)
    for _ in range(chosen.passes):
        marked = _marked(result, rtol, scale)
        elements = result.mesh.edges.size - 1
        if not marked.any() or elements + int(marked.sum()) > chosen.max_elements:
            break
        degree = result.chain.elements.reference.degree
        chain = build_chain(build_elements(bisect_elements(result.mesh, marked), degree), resolved, poll)
        top = _top_of(chain, wish, top)
        poll()
        result = _one_pass(chain, resolved, wish, top, scale, poll)
    return result


def _system(chain: Chain) -> System:
    return OpenChain(chain) if chain.factor is None else Ring(chain)


def _span(system: System, wish: Selection) -> tuple[int, int]:
    """(first, end): the indices that `wish` names."""
    match wish:
        case Lowest(count):
            return 0, count
        case IndexRange(first, end):
            return first, end
        case Below(limit):
            return 0, int(system.count(np.array([limit]))[0])
        case Window(lower, upper):
            first, end = system.count(np.array([lower, upper]))
            return int(first), int(end)


def _wanted(system: System, wish: Selection) -> int:
    """How many eigenvalues must be resolved."""
    first, end = _span(system, wish)
    return end + _spare(end - first)


def _spare(count: int) -> int:
    """Modes beyond those wanted: the lower bounds need a gap above the last one that a comparison can
    meet.
    """
    return 4 + count // 50


def _resolve_top(
    coefficients: CoefficientMesh,
    resolved: Resolved,
    wish: Selection,
    scale: float,
    chosen: SolveOptions,
    poll: Callable[[], None],
) -> tuple[Chain, float]:
    """A chain that resolves all that `wish` names and some more, and a lambda above these."""
    match wish:
        case Lowest(count):
            modes = count + _spare(count)
        case IndexRange(first, end):
            modes = end + _spare(end - first)
        case Below(limit) | Window(_, limit):
            modes = int(phase_at(coefficients, limit) / np.pi) + _spare(0)
            if modes > 2 * chosen.max_modes:
                raise _too_many(wish, modes, chosen)
    phase = (modes + 1.0) * np.pi
    found = wanted = 0
    floor = -scale
    for _ in range(60):
        poll()
        top = top_for_phase(coefficients, phase, scale)
        # beside a singular end little phase may go very deep; what it binds all the same is looked for below
        bottom = 0.3 if coefficients.end_maps else 1e-6
        low = min(floor, top_for_phase(coefficients, bottom, scale))
        degree, radians = (
            (chosen.degree, chosen.phase) if chosen.degree else choose_degree(coefficients, low, top)
        )
        # unknowns at least half as many again as modes, whatever the phase says
        least = int(np.ceil(1.5 * (modes + 2) / (degree - 1)))
        mesh = refine_for(coefficients, low, top, radians, least, chosen.max_elements)
        chain = build_chain(build_elements(mesh, degree), resolved, poll)
        system = _system(chain)
        bound_below, found = (int(n) for n in system.count(np.array([low, top])))
        if bound_below > 0:
            # what an end or a spring binds below the potential decays faster than the mesh was made for
            floor = floor_below(system, scale)
            continue
        first, end = _span(system, wish)
        if end - first > chosen.max_modes:
            raise _too_many(wish, end - first, chosen)
        wanted = end + _spare(end - first)
        if found >= wanted:
            if end == first:
                raise _empty(wish, first, system, floor, top, scale, poll)
            return chain, top
        phase += (wanted - found + 0.5) * np.pi
    raise NotConverged.at(
        Reason.NOT_CONVERGED,
        "modes",
        f"only {found} eigenvalues were found within the mesh allowed",
        str(wanted),
    )


def _too_many(wish: Selection, found: int, chosen: SolveOptions) -> CoreError:
    word, _ = wish.canonical
    message = f"holds about {found} eigenvalues, at most {chosen.max_modes} are answered"
    return InvalidRequest.at(Reason.TOO_MANY_MODES, word, message, _asked(wish))


def _empty(
    wish: Selection,
    index: int,
    system: System,
    floor: float,
    top: float,
    scale: float,
    poll: Callable[[], None],
) -> CoreError:
    first = max(index - 1, 0)
    near = eigenvalues(
        system, first, index - first + 1, min(floor, floor_below(system, scale)), top, scale, poll
    )
    listed = ", ".join(f"lambda_{first + i} = {value:.9g}" for i, value in enumerate(near.values))
    word, _ = wish.canonical
    return SpectrumExhausted.at(
        Reason.SPECTRUM_EXHAUSTED, word, f"no eigenvalue lies there; the nearest: {listed}", _asked(wish)
    )


def _top_of(chain: Chain, wish: Selection, top: float) -> float:
    """`top`, raised a little where a finer mesh moved the last eigenvalue across it."""
    system = _system(chain)
    wanted = _wanted(system, wish)
    for _ in range(60):
        if int(system.count(np.array([top]))[0]) >= wanted:
            return top
        top += 0.1 * abs(top) + np.finfo(float).tiny
    raise NotConverged.at(Reason.NOT_CONVERGED, "modes", "the spectrum moved under refinement", str(wanted))


def _one_pass(
    chain: Chain,
    resolved: Resolved,
    wish: Selection,
    top: float,
    scale: float,
    poll: Callable[[], None],
) -> _Pass:
    system = _system(chain)
    floor = floor_below(system, scale)
    first, end = _span(system, wish)
    size = end - first + _spare(end - first)
    values = eigenvalues(system, first, size, floor, top, scale, poll).values
    _check_counts(system, first, values)
    poll()
    modes = make_modes(chain, system.vectors(values, scale))
    poll()
    defect = flux_defects(chain, values, modes)
    mesh, degree = chain.elements.mesh, chain.elements.reference.degree
    bounds = bound(values, end - first, defect, mesh, resolved, degree, scale, poll, first)
    return _Pass(first, end - first, mesh, chain, values, modes, defect, bounds)


def _check_counts(system: System, first: int, values: Array) -> None:
    """One count between all neighbours that can be told apart: index n has exactly n eigenvalues below it."""
    gaps = np.diff(values)
    clear = np.flatnonzero(gaps > 1e-12 * (np.abs(values[1:]) + np.abs(values[:-1])))
    if clear.size == 0:
        return
    counts = system.count(0.5 * (values[clear] + values[clear + 1]))
    wrong = np.flatnonzero(counts != first + clear + 1)
    if wrong.size:
        n = first + int(clear[wrong[0]])
        raise NotConverged.at(
            Reason.NOT_CONVERGED,
            "modes",
            f"{int(counts[wrong[0]])} eigenvalues counted below index {n + 1}",
            str(n),
        )


def _check_resolved(mesh: CoefficientMesh, rtol: float) -> None:
    """Raise NotConverged where p or w is so far from its polynomials that no bound could be finite."""
    lengths = np.diff(mesh.edges)
    lost = np.where(mesh.w_error >= 0.5, mesh.w_absolute * lengths, 0.0)
    unresolved = {
        "p": float(mesh.p_error.max()) if not np.isfinite(mesh.p_error).all() else 0.0,
        "w": float(mesh.w_error.max()) if lost.sum() >= 0.5 * (mesh.w[:, 0] * lengths).sum() else 0.0,
    }
    for name, reached in unresolved.items():
        if reached > 0.0:
            errors = {"p": mesh.p_error, "w": mesh.w_error}[name]
            _raise_unresolved(mesh, name, int(np.argmax(errors)), float(errors.max()), rtol)


def _raise_unresolved(mesh: CoefficientMesh, name: str, e: int, reached: float, rtol: float) -> NoReturn:
    message = (
        f"varies too fast to be resolved between x = {float(mesh.edges[e])!r} and "
        f"{float(mesh.edges[e + 1])!r} (relative error {reached:.3g}), so that no eigenvalue has finite "
        "bounds; cut the layer there, smooth the coefficient or give its mean"
    )
    raise NotConverged.at(
        Reason.NOT_CONVERGED,
        f"layers[{int(mesh.layer[e])}].{name}",
        message,
        reached,
        reached="inf",
        wanted=repr(rtol),
        mode="0",
    )


def _check_bounds(result: _Pass, rtol: float) -> None:
    """Raise NotConverged where an eigenvalue has no finite bounds."""
    bounds, mesh = result.bounds, result.mesh
    missing = np.flatnonzero(~(np.isfinite(bounds.lower) & np.isfinite(bounds.upper)))
    if missing.size == 0:
        return
    n = int(missing[0])
    if not np.isfinite(bounds.rounding[n]):
        worst = max((("p", mesh.p_error), ("w", mesh.w_error)), key=lambda pair: float(pair[1].max()))
        _raise_unresolved(mesh, worst[0], int(np.argmax(worst[1])), float(worst[1].max()), rtol)
    message = (
        f"mode {n}, found near {float(result.values[n])!r}, has no finite lower bound: no comparison "
        "problem confirms its index; cut layers where coefficients vary fast, or ask for fewer modes"
    )
    raise NotConverged.at(
        Reason.NOT_CONVERGED,
        "modes",
        message,
        str(n),
        reached="inf",
        wanted=repr(rtol),
        mode=str(n),
    )


def _marked(result: _Pass, rtol: float, scale: float) -> NDArray[np.bool_]:
    """Elements whose flux defects keep some eigenvalue from the tolerance."""
    count = result.count
    size = np.maximum(np.abs(result.values[:count]), scale)
    shares = result.defect.by_element[:count]
    # int d^2 / p estimates the error of a Ritz value closely, whether or not a comparison bounds it
    short = np.flatnonzero(shares.sum(axis=1) > _SHARE * rtol * size)
    # where the bound itself is wider than that estimate, a smaller defect narrows it too
    bounds = result.bounds
    wide = bounds.confirmed & (bounds.defect > 0.5 * rtol * size)
    wide &= shares.sum(axis=1) > 1e-3 * rtol * size
    short = np.union1d(short, np.flatnonzero(wide))
    marked = np.zeros(shares.shape[1], dtype=bool)
    if short.size:
        # a mode's worst elements, down to a tenth of the worst: the rest would not be seen
        part = shares[short]
        marked |= (part > 0.1 * part.max(axis=1, keepdims=True)).any(axis=0)
    return marked


def _record(
    problem: Problem,
    resolved: Resolved,
    plans: tuple[EndPlan, EndPlan],
    result: _Pass,
    wish: Selection,
    rtol: float,
    scale: float,
    seconds: float,
) -> Record:
    count = result.count
    chain, modes, mesh, bounds = result.chain, result.modes, result.mesh, result.bounds
    legendre = modes.legendre(chain.elements)
    zeros = interior_zeros(chain, modes, legendre)[:count]
    digest = problem_digest(problem)
    none = np.zeros(0)
    apart = bounds.lower[1:] > bounds.upper[:-1]
    return Record(
        algorithm_version=ALGORITHM_VERSION,
        problem_digest=digest,
        basis_key=selection_key(digest, wish, rtol),
        rtol=rtol,
        eigenvalues=result.values[:count],
        lower=bounds.lower,
        upper=bounds.upper,
        zeros=zeros,
        groups=np.concatenate([[0], np.cumsum(apart)]).astype(np.int64),
        confirmed=bounds.confirmed.astype(np.uint8),
        scale=scale,
        geometry=problem.geometry.power,
        layer_names=tuple(layer.name for layer in problem.layers),
        edges=mesh.edges,
        layer=mesh.layer.astype(np.int32),
        degrees=np.full(mesh.edges.size - 1, chain.elements.reference.degree, dtype=np.int32),
        coefficients=legendre[:count],
        p=mesh.p,
        q=mesh.q,
        w=mesh.w,
        left=_end_info(resolved.left, plans[0]),
        right=_end_info(resolved.right, plans[1]),
        left_lump=modes.nodes[0, :count] if _has_lump(resolved.left) else none,
        right_lump=modes.nodes[-1, :count] if _has_lump(resolved.right) else none,
        joints=np.array(
            [[joint.x, joint.resistance, joint.spring, joint.mass] for joint in resolved.joints],
            dtype=np.float64,
        ).reshape(-1, 4),
        left_map=_exponents(mesh.left_map),
        right_map=_exponents(mesh.right_map),
        first_index=result.first,
        solve_seconds=seconds,
    )


def _exponents(end: EndMap | None) -> Array:
    return np.array([] if end is None else [end.m, end.s, end.alpha, end.q_exponent, end.gamma])


def _has_lump(end: EndTerm) -> bool:
    return end.lump is not None or end.mass > 0.0


def _end_info(end: EndTerm, plan: EndPlan) -> EndInfo:
    mass, film, resistance = end.lump or (end.mass, end.stiffness if end.mass > 0.0 else 0.0, 0.0)
    return EndInfo(
        kind=end.kind,
        stiffness=0.0 if end.lump else end.stiffness,
        mass=mass,
        resistance=resistance,
        film=film,
        classification=plan.classification,
    )
