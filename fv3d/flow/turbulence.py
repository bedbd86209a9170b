"""Viscosity of the eddies that the mesh does not resolve, in runs in time."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from ..errors import CaseError, as_number
from .problem import Problem, State


class SubgridModel(Protocol):
    """Kinematic viscosity of unresolved eddies from the velocity gradient."""

    def viscosity(self, gradient: np.ndarray, width: np.ndarray) -> np.ndarray:
        """(n,) [m^2/s] from gradients (n, 3, 3) [1/s] and cell widths (n,) [m]."""
        ...


@dataclass(frozen=True)
class WALE:
    """Subgrid viscosity from the square of the velocity gradient; none in plain shear.

    With ``g`` the velocity gradient, ``S`` its symmetric part and ``T`` the traceless symmetric
    part of ``g g``, the viscosity is ``(C D)^2 (T:T)^(3/2) / ((S:S)^(5/2) + (T:T)^(5/4))``, ``D``
    the cube root of the cell volume.  It falls with the cube of the distance to a wall.

    Source: Nicoud, F. and Ducros, F. (1999), Flow Turbul. Combust. 62, 183-200, equation 10; the
    coefficient 0.5 is that of their flows along walls (0.55 to 0.6 in isotropic turbulence).

    Parameters
    ----------
    coefficient : float

    Raises
    ------
    CaseError
        A coefficient that is not positive.

    Examples
    --------
    Pure shear has none, a solid rotation of unit rate ``(2/3)^(1/4)``:

    >>> shear, turn = np.zeros((2, 3, 3))
    >>> shear[0, 1] = turn[1, 0] = 1.0
    >>> turn[0, 1] = -1.0
    >>> WALE(coefficient=1.0).viscosity(np.stack([shear, turn]), np.ones(2)).round(6)
    array([0.      , 0.903602])
    """

    coefficient: float = 0.5

    def __post_init__(self) -> None:
        if not 0.0 < as_number(self.coefficient) < np.inf:
            raise CaseError("The coefficient of a subgrid model is positive.",
                            where="WALE(coefficient=)", got=self.coefficient, remedy="Give 0.5.")

    def viscosity(self, gradient: np.ndarray, width: np.ndarray) -> np.ndarray:
        """(n,) [m^2/s] from gradients (n, 3, 3) [1/s] and cell widths (n,) [m]."""
        strain = 0.5 * (gradient + np.swapaxes(gradient, 1, 2))
        square = np.einsum("cik,ckj->cij", gradient, gradient)
        traceless = 0.5 * (square + np.swapaxes(square, 1, 2))
        third = np.einsum("cii->c", square) / 3.0
        for k in range(3):
            traceless[:, k, k] -= third
        shear = np.einsum("cij,cij->c", strain, strain)
        eddy = np.einsum("cij,cij->c", traceless, traceless)
        below = shear ** 2.5 + eddy ** 1.25
        rate = np.divide(eddy ** 1.5, below, out=np.zeros_like(below), where=below > 0)
        return (self.coefficient * width) ** 2 * rate


def with_eddies(problem: Problem, gradient: np.ndarray) -> Problem:
    """The problem with the eddies' viscosity added; the same object without a model.

    On walls and inlets the fluid's own viscosity acts, on other boundaries that of the cell.

    Parameters
    ----------
    gradient : (n_cells, 3, 3) velocity gradient [1/s]
    """
    model, mesh = problem.case.turbulence, problem.mesh
    if model is None:
        return problem
    n, density = mesh.n_internal, problem.case.fluid.density
    eddy = density * model.viscosity(gradient, np.cbrt(mesh.cell_volume))
    at_face = mesh.to_faces(eddy)
    given = (problem.table.keep_tangential == 0.0) & (problem.table.keep_normal == 0.0)
    at_face[n:] = np.where(given, 0.0, at_face[n:])
    full = problem.case.numerics.full_stress
    return replace(problem, viscosity=problem.viscosity + eddy,
                   face_viscosity=problem.face_viscosity + at_face,
                   full_stress=True if full is None else full)


def eddies_of(problem: Problem, state: State) -> Problem:
    """The problem with the eddies' viscosity of a state."""
    if problem.case.turbulence is None:
        return problem
    return with_eddies(problem, problem.velocity_gradient(state.velocity,
                                                          state.boundary_velocity))


def refuse_eddies(problem: Problem) -> None:
    """Subgrid models are for runs in time.

    Raises
    ------
    CaseError
    """
    if problem.case.turbulence is not None:
        raise CaseError("A subgrid model belongs to a run in time, which resolves the eddies.",
                        where="solve_steady(case)", got=repr(problem.case.turbulence),
                        remedy="Use solve_transient, or a case without turbulence=.")
