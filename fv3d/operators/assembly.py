"""Sparsity pattern once per mesh, refilled; knows nothing of velocity or pressure."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.sparse as sparse

from ..mesh.mesh import Mesh
from . import kernels, kernels_solving

NOTHING, NO_VECTORS = np.empty(0), np.empty((0, 3))
LEAST_PIECE, MOST_PIECES = 2048, 8  # rows; half of the pieces are swept at once


@dataclass(frozen=True, eq=False)
class Pattern:
    """Rows of a cell-to-cell matrix and where each face lands in them.

    Attributes
    ----------
    indptr, indices : int32
        Compressed rows with sorted columns, the diagonal included.
    diagonal : (n_cells,) int32
        Place of each diagonal entry.
    entry : (k,) int32
        For each entry of ``mesh.cell_faces`` the place of the neighbour's coefficient; -1 on
        boundary faces.
    left_entry, right_entry : (n_internal,) int32
        Place of the right cell's coefficient in the left row, and the other way round.
    pieces : (k + 1,) int64
        Rows where the matrix may be cut so that no piece touches the next but one.
    """

    indptr: np.ndarray
    indices: np.ndarray
    diagonal: np.ndarray
    entry: np.ndarray
    left_entry: np.ndarray
    right_entry: np.ndarray
    pieces: np.ndarray

    def matrix(self, data: np.ndarray) -> sparse.csr_matrix:
        """The matrix with these entries (no copy)."""
        n = len(self.diagonal)
        matrix = sparse.csr_matrix((n, n), dtype=data.dtype)
        matrix.indptr, matrix.indices, matrix.data = self.indptr, self.indices, data
        matrix.has_sorted_indices = True
        return matrix


def pattern(mesh: Mesh) -> Pattern:
    """Pattern of a mesh: one row per cell, one entry per neighbour."""
    n, inside = mesh.n_cells, mesh.n_internal
    left = mesh.left[:inside].astype(np.int64)
    right = mesh.right.astype(np.int64)
    rows = np.concatenate([left, right, np.arange(n)])
    columns = np.concatenate([right, left, np.arange(n)])
    sorted_rows = sparse.csr_matrix((np.arange(len(rows)), (rows, columns)), (n, n))
    sorted_rows.sort_indices()
    place = np.empty(len(rows), dtype=np.int64)
    place[sorted_rows.data] = np.arange(len(rows))
    left_entry, right_entry, diagonal = np.split(place, [inside, 2 * inside])
    _, faces, sign = mesh.cell_faces
    entry = np.full(len(faces), -1, dtype=np.int64)
    internal = faces < inside
    ahead = internal & (sign > 0)
    behind = internal & (sign < 0)
    entry[ahead] = left_entry[faces[ahead]]
    entry[behind] = right_entry[faces[behind]]
    arrays = {"indptr": sorted_rows.indptr, "indices": sorted_rows.indices,
              "diagonal": diagonal, "entry": entry, "left_entry": left_entry,
              "right_entry": right_entry}
    reach = int((right - left).max(initial=0))  # the matrix' bandwidth
    count = min(max(n // max(reach, LEAST_PIECE), 1), MOST_PIECES)
    pieces = np.linspace(0, n, count + 1).astype(np.int64)
    return Pattern(pieces=pieces, **{name: np.ascontiguousarray(a, dtype=np.int32)
                                     for name, a in arrays.items()})


@dataclass(frozen=True, eq=False)
class Rows:
    """A matrix for the three components of a vector: ``A x = rhs``.

    The neighbours act on each component alike; the diagonal is a symmetric block, because walls
    and symmetry planes act on the components across and along them differently.

    Attributes
    ----------
    data : (nnz,)
        Off-diagonal entries in the places of the pattern, zero in the diagonal places.
    block : (n_cells, 6)
        Diagonal blocks as (xx, yy, zz, xy, xz, yz).
    rhs : (n_cells, 3)
    """

    pattern: Pattern
    data: np.ndarray
    block: np.ndarray
    rhs: np.ndarray

    def residual(self, x: np.ndarray, volume: np.ndarray = NOTHING,
                 net_gradient: np.ndarray = NO_VECTORS) -> np.ndarray:
        """(n_cells, 3) right-hand side minus matrix times ``x``.

        Less ``volume`` (n_cells,) times ``net_gradient`` (n_cells, 3) where these are given.
        """
        out = np.empty_like(self.rhs)
        kernels_solving.momentum_residual(self.pattern.indptr, self.pattern.indices, self.data,
                                          self.block, self.rhs, x, volume, net_gradient, out)
        return out


def inverse_blocks(block: np.ndarray, extra: np.ndarray) -> np.ndarray:
    """(n, 6) inverse of symmetric 3 x 3 blocks stored as (xx, yy, zz, xy, xz, yz).

    ``extra`` (n,) is added to the diagonals first.  Single precision, see :class:`Sweeps`.
    """
    inverse = np.empty(block.shape, dtype=np.float32)
    kernels_solving.invert_blocks(block, extra, inverse)
    return inverse


def symmetric_matrix(mesh: Mesh, layout: Pattern, face_coefficient: np.ndarray,
                     boundary_coefficient: np.ndarray) -> sparse.csr_matrix:
    """Symmetric positive matrix of a diffusion operator.

    Parameters
    ----------
    face_coefficient : (n_internal,)
        Flux per difference of the two cell values.
    boundary_coefficient : (n_boundary,)
        Flux per difference to a given boundary value; zero where the flux is given.
    """
    data = np.empty(len(layout.indices))
    offsets, faces, _ = mesh.cell_faces
    kernels.fill_symmetric(offsets, faces, layout.entry, layout.diagonal, mesh.n_internal,
                           face_coefficient, boundary_coefficient, data)
    return layout.matrix(data)


def orthogonal_factor(mesh: Mesh) -> np.ndarray:
    """(n_faces,) |S|^2 / (S . delta) [m], the over-relaxed share of a face-normal difference.

    Source: Demirdzic, I. and Muzaferija, S. (1995), Comput. Methods Appl. Mech. Eng. 125, 235-255.
    """
    across = np.einsum("ij,ij->i", mesh.face_area, mesh.delta)
    floor = 0.05 * mesh.face_area_magnitude * np.linalg.norm(mesh.delta, axis=1)
    return mesh.face_area_magnitude ** 2 / np.maximum(across, floor)
