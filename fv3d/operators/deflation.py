"""Preconditioner for matrices that couple parts of the domain by tiny coefficients.

A multigrid cycle in single precision cannot tell such a matrix from one whose parts are cut off
from each other, and leaves their levels open.  Here the level of each part is solved for apart, in
double precision, before and after the cycle.  Sources: Nicolaides, R. A. (1987), SIAM J. Numer.
Anal. 24, 355-365 (one unknown per part); Mandel, J. (1993), Commun. Numer. Methods Eng. 9, 233-241
(balancing).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.sparse as sparse

from .linear import Prepared


@dataclass(frozen=True, eq=False)
class Deflated:
    """A multigrid hierarchy helped by one unknown per part; takes its place in ``solve``.

    Attributes
    ----------
    inner : Prepared
    matrix : (n, n) csr_matrix that is solved
    parts : (n,) number of the part each row belongs to, -1 for none
    levels : (k, k) inverse of the matrix of the parts' levels
    """

    inner: Prepared
    matrix: sparse.csr_matrix
    parts: np.ndarray
    levels: np.ndarray

    @property
    def singular(self) -> bool:
        """Whether the constant vector is in the null space."""
        return self.inner.singular

    @property
    def built_from(self) -> tuple[sparse.csr_matrix, sparse.csr_matrix]:
        """As of the hierarchy."""
        return self.inner.built_from

    def precondition(self, rhs: np.ndarray) -> np.ndarray:
        """Levels, one V-cycle, levels again: (n,) -> (n,), symmetric."""
        first = self._levels(rhs)
        cycle = self.inner.precondition(rhs - self.matrix @ first)
        return first + cycle - self._levels(self.matrix @ cycle)

    def _levels(self, rhs: np.ndarray) -> np.ndarray:
        sums = np.bincount(self.parts + 1, rhs, len(self.levels) + 1)[1:]
        level = np.einsum("ij,j->i", self.levels, sums)
        return np.concatenate([[0.0], level])[self.parts + 1]


def deflated(prepared: Prepared, matrix: sparse.csr_matrix, parts: np.ndarray) -> Deflated:
    """Help a hierarchy with the levels of parts.

    Parameters
    ----------
    prepared : Prepared
        Hierarchy of the matrix or a similar one.
    matrix : (n, n) csr_matrix, symmetric positive (semi)definite
    parts : (n,) int
        Part each row belongs to, from 0, -1 for none.
    """
    inside = np.flatnonzero(parts >= 0)
    count = int(parts.max(initial=-1)) + 1
    members = sparse.csr_matrix((np.ones(len(inside)), (inside, parts[inside])),
                                shape=(len(parts), count))
    whole = (members.T @ (matrix @ members)).toarray()
    scale = 1.0 / np.sqrt(np.maximum(whole.diagonal(), 1e-300))
    scaled = 0.5 * (whole + whole.T) * np.outer(scale, scale)
    inverse = np.linalg.pinv(scaled, rcond=1e-10, hermitian=True)
    return Deflated(prepared, matrix, parts, inverse * np.outer(scale, scale))
