"""Forces on boundaries and the momentum budget."""

from __future__ import annotations

import numpy as np
import pytest
from contracts import MESHES, SLOPE, linear, skewed
from made import duct, made_run, solved

import fv3d
from fv3d.errors import CaseError
from fv3d.mesh.generate import box


@pytest.mark.parametrize("numerics", [
    fv3d.Numerics(), fv3d.Numerics(convection=fv3d.Central(), full_stress=True),
    fv3d.Numerics(convection=fv3d.Upwind(), coupling=fv3d.SIMPLE())],
    ids=["default", "central, full stress", "upwind, SIMPLE"])
@pytest.mark.parametrize("kind", MESHES)
def test_momentum_budget_closes(kind: str, numerics: fv3d.Numerics) -> None:
    """Walls, inlet, outlet and body force cancel to 1e-6 of their sizes."""
    run = solved(duct(MESHES[kind](), numerics=numerics, body_force=(0.1, -0.02, 0.05)),
                 tolerance=1e-9)
    budget = fv3d.momentum_budget(run)
    assert np.abs(budget.closure).max() <= 1e-6 * budget.size
    np.testing.assert_allclose(budget.body, 1.0 * 2.0 * np.array([0.1, -0.02, 0.05]), rtol=1e-12)
    assert not np.any(budget.artificial)
    sheet = str(budget).splitlines()
    assert sheet[0].startswith("forces on the whole fluid [N]")
    rows = {" ".join(line.split()[:-3]): line.split()[-3:] for line in sheet[1:-1]}
    assert set(rows) > {f"boundary '{name}'" for name in run.mesh.boundaries}
    np.testing.assert_allclose(np.array(rows["body force"], float), budget.body, rtol=1e-3)
    assert len({len(line) for line in sheet[:-1]}) == 1
    share = np.linalg.norm(budget.closure) / budget.size
    assert f"closure is {share:.2e} of the sum" in sheet[-1]


def test_the_budget_is_made_of_the_forces() -> None:
    run = solved(duct(MESHES["tet"]()), tolerance=1e-7)
    budget = fv3d.momentum_budget(run)
    for name in run.mesh.boundaries:
        np.testing.assert_allclose(budget.boundaries[name], -fv3d.force(run, name).total,
                                   atol=1e-13)


def test_a_budget_that_does_not_close_is_seen() -> None:
    with pytest.warns(fv3d.Fv3dWarning):
        run = fv3d.solve_steady(duct(MESHES["hex"]()), tolerance=1e-9, max_iterations=5,
                                progress=False)
    budget = fv3d.momentum_budget(run)
    assert np.abs(budget.closure).max() > 1e-4 * budget.size


@pytest.mark.parametrize("tetra", [False, True])
def test_force_of_a_linear_pressure_and_a_linear_velocity(tetra: bool) -> None:
    """Pressure: integral of p n, moment of it by numbers of our own; friction: mu du/dn."""
    slope = np.array([0.4, -1.3, 0.8])
    run = made_run(skewed(4, tetra=tetra), linear, lambda x: x @ slope + 2.0)
    got = fv3d.force(run, "y_max", centre=(0.5, 1.0, 0.5))
    mean = slope @ [0.5, 1.0, 0.5] + 2.0
    np.testing.assert_allclose(got.pressure, [0.0, mean, 0.0], atol=1e-12)
    along = 0.01 * SLOPE[[0, 2], 1]  # tangential components of du/dy on the unit side
    np.testing.assert_allclose(got.friction, [-along[0], 0.0, -along[1]], atol=1e-13)
    np.testing.assert_allclose(got.total, got.pressure + got.friction)
    # moment of p n about the centre: integral of (x - c) x (0, p, 0), p linear on a unit square
    wanted = np.array([-slope[2] / 12, 0.0, slope[0] / 12])
    assert np.abs(got.pressure_moment - wanted).max() < (0.03 if tetra else 0.01)


def test_pressure_alone_makes_no_force_on_a_closed_surface() -> None:
    """A constant pressure pushes all sides together with nothing left over."""
    run = made_run(skewed(4, tetra=True), lambda x: 0 * x, lambda x: np.full(len(x), 7.0))
    total = sum(fv3d.force(run, name).pressure for name in run.mesh.boundaries)
    np.testing.assert_allclose(total, 0.0, atol=1e-13)


def test_buoyancy_of_a_block() -> None:
    """Archimedes: pressure of a fluid at rest lifts a block by the weight it displaces."""
    mesh = fv3d.channel_with_block(length=1.0, height=0.6, depth=0.4, lower=(0.3, 0.2, 0.1),
                                   upper=(0.6, 0.4, 0.3), first_layer=0.04, growth=1.3)
    gravity = np.array([0.0, -9.81, 0.0])
    run = made_run(mesh, lambda x: 0 * x, lambda x: 1.2 * x @ gravity)
    block, = (name for name in mesh.boundaries if "block" in name)
    lift = fv3d.force(run, block)
    np.testing.assert_allclose(lift.total, -1.2 * gravity * 0.3 * 0.2 * 0.2, atol=1e-12)


def test_moments_depend_on_the_point_as_they_must() -> None:
    run = made_run(skewed(3), linear, lambda x: x[:, 0] * 3.0 + 1.0)
    about, point = fv3d.force(run, "x_max"), np.array([0.3, -0.2, 0.9])
    moved = fv3d.force(run, "x_max", centre=point)
    np.testing.assert_allclose(moved.moment, about.moment - np.cross(point, about.total),
                               atol=1e-12)


def test_sheet_and_unknown_boundary() -> None:
    run = made_run(box((0, 0, 0), (1, 1, 1), cells=(2, 2, 2)), linear, lambda x: x[:, 0])
    assert "force of the fluid on 'x_max'" in str(fv3d.force(run, "x_max"))
    with pytest.raises(CaseError, match="x_max"):
        fv3d.force(run, "x_mxa")
