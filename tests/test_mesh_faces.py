"""Which faces stand across the lines between their cells, and which are met in their centres."""

from __future__ import annotations

import numpy as np
import pytest

from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh, build_mesh


def moved(mesh: Mesh, matrix: np.ndarray) -> Mesh:
    """The mesh with its points multiplied by a matrix."""
    cells = [(kind, connectivity) for kind, connectivity, _ in mesh.cell_blocks]
    names = {n: [mesh.face_points[w]] for n, w in mesh.boundaries.items()}
    return build_mesh(mesh.points @ matrix.T, cells, names)


def mirrored_trapezia() -> Mesh:
    """Two cells of heights 1 and 2, joined at the plane x = 1 that is twice as high."""
    points = np.array([[x, y, z] for z in (0, 1) for y in (0, 1) for x in (0, 1, 2)], dtype=float)
    points[[4, 10], 1] = 2.0
    hexes = np.array([[0, 1, 4, 3, 6, 7, 10, 9], [1, 2, 5, 4, 7, 8, 11, 10]])
    walls = [[0, 1, 4, 3], [6, 7, 10, 9], [0, 1, 7, 6], [3, 4, 10, 9], [0, 3, 9, 6], [1, 2, 5, 4],
             [7, 8, 11, 10], [1, 2, 8, 7], [4, 5, 11, 10], [2, 5, 11, 8]]
    return build_mesh(points, [("hexahedron", hexes)], {"wall": [np.array(walls)]})


@pytest.mark.parametrize("length", [1.0, 0.3, 1e-3, 1e4])
def test_boxes_are_straight_and_not_skewed(length: float) -> None:
    mesh = box((0.1 * length, 0, 0), (length, 0.7 * length, 0.5 * length), cells=(7, 5, 3))
    assert mesh.straight and mesh.skew.shape == (0, 3)


def test_graded_boxes_too() -> None:
    nodes = np.linspace(0.0, 1.0, 10)**3
    mesh = box((0, 0, 0), (1, 1, 1), cells=(9, 4, 9), grading=(nodes, None, nodes))
    assert mesh.straight and mesh.skew.shape == (0, 3)


def test_a_turned_box_too() -> None:
    turn = np.linalg.qr(np.random.default_rng(0).normal(size=(3, 3)))[0]
    turn *= np.sign(np.linalg.det(turn))
    mesh = moved(box((0, 0, 0), (1.0, 0.7, 0.5), cells=(7, 5, 3)), turn)
    assert mesh.straight and mesh.skew.shape == (0, 3)


def test_sheared_hexahedra_meet_in_the_centres_but_not_straight() -> None:
    shear = np.array([[1.0, 0.0, 0.2], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    mesh = moved(box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4)), shear)
    assert not mesh.straight and mesh.skew.shape == (0, 3)


def test_mirrored_cells_are_straight_but_off_centre() -> None:
    """Trapezia: centroids at (5/9, 7/9) and (13/9, 7/9), the face's centre at (1, 1)."""
    mesh = mirrored_trapezia()
    assert mesh.straight
    np.testing.assert_allclose(mesh.skew, [[0.0, 2 / 9, 0.0]], atol=1e-14)


@pytest.mark.parametrize("tetra, skew", [(True, 0.0), (True, 0.3), (False, 0.3)])
def test_tetrahedra_and_shaken_hexahedra_are_neither(tetra: bool, skew: float) -> None:
    mesh = box((0, 0, 0), (1.0, 0.7, 0.5), cells=(4, 3, 3), tetra=tetra, skew=skew)
    assert not mesh.straight and len(mesh.skew) == mesh.n_internal
    for f in range(mesh.n_internal):  # where interpolation stands, by its definition
        w, a, b = mesh.weight[f], mesh.cell_centre[mesh.left[f]], mesh.cell_centre[mesh.right[f]]
        np.testing.assert_allclose(mesh.skew[f], mesh.face_centre[f] - w * a - (1 - w) * b,
                                   atol=1e-15)


def test_one_bent_face_among_many_is_noticed() -> None:
    """A single inner point off its place by 1e-6 of a cell."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(6, 6, 6))
    points = mesh.points.copy()
    inner = np.argmin(np.abs(points - 0.5).sum(axis=1))
    points[inner] += 1e-6 / 6
    kind, connectivity, _ = mesh.cell_blocks[0]
    names = {n: [mesh.face_points[w]] for n, w in mesh.boundaries.items()}
    bent = build_mesh(points, [(kind, connectivity)], names)
    assert not bent.straight and len(bent.skew) == bent.n_internal
