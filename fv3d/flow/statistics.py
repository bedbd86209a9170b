"""Statistics of the whole field in a run in time: mean, fluctuations, averages over a phase.

Every step counts with its size.  The sums are carried on from step to step in the form that loses
no digits (Welford, B. P. 1962, Technometrics 4, 419-420, with weights after West, D. H. D. 1979,
Commun. ACM 22, 532-535; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from ..errors import CaseError, Outcome, as_number, expect_run
from .coupling import Record
from .problem import Problem, State
from .run import Run

PAIRS = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))  # of the Reynolds stresses kept


@dataclass(frozen=True, eq=False)
class FieldStatistics:
    """What a :class:`MeanMonitor` found.

    Attributes
    ----------
    velocity : (n_cells, 3) mean [m/s], pressure : (n_cells,) mean [Pa]
    reynolds_stress : (n_cells, 3, 3) mean product of velocity fluctuations [m^2/s^2]
    pressure_rms : (n_cells,) [Pa]
    mass_flux : (n_faces,) mean [kg/s], boundary_velocity : (n_boundary, 3) mean [m/s]
    seconds : time averaged over [s], steps : their number
    """

    velocity: np.ndarray
    pressure: np.ndarray
    reynolds_stress: np.ndarray
    pressure_rms: np.ndarray
    mass_flux: np.ndarray
    boundary_velocity: np.ndarray
    seconds: float
    steps: int

    @property
    def velocity_rms(self) -> np.ndarray:
        """(n_cells, 3) root mean square of the fluctuations of each component [m/s]."""
        return np.sqrt(np.einsum("cii->ci", self.reynolds_stress))

    @property
    def energy(self) -> np.ndarray:
        """(n_cells,) kinetic energy of the fluctuations per mass [m^2/s^2]."""
        return 0.5 * np.einsum("cii->c", self.reynolds_stress)


class MeanMonitor:
    """Running mean, rms and Reynolds stresses of the field.

    Parameters
    ----------
    name : str
        Key in ``run.series``, where a :class:`FieldStatistics` stands afterwards.
    begin : float
        Steps that end before this time are left out [s]: the start-up.

    Raises
    ------
    CaseError
        In an iteration, whose steps are no time.
    """

    def __init__(self, *, name: str, begin: float = 0.0) -> None:
        self.name, self.begin = name, begin
        self._kept: dict[str, Any] = {"weight": 0.0, "steps": 0}

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Add one step."""
        weight = _step(state, self.name)
        if state.time - weight < self.begin - 1e-9 * weight:
            return None
        kept, n = self._kept, problem.mesh.n_cells
        if kept["steps"] == 0:
            kept.update(velocity=np.zeros((n, 3)), pressure=np.zeros(n), stress=np.zeros((n, 6)),
                        square=np.zeros(n), mass_flux=np.zeros(problem.mesh.n_faces),
                        boundary_velocity=np.zeros((problem.mesh.n_boundary, 3)))
        total = kept["weight"] + weight
        away = state.velocity - kept["velocity"]
        up = state.pressure - kept["pressure"]
        share = kept["weight"] * weight / total
        kept["velocity"] += (weight / total) * away
        kept["pressure"] += (weight / total) * up
        for name in ("mass_flux", "boundary_velocity"):
            kept[name] += (weight / total) * (getattr(state, name) - kept[name])
        for k, (i, j) in enumerate(PAIRS):
            kept["stress"][:, k] += share * away[:, i] * away[:, j]
        kept["square"] += share * up * up
        kept["weight"], kept["steps"] = total, kept["steps"] + 1
        return None

    def series(self) -> FieldStatistics:
        """Mean and fluctuations so far; empty arrays before ``begin``."""
        kept = self._kept
        if kept["steps"] == 0:
            return FieldStatistics(np.empty((0, 3)), np.empty(0), np.empty((0, 3, 3)), np.empty(0),
                                   np.empty(0), np.empty((0, 3)), 0.0, 0)
        stress = np.empty((len(kept["square"]), 3, 3))
        for k, (i, j) in enumerate(PAIRS):
            stress[:, i, j] = stress[:, j, i] = kept["stress"][:, k] / kept["weight"]
        return FieldStatistics(kept["velocity"].copy(), kept["pressure"].copy(), stress,
                               np.sqrt(kept["square"] / kept["weight"]),
                               kept["mass_flux"].copy(), kept["boundary_velocity"].copy(),
                               kept["weight"], kept["steps"])

    def restart(self) -> None:
        """Forget the sums: another run begins."""
        self._kept = {"weight": 0.0, "steps": 0}

    def stored(self) -> dict[str, Any]:
        """The sums, for a checkpoint."""
        return self._kept

    def restore(self, stored: dict[str, Any]) -> None:
        """Go on from what a checkpoint kept."""
        self._kept = _own(stored)


def mean_run(run: Run, *, name: str) -> Run:
    """The mean of a run in time as a run of its own: to be compared, drawn and written like one.

    It carries the fluid's own viscosity and no artificial force.  Momentum does not balance in it:
    the Reynolds stresses are missing.

    Parameters
    ----------
    run : Run
    name : str
        Of the :class:`MeanMonitor` that saw the run.

    Raises
    ------
    CaseError
        No such monitor, or one that saw no step.
    """
    expect_run(run, "mean_run(run, name=)")
    found = run.series.get(name)
    if not isinstance(found, FieldStatistics) or found.steps == 0:
        raise CaseError("There is no mean of this name.", where="mean_run(run, name=)",
                        got=repr(name), remedy="Give the run a MeanMonitor that begins before it "
                        f"ends; it has {', '.join(run.series) or 'no monitor'}.")
    state = State(found.velocity, found.pressure, found.mass_flux, found.boundary_velocity,
                  levels=run.state.levels)
    still = replace(run.problem, sources=())
    outcome = Outcome("mean", f"Mean over {found.seconds:g} s, {found.steps} steps.", "", True)
    return Run(still, state, {"iteration": np.arange(0)}, outcome, f"{run.name}, mean")


@dataclass(frozen=True, eq=False)
class PhaseAverage:
    """What a :class:`PhaseMonitor` found.

    Attributes
    ----------
    phase : (bins,) middle of each bin, in parts of the period from 0 to 1
    velocity : (bins, n_cells, 3) [m/s], pressure : (bins, n_cells) [Pa]; nan in an empty bin
    seconds : (bins,) time averaged over [s]
    """

    phase: np.ndarray
    velocity: np.ndarray
    pressure: np.ndarray
    seconds: np.ndarray


class PhaseMonitor:
    """Averages of the field over the phase of a given period.

    Parameters
    ----------
    name : str
        Key in ``run.series``, where a :class:`PhaseAverage` stands afterwards.
    period : float [s]
    bins : int
        Parts of the period; each holds a field of the mesh in memory.
    begin : float
        Phase zero [s]; earlier steps are left out.

    Raises
    ------
    CaseError
        A period that is not positive, fewer than one bin; in an iteration.
    """

    def __init__(self, *, name: str, period: float, bins: int = 16, begin: float = 0.0) -> None:
        if not (0.0 < as_number(period) < np.inf and as_number(bins) >= 1):
            raise CaseError("A phase average needs a period and bins.", got=(period, bins),
                            where=f"PhaseMonitor '{name}'",
                            remedy="Give period= in seconds, 1 / frequency, and bins=16, say.")
        self.name, self.period, self.bins, self.begin = name, float(period), int(bins), begin
        self._kept: dict[str, Any] = {}

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Add one step."""
        weight = _step(state, self.name)
        if state.time < self.begin:
            return None
        n, kept = problem.mesh.n_cells, self._kept
        if not kept:
            kept.update(weight=np.zeros(self.bins), velocity=np.zeros((self.bins, n, 3)),
                        pressure=np.zeros((self.bins, n)))
        k = int((state.time - self.begin) / self.period % 1.0 * self.bins) % self.bins
        kept["weight"][k] += weight
        share = weight / kept["weight"][k]
        kept["velocity"][k] += share * (state.velocity - kept["velocity"][k])
        kept["pressure"][k] += share * (state.pressure - kept["pressure"][k])
        return None

    def series(self) -> PhaseAverage:
        """The averages so far."""
        phase, kept = (np.arange(self.bins) + 0.5) / self.bins, self._kept
        if not kept:
            return PhaseAverage(phase, np.empty((self.bins, 0, 3)), np.empty((self.bins, 0)),
                                np.zeros(self.bins))
        full = kept["weight"] > 0
        return PhaseAverage(phase, np.where(full[:, None, None], kept["velocity"], np.nan),
                            np.where(full[:, None], kept["pressure"], np.nan),
                            kept["weight"].copy())

    def restart(self) -> None:
        """Forget the averages: another run begins."""
        self._kept = {}

    def stored(self) -> dict[str, Any]:
        """The averages, for a checkpoint."""
        return self._kept

    def restore(self, stored: dict[str, Any]) -> None:
        """Go on from what a checkpoint kept."""
        self._kept = _own(stored)


def _step(state: State, name: str) -> float:
    if state.older is None or np.isnan(state.time):
        raise CaseError("A mean over iterations is no mean in time.", where=f"monitor '{name}'",
                        got="an iteration", remedy="Use it with solve_transient.")
    return float(state.older.step)


def _own(stored: dict[str, Any]) -> dict[str, Any]:
    return {key: value.copy() if isinstance(value, np.ndarray) else value
            for key, value in stored.items()}
