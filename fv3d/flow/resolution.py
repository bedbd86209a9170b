"""Does the mesh resolve the flow?  Cell Reynolds number and distance of the first cells."""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np

from ..errors import Fv3dWarning
from .equations import boundary_traction
from .problem import Problem, State

SUBLAYER = 5.0       # y+ up to which the velocity is linear (textbook)
COARSE = 20.0        # cell Reynolds number above which gradients are not diffusive at cell scale
SHARE = 0.05         # of volume or wall area that may exceed these (common practice, no source)


@dataclass(frozen=True)
class Resolution:
    """How well a mesh resolves a flow.

    Attributes
    ----------
    cell_reynolds : largest speed times cube root of volume over kinematic viscosity
    coarse_share : volume share of cells where that exceeds 20
    first_cell : largest y+ of the centres of cells at walls; 0 without walls
    beyond_share : share of wall area where that exceeds 5
    """

    cell_reynolds: float
    coarse_share: float
    first_cell: float
    beyond_share: float

    @property
    def poor(self) -> bool:
        """Whether the wall layers of a laminar run are not resolved."""
        return self.beyond_share > SHARE and self.coarse_share > SHARE

    def __str__(self) -> str:
        return (f"cell Reynolds number up to {self.cell_reynolds:.3g} (above {COARSE:g} in "
                f"{self.coarse_share:.0%} of the volume), first cells at y+ up to "
                f"{self.first_cell:.3g} (above {SUBLAYER:g} on {self.beyond_share:.0%} of the "
                "walls)")


def resolution(problem: Problem, state: State) -> Resolution:
    """Cell Reynolds numbers and y+ of the first cells, with the fluid's own viscosity."""
    mesh, n, density = problem.mesh, problem.mesh.n_internal, problem.case.fluid.density
    speed = np.sqrt(np.einsum("ij,ij->i", state.velocity, state.velocity))
    reynolds = density * speed * np.cbrt(mesh.cell_volume) / problem.viscosity
    coarse = float(mesh.cell_volume[reynolds > COARSE].sum() / mesh.cell_volume.sum())
    table = problem.table
    walls = (table.shear_tangential > 0) & (table.shear_normal == 0) \
        & (table.keep_tangential == 0)
    area = mesh.face_area_magnitude[n:][walls]
    if not walls.any():
        return Resolution(float(reynolds.max()), coarse, 0.0, 0.0)
    gradient = problem.velocity_gradient(state.velocity, state.boundary_velocity)
    traction = boundary_traction(problem, state.velocity, gradient, state.boundary_velocity)[walls]
    shear = np.sqrt(np.einsum("ij,ij->i", traction, traction)) / area
    depth = np.einsum("ij,ij->i", mesh.delta[n:][walls], mesh.face_normal[n:][walls])
    wall_viscosity = problem.viscosity[mesh.left[n:][walls]]
    first = np.sqrt(shear * density) * depth / wall_viscosity
    beyond = float(area[first > SUBLAYER].sum() / area.sum())
    return Resolution(float(reynolds.max()), coarse, float(first.max()), beyond)


def warn_of_poor_resolution(problem: Problem, state: State, name: str) -> None:
    """Say it where a run without turbulence model does not resolve its wall layers."""
    if problem.case.turbulence is not None:
        return
    found = resolution(problem, state)
    if found.poor:
        warnings.warn(f"Run '{name}' is laminar but its mesh does not resolve the flow: {found}. "
                      "Refine at the walls, or give Case(turbulence=WALE()) if the flow is "
                      "turbulent.", Fv3dWarning, stacklevel=3)
