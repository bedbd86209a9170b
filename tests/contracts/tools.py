"""Meshes, fields and orders the contracts share."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.spatial.transform import Rotation

import fv3d
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh
from fv3d.operators.gradient import BoundaryKnowledge

Check = Callable[[Any], None]
ROTATION = Rotation.from_rotvec([0.3, -0.5, 0.7]).as_matrix()
SLOPE = np.array([[0.7, -1.1, 0.4], [0.2, 0.5, -0.9], [1.3, 0.1, -1.2]])  # trace 0
SHIFT = np.array([0.3, -0.2, 0.1])


def skewed(n: int, *, tetra: bool = False) -> Mesh:
    """Unit cube of n cells along each axis (cut into tetrahedra), points shaken."""
    return box((0, 0, 0), (1, 1, 1), cells=(n, n, n), tetra=tetra, skew=0.15 if tetra else 0.25,
               seed=n)


def linear(points: np.ndarray) -> np.ndarray:
    """(n, 3) -> (n, 3) a linear, divergence-free vector field."""
    return points @ SLOPE.T + SHIFT


def edge_centres(mesh: Mesh) -> np.ndarray:
    """(n_boundary, 3) centres of the boundary faces."""
    return mesh.face_centre[mesh.n_internal:]


def observed_order(errors: list[float], sizes: list[float]) -> float:
    """Slope of log error over log size by least squares."""
    return float(np.polyfit(np.log(sizes), np.log(errors), 1)[0])


def turned_mesh(mesh: Mesh, rotation: np.ndarray) -> Mesh:
    """The same mesh, same numbering, about the origin."""
    blocks = [(kind, conn[np.argsort(cells)]) for kind, conn, cells in mesh.cell_blocks]
    boundaries = {name: [np.array([row[row >= 0] for row in mesh.face_points[faces]])]
                  for name, faces in mesh.boundaries.items()}
    turned = fv3d.build_mesh(mesh.points @ rotation.T, blocks, boundaries, renumber=False)
    np.testing.assert_allclose(turned.cell_centre, mesh.cell_centre @ rotation.T, atol=1e-13)
    np.testing.assert_array_equal(turned.left, mesh.left)
    return turned


def wave(x: np.ndarray) -> np.ndarray:
    return np.sin(2.0 * x[:, 0]) * np.cos(3.0 * x[:, 1]) * np.exp(x[:, 2])


def wave_slope(x: np.ndarray) -> np.ndarray:
    a, b, c = 2.0 * x[:, 0], 3.0 * x[:, 1], np.exp(x[:, 2])
    return np.stack([2 * np.cos(a) * np.cos(b) * c, -3 * np.sin(a) * np.sin(b) * c,
                     np.sin(a) * np.cos(b) * c], axis=1)


def gradient_on(method: Any, mesh: Mesh) -> Any:
    return method.weights(mesh, BoundaryKnowledge.everywhere(mesh))
