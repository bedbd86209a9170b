"""What feedback costs: a guided iteration and a guided time step against plain ones.

``python cases/benchmark/feedback.py [--cells 100000] [--tetra] [--count 40] [--radius 2.5]`` feeds
three components at sixteen places (invented values) into the flow through a duct.  Plain and guided
runs of one process take turns; only turns in which both solved the pressure equation with the same
number of iterations are compared, and the share is the median over these turns.  "renewed" is the
mean cost of all later iterations in which the answers of the momentum sweeps were looked at or
renewed, "start" what the first guided iteration takes more than the plain one.  ``--radius`` is in
cells; a force of a single cell is measured too.  Nothing is asserted.
"""

from __future__ import annotations

import argparse
import time
import warnings
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd

import fv3d
from fv3d.flow.coupling import make_workspace
from fv3d.flow.problem import make_problem
from fv3d.flow.start import start_state
from fv3d.flow.step_size import FixedStep
from fv3d.flow.time_step import TimeStep
from fv3d.measured.feedback import REFRESH_EARLY, REFRESH_EVERY

LENGTH, COURANT = 2.0, 0.5


def duct(cells: int, tetra: bool) -> fv3d.Case:
    """Channel of square section, two by one by one, uniform inflow at Reynolds number 500."""
    across = (cells / LENGTH / (6 if tetra else 1)) ** (1 / 3)
    count = (round(LENGTH * across), round(across), round(across))
    mesh = fv3d.box((0, 0, 0), (LENGTH, 1, 1), cells=count, tetra=tetra)
    sides: dict[str, Any] = {name: fv3d.Wall() for name in mesh.boundaries}
    sides |= {"x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "x_max": fv3d.Outlet()}
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=2e-3), boundaries=sides)


def readings(times: np.ndarray | None = None) -> fv3d.Readings:
    """Sixteen places, three components each, invented."""
    places = [(x, y, z) for x in (0.4, 0.8, 1.2, 1.6) for y in (0.3, 0.7) for z in (0.3, 0.7)]
    frame = pd.DataFrame(places, columns=["x [m]", "y [m]", "z [m]"])
    frame["name"] = [f"probe {k + 1}" for k in range(len(places))]
    for k, axis in enumerate("uvw"):
        frame[f"{axis} [m/s]"] = (k == 0) + 0.1 * np.sin(1.7 * np.arange(len(places)) + k)
        frame[f"{axis}_std [m/s]"] = 0.02
    if times is not None:
        frame = pd.concat([frame.assign(**{"time [s]": t}) for t in times])
    return fv3d.Readings(frame)


def steps(case: fv3d.Case, sources: tuple[Any, ...], size: float) -> Iterator[Any]:
    """Time steps [s] without end."""
    problem = make_problem(case, tuple(source.in_time for source in sources))
    workspace = make_workspace(problem)
    state = replace(start_state(problem, None, workspace), time=0.0, older=None)
    advance = TimeStep(FixedStep(size), end=np.inf, outer=1)
    while True:
        with np.errstate(all="ignore"):
            state, record = advance(problem, state, workspace)
        yield state, record


def turns(plain: Iterator[Any], guided: Iterator[Any], count: int) -> tuple[np.ndarray, ...]:
    """Processor seconds (count, 2), seconds (count, 2) and pressure iterations (count, 2)."""
    busy, seconds, effort = np.empty((3, count, 2))
    for k in range(count):
        for which in (0, 1) if k % 2 else (1, 0):
            began, used = time.perf_counter(), time.process_time()
            _, record = next((plain, guided)[which])
            busy[k, which] = time.process_time() - used
            seconds[k, which] = time.perf_counter() - began
            effort[k, which] = record.pressure_iterations
    return busy, seconds, effort


def compare(label: str, plain: Iterator[Any], guided: Iterator[Any], count: int,
            steady: bool) -> None:
    """Let two runs take turns and print what the second takes more."""
    busy, seconds, effort = turns(plain, guided, count)
    looked = np.array([steady and (k in REFRESH_EARLY or k % REFRESH_EVERY == 0)
                       for k in range(count)])
    looked[0] = True
    alike = ~looked & (effort[:, 0] == effort[:, 1])
    if not alike.any():
        print(f"{label}: no turns alike, raise --count")
        return
    median = 1e3 * np.median(busy[alike], axis=0)
    share = [100.0 * np.median(part[alike, 1] - part[alike, 0]) / np.median(part[alike, 0])
             for part in (busy, seconds)]
    extra = 1e3 * (busy[:, 1] - busy[:, 0])
    renewed = extra[1:][looked[1:]].mean() if looked[1:].any() else 0.0
    print(f"{label:34s} {median[0]:8.1f} {median[1]:8.1f} {share[0]:7.1f} {share[1]:7.1f} "
          f"{renewed:9.0f} {extra[0] / 1e3:8.1f} {alike.sum():6d}", flush=True)


def main() -> None:
    """Run and print."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--cells", type=int, default=100_000)
    options.add_argument("--tetra", action="store_true")
    options.add_argument("--count", type=int, default=40, help="iterations of a run")
    options.add_argument("--radius", type=float, default=2.5, help="[cells]")
    options.add_argument("--gain", type=float, help="[1/s], else the default")
    chosen = options.parse_args()
    case = duct(chosen.cells, chosen.tetra)
    cell = float(np.cbrt(case.mesh.cell_volume.mean()))
    print(f"{case.mesh.n_cells} cells, {fv3d.get_threads()} threads, 16 readings of 3 components\n"
          f"{'':34s} {'plain':>8s} {'guided':>8s} {'share':>7s} {'wall':>7s} {'renewed':>9s} "
          f"{'start':>8s} {'turns':>6s}\n"
          f"{'':34s} {'[ms]':>8s} {'[ms]':>8s} {'[%]':>7s} {'[%]':>7s} {'[ms]':>9s} {'[s]':>8s}")
    for radius in (chosen.radius * cell, None):
        force = "single cells" if radius is None else f"radius {chosen.radius:g} cells"
        law = fv3d.Feedback(readings(), radius=radius, gain=chosen.gain)
        compare(f"steady iteration, {force}", fv3d.iterate(case),
                fv3d.iterate(case, sources=[law]), chosen.count, True)
        law = fv3d.Feedback(readings(np.arange(-1.0, 9.0, 0.25)), radius=radius, gain=chosen.gain)
        compare(f"time step, {force}", steps(case, (), COURANT * cell),
                steps(case, (law,), COURANT * cell), max(chosen.count // 2, 3), False)


if __name__ == "__main__":
    warnings.simplefilter("ignore", fv3d.Fv3dWarning)
    main()
