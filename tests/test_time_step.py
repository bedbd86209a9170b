"""Steps of unequal size, Courant targets, forces that change in time."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from made import duct
from test_transient import NU, beltrami, decay, rms

import fv3d
from fv3d.errors import CaseError
from fv3d.flow.step_size import courant_number, within
from fv3d.flow.time_step import Differencing
from fv3d.mesh.generate import box


@pytest.mark.parametrize("ratio", [0.4, 1.0, 1.7])
def test_differences_are_exact_for_parabolas(ratio: float) -> None:
    step, last = 0.3, 0.3 / ratio
    difference = Differencing.of(step, last)
    for power, slope in ((0, 0.0), (1, 1.0), (2, 2.0 * 0.9)):
        new, now, before = ((0.9 - back) ** power for back in (0.0, step, step + last))
        rate = (difference.lead * new - difference.mixed(np.array(now), np.array(before))) / step
        assert rate == pytest.approx(slope, abs=1e-12)
        if power < 2:
            assert difference.ahead(np.array(now), np.array(before)) == pytest.approx(new)
    assert (difference.lead, difference.now, difference.before) == (1.5, 2.0, 0.5) or ratio != 1.0


@dataclass(frozen=True)
class Uneven:
    """Long and short steps in turn."""

    mean: float
    share: float = 0.6

    def size(self, problem: Any, state: Any, last: float | None) -> float:
        short, long = 2 * self.mean * (1 - self.share), 2 * self.mean * self.share
        return short if last is None or abs(last - long) < 1e-3 * long else long


def test_uneven_steps_keep_the_second_order() -> None:
    """The exact flow of Ethier and Steinman (1994); steps in the ratio 1.5 in turn."""
    mesh = fv3d.box((-1, -1, -1), (1, 1, 1), cells=(8, 8, 8))
    sides = {name: fv3d.Inlet(beltrami, factor=decay) for name in mesh.boundaries}
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=NU), boundaries=sides,
                     numerics=fv3d.Numerics(convection=fv3d.Central()))
    runs = [fv3d.solve_transient(case, time_step=Uneven(mean), end_time=0.5, start=beltrami,
                                 progress=False) for mean in (0.05, 0.025, 0.0125)]
    for run in runs:
        assert run.state.time == pytest.approx(0.5, abs=1e-12)
    for name, order in (("velocity", 1.9), ("pressure", 1.5)):
        change = [rms(mesh, getattr(a, name) - getattr(b, name))
                  for a, b in itertools.pairwise(runs)]
        assert np.log2(change[0] / change[1]) >= order


def test_steps_follow_a_courant_number() -> None:
    """The inflow doubles: steps are halved; changed rarely; the end is met exactly."""
    case = duct(box((0, 0, 0), (2, 1, 1), cells=(8, 5, 5)))
    inlet = fv3d.Inlet(case.boundaries["x_min"].velocity,  # type: ignore[attr-defined]
                       factor=lambda t: 1.5 + 0.5 * np.tanh((t - 1.5) / 0.2))
    case = fv3d.Case(case.mesh, case.fluid, boundaries={**case.boundaries, "x_min": inlet})
    courant: list[float] = []

    class Keep:
        name = "keep"

        def see(self, problem: Any, state: Any, record: Any) -> None:
            courant.append(courant_number(problem, state.mass_flux, state.older.step))

    run = fv3d.solve_transient(case, time_step=fv3d.CourantStep(0.3, first=0.001), end_time=3.0,
                               start=(1.0, 0, 0), monitors=[Keep()], progress=False)
    assert run.state.time == 3.0 and run.outcome.name == "finished"
    sizes = np.diff(np.concatenate([[0.0], run.history["time"]]))
    assert sizes[0] == 0.001 and np.all(sizes[1:] <= 1.2001 * sizes[:-1])
    settled = np.array(courant)[(run.history["time"] > 0.5) & (run.history["time"] < 2.9)]
    assert settled.min() >= 0.2 and settled.max() <= 0.4
    early, late = (np.median(sizes[(run.history["time"] > a) & (run.history["time"] < b)])
                   for a, b in ((0.7, 1.2), (2.0, 2.9)))
    assert 1.6 <= early / late <= 2.4
    assert np.mean(np.abs(np.diff(sizes)) < 1e-12) > 0.5
    assert "steps of" in str(run.outcome)


def test_a_run_ends_where_it_should() -> None:
    assert within(0.3, 0.3) == within(0.4, 0.3) == 0.3
    assert within(0.2, 0.3) == 0.15 and within(0.1, 0.3) == 0.1


@pytest.mark.parametrize("options", [{"target": 0.0}, {"target": "fast"}, {"first": -1.0},
                                     {"largest": 0.0}])
def test_courant_numbers_that_cannot_be(options: Any) -> None:
    with pytest.raises(CaseError):
        fv3d.CourantStep(**options)


def test_a_fluid_at_rest_needs_a_first_step() -> None:
    case = duct(box((0, 0, 0), (1, 1, 1), cells=(3, 3, 3)))
    still = fv3d.Case(case.mesh, case.fluid, boundaries={b: fv3d.Wall() for b in
                                                         case.mesh.boundaries})
    with pytest.raises(CaseError, match="first"):
        fv3d.solve_transient(still, time_step=fv3d.CourantStep(), end_time=1.0, start=(0, 0, 0),
                             progress=False)


def plates(y: np.ndarray, alpha: float, t: float) -> np.ndarray:
    """Womersley, J. R. (1955), J. Physiol. 127, 553-563, for plates at y = +-1, omega = K = 1."""
    root = np.sqrt(1j) * alpha
    return np.real(-1j * (1 - np.cosh(root * y) / np.cosh(root)) * np.exp(1j * t))


def test_values_of_the_oscillating_profile() -> None:
    """Values computed independently to twelve digits."""
    table = {(2.0, 0.0): (0.507161981116, 0.909872158874),
             (5.0, 0.5): (0.16320192207, 1.03052030422),
             (10.0, 0.5): (-0.011208937438, 1.02692032051)}
    for (alpha, y), values in table.items():
        found = [plates(np.array([y]), alpha, t)[0] for t in (0.0, np.pi / 2)]
        np.testing.assert_allclose(found, values, atol=1e-11)


@pytest.mark.parametrize("alpha", [2.0, 5.0, 10.0])
def test_a_force_that_oscillates_between_plates(alpha: float) -> None:
    """Exact profile to 0.5 % of the largest speed, at both phases of the table."""
    mesh = fv3d.box((0, -1, 0), (0.3, 1, 0.1), cells=(3, 40, 1),
                    grading=(None, fv3d.TwoSided(8.0), None))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.3, viscosity=1.3 / alpha ** 2), boundaries={
        "x_min": fv3d.Periodic("x_max"), "y_min": fv3d.Wall(), "y_max": fv3d.Wall(),
        "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()},
        body_force=(1.0, 0.0, 0.0), body_force_factor=np.cos)

    def start(x: np.ndarray) -> np.ndarray:
        return np.outer(plates(x[:, 1], alpha, 0.0), (1.0, 0.0, 0.0))

    for end in (1.25, 2.0):
        run = fv3d.solve_transient(case, time_step=2 * np.pi / 100, end_time=2 * np.pi * end,
                                   start=start, progress=False)
        exact = plates(run.mesh.cell_centre[:, 1], alpha, 2 * np.pi * end)
        assert np.abs(run.velocity[:, 0] - exact).max() <= 5e-3


def test_a_wall_that_oscillates() -> None:
    """Stokes' second problem: exp(-k y) cos(t - k y) over the wall y = 0, k = sqrt(omega / 2 nu).

    Textbook solution (Stokes, G. G. 1851); the lid at 12 layers' depth is at rest.
    """
    layer = 0.1
    mesh = fv3d.box((0, 0, 0), (0.3, 1.2, 0.1), cells=(3, 48, 1),
                    grading=(None, fv3d.OneSided(10.0), None))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.3, viscosity=1.3 * 0.5 * layer ** 2), boundaries={
        "x_min": fv3d.Periodic("x_max"), "y_max": fv3d.Wall(), "z_min": fv3d.Symmetry(),
        "y_min": fv3d.Wall(velocity=(1.0, 0.0, 0.0), factor=np.cos), "z_max": fv3d.Symmetry()})

    def exact(y: np.ndarray, t: float) -> np.ndarray:
        return np.exp(-y / layer) * np.cos(t - y / layer)

    end = 2 * np.pi * 1.2
    run = fv3d.solve_transient(case, time_step=end / 120, end_time=end, progress=False,
                               start=lambda x: np.outer(exact(x[:, 1], 0.0), (1.0, 0.0, 0.0)))
    assert np.abs(run.velocity[:, 0] - exact(run.mesh.cell_centre[:, 1], end)).max() <= 5e-3


def test_an_outlet_whose_pressure_swings() -> None:
    """In a uniform stream between slip walls the pressure is that of the outlet everywhere.

    To the second order of the projection.
    """
    mesh = fv3d.box((0, 0, 0), (2, 1, 1), cells=(6, 2, 2))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.3, viscosity=1e-4), boundaries={
        "x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "x_max": fv3d.Outlet(1.0, factor=np.cos),
        **{b: fv3d.Slip() for b in ("y_min", "y_max", "z_min", "z_max")}})
    error = [np.abs(fv3d.solve_transient(case, time_step=step, end_time=2.0, progress=False
                                         ).pressure - np.cos(2.0)).max() for step in (0.1, 0.05)]
    assert error[0] <= 0.02 and np.log2(error[0] / error[1]) >= 1.8
    run = fv3d.solve_transient(case, time_step=0.1, end_time=2.0, outer_iterations=8,
                               progress=False)
    np.testing.assert_allclose(run.pressure, np.cos(2.0), atol=1e-4)


def test_factors_that_cannot_be() -> None:
    case = duct(box((0, 0, 0), (1, 1, 1), cells=(3, 3, 3)))
    with pytest.raises(CaseError):
        fv3d.Case(case.mesh, case.fluid, boundaries=case.boundaries, body_force=(1, 0, 0),
                  body_force_factor=2.0)  # type: ignore[arg-type]
    bad = fv3d.Case(case.mesh, case.fluid, boundaries=case.boundaries, body_force=(1, 0, 0),
                    body_force_factor=lambda t: np.nan)
    with pytest.raises(CaseError, match="factor"):
        fv3d.solve_transient(bad, time_step=0.1, end_time=0.2, progress=False)


def test_starts_that_do_not_fit() -> None:
    """A foreign mesh is interpolated; fields that are not finite are refused."""
    case = duct(box((0, 0, 0), (2, 1, 1), cells=(4, 3, 3)))
    other = duct(box((0, 0, 0), (2, 1, 1), cells=(5, 4, 4)))
    run = fv3d.solve_transient(other, time_step=0.1, end_time=0.2, progress=False)
    moved = fv3d.solve_transient(case, time_step=0.1, end_time=0.2, start=run, progress=False)
    assert moved.history["time"][0] == pytest.approx(0.1)
    away = duct(box((9, 0, 0), (11, 1, 1), cells=(4, 3, 3)))
    with pytest.raises(CaseError, match="another domain"):
        fv3d.solve_transient(away, time_step=0.1, end_time=0.2, start=run, progress=False)
    spoilt = replace(run, state=replace(run.state, velocity=run.velocity * np.nan))
    for start in (spoilt, (np.nan, 0, 0), lambda x: x[:, :2]):
        with pytest.raises(CaseError):
            fv3d.solve_transient(other, time_step=0.1, end_time=0.9, start=start, progress=False)
    with pytest.raises(CaseError, match="before the start"):
        fv3d.solve_transient(other, time_step=0.1, end_time=0.15, start=run, progress=False)


@pytest.mark.parametrize("courant", [0.5, 1.0, 1.4])
@pytest.mark.parametrize("scheme", [fv3d.Central(), fv3d.Blended(0.9)])
def test_short_waves_carried_along_do_not_grow(scheme: Any, courant: float) -> None:
    """Noise across a stream without viscosity, between periodic sides.

    With upwind's matrix and the central rest extrapolated, noise grew by up to 1.155 in every step
    at a Courant number of one (linear analysis of second-order backward differencing).  Above one
    and a half, where the sweeps of a central matrix would not converge, it still may.
    """
    cells, steps = 24, 80
    mesh = box((0, 0, 0), (1, 3 / cells, 1 / cells), cells=(cells, 3, 1))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-9), boundaries={
        "x_min": fv3d.Periodic("x_max"), "x_max": fv3d.Periodic("x_min"),
        "y_min": fv3d.Periodic("y_max"), "y_max": fv3d.Periodic("y_min"),
        "z_min": fv3d.Slip(), "z_max": fv3d.Slip()}, numerics=fv3d.Numerics(convection=scheme))
    across = np.random.default_rng(0).normal(size=cells)
    start = np.zeros((mesh.n_cells, 3))
    start[:, 0] = 1.0
    start[:, 1] = 0.01 * across[np.floor(mesh.cell_centre[:, 0] * cells).astype(int)]
    run = fv3d.solve_transient(case, time_step=courant / cells, end_time=steps * courant / cells,
                               start=lambda points: start, progress=False)
    assert np.isfinite(run.velocity).all()
    assert rms(run.mesh, run.velocity - [1.0, 0.0, 0.0]) <= rms(mesh, start - [1.0, 0.0, 0.0])
