"""The irrotational part of a force: it moves the pressure and nothing else."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..operators import linear
from ..operators.assembly import symmetric_matrix
from .equations import PressureFields, pressure_fields
from .problem import Force, Problem, State
from .zones import bent


def prepare_potential(problem: Problem) -> linear.Prepared | linear.Factorised:
    """The solver of :func:`force_potential` where many forces are asked for on one mesh."""
    g, n = problem.orthogonal, problem.mesh.n_internal
    outer = np.where(problem.table.pressure_given, g[n:], 0.0)
    matrix = symmetric_matrix(problem.mesh, problem.pattern, g[:n], outer)
    return linear.prepare_constant(matrix, singular=problem.closed)


def force_potential(problem: Problem, force: Force, *, tolerance: float = 1e-9,
                    prepared: linear.Prepared | linear.Factorised | None = None
                    ) -> tuple[np.ndarray, np.ndarray]:
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
    flux = np.concatenate([g[:n] * force.drop[:n], outer * force.drop[n:]])
    prepared = prepare_potential(problem) if prepared is None else prepared
    cell = linear.solve(prepared, -(mesh.outflow @ flux), matrix=prepared.built_from[0],
                        tolerance=tolerance).solution
    w = mesh.weight
    face = np.empty(mesh.n_faces)
    face[:n] = w * cell[mesh.left[:n]] + (1 - w) * cell[mesh.right]
    owner = mesh.left[n:]
    face[n:] = np.where(problem.table.pressure_given, 0.0, cell[owner] + force.drop[n:])
    return cell, face


def artificial_force(problem: Problem, state: State) -> Force | None:
    """Force of all sources that is no part of the flow itself; None where there is none."""
    parts = [source.force(own) for source, own
             in zip(problem.sources, state.sources, strict=True)
             if getattr(source, "artificial", True)]
    parts = [part for part in parts if np.any(part.cell)]
    if not parts:
        return None
    return Force(sum((part.cell for part in parts[1:]), parts[0].cell),
                 sum((part.drop for part in parts[1:]), parts[0].drop))


class TruePressure:
    """Pressure without the part that only balances artificial forces, step after step."""

    def __init__(self) -> None:
        self._mesh: Any = None
        self._prepared: linear.Prepared | linear.Factorised | None = None

    def __call__(self, problem: Problem, state: State) -> tuple[PressureFields, np.ndarray,
                                                               np.ndarray]:
        """The solver's pressure fields, and true pressures of cells and faces [Pa]."""
        fields = pressure_fields(bent(problem, state), state.pressure,
                                 state.mass_flux[problem.mesh.n_internal:])
        force = artificial_force(problem, state)
        if force is None:
            return fields, fields.cell, fields.face
        if self._mesh is not problem.mesh:
            self._mesh, self._prepared = problem.mesh, prepare_potential(problem)
        cell, face = force_potential(problem, force, prepared=self._prepared)
        density = problem.case.fluid.density
        return fields, fields.cell - density * cell, fields.face - density * face
