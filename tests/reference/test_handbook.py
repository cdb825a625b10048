"""Figures printed in handbooks, against the service's answers.

The tables of ``data/handbook_tables.json`` were written down from memory of the books named in their
``citation`` and recomputed there to 28 digits. Each figure is checked twice: rounded to the printed
decimals against the printed value, and to 1e-9 against the recomputed one.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import modewright
from tests.reference.load import handbook_tables

_TABLES = {table["quantity"]: table for table in handbook_tables()}


def _plate(biot: float) -> modewright.Problem:
    """A wall insulated at x = 0, cooled at x = 1 through a film of the given Biot number."""
    return _plain({"kind": "neumann"}, {"kind": "film", "film": biot})


def _plain(
    left: dict[str, Any], right: dict[str, Any], end: float = 1.0, q: float | str = 0.0, w: float | str = 1.0
) -> modewright.Problem:
    layer = {"name": "body", "start": 0.0, "end": end, "p": 1.0, "q": q, "w": w}
    return modewright.Problem.from_dict({"layers": [layer], "left": left, "right": right})


def _figures(quantity: str) -> list[Any]:
    return [pytest.param(value, id=value["label"]) for value in _TABLES[quantity]["values"]]


def _check(found: float, figure: dict[str, Any]) -> None:
    assert abs(found - float(figure["recomputed"])) <= 1e-9 * max(abs(found), 1.0)
    # Half a unit of the last printed decimal, and what a double adds.
    half = 0.5 * 10.0 ** -figure["decimals"]
    assert abs(found - float(figure["published"])) <= half * (1.0 + 1e-6)


def _labelled(figure: dict[str, Any]) -> float:
    return float(figure["label"].split("=")[1])


@pytest.mark.parametrize("figure", _figures("plane wall zeta_1 (zeta tan zeta = Bi)"))
def test_plane_wall_first_root(figure: dict[str, Any], service: modewright.Service) -> None:
    basis = service.solve(_plate(_labelled(figure)), modes=8)
    _check(float(np.sqrt(basis.eigenvalues[0])), figure)


@pytest.mark.parametrize("figure", _figures("plane wall C_1 = 4 sin z/(2z+sin 2z)"))
def test_plane_wall_first_amplitude(figure: dict[str, Any], service: modewright.Service) -> None:
    """The uniform initial excess 1 excites cos(zeta_1 x) with amplitude C_1 = c_0 phi_0(0)."""
    basis = service.solve(_plate(_labelled(figure)), modes=8)
    _check(float(basis.project("1")[0] * basis.modes([0.0])[0, 0]), figure)


@pytest.mark.parametrize("biot", [0.1, 1.0])
def test_wall_root_table(biot: float, service: modewright.Service) -> None:
    figures = _TABLES[f"roots of a tan a = {biot:g}"]["values"]
    roots = np.sqrt(service.solve(_plate(biot), modes=len(figures)).eigenvalues)
    for root, figure in zip(roots, figures, strict=True):
        _check(float(root), figure)


@pytest.mark.parametrize("ratio", [1.5, 2.0, 3.0])
def test_annulus_zeros(ratio: float, service: modewright.Service) -> None:
    """Once with p = w = x written out, once as a material of p = w = 1 in the cylindrical geometry."""
    figures = _TABLES[f"roots of J0(x)Y0(r x)-J0(r x)Y0(x), r={ratio}"]["values"]
    layer = {"name": "body", "start": 1.0, "end": ratio}
    fixed = {"left": {"kind": "dirichlet"}, "right": {"kind": "dirichlet"}}
    written = modewright.Problem.from_dict({"layers": [{**layer, "p": "x", "w": "x"}], **fixed})
    geometric = modewright.Problem.from_dict({"geometry": "cylindrical", "layers": [layer], **fixed})
    for problem in (written, geometric):
        roots = np.sqrt(service.solve(problem, modes=len(figures)).eigenvalues)
        for root, figure in zip(roots, figures, strict=True):
            _check(float(root), figure)


@pytest.mark.parametrize(
    ("parameter", "figure"),
    [
        pytest.param(q, figure, id=f"q={q}-{figure['label']}")
        for q in (1, 5, 25)
        for figure in _TABLES[f"Mathieu q={q}"]["values"]
    ],
)
def test_mathieu_characteristic_values(
    parameter: int, figure: dict[str, Any], service: modewright.Service
) -> None:
    """Even functions ce_r (values a_r) have u' = 0 at 0 and pi, odd ones se_r (b_r) have u = 0 there."""
    family, order = figure["label"][0], int(figure["label"][1:])
    end = {"kind": "neumann"} if family == "a" else {"kind": "dirichlet"}
    problem = _plain(end, end, end=float(np.pi), q=f"{2 * parameter}*cos(2*x)")
    basis = service.solve(problem, modes=8)
    _check(float(basis.eigenvalues[order if family == "a" else order - 1]), figure)


def test_graetz_between_plates(service: modewright.Service) -> None:
    figures = _TABLES["Graetz parallel plates, sqrt(lambda_n)"]["values"]
    problem = _plain({"kind": "neumann"}, {"kind": "dirichlet"}, w="1-x**2")
    roots = np.sqrt(service.solve(problem, modes=len(figures)).eigenvalues)
    for root, figure in zip(roots, figures, strict=True):
        _check(float(root), figure)


@pytest.mark.parametrize(
    ("quantity", "q", "end"),
    [
        ("-u''+u/(x+0.1)^2, (0,pi)", "1/(x+0.1)**2", float(np.pi)),
        ("-u''+e^x u, (0,pi)", "exp(x)", float(np.pi)),
        ("Woods-Saxon", "-50/(1+exp((x-7)/0.6))*(1-5*exp((x-7)/0.6)/(3*(1+exp((x-7)/0.6))))", 15.0),
    ],
)
def test_schroedinger_tables(quantity: str, q: str, end: float, service: modewright.Service) -> None:
    figures = _TABLES[quantity]["values"]
    fixed = {"kind": "dirichlet"}
    values = service.solve(_plain(fixed, fixed, end=end, q=q), modes=len(figures)).eigenvalues
    for value, figure in zip(values, figures, strict=True):
        _check(float(value), figure)
