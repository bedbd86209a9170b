"""Cell gradients as weighted sums of differences: weights once per mesh, one kernel for all.

A gradient method turns the mesh into weights ``W`` such that

    gradient(cell) = sum over faces of W (other value - own value),

where *other* is the neighbouring cell or the value on a boundary face.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import scipy.sparse as sparse

from ..mesh.mesh import Mesh
from . import kernels, kernels_solving

PAIRS = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))  # columns of packed symmetric matrices


@dataclass(frozen=True, eq=False)
class BoundaryKnowledge:
    """What is known of a field on each boundary face, (n_boundary,) booleans.

    ``valued``: the boundary value is known and enters the gradient; ``flat``: only that the
    normal derivative is zero; neither: nothing is known there, the face stays out.
    """

    valued: np.ndarray
    flat: np.ndarray

    @staticmethod
    def everywhere(mesh: Mesh) -> BoundaryKnowledge:
        """A value on every boundary face."""
        return BoundaryKnowledge(np.ones(mesh.n_boundary, bool), np.zeros(mesh.n_boundary, bool))


@dataclass(frozen=True, eq=False)
class GradientOperator:
    """Weights of one gradient method on one mesh.

    Attributes
    ----------
    offsets : (n_cells + 1,) int32
    other : (k,) int32
        Cell across the face, or ``n_cells + b`` for boundary face ``b``.
    weights : (k, 3) [1/m]
    poor : (p,) int32
        Cells whose own neighbours leave a direction undetermined.
    missing : (p, 3, 3)
        Projector on these directions, filled from the neighbours' gradients.
    completion : (p, n_cells) csr_matrix
        Mean over those neighbours of each poor cell that are not poor themselves.
    smoothed : (n_cells,) or None
        Share of each gradient that is replaced by the mean of the neighbours' gradients.
    """

    offsets: np.ndarray
    other: np.ndarray
    weights: np.ndarray
    poor: np.ndarray
    missing: np.ndarray
    completion: sparse.csr_matrix
    smoothed: np.ndarray | None = None

    def __call__(self, cell_values: np.ndarray, boundary_values: np.ndarray) -> np.ndarray:
        """Gradient (n_cells, 3) of a scalar (n_cells,), (n_cells, k, 3) of a vector (n_cells, k).

        For vectors ``[c, i, j]`` is the derivative of component ``i`` along axis ``j``.
        """
        scalar = cell_values.ndim == 1
        cells = cell_values[:, None] if scalar else cell_values
        edge = boundary_values[:, None] if scalar else boundary_values
        out = np.empty((len(cells), cells.shape[1], 3))
        kernel = kernels.vector_gradient if cells.shape[1] == 3 else kernels.weighted_gradient
        kernel(self.offsets, self.other, self.weights, np.ascontiguousarray(cells),
               np.ascontiguousarray(edge), out)
        if self.completion.nnz:
            self._complete(out)
        if self.smoothed is not None:
            rough = out.reshape(len(out), -1)
            out = np.empty_like(out)
            kernels.blend_with_neighbours(self.offsets, self.other, self.smoothed, rough,
                                          out.reshape(len(out), -1))
        return out[:, 0] if scalar else out

    def _complete(self, out: np.ndarray) -> None:
        width = out.shape[1]
        around = (self.completion @ out.reshape(len(out), -1)).reshape(-1, width, 3)
        out[self.poor] += np.einsum("cij,cjk->cik", around, self.missing)


class GradientMethod(Protocol):
    """A way to turn a mesh into an operator from cell and boundary values to gradients."""

    @property
    def order(self) -> float:
        """Declared order of accuracy on irregular meshes."""
        ...

    @property
    def linear_exact(self) -> bool:
        """Whether linear fields are met exactly on any mesh."""
        ...

    @property
    def bounded(self) -> bool:
        """Whether values extended to the face centres stay in the range around the cell."""
        ...

    def weights(self, mesh: Mesh, known: BoundaryKnowledge) -> Any:
        """Operator on this mesh, called as :class:`GradientOperator` is."""
        ...


@dataclass(frozen=True)
class LeastSquares:
    """Least-squares gradient over face neighbours and boundary faces.

    Differences are weighted by ``1 / distance**power``.  Exact on linear fields on any mesh.
    Directions of which the known faces determine less than the share ``least_known`` (corner
    tetrahedra at walls) are taken from the neighbouring cells' gradients, or zero where these have
    none either (meshes one cell thick).

    In cells of fewer than six faces the share ``smoothing`` of the gradient is the mean of the
    neighbours' gradients.  Four or five neighbours alone make second-order convection unstable
    on tetrahedra; gradients that see the neighbours' neighbours do not (Haider, F., Croisille,
    J.-P. and Courbet, B. 2009, Numer. Math. 113, 555-600; cited from memory).

    Source: Barth, T. J. (1991), AIAA Paper 91-0721.
    """

    power: float = 2.0
    least_known: float = 0.05
    smoothing: float = 0.5
    order: float = 1.0
    linear_exact: bool = True
    bounded: bool = False

    def weights(self, mesh: Mesh, known: BoundaryKnowledge) -> GradientOperator:
        """Weights on this mesh, see :class:`GradientOperator`."""
        offsets, faces, sign = mesh.cell_faces
        cell = np.repeat(np.arange(mesh.n_cells), np.diff(offsets))
        arm = mesh.delta[faces] * sign[:, None]
        importance = np.einsum("ij,ij->i", arm, arm) ** (-0.5 * self.power)
        edge = np.flatnonzero(faces >= mesh.n_internal)
        b = faces[edge] - mesh.n_internal
        flat = edge[known.flat[b]]
        unknown = edge[~(known.valued[b] | known.flat[b])]
        normal = mesh.face_normal[faces[flat]]
        across = arm.copy()
        across[flat] = normal * np.einsum("ij,ij->i", arm[flat], normal)[:, None]
        whole = np.empty((mesh.n_cells, 6))
        lost = np.zeros((mesh.n_cells, 6))
        for column, (i, j) in enumerate(PAIRS):
            term = importance * across[:, i] * across[:, j]
            whole[:, column] = np.add.reduceat(term, offsets[:-1])
            kernels.add_to_rows(cell[unknown], term[unknown, None], lost[:, column:column + 1])
        inverse, poor, missing = _known_inverse(whole, lost, np.unique(cell[unknown]),
                                                self.least_known)
        used = importance
        used[edge[~known.valued[b]]] = 0.0
        weights = np.einsum("kij,kj->ki", inverse[cell], arm)
        weights *= used[:, None]
        few = np.diff(offsets) < 6
        smoothed = self.smoothing * few if self.smoothing > 0 and few.any() else None
        return GradientOperator(offsets, mesh.across, weights, poor.astype(np.int32), missing,
                                _completion(offsets, mesh.across, poor, mesh.n_cells), smoothed)


@dataclass(frozen=True)
class GreenGauss:
    """Surface integral of linearly interpolated face values over the cell volume.

    Second order on uniform meshes; not exact on linear fields where face centres lie off the line
    between the cell centres.  A boundary face without a known value takes the cell's.

    Source: Gauss' theorem; Barth, T. J. and Jespersen, D. C. (1989), AIAA Paper 89-0366.
    """

    order: float = 0.0
    linear_exact: bool = False
    bounded: bool = False

    def weights(self, mesh: Mesh, known: BoundaryKnowledge) -> GradientOperator:
        """Weights on this mesh, see :class:`GradientOperator`."""
        offsets, faces, sign = mesh.cell_faces
        cell = np.repeat(np.arange(mesh.n_cells), np.diff(offsets))
        inside = faces < mesh.n_internal
        share = np.empty(len(faces))
        other = mesh.across
        w = mesh.weight[faces[inside]]
        share[inside] = np.where(sign[inside] > 0, 1.0 - w, w)
        share[~inside] = known.valued[faces[~inside] - mesh.n_internal]
        weights = mesh.face_area[faces] * (share * sign / mesh.cell_volume[cell])[:, None]
        none = np.empty(0, dtype=np.int32)
        return GradientOperator(offsets, other, np.ascontiguousarray(weights), none,
                                np.empty((0, 3, 3)), sparse.csr_matrix((0, mesh.n_cells)))


def _completion(offsets: np.ndarray, other: np.ndarray, poor: np.ndarray,
                n_cells: int) -> sparse.csr_matrix:
    count = np.diff(offsets)[poor]
    row = np.repeat(np.arange(len(poor)), count)
    starts = np.cumsum(count) - count
    places = np.repeat(offsets[poor] - starts, count) + np.arange(count.sum())
    column = other[places]
    is_poor = np.zeros(n_cells, bool)
    is_poor[poor] = True
    use = column < n_cells
    use[use] = ~is_poor[column[use]]
    row, column = row[use], column[use]
    share = 1.0 / np.bincount(row, minlength=len(poor))[row] if row.size else np.empty(0)
    return sparse.csr_matrix((share, (row, column)), shape=(len(poor), n_cells))


def _known_inverse(whole: np.ndarray, lost: np.ndarray, cells: np.ndarray,
                   least: float) -> tuple[np.ndarray, ...]:
    """Inverse of the cells' normal matrices, in some cells only where known well enough.

    ``whole`` (n_cells, 6) is the normal matrix with all faces, ``lost`` what is unknown of it in
    ``cells``; an eigenvalue of ``(whole - lost) v = share whole v`` is the share of a direction
    that is known, whatever the shape of the cell.

    Returns
    -------
    inverse : (n_cells, 3, 3), poor : (p,), missing : (p, 3, 3)
        ``gradient @ missing`` is the part of a gradient the inverse leaves out.
    """
    columns = np.array([[0, 3, 4], [3, 1, 5], [4, 5, 2]])
    packed = np.empty_like(whole)
    kernels_solving.invert_blocks(whole, np.zeros(len(whole)), packed)
    inverse = packed[:, columns]
    full, part = whole[cells][:, columns], (whole - lost)[cells][:, columns]
    scale = np.trace(full, axis1=1, axis2=2)[:, None, None]
    lower = np.linalg.cholesky(full / scale + 1e-12 * np.eye(3))
    turn = np.linalg.inv(lower)
    share, vectors = np.linalg.eigh(turn @ (part / scale) @ turn.transpose(0, 2, 1))
    present = share > least
    back = turn.transpose(0, 2, 1) @ vectors
    factor = np.where(present, 1.0 / np.where(present, share, 1.0), 0.0)
    inverse[cells] = np.einsum("cik,ck,cjk->cij", back, factor, back) / scale
    poor = np.flatnonzero(~present.all(axis=1))
    absent = (~present[poor]).astype(float)
    forth = lower[poor] @ vectors[poor]
    return inverse, cells[poor], np.einsum("cik,ck,cjk->cij", forth, absent, back[poor])
