"""Distance to walls against geometry and VTK."""

from __future__ import annotations

import numpy as np
import pytest
import pyvista as pv
from contracts import skewed

import fv3d
from fv3d.mesh.periodic import join_periodic
from fv3d.mesh.wall_distance import triangle_distance


@pytest.mark.parametrize("tetra", [False, True])
def test_box(tetra: bool) -> None:
    mesh = fv3d.box((0, 0, 0), (2, 1, 0.5), cells=(6, 5, 4), tetra=tetra, skew=0.15)
    x, y, z = mesh.cell_centre.T
    np.testing.assert_allclose(fv3d.wall_distance(mesh, ["y_min", "y_max", "x_min"]),
                               np.minimum(np.minimum(y, 1 - y), x), atol=1e-14)
    np.testing.assert_allclose(fv3d.wall_distance(mesh, ["z_max"]), 0.5 - z, atol=1e-14)


def test_points_beyond_an_edge_and_a_corner() -> None:
    mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(2, 2, 2))
    points = np.array([[-3.0, 0.5, -4.0], [2.0, 3.0, -1.0], [0.5, 0.5, 1.5], [0.2, 0.3, 0.0]])
    np.testing.assert_allclose(fv3d.wall_distance(mesh, ["z_min"], points=points),
                               [5.0, np.sqrt(1 + 4 + 1), 1.5, 0.0], atol=1e-14)


@pytest.mark.parametrize("tetra", [False, True])
def test_pipe(tetra: bool) -> None:
    """R - r of the circle, less up to the sagitta of the polygon's sides."""
    mesh = fv3d.pipe(length=1.0, diameter=2.0, cells=4, core=4, tetra=tetra)
    got = fv3d.wall_distance(mesh, ["wall"])
    circle = 1.0 - np.linalg.norm(mesh.cell_centre[:, :2], axis=1)
    corners = mesh.points[mesh.face_points[mesh.boundaries["wall"]][:, :3]]
    halfway = 0.5 * (corners + np.roll(corners, 1, axis=1))[:, :, :2]
    sagitta = 1.0 - np.linalg.norm(halfway, axis=2).min()
    assert 1e-3 < sagitta < 0.01
    assert np.all(got <= circle + 1e-12) and np.all(got >= circle - sagitta - 1e-12)
    axis = fv3d.wall_distance(mesh, ["wall"], points=np.array([[0.0, 0.0, 0.4]]))
    assert axis[0] == pytest.approx(1.0 - sagitta, rel=1e-9)


@pytest.mark.parametrize("kind", ["strut", "graded", "warped"])
def test_against_vtk(kind: str) -> None:
    """vtkImplicitPolyDataDistance to the same triangles."""
    if kind == "strut":
        mesh = fv3d.channel_with_block(
            length=1.0, height=0.6, depth=0.4, lower=(0.3, 0.2, 0.1), upper=(0.6, 0.4, 0.3),
            first_layer=0.02, growth=1.3)
        names = [name for name in mesh.boundaries if "block" in name]
    elif kind == "graded":
        line = np.concatenate([[0.0], np.cumsum(1.5 ** np.arange(12.0))])
        mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(12, 12, 3),
                        grading=[line / line[-1], line / line[-1], None])
        names = ["y_min", "x_max"]
    else:
        mesh, names = fv3d.box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4), warp=0.1), ["y_min", "z_max"]
        points = mesh.points + 0.05 * np.sin(7 * mesh.points[:, [1, 2, 0]])
        mesh = fv3d.build_mesh(points, [(k, c) for k, c, _ in mesh.cell_blocks],
                               {n: [mesh.face_points[f]] for n, f in mesh.boundaries.items()})
    got = fv3d.wall_distance(mesh, names)
    rows = np.concatenate([mesh.face_points[mesh.boundaries[name]] for name in names])
    ring = mesh.points[rows]
    triangles = np.concatenate([np.stack([ring.mean(axis=1), ring[:, k], ring[:, (k + 1) % 4]], 1)
                                for k in range(4)])
    surface = pv.PolyData(triangles.reshape(-1, 3), faces=np.column_stack(
        [np.full(len(triangles), 3), np.arange(3 * len(triangles)).reshape(-1, 3)]))
    cloud = pv.PolyData(np.array(mesh.cell_centre)).compute_implicit_distance(surface)
    np.testing.assert_allclose(got, np.abs(cloud["implicit_distance"]), atol=2e-8)


def test_images_of_walls_count_across_joined_boundaries() -> None:
    """A block near one end of a periodic channel is near the other end's cells, too."""
    mesh = fv3d.box((0, 0, 0), (4, 3, 1), cells=(8, 6, 2))
    faces = {name: mesh.face_points[where] for name, where in mesh.boundaries.items()}
    bottom = mesh.face_centre[mesh.boundaries["y_min"], 0] < 0.6
    floor = faces.pop("y_min")
    parts = {**faces, "plate": floor[bottom], "rest": floor[~bottom]}
    mesh = fv3d.build_mesh(mesh.points, [(k, c) for k, c, _ in mesh.cell_blocks],
                           {name: [rows] for name, rows in parts.items()})
    joined = join_periodic(mesh, {"x_min": "x_max"})
    x, y, _ = joined.cell_centre.T
    beside = np.maximum(np.minimum(x - 0.5, 4.0 - x), 0.0)
    np.testing.assert_allclose(fv3d.wall_distance(joined, ["plate"]), np.hypot(beside, y),
                               atol=1e-13)
    np.testing.assert_allclose(fv3d.wall_distance(mesh, ["plate"]),
                               np.hypot(np.maximum(mesh.cell_centre[:, 0] - 0.5, 0.0),
                                        mesh.cell_centre[:, 1]), atol=1e-13)


def test_against_a_plain_loop() -> None:
    """Every point against every triangle."""
    mesh = skewed(4, tetra=True)
    points = np.random.default_rng(0).uniform(-1, 2, (50, 3))
    faces = np.concatenate([np.arange(f.start, f.stop) for n, f in mesh.boundaries.items()
                            if n in ("x_min", "z_max")])
    corners = mesh.points[mesh.face_points[faces][:, :3]]
    wanted = [min(triangle_distance(p[None], t[None])[0] for t in corners) for p in points]
    np.testing.assert_allclose(fv3d.wall_distance(mesh, ["x_min", "z_max"], points=points), wanted,
                               atol=1e-15)


def test_triangle_distance_by_minimisation() -> None:
    """SciPy's bounded minimiser over barycentric coordinates."""
    from scipy.optimize import minimize
    random = np.random.default_rng(1)
    for _ in range(20):
        point, corners = random.normal(size=3), random.normal(size=(3, 3))

        def gap(s: np.ndarray, point: np.ndarray = point, c: np.ndarray = corners) -> float:
            return float(((c[0] + s[0] * (c[1] - c[0]) + s[1] * (c[2] - c[0]) - point)**2).sum())
        best = minimize(gap, [0.3, 0.3], bounds=[(0, 1)] * 2, method="SLSQP", tol=1e-14,
                        constraints={"type": "ineq", "fun": lambda s: 1 - s[0] - s[1]})
        got = triangle_distance(point[None], corners[None])[0]
        assert got == pytest.approx(np.sqrt(best.fun), rel=1e-5)
