"""What every gradient method promises."""

from __future__ import annotations

from typing import Any

import numpy as np

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


def gradient_is_exact_on_linear_fields(method: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        slope = gradient_on(method, mesh)(linear(mesh.cell_centre), linear(edge_centres(mesh)))
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
    """On shaken meshes, whose cells do not become more regular as they shrink."""
    for tetra in (False, True):
        errors, sizes = [], []
        for n in (6, 10, 16) if tetra else (8, 14, 24):
            mesh = skewed(n, tetra=tetra)
            slope = gradient_on(method, mesh)(wave(mesh.cell_centre), wave(edge_centres(mesh)))
            error = ((slope - wave_slope(mesh.cell_centre))**2).sum(axis=1)
            errors.append(float(np.sqrt(np.average(error, weights=mesh.cell_volume))))
            sizes.append(1.0 / n)
        assert observed_order(errors, sizes) > method.order - 0.1


def gradient_extends_where_boundary_values_are_unknown(method: Any) -> None:
    """Exact on linear fields from the cells alone, wherever a cell has neighbours enough."""
    mesh = skewed(4)
    nothing = np.zeros(mesh.n_boundary, bool)
    operator = method.weights(mesh, BoundaryKnowledge(nothing, nothing))
    slope = operator(linear(mesh.cell_centre), np.full((mesh.n_boundary, 3), 1e6))
    np.testing.assert_allclose(slope, np.broadcast_to(SLOPE, slope.shape), atol=1e-10)


GRADIENT: dict[str, Check] = {f.__name__: f for f in (
    gradient_of_a_constant_is_zero, gradient_is_exact_on_linear_fields,
    gradient_turns_with_the_mesh, gradient_has_its_declared_order,
    gradient_extends_where_boundary_values_are_unknown)}
