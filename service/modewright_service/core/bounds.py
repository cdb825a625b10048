"""A lower and an upper bound for every eigenvalue.

Upper: the discrete eigenvalues are Rayleigh-Ritz values. Lower: the theorem of Lehmann and Goerisch (Goerisch
and Haunhorst, Z. angew. Math. Mech. 65, 1985, 129-135) with the rebuilt fluxes of :mod:`.modes`. For Ritz
values rho_i = lambda_i + s of a positive form, the Gram matrix G_ij = int d_i d_j / p of their flux defects
and a number nu <= lambda_m + s above rho_{m-1}, the block i..m-1 gives

    lambda_i + s >= nu / (1 + z),  z the largest eigenvalue of
    diag((nu - rho) / rho) + nu^2 G_ij / (theta rho_i rho_j sqrt((nu - rho_i)(nu - rho_j))).

nu comes from exact counts of the comparison problem (:mod:`.comparison`). Where the form without a part theta
of int p u'^2 is still non-negative, only that part carries the defect: theta = 1 for q >= 0 and dissipative
ends, else 0.8 with s raised until it holds. Added to both bounds: the effect of replacing p, q, w by
polynomials, and rounding. The bounds are computed in floating point, not with interval arithmetic.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.approximation import CoefficientMesh, Ranges, ranges
from modewright_service.core.comparison import Comparison, build_comparison
from modewright_service.core.condensed import Field
from modewright_service.core.end_comparison import end_variation
from modewright_service.core.end_elements import EndMap
from modewright_service.core.end_mesh import graded, inner_springs
from modewright_service.core.modes import FluxDefect
from modewright_service.core.problem import Resolved

__all__ = ["Bounds", "bound", "coefficient_terms"]

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

_EPS = float(np.finfo(float).eps)
# Largest block; more members sharpen the bound only inside clusters.
_BLOCK = 6
# Where in the gap between two Ritz values nu is tried.
_FRACTIONS = (0.3, 0.6, 0.9)
# Pieces of the comparison problem: the first try and the most.
_FIRST_PIECES = 64
_MOST_PIECES = 24_000
# Trials beyond which the finer comparisons look at a part of them only.
_MANY = 600
# Share of int p u'^2 that carries the defect where the rest of the form could be negative.
_PART = 0.8
# A cost that is never the least, and that a factor of 0 still makes 0.
_NEVER = 1e300


@dataclass(frozen=True, eq=False)
class Bounds:
    """lower, upper, defect, rounding: (N,); confirmed: (N,) whether nu came from the comparison's exact
    count.

    defect: the discretisation's share of the width. rounding: rounding's and the coefficients' share.
    """

    lower: Array
    upper: Array
    confirmed: NDArray[np.bool_]
    defect: Array
    rounding: Array


def coefficient_terms(mesh: CoefficientMesh, resolved: Resolved, lam: Array, found: Array) -> Array:
    """(T,) how far lambda may move when the polynomials on `mesh` are replaced by p, q, w as written.

    found: (T,) the energies of the modes (:class:`.modes.FluxDefect`).

    With relative errors d_p and d_w, (d_p / (1 - d_p) + d_w) (|lambda| + depth), depth = max(-q / w) bounding
    the p-energy by lambda + depth, or what was found where negative springs add to it. Where they are large
    on short elements only (at the branch point of a square root), integrals serve better: w off by d acts
    through int |d| u^2 <= int |d| dx sup u^2 with sup u^2 <= 2 / int w + 2 int 1/p (lambda + depth) for a
    normalised u (its w-mean plus the energy of the way from there), and p through int d_p / p dx sup
    (p u')^2, where p u' is bounded by its mean, from the energy, plus the integral of |q - lambda w| |u| and
    what lumps and springs add. q off by d acts by max(d / w) or by int |d| dx sup u^2, whichever is less.
    Infinite where nothing is known.
    """
    t, weight = np.polynomial.legendre.leggauss(8)
    vander = np.polynomial.legendre.legvander(t, mesh.p.shape[1] - 1).T
    lengths = np.diff(mesh.edges)
    # end elements have terms of their own below
    plain = mesh.plain
    lengths = np.where(plain, lengths, 0.0)
    dx = 0.5 * lengths[:, None] * weight
    total_w = float(((mesh.w @ vander) * dx).sum())
    paths = (dx / (mesh.p @ vander)).sum(axis=1)
    path = float(paths.sum())
    part = ranges(mesh, 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        depths = np.where(plain & (part.q_lower < 0.0), -part.q_lower / part.w_lower, 0.0)
        direct = np.where(plain & (mesh.q_error > 0.0), mesh.q_error / part.w_lower, 0.0)
    depth = float(depths.max())
    if not np.isfinite(depth):
        # w vanishes where q < 0: the deepest q against the mean weight stands in
        depth = float(-part.q_lower[plain].min()) * float(lengths.sum()) / total_w
    if mesh.end_maps:
        # w may vanish faster than q beside an end: the integral of q against the mean weight, as above
        sunk = float((np.minimum(mesh.q @ vander, 0.0) * dx).sum())
        depth = min(depth, -2.0 * sunk / total_w)
    for element, end in mesh.end_maps:
        depth = max(depth, _end_depth(mesh, part, element, end, total_w))
    energy = np.maximum(np.abs(lam) + depth, np.maximum.accumulate(found))
    peak = 2.0 / total_w + 2.0 * path * energy
    flux = _largest_flux(
        resolved, lam, energy, peak, path, total_w, float(np.abs(mesh.q @ vander * dx).sum())
    )
    # on end elements the relative errors serve: no integral is known there
    p_integral = np.where(plain, mesh.p_error * paths, _NEVER)
    w_integral = np.where(plain, mesh.w_absolute * lengths, _NEVER)
    p_term = _relative_or_integral(mesh.p_error, p_integral, energy, flux)
    w_term = _relative_or_integral(mesh.w_error, w_integral, energy, np.abs(lam) * peak)
    q_term = np.minimum(2.0 * float(direct.max()), float((mesh.q_error * lengths).sum()) * peak)
    if mesh.end_maps:
        # where q > 0, as steeply as beside a singular end, int q u^2 is part of the energy
        positive = plain & (part.q_lower > 2.0 * mesh.q_error)
        share = float((mesh.q_error[positive] / part.q_lower[positive]).max(initial=0.0))
        rest = float((mesh.q_error * lengths)[~positive].sum()) * peak
        others = np.minimum(2.0 * float(direct[~positive].max(initial=0.0)), rest)
        q_term = np.minimum(q_term, 2.0 * share * energy + others)
    result: Array = p_term + w_term + q_term
    for element, end in mesh.end_maps:
        result += _end_term(mesh, part, element, end, energy, peak)
    return result


def _end_depth(mesh: CoefficientMesh, part: Ranges, element: int, end: EndMap, total_w: float) -> float:
    """max(-r / w) on an end element; where r is more singular than w, beyond the distance within which half
    of the p-energy outweighs it (the inequality of :func:`_end_term`).
    """
    below = -float(part.q_lower[element])
    if below <= 0.0:
        return 0.0
    ratio = below / float(part.w_lower[element])
    scale = float(mesh.edges[element + 1] - mesh.edges[element]) * end.m
    first = end.power + 1.0
    if 8.0 * scale**2 * below < float(part.p_lower[element]) * first**2:
        # half of the p-energy outweighs all of it, but for a part of the square at the inner node
        ratio = min(ratio, 8.0 * scale * below / (first * total_w))
    if end.w_steps == 0:
        return ratio
    near = min(1.0, float(part.p_lower[element]) * (end.power + 1.0) ** 2 / (8.0 * scale**2 * below))
    return 2.0 * ratio * near ** (-end.w_steps)


def _end_term(
    mesh: CoefficientMesh, part: Ranges, element: int, end: EndMap, energy: Array, peak: Array
) -> Array:
    """(T,) int |r - r~| u^2 at most, by Hardy's inequality: with b = m D + f,

    int t^b v^2 dt <= 2 v(1)^2 / (b + 1) + 4 / (b + 1)^2 int t^(b+1) v_t^2 dt.
    """
    scale = float(mesh.edges[element + 1] - mesh.edges[element]) * end.m
    first = end.power + 1.0
    p_energy = energy * scale / float(part.p_lower[element])
    size = float(mesh.q_error[element]) * scale
    # v(1)^2 is no more than the peak, nor than what the spring p(h) s / h lets the energy have
    at_node = peak
    if end.s > 0.0:
        at_node = np.minimum(peak, p_energy / (end.m * end.s))
    result: Array = size * (2.0 / first * at_node + 4.0 / first**2 * p_energy)
    return result


def _relative_or_integral(relative: Array, integral: Array, energy: Array, factor: Array) -> Array:
    """(T,) max relative over some elements times energy, plus the sum of integral over the others times
    factor: the cheapest choice of elements at the highest energy.
    """
    order = np.argsort(relative)
    kept = np.concatenate([[0.0], relative[order]])
    others = np.concatenate([np.cumsum(integral[order][::-1])[::-1], [0.0]])
    with np.errstate(invalid="ignore", over="ignore"):
        cost = np.where(kept < 0.5, kept * energy[-1], np.inf) + others * factor[-1]
    best = int(np.argmin(cost))
    if not np.isfinite(cost[best]):
        return np.full(energy.size, np.inf)
    # to second order too: the form keeps at least 1 - d of itself
    share = kept[best] + others[best] * factor / np.maximum(energy, np.finfo(float).tiny)
    with np.errstate(divide="ignore"):
        return np.where(share < 1.0, share * energy / (1.0 - np.minimum(share, 0.999)), np.inf)


def _largest_flux(
    resolved: Resolved,
    lam: Array,
    energy: Array,
    peak: Array,
    path: float,
    total_w: float,
    total_q: float,
) -> Array:
    """(T,) a bound of sup (p u')^2 for u of unit norm in the span of the modes up to each."""
    joints, ends = resolved.joints, (resolved.left, resolved.right)
    masses = sum(joint.mass for joint in joints) + sum(e.mass + (e.lump[0] if e.lump else 0.0) for e in ends)
    springs = sum(abs(joint.spring) for joint in joints)
    springs += sum(abs(e.stiffness) + (e.lump[1] if e.lump else 0.0) for e in ends)
    largest = np.sqrt(energy / path) + np.abs(lam) * (np.sqrt(total_w) + np.sqrt(masses))
    largest += (total_q + springs) * np.sqrt(peak)
    modes = np.arange(1.0, lam.size + 1.0)
    result: Array = modes * np.maximum.accumulate(largest**2)
    return result


def bound(
    lam: Array,
    count: int,
    defect: FluxDefect,
    mesh: CoefficientMesh,
    resolved: Resolved,
    degree: int,
    scale: float,
    poll: Callable[[], None],
    first: int = 0,
) -> Bounds:
    """Bounds of the first `count` of T > count Ritz values `lam`.

    scale: Lambda. degree: of the elements (rounding grows with it). first: index of lam[0].
    """
    extra = coefficient_terms(mesh, resolved, lam, defect.energy)
    index = first + np.arange(lam.size)
    rounding = 10.0 * 0.5 * _EPS * ((degree + index) * defect.energy + degree * scale)
    shift, part = _shift(lam, mesh, resolved, scale)
    nu = _thresholds(lam, count, mesh, resolved, scale, poll, first)
    if shift is None:
        lower = np.full(count, -np.inf)
        size = np.zeros(count)
    else:
        lower, size = _lehmann_goerisch(lam, count, defect.scaled, nu, shift, part)
    # the comparison alone: the largest nu whose count does not exceed the index
    plain = _plain(nu, count)
    margin = rounding[:count] + extra[:count]
    confirmed = np.isfinite(lower)
    lower = np.maximum(lower, plain) - margin
    upper = lam[:count] + margin
    lower = np.minimum(lower, lam[:count])
    return Bounds(lower, upper, confirmed, size, margin)


@dataclass(frozen=True, eq=False)
class _Thresholds:
    """nu: ascending trial numbers; count: (K,) exact counts of the comparison problem below them, less the
    index of the first Ritz value.
    """

    nu: Array
    count: IntArray


def _thresholds(
    lam: Array,
    count: int,
    mesh: CoefficientMesh,
    resolved: Resolved,
    scale: float,
    poll: Callable[[], None],
    first: int,
) -> _Thresholds:
    """Counts at trial points inside the gaps, the comparison refined until the gaps above count are met."""
    gaps = np.diff(lam)
    trials = (lam[:-1, None] + gaps[:, None] * np.array(_FRACTIONS)).ravel()
    below = lam[0] - (scale + abs(lam[0])) * np.array([1e6, 1e3, 30.0, 4.0, 1.0, 0.25, 0.05])
    trials = np.sort(np.concatenate([below, trials]))
    wanted = np.searchsorted(lam, trials, side="left")
    one_each = np.concatenate([[True], np.diff(wanted) != 0])
    counted = np.full(trials.size, np.iinfo(np.int64).max)
    pieces = _FIRST_PIECES
    # constant elements gain nothing from more pieces
    constant = int(_cuts(mesh, _MOST_PIECES).max()) == 1 and not _varying_ends(mesh)
    while True:
        finer = _graded(mesh, pieces)
        cuts = _cuts(finer, pieces)
        comparison = build_comparison(finer, resolved, cuts)
        unmet = counted > wanted
        if pieces > _FIRST_PIECES and trials.size > _MANY:
            # one trial in every third gap serves all blocks; the sweeps over many pieces are what costs
            unmet &= one_each & (wanted % 3 == 0)
        open_trials = np.flatnonzero(unmet)
        counted[open_trials] = np.minimum(
            counted[open_trials], comparison.count(trials[open_trials], poll=poll) - first
        )
        poll()
        # an index is served when some gap above it, at most a block away, is met
        gap_met = np.zeros(lam.size + _BLOCK, dtype=bool)
        gap_met[wanted[counted <= wanted]] = True
        windows = np.lib.stride_tricks.sliding_window_view(gap_met[1:], _BLOCK)
        if windows[:count].any(axis=1).all() or constant or 4 * cuts.sum() > _MOST_PIECES:
            return _Thresholds(trials, counted)
        pieces = 4 * int(cuts.sum())


def _varying_ends(mesh: CoefficientMesh) -> list[int]:
    """The end elements on which the comparison is not exact."""
    return [e for e, end in mesh.end_maps if end_variation(mesh, e, end) > 1e-12]


def _graded(mesh: CoefficientMesh, pieces: int) -> CoefficientMesh:
    """The mesh with end elements cut down: their constants' share of the error like that of the others."""
    chosen = _varying_ends(mesh)
    # the phase of an end element falls like its width to the power kappa / 2
    kappa = min([end.steps / end.m for element, end in mesh.end_maps if element in chosen], default=2.0)
    return graded(mesh, chosen, min(1.0, 4.0 / pieces) ** max(1.0, 2.0 / kappa))


def _cuts(mesh: CoefficientMesh, pieces: int) -> IntArray:
    """Pieces per element, about `pieces` in all; 1 where all three coefficients are constant.

    n pieces leave an error of about (phase times relative variation) / n on an element, so that the square
    root of that product is the best share.
    """
    lengths = np.diff(mesh.edges)
    tiny = np.finfo(float).tiny

    def variation(c: Array) -> Array:
        spread: Array = np.abs(c[:, 1:]).sum(axis=1)
        return spread

    lengths = np.where(mesh.plain, lengths, 0.0)
    p_mean, w_mean = np.maximum(mesh.p[:, 0], tiny), np.maximum(mesh.w[:, 0], 0.0)
    travel = lengths * np.sqrt(w_mean / p_mean)
    relative = variation(mesh.p) / p_mean + variation(mesh.w) / np.maximum(w_mean, tiny)
    q_spread = variation(mesh.q) * lengths
    q_size = max(float((np.abs(mesh.q).sum(axis=1) * lengths).sum()), tiny)
    shares = travel * np.minimum(relative, 2.0) / max(float(travel.sum()), tiny) + q_spread / q_size
    shares = np.sqrt(np.where(shares > 1e-13 * lengths / max(float(lengths.sum()), tiny), shares, 0.0))
    total = float(shares.sum())
    if total == 0.0:
        return np.ones(lengths.size, dtype=np.int64)
    return np.maximum(np.ceil(pieces * shares / total).astype(np.int64), 1)


def _plain(thresholds: _Thresholds, count: int) -> Array:
    result = np.full(count, -np.inf)
    for n in range(count):
        usable = thresholds.nu[thresholds.count <= n]
        if usable.size:
            result[n] = usable[-1]
    return result


def _shift(lam: Array, mesh: CoefficientMesh, resolved: Resolved, scale: float) -> tuple[float | None, float]:
    """s and theta with (form - theta int p u'^2 + s M) >= 0; s is None where none was found."""
    passive = all(spring >= 0.0 for _, spring in inner_springs(mesh))
    lowest_q = mesh.q[:, 0] - np.abs(mesh.q[:, 1:]).sum(axis=1)
    passive &= float(lowest_q.min()) >= 0.0
    passive &= resolved.left.stiffness >= 0.0 and resolved.right.stiffness >= 0.0
    passive &= all(joint.spring >= 0.0 for joint in resolved.joints)
    if passive:
        return (0.0 if lam[0] > 0.05 * scale else scale), 1.0
    finer = _graded(mesh, 512)
    comparison: Comparison = build_comparison(finer, resolved, _cuts(finer, 512))
    start = max(scale, -float(lam[0]))
    trials = start * np.concatenate([[0.0], 2.0 ** np.arange(-6, 40, 0.25)])
    counts = comparison.count(-trials, fraction=1.0 - _PART)
    fine = np.flatnonzero(counts == 0)
    # also lambda_0 + s must stay clear of zero
    fine = fine[trials[fine] + lam[0] >= 0.05 * scale] if fine.size else fine
    return (float(trials[fine[0]]) if fine.size else None), _PART


def _lehmann_goerisch(
    lam: Array, count: int, scaled: Field, thresholds: _Thresholds, shift: float, part: float
) -> tuple[Array, Array]:
    """(lower bounds, the distance Ritz value - bound before rounding), -inf where no nu serves."""
    best = np.full(count, -np.inf)
    wanted = np.searchsorted(lam, thresholds.nu, side="left")
    met = thresholds.count <= wanted
    nu_of = np.full(lam.size + 1, np.nan)
    # trials ascend, so the last one written in each gap is the largest that was met
    nu_of[wanted[met]] = thresholds.nu[met]
    rho = lam + shift
    offsets = [
        np.einsum("tg,tg->t", scaled[: lam.size - o].conj(), scaled[o:]) if o < lam.size else np.zeros(0)
        for o in range(_BLOCK)
    ]
    for size in range(1, _BLOCK + 1):
        first = np.arange(min(count, lam.size - size))
        if first.size == 0:
            continue
        nu = nu_of[first + size] + shift
        # above the last member by more than rounding
        usable = np.isfinite(nu) & (rho[first] > 0.0) & (nu - rho[first + size - 1] > 1e-13 * np.abs(nu))
        first, nu = first[usable], nu[usable]
        if first.size == 0:
            continue
        members = first[:, None] + np.arange(size)
        r = rho[members]
        gap = nu[:, None] - r
        block = np.zeros((first.size, size, size), dtype=scaled.dtype)
        for i in range(size):
            for j in range(i, size):
                gram = offsets[j - i][first + i]
                root = np.sqrt(gap[:, i] * gap[:, j])
                value = nu**2 * gram / (part * r[:, i] * r[:, j] * root)
                block[:, i, j] += value
                if i != j:
                    block[:, j, i] += value.conj()
        # z - (nu - rho_i)/rho_i as the largest eigenvalue of the shifted block keeps small defects visible
        base = gap[:, 0] / r[:, 0]
        for i in range(size):
            block[:, i, i] += gap[:, i] / r[:, i] - base
        rise = np.maximum(np.linalg.eigvalsh(block)[:, -1], 0.0)
        # rho_0 - nu/(1 + base + rise) with 1 + base = nu / rho_0
        value = lam[first] - r[:, 0] * rise / (nu / r[:, 0] + rise)
        best[first] = np.maximum(best[first], value)
    return best, np.where(np.isfinite(best), lam[:count] - best, np.inf)
