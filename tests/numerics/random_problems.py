"""Layered problems drawn at random from a seed, as problem documents.

Every kind of regular end, contact resistances, point springs and point masses; conductivities and capacities
over three decades, some graded; potentials and Robin ends of both signs, of the size of the low eigenvalues.
"""

from __future__ import annotations

from typing import Any

import numpy as np


def _positive(rng: np.random.Generator, decades: float) -> float | str:
    """A positive coefficient over the given decades: constant, exponential, wavy or linear."""
    size = float(10.0 ** rng.uniform(-decades, decades))
    kind = rng.integers(0, 5)
    rate = float(rng.uniform(-1.5, 1.5))
    if kind == 0:
        return f"{size!r}*exp({rate!r}*x)"
    if kind == 1:
        return f"{size!r}*(1.3+cos({4.0 * rate!r}*x))"
    if kind == 2:
        return f"{size!r}*(1+{abs(rate)!r}*x)"
    return size


def _end(rng: np.random.Generator, side: str) -> dict[str, Any]:
    size = float(10.0 ** rng.uniform(-1.0, 1.0))
    sign = 1.0 if side == "right" else -1.0
    choices: list[dict[str, Any]] = [
        {"kind": "dirichlet"},
        {"kind": "neumann"},
        {"kind": "film", "film": size},
        {"kind": "robin", "alpha": -0.2 * size, "beta": sign},
        {"kind": "lump", "mass": size},
        {"kind": "lump", "mass": size, "film": 0.3},
        {"kind": "lump", "mass": size, "film": 0.5, "resistance": 0.4},
    ]
    return choices[int(rng.integers(0, len(choices)))]


def _interface(rng: np.random.Generator, x: float) -> dict[str, float]:
    size = float(10.0 ** rng.uniform(-1.0, 0.5))
    return {"x": x, ("resistance", "spring", "mass")[int(rng.integers(0, 3))]: size}


def random_document(seed: int, geometry: str = "plane") -> dict[str, Any]:
    """A problem of one to five layers on an interval of length of order one."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 6))
    start = 0.0 if geometry == "plane" else 0.5
    edges = start + np.concatenate([[0.0], np.cumsum(rng.uniform(0.15, 0.6, count))])
    layers = []
    for i in range(count):
        q: float | str = 0.0
        if rng.random() < 0.4:
            q = (
                float(rng.uniform(-5.0, 5.0))
                if rng.random() < 0.5
                else f"{float(rng.uniform(-8, 8))!r}*cos(3*x)"
            )
        layers.append(
            {
                "name": f"layer-{i}",
                "start": float(edges[i]),
                "end": float(edges[i + 1]),
                "p": _positive(rng, 1.0),
                "q": q,
                "w": _positive(rng, 0.7),
            }
        )
    joints = [_interface(rng, float(x)) for x in edges[1:-1] if rng.random() < 0.5]
    return {
        "name": f"random-{geometry}-{seed}",
        "geometry": geometry,
        "layers": layers,
        "left": _end(rng, "left"),
        "right": _end(rng, "right"),
        "interfaces": joints,
    }
