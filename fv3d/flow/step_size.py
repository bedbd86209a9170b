"""Sizes of time steps: a number of seconds, or what a Courant number allows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from ..errors import CaseError, as_number
from .problem import Problem, State

KEPT = 0.15    # a step stays as it is while its Courant number is this near the target
GROWTH = 1.2   # largest growth from one step to the next
SHRINK = 0.4   # largest reduction


class StepSize(Protocol):
    """Chooses the size of the next step."""

    def size(self, problem: Problem, state: State, last: float | None) -> float:
        """Size [s]; ``last`` is that of the step before, None before the first."""
        ...


@dataclass(frozen=True)
class FixedStep:
    """The same step always."""

    seconds: float

    def size(self, problem: Problem, state: State, last: float | None) -> float:
        """The fixed size [s]."""
        return self.seconds


@dataclass(frozen=True)
class CourantStep:
    """Time steps from a Courant number, the largest of all cells.

    A step is kept while its Courant number lies within 15 % of the target, grows by a fifth at
    most and is cut as needed, down to two fifths; the time derivative keeps its second order.

    Parameters
    ----------
    target : float
        Courant number to aim at.
    first : float or None
        Size of the first step [s]; None: from the start field.
    largest : float
        Largest step [s].

    Raises
    ------
    CaseError
        A number that is not positive; a start at rest without ``first``.
    """

    target: float = 0.8
    first: float | None = None
    largest: float = float("inf")

    def __post_init__(self) -> None:
        given = {"target": self.target, "first": self.first, "largest": self.largest}
        for name, value in given.items():
            if value is not None and not as_number(value) > 0.0:
                raise CaseError("Courant number and steps must be positive.", got=value,
                                where=f"CourantStep({name}=)", remedy="Give 0.8, say.")

    def size(self, problem: Problem, state: State, last: float | None) -> float:
        """Size of the next step [s]."""
        if last is None and self.first is not None:
            return min(self.first, self.largest)
        rate = courant_number(problem, state.mass_flux, 1.0)
        if last is None:
            if not rate > 0.0:
                raise CaseError("A fluid at rest gives no first time step.", got=rate,
                                where="CourantStep", remedy="Give first= in seconds.")
            return float(min(self.target / rate, self.largest))
        wanted = self.target / max(rate, 1e-300)
        if abs(wanted / last - 1.0) <= KEPT and last <= self.largest:
            return last
        return float(min(np.clip(wanted, SHRINK * last, GROWTH * last), self.largest))


def courant_number(problem: Problem, mass_flux: np.ndarray, step: float) -> float:
    """Largest Courant number of all cells: step times throughflow over the cell's mass."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    size = np.abs(mass_flux)
    through = (np.bincount(mesh.left, size, mesh.n_cells)
               + np.bincount(mesh.right, size[:n], mesh.n_cells))
    mass = problem.case.fluid.density * mesh.cell_volume
    return float(step * (0.5 * through / mass).max())


def within(size: float, remaining: float) -> float:
    """A step that ends where the run ends: cut to what remains, or to half of it."""
    if size >= remaining * (1.0 - 1e-9):
        return remaining
    return 0.5 * remaining if 2.0 * size > remaining else size
