"""What a face flux keeps of the level or iteration before: so that no step enters the solution.

The flux less the interpolated velocity, the defect, answers the pressure with ``D``, the
interpolated volume over diagonal.  With the time term in the diagonal it is ``D^``, smaller; the
defect of before then enters with ``(1 / D^) - (1 / D)``, and a steady defect is that of a flux
without time term, whatever the step.
"""

from __future__ import annotations

import numpy as np

from .problem import Problem


def flux_defect(problem: Problem, velocity: np.ndarray, gradient: np.ndarray,
                edge: np.ndarray, mass_flux: np.ndarray) -> np.ndarray:
    """(n_faces,) volume flux less that of the interpolated velocity [m^3/s].

    ``gradient`` (n_cells, 3, 3) [1/s] and ``edge`` (n_boundary, 3) [m/s] belong to the velocity;
    zero on boundaries of given flow.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    through = np.einsum("ij,ij->i", mesh.to_faces(velocity), mesh.face_area)
    slope = mesh.to_faces(gradient)[:n]
    through[:n] += np.einsum("fij,fj,fi->f", slope, mesh.skew_offset, mesh.face_area[:n])
    if mesh.warped:
        through[:n] += np.einsum("fij,fji->f", slope, mesh.warp[:n])
    through[n:] = np.einsum("ij,ij->i", edge, mesh.face_area[n:])
    defect = mass_flux / problem.case.fluid.density - through
    defect[n:] = np.where(problem.table.pressure_given, defect[n:], 0.0)
    return np.asarray(defect)


def memory_share(problem: Problem, diagonal: np.ndarray, inertia: np.ndarray) -> np.ndarray:
    """(n_faces,) factor on the defect of before [kg/(m^3 s)].

    ``diagonal`` and ``inertia`` (n_cells,) [kg/s]: momentum diagonal and time term.  Between cells
    of one diagonal the factor is inertia over volume.
    """
    mesh = problem.mesh
    with_time = mesh.to_faces(mesh.cell_volume / (diagonal + inertia))
    return np.asarray(1.0 / with_time - 1.0 / mesh.to_faces(mesh.cell_volume / diagonal))
