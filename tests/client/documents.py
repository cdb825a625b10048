"""Problem documents that several test modules use."""

from __future__ import annotations

from typing import Any

PLAIN: dict[str, Any] = {
    "name": "two slabs",
    "geometry": "plane",
    "layers": [
        {"name": "left", "start": 0.0, "end": 0.5, "p": 2.0, "q": "1+x", "w": 1.0},
        {
            "start": 0.5,
            "end": 1.0,
            "p": {"samples": {"x": [0.5, 0.7, 1.0], "values": [1.0, 2.0, 1.5], "interpolation": "linear"}},
            "q": 0.0,
            "w": "exp(-x)",
            "reciprocal_p": True,
        },
    ],
    "left": {"kind": "film", "film": 3.0},
    "right": {"kind": "lump", "mass": 0.25, "film": 0.0, "resistance": 0.5},
    "interfaces": [{"x": 0.5, "resistance": 0.1}],
}

COUPLED: dict[str, Any] = {
    "geometry": "plane",
    "layers": [{"start": 0.0, "end": 1.0, "p": 1.0, "q": 0.0, "w": 1.0}],
    "coupling": {"kind": "bloch", "phase": 0.5},
}

INFINITE: dict[str, Any] = {
    "geometry": "plane",
    "layers": [{"start": float("-inf"), "end": float("inf"), "p": 1.0, "q": "x**2", "w": 1.0}],
    "left": {"kind": "bounded"},
    "right": {"kind": "bounded"},
}

STACK: dict[str, Any] = {
    "name": "pipe wall",
    "stack": {
        "geometry": "cylindrical",
        "start": 0.05,
        "layers": [
            {
                "name": "steel",
                "thickness": 0.004,
                "conductivity": 48.0,
                "heat_capacity": 3.7e6,
                "contact_resistance": 2e-4,
            },
            {
                "name": "foam",
                "thickness": 0.04,
                "conductivity": {
                    "samples": {
                        "x": [0.05, 0.08, 0.1],
                        "values": [0.026, 0.028, 0.03],
                        "interpolation": "linear",
                    }
                },
                "heat_capacity": 9.0e4,
            },
            {"thickness": 0.003, "conductivity": "0.4+0*x", "heat_capacity": 2.1e6},
        ],
        "inner": {"kind": "lump", "mass": 1.0e5, "film": 0.0, "resistance": 1e-3},
        "outer": {"kind": "film", "film": 4.0},
    },
}

GOOD = {"plain": PLAIN, "coupled": COUPLED, "infinite": INFINITE, "stack": STACK}
