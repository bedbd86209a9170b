"""Subgrid viscosity: unit values, walls, decay; the warning of poor resolution."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pytest
from made import duct

import fv3d
from fv3d.errors import CaseError, Fv3dWarning
from fv3d.flow.resolution import resolution
from fv3d.flow.turbulence import with_eddies
from fv3d.mesh.generate import box

# viscosity over (coefficient width)^2 of given velocity gradients, computed independently
VALUES = {
    "pure shear": ("0 1 0;0 0 0;0 0 0", 0.0),
    "solid rotation": ("0 -1 0;1 0 0;0 0 0", 0.90360200),
    "axisymmetric strain": ("1 0 0;0 -0.5 0;0 0 -0.5", 0.07531319),
    "plane strain": ("1 0 0;0 -1 0;0 0 0", 0.08696418),
    "mixed": ("0.1 0.7 -0.2;0.3 -0.4 0.5;-0.6 0.2 0.3", 0.09907134)}


@pytest.mark.parametrize("text, value", VALUES.values(), ids=VALUES)
def test_unit_values(text: str, value: float) -> None:
    """Nicoud and Ducros (1999), equation 10; solid rotation is (2/3)^(1/4)."""
    gradient = np.array([[float(x) for x in row.split()] for row in text.split(";")])[None]
    found = fv3d.WALE(coefficient=1.0).viscosity(gradient, np.ones(1))[0]
    assert found == pytest.approx(value, abs=1e-6)
    assert value > 0 or found == 0.0
    scaled = fv3d.WALE(coefficient=0.5).viscosity(7.0 * gradient, np.array([0.3]))[0]
    assert scaled == pytest.approx(7.0 * 0.15 ** 2 * value, abs=1e-7)  # a rate, times a square


def test_it_does_not_depend_on_the_axes() -> None:
    from scipy.spatial.transform import Rotation
    gradient = np.random.default_rng(1).standard_normal((5, 3, 3))
    turn = Rotation.from_rotvec([0.3, -1.0, 0.5]).as_matrix()
    turned = np.einsum("ia,cab,jb->cij", turn, gradient, turn)
    one, two = (fv3d.WALE().viscosity(g, np.ones(5)) for g in (gradient, turned))
    np.testing.assert_allclose(one, two, rtol=1e-12)


def test_it_falls_with_the_cube_of_the_distance_to_a_wall() -> None:
    """Velocity (y, y^2 .., y): the gradients of a flow that clings to the wall y = 0."""
    y = np.array([1e-3, 1e-2])
    g = np.zeros((2, 3, 3))
    g[:, 0, 1], g[:, 2, 1] = 1.0, 0.5                # shear at the wall
    g[:, 0, 0], g[:, 0, 2], g[:, 2, 0] = 0.3 * y, 0.4 * y, -0.2 * y
    g[:, 1, 1], g[:, 1, 0], g[:, 2, 2] = 0.7 * y, 0.2 * y ** 2, -1.0 * y
    low, high = fv3d.WALE().viscosity(g, np.ones(2))
    assert np.log10(high / low) == pytest.approx(3.0, abs=0.1)


def vortices(x: np.ndarray) -> np.ndarray:
    """Taylor and Green (1937), Proc. R. Soc. A 158, 499-521."""
    return np.stack([np.sin(x[:, 0]) * np.cos(x[:, 1]) * np.cos(x[:, 2]),
                     -np.cos(x[:, 0]) * np.sin(x[:, 1]) * np.cos(x[:, 2]),
                     np.zeros(len(x))], axis=1)


def vortex_case(**options: Any) -> fv3d.Case:
    mesh = box((0, 0, 0), (np.pi, np.pi, np.pi), cells=(12, 12, 12))
    return fv3d.Case(mesh, fv3d.Fluid(density=1.2, viscosity=1.2 / 1600), boundaries={
        name: fv3d.Symmetry() for name in mesh.boundaries},
        numerics=fv3d.Numerics(convection=fv3d.Central()), **options)


def energy(run: fv3d.Run) -> float:
    return float(0.5 * np.average(np.einsum("ij,ij->i", run.velocity, run.velocity),
                                  weights=run.mesh.cell_volume))


def test_the_energy_it_takes_out_is_its_dissipation() -> None:
    """While vortices are still smooth: energy with and without the model, and 2 nu S:S over time.

    To 5 %: the difference of the two runs' scheme errors.
    """
    taken: list[float] = []

    class Keep:
        name = "keep"

        def see(self, problem: Any, state: Any, record: Any) -> None:
            gradient = problem.velocity_gradient(state.velocity, state.boundary_velocity)
            strain = 0.5 * (gradient + np.swapaxes(gradient, 1, 2))
            eddy = problem.viscosity / 1.2 - 1 / 1600
            taken.append(0.05 * np.average(2 * eddy * np.einsum("cij,cij->c", strain, strain),
                                           weights=problem.mesh.cell_volume))

    options = {"time_step": 0.05, "end_time": 1.0, "start": vortices, "progress": False}
    plain = fv3d.solve_transient(vortex_case(), **options)
    eddied = fv3d.solve_transient(vortex_case(turbulence=fv3d.WALE()), monitors=[Keep()], **options)
    assert energy(plain) - energy(eddied) == pytest.approx(sum(taken), rel=0.05)
    assert sum(taken) > 0.5 * (0.125 - energy(plain))
    assert "eddies     WALE(coefficient=0.5)" in str(eddied)


def test_walls_keep_the_viscosity_of_the_fluid() -> None:
    case = duct(box((0, 0, 0), (2, 1, 1), cells=(8, 5, 5)))
    case = fv3d.Case(case.mesh, case.fluid, boundaries=case.boundaries, turbulence=fv3d.WALE())
    monitor = fv3d.ForceMonitor("y_min", name="wall")
    run = fv3d.solve_transient(case, time_step=0.05, end_time=0.5, start=(1.0, 0.0, 0.0),
                               monitors=[monitor], progress=False)
    inside = run.mesh.n_internal
    for name in ("y_min", "x_min"):
        faces = run.mesh.boundaries[name]
        np.testing.assert_array_equal(run.problem.face_viscosity[faces], case.fluid.viscosity)
    assert run.problem.face_viscosity[:inside].max() > 1.0001 * case.fluid.viscosity
    np.testing.assert_allclose(run.series["wall"].force[-1], fv3d.force(run, "y_min").total,
                               rtol=1e-6, atol=1e-9)


def test_without_gradients_nothing_changes() -> None:
    case = vortex_case(turbulence=fv3d.WALE())
    from fv3d.flow.problem import make_problem
    problem = make_problem(case)
    none = with_eddies(problem, np.zeros((case.mesh.n_cells, 3, 3)))
    np.testing.assert_array_equal(none.viscosity, problem.viscosity)
    assert with_eddies(make_problem(vortex_case()), np.ones((1, 3, 3))).case.turbulence is None


def test_models_that_cannot_be() -> None:
    for bad in (fv3d.WALE, "smagorinsky"):
        with pytest.raises(CaseError):
            vortex_case(turbulence=bad)
    with pytest.raises(CaseError):
        fv3d.WALE(coefficient=0.0)
    with pytest.raises(CaseError, match="run in time"):
        fv3d.solve_steady(vortex_case(turbulence=fv3d.WALE()), tolerance=1e-3, max_iterations=2)


def test_a_checkpoint_knows_the_model(tmp_path: Any) -> None:
    path, options = tmp_path / "run", {"time_step": 0.1, "start": vortices, "progress": False}
    case = vortex_case(turbulence=fv3d.WALE())
    whole = fv3d.solve_transient(case, end_time=0.6, **options)
    fv3d.solve_transient(case, end_time=0.3, checkpoint=fv3d.Checkpoint(path), **options)
    options["start"] = fv3d.read_checkpoint(path)
    rest = fv3d.solve_transient(case, end_time=0.6, **options)
    np.testing.assert_array_equal(whole.velocity, rest.velocity)
    with pytest.raises(CaseError, match="another turbulence model"):
        fv3d.solve_transient(vortex_case(turbulence=fv3d.WALE(0.6)), end_time=0.6, **options)


def plane_channel(viscosity: float) -> fv3d.Case:
    """Between plates at y = 0 and 1; uniform inflow."""
    mesh = box((0, 0, 0), (2, 1, 0.2), cells=(8, 10, 1))
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=viscosity), boundaries={
        "x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "x_max": fv3d.Outlet(), "y_min": fv3d.Wall(),
        "y_max": fv3d.Wall(), "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()})


def test_poor_resolution_is_told() -> None:
    """Cell Reynolds number and y+ against their definitions; told only where both are large."""
    for viscosity, poor in ((0.01, False), (1e-5, True)):
        case = plane_channel(viscosity)
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always", Fv3dWarning)
            run = fv3d.solve_transient(case, time_step=0.1, end_time=1.0, progress=False)
        assert any("does not resolve" in str(w.message) for w in caught) is poor
        found = resolution(run.problem, run.state)
        speed = np.linalg.norm(run.velocity, axis=1)
        width = np.cbrt(0.25 * 0.1 * 0.2)
        assert found.cell_reynolds == pytest.approx(speed.max() * width / viscosity)
        wall = run.mesh.boundaries["y_min"]
        cells = run.mesh.left[wall]
        friction = np.sqrt(viscosity * np.abs(run.velocity[cells, 0]) / 0.05)  # wall shear, by eye
        assert found.first_cell == pytest.approx((friction * 0.05 / viscosity).max(), rel=0.15)
    assert found.poor and "y+ up to" in str(found)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        eddied = fv3d.Case(case.mesh, case.fluid, boundaries=case.boundaries,
                           turbulence=fv3d.WALE())
        fv3d.solve_transient(eddied, time_step=0.1, end_time=1.0, progress=False)
