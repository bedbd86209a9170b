"""Speed and memory of the steady iteration, as ratios to what the memory of this machine allows.

``python cases/benchmark/run.py [--cells 100] [--iterations 12] [--tetra]`` prints as it goes.
The bound is 3.85 kB of memory traffic per cell and iteration at the triad bandwidth measured in the
same run (a = b + s c, McCalpin, J. D. 1995, IEEE TCCA Newsletter, 19-25).  Nothing is asserted.
"""

from __future__ import annotations

import argparse
import os
import platform
import resource
import time
import warnings

import numba
import numpy as np

import fv3d

BYTES_PER_CELL_AND_ITERATION = 3850.0


@numba.njit(parallel=True)
def triad(a, b, c, s):
    """a = b + s c."""
    for i in numba.prange(a.shape[0]):
        a[i] = b[i] + s * c[i]


def bandwidth() -> float:
    """Best triad bandwidth of several passes [GB/s]."""
    n = 20_000_000
    a, b, c = np.zeros(n), np.ones(n), np.ones(n)
    triad(a, b, c, 2.0)
    best = np.inf
    for _ in range(5):
        began = time.perf_counter()
        triad(a, b, c, 2.0)
        best = min(best, time.perf_counter() - began)
    return 24.0 * n / best / 1e9


def peak() -> float:
    """Peak memory of this process [GiB]."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20


def cavity(cells: int, tetra: bool) -> fv3d.Case:
    """Lid-driven cube at Reynolds number 1000."""
    walls = {side: "walls" for side in ("x_min", "x_max", "y_min", "z_min", "z_max")}
    mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(cells, cells, cells), tetra=tetra,
                    names={"y_max": "lid", **walls})
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-3),
                     boundaries={"lid": fv3d.Wall((1.0, 0.0, 0.0)), "walls": fv3d.Wall()})


def main() -> None:
    """Print bandwidth, set-up, iteration time and memory."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--cells", type=int, default=100, help="cells along each edge")
    options.add_argument("--iterations", type=int, default=12)
    options.add_argument("--tetra", action="store_true")
    chosen = options.parse_args()
    print(f"machine     {platform.processor() or platform.machine()}, {os.cpu_count()} cores, "
          f"{fv3d.get_threads()} threads")
    first = bandwidth()
    print(f"triad       {first:.1f} GB/s", flush=True)
    began = time.perf_counter()
    case = cavity(chosen.cells, chosen.tetra)
    print(f"mesh        {case.mesh.n_cells} cells in {time.perf_counter() - began:.1f} s, peak "
          f"{peak():.2f} GiB", flush=True)
    times = []
    began = time.perf_counter()
    for state, last in fv3d.iterate(case):
        times.append(time.perf_counter() - began)
        effort = last.pressure_iterations
        if state.iteration == 1:
            print(f"set-up      {times[0]:.1f} s with the first iteration", flush=True)
        if state.iteration > chosen.iterations:
            break
        began = time.perf_counter()
    rate = max(first, bandwidth())
    one = float(np.median(times[1:]))
    bound = case.mesh.n_cells * BYTES_PER_CELL_AND_ITERATION / (rate * 1e9)
    print(f"iteration   median {one * 1e3:.0f} ms, {one / bound:.1f} times the bound of "
          f"{bound * 1e3:.0f} ms at {rate:.1f} GB/s")
    print(f"pressure    {effort} conjugate-gradient iterations in the last")
    print(f"memory      peak {peak():.2f} GiB, {peak() * 2**30 / case.mesh.n_cells:.0f} bytes per "
          "cell")


if __name__ == "__main__":
    warnings.simplefilter("ignore", fv3d.Fv3dWarning)
    main()
