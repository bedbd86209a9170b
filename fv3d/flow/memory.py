"""What a face flux keeps of the level or iteration before: so that no step enters the solution.

The flux less the interpolated velocity, the defect, answers the pressure with ``D``, the
interpolated volume over diagonal.  With the time term in the diagonal it is ``D^``, smaller; the
defect of before then enters with ``(1 / D^) - (1 / D)``, and a steady defect is that of a flux
without time term, whatever the step.
"""

from __future__ import annotations

import numpy as np

from ..operators import kernels
from .problem import Problem


def flux_defect(problem: Problem, velocity: np.ndarray, gradient: np.ndarray,
                edge: np.ndarray, mass_flux: np.ndarray) -> np.ndarray:
    """(n_faces,) volume flux less that of the interpolated velocity [m^3/s].

    ``gradient`` (n_cells, 3, 3) [1/s] and ``edge`` (n_boundary, 3) [m/s] belong to the velocity;
    zero on boundaries of given flow.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    defect, density = np.empty(mesh.n_faces), problem.case.fluid.density
    kernels.flux_defects(mesh.left[:n], mesh.right, mesh.weight, mesh.skew, mesh.face_area,
                         velocity, gradient, density, mass_flux, defect)
    if mesh.warped:
        defect[:n] -= np.einsum("fij,fji->f", mesh.to_faces(gradient)[:n], mesh.warp[:n])
    through = np.einsum("ij,ij->i", edge, mesh.face_area[n:])
    defect[n:] = np.where(problem.table.pressure_given, mass_flux[n:] / density - through, 0.0)
    return defect


def memory_share(problem: Problem, diagonal: np.ndarray, inertia: np.ndarray) -> np.ndarray:
    """(n_faces,) factor on the defect of before [kg/(m^3 s)].

    ``diagonal`` and ``inertia`` (n_cells,) [kg/s]: momentum diagonal and time term.  Between cells
    of one diagonal the factor is inertia over volume.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    with_time, without = (mesh.cell_volume / d for d in (diagonal + inertia, diagonal))
    factor = np.empty(mesh.n_faces)
    kernels.memory_factors(mesh.left[:n], mesh.right, mesh.weight, with_time, without, factor[:n])
    owner = mesh.left[n:]
    factor[n:] = 1.0 / with_time[owner] - 1.0 / without[owner]
    return factor
