"""Periodic flows: given pressure drop or flow, steady and in time, against exact solutions."""

from __future__ import annotations

import warnings
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from made import distance, solved
from test_periodic_mesh import wavy

import fv3d
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh

FLUID = fv3d.Fluid(density=1.3, viscosity=0.02)


def channel(n: int = 8, **drive: Any) -> fv3d.Case:
    """Plane channel of unit height along x."""
    mesh = box((0, 0, 0), (0.6, 1, 0.1), cells=(4, n, 1))
    return fv3d.Case(mesh, FLUID, boundaries={
        "x_min": fv3d.Periodic("x_max", **drive), "y_min": fv3d.Wall(), "y_max": fv3d.Wall(),
        "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()})


def winding(kind: str = "hex", **drive: Any) -> fv3d.Case:
    """Channel between wavy walls, periodic along x and z: the section varies along x."""
    mesh = wavy(kind, 8) if kind == "hex" else wavy(kind, 5, size=0.1)
    return fv3d.Case(mesh, FLUID, boundaries={
        "x_min": fv3d.Periodic("x_max", **drive), "z_min": fv3d.Periodic("z_max"),
        "y_min": fv3d.Wall(), "y_max": fv3d.Wall()})


@pytest.mark.parametrize("backwards", [False, True])
def test_plane_channel_flow(backwards: bool) -> None:
    """Exact u = G y (1 - y) / (2 mu); the scheme's flow is off by half the square of a cell."""
    errors = []
    for n in (8, 16):
        case = channel(n, drop_per_length=-0.3 if backwards else 0.3)
        run = solved(case, tolerance=1e-9)
        y = run.mesh.cell_centre[:, 1]
        exact = (-1 if backwards else 1) * 0.3 / (2 * 0.02) * y * (1 - y)
        errors.append(np.abs(run.velocity[:, 0] - exact).max() / np.abs(exact).max())
        assert np.abs(run.velocity[:, 1:]).max() < 1e-9
        np.testing.assert_allclose(run.pressure, 0.0, atol=1e-9)
        assert not run.guided
    assert errors[1] < 0.3 * errors[0] < 0.01


@pytest.mark.parametrize("kind", ["hex", "tet"])
def test_the_drop_found_for_a_flow_gives_that_flow(kind: str) -> None:
    found = solved(winding(kind, volume_flow=0.21), tolerance=1e-8)
    pair = found.mesh.joined["x_min"]
    through = float((found.mass_flux[pair.faces] * pair.sign).sum()) / FLUID.density
    assert through == pytest.approx(0.21, rel=1e-7)
    drop = fv3d.pressure_drop(found, "x_min")
    assert drop > 0
    given = solved(winding(kind, drop_per_length=drop), tolerance=1e-8)
    assert distance(given.mesh, given.velocity, found.velocity) < 1e-5
    assert distance(given.mesh, given.pressure, found.pressure) < 1e-4
    area = float(np.abs(found.mesh.face_area[pair.faces, 0]).sum())
    speed = solved(winding(kind, mean_speed=0.21 / area), tolerance=1e-8)
    assert fv3d.pressure_drop(speed, "x_min") == pytest.approx(drop, rel=1e-5)
    for run in (found, given):
        budget = fv3d.momentum_budget(run)
        assert np.linalg.norm(budget.closure) < 1e-5 * budget.size
        assert np.linalg.norm(budget.artificial) == 0.0
        volume = run.mesh.cell_volume.sum()
        np.testing.assert_allclose(budget.body, (drop * volume, 0, 0), rtol=1e-5, atol=1e-12)
        assert np.abs(run.mesh.outflow @ run.mass_flux).sum() < 1e-8 * through
    assert "pressure drop" in str(found) and "found for 0.21 m3/s" in str(found)
    assert "readings" not in str(found)


def test_nothing_depends_on_where_the_period_is_cut() -> None:
    """The same channel cut elsewhere: the field moves along, the drop stays."""
    runs = []
    for start in (0.0, 0.5):
        mesh = box((0, 0, 0), (1.5, 1, 0.2), cells=(12, 8, 2))
        x = mesh.points
        bump = 0.25 * np.cos(2 * np.pi * (x[:, 0] + start) / 1.5) * (1 - x[:, 1])
        points = x + np.column_stack([0 * bump, bump, 0 * bump])
        faces = {name: [mesh.face_points[where]] for name, where in mesh.boundaries.items()}
        blocks = [(name, conn[np.argsort(cells)]) for name, conn, cells in mesh.cell_blocks]
        moved = fv3d.build_mesh(points, blocks, faces)
        sides = {b: fv3d.Wall() if b[0] == "y" else fv3d.Symmetry() for b in mesh.boundaries}
        sides |= {"x_min": fv3d.Periodic("x_max", volume_flow=0.1), "x_max": fv3d.Periodic("x_min")}
        runs.append(solved(fv3d.Case(moved, FLUID, boundaries=sides), tolerance=1e-9))
    one, other = runs
    assert fv3d.pressure_drop(one, "x_min") == pytest.approx(fv3d.pressure_drop(other, "x_min"),
                                                             rel=1e-6)
    r = np.random.default_rng(0)
    there = np.column_stack([r.uniform(0.55, 1.45, 60), r.uniform(0.35, 0.9, 60),
                             r.uniform(0.05, 0.15, 60)])
    here = there - (0.5, 0, 0)
    np.testing.assert_allclose(one.sample(there).velocity, other.sample(here).velocity, atol=1e-6)
    np.testing.assert_allclose(one.sample(there).pressure - other.sample(here).pressure, 0.0,
                               atol=1e-5 * np.ptp(one.pressure))


@pytest.mark.parametrize("drive", [{"volume_flow": 0.05}, {"drop_per_length": 0.1}])
def test_a_run_in_time_settles_to_the_steady_flow(drive: dict) -> None:
    case = winding(**drive)
    steady = solved(case, tolerance=1e-9)
    timed = fv3d.solve_transient(case, time_step=2.0, end_time=200.0, progress=False)
    assert distance(steady.mesh, timed.velocity, steady.velocity) < 1e-4
    assert fv3d.pressure_drop(timed, "x_min") == pytest.approx(
        fv3d.pressure_drop(steady, "x_min"), rel=1e-4)


def test_channel_started_from_rest_follows_the_exact_solution() -> None:
    """Starting Poiseuille flow: Fourier series of the heat equation (White, F. M. 2006, Viscous
    Fluid Flow, 3rd ed., ch. 3; series from memory, it satisfies the equation term by term)."""
    case, end = channel(24, drop_per_length=0.3), 6.0
    run = fv3d.solve_transient(case, start=(0.0, 0.0, 0.0), time_step=0.05, end_time=end,
                               progress=False)
    y, kinematic = run.mesh.cell_centre[:, 1], 0.02 / 1.3
    exact = 0.3 / (2 * 0.02) * y * (1 - y)
    for k in range(1, 60, 2):
        exact = exact - (4 * 0.3 / (0.02 * (k * np.pi)**3) * np.sin(k * np.pi * y)
                         * np.exp(-kinematic * (k * np.pi)**2 * end))
    np.testing.assert_allclose(run.velocity[:, 0], exact, atol=3e-3 * exact.max())


def test_a_given_flow_in_time_is_met_in_every_step() -> None:
    case = channel(8, mean_speed=0.5)
    run = fv3d.solve_transient(case, start=(0.0, 0.0, 0.0), time_step=0.1, end_time=0.5,
                               progress=False)
    pair = run.mesh.joined["x_min"]
    assert run.mass_flux[pair.faces] @ pair.sign == pytest.approx(1.3 * 0.5 * 0.1, rel=1e-9)
    assert np.average(run.velocity[:, 0], weights=run.mesh.cell_volume) == pytest.approx(0.5)
    assert fv3d.pressure_drop(run, "x_min") > 12 * 0.02 * 0.5  # the boundary layers are young


def test_decaying_vortices_in_a_box_without_boundaries() -> None:
    """Exact: Taylor, G. I. (1923), Philos. Mag. 46, 671-674; periodic along x and y."""
    errors, end = [], 1.0
    for n in (12, 24):
        mesh = box((0, 0, 0), (2 * np.pi, 2 * np.pi, 1.0), cells=(n, n, 1))
        made = fv3d.Case(mesh, fv3d.Fluid(density=1.3, viscosity=0.13), boundaries={
            "x_min": fv3d.Periodic("x_max"), "y_min": fv3d.Periodic("y_max"),
            "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()})
        run = fv3d.solve_transient(made, start=lambda x: vortices(x, 0.0), time_step=0.6 / n,
                                   end_time=end, progress=False)
        wanted = vortices(mesh.cell_centre, end)
        errors.append(distance(mesh, run.velocity, wanted))
        assert np.abs(run.mesh.outflow @ run.mass_flux).max() < 1e-8 * np.abs(run.mass_flux).max()
        momentum = np.einsum("ij,i->j", run.velocity, mesh.cell_volume)
        assert np.abs(momentum).max() < 1e-7 * mesh.cell_volume.sum()  # as well as the sweeps do
    assert errors[1] < 0.02 and errors[1] < 0.35 * errors[0]


def vortices(x: np.ndarray, time: float) -> np.ndarray:
    """Taylor's vortices with a kinematic viscosity of 0.1 m2/s."""
    sines, cosines = np.sin(x), np.cos(x)
    return np.exp(-0.2 * time) * np.stack([sines[:, 0] * cosines[:, 1],
                                           -cosines[:, 0] * sines[:, 1], 0 * x[:, 0]], axis=1)


def test_restart_knows_the_drop() -> None:
    case = winding(mean_speed=0.3)
    first = solved(case, tolerance=1e-7)
    again = fv3d.solve_steady(replace(case, numerics=fv3d.Numerics()), start=first, tolerance=1e-6,
                              max_iterations=3, progress=False)
    assert len(again.history["iteration"]) == 1
    assert fv3d.pressure_drop(again, "x_min") == pytest.approx(fv3d.pressure_drop(first, "x_min"),
                                                               rel=1e-5)


def test_files_keep_the_mesh_as_it_was(tmp_path: Path) -> None:
    import pyvista
    run = solved(winding(drop_per_length=0.1), tolerance=1e-5)
    fv3d.write_vtk(run, tmp_path / "run.vtu")
    grid = pyvista.read(tmp_path / "run.vtu")
    plain = wavy("hex", 8)
    assert grid.n_cells == plain.n_cells and grid.n_points == len(plain.points)
    np.testing.assert_allclose(np.sort(grid.compute_cell_sizes()["Volume"]),
                               np.sort(run.mesh.cell_volume), rtol=1e-3)  # VTK splits warped cells


def test_feedback_in_a_periodic_flow() -> None:
    """A reading draws the flow to it; the drive is no artificial force."""
    case = winding(mean_speed=0.3)
    plain = solved(case, tolerance=1e-7)
    place = np.array([[0.05, 0.5, 0.35]])
    u = plain.sample(place).velocity[0]
    readings = fv3d.Readings(pd.DataFrame({"x [m]": [0.05], "y [m]": [0.5], "z [m]": [0.35],
                              "u [m/s]": [u[0] * 1.2], "u_std [m/s]": [0.01]}))
    guided = fv3d.solve_steady(case, sources=[fv3d.Feedback(readings, radius=0.3)], start=plain,
                               tolerance=1e-6, max_iterations=600, progress=False)
    assert guided.outcome.good
    assert 1.1 * u[0] < guided.sample(place).velocity[0, 0] < 1.2 * u[0]
    pair = guided.mesh.joined["x_min"]
    assert (guided.mass_flux - plain.mass_flux)[pair.faces] @ pair.sign == pytest.approx(
        0.0, abs=1e-6 * np.abs(plain.mass_flux[pair.faces]).sum())
    budget = fv3d.momentum_budget(guided)
    assert np.linalg.norm(budget.closure) < 1e-4 * budget.size


MESH = box((0, 0, 0), (1, 1, 1), cells=(3, 3, 3))


def sides(**changed: Any) -> dict[str, Any]:
    return {b: fv3d.Wall() for b in MESH.boundaries if b != "x_max"} | changed


BAD: dict[str, Any] = {
    "no name": lambda: fv3d.Periodic(3),  # type: ignore[arg-type]
    "two drives": lambda: fv3d.Periodic("x_max", mean_speed=1.0, drop_per_length=1.0),
    "a drive that is no number": lambda: fv3d.Periodic("x_max", volume_flow=float("nan")),
    "a given flow of zero": lambda: fv3d.Periodic("x_max", mean_speed=0.0),
    "a drive in words": lambda: fv3d.Periodic("x_max", drop_per_length="much"),  # type: ignore
    "a partner that is a wall": lambda: case(x_min=fv3d.Periodic("x_max"), x_max=fv3d.Wall()),
    "a partner not in the mesh": lambda: case(x_min=fv3d.Periodic("outlet"), x_max=fv3d.Wall()),
    "a partner of another pair": lambda: case(x_min=fv3d.Periodic("x_max"),
                                              x_max=fv3d.Periodic("y_min")),
    "drives on both sides": lambda: case(x_min=fv3d.Periodic("x_max", mean_speed=1.0),
                                         x_max=fv3d.Periodic("x_min", mean_speed=1.0)),
    "a side around the corner": lambda: case(x_min=fv3d.Periodic("y_max")),
    "a drop of no pair": lambda: fv3d.pressure_drop(solved(channel(drop_per_length=1.0)), "y_min"),
}


def case(**changed: Any) -> fv3d.Case:
    return fv3d.Case(MESH, FLUID, boundaries=sides(**changed))


@pytest.mark.parametrize("made", BAD.values(), ids=BAD)
def test_bad_input_ends_in_our_own_words(made: Any) -> None:
    with pytest.raises((fv3d.BoundaryError, fv3d.MeshError, fv3d.CaseError)) as caught:
        made()
    assert "remedy" in str(caught.value)


def test_the_mesh_given_stays_as_it_was() -> None:
    before: Mesh = MESH
    made = case(x_min=fv3d.Periodic("x_max"))
    assert set(before.boundaries) - set(made.mesh.boundaries) == {"x_min", "x_max"}
    assert "x_min to x_max" in repr(made.mesh)
    again = replace(made, boundaries=sides(x_min=fv3d.Periodic("x_max", mean_speed=1.0)))
    assert again.mesh is made.mesh and again.periodic["x_min"].mean_speed == 1.0


@pytest.mark.parametrize("in_time", [False, True])
def test_a_stored_run_goes_on_to_the_last_bit(tmp_path: Path, in_time: bool) -> None:
    """The drop that was found, and in time what it does within a step, are stored too."""
    case = winding(mean_speed=0.3)

    def run(length: int, **options: Any) -> fv3d.Run:
        if in_time:
            return fv3d.solve_transient(case, time_step=0.1, end_time=0.1 * length, progress=False,
                                        **options)
        return fv3d.solve_steady(case, tolerance=1e-30, max_iterations=length, progress=False,
                                 **options)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", fv3d.Fv3dWarning)  # these runs end early
        run(6, checkpoint=fv3d.Checkpoint(tmp_path / "stored"))
        gone_on = run(12, start=fv3d.read_checkpoint(tmp_path / "stored"))
        whole = run(12)
    assert gone_on.velocity.tobytes() == whole.velocity.tobytes()
    assert fv3d.pressure_drop(gone_on, "x_min") == fv3d.pressure_drop(whole, "x_min")
