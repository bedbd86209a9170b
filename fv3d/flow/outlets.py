"""Outlets with a given flow: their pressure is one more unknown of the pressure equation.

In every iteration the level of each such outlet is corrected together with the pressure of the
cells so that the corrected flow through it is the given one.  With ``A`` the matrix of the pressure
correction, ``b_k`` its coefficients on outlet ``k`` and ``w_k = A^-1 b_k``, the correction is
``A^-1 r + sum_k shift_k w_k`` and the shifts follow from as many equations as there are such
outlets (elimination of the bordered rows).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from ..errors import BoundaryError, CaseError, as_number
from ..mesh.mesh import Mesh
from .boundary import BoundaryTable, Outlet


@dataclass(frozen=True, kw_only=True)
class FlowOutlet:
    """Outlet of a given flow, whose uniform pressure is found; for steady runs.

    At least one :class:`Outlet` takes the rest of the flow and gives the level of the pressure.

    Parameters
    ----------
    flow_rate : float [m^3/s], or share : float
        Volume flow out of the domain, or its share in what enters through the inlets.

    Raises
    ------
    BoundaryError
        Not exactly one of the two, a flow that is not positive, a share outside 0 ... 1.
    """

    flow_rate: float | None = None
    share: float | None = None

    def __post_init__(self) -> None:
        if (self.flow_rate is None) == (self.share is None):
            raise BoundaryError("An outlet of given flow needs its flow rate or its share.",
                                where="FlowOutlet(flow_rate=, share=)",
                                got=f"flow_rate={self.flow_rate}, share={self.share}",
                                remedy="Give one of them; Outlet(pressure=) for the pressure.")
        if self.share is None and not 0.0 < as_number(self.flow_rate) < np.inf:
            raise BoundaryError("The flow rate of an outlet must be positive.",
                                where="FlowOutlet(flow_rate=)", got=repr(self.flow_rate),
                                remedy="Give the volume flow out of the domain [m3/s].")
        if self.flow_rate is None and not 0.0 < as_number(self.share) < 1.0:
            raise BoundaryError("The share of an outlet lies between 0 and 1.",
                                where="FlowOutlet(share=)", got=repr(self.share),
                                remedy="Give 0.3, say; the rest leaves through an Outlet.")

    def fill(self, table: BoundaryTable, rows: slice, centre: np.ndarray,
             normal: np.ndarray) -> None:
        """As an outlet; the pressure is set later."""
        Outlet(0.0).fill(table, rows, centre, normal)


@dataclass(frozen=True)
class OutletFlow:
    """Mass flow [kg/s] wanted through the boundary faces ``rows``."""

    name: str
    rows: slice
    flow: float


def outlet_flows(mesh: Mesh, boundaries: Mapping[str, Any], table: BoundaryTable,
                 fixed_flux: np.ndarray, density: float) -> tuple[OutletFlow, ...]:
    """Flows wanted through the outlets of given flow.

    Raises
    ------
    BoundaryError
        No other outlet, shares without inflow or of more than the whole.
    """
    inflow, n = -float(np.minimum(fixed_flux, 0.0).sum()), mesh.n_internal
    flows, shares, rest = [], 0.0, table.pressure_given.copy()
    for name, condition in boundaries.items():
        if not isinstance(condition, FlowOutlet):
            continue
        rows = slice(mesh.boundaries[name].start - n, mesh.boundaries[name].stop - n)
        rest[rows] = False
        if condition.share is not None and not inflow > 0.0:
            raise BoundaryError("A share of the flow needs an inlet.", where=f"boundary '{name}'",
                                got="no given inflow", remedy="Give FlowOutlet(flow_rate=).")
        shares += float(condition.share or 0.0)
        flow = density * float(condition.flow_rate or 0.0) if condition.share is None \
            else condition.share * inflow
        flows.append(OutletFlow(name, rows, flow))
    if flows and not rest.any():
        raise BoundaryError("Not every outlet can have a given flow.",
                            where=f"boundary '{flows[-1].name}'", got="no Outlet(pressure=)",
                            remedy="Make one of them Outlet(0.0); it takes what is left.")
    if shares > 1.0:
        raise BoundaryError("The shares of the outlets exceed the whole flow.",
                            where=", ".join(f"boundary '{one.name}'" for one in flows),
                            got=f"{shares:g}", remedy="Give shares that add up to less than 1.")
    return tuple(flows)


def with_given_flow(mesh: Mesh, outlets: tuple[OutletFlow, ...],
                    fixed_flux: np.ndarray) -> np.ndarray:
    """Boundary fluxes with a uniform flow through these outlets, for start fields [kg/s]."""
    flux = fixed_flux.copy()
    for one in outlets:
        size = mesh.face_area_magnitude[mesh.n_internal:][one.rows]
        flux[one.rows] = one.flow * size / size.sum()
    return flux


def free_outlets(problem: Any) -> np.ndarray:
    """(n_boundary,) faces whose flow is not given: outlets of given pressure."""
    free = problem.table.pressure_given.copy()
    for one in problem.outlets:
        free[one.rows] = False
    return np.asarray(free)


def at_levels(problem: Any, state: Any) -> Any:
    """The problem with the pressures of the outlets of given flow as the state has them."""
    if not problem.outlets:
        return problem
    pressure = problem.table.pressure.copy()
    for one, level in zip(problem.outlets, state.levels, strict=True):
        pressure[one.rows] = level
    return replace(problem, table=replace(problem.table, pressure=pressure))


def start_levels(problem: Any, start: Any) -> tuple[float, ...]:
    """Levels before the first iteration: those of a start run's outlets of the same name."""
    earlier = {}
    if hasattr(start, "problem") and hasattr(start, "state"):
        earlier = dict(zip((one.name for one in start.problem.outlets), start.state.levels))
    return tuple(earlier.get(one.name, 0.0) for one in problem.outlets)


def flow_misfit(problem: Any, flux: np.ndarray) -> float:
    """Largest relative misfit of predicted and given outlet flows."""
    n = problem.mesh.n_internal
    return max((abs(float(flux[n:][one.rows].sum()) / one.flow - 1.0) for one in problem.outlets),
               default=0.0)


def meet_flows(problem: Any, flux: np.ndarray, correction: np.ndarray, *, outer: np.ndarray,
               solve: Callable[[np.ndarray], np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    """Correction of the cells' and of the boundary pressure that meets the outlets' flows.

    Parameters
    ----------
    flux : (n_faces,) predicted [kg/s]
    correction : (n_cells,) pressure correction with the levels kept [Pa]
    outer : (n_boundary,) coefficients of the pressure equation [kg/(s Pa)]
    solve : right-hand side (n_cells,) to solution of the pressure equation

    Returns
    -------
    correction : (n_cells,), shift : (n_boundary,) [Pa]
    """
    mesh, n, outlets = problem.mesh, problem.mesh.n_internal, problem.outlets
    owner = mesh.left[n:]
    responses = [solve(np.bincount(owner[one.rows], outer[one.rows], mesh.n_cells))
                 for one in outlets]
    after = flux[n:] + outer * correction[owner]
    missing = np.array([one.flow - after[one.rows].sum() for one in outlets])
    answer = np.array([[(outer * response[owner])[one.rows].sum() for response in responses]
                       for one in outlets])
    answer -= np.diag([outer[one.rows].sum() for one in outlets])
    moved = np.linalg.solve(answer, missing)
    shift = np.zeros(mesh.n_boundary)
    for one, response, size in zip(outlets, responses, moved, strict=True):
        shift[one.rows] = size
        correction = correction + size * response
    return correction, shift


def moved_levels(problem: Any, levels: tuple[float, ...], shift: np.ndarray) -> tuple[float, ...]:
    """Levels of the outlets after a shift (n_boundary,) of their pressures."""
    return tuple(level + float(shift[one.rows][0])
                 for one, level in zip(problem.outlets, levels, strict=True))


def refuse_flow_outlets(boundaries: Mapping[str, Any]) -> None:
    """Outlets of given flow are for steady runs.

    Raises
    ------
    CaseError
    """
    for name, condition in boundaries.items():
        if isinstance(condition, FlowOutlet):
            raise CaseError("A run in time takes no outlet of given flow.",
                            where=f"boundary '{name}'", got="FlowOutlet",
                            remedy="Give Outlet(pressure=) with the pressure a steady run found.")
