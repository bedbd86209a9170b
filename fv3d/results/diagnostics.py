"""Forces on boundaries, the momentum budget and the artificial-force budget of a run."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from ..errors import CaseError, did_you_mean, expect_run
from ..flow.equations import boundary_carried, boundary_traction
from ..flow.run import Run
from ..operators.interpolation import checked_points


@dataclass(frozen=True, eq=False)
class BoundaryForce:
    """Force of the fluid on a boundary, all (3,) [N], and moments about ``centre`` [N m]."""

    name: str
    pressure: np.ndarray
    friction: np.ndarray
    pressure_moment: np.ndarray
    friction_moment: np.ndarray
    centre: np.ndarray

    @property
    def total(self) -> np.ndarray:
        """Pressure plus friction [N]."""
        return self.pressure + self.friction

    @property
    def moment(self) -> np.ndarray:
        """Moment of the total force about ``centre`` [N m]."""
        return self.pressure_moment + self.friction_moment

    def __str__(self) -> str:
        def row(label: str, vector: np.ndarray) -> str:
            return f"  {label:<9}" + " ".join(f"{value:12.5g}" for value in vector)
        return "\n".join([f"force of the fluid on '{self.name}'  x, y, z [N]",
                          row("pressure", self.pressure), row("friction", self.friction),
                          row("total", self.total), row("moment", self.moment) + "  [N m]"])


def boundary_faces(run: Run, name: str, *, where: str = "force(run, name)") -> slice:
    """Faces of a boundary of the run's mesh; ``where`` shows the call in messages.

    Raises
    ------
    CaseError
        No such boundary, or no run.
    """
    expect_run(run, where)
    known = list(run.mesh.boundaries)
    if name not in known:
        raise CaseError("No such boundary.", where=where, got=repr(name),
                        remedy=f"The mesh has: {', '.join(known)}.{did_you_mean(name, known)}")
    return run.mesh.boundaries[name]


def force(run: Run, name: str, *, centre: Sequence[float] = (0.0, 0.0, 0.0)) -> BoundaryForce:
    """Pressure and friction force of the fluid on a boundary.

    The face pressure is the one the momentum equation uses, less the part that only balances an
    artificial force; friction is the traction of the momentum equation.

    Parameters
    ----------
    run : Run
    name : str
        Boundary.
    centre : (3,) [m]
        Point the moments are taken about.

    Returns
    -------
    BoundaryForce

    Raises
    ------
    CaseError
        No such boundary, no run, or a centre that is no point.
    """
    faces = boundary_faces(run, name)
    mesh, n = run.mesh, run.mesh.n_internal
    rows = slice(faces.start - n, faces.stop - n)
    push = pressure_force(run)[rows]
    drag = friction_force(run)[rows]
    about = checked_points(np.asarray(centre), "force(centre=)")[0]
    arm = mesh.face_centre[faces] - about
    return BoundaryForce(name, push.sum(axis=0), drag.sum(axis=0),
                         np.cross(arm, push).sum(axis=0), np.cross(arm, drag).sum(axis=0), about)


def pressure_force(run: Run) -> np.ndarray:
    """(n_boundary, 3) pressure force of the fluid on each boundary face [N]."""
    mesh, n = run.mesh, run.mesh.n_internal
    return (run.face_pressure[n:, None] * mesh.face_area[n:] + run.pressure_fields.warp_force[n:])


def friction_force(run: Run) -> np.ndarray:
    """(n_boundary, 3) viscous force of the fluid on each boundary face [N]."""
    return -_traction(run)


def _traction(run: Run) -> np.ndarray:
    return boundary_traction(run.problem, run.velocity, run.velocity_gradient(),
                             run.state.boundary_velocity)


@dataclass(frozen=True, eq=False)
class MomentumBudget:
    """Forces on the whole fluid, (3,) each [N]; ``closure`` is what is left over.

    Attributes
    ----------
    boundaries : mapping of name to the force of the boundary on the fluid (pressure, friction)
    convected : momentum carried in through the boundaries
    body : body force of the case and drives of periodic pairs
    artificial : force of the sources, without its irrotational part
    resistances : mapping of name to the force of a zone of resistance on the fluid
    """

    boundaries: dict[str, np.ndarray]
    convected: np.ndarray
    body: np.ndarray
    artificial: np.ndarray
    resistances: dict[str, np.ndarray] = field(default_factory=dict)

    @property
    def closure(self) -> np.ndarray:
        """Sum of all [N]; zero for a converged run."""
        return sum([*self.boundaries.values(), *self.resistances.values()],
                   self.convected + self.body + self.artificial)

    @property
    def size(self) -> float:
        """Sum of the magnitudes of all contributions [N]."""
        parts = [*self.boundaries.values(), *self.resistances.values(), self.convected, self.body,
                 self.artificial]
        return float(sum(np.linalg.norm(part) for part in parts))

    def __str__(self) -> str:
        rows = {f"boundary '{name}'": part for name, part in self.boundaries.items()} | {
            f"resistance '{name}'": part for name, part in self.resistances.items()} | {
            "convected in": self.convected, "body force": self.body,
            "artificial force": self.artificial, "left over (closure)": self.closure}
        title = "forces on the whole fluid [N]"
        wide = max(len(title) - 2, *(len(label) for label in rows))
        share = np.linalg.norm(self.closure) / self.size if self.size > 0 else 0.0
        lines = [f"{title:<{wide + 2}}{'x':>12} {'y':>12} {'z':>12}"]
        lines += [f"  {label:<{wide}}" + " ".join(f"{value:12.4g}" for value in part)
                  for label, part in rows.items()]
        return "\n".join([*lines, f"  closure is {share:.2e} of the sum of all magnitudes, "
                                  f"{self.size:.5g} N"])


def momentum_budget(run: Run) -> MomentumBudget:
    """Every force on the fluid and how well they cancel.

    Parameters
    ----------
    run : Run

    Returns
    -------
    MomentumBudget
        All (3,) [N]; prints as a sheet.

    Raises
    ------
    CaseError
        Not a run.
    """
    expect_run(run, "momentum_budget(run)")
    mesh, n, density = run.mesh, run.mesh.n_internal, run.case.fluid.density
    push, traction = pressure_force(run), _traction(run)
    boundaries = {}
    for name, faces in mesh.boundaries.items():
        rows = slice(faces.start - n, faces.stop - n)
        boundaries[name] = (traction[rows] - push[rows]).sum(axis=0)
    carried = boundary_carried(run.problem, run.velocity, run.velocity_gradient(),
                               run.state.boundary_velocity, run.mass_flux[n:])
    convected = -(run.mass_flux[n:, None] * carried).sum(axis=0)
    volume = mesh.cell_volume[:, None]
    body = density * (run.body_force * volume).sum(axis=0)
    zones = run.problem.zones
    return MomentumBudget(boundaries, convected, body, net_artificial_force(run),
                          {} if zones is None else zones.force(run.velocity))


def net_artificial_force(run: Run) -> np.ndarray:
    """(3,) artificial force on the fluid without its irrotational part [N]."""
    mesh, n, density = run.mesh, run.mesh.n_internal, run.case.fluid.density
    if not run.guided:
        return np.zeros(3)
    whole = density * (run.artificial_force * mesh.cell_volume[:, None]).sum(axis=0)
    potential = run.force_potential[1][n:, None]
    return whole - density * (potential * mesh.face_area[n:]).sum(axis=0)
