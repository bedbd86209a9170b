"""Outlets of given flow: met exactly, by the pressure an ordinary outlet would need."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from made import solved

import fv3d
from fv3d.errors import BoundaryError, CaseError, Fv3dWarning
from fv3d.flow.problem import make_problem
from fv3d.mesh.generate import box

FLUID = fv3d.Fluid(density=2.0, viscosity=1.0)


def crossing(*, cells: tuple[int, int, int] = (8, 8, 1), tetra: bool = False, numerics: Any = None,
             **outlets: Any) -> fv3d.Case:
    """Stream into a square box from the left, open on the other three sides as told."""
    mesh = box((0, 0, 0), (1, 1, 0.2), cells=cells, tetra=tetra)
    sides = {"x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "z_min": fv3d.Symmetry(),
             "z_max": fv3d.Symmetry()}
    rest = {name: fv3d.Wall() for name in ("x_max", "y_min", "y_max")}
    return fv3d.Case(mesh, FLUID, boundaries=sides | rest | outlets,
                     numerics=numerics or fv3d.Numerics())


@pytest.mark.parametrize("tetra", [False, True])
@pytest.mark.parametrize("coupling", [fv3d.SIMPLEC(), fv3d.SIMPLE()])
def test_flows_are_met_and_the_pressures_are_those_that_give_them(coupling: Any,
                                                                  tetra: bool) -> None:
    numerics = fv3d.Numerics(coupling=coupling)
    run = solved(crossing(tetra=tetra, numerics=numerics, x_max=fv3d.Outlet(5.0),
                          y_min=fv3d.FlowOutlet(share=0.3), y_max=fv3d.FlowOutlet(flow_rate=0.08)),
                 tolerance=1e-8)
    assert fv3d.flow_rate(run, "y_min") == pytest.approx(0.06, rel=1e-9)
    assert fv3d.flow_rate(run, "y_max") == pytest.approx(0.08, rel=1e-9)
    assert fv3d.flow_rate(run, "x_max") == pytest.approx(0.06, rel=1e-9)
    low, high = run.state.levels
    given = solved(crossing(tetra=tetra, numerics=numerics, x_max=fv3d.Outlet(5.0),
                            y_min=fv3d.Outlet(low), y_max=fv3d.Outlet(high)), tolerance=1e-8)
    assert fv3d.flow_rate(given, "y_min") == pytest.approx(0.06, rel=1e-5)
    assert fv3d.flow_rate(given, "y_max") == pytest.approx(0.08, rel=1e-5)
    np.testing.assert_allclose(run.velocity, given.velocity, atol=1e-5)
    np.testing.assert_allclose(run.pressure, given.pressure, atol=1e-4)
    n, faces = run.mesh.n_internal, run.mesh.boundaries["y_max"]
    assert np.all(run.pressure_fields.face[faces] == high)
    assert np.all(run.problem.table.pressure[faces.start - n:faces.stop - n] == high)


def test_halves_by_symmetry_need_no_pressure() -> None:
    run = solved(crossing(y_min=fv3d.Outlet(), y_max=fv3d.FlowOutlet(share=0.5)), tolerance=1e-9)
    assert abs(run.state.levels[0]) < 1e-6 * np.abs(run.pressure).max()
    assert fv3d.flow_rate(run, "y_min") == pytest.approx(0.1, rel=1e-9)


def test_the_level_does_not_depend_on_relaxation() -> None:
    levels = [solved(crossing(y_min=fv3d.Outlet(), y_max=fv3d.FlowOutlet(share=0.8),
                              numerics=fv3d.Numerics(coupling=fv3d.SIMPLEC(alpha))),
                     tolerance=1e-9).state.levels[0] for alpha in (0.7, 0.95)]
    assert levels[0] == pytest.approx(levels[1], rel=1e-5)
    assert levels[0] < -0.5


def test_it_costs_hardly_more_iterations() -> None:
    def count(**outlets: Any) -> int:
        return len(solved(crossing(cells=(12, 12, 1), **outlets)).history["iteration"])
    plain = count(y_min=fv3d.Outlet(), y_max=fv3d.Outlet(-4.0))
    given = count(y_min=fv3d.Outlet(), y_max=fv3d.FlowOutlet(share=0.8))
    assert given <= 1.3 * plain


def test_restarts_keep_the_level_and_the_sheet_tells_it() -> None:
    case = crossing(y_min=fv3d.Outlet(), y_max=fv3d.FlowOutlet(share=0.8))
    run = solved(case)
    again = solved(case, start=run)
    assert len(again.history["iteration"]) <= 2
    assert f"outlet     'y_max' at {run.state.levels[0]:.6g} Pa for 0.32 kg/s" in str(run)
    finer = solved(crossing(cells=(12, 12, 1), y_min=fv3d.Outlet(),
                            y_max=fv3d.FlowOutlet(share=0.8)), start=run)
    assert finer.state.levels[0] == pytest.approx(run.state.levels[0], rel=0.1)
    other = make_problem(crossing(y_min=fv3d.Outlet(), y_max=fv3d.Outlet()))
    assert other.outlets == ()


def test_checkpoints_carry_the_level_to_the_last_bit(tmp_path: Path) -> None:
    case = crossing(y_min=fv3d.Outlet(), y_max=fv3d.FlowOutlet(share=0.8))

    def run(steps: int, **options: Any) -> fv3d.Run:
        with pytest.warns(Fv3dWarning, match="iteration limit"):
            return fv3d.solve_steady(case, tolerance=1e-30, max_iterations=steps, progress=False,
                                     **options)
    whole = run(24)
    run(11, checkpoint=fv3d.Checkpoint(tmp_path / "half"))
    again = run(24, start=fv3d.read_checkpoint(tmp_path / "half"))
    assert again.state.levels == whole.state.levels
    np.testing.assert_array_equal(again.velocity, whole.velocity)


def test_a_run_in_time_refuses_them() -> None:
    with pytest.raises(CaseError, match="takes no outlet of given flow"):
        fv3d.solve_transient(crossing(y_min=fv3d.Outlet(), y_max=fv3d.FlowOutlet(share=0.8)),
                             time_step=0.1, end_time=0.2, progress=False)


def test_a_flow_that_is_not_met_yet_counts_as_misfit() -> None:
    case = crossing(y_min=fv3d.Outlet(), y_max=fv3d.FlowOutlet(flow_rate=0.02))
    records = [record for (_, record), _ in zip(fv3d.iterate(case), range(40))]
    assert records[0].misfit > 1e-3
    assert records[-1].misfit < 1e-3 * records[0].misfit


@pytest.mark.parametrize("sides", [
    {"y_max": fv3d.FlowOutlet(share=0.5)},
    {"y_max": fv3d.FlowOutlet(share=0.5), "y_min": fv3d.FlowOutlet(share=0.5)},
    {"y_max": fv3d.FlowOutlet(share=0.7), "y_min": fv3d.FlowOutlet(share=0.7),
     "x_max": fv3d.Outlet()},
    {"y_max": fv3d.FlowOutlet(share=0.7), "x_min": fv3d.Outlet(3.0), "y_min": fv3d.Outlet()},
])
def test_flows_that_cannot_be(sides: dict[str, Any]) -> None:
    with pytest.raises(BoundaryError):
        make_problem(crossing(**sides))


def test_an_outlet_that_draws_fluid_in_is_told() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(6, 4, 4))
    sides: dict[str, Any] = {name: fv3d.Wall() for name in mesh.boundaries}
    sides |= {"x_min": fv3d.Inlet((1.0, 0, 0)), "x_max": fv3d.Outlet(0.0),
              "y_max": fv3d.Outlet(-9.0)}
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.2, viscosity=0.012), boundaries=sides)
    with pytest.warns(fv3d.Fv3dWarning, match="'x_max' draws"):
        fv3d.solve_steady(case, tolerance=1e-4, max_iterations=300, progress=False)
