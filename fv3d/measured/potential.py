"""Forces of single readings and their potentials, worked out where they are not zero."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ..flow.equations import PressureFields, corrected_flux, pressure_fields
from ..flow.problem import Force, Problem
from ..flow.projected import Push
from ..operators import kernels
from ..operators.assembly import NO_VECTORS, NOTHING

NO_TENSORS = np.empty((0, 3, 3))


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
    return _free_fields(problem, potential).gradient


def _free_fields(problem: Problem, potential: np.ndarray) -> PressureFields:
    free = replace(problem.table, pressure=np.zeros(problem.mesh.n_boundary))
    still = np.zeros(problem.mesh.n_boundary)
    return pressure_fields(replace(problem, table=free), potential, still)


def unpressed_flux(problem: Problem, force: Force, potential: np.ndarray) -> np.ndarray:
    """(n_faces,) flux of a force less that of a potential's gradient [kg/s^2].

    The difference of :func:`fv3d.flow.projected.force_flux` and
    :func:`fv3d.flow.projected.slope_flux`, in one loop.
    """
    mesh, n, density = problem.mesh, problem.mesh.n_internal, problem.case.fluid.density
    fields = _free_fields(problem, potential)
    moved, net = force.cell - fields.gradient, fields.slope - force.cell
    flux = np.empty(mesh.n_faces)
    kernels.momentum_face_flux(
        mesh.left[:n], mesh.right, mesh.weight, NO_VECTORS, mesh.face_area, mesh.delta,
        problem.orthogonal, mesh.straight, density, moved, NO_TENSORS, net, potential, force.drop,
        np.ones(mesh.n_cells), NOTHING, flux)
    owner = mesh.left[n:]
    jump = fields.edge - potential[owner] - force.drop[n:]
    free = np.einsum("ij,ij->i", moved[owner], mesh.face_area[n:]) + problem.orthogonal[n:] * (
        np.einsum("ij,ij->i", net[owner], mesh.delta[n:]) - jump)
    flux[n:] = np.where(problem.table.pressure_given, density * free, 0.0)
    return flux


def push_of(problem: Problem, force: Force, potential: np.ndarray, rest: np.ndarray) -> Push:
    """As :func:`fv3d.flow.projected.projected`, in fewer passes."""
    n, density = problem.mesh.n_internal, problem.case.fluid.density
    factor = density * problem.orthogonal
    outer = np.where(problem.table.pressure_given, factor[n:], 0.0)
    flux = corrected_flux(problem, unpressed_flux(problem, force, potential), rest, factor[:n],
                          outer)
    whole = potential + rest
    return Push(force.cell - free_gradient(problem, whole), flux, density * whole)
