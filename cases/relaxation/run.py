"""The converged field must not depend on the relaxation nor on the coupling.

SIMPLE and SIMPLEC with the relaxations 0.5, 0.7 and 0.9, on the plane cylinder and on the duct
with the strut (plain and with feedback).  For each family of six runs: the largest difference of
any cell's velocity from that of the first run, over the largest speed, and the largest summed mass
imbalance over the inflow.  On hexahedra and on tetrahedra; takes about half an hour on one core.
"""

from __future__ import annotations

import importlib.util
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from types import ModuleType

import numpy as np

import fv3d

HERE = Path(__file__).resolve().parent
COUPLINGS = tuple(kind(velocity_relaxation=relaxation) for kind in (fv3d.SIMPLEC, fv3d.SIMPLE)
                  for relaxation in (0.7, 0.9, 0.5))
TOLERANCE = 1e-7
KINDS = ("hex", "tet")


def module(path: Path) -> ModuleType:
    """Another script of the project as a module."""
    spec = importlib.util.spec_from_file_location(f"{path.parent.name}_{path.stem}", path)
    assert spec and spec.loader
    loaded = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(loaded)
    return loaded


def imbalance(run: fv3d.Run) -> float:
    """Summed mass imbalance of the cells over the inflow."""
    inflow = -np.minimum(run.mass_flux[run.mesh.n_internal:], 0.0).sum()
    return float(np.abs(run.mesh.outflow @ run.mass_flux).sum() / inflow)


def family(name: str, case: fv3d.Case, *, sources: tuple[fv3d.Feedback, ...] = (),
           limit: int = 4000) -> dict[str, float]:
    """Run a case with every coupling; unconverged or diverged runs count as a difference of one."""
    first, difference, mass = None, 0.0, 0.0
    for coupling in COUPLINGS:
        numerics = replace(case.numerics, coupling=coupling)
        try:
            run = fv3d.solve_steady(replace(case, numerics=numerics), sources=sources,
                                    tolerance=TOLERANCE, max_iterations=limit, progress=False)
        except fv3d.DivergenceError as error:
            run = error.run
        ended = f"{run.outcome.name} after {len(run.history['iteration'])} iterations"
        first = run if first is None else first
        speed = np.linalg.norm(first.velocity, axis=1).max()
        apart = float(np.linalg.norm(run.velocity - first.velocity, axis=1).max() / speed)
        print(f"{name}, {coupling}: {ended}, {run.seconds:.0f} s, difference {apart:.2e}, "
              f"imbalance {imbalance(run):.1e}", flush=True)
        difference = max(difference, apart if run.outcome.good else 1.0)
        mass = max(mass, imbalance(run))
    return {f"{name}: difference": difference, f"{name}: imbalance": mass}


def families() -> list[Callable[[], dict[str, float]]]:
    """What is run, in order; each entry runs one family."""
    cylinder = module(HERE.parent / "cylinder_2d" / "run.py")
    strut = module(HERE.parent / "strut_duct" / "run.py")
    draw = module(HERE.parents[1] / "meshes" / "strut_duct.py").strut_duct
    readings = fv3d.read_readings(HERE.parent / "strut_duct" / "readings.csv")
    used, _ = readings.split(withheld=["rake 3", "rake 5"])
    law = fv3d.Feedback(used, radius=strut.RADIUS)
    flat = {"hex": {"around": 96, "depth": 0.02},
            "tet": {"around": 48, "depth": 0.02, "first_layer": 0.005, "coarsest": 0.02,
                    "tetra": True}}
    duct = {"hex": {"around": 24, "layers": 8, "coarsest": 3.0},
            "tet": {"around": 16, "layers": 8, "coarsest": 2.5, "first_layer": 0.8,
                    "tetra": True}}
    out = []
    for kind in KINDS:
        choice = flat[kind]
        plane = cylinder.make_case(fv3d.channel_with_cylinder(**choice, **cylinder.GEOMETRY))
        out.append(lambda kind=kind, case=plane: family(f"2D-1 {kind}", case))
    for kind in KINDS:
        choice = duct[kind]
        case = strut.make_case(draw(**choice, unit=1e-3))
        out.append(lambda kind=kind, case=case: family(f"demo {kind}", case))
        out.append(lambda kind=kind, case=case: family(f"demo {kind} guided", case,
                                                       sources=(law,)))
    return out


def figures() -> dict[str, float]:
    """Largest difference and imbalance of every family."""
    found: dict[str, float] = {}
    for run_family in families():
        found |= run_family()
    return found


if __name__ == "__main__":
    sys.path.insert(0, str(HERE.parent))
    from judge import main
    main(__file__, figures)
