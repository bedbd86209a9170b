"""Inlets from tables of points and developed profiles."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from contracts import linear, skewed
from scipy.interpolate import griddata

import fv3d
from fv3d.errors import BoundaryError, Fv3dWarning, ReadingError
from fv3d.flow.inlets import beyond_shares
from fv3d.flow.problem import make_problem
from fv3d.mesh.surfaces import edge_pairs, rim_edges

WATER = fv3d.Fluid(density=1000.0, viscosity=1e-3)


def grid(n: int = 5, low: float = 0.0, high: float = 1.0) -> np.ndarray:
    """(n * n, 3) points of the plane x = 0 of the unit cube."""
    y, z = np.meshgrid(*[np.linspace(low, high, n)] * 2)
    return np.column_stack([np.zeros(n * n), y.ravel(), z.ravel()])


def fixed(mesh: fv3d.Mesh, table: fv3d.InletTable) -> np.ndarray:
    """(n, 3) velocity on the faces of x_min of a case."""
    sides = {b: fv3d.Wall() for b in mesh.boundaries}
    case = fv3d.Case(mesh, WATER, boundaries=sides | {"x_min": fv3d.Inlet(table),
                                                      "x_max": fv3d.Outlet()})
    faces = mesh.boundaries["x_min"]
    return make_problem(case).table.fixed[faces.start - mesh.n_internal:
                                          faces.stop - mesh.n_internal]


@pytest.mark.parametrize("tetra", [False, True])
def test_a_linear_profile_is_met_exactly_up_to_the_rim(tetra: bool) -> None:
    mesh, points = skewed(4, tetra=tetra), grid()
    got = fixed(mesh, fv3d.InletTable(points, linear(points)))
    np.testing.assert_allclose(got, linear(mesh.face_centre[mesh.boundaries["x_min"]]), atol=1e-13)


def test_scattered_points_against_scipy() -> None:
    """Inside the hull as scipy's griddata, linear; beyond it as its nearest point."""
    random = np.random.default_rng(3)
    points = np.column_stack([0.02 * random.normal(size=40), random.uniform(0.1, 0.9, (40, 2))])
    velocity = random.normal(size=(40, 3))
    mesh = skewed(5)
    with pytest.warns(Fv3dWarning, match="of the inlet 'x_min' lie beyond the points"):
        got = fixed(mesh, fv3d.InletTable(points, velocity))
    faces = mesh.boundaries["x_min"]
    asked = mesh.face_centre[faces, 1:]
    inside = griddata(points[:, 1:], velocity, asked, method="linear")
    nearest = griddata(points[:, 1:], velocity, asked, method="nearest")
    beyond = np.isnan(inside[:, 0])
    assert 0 < beyond.sum() < len(beyond)
    np.testing.assert_allclose(got[~beyond], inside[~beyond], atol=1e-12)
    np.testing.assert_allclose(got[beyond], nearest[beyond], atol=1e-15)
    share, = beyond_shares(mesh, {"x_min": fv3d.Inlet(fv3d.InletTable(points, velocity))}).values()
    size = mesh.face_area_magnitude[faces]
    assert share == pytest.approx(size[beyond].sum() / size.sum(), rel=1e-13)


def test_the_extrapolated_share_stands_on_the_sheet() -> None:
    mesh, points = fv3d.box((0, 0, 0), (1, 1, 1), cells=(3, 4, 4)), grid(3, low=0.2, high=1.0)
    table = fv3d.InletTable(points, np.tile([0.001, 0.0, 0.0], (9, 1)))
    sides = {b: fv3d.Symmetry() for b in mesh.boundaries}
    case = fv3d.Case(mesh, WATER, boundaries=sides | {"x_min": fv3d.Inlet(table),
                                                      "x_max": fv3d.Outlet()})
    with pytest.warns(Fv3dWarning, match=r"43\.8%"):  # 7 of 16 faces
        run = fv3d.solve_steady(case, tolerance=1e-5, max_iterations=200, progress=False)
    assert "inlet      43.8% of 'x_min' lie beyond the points of its table" in str(run)


def test_points_on_a_line_are_interpolated_along_it() -> None:
    height = np.array([0.0, 0.3, 0.7, 1.0])
    points = np.column_stack([np.zeros(4), height, np.full(4, 0.5)])
    speed = np.array([0.0, 1.0, 0.8, 0.0])
    mesh = skewed(4)
    got = fixed(mesh, fv3d.InletTable(points, np.outer(speed, (1.0, 0.0, 0.0))))
    wanted = np.interp(mesh.face_centre[mesh.boundaries["x_min"], 1], height, speed)
    np.testing.assert_allclose(got[:, 0], wanted, atol=1e-12)


def test_a_table_is_a_function_of_points_too() -> None:
    """In its own plane, wherever that lies."""
    turn = np.linalg.qr(np.random.default_rng(0).normal(size=(3, 3)))[0]
    points = grid() @ turn.T + 3.0
    table = fv3d.InletTable(points, linear(points))
    asked = grid(4, 0.1, 0.9) @ turn.T + 3.0
    np.testing.assert_allclose(table(asked), linear(asked), atol=1e-12)


def frame(**changed: object) -> pd.DataFrame:
    points = grid(3)
    columns = {"x [mm]": 1e3 * points[:, 0], "y [mm]": 1e3 * points[:, 1],
               "z [mm]": 1e3 * points[:, 2], "u [cm/s]": 100.0 + np.arange(9.0), "u_std [m/s]": 0.1}
    columns |= changed
    return pd.DataFrame({key: value for key, value in columns.items() if value is not None})


def test_readings_become_a_table_in_si() -> None:
    table = fv3d.inlet_table(frame(), unmeasured=(0.0, 0.2, 0.0))
    np.testing.assert_allclose(table.points, grid(3), atol=1e-15)
    np.testing.assert_allclose(table.velocity[:, 0], 1.0 + 0.01 * np.arange(9.0), rtol=1e-14)
    np.testing.assert_allclose(table.velocity[:, 1], 0.2, rtol=1e-14)
    np.testing.assert_allclose(table.velocity[:, 2], 0.0, atol=1e-15)
    speeds = frame(**{"u [cm/s]": None, "u_std [m/s]": None, "speed [m/s]": 2.0,
                      "speed_std [m/s]": 0.1})
    table = fv3d.inlet_table(fv3d.Readings(speeds), direction=(3.0, 4.0, 0.0))
    np.testing.assert_allclose(table.velocity, np.tile([1.2, 1.6, 0.0], (9, 1)), rtol=1e-14)
    slanted = frame(**{"u [cm/s]": None, "u_std [m/s]": None, "along [m/s]": 2.0,
                       "along_std [m/s]": 0.1, "nx": 1.0, "ny": 1.0, "nz": 0.0})
    table = fv3d.inlet_table(slanted, unmeasured=(1.0, -1.0, 0.5))
    side = np.sqrt(2.0)
    np.testing.assert_allclose(table.velocity, np.tile([side + 1, side - 1, 0.5], (9, 1)),
                               rtol=1e-13)


def test_directions_that_were_not_measured_must_be_stated() -> None:
    with pytest.raises(ReadingError, match="not measured"):
        fv3d.inlet_table(frame())
    three = frame(**{"v [m/s]": 0.0, "v_std [m/s]": 0.1, "w [m/s]": 0.5, "w_std [m/s]": 0.1})
    np.testing.assert_allclose(fv3d.inlet_table(three).velocity[:, 2], 0.5, rtol=1e-14)


def rectangle_speed(y: np.ndarray, z: np.ndarray, *, a: float, b: float,
                    terms: int = 200) -> np.ndarray:
    """Speed over (pressure gradient / viscosity) in |y| < a, |z| < b.

    Series of White, F. M. (2006), Viscous Fluid Flow, 3rd ed., McGraw-Hill, section 3-3.3.
    """
    odd = np.arange(1, 2 * terms, 2)[:, None]
    k = 0.5 * np.pi * odd / a
    decay = (np.exp(k * (np.abs(z) - b)) + np.exp(-k * (np.abs(z) + b))) / (1 + np.exp(-2 * k * b))
    return 16 * a**2 / np.pi**3 * ((-1.0)**((odd - 1) // 2) / odd**3 * (1 - decay)
                                   * np.cos(k * y)).sum(axis=0)


@pytest.mark.parametrize("kind", ["hex", "tet", "skewed"])
def test_developed_profile_of_a_rectangular_duct(kind: str) -> None:
    """Second order towards the series; the pressure gradient follows from the flow rate."""
    errors = []
    for n in (8, 16, 32):
        mesh = fv3d.box((0, 0, 0), (2.0, 1.0, 0.5), cells=(2 * n, n, 1), tetra=kind == "tet",
                        skew=0.15 if kind == "skewed" else 0.0)
        got = fv3d.developed_profile(mesh, "z_min", fluid=WATER, flow_rate=0.004)
        faces = mesh.boundaries["z_min"]
        centre, size = mesh.face_centre[faces], mesh.face_area_magnitude[faces]
        velocity, beyond = got.on_faces(centre, mesh.face_normal[faces])
        assert not beyond.any()
        assert velocity[:, 2] @ size == pytest.approx(0.004, rel=1e-12)
        np.testing.assert_allclose(velocity[:, :2], 0.0, atol=1e-15)
        exact = rectangle_speed(centre[:, 0] - 1.0, centre[:, 1] - 0.5, a=1.0, b=0.5)
        odd = np.arange(1, 99, 2)
        mean = (1.0 - 384.0 / np.pi**5 * (np.tanh(odd * np.pi / 4) / odd**5).sum()) / 3.0
        exact *= 0.004 / (2.0 * mean)
        errors.append((np.sqrt(np.average((velocity[:, 2] - exact)**2, weights=size)) / 0.002,
                       abs(got.pressure_gradient * mean / (-1e-3 * 0.002) - 1.0)))
    profile_error, gradient_error = np.array(errors).T
    assert profile_error[2] < 3e-3 and gradient_error[2] < 5e-3
    for error in (profile_error, gradient_error):
        assert np.log2(error[0] / error[2]) / 2 > 1.8


@pytest.mark.parametrize("options", [{}, {"tetra": True}, {"quadrants": 1}, {"wedge": True}])
def test_developed_profile_of_a_pipe(options: dict) -> None:
    """Hagen and Poiseuille: w = 2 U (1 - r^2 / R^2), dp/dz = -8 mu U / R^2."""
    errors = []
    for core in (4, 8):
        mesh = fv3d.pipe(length=0.1, diameter=2.0, cells=2, core=core, equal_area=True, **options)
        free = ("symmetry",) if "quadrants" in options else ()
        got = fv3d.developed_profile(mesh, "inlet", fluid=WATER, mean_speed=0.5, free=free)
        faces = mesh.boundaries["inlet"]
        centre, size = mesh.face_centre[faces], mesh.face_area_magnitude[faces]
        exact = 1.0 - (centre[:, :2]**2).sum(axis=1)
        speed = got.on_faces(centre, mesh.face_normal[faces])[0][:, 2]
        errors.append([np.sqrt(np.average((speed - exact)**2, weights=size)),
                       abs(got.pressure_gradient / (-8.0 * 1e-3 * 0.5) - 1.0)])
        assert got.mean_speed == pytest.approx(0.5, rel=1e-14)
        assert got.peak_speed == pytest.approx(1.0, rel=0.03)
    rate = np.log2(np.array(errors[0]) / errors[1])
    assert errors[1][0] < 6e-3 and errors[1][1] < 6e-3
    assert rate.min() > 1.6


def test_developed_profile_between_planes_of_symmetry_is_the_parabola() -> None:
    mesh = fv3d.box((0, 0, 0), (0.2, 1, 0.3), cells=(1, 40, 3))
    got = fv3d.developed_profile(mesh, "x_min", fluid=WATER, mean_speed=2.0,
                                 free=("z_min", "z_max"))
    height = got.points[:, 1]
    np.testing.assert_allclose(got.velocity[:, 0], 12.0 * height * (1.0 - height), atol=4e-3)
    assert got.pressure_gradient == pytest.approx(-12.0 * 1e-3 * 2.0, rel=2e-3)
    assert "pressure gradient" in str(got)


def test_developed_profile_serves_another_mesh_of_the_same_duct() -> None:
    fine = fv3d.box((0, 0, 0), (0.1, 1, 1), cells=(1, 30, 30))
    coarse = skewed(5)
    got = fixed(coarse, fv3d.developed_profile(fine, "x_min", fluid=WATER, mean_speed=1.0))
    centre = coarse.face_centre[coarse.boundaries["x_min"]]
    exact = rectangle_speed(centre[:, 1] - 0.5, centre[:, 2] - 0.5, a=0.5, b=0.5)
    np.testing.assert_allclose(got[:, 0], exact / 0.0351443, rtol=0.02)


def test_a_bent_inlet_has_no_developed_profile() -> None:
    mesh = fv3d.pipe(length=0.1, diameter=2.0, cells=2)
    with pytest.raises(BoundaryError, match="flat"):
        fv3d.developed_profile(mesh, "wall", fluid=WATER, mean_speed=1.0)


def test_edges_around_a_boundary_and_what_lies_beside_them() -> None:
    """Against a plain loop over all pairs of faces, on triangles and quadrilaterals."""
    mesh = fv3d.mixed_box((0, 0, 0), (1, 1, 1), cells=(4, 3, 3))
    found, beside = rim_edges(mesh, "x_min")
    edges: dict[tuple[int, int], list[str]] = {}
    for name, faces in mesh.boundaries.items():
        for row in mesh.face_points[faces]:
            ring = row[row >= 0].tolist()
            for one, other in zip(ring, [*ring[1:], ring[0]]):
                edges.setdefault((min(one, other), max(one, other)), []).append(name)
    wanted = {edge: next(n for n in names if n != "x_min") for edge, names in edges.items()
              if names.count("x_min") == 1}
    assert {tuple(edge): name for edge, name in zip(found.tolist(), beside)} == wanted
    middle = mesh.points[found].mean(axis=1)
    for name, place in zip(beside, middle):
        axis, side = "xyz".index(name[0]), float(name.endswith("max"))
        assert place[axis] == side


def test_pairs_of_faces_beside_each_other() -> None:
    mesh = skewed(4, tetra=True)
    rows = mesh.face_points[mesh.boundaries["z_min"]]
    one, other = edge_pairs(rows)
    found = {frozenset(pair) for pair in zip(one.tolist(), other.tolist())}
    wanted = {frozenset((a, b)) for a in range(len(rows)) for b in range(a)
              if len(set(rows[a, :3]) & set(rows[b, :3])) == 2}
    assert found == wanted
