"""What three-component strengths at places do to a field, kept where it is not zero."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import scipy.sparse as sparse

from ..operators import kernels_places


@dataclass(frozen=True, eq=False)
class Columns:
    """Columns of all places, three axes each, row after row of the field.

    Attributes
    ----------
    rows : (k,) int32
        Rows of the field that are reached, ascending.
    offsets : (k + 1,) int32
        Where the entries of each row begin.
    place : (n,) int32
        Place of each entry.
    block : (n, 9) or (n, 3)
        What a strength along each axis does to the row's vector (component after component), or
        to its scalar.
    order : (n,) int32
        Entries sorted by place, and within it by row, to row after row.
    """

    rows: np.ndarray
    offsets: np.ndarray
    place: np.ndarray
    block: np.ndarray
    order: np.ndarray

    def add(self, strength: np.ndarray, out: np.ndarray) -> np.ndarray:
        """Add what strengths (n_places, 3) do to a field, and return that field."""
        if len(self.rows):
            kernel = kernels_places.add_scalars if out.ndim == 1 else kernels_places.add_vectors
            kernel(self.rows, self.offsets, self.place, self.block, strength, out)
        return out

    def filled(self, blocks: Sequence[np.ndarray]) -> Columns:
        """The same columns with other blocks, place after place."""
        return replace(self, block=np.concatenate(blocks)[self.order])


def columns(rows: Sequence[np.ndarray], blocks: Sequence[np.ndarray]) -> Columns:
    """Columns of the rows (ascending) that each place reaches, and its blocks."""
    row = np.concatenate(rows)
    order = np.argsort(row, kind="stable").astype(np.int32)
    reached, count = np.unique(row, return_counts=True)
    place = np.repeat(np.arange(len(rows)), [len(part) for part in rows])
    offsets = np.concatenate([[0], np.cumsum(count)])
    return Columns(reached.astype(np.int32), offsets.astype(np.int32),
                   place[order].astype(np.int32), np.concatenate(blocks)[order], order)


def blocks_of(matrix: sparse.csc_matrix, place: int, size: int) -> tuple[np.ndarray, np.ndarray]:
    """Rows and blocks of one place in a sparse matrix (size n_rows, 3 n_places)."""
    part = matrix[:, 3 * place:3 * place + 3].tocoo()
    rows, at = np.unique(part.row // size, return_inverse=True)
    block = np.zeros((len(rows), size, 3))
    block[at, part.row % size, part.col] = part.data
    return rows.astype(np.int32), block.reshape(len(rows), 3 * size)
