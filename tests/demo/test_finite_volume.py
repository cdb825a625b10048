"""The finite-volume program alone, against closed forms.

Sources: F. P. Incropera, D. P. DeWitt, Fundamentals of Heat and Mass Transfer, section on radial systems
(composite cylinder, steady); H. S. Carslaw, J. C. Jaeger, Conduction of Heat in Solids, chapter VII (hollow
cylinder: radial solutions J0, Y0 whose time factor is exp(-lambda t)). The characteristic equation with a
well-mixed fluid inside follows here from its heat balance; its root is found with SciPy's Bessel functions.
"""

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import j0, j1, y0, y1

from modewright.demo.finite_volume import Network, _run, cool_down, graded_mesh, output_times
from modewright.demo.pipe import BuriedPipe, Layer, invented_pipe


def uniform_pipe() -> BuriedPipe:
    """One layer of constant material, so that the radial solutions are Bessel functions."""
    return replace(invented_pipe(), layers=(Layer("wall", 0.08, 0.13, 0.03, 9.0e4),))


class Eigenfunction:
    """The slowest radial solution of the uniform pipe: u = J0(k r) - ratio Y0(k r), the water in front."""

    def __init__(self, pipe: BuriedPipe) -> None:
        (layer,) = pipe.layers
        assert isinstance(layer.conductivity, float)
        conductivity, capacity = layer.conductivity, layer.heat_capacity
        inner, outer = layer.inner, layer.outer
        mass, resistance, film = pipe.water_mass, 1.0 / pipe.still_film, pipe.soil_film

        def ratio(k: float) -> float:
            # -K u'(outer) = h u(outer)
            return float(
                (film * j0(k * outer) - conductivity * k * j1(k * outer))
                / (film * y0(k * outer) - conductivity * k * y1(k * outer))
            )

        def balance(k: float) -> float:
            # Heat into the wall, -K u'(inner), is what the water gives up: lambda m T_w, T_w = u + R (-K u').
            decay = conductivity * k * k / capacity
            value = j0(k * inner) - ratio(k) * y0(k * inner)
            inflow = conductivity * k * (j1(k * inner) - ratio(k) * y1(k * inner))
            return float(inflow - decay * mass * (value + resistance * inflow))

        scan = np.linspace(0.1, 40.0, 400)
        signs = [balance(k) for k in scan]
        first = next(i for i in range(len(scan) - 1) if signs[i] * signs[i + 1] < 0.0)
        self.k = k = brentq(balance, scan[first], scan[first + 1], xtol=1e-14, rtol=1e-14)
        self.ratio = ratio(k)
        self.decay = conductivity * k * k / capacity
        inflow = conductivity * k * (j1(k * inner) - self.ratio * y1(k * inner))
        self.water = j0(k * inner) - self.ratio * y0(k * inner) + resistance * inflow

    def averages(self, edges: np.ndarray) -> np.ndarray:
        """Cell averages under r dr: the integral of J0(k r) r dr is r J1(k r) / k."""
        k = self.k
        integral = edges * (j1(k * edges) - self.ratio * y1(k * edges)) / k
        return np.diff(integral) / (np.diff(edges**2) / 2.0)


def decay_error(pipe: BuriedPipe, exact: Eigenfunction, cells: int, steps: int) -> float:
    """Largest error after one and a half time constants, relative to the exact water temperature."""
    mesh = graded_mesh(pipe.layers, [cells])
    start = np.concatenate([[exact.water], exact.averages(mesh.edges)])
    last = 1.5 / exact.decay
    fields, _ = _run(Network.of(pipe, mesh, pipe.still_film), start, np.array([0.0, last]), steps, held=False)
    expected = start * math.exp(-exact.decay * last)
    return float(np.abs(fields[-1] - expected).max() / abs(expected[0]))


def test_second_order_against_bessel_functions() -> None:
    pipe = uniform_pipe()
    exact = Eigenfunction(pipe)
    errors = [decay_error(pipe, exact, 10 * 2**k, 20 * 2**k) for k in range(5)]
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    assert np.all(np.abs(orders - 2.0) < 0.1)
    assert errors[-1] < 1e-5


def test_steady_heat_flow_of_the_composite_cylinder() -> None:
    # Incropera & DeWitt: q per metre = dT / (sum of ln(r2/r1)/(2 pi k) + films and contacts / (2 pi r)).
    pipe = replace(
        invented_pipe(),
        layers=(Layer("a", 0.05, 0.06, 15.0, 1e6, contact=1e-3), Layer("b", 0.06, 0.10, 0.04, 1e5)),
    )
    network = Network.of(pipe, graded_mesh(pipe.layers, [5, 9]), inner_film=500.0)
    resistance = (
        1.0 / (500.0 * 0.05)
        + math.log(0.06 / 0.05) / 15.0
        + 1e-3 / 0.06
        + math.log(0.10 / 0.06) / 0.04
        + 1.0 / (pipe.soil_film * 0.10)
    ) / (2.0 * math.pi)
    assert network.outflow(network.steady(70.0)) == pytest.approx(70.0 / resistance, rel=1e-9)


def test_steady_field_does_not_move() -> None:
    pipe = invented_pipe()
    network = Network.of(pipe, graded_mesh(pipe.layers, [4, 20, 4]), pipe.running_film)
    steady = network.steady(71.0)
    fields, _ = _run(network, steady, np.array([0.0, 7200.0]), 10, held=True)
    assert np.abs(fields[-1] - steady).max() < 1e-10 * 71.0


def test_what_leaves_is_what_was_stored() -> None:
    cooling = cool_down(invented_pipe(), [4, 20, 4], output_times(72.0 * 3600.0, 40), steps=5)
    # Rounding of the rates: conductances of steel cells times steps of hours, against one ulp of the field.
    assert np.abs(cooling.energy + cooling.lost - cooling.energy[0]).max() < 1e-10 * cooling.energy[0]
    assert cooling.lost[-1] > 0.5 * cooling.energy[0]


def test_long_steps_do_not_oscillate() -> None:
    # L-stability: steps far longer than the wall's own time constants leave no sign change behind.
    pipe = invented_pipe()
    network = Network.of(pipe, graded_mesh(pipe.layers, [4, 20, 4]), pipe.still_film)
    start = np.zeros(29)
    start[0] = 80.0
    fields, _ = _run(network, start, np.arange(6) * 7200.0, 1, held=False)
    assert np.all(np.diff(fields[2:, 0]) < 0.0)
    assert fields[2:].min() > 0.0


def test_mesh_meets_the_faces_and_grows_smoothly() -> None:
    layers = invented_pipe().layers
    mesh = graded_mesh(layers, [6, 40, 8])
    assert mesh.edges[[0, 6, 46, 54]].tolist() == [layers[0].inner, *(layer.outer for layer in layers)]
    assert np.all(np.diff(mesh.edges) > 0.0)
    assert np.all((mesh.centroids > mesh.edges[:-1]) & (mesh.centroids < mesh.edges[1:]))
    foam = np.diff(mesh.edges)[6:46]
    assert foam.max() / foam.min() > 4.0
    assert np.abs(np.diff(np.log(foam))).max() < 0.35


def test_cell_unknown_is_exact_for_fields_linear_in_r() -> None:
    mesh = graded_mesh(uniform_pipe().layers, [12])
    edges = mesh.edges
    average = (3.0 * np.diff(edges**2) / 2.0 + 7.0 * np.diff(edges**3) / 3.0) / (np.diff(edges**2) / 2.0)
    np.testing.assert_allclose(3.0 + 7.0 * mesh.centroids, average, rtol=1e-13)


def test_the_peak_reaches_the_casing_after_the_pump_has_stopped() -> None:
    times = output_times(72.0 * 3600.0, 60)
    cooling = cool_down(invented_pipe(), [4, 40, 8], times, steps=5)
    peak = int(np.argmax(cooling.outer_flux))
    assert 0 < peak < len(times) - 1
    assert cooling.outer_flux[peak] > 1.1 * cooling.outer_flux[0]
    assert np.all(np.diff(cooling.water) < 0.0)
