"""The irrotational part of a force: it moves the pressure and nothing else."""

from __future__ import annotations

import numpy as np

from ..operators import linear
from ..operators.assembly import symmetric_matrix
from .problem import Force, Problem


def force_potential(problem: Problem, force: Force, *,
                    tolerance: float = 1e-9) -> tuple[np.ndarray, np.ndarray]:
    """Potential whose gradient is the irrotational part of a force.

    Solves ``div grad psi = div f`` with ``d psi / d n = f . n`` where the flux is given and
    ``psi = 0`` at outlets, by the compact operators of the pressure equation.

    Returns
    -------
    cell : (n_cells,) [m^2/s^2], face : (n_faces,) [m^2/s^2]
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    g = problem.orthogonal
    outer = np.where(problem.table.pressure_given, g[n:], 0.0)
    matrix = symmetric_matrix(mesh, problem.pattern, g[:n], outer)
    flux = np.concatenate([g[:n] * force.drop[:n], outer * force.drop[n:]])
    prepared = linear.prepare(matrix, singular=problem.closed)
    cell = linear.solve(prepared, -(mesh.outflow @ flux), matrix=matrix,
                        tolerance=tolerance).solution
    w = mesh.weight
    face = np.empty(mesh.n_faces)
    face[:n] = w * cell[mesh.left[:n]] + (1 - w) * cell[mesh.right]
    owner = mesh.left[n:]
    face[n:] = np.where(problem.table.pressure_given, 0.0, cell[owner] + force.drop[n:])
    return cell, face
