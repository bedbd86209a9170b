"""Readings as forces: proportional feedback whose strengths are solved with the flow.

The momentum equation gains ``f = -sum_j phi_j a_j`` [m/s^2] with ``a_j = K (H_j u - u*_j)``:
``H_j`` is the interpolation that ``run.sample`` uses, ``phi_j`` a kernel scaled so that
``H_j phi_j = 1``, and the gain ``K`` [1/s] is the rate at which the reading itself relaxes.

The strengths are unknowns, corrected in every iteration after the momentum sweeps,

    da = (1/K + H g)^-1 (H (u + du) - u* - a/K),    u += du - g da,    a += da,    p -= rho psi da,

``g`` being the response of the *same* sweeps to each kernel less the gradient of its potential
``psi``, the part that moves nothing but the pressure; so the iteration is stable for any gain, and
its fixed point depends neither on ``g`` nor on ``psi`` (derived here; nudging after Hoke, J. E. and
Anthes, R. A. 1976, Mon. Weather Rev. 104, 1551-1556).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
import scipy.sparse as sparse

from ..errors import CaseError, ReadingError, as_number
from ..flow.problem import Correction, Force, Problem, State
from ..flow.response import mostly_hexahedra
from .feedback_time import FeedbackInTime
from .kernel import Gaussian, Kernel, SingleCell
from .layout import Layout, make_layout
from .readings import Readings, linearised_direction, predict
from .response import (
    SHARE_OF_SINGLE,
    SHARE_OF_WIDE,
    has_changed,
    make_pushes,
    near_equation,
    sweep_response,
)

REFRESH_EARLY = (0, 2, 5, 10, 20)  # responses are looked at in these iterations,
REFRESH_EVERY = 30                 # then at every multiple of this, and renewed if outdated
TURNED_AT = (0, 1, 2, 10, 30, 60)  # iterations at which a speed reading's direction follows
CAUTION = 0.1                      # see Response.between; tripled while the misfit does not fall
BITES_FROM = 3.0                   # gain * radius / speed above which passing fluid is corrected


@dataclass(frozen=True)
class Feedback:
    """Proportional feedback at velocity readings, a source for the solve verbs.

    In runs in time the same object acts by projected kernels, see
    :mod:`fv3d.measured.feedback_time`, and takes readings resolved in time.

    Parameters
    ----------
    readings : Readings
        Velocity components, components along a direction and speeds are fed; pressures are not.
    radius : float or None
        Width of the Gaussian kernel [m]; None puts the force into the single cell that holds the
        reading (the corrected volume then shrinks with the cell).
    gain : float or None
        Rate at which a reading relaxes [1/s]; None: 5 times the local speed over the radius
        (the cell size without radius), the local speed being the larger of the measured one and
        that of the start field. Zero leaves the run as it is, bit for bit.

    Raises
    ------
    ReadingError
        No velocity reading, a value that is not a number; from the steady verbs also for readings
        resolved in time, whose ``mean()`` can be fed there.
    CaseError
        A gain or radius that is negative or not finite.
    """

    readings: Readings
    gain: float | None = field(default=None, kw_only=True)
    radius: float | None = field(kw_only=True)

    def __post_init__(self) -> None:
        for name, value, low in (("gain", self.gain, 0.0), ("radius", self.radius, 1e-300)):
            if value is not None and not low <= as_number(value) < np.inf:
                raise CaseError(f"The {name} must be a finite number, not negative.",
                                where=f"Feedback({name}=)", got=value,
                                remedy="Leave it out for the default." if name == "gain" else
                                "Give the width of the force [m], about the probe spacing.")
        if not isinstance(self.readings, Readings):
            raise ReadingError("Only readings can be fed.", where="Feedback(readings)",
                               got=type(self.readings).__name__,
                               remedy="Make them with read_readings(path or DataFrame).")
        fed = self.readings.velocity_only()
        if fed.n_components == 0:
            raise ReadingError("Only velocities can be fed, and there are none.",
                               where="Feedback(readings)", got=f"{len(self.readings)} places",
                               remedy="Give u, v, w, speed or along readings.")
        if not fed.timed and not np.all(np.isfinite(fed.component_value)):
            bad = int(np.flatnonzero(~np.isfinite(fed.component_value))[0])
            raise ReadingError("A fed reading is not a number.", where="Feedback(readings)",
                               got=f"reading '{fed.name[fed.component_place[bad]]}'",
                               remedy="Leave that reading out or withhold it.")

    @property
    def kernel(self) -> Kernel:
        """Shape of the force."""
        return SingleCell() if self.radius is None else Gaussian(self.radius)

    def start(self, problem: Problem, state: State, earlier: Any) -> FeedbackState:
        """Kernels, gains and zero strengths (or those of an earlier run with this law)."""
        if self.readings.timed:
            raise ReadingError("Readings resolved in time cannot be fed to an iteration, whose "
                               "steps are no time.", where="solve_steady(sources=)",
                               got="readings with a column 'time'",
                               remedy="Feed readings.mean(), or use solve_transient.")
        fed = self.readings.velocity_only()
        layout = make_layout(problem, fed, self.kernel)
        velocity = layout.sample(problem, state.velocity, state.boundary_velocity)
        gain = self.gains(problem, fed, layout, velocity)
        begun = FeedbackState(fed, layout, gain, np.zeros(fed.n_components),
                              linearised_direction(fed, velocity), local_speed(fed, velocity),
                              self.advice(problem, layout))
        if isinstance(earlier, FeedbackState) and len(earlier.strength) == fed.n_components:
            begun = replace(begun, gain=earlier.gain, strength=earlier.strength,
                            direction=earlier.direction, speed=earlier.speed,
                            count=TURNED_AT[-1] + 1)
        return begun

    @cached_property
    def in_time(self) -> FeedbackInTime:
        """The law for runs in time, see :mod:`fv3d.measured.feedback_time`."""
        return FeedbackInTime(self)

    def advice(self, problem: Problem, layout: Layout) -> tuple[str, ...]:
        """What to say of a radius that fits neither the cells nor the domain."""
        if self.radius is None:
            return ()
        mesh = problem.mesh
        cell = float(np.cbrt(mesh.cell_volume[layout.to_points.home]).max())
        thinnest = float(np.ptp(mesh.points, axis=0).min())
        if self.radius < 0.5 * cell:
            return (f"the radius is small beside the cells of {cell:.2g} m: the force acts over "
                    "a cell, as with radius=None",)
        if self.radius > 0.5 * thinnest and mesh.n_cells > 1:
            return (f"the radius is more than half of the domain's least extent of "
                    f"{thinnest:.2g} m: readings are not told apart across it",)
        return ()

    def gains(self, problem: Problem, fed: Readings, layout: Layout,
              velocity: np.ndarray) -> np.ndarray:
        """(m,) gain of each component [1/s], given or from the local speed and the radius."""
        if self.gain is not None:
            return np.full(fed.n_components, float(self.gain))
        length = self.radius or np.cbrt(problem.mesh.cell_volume[layout.to_points.home])
        return (5.0 * local_speed(fed, velocity) / length)[fed.component_place]

    def force(self, own: FeedbackState) -> Force:
        """The force exerted now [m/s^2]."""
        return own.exerted

    def correct(self, own: FeedbackState, problem: Problem, state: State, change: np.ndarray,
                relax: Callable[..., Any]) -> Correction:
        """Solve for the strengths together with the momentum change, see the module text.

        ``change`` is corrected in place.
        """
        active = own.gain > 0
        if not active.any():
            return Correction(own, change)
        rough = SHARE_OF_SINGLE if self.radius is None else SHARE_OF_WIDE
        own = _renewed(_turned(own, problem, state), problem, relax,
                       share=1.0 if mostly_hexahedra(problem.mesh) else rough)
        slack = np.divide(own.strength, own.gain, out=np.zeros_like(own.gain), where=active)
        before = own.layout.sample(problem, state.velocity, state.boundary_velocity)
        misfit = np.where(active, own.misfit(before) - slack, 0.0)
        after = before + own.layout.sample_change(change)
        step = np.einsum("ij,j->i", own.solver, np.where(active, own.misfit(after) - slack, 0.0))
        push = own.place_strength(step)
        own.response.velocity.add(push, change)
        scale = max(float(np.abs(own.readings.component_value).max()),
                    float(np.linalg.norm(before, axis=1).max()), 1e-300)
        size = float(np.abs(misfit).max()) / scale
        own = replace(own, strength=own.strength + step, count=own.count + 1,
                      seen=(*own.seen, size)[-2 * REFRESH_EVERY:])
        return Correction(own, change, size, own.pushes.pressure_change(push))

    def describe(self, own: FeedbackState) -> list[str]:
        """Lines for the sheet of a run."""
        gain = own.gain
        width = "single cell" if self.radius is None else f"radius {self.radius:g} m"
        span = f"{gain.min():.4g}" if np.ptp(gain) == 0 else f"{gain.min():.4g} to {gain.max():.4g}"
        how = "given" if self.gain is not None else "5 local speed / radius"
        lines = [f"feedback   {own.readings.n_components} values at {len(own.readings)} places, "
                 f"{width}, gain {span} 1/s ({how})"]
        if not gain.any():
            return [*lines, "           gain zero: nothing is fed",
                    *(f"           {sentence}" for sentence in own.advice)]
        misfit = np.divide(own.strength, gain, out=np.zeros_like(gain), where=gain > 0)
        share = np.sqrt(np.mean((misfit / own.readings.component_std) ** 2))
        lines.append(f"           misfit at fed readings {np.sqrt(np.mean(misfit ** 2)):.3g} m/s "
                     f"rms, {share:.2g} standard deviations (no evidence: these were fed)")
        if share < 0.3:
            lines.append("           the fed readings are met far closer than their uncertainty: "
                         "a lower gain would not fit their noise")
        if share > 3.0:
            lines.append("           the fed readings are NOT met: they contradict each other, "
                         "lie on a wall or in other units, or the gain is low")
        lines += [f"           {sentence}" for sentence in own.advice]
        if self.radius is not None:
            bite = gain * self.radius / own.speed[own.readings.component_place]
            if bite.min() < BITES_FROM:
                lines.append(f"           gain * radius / speed is {bite.min():.2g} at one "
                             f"reading, below {BITES_FROM:g}: the fluid passes uncorrected there")
        return lines


def _renewed(own: FeedbackState, problem: Problem, relax: Any, *,
             share: float) -> FeedbackState:
    """With pushes, and with the response of the present sweeps where it is due and has changed."""
    pushes, response, caution = own.pushes, own.response, own.caution
    if pushes is None:
        fed = np.zeros((len(own.readings), 3), dtype=bool)
        direction = own.readings.component_direction
        np.logical_or.at(fed, own.readings.component_place, direction != 0)  # speed: NaN, all
        pushes = make_pushes(problem, own.layout, fed.ravel(), share=share)
    due = own.count in REFRESH_EARLY or own.count % REFRESH_EVERY == 0
    if due:
        caution = _caution(own)
    if response is None or response.sweeps != relax.count or (due and has_changed(
            response, near_equation(pushes, relax), len(pushes.sampled))):
        response = sweep_response(problem.mesh.n_cells, pushes, relax)
    if response is own.response and caution == own.caution and own.solver is not None:
        return own
    own = replace(own, pushes=pushes, response=response, caution=caution)
    return replace(own, solver=_solver(own))


def _caution(own: FeedbackState) -> float:
    """Tripled where the misfit of the last iterations is no smaller than that before them."""
    half = len(own.seen) // 2
    if half < 5 or sum(own.seen[half:]) < 0.8 * sum(own.seen[:half]):
        return own.caution
    return min(3.0 * own.caution, 1.0)


def _solver(own: FeedbackState) -> np.ndarray:
    """(m, m) from errors at the readings to the changes of the strengths that end them."""
    acting = np.flatnonzero((own.gain > 0) & (np.abs(own.direction).max(axis=1) > 0))
    matrix = own.response.between(own.spread(), caution=own.caution)[np.ix_(acting, acting)]
    matrix[np.diag_indices(len(matrix))] += 1.0 / own.gain[acting]
    solver = np.zeros((len(own.gain), len(own.gain)))
    solver[np.ix_(acting, acting)] = np.linalg.pinv(matrix, rcond=1e-13)
    return solver


def _turned(own: FeedbackState, problem: Problem, state: State) -> FeedbackState:
    """Directions of speed readings brought up to date, at a few iterations only.

    A direction that followed the field in every iteration would turn the strength it has gathered
    with it, and a speed well below the computed one would never be reached.  The strength keeps
    its part along the new direction.
    """
    if own.count not in TURNED_AT:
        return own
    velocity = own.layout.sample(problem, state.velocity, state.boundary_velocity)
    fresh = linearised_direction(own.readings, velocity)
    kept = np.einsum("ij,ij->i", fresh, own.direction)
    if np.array_equal(fresh, own.direction):
        return own
    return replace(own, direction=fresh, strength=own.strength * kept, solver=None)


def local_speed(readings: Readings, velocity: np.ndarray) -> np.ndarray:
    """(n_places,) larger of the measured and the computed speed [m/s], floored by their mean."""
    square = np.bincount(readings.component_place, readings.component_value ** 2, len(readings))
    speed = np.maximum(np.sqrt(square), np.linalg.norm(velocity, axis=1))
    return np.maximum(speed, max(0.1 * float(speed.mean()), 1e-300))


@dataclass(frozen=True, eq=False)
class FeedbackState:
    """Strengths ``a`` (m,) [m/s^2] with what is needed to go on.

    ``speed`` (n_places,) [m/s] is the local speed the default gain was made from; ``advice`` goes
    to the sheet.
    """

    readings: Readings
    layout: Layout
    gain: np.ndarray
    strength: np.ndarray
    direction: np.ndarray
    speed: np.ndarray
    advice: tuple[str, ...] = ()
    pushes: Any = None
    response: Any = None
    solver: Any = None
    caution: float = CAUTION
    seen: tuple[float, ...] = ()
    count: int = 0

    @cached_property
    def exerted(self) -> Force:
        """The force of the strengths [m/s^2]."""
        return self.layout.force(self.place_strength(self.strength))

    def misfit(self, velocity: np.ndarray) -> np.ndarray:
        """(m,) computed minus measured for velocities (n_places, 3) at the readings."""
        computed = predict(self.readings, velocity, pressure=np.zeros(len(velocity)))
        return computed - self.readings.component_value

    def place_strength(self, strength: np.ndarray, *, sign: float = -1.0) -> np.ndarray:
        """(n_places, 3) vector strength; the force acts against the misfit."""
        out = np.zeros((len(self.readings), 3))
        np.add.at(out, self.readings.component_place, sign * strength[:, None] * self.direction)
        return out

    def spread(self) -> sparse.csr_matrix:
        """(3 n_places, m) component directions."""
        m = len(self.strength)
        rows = 3 * self.readings.component_place[:, None] + np.arange(3)
        columns = np.repeat(np.arange(m), 3)
        return sparse.csr_matrix((self.direction.ravel(), (rows.ravel(), columns)),
                                 shape=(3 * len(self.readings), m))
