"""Time-accurate and pseudo-transient runs against exact solutions and against each other."""

from __future__ import annotations

import itertools
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

import fv3d
from fv3d.errors import CaseError, DivergenceError, Fv3dWarning
from fv3d.flow.coupling import Record
from fv3d.flow.watch import WINDOWS, repeating_period

A, D, NU = np.pi / 4, np.pi / 2, 0.1


def decay(t: float) -> float:
    return float(np.exp(-NU * D * D * t))


def beltrami(x: np.ndarray, t: float = 0.0) -> np.ndarray:
    """Ethier and Steinman (1994), Int. J. Numer. Meth. Fluids 19, 369-375."""
    x, y, z = x.T
    e, s, c = np.exp, np.sin, np.cos
    return -A * decay(t) * np.stack([
        e(A * x) * s(A * y + D * z) + e(A * z) * c(A * x + D * y),
        e(A * y) * s(A * z + D * x) + e(A * x) * c(A * y + D * z),
        e(A * z) * s(A * x + D * y) + e(A * y) * c(A * z + D * x)], axis=1)


def beltrami_pressure(x: np.ndarray, t: float) -> np.ndarray:
    x, y, z = x.T
    e, s, c = np.exp, np.sin, np.cos
    return -0.5 * A * A * decay(t) ** 2 * (
        e(2 * A * x) + e(2 * A * y) + e(2 * A * z)
        + 2 * s(A * x + D * y) * c(A * z + D * x) * e(A * (y + z))
        + 2 * s(A * y + D * z) * c(A * x + D * y) * e(A * (z + x))
        + 2 * s(A * z + D * x) * c(A * y + D * z) * e(A * (x + y)))


def decaying(n: int, step: float, end: float, tetra: bool = False) -> fv3d.Run:
    mesh = fv3d.box((-1, -1, -1), (1, 1, 1), cells=(n, n, n), tetra=tetra)
    sides = {name: fv3d.Inlet(beltrami, factor=decay) for name in mesh.boundaries}
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=NU), boundaries=sides,
                     numerics=fv3d.Numerics(convection=fv3d.Central()))
    return fv3d.solve_transient(case, time_step=step, end_time=end, start=beltrami, progress=False)


def rms(mesh: fv3d.Mesh, values: np.ndarray) -> float:
    square = values ** 2 if values.ndim == 1 else (values ** 2).sum(axis=1)
    return float(np.sqrt(np.average(square, weights=mesh.cell_volume)))


def test_values_of_the_exact_solution() -> None:
    """Check values computed independently to ten digits."""
    x = np.array([[0.1, -0.3, 0.5]])
    np.testing.assert_allclose(beltrami(x)[0], [-1.51851267925, -1.04860290031, -0.08396796235],
                               atol=1e-10)
    assert beltrami_pressure(x, 0.0)[0] == pytest.approx(-1.70624970914, abs=1e-10)


def test_second_order_in_time() -> None:
    """Successive halvings of the step on one mesh; must: velocity 1.9, pressure 1.5."""
    runs = [decaying(8, step, 0.5) for step in (0.05, 0.025, 0.0125)]
    mesh = runs[0].mesh
    for name, order in (("velocity", 1.9), ("pressure", 1.5)):
        change = [rms(mesh, getattr(a, name) - getattr(b, name))
                  for a, b in itertools.pairwise(runs)]
        assert np.log2(change[0] / change[1]) >= order


@pytest.mark.filterwarnings("ignore:The velocity functions")
@pytest.mark.parametrize("tetra, levels, order", [(False, (8, 12), 1.9), (True, (7, 10), 1.8)])
def test_second_order_in_space(tetra: bool, levels: tuple[int, int], order: float) -> None:
    errors = []
    for n in levels:
        run = decaying(n, 0.01, 0.2, tetra)
        errors.append(rms(run.mesh, run.velocity - beltrami(run.mesh.cell_centre, 0.2)))
        assert run.outcome.name == "finished" and run.state.time == pytest.approx(0.2)
        assert run.history["mass"].max() <= 1e-6
    assert np.log(errors[0] / errors[1]) / np.log(levels[1] / levels[0]) >= order


def channel() -> fv3d.Case:
    mesh = fv3d.channel_with_cylinder(length=2.2, height=0.41, depth=0.02, centre=(0.2, 0.2),
                                      diameter=0.1, around=32)

    def inflow(x: np.ndarray) -> np.ndarray:
        u = 1.2 * x[:, 1] * (0.41 - x[:, 1]) / 0.41 ** 2
        return np.stack([u, 0 * u, 0 * u], axis=1)

    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-3), boundaries={
        "inlet": fv3d.Inlet(inflow), "outlet": fv3d.Outlet(), "walls": fv3d.Wall(),
        "cylinder": fv3d.Wall(), "sides": fv3d.Symmetry()})


@pytest.fixture(scope="module")
def steady() -> fv3d.Run:
    return fv3d.solve_steady(channel(), tolerance=1e-8, max_iterations=1000, progress=False)


@pytest.mark.parametrize("step", [0.02, 0.2])
def test_a_steady_state_does_not_depend_on_the_step(steady: fv3d.Run, step: float) -> None:
    """Two steps ten times apart end in the steady solver's drag to 0.05 %."""
    drag = fv3d.force(steady, "cylinder").total[0]
    monitor = fv3d.ForceMonitor("cylinder", name="drag")
    run = fv3d.solve_transient(steady.case, time_step=step, end_time=150 * step, start=steady,
                               monitors=[monitor], progress=False)
    series = run.series["drag"]
    assert series.force.shape == (150, 3) and series.time[-1] == pytest.approx(150 * step)
    np.testing.assert_allclose(series.force, series.pressure_force + series.friction)
    assert series.force[-1, 0] == pytest.approx(drag, rel=5e-4)
    np.testing.assert_allclose(series.force[-1], fv3d.force(run, "cylinder").total, rtol=1e-6,
                               atol=1e-9)


def test_a_checkerboard_pressure_dies_out(steady: fv3d.Run) -> None:
    """Small steps must not keep a pressure that alternates from cell to cell."""
    mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(8, 8, 8))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-3), boundaries={
        "x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "x_max": fv3d.Outlet(),
        **{side: fv3d.Symmetry() for side in ("y_min", "y_max", "z_min", "z_max")}})
    from fv3d.flow.coupling import make_workspace
    from fv3d.flow.problem import make_problem
    from fv3d.flow.start import start_state
    from fv3d.flow.step_size import FixedStep
    from fv3d.flow.time_step import TimeStep
    problem = make_problem(case)
    workspace = make_workspace(problem)
    state = start_state(problem, (1.0, 0.0, 0.0), workspace)
    signs = (-1.0) ** np.round(mesh.cell_centre * 8 - 0.5).sum(axis=1)
    state = replace(state, pressure=signs)
    for _ in range(50):
        state, _ = TimeStep(FixedStep(0.01 / 8), first=1)(problem, state, workspace)
    assert abs(float(np.mean(signs * state.pressure))) <= 0.01
    assert np.abs(state.velocity - [1.0, 0.0, 0.0]).max() <= 0.05


def test_pseudo_transient_ends_where_the_steady_run_ends(steady: fv3d.Run) -> None:
    for step in (fv3d.LocalStep(9.0), fv3d.LocalStep(5.0, ramp=0.5, largest=3.0)):
        monitor = fv3d.PointMonitor([[0.4, 0.2, 0.01]], name="wake")
        run = fv3d.solve_pseudo_transient(steady.case, tolerance=1e-7, max_iterations=3000,
                                          pseudo_step=step, monitors=[monitor], progress=False)
        assert run.outcome.good
        assert np.abs(run.velocity - steady.velocity).max() <= 1e-4 * np.abs(steady.velocity).max()
        assert "time" not in run.history and np.isnan(run.series["wake"].time).all()
        assert run.series["wake"].velocity.shape == (len(run.history["iteration"]), 1, 3)


def test_one_step_for_all_cells() -> None:
    mesh = fv3d.box((0, 0, 0), (3, 1, 1), cells=(12, 6, 6))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.02), boundaries={
        "x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "x_max": fv3d.Outlet(),
        **{side: fv3d.Wall() for side in ("y_min", "y_max", "z_min", "z_max")}})
    one = fv3d.solve_steady(case, tolerance=1e-7, max_iterations=500, progress=False)
    two = fv3d.solve_pseudo_transient(case, tolerance=1e-7, max_iterations=900, progress=False,
                                      pseudo_step=fv3d.GlobalStep(0.3))
    assert np.abs(one.velocity - two.velocity).max() <= 1e-5


def test_a_local_step_is_a_relaxation_factor(steady: fv3d.Run) -> None:
    """Courant number E and relaxation E / (1 + E) give the same iterations."""
    with pytest.warns(Fv3dWarning):
        one = fv3d.solve_steady(steady.case, tolerance=1e-12, max_iterations=20, progress=False)
    with pytest.warns(Fv3dWarning):
        two = fv3d.solve_pseudo_transient(steady.case, tolerance=1e-12, max_iterations=20,
                                          pseudo_step=fv3d.LocalStep(9.0), progress=False)
    np.testing.assert_allclose(one.history["momentum"], two.history["momentum"], rtol=1e-6)


@pytest.mark.parametrize("small", [fv3d.SIMPLEC(velocity_relaxation=0.2), fv3d.GlobalStep(0.03)])
def test_small_pseudo_steps_end_in_the_same_flow(steady: fv3d.Run, small: Any) -> None:
    """Steps far below the cells' own time neither grow nor move the solution."""
    case, options = steady.case, {"tolerance": 1e-16, "max_iterations": 120, "progress": False}

    def followed(start: Any) -> fv3d.Run:
        with pytest.warns(Fv3dWarning, match="iteration limit"):
            if isinstance(small, fv3d.GlobalStep):
                return fv3d.solve_pseudo_transient(case, pseudo_step=small, start=start, **options)
            return fv3d.solve_steady(replace(case, numerics=fv3d.Numerics(coupling=small)),
                                     start=start, **options)

    drag = fv3d.force(steady, "cylinder").total[0]
    kept = followed(steady)
    assert kept.history["momentum"].max() <= 1e-7
    assert fv3d.force(kept, "cylinder").total[0] == pytest.approx(drag, rel=1e-6)
    found = followed((0.2, 0.0, 0.0))
    assert found.history["momentum"][-1] <= 0.1 * found.history["momentum"][9]
    assert fv3d.force(found, "cylinder").total[0] == pytest.approx(drag, rel=0.1)


def record(k: int, residual: float, tracer: float) -> Record:
    return Record(k, residual, 0.0, 0.0, 1, tracer=tracer)


@pytest.mark.parametrize("period, seen_in", [(17.54, 250), (37.3, 250), (131.0, 500),
                                             (290.0, 1000)])
def test_the_watch_sees_a_circle(period: float, seen_in: int) -> None:
    k = np.arange(seen_in)
    swing = np.sin(2 * np.pi * k / period)
    circling = [record(i, 1e-3 * (1 + 0.2 * swing[i]), swing[i]) for i in k]
    found = [repeating_period(circling[:i]) for i in range(1, len(circling) + 1)]
    assert [f for f in found if f] == pytest.approx([period], rel=0.01)


def test_the_watch_lets_convergence_pass() -> None:
    k = np.arange(2 * WINDOWS[0])
    swing = np.sin(2 * np.pi * k / 37.3)
    falling = [record(i, 10 ** (-i / 100), swing[i] * 10 ** (-i / 100)) for i in k]
    noise = np.random.default_rng(1).standard_normal(len(k))
    noisy = [record(i, 1e-3, noise[i]) for i in k]
    still = [record(i, 1e-3, 1.0) for i in k]
    for records in (falling, noisy, still):
        assert all(repeating_period(records[:i]) is None for i in range(1, len(records)))


def test_the_watch_changes_nothing(steady: fv3d.Run, monkeypatch: pytest.MonkeyPatch) -> None:
    """A run that converges is the same to the last bit with and without the watch."""
    case = replace(steady.case, numerics=fv3d.Numerics(
        coupling=fv3d.SIMPLEC(velocity_relaxation=0.4)))
    options = {"tolerance": 1e-7, "max_iterations": 1000, "progress": False}
    seen = fv3d.solve_steady(case, **options)
    assert seen.outcome.good and len(seen.history["mass"]) > 250  # long enough to be looked at
    monkeypatch.setattr("fv3d.flow.steady.repeating_period", lambda records: None)
    blind = fv3d.solve_steady(case, **options)
    for name in ("velocity", "pressure", "mass_flux"):
        np.testing.assert_array_equal(getattr(blind, name), getattr(seen, name))


@pytest.mark.parametrize("changes", [
    {"time_step": 0.0}, {"time_step": -0.1}, {"time_step": np.nan}, {"end_time": 0.0},
    {"end_time": "soon"}, {"outer_iterations": 0}, {"start": np.zeros(4)},
    {"monitors": [fv3d.PointMonitor([[9.0, 9.0, 9.0]], name="out")]},
    {"monitors": [fv3d.ForceMonitor("cilinder", name="no")]}, {"monitors": [3]}])
def test_bad_time_options(steady: fv3d.Run, changes: dict[str, Any]) -> None:
    options = {"time_step": 0.01, "end_time": 0.02, "progress": False, **changes}
    with pytest.raises(CaseError) as caught:
        fv3d.solve_transient(steady.case, **options)
    assert caught.value.where and caught.value.remedy


@pytest.mark.parametrize("step", [None, 3.0])
def test_bad_pseudo_steps(steady: fv3d.Run, step: Any) -> None:
    with pytest.raises(CaseError):
        fv3d.solve_pseudo_transient(steady.case, tolerance=1e-6, max_iterations=5,
                                    pseudo_step=step)
    for bad in ({"courant": 0.0}, {"courant": 1.0, "ramp": -1.0}):
        with pytest.raises(CaseError):
            fv3d.LocalStep(**bad)
    with pytest.raises(CaseError):
        fv3d.GlobalStep(np.nan)


def test_going_on_in_time_is_bit_identical(steady: fv3d.Run) -> None:
    whole = fv3d.solve_transient(steady.case, time_step=0.02, end_time=0.4, start=(0.2, 0, 0),
                                 progress=False)
    half = fv3d.solve_transient(steady.case, time_step=0.02, end_time=0.2, start=(0.2, 0, 0),
                                progress=False)
    rest = fv3d.solve_transient(steady.case, time_step=0.02, end_time=0.4, start=half,
                                progress=False)
    assert rest.history["time"][0] == pytest.approx(0.22)
    np.testing.assert_allclose(rest.velocity, whole.velocity, atol=1e-6 * 0.3)


def test_divergence_in_time_keeps_the_last_finite_state() -> None:
    mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-9), body_force=(1e200, 0, 0),
                     boundaries={side: fv3d.Outlet() if side == "x_max" else fv3d.Wall()
                                 for side in mesh.boundaries})
    with pytest.raises(DivergenceError) as caught:
        fv3d.solve_transient(case, time_step=1.0, end_time=5.0, progress=False)
    assert np.all(np.isfinite(caught.value.run.velocity))
