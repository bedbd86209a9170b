"""Boundary conditions against their contract; flows they must give exactly or nearly so."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from contracts import BOUNDARY, Check, filled, skewed
from made import solved

import fv3d
from fv3d.errors import BoundaryError, Fv3dWarning
from fv3d.flow.equations import boundary_pressure, boundary_velocity
from fv3d.flow.problem import make_problem
from fv3d.mesh.generate import box

CONDITIONS = [fv3d.Inlet((1.0, -2.0, 0.5)), fv3d.Inlet(lambda x: 2.0 * x), fv3d.Outlet(3.0),
              fv3d.Wall(), fv3d.Symmetry(), fv3d.FlowOutlet(flow_rate=0.5)]
FLUID = fv3d.Fluid(density=2.0, viscosity=0.1)


@pytest.mark.parametrize("check", BOUNDARY.values(), ids=BOUNDARY)
@pytest.mark.parametrize("condition", CONDITIONS, ids=lambda c: type(c).__name__)
def test_contract(condition: Any, check: Check) -> None:
    check(condition)


def test_inlet_function_is_taken_at_the_face_centres() -> None:
    mesh = skewed(3)
    table, rows = filled(fv3d.Inlet(lambda x: x**2), mesh, "x_min")
    np.testing.assert_array_equal(table.fixed[rows],
                                  mesh.face_centre[mesh.boundaries["x_min"]]**2)


def test_inlet_function_cannot_change_the_mesh() -> None:
    mesh = skewed(3)

    def spoil(x: np.ndarray) -> np.ndarray:
        x += 100.0
        return np.zeros_like(x)
    before = mesh.face_centre.copy()
    filled(fv3d.Inlet(spoil), mesh, "x_min")
    np.testing.assert_array_equal(mesh.face_centre, before)


def ready(mesh: fv3d.Mesh, side: str, condition: Any) -> tuple[Any, slice]:
    boundaries = {b: fv3d.Outlet() for b in mesh.boundaries} | {side: condition}
    problem = make_problem(fv3d.Case(mesh, FLUID, boundaries=boundaries))
    faces = mesh.boundaries[side]
    return problem, slice(faces.start - mesh.n_internal, faces.stop - mesh.n_internal)


def test_symmetry_keeps_what_lies_in_the_plane() -> None:
    """A linear field with u.n = 0 and no shear on the plane is met exactly on a shaken mesh."""
    mesh = skewed(4)
    problem, rows = ready(mesh, "y_min", fv3d.Symmetry())
    slope = np.array([[0.5, 0.0, -0.7], [0.0, 0.4, 0.0], [1.1, 0.0, -0.9]])
    velocity = mesh.cell_centre @ slope.T
    edge = boundary_velocity(problem, velocity, np.broadcast_to(slope, (mesh.n_cells, 3, 3)),
                             np.zeros(mesh.n_boundary))
    wanted = mesh.face_centre[mesh.n_internal:][rows] @ slope.T
    np.testing.assert_allclose(edge[rows], wanted, atol=1e-14)


def test_outlet_takes_the_velocity_from_inside_and_lets_nothing_but_normal_flow_in() -> None:
    mesh = skewed(4)
    problem, rows = ready(mesh, "x_max", fv3d.Outlet(3.0))
    velocity = np.broadcast_to([2.0, 1.0, -1.0], (mesh.n_cells, 3))
    still = np.zeros((mesh.n_cells, 3, 3))
    out = boundary_velocity(problem, velocity, still, np.ones(mesh.n_boundary))[rows]
    np.testing.assert_allclose(out, np.broadcast_to([2.0, 1.0, -1.0], out.shape), atol=1e-14)
    into = boundary_velocity(problem, velocity, still, -np.ones(mesh.n_boundary))[rows]
    np.testing.assert_allclose(into, np.broadcast_to([2.0, 0.0, 0.0], into.shape), atol=1e-14)


def test_total_pressure_where_fluid_enters_an_outlet() -> None:
    """p = p_out - rho u_n^2 / 2 for flow in, p_out for flow out (Bernoulli)."""
    mesh = skewed(4)
    problem, rows = ready(mesh, "x_max", fv3d.Outlet(3.0))
    size = mesh.face_area_magnitude[mesh.n_internal:]
    for speed, wanted in ((0.7, 3.0), (-0.7, 3.0 - 0.5 * 2.0 * 0.49)):
        pressure = boundary_pressure(problem, np.zeros(mesh.n_cells), np.zeros((mesh.n_cells, 3)),
                                     2.0 * speed * size)[rows]
        np.testing.assert_allclose(pressure, wanted, rtol=1e-13)


def test_reverse_flow_is_reported_with_its_share() -> None:
    mesh = box((0, 0, 0), (1, 1, 0.2), cells=(8, 8, 1))

    def in_and_out(x: np.ndarray) -> np.ndarray:
        return np.outer(np.sin(2 * np.pi * x[:, 1]) + 0.05, (1.0, 0.0, 0.0))
    case = fv3d.Case(mesh, FLUID, boundaries={
        "x_min": fv3d.Inlet(in_and_out), "x_max": fv3d.Outlet(), "y_min": fv3d.Symmetry(),
        "y_max": fv3d.Symmetry(), "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()})
    with pytest.warns(Fv3dWarning, match="% of the outlet flux flows inwards"):
        fv3d.solve_steady(case, tolerance=1e-4, max_iterations=300, progress=False)


@pytest.mark.parametrize(("tetra", "skew", "density"),
                         [(False, 0.0, 2.0), (False, 0.15, 1e-7), (True, 0.15, 1e-7)])
def test_plane_shear_flow_between_moving_walls_is_exact(tetra: bool, skew: float,
                                                        density: float) -> None:
    """Couette: u linear, p = 0, wall friction mu U / h.

    Creeping on shaken meshes: one point per face does not integrate the convected product of two
    linear fields exactly.
    """
    mesh = box((0, 0, 0), (1, 0.5, 0.5), cells=(4, 4, 4), tetra=tetra, skew=skew)

    def couette(x: np.ndarray) -> np.ndarray:
        return np.outer(2.0 * x[:, 1], (1.0, 0.0, 0.0))
    case = fv3d.Case(mesh, fv3d.Fluid(density=density, viscosity=0.1), boundaries={
        "x_min": fv3d.Inlet(couette), "x_max": fv3d.Outlet(), "y_min": fv3d.Wall(),
        "y_max": fv3d.Wall((1.0, 0.0, 0.0)), "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()})
    run = solved(case, tolerance=1e-9)
    np.testing.assert_allclose(run.velocity, couette(mesh.cell_centre), atol=1e-6)
    np.testing.assert_allclose(run.pressure, 0.0, atol=1e-6)
    for side, sign in (("y_min", 1.0), ("y_max", -1.0)):
        friction = fv3d.force(run, side).friction
        np.testing.assert_allclose(friction, [sign * 0.1 * 2.0 * 0.5, 0, 0], atol=1e-7)


def test_plane_channel_against_poiseuille() -> None:
    """Developed flow between plates, u = 6 U y (1 - y), dp/dx = -12 mu U / h^2.

    Second differences are exact on a parabola; what is left is the wall cell, 2 / n^2.
    """
    errors = []
    for n in (8, 16):
        mesh = box((0, 0, 0), (2, 1, 0.1), cells=(n, n, 1))

        def profile(x: np.ndarray) -> np.ndarray:
            return np.outer(6.0 * x[:, 1] * (1.0 - x[:, 1]), (1.0, 0.0, 0.0))
        case = fv3d.Case(mesh, FLUID, boundaries={
            "x_min": fv3d.Inlet(profile), "x_max": fv3d.Outlet(), "y_min": fv3d.Wall(),
            "y_max": fv3d.Wall(), "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()})
        run = solved(case)
        drop = np.polyfit(mesh.cell_centre[:, 0], run.pressure, 1)[0]
        errors.append(abs(drop / (-12.0 * 0.1) - 1.0))
    assert errors[1] < 2.2 / 16**2 and errors[0] / errors[1] > 3.6


def test_wall_through_itself_is_refused() -> None:
    mesh = skewed(3)
    with pytest.raises(BoundaryError, match="through itself"):
        fv3d.Case(mesh, FLUID, boundaries={b: fv3d.Wall((1.0, 0.0, 0.0)) for b in mesh.boundaries})


def test_closed_domain_balances_its_fluxes_or_says_why_not() -> None:
    mesh = skewed(4)

    def through(gain: float) -> dict[str, Any]:
        return {b: fv3d.Wall() for b in mesh.boundaries} | {
            "x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "x_max": fv3d.Inlet((gain, 0.0, 0.0))}
    with pytest.raises(BoundaryError, match="must balance"):
        make_problem(fv3d.Case(mesh, FLUID, boundaries=through(1.0 + 1e-6)))
    run = solved(fv3d.Case(mesh, FLUID, boundaries=through(1.0)), tolerance=1e-6)
    assert abs(np.average(run.pressure, weights=mesh.cell_volume)) <= 1e-12
    assert np.abs(mesh.outflow @ run.mass_flux).sum() <= 1e-9
