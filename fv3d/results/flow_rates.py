"""Volume flow through boundaries and how it splits among them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from ..errors import expect_run
from ..flow.run import Run
from .diagnostics import boundary_faces


def flow_rate(run: Run, name: str) -> float:
    """Volume flow through a boundary [m^3/s], positive out of the domain.

    Parameters
    ----------
    run : Run
    name : str
        Boundary.

    Raises
    ------
    CaseError
        No run, or no such boundary.
    """
    faces = boundary_faces(run, name, where="flow_rate(run, name)")
    return float(run.mass_flux[faces].sum() / run.case.fluid.density)


@dataclass(frozen=True, eq=False)
class FlowSplit:
    """Volume flow through every boundary [m^3/s].

    Attributes
    ----------
    net : mapping of boundary name to the flow out of the domain (negative: into it)
    back : mapping of boundary name to the flow against the net one on the same boundary
    area : mapping of boundary name to its area [m^2]
    """

    net: Mapping[str, float]
    back: Mapping[str, float]
    area: Mapping[str, float]

    @property
    def outflow(self) -> float:
        """Sum over the boundaries through which fluid leaves [m^3/s]."""
        return sum(max(value, 0.0) for value in self.net.values())

    @property
    def imbalance(self) -> float:
        """Sum over all boundaries [m^3/s]; zero where mass is conserved."""
        return sum(self.net.values())

    def share(self, name: str) -> float:
        """Share of a boundary in the outflow, or in the inflow (negative); 0 without flow."""
        whole = self.outflow if self.net[name] > 0 else self.outflow - self.imbalance
        return self.net[name] / whole if whole > 0 else 0.0

    def __str__(self) -> str:
        wide = max(8, *(len(name) for name in self.net))
        lines = [f"{'boundary':<{wide}} {'flow out [m3/s]':>16} {'share':>9} "
                 f"{'mean speed [m/s]':>17} {'flow back [m3/s]':>17}"]
        for name, value in self.net.items():
            if value or self.back[name]:
                lines.append(f"{name:<{wide}} {value:>16.6g} {self.share(name):>9.2%} "
                             f"{value / self.area[name]:>17.5g} {self.back[name]:>17.5g}")
        return "\n".join([*lines, f"left over {self.imbalance:.2e} m3/s"])


def flow_split(run: Run) -> FlowSplit:
    """How the flow divides among the boundaries; prints as a table.

    Parameters
    ----------
    run : Run

    Returns
    -------
    FlowSplit

    Raises
    ------
    CaseError
        Not a run.
    """
    expect_run(run, "flow_split(run)")
    mesh, density = run.mesh, run.case.fluid.density
    net, back, area = {}, {}, {}
    for name, faces in mesh.boundaries.items():
        flux = run.mass_flux[faces] / density
        net[name] = float(flux.sum())
        back[name] = float(np.abs(np.minimum(flux * np.sign(net[name]), 0.0)).sum())
        area[name] = float(mesh.face_area_magnitude[faces].sum())
    return FlowSplit(net, back, area)
