"""Iterations to 1e-6 with the default coupling against SIMPLE with factors 0.7 and 0.3.

``python cases/benchmark/couplings.py [--cells 64] [--reynolds 100 1000]`` runs the lid-driven cube
from rest: the reference solves the pressure equation once and sweeps the momentum equations four
times in each iteration, the default chooses its sweeps itself.  Nothing is asserted.
"""

from __future__ import annotations

import argparse
import warnings

from growth import TOLERANCE, cavity, coarser, timed

import fv3d


def main() -> None:
    """Run and print."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--cells", type=int, default=64, help="cells along each edge")
    options.add_argument("--reynolds", type=float, nargs="+", default=[100.0, 1000.0])
    options.add_argument("--limit", type=int, default=5000, help="iterations of a run")
    chosen = options.parse_args()
    timed(cavity(8, 100.0), None, 5)  # compiles
    methods = {"SIMPLE(0.7, 0.3), 4 sweeps": {"coupling": fv3d.SIMPLE(0.7, 0.3), "sweeps": 4},
               "default": {}, "default, coarser meshes first": {}}
    print(f"{chosen.cells}^3 cells, to {TOLERANCE:g}")
    print("  Re  method                          iterations   ratio  seconds  processor")
    for reynolds in chosen.reynolds:
        reference = 0
        for label, numerics in methods.items():
            start = coarser(chosen.cells) if "coarser" in label else None
            run, seconds, processor = timed(cavity(chosen.cells, reynolds, **numerics), start,
                                            chosen.limit)
            count = len(run.history["iteration"])
            reference = reference or count
            ratio = f"1/{reference / count:.1f}"
            print(f"{reynolds:4.0f}  {label:30s} {count:11d} {ratio:>7s} "
                  f"{seconds:8.1f} {processor:9.1f}  {run.outcome.name}", flush=True)


if __name__ == "__main__":
    warnings.simplefilter("ignore", fv3d.Fv3dWarning)
    main()
