"""Couplings against their contract."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from contracts import COUPLING, Check
from made import distance, duct, solved

import fv3d
from fv3d.mesh.generate import box

METHODS = [fv3d.SIMPLEC(velocity_relaxation=a) for a in (0.5, 0.7, 0.9)] + \
    [fv3d.SIMPLE(velocity_relaxation=a, pressure_relaxation=1.0 - a) for a in (0.5, 0.7, 0.9)]


@pytest.mark.parametrize("check", COUPLING.values(), ids=COUPLING)
@pytest.mark.parametrize("method", METHODS,
                         ids=lambda m: f"{type(m).__name__}-{m.velocity_relaxation}")
def test_contract(method: Any, check: Check) -> None:
    check(method)


def test_the_flow_does_not_depend_on_the_cell_numbering() -> None:
    mesh = box((0, 0, 0), (2, 1, 1), cells=(6, 4, 4), tetra=True, skew=0.1)
    (kind, conn, cells), = mesh.cell_blocks
    boundaries = {name: [mesh.face_points[faces, :3]] for name, faces in mesh.boundaries.items()}
    order = np.random.default_rng(0).permutation(mesh.n_cells)
    other = fv3d.build_mesh(mesh.points, [(kind, conn[order])], boundaries, renumber=False)
    one, two = (solved(duct(m), tolerance=1e-8) for m in (mesh, other))
    same = cells[order]  # cell of `mesh` that is cell i of `other`
    np.testing.assert_allclose(other.cell_centre, mesh.cell_centre[same], atol=1e-14)
    assert distance(other, two.velocity, one.velocity[same]) <= 1e-5


def test_the_flow_turns_with_the_domain() -> None:
    """Turning mesh and inlet by 90 degrees turns the answer."""
    mesh = box((0, 0, 0), (2, 1, 1), cells=(8, 6, 6), skew=0.2)
    turn = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    (kind, conn, cells), = mesh.cell_blocks
    boundaries = {name: [mesh.face_points[faces]] for name, faces in mesh.boundaries.items()}
    turned = fv3d.build_mesh(mesh.points @ turn.T, [(kind, conn[np.argsort(cells)])], boundaries,
                             renumber=False)
    one = duct(mesh)
    inlet = one.boundaries["x_min"]
    conditions = dict(one.boundaries) | {
        "x_min": fv3d.Inlet(lambda x: inlet.velocity(x @ turn) @ turn.T)}  # type: ignore
    two = solved(fv3d.Case(turned, one.fluid, boundaries=conditions), tolerance=1e-8)
    run = solved(one, tolerance=1e-8)
    np.testing.assert_allclose(turned.cell_centre, mesh.cell_centre @ turn.T, atol=1e-13)
    assert distance(mesh, two.velocity, run.velocity @ turn.T) <= 1e-5
    assert distance(mesh, two.pressure, run.pressure) <= 1e-5


def test_outlet_pressure_is_only_a_level() -> None:
    """A higher outlet pressure lifts the pressure everywhere and changes nothing else."""
    mesh = box((0, 0, 0), (2, 1, 1), cells=(8, 6, 6))
    case = duct(mesh)
    lifted = fv3d.Case(mesh, case.fluid,
                       boundaries=dict(case.boundaries) | {"x_max": fv3d.Outlet(50.0)})
    one, two = solved(case, tolerance=1e-9), solved(lifted, tolerance=1e-9)
    assert distance(mesh, two.velocity, one.velocity) <= 1e-6
    np.testing.assert_allclose(two.pressure - one.pressure, 50.0, atol=1e-5)
