"""How much artificial force a guided run took, and whether its forces can be used."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..flow.equations import surface_gradient
from ..flow.run import Run
from .diagnostics import force, net_artificial_force

USABLE_BELOW = 0.10  # net artificial force over the body's force (common practice, no source)


@dataclass(frozen=True, eq=False)
class ForceBudget:
    """Artificial force of a run.

    Attributes
    ----------
    net : (3,) net force on the fluid without the irrotational part [N]
    moment : (3,) its moment about ``centre`` [N m]
    power : work done on the fluid per time [W]
    dissipation : viscous dissipation of the whole flow [W], for comparison
    volume_share : share of the domain's volume that holds 90 % of the force
    solenoidal_share : share of the squared force that is not a gradient, the part that moves fluid
    body : name of the boundary it is compared with, or ""
    body_force : (3,) force of the fluid on that boundary [N]
    """

    net: np.ndarray
    moment: np.ndarray
    power: float
    dissipation: float
    volume_share: float
    solenoidal_share: float
    body: str
    body_force: np.ndarray

    @property
    def over_body(self) -> float:
        """Net artificial force over the force on the body; nan without a body."""
        size = float(np.linalg.norm(self.body_force))
        return float(np.linalg.norm(self.net)) / size if size > 0 else float("nan")

    @property
    def usable(self) -> bool:
        """Whether forces of this run can be used: the artificial one is small beside them."""
        return not self.over_body > USABLE_BELOW

    def __str__(self) -> str:
        def row(vector: np.ndarray) -> str:
            return " ".join(f"{value:11.4g}" for value in vector)
        lines = ["artificial force",
                 f"  net         {row(self.net)}  N",
                 f"  moment      {row(self.moment)}  N m",
                 f"  power       {self.power:.4g} W, "
                 f"{self.power / max(self.dissipation, 1e-300):.2%} of the flow's dissipation of "
                 f"{self.dissipation:.4g} W",
                 f"  where       90 % of it in {self.volume_share:.2%} of the volume",
                 f"  kind        {self.solenoidal_share:.0%} moves fluid, the rest only pressure"]
        if self.body:
            verdict = "forces usable" if self.usable else \
                "FORCES NOT USABLE: the artificial force is too large a part of them"
            lines.append(f"  beside      {self.over_body:.2%} of the force on '{self.body}': "
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
    mesh, density = run.mesh, run.case.fluid.density
    volume = mesh.cell_volume
    moving = run.artificial_force
    if run.guided:
        cell, face = run.force_potential
        slope = run.problem.velocity_gradient(cell, face[mesh.n_internal:])
        moving = moving - surface_gradient(run.problem, face, slope)
    arm = mesh.cell_centre - np.asarray(centre)
    moment = density * np.einsum("ci,c->i", np.cross(arm, moving), volume)
    power = density * float(np.einsum("ci,ci,c->", moving, run.velocity, volume))
    whole = float(np.einsum("ci,ci,c->", run.artificial_force, run.artificial_force, volume))
    part = float(np.einsum("ci,ci,c->", moving, moving, volume))
    return ForceBudget(net_artificial_force(run), moment, power, _dissipation(run),
                       _volume_share(run), part / whole if whole > 0 else 0.0, body,
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
