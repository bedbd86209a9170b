"""Values at points: exact on linear fields, continuous, second order; points outside."""

from __future__ import annotations

import numpy as np
import pytest
from contracts import SLOPE, linear, observed_order, skewed
from made import made_run

import fv3d
from fv3d.errors import CaseError
from fv3d.mesh.generate import box
from fv3d.operators.interpolation import locate

KINDS = pytest.mark.parametrize("tetra", [False, True], ids=["hex", "tet"])


def linear_pressure(x: np.ndarray) -> np.ndarray:
    return x @ np.array([0.4, -1.3, 0.8]) + 2.0


def wavy(x: np.ndarray) -> np.ndarray:
    a, b, c = (2.5 * x).T
    return np.stack([np.sin(a) * np.cos(b), np.cos(b) * np.exp(0.3 * c), np.sin(c - a)], axis=1)


def wavy_pressure(x: np.ndarray) -> np.ndarray:
    return np.asarray(wavy(x)[:, 0] * np.exp(0.5 * x[:, 2]))


def inside(n: int, seed: int = 0) -> np.ndarray:
    return np.random.default_rng(seed).uniform(0.0, 1.0, (n, 3))


@KINDS
def test_exact_on_linear_fields_up_to_the_walls(tetra: bool) -> None:
    run = made_run(skewed(4, tetra=tetra), linear, linear_pressure)
    corners = np.array(np.meshgrid([0.0, 1.0], [0.0, 1.0], [0.0, 1.0])).reshape(3, -1).T
    points = np.vstack([inside(400), corners, inside(50) * [1.0, 1.0, 0.0]])
    sample = run.sample(points)
    np.testing.assert_allclose(sample.velocity, linear(points), atol=1e-11)
    np.testing.assert_allclose(sample.pressure, linear_pressure(points), atol=1e-10)


@KINDS
def test_continuous_across_faces(tetra: bool) -> None:
    """Random fields, the hardest case: both sides of a face 1e-9 apart, anywhere on the face."""
    mesh, r = skewed(3, tetra=tetra), np.random.default_rng(4)
    run = made_run(mesh, lambda x: r.normal(size=x.shape), lambda x: r.normal(size=len(x)))
    faces = np.arange(mesh.n_internal)
    corners = mesh.face_points[faces]
    count = np.where(corners[:, 3] < 0, 3, 4)
    hub = np.array([mesh.points[row[:k]].mean(axis=0) for row, k in zip(corners, count)])
    for j in range(3):  # a point of one of the triangles a face is made of
        a, b = mesh.points[corners[:, j]], mesh.points[corners[:, (j + 1) % 3 if j < 2 else 0]]
        if j == 2:
            b = mesh.points[np.where(count == 4, corners[:, 3], corners[:, 0])]
        share = r.dirichlet(np.ones(3), len(faces))
        on = share[:, :1] * hub + share[:, 1:2] * a + share[:, 2:] * b
        step = 1e-9 * mesh.face_normal[faces]
        before, after = run.sample(on - step), run.sample(on + step)
        assert np.mean(locate(mesh, on - step) != locate(mesh, on + step)) > 0.9
        np.testing.assert_allclose(before.velocity, after.velocity, atol=1e-6)
        np.testing.assert_allclose(before.pressure, after.pressure, atol=1e-6)


@KINDS
def test_second_order(tetra: bool) -> None:
    points, velocity, pressure, sizes = inside(1500), [], [], []
    for n in (5, 9, 15) if tetra else (6, 11, 20):
        sample = made_run(skewed(n, tetra=tetra), wavy, wavy_pressure).sample(points)
        velocity.append(float(np.sqrt(np.mean((sample.velocity - wavy(points))**2))))
        pressure.append(float(np.sqrt(np.mean((sample.pressure - wavy_pressure(points))**2))))
        sizes.append(1.0 / n)
    assert observed_order(velocity, sizes) >= 1.9
    assert observed_order(pressure, sizes) >= 1.9


def test_points_are_found_in_their_hexahedron() -> None:
    """Against VTK's own search, as an outside check."""
    from fv3d.results.files import vtk_grid
    mesh = box((0, 0, 0), (1, 1, 1), cells=(5, 4, 3))
    points = inside(300)
    number = vtk_grid(mesh).find_containing_cell(points)
    np.testing.assert_array_equal(np.argsort(mesh.file_index)[number], locate(mesh, points))


def test_points_are_found_in_their_tetrahedron() -> None:
    """By barycentric coordinates in the cell that was found (numpy.linalg.solve)."""
    mesh, points = skewed(4, tetra=True), inside(300)
    (_, conn, cells), = mesh.cell_blocks
    corners = mesh.points[conn[np.argsort(cells)][locate(mesh, points)]]
    square = np.concatenate([corners, np.ones((300, 4, 1))], axis=2).transpose(0, 2, 1)
    share = np.linalg.solve(square, np.column_stack([points, np.ones(300)])[:, :, None])
    assert share.min() >= -1e-9


def test_every_cell_finds_its_centre_even_where_cells_are_slender() -> None:
    mesh = box((0, 0, 0), (100.0, 1.0, 1.0), cells=(6, 12, 12),
               grading=(None, fv3d.TwoSided(50.0), fv3d.OneSided(30.0)))
    np.testing.assert_array_equal(locate(mesh, mesh.cell_centre), np.arange(mesh.n_cells))
    # near the end of long cells the centres of others are nearer
    ends = mesh.cell_centre + np.array([6.0, 0.0, 0.0])
    np.testing.assert_array_equal(locate(mesh, ends), np.arange(mesh.n_cells))


def test_a_point_outside_is_refused_with_the_extent() -> None:
    run = made_run(skewed(3), linear, linear_pressure)
    with pytest.raises(CaseError) as caught:
        run.sample([[0.5, 0.5, 0.5], [0.5, 1.4, 0.5]])
    error = caught.value
    assert "point 2" in error.where and "1.4" in str(error.got) and "[0, 1]" in error.remedy


def test_just_off_a_curved_wall_is_accepted_and_farther_off_is_not() -> None:
    """Flat faces stand for the round pipe: its wall lies outside them by a share of a face."""
    mesh = fv3d.nozzle([(0.0, 0.5), (1.0, 0.5)], core=6)
    angle = np.linspace(0.05, 6.2, 29)
    wall = np.stack([0.5 * np.cos(angle), 0.5 * np.sin(angle), np.full(29, 0.4)], axis=1)
    assert np.mean(locate(mesh, wall) < 0) > 0.5
    run = made_run(mesh, linear, linear_pressure)
    chord = 0.5 * (1 - np.cos(np.pi / 24))
    np.testing.assert_allclose(run.sample(wall).velocity, linear(wall),
                               atol=2 * chord * np.abs(SLOPE).sum())
    with pytest.raises(CaseError):
        run.sample(wall * [1.2, 1.2, 1.0])
