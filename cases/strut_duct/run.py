"""The whole job on a rig of our own invention: a duct with a round strut across it.

All readings are invented (``make_readings.py``: a finer run with a sheared, yawed inflow, plus
noise).  The coarse model knows the flow rate only, takes the inflow as uniform, and is fed the
rakes 1, 2 and 4; it is judged at the rakes 3 and 5.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

HERE = Path(__file__).resolve().parent
MESH = HERE.parents[1] / "meshes" / "strut_duct.msh"
MEAN_SPEED = 0.2739  # [m/s], from the flow meter of the rig (invented)
STRUT_DIAMETER = 0.004
RADIUS = 0.4 * STRUT_DIAMETER  # width of the forces, below the spacing of the probes


def make_case(mesh: fv3d.Mesh) -> fv3d.Case:
    """What is known of the rig: geometry, air, flow rate."""
    air = fv3d.moist_air(temperature=295.4, pressure=100_900.0, relative_humidity=0.46)
    return fv3d.Case(mesh, air, boundaries={
        "inlet": fv3d.Inlet(velocity=(MEAN_SPEED, 0.0, 0.0)), "outlet": fv3d.Outlet(0.0),
        "walls": fv3d.Wall(), "sides": fv3d.Wall(), "strut": fv3d.Wall()})


def solve(case: fv3d.Case, used: fv3d.Readings) -> tuple[fv3d.Run, fv3d.Run]:
    """The plain and the guided run."""
    plain = fv3d.solve_steady(case, tolerance=1e-6, max_iterations=2000)
    print(plain)
    law = fv3d.Feedback(used, radius=RADIUS)
    guided = fv3d.solve_steady(case, sources=[law], start=plain, tolerance=1e-6,
                               max_iterations=2000)
    print(guided)
    return plain, guided


def write(guided: fv3d.Run, readings: fv3d.Readings) -> None:
    """Fields, readings, history and pictures into ``output``."""
    output = HERE / "output"
    output.mkdir(exist_ok=True)
    fv3d.write_vtk(guided, output / "guided.vtu")
    fv3d.write_readings(readings, output / "readings.vtp", run=guided)
    fv3d.write_history(guided, output / "history.csv")
    fv3d.picture_readings(guided.mesh, readings, path=output / "readings.png")
    fv3d.picture(guided, output / "guided.png", readings=readings,
                 title="guided run, invented readings")
    print(f"written: guided.vtu, readings.vtp, history.csv, readings.png, guided.png in {output}")


def figures() -> dict[str, float]:
    """Misfit at the withheld readings and the momentum left over."""
    mesh = fv3d.read_mesh(MESH, scale=1e-3)
    print(mesh)
    readings = fv3d.read_readings(HERE / "readings.csv")
    used, withheld = readings.split(withheld=["rake 3", "rake 5"])
    plain, guided = solve(make_case(mesh), used)
    comparison = fv3d.compare([plain, guided], withheld, fed=used)
    print(comparison)
    print(fv3d.force(guided, "strut"), fv3d.force_budget(guided, "strut"), sep="\n")
    budget = fv3d.momentum_budget(guided)
    left_over = float(np.abs(budget.closure).max()) / budget.size
    print(f"all forces on the fluid cancel to {left_over:.1e} of their sum")
    write(guided, readings)
    plain_rms, guided_rms = comparison.rms("plain"), comparison.rms("guided")
    return {"rms at withheld, plain": plain_rms,
            "rms at withheld, interpolation": comparison.rms("interpolation"),
            "rms at withheld, guided": guided_rms,
            "guided / plain": guided_rms / plain_rms,
            "momentum left over": left_over}


if __name__ == "__main__":
    sys.path.insert(0, str(HERE.parent))
    from judge import main
    main(__file__, figures)
