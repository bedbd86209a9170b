"""Start fields: irrotational flow, a vector, a function, or a run on this or another mesh."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from ..errors import CaseError
from ..mesh.agglomerate import AgglomeratedMesh
from ..operators import linear
from ..operators.assembly import symmetric_matrix
from .coupling import Workspace
from .equations import boundary_velocity, corrected_flux, pressure_fields
from .outlets import free_outlets, start_levels, with_given_flow
from .problem import Problem, State
from .zones import bent

OVERLAP = 0.5  # share of the cells that must lie inside the mesh of a start run
LOOKED_AT = 2000  # cells of which that is asked


def start_state(problem: Problem, start: Any, workspace: Workspace) -> State:
    """State before the first iteration.

    Parameters
    ----------
    start : None, Run, vector, or function of points (n, 3) -> (n, 3) [m/s]

    Raises
    ------
    CaseError
        The start is of another kind, has a wrong shape or is not finite.
    """
    earlier: dict[Any, Any] = {}
    if hasattr(start, "coarse_cases"):
        raise CaseError("Only steady runs start from coarser meshes.", where="start=",
                        got=type(start).__name__,
                        remedy="Give solve_steady that start, and its run as the start here.")
    if start is None:
        state = potential_start(problem, workspace)
    elif hasattr(start, "state") and hasattr(start, "problem"):
        state = _from_run(problem, start)
        earlier = dict(zip(map(_key, start.problem.sources), start.state.sources, strict=True))
    else:
        state = _from_values(problem, start)
    sources = tuple(source.start(problem, state, earlier.get(_key(source)))
                    for source in problem.sources)
    return replace(state, sources=sources, levels=start_levels(problem, start))


def _key(source: Any) -> Any:
    """What a source is known by in a start run: its own key, or that it is the same object."""
    return getattr(source, "key", id(source))


def _from_values(problem: Problem, start: Any) -> State:
    centre = problem.mesh.cell_centre
    try:
        value = np.asarray(start(centre.copy()) if callable(start) else start, dtype=float)
        value = np.broadcast_to(value, centre.shape) if value.ndim == 1 else value
    except (TypeError, ValueError):
        value = np.empty(0)
    if value.shape != centre.shape or not np.all(np.isfinite(value)):
        raise CaseError("The start must be a run, a finite vector or a function of points.",
                        where="start=", got=f"{type(start).__name__}, shape {value.shape}",
                        remedy="Give start=plain, start=(1.0, 0.0, 0.0) or leave it out.")
    return _with_fluxes(problem, np.array(value), start_pressure(problem))


def _from_run(problem: Problem, run: Any) -> State:
    state = run.state
    if not (np.all(np.isfinite(state.velocity)) and np.all(np.isfinite(state.pressure))):
        raise CaseError("The start run has values that are not finite.", where="start=",
                        got=f"run '{run.name}'", remedy="Start from a run that did not diverge.")
    if run.mesh is problem.mesh:
        return State(state.velocity, state.pressure, state.mass_flux, state.boundary_velocity)
    mesh = problem.mesh
    if isinstance(run.mesh, AgglomeratedMesh) and run.mesh.parent is mesh:
        return _with_fluxes(problem, *_extended(run, mesh.cell_centre, run.mesh.group))
    return _with_fluxes(problem, *sample_anywhere(run, mesh.cell_centre))


def sample_anywhere(run: Any, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Velocity and pressure at points, extended linearly from the nearest cell's centre.

    As good a start as values continuous across faces (the first iterations smooth what is
    rough), at a thirtieth of their cost.  Outside the run's mesh those of the nearest cell.

    Raises
    ------
    CaseError
        Most points lie outside: the run is of another domain.
    """
    from scipy.spatial import cKDTree

    from ..operators.interpolation import locate
    inside = locate(run.mesh, points[::max(len(points) // LOOKED_AT, 1)]) >= 0
    if np.mean(inside) < OVERLAP:
        raise CaseError("The start run is of another domain.", where="start=",
                        got=f"{np.mean(inside):.0%} of the cells lie inside its mesh",
                        remedy="Check the unit and the axes of both meshes, or start otherwise.")
    return _extended(run, points, cKDTree(run.mesh.cell_centre).query(points)[1])


def _extended(run: Any, points: np.ndarray, near: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Velocity and pressure at points, extended linearly from one cell each."""
    mesh, fluxes = run.mesh, run.state.mass_flux[run.mesh.n_internal:]
    arm = points - mesh.cell_centre[near]
    velocity = run.velocity[near] + np.einsum("nij,nj->ni", run.velocity_gradient()[near], arm)
    slope = pressure_fields(bent(run.problem, run.state), run.pressure, fluxes).slope
    pressure = run.pressure[near] + np.einsum("nj,nj->n", slope[near], arm)
    return velocity, pressure


def _with_fluxes(problem: Problem, velocity: np.ndarray, pressure: np.ndarray) -> State:
    mesh, n = problem.mesh, problem.mesh.n_internal
    density = problem.case.fluid.density
    w = mesh.weight[:, None]
    flux = np.zeros(mesh.n_faces)
    at_face = w * velocity[mesh.left[:n]] + (1 - w) * velocity[mesh.right]
    flux[:n] = density * np.einsum("ij,ij->i", at_face, mesh.face_area[:n])
    edge = boundary_velocity(problem, velocity, np.zeros((mesh.n_cells, 3, 3)),
                             np.ones(mesh.n_boundary))
    outflow = density * np.einsum("ij,ij->i", edge, mesh.face_area[n:])
    flux[n:] = np.where(problem.table.pressure_given, outflow, problem.fixed_flux)
    return State(velocity, pressure, flux, edge)


def potential_start(problem: Problem, workspace: Workspace) -> State:
    """Start field: irrotational flow through the given fluxes, or rest where there are none."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    flux = np.zeros(mesh.n_faces)
    flux[n:] = with_given_flow(mesh, problem.outlets, problem.fixed_flux)
    outer = np.where(free_outlets(problem), problem.orthogonal[n:], 0.0)
    if np.any(flux):
        inner = problem.orthogonal[:n]
        matrix = symmetric_matrix(mesh, problem.pattern, inner, outer)
        prepared = linear.prepare(matrix, singular=problem.closed)
        potential = linear.solve(prepared, -(mesh.outflow @ flux), matrix=matrix, tolerance=1e-6)
        flux = corrected_flux(problem, flux, potential.solution, inner, outer)
    velocity = velocity_from_flux(problem, flux)
    edge = boundary_velocity(problem, velocity, np.zeros((mesh.n_cells, 3, 3)), flux[n:])
    return State(velocity, start_pressure(problem), flux, edge)


def start_pressure(problem: Problem) -> np.ndarray:
    """(n_cells,) pressure that outlets and body force alone would cause [Pa].

    A constant pressure level, or a force that pressure can balance, then costs no iteration.
    """
    mesh, n, table = problem.mesh, problem.mesh.n_internal, problem.table
    given = np.where(table.pressure_given, table.pressure, 0.0)
    if problem.force is None and not given.any():
        return np.zeros(mesh.n_cells)
    drop = np.zeros(mesh.n_faces) if problem.force is None \
        else problem.case.fluid.density * problem.force.drop
    outer = np.where(table.pressure_given, problem.orthogonal[n:], 0.0)
    matrix = symmetric_matrix(mesh, problem.pattern, problem.orthogonal[:n], outer)
    flux = np.concatenate([problem.orthogonal[:n] * drop[:n], outer * (drop[n:] - given)])
    prepared = linear.prepare(matrix, singular=problem.closed)
    pressure = linear.solve(prepared, -(mesh.outflow @ flux), matrix=matrix,
                            tolerance=1e-10).solution
    if problem.closed:
        pressure -= np.average(pressure, weights=mesh.cell_volume)
    return pressure


def velocity_from_flux(problem: Problem, flux: np.ndarray) -> np.ndarray:
    """(n_cells, 3) velocity that fits the mass fluxes of each cell's faces best."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    cells = np.concatenate([mesh.left, mesh.right])
    area = np.concatenate([mesh.face_area, mesh.face_area[:n]])
    size = np.concatenate([mesh.face_area_magnitude, mesh.face_area_magnitude[:n]])
    through = np.concatenate([flux, flux[:n]]) / problem.case.fluid.density
    matrix, rhs = np.zeros((mesh.n_cells, 3, 3)), np.zeros((mesh.n_cells, 3))
    for i in range(3):
        rhs[:, i] = np.bincount(cells, through * area[:, i] / size, mesh.n_cells)
        for j in range(3):
            matrix[:, i, j] = np.bincount(cells, area[:, i] * area[:, j] / size, mesh.n_cells)
    return np.ascontiguousarray(np.linalg.solve(matrix, rhs[:, :, None])[:, :, 0])
