"""Invent the readings of the strut duct: a finer run with the true inflow, plus noise.

The true inflow is sheared, slightly yawed and has a dent, which the coarse model of ``run.py``
does not know; only its flow rate is shared.  The run uses a mesh of its own, twice to three
times finer than the one of the demo.  Writes ``readings.csv`` and prints the flow rate.
"""

from __future__ import annotations

import csv
import sys
from pathlib import Path

import numpy as np

import fv3d

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parents[1] / "meshes"))
from strut_duct import DEPTH, HEIGHT, strut_duct  # noqa: E402

SPEED = 0.30                      # scale of the inflow [m/s]
NOISE, FLOOR = 0.02, 0.003        # standard deviation: share of the value, and floor [m/s]
COARSE_GRID = [(y, z) for y in (4.0, 9.5, 15.0, 20.0) for z in (4.0, 8.0, 12.0)]    # [mm]
OTHER_GRID = [(y, z) for y in (3.5, 7.0, 10.5, 14.0, 18.5) for z in (4.5, 10.5)]
RAKES = {"rake 1": (16.0, COARSE_GRID), "rake 2": (42.0, COARSE_GRID),
         "rake 3": (60.0, OTHER_GRID), "rake 4": (80.0, COARSE_GRID),
         "rake 5": (100.0, OTHER_GRID)}


def true_inflow(points: np.ndarray) -> np.ndarray:
    """(n, 3) sheared, yawed and dented velocity at points (n, 3) of the inlet [m/s]."""
    y, z = 1e3 * points[:, 1] / HEIGHT, 1e3 * points[:, 2] / DEPTH
    wall = np.clip(np.minimum(y, 1.0 - y) / 0.12, 0.0, 1.0)
    wall = wall * np.clip(np.minimum(z, 1.0 - z) / 0.18, 0.0, 1.0)
    wall = wall * (2.0 - wall)
    dent = 0.35 * np.exp(-((y - 0.7) ** 2 + (z - 0.3) ** 2) / 0.03)
    along = wall * (1.0 + 0.7 * (y - 0.5) + 0.5 * (z - 0.5) - dent)
    return SPEED / 0.85 * np.stack([along, 0.12 * wall, -0.06 * wall], axis=1)


def true_run() -> fv3d.Run:
    """The finer run."""
    mesh = strut_duct(around=80, layers=24, coarsest=2.0, unit=1e-3)
    air = fv3d.moist_air(temperature=295.4, pressure=100_900.0, relative_humidity=0.46)
    case = fv3d.Case(mesh, air, boundaries={
        "inlet": fv3d.Inlet(true_inflow), "outlet": fv3d.Outlet(0.0), "walls": fv3d.Wall(),
        "sides": fv3d.Wall(), "strut": fv3d.Wall()})
    return fv3d.solve_steady(case, tolerance=1e-7, max_iterations=2000, name="invented truth")


def write_rows(run: fv3d.Run, path: Path) -> None:
    """Sample the rakes, add noise and write the table."""
    random = np.random.default_rng(2026)
    rows = []
    for rake, (x, grid) in RAKES.items():
        place = np.array([(x, y, z) for y, z in grid])
        velocity = run.sample(1e-3 * place).velocity[:, :2]
        std = np.hypot(FLOOR, NOISE * velocity)
        velocity = velocity + std * random.standard_normal(std.shape)
        for k, (point, value, error) in enumerate(zip(place, velocity, std, strict=True)):
            rows.append([f"invented {rake[-1]}-{k + 1:02d}", rake, *point,
                         *(f"{number:.4f}" for pair in zip(value, error, strict=True)
                           for number in pair)])
    with open(path, "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["name", "group", "x [mm]", "y [mm]", "z [mm]", "u [m/s]",
                         "u_std [m/s]", "v [m/s]", "v_std [m/s]"])
        writer.writerows(rows)


def main() -> None:
    """Run, sample, write."""
    run = true_run()
    print(run)
    inlet = run.mesh.boundaries["inlet"]
    flow = -run.mass_flux[inlet].sum() / run.case.fluid.density
    print(f"flow rate {flow:.6e} m3/s, mean speed "
          f"{flow / run.mesh.face_area_magnitude[inlet].sum():.6f} m/s")
    write_rows(run, HERE / "readings.csv")
    (HERE / "output").mkdir(exist_ok=True)
    fv3d.picture(run, HERE / "output" / "invented_truth.png")


if __name__ == "__main__":
    main()
