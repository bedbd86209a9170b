"""Forces of single readings and their potentials, worked out where they are not zero."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ..flow.equations import pressure_fields
from ..flow.problem import Force, Problem


def force_flux_near(problem: Problem, force: Force) -> np.ndarray:
    """(n_faces,) as :func:`fv3d.flow.projected.force_flux`, computed beside the force only."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    cells = np.flatnonzero(np.any(force.cell != 0.0, axis=1))
    offsets, around, _ = mesh.cell_faces
    count = offsets[cells + 1] - offsets[cells]
    first = np.repeat(offsets[cells] - np.concatenate([[0], np.cumsum(count)[:-1]]), count)
    beside = np.zeros(mesh.n_faces, dtype=bool)
    beside[around[first + np.arange(count.sum())]] = True
    beside[n:] &= problem.table.pressure_given
    faces = np.flatnonzero(beside)
    inner = int(np.searchsorted(faces, n))
    at_face = force.cell[mesh.left[faces]]
    w = mesh.weight[faces[:inner], None]
    at_face[:inner] = w * at_face[:inner] + (1 - w) * force.cell[mesh.right[faces[:inner]]]
    through = np.einsum("ij,ij->i", at_face, mesh.face_area[faces])
    along = np.einsum("ij,ij->i", at_face, mesh.delta[faces])
    flux = np.zeros(mesh.n_faces)
    flux[faces] = problem.case.fluid.density * (
        through + problem.orthogonal[faces] * (force.drop[faces] - along))
    return flux


def free_gradient(problem: Problem, potential: np.ndarray) -> np.ndarray:
    """(n_cells, 3) gradient by the operators of the pressure, zero on boundaries that give it."""
    free = replace(problem.table, pressure=np.zeros(problem.mesh.n_boundary))
    still = np.zeros(problem.mesh.n_boundary)
    return pressure_fields(replace(problem, table=free), potential, still).gradient
