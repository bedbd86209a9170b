"""The artificial force is stated, and forces it spoils are not called usable."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from made import solved

import fv3d


@pytest.fixture(scope="module")
def plain() -> fv3d.Run:
    mesh = fv3d.channel_with_block(length=0.16, height=0.04, depth=0.03, lower=(0.04, 0.0, 0.0),
                                   upper=(0.05, 0.015, 0.03), first_layer=0.003, layers=4,
                                   coarsest=0.008)
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.2, viscosity=1.2e-4), boundaries={
        "inlet": fv3d.Inlet((0.2, 0.0, 0.0)), "outlet": fv3d.Outlet(),
        "block": fv3d.Wall(), "walls": fv3d.Wall(), "sides": fv3d.Symmetry()})
    return solved(case, tolerance=1e-7)


def fed(plain: fv3d.Run, factor: float, radius: float = 0.006) -> fv3d.Run:
    points = np.array([[0.03, y, z] for y in (0.008, 0.016) for z in (0.01, 0.02)])
    u = factor * plain.sample(points).velocity[:, 0]
    table = pd.DataFrame({"x [m]": points[:, 0], "y [m]": points[:, 1], "z [m]": points[:, 2],
                          "u [m/s]": u, "u_std [m/s]": 0.003})
    law = fv3d.Feedback(fv3d.Readings(table), radius=radius)
    return solved(plain.case, sources=[law], start=plain, tolerance=1e-7)


def test_a_plain_run_has_none(plain: fv3d.Run) -> None:
    budget = fv3d.force_budget(plain, "block")
    assert budget.usable and "none" in str(budget) and not np.any(budget.whole)


@pytest.mark.parametrize("factor", [0.3, 2.0])
def test_false_readings_make_the_drag_unusable(plain: fv3d.Run, factor: float) -> None:
    """Readings that change the drag by more than a tenth must not leave it usable."""
    run = fed(plain, factor)
    drag, before = (fv3d.force(r, "block").total[0] for r in (run, plain))
    assert abs(drag / before - 1.0) > 0.1
    budget = fv3d.force_budget(run, "block")
    assert not budget.usable and "NOT USABLE" in str(budget)


def test_readings_the_plain_run_meets_leave_its_forces_usable(plain: fv3d.Run) -> None:
    budget = fv3d.force_budget(fed(plain, 1.002), "block")
    assert budget.usable and budget.over_body < 0.1 and 0.0 < budget.volume_share < 0.3


def test_figures_against_plain_sums(plain: fv3d.Run) -> None:
    run = fed(plain, 1.5)
    mesh, budget = run.mesh, fv3d.force_budget(run, "block")
    whole = sum(1.2 * f * v for f, v in zip(run.artificial_force, mesh.cell_volume, strict=True))
    np.testing.assert_allclose(budget.whole, whole, rtol=1e-12, atol=1e-18)
    gradient = run.velocity_gradient()
    strain = 0.5 * (gradient + gradient.transpose(0, 2, 1))
    loss = sum(2 * 1.2e-4 * float((s * s).sum()) * v
               for s, v in zip(strain, mesh.cell_volume, strict=True))
    assert budget.dissipation == pytest.approx(loss, rel=1e-12)
    assert 0.2 < budget.solenoidal_share < 0.95
    # what moves the fluid has the net force of the momentum budget
    np.testing.assert_allclose(budget.net, fv3d.momentum_budget(run).artificial, atol=1e-15)
