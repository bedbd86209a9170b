"""How much artificial force a guided run took, and whether its forces can be used."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..errors import expect_run
from ..flow.equations import surface_gradient
from ..flow.run import Run
from ..operators.interpolation import checked_points
from .diagnostics import force, net_artificial_force

USABLE_BELOW = 0.10  # share of the body's force and of the dissipation (our choice, no source)


@dataclass(frozen=True, eq=False)
class ForceBudget:
    """Artificial force of a run.

    Attributes
    ----------
    net : (3,) net force on the fluid without the irrotational part [N]
    whole : (3,) net force with it [N]; in a duct the net streamwise force is all irrotational
    moment : (3,) moment of the part that moves fluid about ``centre`` [N m]
    centre : (3,) [m]
    power : work done on the fluid per time [W]
    dissipation : viscous dissipation of the whole flow [W], for comparison
    volume_share : share of the domain's volume that holds 90 % of the force
    solenoidal_share : share of the squared force that is not a gradient, the part that moves fluid
    body : name of the boundary it is compared with, or ""
    body_force : (3,) force of the fluid on that boundary [N]
    """

    net: np.ndarray
    whole: np.ndarray
    moment: np.ndarray
    centre: np.ndarray
    power: float
    dissipation: float
    volume_share: float
    solenoidal_share: float
    body: str
    body_force: np.ndarray

    @property
    def over_body(self) -> float:
        """Larger of both net forces over the force on the body; nan without a body."""
        size = float(np.linalg.norm(self.body_force))
        largest = max(float(np.linalg.norm(self.net)), float(np.linalg.norm(self.whole)))
        return largest / size if size > 0 else float("nan")

    @property
    def over_dissipation(self) -> float:
        """Magnitude of the power over the flow's own dissipation."""
        return abs(self.power) / max(self.dissipation, 1e-300)

    @property
    def usable(self) -> bool:
        """Whether forces of this run can be used.

        The net artificial force, with or without its irrotational part, must stay below a tenth of
        the body's force, and its power below a tenth of the flow's dissipation.
        """
        return not (self.over_body > USABLE_BELOW or self.over_dissipation > USABLE_BELOW)

    def __str__(self) -> str:
        if not self.power and not np.any(self.whole):
            return "artificial force\n  none: a plain run"

        def row(vector: np.ndarray) -> str:
            return " ".join(f"{value:11.4g}" for value in vector)

        about = ", ".join(f"{value:g}" for value in self.centre)
        lines = ["artificial force on the fluid  x, y, z",
                 f"  net         {row(self.net)}  N, the part that moves fluid",
                 f"  whole       {row(self.whole)}  N, with the part that only loads the pressure",
                 f"  moment      {row(self.moment)}  N m about ({about}) m",
                 f"  power       {self.power:.4g} W, {self.over_dissipation:.2%} of the flow's "
                 f"dissipation of {self.dissipation:.4g} W",
                 f"  where       90% of it in {self.volume_share:.2%} of the volume",
                 f"  kind        {self.solenoidal_share:.0%} of its square moves fluid"]
        if self.body:
            verdict = "forces usable" if self.usable else \
                "FORCES NOT USABLE: the artificial force is too large beside them"
            lines.append(f"  verdict     {self.over_body:.2%} of the force on '{self.body}': "
                         f"{verdict}")
        return "\n".join(lines)


def force_budget(run: Run, body: str = "", *,
                 centre: tuple[float, float, float] = (0.0, 0.0, 0.0)) -> ForceBudget:
    """Artificial force of a guided run, set beside the force on a body.

    Parameters
    ----------
    run : Run
    body : str, optional
        Boundary whose force it is compared with.
    centre : (3,) [m]
        Point the moment is taken about.

    Returns
    -------
    ForceBudget
        All zero for a plain run.

    Raises
    ------
    CaseError
        No such boundary.
    """
    expect_run(run, "force_budget(run, body)")
    about = checked_points(centre, "force_budget(centre=)")[0]
    mesh, density = run.mesh, run.case.fluid.density
    volume = mesh.cell_volume
    moving = run.artificial_force
    if run.guided:
        cell, face = run.force_potential
        slope = run.problem.velocity_gradient(cell, face[mesh.n_internal:])
        moving = moving - surface_gradient(run.problem, face, slope)
    arm = mesh.cell_centre - about
    moment = density * np.einsum("ci,c->i", np.cross(arm, moving), volume)
    power = density * float(np.einsum("ci,ci,c->", moving, run.velocity, volume))
    raw = density * np.einsum("ci,c->i", run.artificial_force, volume)
    whole = float(np.einsum("ci,ci,c->", run.artificial_force, run.artificial_force, volume))
    part = float(np.einsum("ci,ci,c->", moving, moving, volume))
    return ForceBudget(net_artificial_force(run), raw, moment, about,
                       power, _dissipation(run), _volume_share(run),
                       part / whole if whole > 0 else 0.0, body,
                       force(run, body).total if body else np.zeros(3))


def _dissipation(run: Run) -> float:
    """Integral of 2 mu S : S over the domain [W]."""
    gradient = run.velocity_gradient()
    strain = 0.5 * (gradient + gradient.transpose(0, 2, 1))
    return float(np.einsum("cij,cij,c,c->", strain, strain, 2.0 * run.problem.viscosity,
                           run.mesh.cell_volume))


def _volume_share(run: Run, *, held: float = 0.9) -> float:
    volume = run.mesh.cell_volume
    size = np.linalg.norm(run.artificial_force, axis=1)
    total = float(size @ volume)
    if total == 0.0:
        return 0.0
    order = np.argsort(-size)
    count = int(np.searchsorted(np.cumsum((size * volume)[order]), held * total)) + 1
    return float(volume[order[:count]].sum() / volume.sum())
