"""How strongly the discrete fluxes answer a pressure change, compared with the compact operator.

On an orthogonal mesh the answer is the compact operator itself.  On skewed tetrahedra the
non-orthogonal part can answer two or three times as strongly; a full pressure correction would
then overshoot.  Both numbers are estimated once per case by power iteration.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..mesh.mesh import Mesh
from ..operators import linear
from ..operators.assembly import symmetric_matrix
from .numerics import SIMPLE, SIMPLEC
from .problem import Problem

SKEWED_FROM = 1.4
DAMPED = 0.3
EVEN = 3.0


@dataclass(frozen=True)
class PressureResponse:
    """Largest answers, relative to the compact operator (``whole``) and its diagonal (``fine``).

    ``whole`` includes the velocity's answer; ``fine`` is that of the flux smoothing alone.
    ``decoupled``: nearly all cells are hexahedra, whose pressure gradient does not see a pressure
    that alternates from cell to cell.  ``even``: the viscosity, and with it the answer of a flux,
    varies by no more than ``EVEN`` over the domain.
    """

    whole: float
    fine: float
    decoupled: bool
    even: bool = True

    @property
    def skewed(self) -> bool:
        """Whether full pressure corrections may overshoot: skewed hexahedra, tetrahedra."""
        return self.whole > SKEWED_FROM or not self.decoupled

    def share(self, coupling: SIMPLE | SIMPLEC) -> float:
        """Share of a pressure correction to add with this coupling.

        On a skewed mesh it is bounded by ``DAMPED`` times the ratio of the coupling's correction
        coefficient to the unrelaxed one (found by trial on tetrahedra with faces of 83 degrees).
        """
        if not self.skewed:
            return coupling.pressure_share
        return min(coupling.pressure_share, DAMPED / coupling.correction_diagonal(
            1.0, 1.0, 1.0 / coupling.velocity_relaxation - 1.0))

    @property
    def fine_steps(self) -> tuple[float, ...]:
        """Steps of the fine-scale pressure supplement, none on a skewed mesh.

        Nor on tetrahedra with layers of unlike viscosity, whose fluxes the estimate does not know.

        The pair damps answers between a third of the largest and the largest to a fifth; where
        the velocity answers at cell scale too (tetrahedra) one step is enough.
        """
        if self.whole > SKEWED_FROM or not (self.decoupled or self.even):
            return ()
        return (1.1 / self.fine, 2.0 / self.fine) if self.decoupled else (1.0 / self.fine,)


def mostly_hexahedra(mesh: Mesh) -> bool:
    """Whether nearly all cells are hexahedra."""
    count = sum(len(cells) for kind, _, cells in mesh.cell_blocks if kind == "hexahedron")
    return count > 0.95 * mesh.n_cells


def pressure_response(problem: Problem, *, steps: int = 12) -> PressureResponse:
    """Estimate the response of a case's mesh and boundaries.

    Parameters
    ----------
    steps : int
        Power iterations for each number.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    decoupled = mostly_hexahedra(mesh)
    even = bool(problem.viscosity.max() <= EVEN * problem.viscosity.min())
    cosine = np.einsum("ij,ij->i", mesh.face_normal, mesh.delta)
    cosine /= np.linalg.norm(mesh.delta, axis=1)
    if cosine.min() > 0.996:
        return PressureResponse(1.0, 2.0, decoupled, even)
    g = problem.orthogonal
    outer = np.where(problem.table.pressure_given, g[n:], 0.0)
    matrix = symmetric_matrix(mesh, problem.pattern, g[:n], outer)
    prepared = linear.prepare(matrix, singular=problem.closed)
    diagonal = matrix.diagonal()

    def compact_inverse(rhs: np.ndarray) -> np.ndarray:
        return linear.solve(prepared, rhs, matrix=matrix, tolerance=0.1).solution

    def whole_answer(p: np.ndarray) -> np.ndarray:
        return compact_inverse(_answer(problem, p, outer, 1.0))

    def fine_answer(p: np.ndarray) -> np.ndarray:
        return _answer(problem, p, outer, 0.0) / diagonal

    whole = _largest(whole_answer, mesh.n_cells, steps)
    fine = _largest(fine_answer, mesh.n_cells, steps)
    return PressureResponse(max(1.1 * whole, 1.0), max(1.1 * fine, 1.0), decoupled, even)


def _answer(problem: Problem, pressure: np.ndarray, outer: np.ndarray,
            velocity_share: float) -> np.ndarray:
    """Net inflow of each cell caused by a pressure, per unit of volume over diagonal."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    slope = mesh.to_faces(problem.pressure_gradient(pressure, np.zeros(mesh.n_boundary)))
    smooth = np.einsum("ij,ij->i", slope, mesh.delta)
    through = velocity_share * np.einsum("ij,ij->i", slope, mesh.face_area)
    jump = np.empty(mesh.n_faces)
    jump[:n] = pressure[mesh.right] - pressure[mesh.left[:n]]
    jump[n:] = -pressure[mesh.left[n:]]
    flux = through + problem.orthogonal * (jump - smooth)
    flux[n:] = np.where(outer > 0, flux[n:], 0.0)
    return np.asarray(-(mesh.outflow @ flux))


def _largest(operator: Callable[[np.ndarray], np.ndarray], size: int, steps: int) -> float:
    x = np.random.default_rng(3).standard_normal(size)
    value = 1.0
    for _ in range(steps):
        x /= np.sqrt(np.einsum("i,i->", x, x))
        x = operator(x)
        value = float(np.sqrt(np.einsum("i,i->", x, x)))
    return value
