"""The comparison problem on an end element: constants beside the powers, solved exactly.

With P >= P-, R >= R-, W <= W+ the transformed form of :mod:`.end_elements` is bounded from below by

    int c t^(1+b) v_t^2 dt + int (Q - nu W) t^b v^2 dt + S v(1)^2,

b = m D, c = P- / (h m), Q = h m R-, W = h m W+ (t^(k-1) <= 1 where w has a further factor; at a flat end
the load has t^f more, and x = t^(1+f) in the place of t makes the same of it, b then m D / (1 + f)). Its
solution that is regular at 0 is the hypergeometric function 0F1(b + 1; l t), l = (Q - nu W) / c: a Bessel
function. With d_n = 1 + l / (n (n + 1) d_{n+1}), the pivots of the symmetric tridiagonal matrix whose
eigenvalues are the reciprocal zeros (Y. Ikebe, Math. Comp. 29, 1975, 878-887, quoted from memory), its
logarithmic derivative at 1 is l / ((b + 1) d_{b+1}) and the negative pivots count its zeros in (0, 1).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .coefficients import CoefficientMesh, Ranges
from .end_elements import EndMap

__all__ = ["EndPiece", "end_piece", "end_variation"]

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Pivots beyond the turning point: each gains a factor of its own size squared.
_BEYOND = 40
# Decay so steep that the pivots are not followed to where they settle; a bound is taken instead.
_STEEP = 1e6
_EPS = float(np.finfo(float).eps)


@dataclass(frozen=True)
class EndPiece:
    """power: b. stretch: 1 + f. p: c times stretch^2. q: Q. w_lower, w_upper: W for nu < 0 and nu >= 0.
    spring: S.
    """

    power: float
    stretch: float
    p: float
    q: float
    w_lower: float
    w_upper: float
    spring: float

    def stiffness(self, nu: Array, fraction: float) -> tuple[Array, IntArray]:
        """(T,) flux over value at the inner node, from the end's side, and (T,) zeros inside.

        fraction multiplies c.
        """
        ratio = (self.q - nu * np.where(nu < 0.0, self.w_lower, self.w_upper)) / (fraction * self.p)
        first = self.power + 1.0
        count = np.zeros(nu.size, dtype=np.int64)
        turning = np.sqrt(np.maximum(-ratio, 0.0).max(initial=0.0))
        decaying = np.sqrt(np.clip(ratio, 0.0, _STEEP).max(initial=0.0))
        last = int(np.ceil(2.0 * turning + 10.0 * np.sqrt(decaying))) + _BEYOND
        # where the pivots hardly change any more; exact enough for what is left to come
        place = first + last
        pivot = 0.5 + np.sqrt(0.25 + np.maximum(ratio, 0.0) / (place * (place + 1.0)))
        for n in range(last, -1, -1):
            place = first + n
            pivot = 1.0 + ratio / (place * (place + 1.0) * pivot)
            pivot = np.where(pivot == 0.0, _EPS, pivot)
            count += pivot < 0.0
        stiffness = fraction * self.p * ratio / (self.stretch * first * pivot)
        steep = ratio > _STEEP
        # I_{b+1} / I_b is 1 to the order of 1 / x there, x = 2 sqrt(l)
        stiffness[steep] *= 1.0 - 1.0 / np.sqrt(ratio[steep])
        return stiffness + self.spring, count


def end_piece(mesh: CoefficientMesh, bounds: Ranges, element: int, piece: int, end: EndMap) -> EndPiece:
    """The comparison on an end element that is one piece of `bounds`."""
    scale = float(mesh.edges[element + 1] - mesh.edges[element]) * end.m
    signs = np.ones(mesh.p.shape[1]) if element == 0 else (-1.0) ** np.arange(mesh.p.shape[1])
    stretch = 1.0 + end.flat
    inner = float((mesh.p[element] * signs).sum())
    spring = inner * end.s * end.m / scale
    spring -= abs(spring) * (2.0 * float(mesh.p_error[element]) + 4e-16)
    return EndPiece(
        (end.power - end.flat) / stretch,
        stretch,
        float(bounds.p_lower[piece]) * stretch**2 / scale,
        float(bounds.q_lower[piece]) * scale,
        float(bounds.w_lower[piece]) * scale if end.w_steps == 0 else 0.0,
        float(bounds.w_upper[piece]) * scale,
        spring,
    )


def end_variation(mesh: CoefficientMesh, element: int, end: EndMap) -> float:
    """How far P, R and W are from constants, relative to P and W."""
    scale = float(mesh.edges[element + 1] - mesh.edges[element]) * end.m
    spreads = [float(np.abs(c[element, 1:]).sum()) for c in (mesh.p, mesh.q, mesh.w)]
    p, w = float(mesh.p[element, 0]), float(mesh.w[element, 0])
    extra = 1.0 if end.w_steps > 0 else 0.0
    return spreads[0] / p + spreads[1] * scale**2 / p + spreads[2] / w + extra
