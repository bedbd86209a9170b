"""Gradient methods against their contract; the operator's own promises."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from contracts import GRADIENT, SLOPE, Check, edge_centres, linear, skewed

import fv3d
from fv3d.mesh.generate import box
from fv3d.operators.gradient import BoundaryKnowledge

METHODS = [fv3d.LeastSquares(), fv3d.LeastSquares(power=1.0), fv3d.GreenGauss(),
           fv3d.BarthJespersen(), fv3d.MichalakOllivierGooch(),
           fv3d.BarthJespersen(gradient=fv3d.GreenGauss())]


@pytest.mark.parametrize("check", GRADIENT.values(), ids=GRADIENT)
@pytest.mark.parametrize("method", METHODS, ids=repr)
def test_contract(method: Any, check: Check) -> None:
    check(method)


def test_against_a_plain_least_squares_fit() -> None:
    """Each cell's gradient minimises the weighted misfit: numpy.linalg.lstsq, cell by cell.

    On tetrahedra half of it is the mean of the neighbours' gradients.
    """
    mesh, r = skewed(3, tetra=True), np.random.default_rng(1)
    cells, edges = r.normal(size=mesh.n_cells), r.normal(size=mesh.n_boundary)
    slope = fv3d.LeastSquares().weights(mesh, BoundaryKnowledge.everywhere(mesh))(cells, edges)
    offsets, faces, _ = mesh.cell_faces
    fits, around = np.empty((mesh.n_cells, 3)), [[] for _ in range(mesh.n_cells)]
    for cell in range(mesh.n_cells):
        arms, jumps = [], []
        for face in faces[offsets[cell]:offsets[cell + 1]]:
            if face >= mesh.n_internal:
                arms.append(mesh.face_centre[face] - mesh.cell_centre[cell])
                jumps.append(edges[face - mesh.n_internal] - cells[cell])
            else:
                other = mesh.right[face] if mesh.left[face] == cell else mesh.left[face]
                around[cell].append(other)
                arms.append(mesh.cell_centre[other] - mesh.cell_centre[cell])
                jumps.append(cells[other] - cells[cell])
        share = 1.0 / np.linalg.norm(arms, axis=1)
        fits[cell] = np.linalg.lstsq(np.array(arms) * share[:, None], np.array(jumps) * share)[0]
    for cell in range(mesh.n_cells):
        wanted = 0.5 * fits[cell] + 0.5 * fits[around[cell]].mean(axis=0)
        np.testing.assert_allclose(slope[cell], wanted, atol=1e-10 * np.abs(fits).max())
    bare = fv3d.LeastSquares(smoothing=0.0).weights(mesh, BoundaryKnowledge.everywhere(mesh))
    np.testing.assert_allclose(bare(cells, edges), fits, atol=1e-10 * np.abs(fits).max())


def test_flat_boundaries_take_the_normal_derivative_out() -> None:
    """With a zero normal derivative on both plates nothing but the two directions along is left."""
    mesh = box((0, 0, 0), (1, 1, 0.2), cells=(4, 4, 1))
    z = np.abs(mesh.face_normal[mesh.n_internal:, 2]) > 0.5
    operator = fv3d.LeastSquares().weights(mesh, BoundaryKnowledge(~z, z))
    slope = operator(linear(mesh.cell_centre), linear(edge_centres(mesh)))
    np.testing.assert_allclose(slope[:, :, :2], np.broadcast_to(SLOPE[:, :2], (16, 3, 2)),
                               atol=1e-12)
    np.testing.assert_allclose(slope[:, :, 2], 0.0, atol=1e-12)


def test_scalar_and_vector_fields_agree() -> None:
    mesh, r = skewed(3), np.random.default_rng(2)
    operator = fv3d.LeastSquares().weights(mesh, BoundaryKnowledge.everywhere(mesh))
    cells, edges = r.normal(size=(mesh.n_cells, 3)), r.normal(size=(mesh.n_boundary, 3))
    whole = operator(cells, edges)
    for i in range(3):
        np.testing.assert_array_equal(operator(cells[:, i], edges[:, i]), whole[:, i])
