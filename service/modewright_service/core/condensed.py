"""The condensed chain: counts, Newton corrections and eigenvectors for many lambda at once.

Elements (see :mod:`.elements`) and resistances are the links of a chain of nodes; films, lumps, springs and
point masses sit on the nodes. When lambda meets an element's own fixed-ends eigenvalue its condensed matrix
has a pole; so the bubble mode nearest to lambda stays an explicit unknown c of its link,

    [[g + alpha, -g, a1], [-g, g + gamma, a2], [a1, a2, delta]],  a = -l m_c,  delta = 1 - l theta_c,

and (u_i, c_i) are eliminated together as a 2 x 2 pivot with determinant D = d delta - a1^2, d = x + g +
alpha:

    x' = gamma + { g [(x + alpha) delta - (a1 + a2)^2] - a2^2 (x + alpha) } / D,

in which nothing cancels for large contrasts of p (g >> alpha, x) and nothing blows up where d alone vanishes.
The number of eigenvalues below lambda is the number of negative pivots plus the remaining bubbles with
l theta_j > 1 (Sylvester's law of inertia; Wittrick and Williams 1971). Two sweeps, from the left and from the
right, meet at a node or at a c (twisted factorisation: Dhillon and Parlett, SIAM J. Matrix Anal. Appl. 25,
2004, 858-899); the smallest relative pivot there gives the vector, and its quotient by the vector's mass the
Newton correction of lambda.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from modewright_service.core.elements import Elements
from modewright_service.core.end_mesh import inner_springs
from modewright_service.core.errors import NotConverged, Reason
from modewright_service.core.problem import Resolved

__all__ = [
    "Chain",
    "Evaluation",
    "Field",
    "Links",
    "Vectors",
    "away_from_zero",
    "build_chain",
    "condense",
    "count_below",
    "eigenvectors",
    "evaluate",
    "expand",
    "sweep_left",
]

Array = NDArray[np.float64]
# Amplitudes: complex where the ends are coupled with a phase.
Field = NDArray[Any]
IntArray = NDArray[np.int64]

# Numbers of one temporary array (targets x elements x bubbles) that are handled together: 32 MB.
_CHUNK = 4_000_000


def _nothing() -> None:
    return None


@dataclass(frozen=True, eq=False)
class Chain:
    """Links between n + 1 nodes.

    elements: the decomposed elements. element_of_link: (n,) element index or -1 for a resistance.
    conductance: (n,) 1/R of a resistance link, 0 elsewhere. stiffness, mass: (n+1,) point terms of the nodes.
    left_fixed, right_fixed: u = 0 at the first, last node, or no unknown there (an end element's own end).
    left_node: first node that lies on the interval (1 where a lump hangs behind a resistance), right_node
        likewise.
    poll: called between batches of work; may raise.
    factor: u(b) = factor u(a) and p u' likewise, |factor| = 1, where the ends are coupled; else None.
    """

    elements: Elements
    element_of_link: IntArray
    conductance: Array
    stiffness: Array
    mass: Array
    left_fixed: bool
    right_fixed: bool
    left_node: int
    right_node: int
    poll: Callable[[], None] = _nothing
    factor: complex | None = None

    @property
    def links(self) -> int:
        return int(self.element_of_link.size)


@dataclass(frozen=True, eq=False)
class Evaluation:
    """(T,) each: count of eigenvalues below lambda, and the Newton correction to the nearest one."""

    count: IntArray
    step: Array


@dataclass(frozen=True, eq=False)
class Vectors:
    """Eigenvectors in condensed form for T values of lambda.

    nodes: (n+1, T). bubbles: (E, T, J) coefficients of the element's bubble modes v_j beside the extended
    vertex functions. step: (T,) the last Newton correction, not yet applied.
    """

    nodes: Field
    bubbles: Field
    step: Array


def build_chain(elements: Elements, resolved: Resolved, poll: Callable[[], None] = _nothing) -> Chain:
    """Links and nodes in order of x: lump, element, resistance, element, ..., lump."""
    edges = elements.mesh.edges
    of_link: list[int] = []
    conductance: list[float] = []
    stiffness: list[float] = []
    mass: list[float] = []

    def add_node(k: float = 0.0, m: float = 0.0) -> None:
        stiffness.append(k)
        mass.append(m)

    def add_link(element: int, g: float = 0.0) -> None:
        of_link.append(element)
        conductance.append(g)

    left, right = resolved.left, resolved.right
    left_node = 0
    if left.lump is not None:
        add_node(left.lump[1], left.lump[0])
        add_link(-1, 1.0 / left.lump[2])
        left_node = 1
    add_node(left.stiffness, left.mass)
    joints = {float(joint.x): joint for joint in resolved.joints}
    for e in range(elements.count):
        add_link(e)
        joint = joints.pop(float(edges[e + 1]), None) if e + 1 < elements.count else None
        add_node(joint.spring if joint else 0.0, joint.mass if joint else 0.0)
        if joint is not None and joint.resistance > 0.0:
            add_link(-1, 1.0 / joint.resistance)
            add_node()
    if joints:
        x = next(iter(joints))
        raise NotConverged.at(Reason.INTERNAL, "interfaces", "an interface is not an element edge", repr(x))
    right_node = len(stiffness) - 1
    for at_left, spring in inner_springs(elements.mesh):
        stiffness[left_node + 1 if at_left else right_node - 1] += spring
    stiffness[-1] += right.stiffness
    mass[-1] += right.mass
    if right.lump is not None:
        add_link(-1, 1.0 / right.lump[2])
        add_node(right.lump[1], right.lump[0])
    return Chain(
        elements,
        np.array(of_link, dtype=np.int64),
        np.array(conductance),
        np.array(stiffness),
        np.array(mass),
        left.dirichlet or elements.mesh.left_map is not None,
        right.dirichlet or elements.mesh.right_map is not None,
        left_node,
        right_node,
        poll,
        resolved.factor,
    )


@dataclass(eq=False)
class Links:
    """(n, T) each: the condensed links at T values of lambda; m00, m01, m11: their masses -dS/dl; below:
    (T,).
    """

    g: Array
    alpha: Array
    gamma: Array
    a1: Array
    a2: Array
    delta: Array
    theta: Array
    m1: Array
    m2: Array
    m00: Array
    m01: Array
    m11: Array
    below: IntArray


def condense(chain: Chain, lam: Array, with_mass: bool) -> Links:
    """All links at the (T,) values of lambda, the nearest pole of each element kept apart."""
    el = chain.elements
    shape = (chain.links, lam.size)
    g = np.repeat(chain.conductance[:, None], lam.size, axis=1)
    alpha, gamma, a1, a2 = np.zeros((4, *shape))
    theta, m1, m2, m00, m01, m11 = np.zeros((6, *shape))
    delta = np.ones(shape)
    below = np.zeros(lam.size, dtype=np.int64)
    at = np.flatnonzero(chain.element_of_link >= 0)
    p0, p1 = el.mass[:, :, 0], el.mass[:, :, 1]
    # columns: m0 (m0 + m1), m0 m1, m1 (m0 + m1): what the row sums and g need
    products = np.stack([p0 * (p0 + p1), p0 * p1, p1 * (p0 + p1)], axis=2)
    mass_rows = el.mass_c.sum(axis=2)
    chunk = max(1, _CHUNK // max(1, el.theta.size))
    for start in range(0, lam.size, chunk):
        chain.poll()
        part = slice(start, min(start + chunk, lam.size))
        l = lam[None, part] + el.shift[:, None]  # noqa: E741
        den = 1.0 - l[:, :, None] * el.theta[:, None, :]
        pole = np.argmin(np.abs(den), axis=2)
        pick = pole[:, :, None]
        d = np.take_along_axis(den, pick, axis=2)[:, :, 0]
        below[part] += np.count_nonzero(den < 0.0, axis=(0, 2)) - np.count_nonzero(d < 0.0, axis=0)
        np.put_along_axis(den, pick, np.inf, axis=2)
        f = 1.0 / den
        sums = f @ products
        l2 = l * l
        g[at, part] = el.g[:, None] + l * el.mass_c[:, 0, 1][:, None] + l2 * sums[:, :, 1]
        alpha[at, part] = el.rows[:, 0][:, None] - l * mass_rows[:, 0][:, None] - l2 * sums[:, :, 0]
        gamma[at, part] = el.rows[:, 1][:, None] - l * mass_rows[:, 1][:, None] - l2 * sums[:, :, 2]
        k1, k2 = np.take_along_axis(p0, pole, axis=1), np.take_along_axis(p1, pole, axis=1)
        a1[at, part], a2[at, part], delta[at, part] = -l * k1, -l * k2, d
        if with_mass:
            theta[at, part] = np.take_along_axis(el.theta, pole, axis=1)
            m1[at, part], m2[at, part] = k1, k2
            # d/dl of l^2 f = 2 l f + l^2 theta f^2
            weight = f * (2.0 * l[:, :, None] + l2[:, :, None] * el.theta[:, None, :] * f)
            sums = weight @ products
            cross = el.mass_c[:, 0, 1][:, None] + sums[:, :, 1]
            m01[at, part] = cross
            m00[at, part] = el.mass_c[:, 0, 0][:, None] + sums[:, :, 0] - sums[:, :, 1]
            m11[at, part] = el.mass_c[:, 1, 1][:, None] + sums[:, :, 2] - sums[:, :, 1]
    return Links(g, alpha, gamma, a1, a2, delta, theta, m1, m2, m00, m01, m11, below)


def away_from_zero(value: Array, scale: Array) -> Array:
    """An exact zero pivot becomes one of rounding size (as in Sturm counts of tridiagonal matrices)."""
    tiny = 1e-300 + 1e-18 * scale
    return np.where(np.abs(value) < tiny, tiny, value)


def count_below(chain: Chain, lam: Array) -> IntArray:
    """(T,) number of eigenvalues of the discrete problem below each lambda."""
    links = condense(chain, lam, with_mass=False)
    return sweep_left(chain, links, lam)[2]


def sweep_left(chain: Chain, k: Links, lam: Array) -> tuple[Array, Array, IntArray]:
    """x (n+1, T), point terms included; D (n, T); the count."""
    n = chain.links
    x = np.zeros((n + 1, lam.size))
    det = np.ones((n, lam.size))
    count = k.below.copy()
    terms = chain.stiffness[:, None] - lam[None, :] * chain.mass[:, None]
    x[0] = terms[0]
    for j in range(n):
        g, a1, a2, delta = k.g[j], k.a1[j], k.a2[j], k.delta[j]
        if j == 0 and chain.left_fixed:
            det[0] = away_from_zero(delta, np.ones_like(delta))
            x[1] = k.gamma[0] + g - a2 * a2 / det[0] + terms[1]
            count += det[0] < 0.0
            continue
        r = x[j] + k.alpha[j]
        d = r + g
        a12 = a1 + a2
        scale = np.abs(x[j]) + np.abs(g)
        det[j] = away_from_zero(d * delta - a1 * a1, scale * np.abs(delta) + a1 * a1)
        x[j + 1] = k.gamma[j] + (g * (r * delta - a12 * a12) - a2 * a2 * r) / det[j] + terms[j + 1]
        count += np.where(det[j] < 0.0, 1, np.where(d < 0.0, 2, 0))
    if not chain.right_fixed:
        count += x[n] < 0.0
    return x, det, count


def _sweep_right(chain: Chain, k: Links, lam: Array) -> tuple[Array, Array]:
    """y (n+1, T) without the node's own point terms, and D (n, T), from the right."""
    n = chain.links
    y = np.zeros((n + 1, lam.size))
    det = np.ones((n, lam.size))
    terms = chain.stiffness[:, None] - lam[None, :] * chain.mass[:, None]
    for j in range(n - 1, -1, -1):
        g, a1, a2, delta = k.g[j], k.a1[j], k.a2[j], k.delta[j]
        if j == n - 1 and chain.right_fixed:
            det[j] = away_from_zero(delta, np.ones_like(delta))
            y[j] = k.alpha[j] + g - a1 * a1 / det[j]
            continue
        r = y[j + 1] + terms[j + 1] + k.gamma[j]
        d = r + g
        a12 = a1 + a2
        scale = np.abs(r) + np.abs(g)
        det[j] = away_from_zero(d * delta - a2 * a2, scale * np.abs(delta) + a2 * a2)
        y[j] = k.alpha[j] + (g * (r * delta - a12 * a12) - a1 * a1 * r) / det[j]
    return y, det


@dataclass(frozen=True, eq=False)
class _Twist:
    """The chosen twist of each target: node index, or link index where at_pole; its pivot; the end nodes."""

    index: IntArray
    at_pole: NDArray[np.bool_]
    pivot: Array
    first: Array
    second: Array


def _choose_twist(chain: Chain, k: Links, lam: Array, x: Array, y: Array) -> _Twist:
    n, targets = chain.links, lam.size
    at = chain.element_of_link
    g_hat = np.where(at >= 0, chain.elements.g[np.maximum(at, 0)], chain.conductance)
    node_scale = np.zeros(n + 1)
    node_scale[:-1] += g_hat
    node_scale[1:] += g_hat
    nodes = x + y
    # a singular end's node has no stiffness at all
    relative = np.abs(nodes) / np.maximum(node_scale, np.finfo(float).tiny)[:, None]
    if chain.left_fixed:
        relative[0] = np.inf
    if chain.right_fixed:
        relative[n] = np.inf
    # the pole as the meeting point: its pivot after both neighbours are eliminated
    terms = chain.stiffness[:, None] - lam[None, :] * chain.mass[:, None]
    ra = x[:-1] + k.alpha
    rb = y[1:] + terms[1:] + k.gamma
    det = k.g * (ra + rb) + ra * rb
    sa, sb = k.a1 + 0.0, k.a2 + 0.0
    num = k.g * (sa + sb) ** 2 + sa * sa * rb + sb * sb * ra
    first = -(sa * (rb + k.g) + sb * k.g)
    second = -(sb * (ra + k.g) + sa * k.g)
    if chain.left_fixed:
        det[0], num[0] = rb[0] + k.g[0], sb[0] ** 2
        first[0], second[0] = 0.0, -sb[0]
    if chain.right_fixed:
        det[-1], num[-1] = ra[-1] + k.g[-1], sa[-1] ** 2
        first[-1], second[-1] = -sa[-1], 0.0
    if n == 1 and chain.left_fixed and chain.right_fixed:
        det[0], num[0], first[0], second[0] = 1.0, 0.0, 0.0, 0.0
    det = np.where(det == 0.0, np.finfo(float).tiny, det)
    poles = k.delta - num / det
    pole_relative = np.where((at >= 0)[:, None], np.abs(poles), np.inf)
    every = np.concatenate([relative, pole_relative])
    every = np.where(np.isfinite(every), every, np.inf)
    best = np.argmin(every, axis=0)
    at_pole = best > n
    index = np.where(at_pole, best - n - 1, best)
    columns = np.arange(targets)
    link = np.where(at_pole, index, 0)
    pivot = np.where(at_pole, poles[link, columns], nodes[np.where(at_pole, 0, index), columns])
    return _Twist(
        index,
        at_pole,
        pivot,
        first[link, columns] / det[link, columns],
        second[link, columns] / det[link, columns],
    )


def _vector(
    chain: Chain, k: Links, lam: Array, x: Array, dx: Array, y: Array, dy: Array, twist: _Twist
) -> tuple[Array, Array]:
    """Node values (n+1, T) and pole amplitudes (n, T), 1 at the twist."""
    n, targets = chain.links, lam.size
    u = np.zeros((n + 1, targets))
    c = np.zeros((n, targets))
    node = np.flatnonzero(~twist.at_pole)
    u[twist.index[node], node] = 1.0
    pole = np.flatnonzero(twist.at_pole)
    c[twist.index[pole], pole] = 1.0
    u[twist.index[pole], pole] = twist.first[pole]
    u[twist.index[pole] + 1, pole] = twist.second[pole]
    # link j lies left of the twist where j < index, right of it where j >= index (j > index at a pole)
    right_from = np.where(twist.at_pole, twist.index + 1, twist.index)
    terms = chain.stiffness[:, None] - lam[None, :] * chain.mass[:, None]
    for j in range(n - 1, -1, -1):
        go = j < twist.index
        if not go.any():
            continue
        g, a1, a2, delta, det = k.g[j], k.a1[j], k.a2[j], k.delta[j], dx[j]
        if j == 0 and chain.left_fixed:
            c[j] = np.where(go, -a2 / det * u[j + 1], c[j])
            continue
        d = x[j] + k.alpha[j] + g
        c[j] = np.where(go, -(a1 * g + a2 * d) / det * u[j + 1], c[j])
        u[j] = np.where(go, (g * delta + a1 * a2) / det * u[j + 1], u[j])
    for j in range(n):
        go = j >= right_from
        if not go.any():
            continue
        g, a1, a2, delta, det = k.g[j], k.a1[j], k.a2[j], k.delta[j], dy[j]
        if j == n - 1 and chain.right_fixed:
            c[j] = np.where(go, -a1 / det * u[j], c[j])
            continue
        d = y[j + 1] + terms[j + 1] + k.gamma[j] + g
        c[j] = np.where(go, -(a2 * g + a1 * d) / det * u[j], c[j])
        u[j + 1] = np.where(go, (g * delta + a1 * a2) / det * u[j], u[j + 1])
    return u, c


def _mass(chain: Chain, k: Links, u: Array, c: Array) -> Array:
    """(T,) squared norm of the condensed vectors, lumps included."""
    a, b = u[:-1], u[1:]
    links = a * a * k.m00 + 2.0 * a * b * k.m01 + b * b * k.m11
    links += c * (2.0 * (k.m1 * a + k.m2 * b) + k.theta * c)
    total: Array = links.sum(axis=0) + (u * u * chain.mass[:, None]).sum(axis=0)
    return total


def evaluate(chain: Chain, lam: Array) -> Evaluation:
    """Counts and Newton corrections at (T,) values of lambda."""
    k = condense(chain, lam, with_mass=True)
    x, dx, count = sweep_left(chain, k, lam)
    y, dy = _sweep_right(chain, k, lam)
    twist = _choose_twist(chain, k, lam, x, y)
    u, c = _vector(chain, k, lam, x, dx, y, dy, twist)
    # a vector that lives in massless layers alone has no norm and gives no correction: bisection goes on
    with np.errstate(divide="ignore", invalid="ignore"):
        return Evaluation(count, twist.pivot / _mass(chain, k, u, c))


def eigenvectors(chain: Chain, lam: Array) -> Vectors:
    """Vectors of unit norm at (T,) converged eigenvalues."""
    k = condense(chain, lam, with_mass=True)
    x, dx, _ = sweep_left(chain, k, lam)
    y, dy = _sweep_right(chain, k, lam)
    twist = _choose_twist(chain, k, lam, x, y)
    u, c = _vector(chain, k, lam, x, dx, y, dy, twist)
    norm2 = _mass(chain, k, u, c)
    step = twist.pivot / norm2
    scale = 1.0 / np.sqrt(norm2)
    u, c = u * scale, c * scale
    return Vectors(u, expand(chain, lam, u, c), step)


def expand(chain: Chain, lam: Array, u: Field, c: Field) -> Field:
    """(E, T, J) bubble amplitudes that go with node values u (n+1, T) and pole amplitudes c (n, T)."""
    el = chain.elements
    at = np.flatnonzero(chain.element_of_link >= 0)
    l = lam[None, :] + el.shift[:, None]  # noqa: E741
    den = 1.0 - l[:, :, None] * el.theta[:, None, :]
    pick = np.argmin(np.abs(den), axis=2)[:, :, None]
    np.put_along_axis(den, pick, np.inf, axis=2)
    driven = u[at][:, :, None] * el.mass[:, None, :, 0] + u[at + 1][:, :, None] * el.mass[:, None, :, 1]
    bubbles: Field = l[:, :, None] * driven / den
    np.put_along_axis(bubbles, pick, c[at][:, :, None], axis=2)
    return bubbles
