"""Feedback in time: projected kernels, strengths solved for after the projection.

In a run in time the projection would undo part of a kernel's force, for only its divergence-free
part moves the fluid.  So the potential of every kernel is found once per run, by the matrix of the
run's own projection; what is left of the kernel is ``P phi_j``.  After the projection of each step,
with ``dt^`` the step over the leading coefficient of the time derivative, ``e`` the misfit then and
``s`` the force's strengths so far,

    (1 / (K dt^) + H P phi) (dt^ a) = e + dt^ H P phi s,      u -= dt^ P phi (a - s),

and face flux and pressure follow by the same columns; the new strengths stand in the momentum
equation of the next step.  A reading then relaxes as ``exp(-K HPphi t)``, is met in one step where
``K dt`` is large, and no gain is too large (derived here).

Readings resolved in time act with the share of their gain that :mod:`fv3d.measured.records` gives.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Fv3dWarning
from ..flow.equations import net_outflow
from ..flow.problem import Force, Problem, State
from ..flow.projected import Projection, Push, full_potential, make_projection
from ..flow.time_step import Moment
from ..operators.kernels_places import add_dense
from .layout import Layout, make_layout
from .potential import push_of, unpressed_flux
from .readings import Readings, linearised_direction, predict
from .records import Records, records

if TYPE_CHECKING:
    from .feedback import Feedback


@dataclass(frozen=True, eq=False)
class FeedbackInTime:
    """The law of a :class:`fv3d.Feedback` in a run in time, see the module text."""

    law: Feedback

    @cached_property
    def records(self) -> Records:
        """Records of the fed readings."""
        return records(self.law.readings.velocity_only())

    @property
    def readings(self) -> Readings:
        """The fed readings, each place once."""
        return self.records.places

    def start(self, problem: Problem, state: State, earlier: Any) -> StateInTime:
        """Kernels with their potentials, gains, and zero strengths or those of an earlier run."""
        if not self.law.readings.timed:
            warnings.warn("Readings without time act on the velocity at every instant of the run: "
                          "where they are means of an unsteady flow they damp it.", Fv3dWarning,
                          stacklevel=2)
        fed = self.records.places
        layout = make_layout(problem, fed, self.law.kernel)
        velocity = layout.sample(problem, state.velocity, state.boundary_velocity)
        used = np.flatnonzero(_directions_used(fed).ravel())
        projection = make_projection(problem)
        potential, rest, answer = _columns(problem, projection, layout, used)
        gain = self.law.gains(problem, fed, layout, velocity)
        begun = StateInTime(fed, layout, used, potential, rest, answer, gain, np.zeros(len(gain)),
                            np.zeros((len(fed), 3)), self.law.advice(problem, layout))
        if isinstance(earlier, StateInTime) and len(earlier.strength) == fed.n_components:
            begun = replace(begun, gain=earlier.gain, strength=earlier.strength,
                            vector=earlier.vector, tally=earlier.tally)
        return begun

    def force(self, own: StateInTime) -> Force:
        """The force exerted now [m/s^2]."""
        return own.layout.force(own.vector)

    def advance(self, own: StateInTime, problem: Problem,
                moment: Moment) -> tuple[StateInTime, Push | None, float]:
        """Strengths of the new level, the push of their change, and the misfit of the law."""
        measured, share = self.records.at(moment.time)
        velocity = own.layout.sample(problem, moment.velocity, moment.boundary_velocity)
        direction = linearised_direction(own.readings, velocity)
        rate = own.gain * share
        acting = (rate > 0) & np.any(direction != 0, axis=1)
        if not acting.any() and not own.vector.any():
            return replace(own, tally=own.tally.seen(moment.time)), None, 0.0
        strength = own.solve(velocity, direction, measured, np.where(acting, rate, 0.0),
                             moment.step)
        vector = np.zeros_like(own.vector)
        np.add.at(vector, own.readings.component_place, -strength[:, None] * direction)
        change = vector - own.vector
        after = velocity + moment.step * np.einsum("iajb,jb->ia", own.answer, change)
        misfit = predict(own.readings, after, pressure=np.zeros(len(after))) - measured
        slack = np.divide(strength, rate, out=np.zeros_like(rate), where=acting)
        scale = max(float(np.abs(own.readings.component_value).max()),
                    float(np.abs(velocity).max()), 1e-300)
        error = float(np.abs(np.where(acting, misfit - slack, 0.0)).max()) / scale
        tally = own.tally.seen(moment.time, misfit[acting] / own.readings.component_std[acting])
        push = own.push(problem, change)
        return replace(own, strength=strength, vector=vector, tally=tally), push, error

    def describe(self, own: StateInTime) -> list[str]:
        """Lines for the sheet of a run."""
        gain, tally, law = own.gain, own.tally, self.law
        width = "single cell" if law.radius is None else f"radius {law.radius:g} m"
        span = f"{gain.min():.4g}" if np.ptp(gain) == 0 else f"{gain.min():.4g} to {gain.max():.4g}"
        own_rate = gain * own.own_answer
        lines = [f"feedback   {own.readings.n_components} values at {len(own.readings)} places, "
                 f"{width}, gain {span} 1/s",
                 f"           alone a reading would relax at {own_rate.min():.4g} to "
                 f"{own_rate.max():.4g} 1/s (gain times the kernel's divergence-free share)",
                 f"           readings acted in {tally.acted} of {tally.steps} steps"]
        if tally.acted:
            lines.append(f"           misfit at fed readings {np.sqrt(tally.square):.2g} standard "
                         "deviations rms over these steps (no evidence: these were fed)")
        first, last = self.records.span
        if not tally.acted and tally.steps:
            lines.append(f"           NO reading acted: their times, {first:g} to {last:g} s, are "
                         "not those of the run; see readings.delayed(seconds)")
        return lines + [f"           {sentence}" for sentence in own.advice]


@dataclass(frozen=True)
class Tally:
    """Steps seen, steps in which readings acted, mean square of misfit over std in the latter."""

    time: float = float("nan")
    steps: int = 0
    acted: int = 0
    square: float = 0.0
    total: float = 0.0

    def seen(self, time: float, misfit: np.ndarray | None = None) -> Tally:
        """One step more; a repetition within a step counts once."""
        if time == self.time:
            return self
        if misfit is None or misfit.size == 0:
            return replace(self, time=time, steps=self.steps + 1)
        total = self.total + float(np.mean(misfit ** 2))
        return Tally(time, self.steps + 1, self.acted + 1, total / (self.acted + 1), total)


@dataclass(frozen=True, eq=False)
class StateInTime:
    """Strengths ``a`` (m,) [m/s^2] with the projected kernels.

    ``used`` (k,) columns of place and axis that readings need, ``potential`` and ``rest``
    (k, n_cells) theirs in single precision [m^2/s^2], see
    :func:`fv3d.flow.projected.full_potential`; ``answer``
    (n_places, 3, n_places, 3) velocity at each place along each axis to the projected kernel of
    each place and axis; ``vector`` (n_places, 3) the force's strengths.
    """

    readings: Readings
    layout: Layout
    used: np.ndarray
    potential: np.ndarray
    rest: np.ndarray
    answer: np.ndarray
    gain: np.ndarray
    strength: np.ndarray
    vector: np.ndarray
    advice: tuple[str, ...] = ()
    tally: Tally = field(default_factory=Tally)

    @property
    def own_answer(self) -> np.ndarray:
        """(m,) HPphi of each component; of a speed the mean over the axes."""
        place = self.readings.component_place
        block = self.answer[place, :, place, :]
        direction = self.readings.component_direction
        fixed = np.einsum("ja,jab,jb->j", direction, block, direction)
        return np.where(np.isnan(fixed), np.einsum("jaa->j", block) / 3.0, fixed)

    def solve(self, velocity: np.ndarray, direction: np.ndarray, measured: np.ndarray,
              rate: np.ndarray, step: float) -> np.ndarray:
        """(m,) strengths of the new level; zero where ``rate`` is."""
        on = np.flatnonzero(rate > 0)
        strength = np.zeros_like(rate)
        if on.size == 0:
            return strength
        place, along = self.readings.component_place[on], direction[on]
        block = self.answer[place]
        matrix = np.einsum("ia,iajb,jb->ij", along, block[:, :, place], along)
        matrix[np.diag_indices(len(on))] += 1.0 / (rate[on] * step)
        computed = predict(self.readings, velocity, pressure=np.zeros(len(velocity)))
        without = np.einsum("ia,iajb,jb->i", along, block, self.vector)
        rhs = (computed - measured)[on] - step * without
        strength[on] = np.linalg.lstsq(matrix, rhs, rcond=1e-13)[0] / step
        return strength

    def push(self, problem: Problem, change: np.ndarray) -> Push:
        """What a change (n_places, 3) of the strengths does to the fluid."""
        size = change.ravel()[self.used]
        potential, rest = np.zeros((2, problem.mesh.n_cells))
        add_dense(potential, self.potential, size)
        add_dense(rest, self.rest, size)
        return push_of(problem, self.layout.force(change), potential, rest)


def _directions_used(readings: Readings) -> np.ndarray:
    """(n_places, 3) whether a component of the place needs a force along the axis."""
    used = np.zeros((len(readings), 3), dtype=bool)
    along = readings.component_direction
    np.logical_or.at(used, readings.component_place, np.isnan(along) | (along != 0))
    return used


def _columns(problem: Problem, projection: Projection, layout: Layout,
             used: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Potentials of the kernels and the answers at the places.

    What rounding the potentials leaves is put into the rest, so that mass is conserved.
    """
    n_places = layout.cell.shape[1] // 3
    potential, rest = np.empty((2, len(used), problem.mesh.n_cells), dtype=np.float32)
    answer = np.zeros((3 * n_places, 3 * n_places))
    for k, column in enumerate(used):
        unit = np.zeros(3 * n_places)
        unit[column] = 1.0
        force = layout.force(unit.reshape(-1, 3))
        potential[k], _ = full_potential(problem, projection, force)
        rounded = potential[k].astype(float)
        inflow = -net_outflow(problem, unpressed_flux(problem, force, rounded))
        rest[k] = projection.potential(inflow, 1e-11).solution
        push = push_of(problem, force, rounded, rest[k].astype(float))
        answer[:, column] = layout.sample_change(push.velocity).ravel()
    return potential, rest, answer.reshape(n_places, 3, n_places, 3)
