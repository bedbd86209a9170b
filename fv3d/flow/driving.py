"""The uniform force that drives a periodic flow: given, or found so that the flow is the given one.

In each iteration the force changes by what the flow through the pair is missing over the response
of the flow to a unit force under the momentum operator of that iteration; in a run in time under
the projection of the step.  The flow that belongs to a change of velocity is its integral along
the translation over the length of the period.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import CaseError, expect_run
from ..mesh.mesh import Mesh
from .periodic import Periodic
from .problem import Correction, Force, Problem, State

if TYPE_CHECKING:
    from .projected import Push
    from .time_step import Moment


@dataclass(frozen=True, eq=False)
class DriveState:
    """``strength`` [m/s^2] of the force along the translation; what a unit does within a step."""

    strength: float
    push: Push | None = None


@dataclass(frozen=True, eq=False)
class Drive:
    """Source of a periodic pair's force; part of the flow, not artificial."""

    name: str
    condition: Periodic
    mesh: Mesh
    density: float
    artificial: bool = False

    @property
    def key(self) -> tuple[str, str]:
        """What a restart knows it by."""
        return ("drive", self.name)

    @property
    def length(self) -> float:
        """Length of the period [m]."""
        return float(np.linalg.norm(self.mesh.joined[self.name].shift))

    @property
    def direction(self) -> np.ndarray:
        """(3,) unit vector from the boundary to its partner."""
        return np.asarray(self.mesh.joined[self.name].shift / self.length)

    @cached_property
    def wanted(self) -> float | None:
        """Given volume flow [m^3/s], None where the pressure drop is given."""
        if self.condition.mean_speed is not None:
            faces = self.mesh.joined[self.name].faces
            area = float(np.abs(self.mesh.face_area[faces] @ self.direction).sum())
            return self.condition.mean_speed * area
        return self.condition.volume_flow

    @cached_property
    def unit(self) -> Force:
        """Force of strength one; a uniform force needs no balancing."""
        return Force(np.broadcast_to(self.direction, self.mesh.cell_centre.shape),
                     self.mesh.delta @ self.direction)

    def through(self, mass_flux: np.ndarray) -> float:
        """Volume flow [m^3/s] through the pair of a mass flux (n_faces,)."""
        pair = self.mesh.joined[self.name]
        return float(np.einsum("i,i->", mass_flux[pair.faces], pair.sign)) / self.density

    def flow(self, velocity: np.ndarray) -> float:
        """Volume flow [m^3/s] of a change of velocity (n_cells, 3)."""
        along = np.einsum("ij,j->i", velocity, self.direction)
        return float(np.einsum("i,i->", along, self.mesh.cell_volume)) / self.length

    def start(self, problem: Problem, state: State, earlier: Any) -> DriveState:
        """The given strength; that of a start run, or none, where it is to be found."""
        if self.condition.drop_per_length is not None:
            return DriveState(self.condition.drop_per_length / self.density)
        return DriveState(0.0 if earlier is None else earlier.strength)

    def force(self, own: DriveState) -> Force:
        """The force it exerts now."""
        return Force(own.strength * self.unit.cell, own.strength * self.unit.drop)

    def correct(self, own: DriveState, problem: Problem, state: State, change: np.ndarray,
                relax: Callable[..., Any]) -> Correction:
        """Force and velocity change of an iteration with the given flow."""
        if self.wanted is None:
            return Correction(own, change)
        mass = self.density * self.mesh.cell_volume
        response = relax(mass[:, None] * self.unit.cell)
        now = self.through(state.mass_flux)
        missing = (self.wanted - now - self.flow(change)) / self.flow(response)
        return Correction(replace(own, strength=own.strength + missing),
                          change + missing * response, abs(now / self.wanted - 1.0))

    def advance(self, own: DriveState, problem: Problem,
                moment: Moment) -> tuple[DriveState, Push | None, float]:
        """Force of the new time level with the given flow, and what its change does."""
        if self.wanted is None:
            return own, None, 0.0
        from .projected import force_potential, make_projection, projected
        unit = own.push
        if unit is None:
            potential = force_potential(problem, make_projection(problem), self.unit)
            unit = projected(problem, self.unit, potential)
        now = self.through(moment.mass_flux)
        more = (self.wanted - now) / (moment.step * self.through(unit.mass_flux))
        push = replace(unit, velocity=more * unit.velocity, mass_flux=more * unit.mass_flux,
                       pressure=more * unit.pressure)
        return DriveState(own.strength + more, unit), push, abs(now / self.wanted - 1.0)

    def describe(self, own: DriveState) -> list[str]:
        """Line for the sheet of a run."""
        how = "given" if self.wanted is None else f"found for {self.wanted:.6g} m3/s"
        return [f"driving    pressure drop {own.strength * self.density:.6g} Pa/m from "
                f"'{self.name}' to '{self.condition.partner}', {how}"]


def drives_of(case: Any) -> tuple[Drive, ...]:
    """Sources of the driven pairs of a case."""
    return tuple(Drive(name, one, case.mesh, case.fluid.density)
                 for name, one in case.periodic.items() if one.driven)


def pressure_drop(run: Any, name: str) -> float:
    """Fall of the mean pressure along a periodic pair, given or found [Pa/m].

    Parameters
    ----------
    run : Run
    name : str
        Name of the boundary whose condition drives the flow.

    Returns
    -------
    float
        Positive for flow from this boundary through the domain to its partner.

    Raises
    ------
    CaseError
        No driven periodic pair of this name.
    """
    expect_run(run, "pressure_drop(run, name)")
    drives = {source.name: own for source, own in
              zip(run.problem.sources, run.state.sources, strict=True) if isinstance(source, Drive)}
    if name not in drives:
        raise CaseError("No periodic pair of this name drives the flow.",
                        where="pressure_drop(run, name)", got=repr(name),
                        remedy=f"The run has: {', '.join(drives) or 'none'}.")
    return float(drives[name].strength * run.case.fluid.density)
