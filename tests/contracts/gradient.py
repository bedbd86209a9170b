"""What every gradient method promises."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh
from fv3d.operators.gradient import BoundaryKnowledge

from .tools import (
    ROTATION,
    SLOPE,
    Check,
    edge_centres,
    gradient_on,
    linear,
    observed_order,
    skewed,
    turned_mesh,
    wave,
    wave_slope,
)


def gradient_of_a_constant_is_zero(method: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        slope = gradient_on(method, mesh)(np.full(mesh.n_cells, 3.7), np.full(mesh.n_boundary, 3.7))
        assert np.all(slope == 0.0)


def gradient_is_exact_on_linear_fields_if_it_claims_to(method: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        slope = gradient_on(method, mesh)(linear(mesh.cell_centre), linear(edge_centres(mesh)))
        if method.linear_exact:
            np.testing.assert_allclose(slope, np.broadcast_to(SLOPE, slope.shape), atol=1e-11)


def gradient_turns_with_the_mesh(method: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        turned = turned_mesh(mesh, ROTATION)
        r = np.random.default_rng(0)
        cells, edges = r.normal(size=mesh.n_cells), r.normal(size=mesh.n_boundary)
        slope = gradient_on(method, mesh)(cells, edges)
        again = gradient_on(method, turned)(cells, edges)
        np.testing.assert_allclose(again, slope @ ROTATION.T, atol=1e-10 * np.abs(slope).max())


def gradient_has_its_declared_order(method: Any) -> None:
    """On shaken meshes, whose cells do not become more regular as they shrink: +- 0.2."""
    for tetra in (False, True):
        errors, sizes = [], []
        for n in (8, 12, 18) if tetra else (12, 20, 32):
            mesh = box((0, 0, 0), (1, 1, 1), cells=(n, n, n), tetra=tetra, seed=n,
                       skew=0.15 if tetra else 0.4)
            slope = gradient_on(method, mesh)(wave(mesh.cell_centre), wave(edge_centres(mesh)))
            error = ((slope - wave_slope(mesh.cell_centre))**2).sum(axis=1)
            errors.append(float(np.sqrt(np.average(error, weights=mesh.cell_volume))))
            sizes.append(1.0 / n)
        assert abs(observed_order(errors, sizes) - method.order) <= 0.2


def gradient_makes_no_new_extremes_if_it_claims_to(method: Any) -> None:
    """Values extended to inner face centres stay in the range of the field, or are seen outside."""
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        r = np.random.default_rng(4)
        cells, edges = (r.integers(0, 2, size).astype(float)
                        for size in (mesh.n_cells, mesh.n_boundary))
        slope = gradient_on(method, mesh)(cells, edges)
        outside = max(-1.0, *(float(np.max(side)) for side in _outside(mesh, cells, slope)))
        assert outside <= 1e-14 if method.bounded else outside > 1e-3


def _outside(mesh: Mesh, cells: np.ndarray, slope: np.ndarray) -> Iterator[np.ndarray]:
    """How far values at inner faces lie outside 0 ... 1, from both sides of the faces."""
    n = mesh.n_internal
    arm = mesh.face_centre[:n] - mesh.cell_centre[mesh.left[:n]]
    for cell, reach in ((mesh.left[:n], arm), (mesh.right, arm - mesh.delta[:n])):
        value = cells[cell] + np.einsum("ij,ij->i", slope[cell], reach)
        yield np.maximum(-value, value - 1.0)


def gradient_extends_where_boundary_values_are_unknown(method: Any) -> None:
    """Exact on linear fields from the cells alone, wherever a cell has neighbours enough."""
    if not method.linear_exact:
        return
    mesh = skewed(4)
    nothing = np.zeros(mesh.n_boundary, bool)
    operator = method.weights(mesh, BoundaryKnowledge(nothing, nothing))
    slope = operator(linear(mesh.cell_centre), np.full((mesh.n_boundary, 3), 1e6))
    np.testing.assert_allclose(slope, np.broadcast_to(SLOPE, slope.shape), atol=1e-10)


GRADIENT: dict[str, Check] = {f.__name__: f for f in (
    gradient_of_a_constant_is_zero, gradient_is_exact_on_linear_fields_if_it_claims_to,
    gradient_turns_with_the_mesh, gradient_has_its_declared_order,
    gradient_makes_no_new_extremes_if_it_claims_to,
    gradient_extends_where_boundary_values_are_unknown)}
