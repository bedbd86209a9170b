"""How iterations and time to 1e-6 grow with the cells, from rest and from coarser meshes.

``python cases/benchmark/growth.py [--cells 32 48 64] [--reynolds 100 1000]`` runs the lid-driven
cube on each mesh from rest and from a family of coarser ones (half the cells along each edge, and
again, down to eight), prints as it goes and draws ``growth.png`` beside this file.  Times are whole
runs, coarse ones and preparation included; ``processor`` is the time of all threads.  The exponent
is the slope of a straight line through the logarithms by least squares.  Nothing is asserted.
"""

from __future__ import annotations

import argparse
import time
import warnings
from pathlib import Path
from typing import Any

import numpy as np

import fv3d

TOLERANCE = 1e-6
FEWEST = 8  # cells along an edge of the coarsest mesh


def cube(cells: int) -> fv3d.Mesh:
    """Unit cube of cells of one size with a lid."""
    sides = ("x_min", "x_max", "y_min", "z_min", "z_max")
    return fv3d.box((0, 0, 0), (1, 1, 1), cells=(cells, cells, cells),
                    names={"y_max": "lid"} | dict.fromkeys(sides, "walls"))


def cavity(cells: int, reynolds: float, **numerics: Any) -> fv3d.Case:
    """Lid-driven cube; ``numerics`` as of ``fv3d.Numerics``."""
    return fv3d.Case(cube(cells), fv3d.Fluid(density=1.0, viscosity=1.0 / reynolds), boundaries={
        "lid": fv3d.Wall((1.0, 0.0, 0.0)), "walls": fv3d.Wall()},
        numerics=fv3d.Numerics(**numerics))


def coarser(cells: int) -> fv3d.CoarserMeshes:
    """The family below a mesh."""
    edges = []
    while cells // 2 >= FEWEST:
        cells //= 2
        edges.insert(0, cells)
    return fv3d.CoarserMeshes([cube(count) for count in edges])


def timed(case: fv3d.Case, start: Any, limit: int) -> tuple[fv3d.Run, float, float]:
    """A run with its seconds and processor seconds, everything included."""
    began, busy = time.perf_counter(), time.process_time()
    run = fv3d.solve_steady(case, start=start, tolerance=TOLERANCE, max_iterations=limit,
                            progress=False)
    return run, time.perf_counter() - began, time.process_time() - busy


def exponent(cells: list[int], values: list[float]) -> float:
    """Slope of log values over log cells by least squares."""
    return float(np.polyfit(np.log(cells), np.log(values), 1)[0])


def draw(rows: list[tuple[float, str, list[int], list[float]]], path: Path) -> None:
    """Time over cells, both logarithmic."""
    from matplotlib.figure import Figure
    figure = Figure(figsize=(7.0, 5.0), layout="constrained")
    panel = figure.subplots()
    for reynolds, how, cells, seconds in rows:
        panel.loglog(cells, seconds, "o-" if how == "from rest" else "s--", linewidth=1.2,
                     label=f"Re {reynolds:g}, {how}: cells^{exponent(cells, seconds):.2f}")
    panel.set_xlabel("cells")
    panel.set_ylabel(f"processor time to {TOLERANCE:g} [s]")
    panel.set_title("lid-driven cube, default methods", fontsize=11)
    panel.grid(alpha=0.3, which="both")
    panel.legend(fontsize=8)
    figure.savefig(path, dpi=130)


def main() -> None:
    """Run, print, draw."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--cells", type=int, nargs="+", default=[32, 48, 64])
    options.add_argument("--reynolds", type=float, nargs="+", default=[100.0, 1000.0])
    options.add_argument("--limit", type=int, default=3000, help="iterations of a run")
    chosen = options.parse_args()
    timed(cavity(8, 100.0), None, 5)  # compiles
    rows = []
    print("  Re  edge   cells  start      iterations  seconds  processor  per iteration and cell")
    for reynolds in chosen.reynolds:
        for how in ("from rest", "coarser"):
            counts, wall, busy = [], [], []
            for edge in chosen.cells:
                case = cavity(edge, reynolds)
                start = None if how == "from rest" else coarser(edge)
                run, seconds, processor = timed(case, start, chosen.limit)
                n = len(run.history["iteration"])
                counts.append(n)
                wall.append(seconds)
                busy.append(processor)
                print(f"{reynolds:4.0f}  {edge:4d} {case.mesh.n_cells:8d}  {how:10s} {n:9d} "
                      f"{seconds:9.1f} {processor:9.1f}  "
                      f"{processor / n / case.mesh.n_cells * 1e6:9.2f} us  {run.outcome.name}",
                      flush=True)
                for line in run.before:
                    print(f"{'':30s}{line}", flush=True)
            cells = [edge ** 3 for edge in chosen.cells]
            if len(cells) > 1:
                print(f"{reynolds:4.0f}  {how}: iterations ~ cells^{exponent(cells, counts):.2f}, "
                      f"seconds ~ cells^{exponent(cells, wall):.2f}, "
                      f"processor ~ cells^{exponent(cells, busy):.2f}", flush=True)
                rows.append((reynolds, how, cells, busy))
    if rows:
        draw(rows, Path(__file__).with_name("growth.png"))


if __name__ == "__main__":
    warnings.simplefilter("ignore", fv3d.Fv3dWarning)
    main()
