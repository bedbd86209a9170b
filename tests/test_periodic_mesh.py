"""Boundaries joined by a translation: geometry, gradients, interpolation, refusals."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from contracts import SLOPE, edge_centres

import fv3d
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh
from fv3d.operators.assembly import orthogonal_factor, pattern, symmetric_matrix
from fv3d.operators.gradient import BoundaryKnowledge
from fv3d.operators.interpolation import locate, point_interpolation

LENGTH = np.array([2.0, 1.0, 0.7])
WAVE = 2.0 * np.pi / LENGTH


def wavy(kind: str, n: int = 6, *, size: float = 0.3) -> Mesh:
    """A box whose opposite sides are shaken alike: points moved by up to ``size`` cells."""
    makers = {"hex": lambda: box((0, 0, 0), LENGTH, cells=(n, n, n)),
              "tet": lambda: box((0, 0, 0), LENGTH, cells=(n, n, n), tetra=True),
              "wedge": lambda: fv3d.wedge_box((0, 0, 0), LENGTH, cells=(n, n, n)),
              "pyramid": lambda: fv3d.pyramid_box((0, 0, 0), LENGTH, cells=(n, n, n))}
    mesh = makers[kind]()
    x = mesh.points * WAVE
    shake = size * LENGTH / n * np.stack(
        [np.sin(x[:, 1] + 2 * x[:, 2]), np.sin(x[:, 2] + x[:, 0]), np.cos(x[:, 0] - x[:, 1])],
        axis=1)
    faces = {name: [np.array([row[row >= 0] for row in mesh.face_points[where]])]
             for name, where in mesh.boundaries.items()}
    blocks = [(name, conn[np.argsort(cells)]) for name, conn, cells in mesh.cell_blocks]
    return fv3d.build_mesh(mesh.points + shake, blocks, faces)


def joined(kind: str, n: int = 6) -> Mesh:
    return fv3d.join_periodic(wavy(kind, n), {"x_min": "x_max", "z_max": "z_min"})


KINDS = ["hex", "tet", "wedge", "pyramid"]


@pytest.mark.parametrize("kind", KINDS)
def test_geometry_of_a_joined_mesh(kind: str) -> None:
    before, mesh = wavy(kind), joined(kind)
    fv3d.check_mesh(mesh)  # closed cells, cells on the right sides of their faces
    assert set(mesh.boundaries) == {"y_min", "y_max"}
    assert mesh.n_faces == before.n_faces - sum(len(p.faces) for p in mesh.joined.values())
    np.testing.assert_allclose(mesh.cell_volume, before.cell_volume, rtol=1e-12)
    np.testing.assert_allclose(mesh.cell_centre, before.cell_centre, atol=1e-13)
    assert np.all(mesh.left[:mesh.n_internal] < mesh.right)
    ends = np.column_stack([mesh.left[:mesh.n_internal], mesh.right])
    assert np.all(np.lexsort(ends.T[::-1]) == np.arange(mesh.n_internal))
    for name, pair in mesh.joined.items():
        axis = "xyz".index(name[0])
        step = np.where(np.arange(3) == axis, LENGTH * (1 if name.endswith("min") else -1), 0.0)
        np.testing.assert_allclose(pair.shift, step, atol=1e-12)
        jump = mesh.cell_centre[mesh.right[pair.faces]] - mesh.cell_centre[mesh.left[pair.faces]]
        np.testing.assert_allclose(mesh.delta[pair.faces] - jump,
                                   pair.sign[:, None] * pair.shift, atol=1e-12)
        assert np.all(pair.sign * (mesh.face_area[pair.faces] @ pair.shift) > 0)
        far = mesh.points[pair.far_points[:, :3]].mean(axis=1)
        near = mesh.points[mesh.face_points[pair.faces, :3]].mean(axis=1)
        off = np.abs(far - near + pair.sign[:, None] * pair.shift)
        assert off.max() < 0.5 * LENGTH.max() / 6  # the same face, a translation apart


@pytest.mark.parametrize("kind", KINDS)
def test_gradient_of_a_linear_field_with_a_jump_over_the_pair(kind: str) -> None:
    """Exact at the pair along it, exact away from it where the field jumps there."""
    mesh = joined(kind)
    operator = fv3d.LeastSquares().weights(mesh, BoundaryKnowledge.everywhere(mesh))
    slope = np.array([0.0, 0.8, 0.0])  # no jump along y
    gradient = operator(mesh.cell_centre @ slope, edge_centres(mesh) @ slope)
    np.testing.assert_allclose(gradient, np.broadcast_to(slope, gradient.shape), atol=1e-11)
    whole = SLOPE[0]
    away = np.ones(mesh.n_cells, bool)
    for pair in mesh.joined.values():
        away[mesh.left[pair.faces]] = away[mesh.right[pair.faces]] = False
    n = mesh.n_internal  # cells of few faces take half of their gradient from their neighbours
    beside = ~(away[mesh.left[:n]] & away[mesh.right])
    away[mesh.left[:n][beside]] = away[mesh.right[beside]] = False
    gradient = operator(mesh.cell_centre @ whole, edge_centres(mesh) @ whole)
    np.testing.assert_allclose(gradient[away], np.broadcast_to(whole, gradient.shape)[away],
                               atol=1e-11)
    assert np.abs(gradient[~away] - whole).max() > 0.1  # the jump is seen there


def ripple(x: np.ndarray) -> np.ndarray:
    return np.sin(x[:, 0] * WAVE[0] + 0.4) * np.cos(x[:, 2] * WAVE[2]) + x[:, 1] ** 2


@pytest.mark.parametrize("kind", ["hex", "tet"])
def test_values_at_points_are_continuous_over_the_pair(kind: str) -> None:
    mesh, r = joined(kind), np.random.default_rng(0)
    operator = fv3d.LeastSquares().weights(mesh, BoundaryKnowledge.everywhere(mesh))
    pair = mesh.joined["x_min"]
    forward = pair.sign > 0  # these faces are seen by their left cells at x_max
    corner = mesh.points[mesh.face_points[pair.faces[forward], :4 if kind == "hex" else 3]]
    hub = corner.mean(axis=1, keepdims=True)
    near = np.concatenate([hub, corner[:, :2]], axis=1)  # a triangle of the interpolation
    share = r.dirichlet(np.ones(3), len(near))
    there = np.einsum("fk,fkj->fj", share, near)
    inward = 1e-9 * pair.shift
    values = [point_interpolation(mesh, operator, points)(ripple(mesh.cell_centre),
                                                         ripple(edge_centres(mesh)))
              for points in (there - inward, there - pair.shift + inward)]
    np.testing.assert_allclose(values[0], values[1], atol=1e-7)


@pytest.mark.parametrize("kind", KINDS)
def test_every_cell_centre_is_found_in_its_cell(kind: str) -> None:
    mesh = joined(kind, 4)
    np.testing.assert_array_equal(locate(mesh, mesh.cell_centre), np.arange(mesh.n_cells))


@pytest.mark.parametrize("kind", ["hex", "tet"])
def test_order_of_gradient_and_interpolation_does_not_suffer_at_the_pair(kind: str) -> None:
    worst = []
    for n in (6, 12):
        mesh = joined(kind, n)
        operator = fv3d.LeastSquares().weights(mesh, BoundaryKnowledge.everywhere(mesh))
        points = np.random.default_rng(1).uniform(0.05, 0.95, (300, 3)) * LENGTH
        points[:, 0] = np.tile([0.06, LENGTH[0] - 0.06], 150)
        inside = locate(mesh, points) >= 0
        to_points = point_interpolation(mesh, operator, points[inside])
        error = to_points(ripple(mesh.cell_centre), ripple(edge_centres(mesh)))
        worst.append(np.sqrt(np.mean((error - ripple(points[inside]))**2)))
    assert worst[1] < 0.35 * worst[0]


def test_diffusion_over_the_pair_solves_a_periodic_poisson_problem() -> None:
    """Against the exact solution sin(2 pi x / L) of a one-dimensional problem."""
    mesh = fv3d.join_periodic(box((0, 0, 0), (2, 1, 1), cells=(24, 3, 3)), {"x_min": "x_max"})
    g = orthogonal_factor(mesh)
    matrix = symmetric_matrix(mesh, pattern(mesh), g[:mesh.n_internal], np.zeros(mesh.n_boundary))
    assert abs(matrix - matrix.T).max() == 0.0
    np.testing.assert_allclose(matrix.sum(axis=1), 0.0, atol=1e-13)
    exact = np.sin(WAVE[0] * mesh.cell_centre[:, 0])
    from fv3d.operators import linear
    prepared = linear.prepare(matrix, singular=True)
    rhs = WAVE[0]**2 * exact * mesh.cell_volume
    solution = linear.solve(prepared, rhs, matrix=matrix, tolerance=1e-10).solution
    step = 2.0 * np.pi / 24
    np.testing.assert_allclose(solution, exact * (step / 2 / np.sin(step / 2))**2, atol=1e-8)


@pytest.mark.parametrize("method", [fv3d.ByAnisotropy(), fv3d.Classical(),
                                    fv3d.SmoothedAggregation()], ids=repr)
def test_multigrid_of_a_mesh_without_boundaries(method: object) -> None:
    """Against SciPy's direct solver, one value held."""
    from scipy.sparse.linalg import spsolve

    from fv3d.operators import linear
    mesh = fv3d.join_periodic(wavy("hex", 12), {"x_min": "x_max", "y_min": "y_max",
                                                "z_min": "z_max"})
    assert mesh.n_boundary == 0
    inner = orthogonal_factor(mesh) * np.exp(np.random.default_rng(0).normal(size=mesh.n_faces))
    matrix = symmetric_matrix(mesh, pattern(mesh), inner, np.zeros(0))
    rhs = np.random.default_rng(1).normal(size=mesh.n_cells)
    rhs -= rhs.mean()
    result = linear.solve(linear.prepare(matrix, method=method, singular=True), rhs,
                          matrix=matrix, tolerance=1e-10)
    assert result.outcome.good and result.iterations <= 30
    exact = np.concatenate([[0.0], spsolve(matrix[1:, 1:].tocsc(), rhs[1:])])
    np.testing.assert_allclose(result.solution, exact - exact.mean(), atol=1e-7 * np.ptp(exact))


def test_points_off_by_rounding_are_moved_and_the_cells_stay_closed() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4))
    r = np.random.default_rng(0)
    faces = {name: [mesh.face_points[where]] for name, where in mesh.boundaries.items()}
    blocks = [(name, conn[np.argsort(cells)]) for name, conn, cells in mesh.cell_blocks]
    rough = fv3d.build_mesh(mesh.points + 1e-8 * r.normal(size=mesh.points.shape), blocks, faces)
    tied = fv3d.join_periodic(rough, {"x_min": "x_max", "y_min": "y_max", "z_min": "z_max"})
    assert tied.n_boundary == 0
    fv3d.check_mesh(tied)
    gap = np.zeros((tied.n_cells, 3))
    np.add.at(gap, tied.left, tied.face_area)
    np.add.at(gap, tied.right, -tied.face_area)
    assert np.abs(gap).max() < 1e-15
    assert tied.cell_volume.sum() == pytest.approx(1.0, rel=1e-7)


def other_end() -> Mesh:
    """A box whose x_max end has other faces than x_min."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(3, 3, 3))
    points = mesh.points.copy()
    end = points[:, 0] > 1 - 1e-9
    points[end, 1] = points[end, 1] ** 1.2
    faces = {name: [mesh.face_points[where]] for name, where in mesh.boundaries.items()}
    blocks = [(name, conn[np.argsort(cells)]) for name, conn, cells in mesh.cell_blocks]
    return fv3d.build_mesh(points, blocks, faces)


BOX = box((0, 0, 0), (1, 1, 1), cells=(3, 3, 2))


@pytest.mark.parametrize("mesh, pairs, words", [
    (BOX, {"x_min": "outlet"}, "x_max, y_min"),
    (BOX, {"x_min": "x_min"}, "face to face"),
    (BOX, {"x_min": "y_min"}, "through the domain|fall upon"),
    (BOX, {"x_min": "z_min"}, "6 and 9 faces"),
    (BOX, {"z_min": "z_max"}, "three layers"),
    (box((0, 0, 0), (1, 1, 1), cells=(3, 3, 1)), {"z_min": "z_max"}, "its own neighbour"),
    (other_end(), {"x_min": "x_max"}, r"(?s)'x_min' at \[.*misses 'x_max' by"),
], ids=range(7))
def test_what_cannot_be_joined_is_refused(mesh: Mesh, pairs: dict, words: str) -> None:
    with pytest.raises(fv3d.MeshError, match=words):
        fv3d.join_periodic(mesh, pairs)


def test_a_joined_mesh_is_not_written(tmp_path: Path) -> None:
    with pytest.raises(fv3d.FileError, match="as it was before"):
        fv3d.write_mesh(joined("hex", 3), tmp_path / "joined.msh")
