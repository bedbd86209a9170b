"""A steady iteration on a flow that sheds, beside the same flow followed in time.

The square cylinder at Reynolds number 100 is iterated with three relaxation factors and three
global pseudo-time steps, each from the same moment of the run in time.  A relaxation factor ``a``
is a backward Euler step of ``a / (1 - a)`` cell times (Van Doormaal and Raithby, 1984), so a
period of N iterations that images the shedding keeps ``N a / (1 - a)``; one made by the iteration
keeps N.  At the usual relaxation of 0.9 a coarse mesh of the family converges, and repeats to the
last bit without the watch for oscillation, while the fine one oscillates.

The image is a distorted one.  The pseudo-steps' periods are 14 to 30 % longer than that in time and
tend to it only slowly.  Larger relaxation factors leave the rule: 0.85 (25 iterations a period)
gave a product of 143, 0.9 one of 158, against 112 to 121 here.  And the mesh must be coarse to
converge: one of 3011 cells oscillates at 0.9 too, the coarse one of 896 at 0.7 and 0.8.

Writes ``oscillation.png`` and ``records.csv``.  Takes about five minutes on one core.
"""

from __future__ import annotations

import csv
import importlib.util
import itertools
import sys
import warnings
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType

import numpy as np

import fv3d

HERE = Path(__file__).resolve().parent
RELAXATIONS = {0.4: 1400, 0.55: 800, 0.7: 500}  # and iterations followed
PSEUDO_STEPS = {0.1: 500, 0.2: 300, 0.3: 300}   # size (unit of a time, but none)
USUAL = 0.9
COARSEST = {"first_layer": 0.2, "growth": 1.3, "wake_growth": 1.15, "coarsest": 1.5}


def square_cylinder() -> ModuleType:
    """The script of the case in time."""
    spec = importlib.util.spec_from_file_location("square_cylinder",
                                                  HERE.parent / "square_cylinder" / "run.py")
    assert spec and spec.loader
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


SQUARE = square_cylinder()


@dataclass(frozen=True)
class Iterated:
    """Lift coefficient (n,) by iteration, and how the first run ended."""

    lift: np.ndarray
    outcome: fv3d.errors.Outcome
    last: fv3d.Run

    def period(self) -> fv3d.Estimate:
        """Iterations per cycle, from the last six tenths of the record."""
        part = self.lift[int(0.4 * len(self.lift)):]
        found = fv3d.dominant_frequency(np.arange(len(part), dtype=float), part)
        return fv3d.Estimate(1.0 / found.value, found.std / found.value ** 2, found.basis)


def coefficient(run: fv3d.Run) -> np.ndarray:
    """(n,) lift coefficient of what a run recorded."""
    force = run.series["cylinder"].force[:, 1]
    return np.asarray(force / (0.5 * SQUARE.SPEED ** 2 * SQUARE.SIDE * SQUARE.DEPTH))


def iterated(mesh: fv3d.Mesh, start: fv3d.Run, count: int, *, relaxation: float = USUAL,
             pseudo_step: fv3d.GlobalStep | None = None, tolerance: float = 1e-6) -> Iterated:
    """Iterations from a moment of the run in time, gone on with where the watch ends them."""
    case = SQUARE.make_case(mesh, numerics=fv3d.Numerics(
        coupling=fv3d.SIMPLEC(velocity_relaxation=relaxation), pressure_tolerance=1e-3))
    lift, first, run, done = [], None, start, 0
    while done < count:
        options = {"start": run, "tolerance": tolerance, "max_iterations": count - done,
                   "progress": False, "monitors": [fv3d.ForceMonitor("block", name="cylinder")]}
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", fv3d.Fv3dWarning)
            run = fv3d.solve_steady(case, **options) if pseudo_step is None else \
                fv3d.solve_pseudo_transient(case, pseudo_step=pseudo_step, **options)
        lift.append(coefficient(run))
        first = first or run.outcome
        done += len(lift[-1])
        if run.outcome.good:
            break
    return Iterated(np.concatenate(lift), first, run)


def without_watch(run: fv3d.Run, start: fv3d.Run, count: int) -> float:
    """Largest difference of velocity from the same iterations with nobody watching [m/s]."""
    state, _ = next(itertools.islice(fv3d.iterate(run.case, start=start), count - 1, count))
    return float(np.abs(state.velocity - run.velocity).max())


def draw(time: np.ndarray, lift: np.ndarray, panels: dict[str, dict[str, np.ndarray]]) -> None:
    """The record in time above those of the iterations, which have no time."""
    from matplotlib.figure import Figure
    figure = Figure(figsize=(10.0, 2.6 * (1 + len(panels))), layout="constrained")
    above, *below = figure.subplots(1 + len(panels), 1)
    above.plot(time - time[0], lift, color="k", linewidth=1.2)
    above.set(title="followed in time", xlabel="time [s]", ylabel="lift coefficient")
    for panel, (title, records) in zip(below, panels.items(), strict=True):
        for label, record in records.items():
            panel.plot(np.arange(1, len(record) + 1), record, label=label, linewidth=1.2)
        panel.set(title=title, xlabel="iteration (no time)", ylabel="lift coefficient",
                  xlim=(0, 800))
        panel.legend(loc="upper right", fontsize=8)
    for panel in (above, *below):
        panel.grid(alpha=0.3)
    figure.savefig(HERE / "oscillation.png", dpi=110)


def keep(rows: list[list[object]]) -> None:
    """The table of all iterations."""
    with open(HERE / "records.csv", "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["iteration", "cells", "factor a/(1-a) or pseudo-step", "outcome",
                         "period [iterations]", "std [iterations]", "period x factor",
                         "amplitude of lift"])
        writer.writerows([[f"{x:.5g}" if isinstance(x, float) else x for x in row]
                          for row in rows])


def row(label: str, factor: float, record: Iterated) -> list[object]:
    """One line of that table."""
    name, cells = record.outcome.name, record.last.mesh.n_cells
    if record.last.outcome.good:
        return [label, cells, factor, name, "", "", "", 0.0]
    period = record.period()
    size = 0.5 * float(np.ptp(record.lift[int(0.6 * len(record.lift)):]))
    return [label, cells, factor, name, period.value, period.std, period.value * factor, size]


def spread(products: list[float]) -> float:
    """Largest over smallest, less one."""
    return max(products) / min(products) - 1.0


def figures() -> dict[str, float]:
    """Periods in iterations and what becomes of them with the step and the mesh."""
    run = SQUARE.developed(span=60.0)
    moved = run.series["cylinder"].time > 25.0
    time, lift = run.series["cylinder"].time[moved], coefficient(run)[moved]
    second = 1.0 / fv3d.dominant_frequency(time, lift).value
    relaxed = {a: iterated(run.mesh, run, n, relaxation=a) for a, n in RELAXATIONS.items()}
    stepped = {s: iterated(run.mesh, run, n, pseudo_step=fv3d.GlobalStep(s))
               for s, n in PSEUDO_STEPS.items()}
    fine = iterated(run.mesh, run, 400)
    coarse = iterated(SQUARE.slab(COARSEST), run, 800)
    draw(time, lift, {
        "relaxation": {f"{a:g}": r.lift for a, r in relaxed.items()},
        "global pseudo-time step": {f"{s:g}": r.lift for s, r in stepped.items()},
        f"relaxation {USUAL:g}": {f"{r.last.mesh.n_cells} cells": r.lift for r in (fine, coarse)}})
    keep([row(f"relaxation {a:g}", a / (1 - a), r) for a, r in relaxed.items()]
         + [row(f"pseudo-step {s:g}", s, r) for s, r in stepped.items()]
         + [row(f"relaxation {USUAL:g}", USUAL / (1 - USUAL), r) for r in (fine, coarse)])
    names = [r.outcome.name for r in (*relaxed.values(), *stepped.values(), fine)]
    periods = {a: r.period().value for a, r in relaxed.items()}
    images = {s: r.period().value * s / second for s, r in stepped.items()}
    return {"period in time": second,
            **{f"period at relaxation {a:g}": n for a, n in periods.items()},
            "change of period times a/(1-a)": spread([n * a / (1 - a)
                                                      for a, n in periods.items()]),
            **{f"pseudo-step {s:g}: period times step over period in time": x
               for s, x in images.items()},
            "change of period times pseudo-step": spread(list(images.values())),
            "found oscillating, of seven": names.count("oscillating"),
            "iterations until the coarse mesh has converged":
                len(coarse.lift) if coarse.outcome.name == "converged" else np.nan,
            "difference without the watch": without_watch(coarse.last, run, len(coarse.lift))}


if __name__ == "__main__":
    sys.path.insert(0, str(HERE.parent))
    from judge import main
    main(__file__, figures)
