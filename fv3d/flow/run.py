"""What a run returns: fields, history, outcome, and values at points."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from ..errors import Outcome
from ..mesh.mesh import Mesh
from ..operators.interpolation import PointInterpolation, point_interpolation
from .equations import PressureFields, pressure_fields
from .monitors import Series
from .problem import Case, Force, Problem, State
from .zones import bent


@dataclass(frozen=True, eq=False)
class Sample:
    """Values at points: ``velocity`` (n, 3) [m/s] and ``pressure`` (n,) [Pa]."""

    velocity: np.ndarray
    pressure: np.ndarray


@dataclass(frozen=True, eq=False)
class Run:
    """A finished run: fields, history, outcome.

    ``print(run)`` is a short sheet of what was run, how it ended and what it cost; ``before`` are
    its lines on coarser meshes, whose time ``seconds`` includes.
    """

    problem: Problem = field(repr=False)
    state: State = field(repr=False)
    history: Mapping[str, np.ndarray] = field(repr=False)
    outcome: Outcome
    name: str
    seconds: float = 0.0
    series: Mapping[str, Series] = field(default_factory=dict, repr=False)
    before: tuple[str, ...] = ()

    @property
    def case(self) -> Case:
        """The case that was run."""
        return self.problem.case

    @property
    def mesh(self) -> Mesh:
        """Its mesh."""
        return self.problem.mesh

    @property
    def velocity(self) -> np.ndarray:
        """(n_cells, 3) [m/s]."""
        return self.state.velocity

    @property
    def mass_flux(self) -> np.ndarray:
        """(n_faces,) [kg/s]."""
        return self.state.mass_flux

    @cached_property
    def pressure(self) -> np.ndarray:
        """(n_cells,) [Pa], without the part that only balances the artificial force."""
        if not self.guided:
            return self.state.pressure
        return self.state.pressure - self.case.fluid.density * self.force_potential[0]

    @property
    def guided(self) -> bool:
        """Whether sources put in any force."""
        return bool(np.any(self.artificial_force))

    @cached_property
    def source_force(self) -> Force:
        """Artificial force of all sources [m/s^2], as the equations use it."""
        mesh = self.mesh
        parts = [source.force(own) for source, own
                 in zip(self.problem.sources, self.state.sources, strict=True)
                 if getattr(source, "artificial", True)]
        cell, drop = np.zeros((mesh.n_cells, 3)), np.zeros(mesh.n_faces)
        for part in parts:
            cell, drop = cell + part.cell, drop + part.drop
        return Force(cell, drop)

    @property
    def body_force(self) -> np.ndarray:
        """(n_cells, 3) body force of the case and drives of periodic pairs [m/s^2]."""
        total = np.zeros((self.mesh.n_cells, 3))
        if self.problem.force is not None:
            total += self.problem.force.cell
        for source, own in zip(self.problem.sources, self.state.sources, strict=True):
            if not getattr(source, "artificial", True):
                total += source.force(own).cell
        return total

    @property
    def artificial_force(self) -> np.ndarray:
        """(n_cells, 3) force put in by the sources [m/s^2]."""
        return self.source_force.cell

    @cached_property
    def force_potential(self) -> tuple[np.ndarray, np.ndarray]:
        """Potential [m^2/s^2] of the irrotational part of the artificial force: cells, faces."""
        from .potential import force_potential
        return force_potential(self.problem, self.source_force)

    @cached_property
    def pressure_fields(self) -> PressureFields:
        """Solver's pressure with face values and conservative gradient (force balance included)."""
        return pressure_fields(bent(self.problem, self.state), self.state.pressure,
                               self.state.mass_flux[self.mesh.n_internal:])

    @cached_property
    def face_pressure(self) -> np.ndarray:
        """(n_faces,) pressure on the faces [Pa], without the part that balances the force."""
        face = self.pressure_fields.face
        if not self.guided:
            return face
        return face - self.case.fluid.density * self.force_potential[1]

    def velocity_gradient(self) -> np.ndarray:
        """(n_cells, 3, 3) with ``[c, i, j]`` the derivative of component i along axis j [1/s]."""
        return self.problem.velocity_gradient(self.velocity, self.state.boundary_velocity)

    def interpolation(self, points: np.ndarray, *, where: str = "sample(points)",
                      names: list[str] | None = None) -> PointInterpolation:
        """Operator from cell values to points (n, 3) [m]."""
        return point_interpolation(self.mesh, self.problem.velocity_gradient, points, where=where,
                                   names=names)

    def sample(self, points: np.ndarray) -> Sample:
        """Velocity and pressure at points (n, 3) [m].

        Continuous across faces and exact on linear fields.

        Raises
        ------
        CaseError
            A point lies outside the mesh.
        """
        to_points = self.interpolation(points)
        return Sample(to_points(self.velocity, self.state.boundary_velocity),
                      to_points(self.pressure, self.face_pressure[self.mesh.n_internal:]))

    def __str__(self) -> str:
        from .sheet import run_sheet
        return run_sheet(self)


def reverse_flow_share(run: Run) -> float:
    """Share of the flux through pressure boundaries that returns through the same boundary."""
    mesh, total, back = run.mesh, 0.0, 0.0
    for faces in mesh.boundaries.values():
        rows = slice(faces.start - mesh.n_internal, faces.stop - mesh.n_internal)
        if run.problem.table.pressure_given[rows].any():
            flux = run.mass_flux[faces]
            total += float(np.abs(flux).sum())
            back += float(min(np.maximum(flux, 0.0).sum(), -np.minimum(flux, 0.0).sum()))
    return back / total if total > 0 else 0.0


def drawing_outlets(run: Run) -> dict[str, float]:
    """Net inflow through outlets [kg/s] where an inlet is there to supply the flow."""
    mesh, n, given = run.mesh, run.mesh.n_internal, run.problem.table.pressure_given
    supplied = -float(np.minimum(np.where(given, 0.0, run.mass_flux[n:]), 0.0).sum())
    found = {}
    for name, faces in mesh.boundaries.items():
        net = float(run.mass_flux[faces].sum())
        if given[faces.start - n:faces.stop - n].any() and -net > 0.01 * supplied > 0.0:
            found[name] = -net
    return found


def renamed(run: Run, name: str) -> Run:
    """The same run under another name."""
    return replace(run, name=name)
