"""Coefficients, flow rates, wall values as files, profiles, separation and reattachment."""

from __future__ import annotations

from pathlib import Path

import meshio
import numpy as np
import pytest
import pyvista as pv
from contracts import linear, skewed
from made import made_run, solved

import fv3d
from fv3d.errors import CaseError, Fv3dWarning

REFERENCE = fv3d.Reference(density=1.2, speed=3.0, area=0.5, length=0.2)


def some_run(kind: str = "tet") -> fv3d.Run:
    mesh = {"hex": lambda: skewed(4), "tet": lambda: skewed(4, tetra=True),
            "mixed": lambda: fv3d.mixed_box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4)),
            "warped": lambda: fv3d.box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4), warp=0.1)}[kind]()
    return made_run(mesh, lambda x: linear(x) + x**2, lambda x: x @ [0.4, -1.3, 0.8] + 2.0)


def test_coefficients_are_forces_over_the_reference() -> None:
    """Both by the definition: c = F / (rho U^2 / 2 A), c_m = M / (rho U^2 / 2 A L)."""
    run, about = some_run(), (0.1, 0.2, -0.3)
    got = fv3d.force_coefficients(run, "y_max", reference=REFERENCE, centre=about)
    force = fv3d.force(run, "y_max", centre=about)
    np.testing.assert_allclose(got.total * 0.5 * 1.2 * 9.0 * 0.5, force.total, rtol=1e-13)
    np.testing.assert_allclose(got.friction * 0.5 * 1.2 * 9.0 * 0.5, force.friction, rtol=1e-13)
    np.testing.assert_allclose(got.moment * 0.5 * 1.2 * 9.0 * 0.5 * 0.2, force.moment, rtol=1e-13)
    assert REFERENCE.dynamic_pressure == pytest.approx(5.4, rel=1e-15)
    assert got.along((0.0, 2.0, 0.0)) == pytest.approx(got.total[1], rel=1e-14)
    assert got.along((3.0, 4.0, 0.0)) == pytest.approx(0.6 * got.total[0] + 0.8 * got.total[1])
    sheet = str(got)
    assert "coefficients of 'y_max'" in sheet and "length 0.2 m" in sheet
    assert "moments about (0.1, 0.2, -0.3) m" in sheet


def test_flow_rate_is_the_integral_of_the_velocity() -> None:
    """One face value times area is exact for a linear velocity on flat faces."""
    mesh = skewed(4, tetra=True)
    run = made_run(mesh, linear, lambda x: x[:, 0])
    middle = {"x_min": (0.0, 0.5, 0.5), "z_max": (0.5, 0.5, 1.0)}
    for (name, centre), axis, sign in zip(middle.items(), (0, 2), (-1.0, 1.0)):
        wanted = sign * linear(np.array([centre]))[0, axis]
        assert fv3d.flow_rate(run, name) == pytest.approx(wanted, rel=1e-12)


def branching(width: float = 0.5) -> fv3d.Run:
    """Channel with one inlet, an outlet at its end and one in its roof."""
    mesh = fv3d.box((0, 0, 0), (2, 1, 0.2), cells=(8, 4, 1))
    roof, n = mesh.boundaries["y_max"], mesh.n_internal
    corners = [mesh.face_points[faces] for faces in mesh.boundaries.values()]
    names = dict(zip(mesh.boundaries, corners))
    at = mesh.face_centre[roof, 0]
    open_ = (at > 1.0) & (at < 1.0 + width)
    parts = {**names, "roof": names["y_max"][~open_], "vent": names.pop("y_max")[open_]}
    del parts["y_max"]
    mesh = fv3d.build_mesh(mesh.points, [(k, c) for k, c, _ in mesh.cell_blocks],
                           {name: [rows] for name, rows in parts.items()})
    assert mesh.n_internal == n
    sides = {b: fv3d.Wall() for b in mesh.boundaries}
    sides |= {"z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry(), "x_max": fv3d.Outlet(),
              "vent": fv3d.Outlet(), "x_min": fv3d.Inlet((1.0, 0.0, 0.0))}
    return solved(fv3d.Case(mesh, fv3d.Fluid(density=2.0, viscosity=0.2), boundaries=sides))


def test_flow_split_of_two_outlets() -> None:
    run = branching()
    split = fv3d.flow_split(run)
    assert split.net["x_min"] == pytest.approx(-0.2, rel=1e-12)
    assert split.outflow == pytest.approx(0.2, rel=1e-9)
    assert abs(split.imbalance) < 1e-10
    assert split.share("vent") + split.share("x_max") == pytest.approx(1.0, rel=1e-9)
    assert 0.05 < split.share("vent") < 0.95
    assert split.share("x_min") == pytest.approx(-1.0, rel=1e-9)
    assert split.share("roof") == 0.0
    assert split.net["vent"] == pytest.approx(fv3d.flow_rate(run, "vent"), rel=1e-14)
    lines = str(split).splitlines()
    assert [line.split()[0] for line in lines[1:-1]] == ["x_min", "x_max", "vent"]
    assert "left over" in lines[-1]


def test_flow_that_returns_through_the_same_boundary_is_told() -> None:
    mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(2, 4, 2))
    run = made_run(mesh, lambda x: np.outer(x[:, 1] - 0.25, (1.0, 0.0, 0.0)), lambda x: x[:, 0])
    split = fv3d.flow_split(run)
    assert split.net["x_max"] == pytest.approx(0.25, rel=1e-13)
    assert split.back["x_max"] == pytest.approx(0.25 * 0.125, rel=1e-13)  # the lowest row of faces


@pytest.mark.parametrize("ending", ["vtp", "vtu"])
@pytest.mark.parametrize("kind", ["hex", "tet", "mixed", "warped"])
def test_surface_file_sums_to_the_force(kind: str, ending: str, tmp_path: Path) -> None:
    run, names = some_run(kind), ["x_min", "y_max"]
    path = fv3d.write_surface(run, names, path=tmp_path / f"walls.{ending}")
    got = pv.read(path)
    size = np.linalg.norm(got.cell_data["area"], axis=1)
    for k, name in enumerate(names):
        rows = got.cell_data["boundary"] == k
        force = fv3d.force(run, name)
        friction = (got.cell_data["wall_shear"] * size[:, None])[rows].sum(axis=0)
        np.testing.assert_allclose(friction, force.friction, atol=1e-12 * np.abs(friction).max())
        if kind != "warped":  # there the slope of the pressure pushes too
            push = (got.cell_data["pressure"][:, None] * got.cell_data["area"])[rows].sum(axis=0)
            np.testing.assert_allclose(push, force.pressure, atol=1e-12 * np.abs(push).max())
    if kind != "warped":  # VTK measures the areas for itself
        vtk_size = got.compute_cell_sizes(length=False, volume=False).cell_data["Area"]
        np.testing.assert_allclose(vtk_size, size, rtol=1e-12)
    assert got.n_cells == sum(run.mesh.boundaries[n].stop - run.mesh.boundaries[n].start
                              for n in names)


def test_surface_file_is_read_by_meshio_in_the_order_of_the_faces(tmp_path: Path) -> None:
    run = some_run("hex")
    got = meshio.read(fv3d.write_surface(run, ["z_max"], path=tmp_path / "lid.vtu"))
    faces = run.mesh.boundaries["z_max"]
    np.testing.assert_array_equal(got.cell_data["pressure"][0], run.face_pressure[faces])
    corners = got.points[got.cells[0].data]
    np.testing.assert_allclose(corners.mean(axis=1)[:, 2], 1.0)
    np.testing.assert_allclose(got.points[got.cells[0].data],
                               run.mesh.points[run.mesh.face_points[faces]])


def test_profile_along_a_line() -> None:
    run = made_run(skewed(4, tetra=True), linear, lambda x: 3.0 * x[:, 0] - x[:, 2])
    got = fv3d.profile(run, start=(0.1, 0.2, 0.1), end=(0.7, 1.0, 0.9), count=7)
    np.testing.assert_allclose(got.velocity, linear(got.points), atol=1e-12)
    np.testing.assert_allclose(got.pressure, got.points @ [3.0, 0.0, -1.0], atol=1e-12)
    np.testing.assert_allclose(got.distance, np.linalg.norm(got.points - got.points[0], axis=1))
    np.testing.assert_array_equal(got.points[-1], (0.7, 1.0, 0.9))
    assert got.inside.all()
    assert list(got.frame().columns) == ["distance [m]", "x [m]", "y [m]", "z [m]", "u [m/s]",
                                         "v [m/s]", "w [m/s]", "p [Pa]"]


def test_profile_through_a_gap() -> None:
    run = made_run(skewed(3), linear, lambda x: x[:, 0])
    with pytest.raises(CaseError, match="outside the mesh"):
        fv3d.profile(run, start=(0.5, 0.5, -1.0), end=(0.5, 0.5, 0.9), count=20)
    with pytest.warns(Fv3dWarning, match="10 of 20 points of the profile lie outside"):
        got = fv3d.profile(run, start=(0.5, 0.5, -1.0), end=(0.5, 0.5, 0.92), count=20, gaps=True)
    np.testing.assert_array_equal(got.inside, got.points[:, 2] >= 0)
    assert np.isnan(got.velocity[~got.inside]).all()
    np.testing.assert_allclose(got.velocity[got.inside], linear(got.points[got.inside]))


@pytest.mark.parametrize("tetra", [False, True])
def test_reversals_of_a_given_shear(tetra: bool) -> None:
    """Shear (x - 0.37) (x - 0.81): separation at 0.37, reattachment at 0.81."""
    mesh = fv3d.box((0, 0, 0), (1, 0.1, 0.1), cells=(40, 2, 2), tetra=tetra)
    shear = np.poly([0.37, 0.81])
    run = made_run(mesh, lambda x: np.outer(x[:, 1] * np.polyval(shear, x[:, 0]), (1, 0, 0)),
                   lambda x: x[:, 0])
    got = fv3d.shear_reversals(run, "y_min", along=(1.0, 0.0, 0.0))
    close = 0.003 if tetra else 0.001
    leaves, joins = got.points[~got.reattaching, 0], got.points[got.reattaching, 0]
    assert len(leaves) and len(joins)
    np.testing.assert_allclose(leaves, 0.37, atol=close)
    np.testing.assert_allclose(joins, 0.81, atol=close)
    back = fv3d.shear_reversals(run, "y_min", along=(-2.0, 0.0, 0.0))
    np.testing.assert_allclose(back.points[back.reattaching, 0], 0.81, atol=close)
    assert back.points[0, 0] > back.points[-1, 0]
    assert "reattaching" in str(got) and "separating" in str(got)
    none = fv3d.shear_reversals(run, "y_max", along=(0.0, 0.0, 1.0))
    assert len(none.points) == 0 and "keeps its sign" in str(none)


def test_reattachment_behind_a_step_is_where_the_stream_at_the_wall_turns() -> None:
    mesh = fv3d.backward_step(step=1.0, height=1.0, inlet_length=1.0, outlet_length=10.0,
                              depth=0.5, first_layer=0.1, growth=1.25, coarsest=0.3)

    def profile(x: np.ndarray) -> np.ndarray:
        return np.outer(6.0 * (x[:, 1] - 1.0) * (2.0 - x[:, 1]), (1.0, 0.0, 0.0))
    run = solved(fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.02), boundaries={
        "inlet": fv3d.Inlet(profile), "outlet": fv3d.Outlet(), "step": fv3d.Wall(),
        "floor": fv3d.Wall(), "roof": fv3d.Wall(), "sides": fv3d.Symmetry()}), tolerance=1e-6)
    got = fv3d.shear_reversals(run, "floor", along=(1.0, 0.0, 0.0))
    joins = got.points[got.reattaching, 0].max()
    line = fv3d.profile(run, start=(0.5, 0.05, 0.25), end=(9.0, 0.05, 0.25), count=851)
    turn = line.points[np.flatnonzero(np.diff(np.sign(line.velocity[:, 0])) > 0)[-1], 0]
    assert 2.0 < turn < 6.0
    assert joins == pytest.approx(turn, abs=0.05)
