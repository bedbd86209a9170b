"""Runs made from given fields, without solving, and small cases used by several test files."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

import fv3d
from fv3d.errors import converged
from fv3d.flow.problem import State, make_problem
from fv3d.mesh.mesh import Mesh

Field = Callable[[np.ndarray], np.ndarray]


def made_run(mesh: Mesh, velocity: Field, pressure: Field, **options: Any) -> fv3d.Run:
    """A run whose fields are the given functions at the cell and boundary face centres.

    The boundaries are walls, but the velocity on them is the given one.
    """
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.2, viscosity=0.01),
                     boundaries={b: fv3d.Wall() for b in mesh.boundaries}, **options)
    edge = mesh.face_centre[mesh.n_internal:]
    flux = 1.2 * np.einsum("ij,ij->i", velocity(mesh.face_centre), mesh.face_area)
    state = State(velocity(mesh.cell_centre), pressure(mesh.cell_centre), flux, velocity(edge))
    return fv3d.Run(make_problem(case), state, {}, converged(1, 1e-6), "made")


def duct(mesh: Mesh, *, viscosity: float = 0.02, **options: Any) -> fv3d.Case:
    """Flow from x_min to x_max of a box between four walls, skewed inlet profile."""
    low, high = mesh.points.min(axis=0), mesh.points.max(axis=0)

    def profile(x: np.ndarray) -> np.ndarray:
        y, z = ((x - low) / (high - low))[:, 1:].T
        return np.outer(16 * y * (1 - y)**2 * z * (1 - z) * 27 / 16, (1.0, 0.0, 0.0))
    boundaries = {b: fv3d.Wall() for b in mesh.boundaries}
    boundaries |= {"x_min": fv3d.Inlet(profile), "x_max": fv3d.Outlet()}
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=viscosity), boundaries=boundaries,
                     **options)


def solved(case: fv3d.Case, *, tolerance: float = 1e-7, **options: Any) -> fv3d.Run:
    """Steady run without a progress bar; must converge."""
    run = fv3d.solve_steady(case, tolerance=tolerance, max_iterations=1500, progress=False,
                            **options)
    assert run.outcome.good
    return run


def distance(mesh: Mesh, one: np.ndarray, other: np.ndarray) -> float:
    """Volume-weighted L2 norm of the difference over that of ``other``."""
    def norm(field: np.ndarray) -> float:
        flat = field.reshape(mesh.n_cells, -1)
        return float(np.sqrt(np.average((flat**2).sum(axis=1), weights=mesh.cell_volume)))
    return norm(one - other) / norm(other)
