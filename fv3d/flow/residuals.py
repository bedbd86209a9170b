"""How large what is left of an equation is, and what it is measured against."""

from __future__ import annotations

import numpy as np

from ..operators import kernels_solving
from ..operators.assembly import NOTHING
from .equations import Momentum, PressureFields, net_outflow
from .problem import Problem


def counted(problem: Problem, equation: Momentum, force: np.ndarray) -> np.ndarray:
    """Forces on the cells (n_cells, 3) [N] as they count in a residual.

    In a zone of resistance by the change of velocity they cause: dense zones then neither hide
    what is left in the fluid nor ask for more digits than there are.
    """
    if equation.drag is None:
        return force
    diagonal = equation.diagonal[:, None]
    resisting = problem.mesh.cell_volume[:, None] * equation.drag.secant
    return np.asarray(force * diagonal / (diagonal + resisting))


def absolute_sum(values: np.ndarray, factor: np.ndarray | None = None) -> float:
    """Sum of the absolute values of three columns, times a factor for each row."""
    sums = np.empty(kernels_solving.CHUNKS)
    kernels_solving.absolute_sums(values, NOTHING if factor is None else factor, sums)
    return float(sums.sum())


def mass_residual(problem: Problem, flux: np.ndarray, velocity: np.ndarray, pressure: np.ndarray,
                  imbalance: np.ndarray | None = None) -> float:
    """Sum of the cells' mass imbalance over the reference flux."""
    if imbalance is None:
        imbalance = net_outflow(problem, flux)
    return float(np.abs(imbalance).sum() / reference_flux(problem, flux, velocity, pressure))


def reference_flux(problem: Problem, flux: np.ndarray, velocity: np.ndarray,
                   pressure: np.ndarray) -> float:
    """Inflow [kg/s]; in a domain without inflow the rms speed over a mean cross-section.

    A fluid at rest is measured against a millionth of the speed its pressures could cause.
    """
    mesh, density = problem.mesh, problem.case.fluid.density
    inflow = -np.minimum(flux[mesh.n_internal:], 0.0).sum()
    volume = mesh.cell_volume.sum()
    sums = np.empty(kernels_solving.CHUNKS)
    kernels_solving.square_sums(velocity, mesh.cell_volume, sums)
    speed = np.sqrt(sums.sum() / volume)
    speed += 1e-6 * np.sqrt(np.ptp(pressure) / density)
    circulating = density * speed * volume ** (2 / 3)
    return float(max(inflow if inflow > 1e-3 * circulating else circulating, 1e-300))


def momentum_scale(problem: Problem, equation: Momentum, velocity: np.ndarray, net: np.ndarray,
                   fields: PressureFields) -> float:
    """Sum of |a u|; a fluid at rest is measured against a millionth of its pressure forces."""
    sizes = [absolute_sum(counted(problem, equation, part), problem.mesh.cell_volume)
             for part in ([net] if net is fields.gradient else [net, fields.gradient])]
    resting = sizes[0] + sizes[-1]
    return max(absolute_sum(velocity, equation.diagonal) + 1e-6 * resting, 1e-300)
