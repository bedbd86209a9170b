"""The benchmark nozzle on a coarse mesh, fed with twelve readings of one laboratory's set.

Judged at all readings of the other laboratories' sets at z = 16 and 32 mm.  Gain and radius come
from ``choose.py``, which sees the fed readings only; ``make_readings.py`` says what was fed.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
from rig import DENSITY, HERE, PIPE, THROAT, make_case, sector
from scipy.interpolate import PchipInterpolator

import fv3d

RADIUS = 0.0015  # [m], chosen by choose.py
GAIN = None       # 5 local speed / radius, chosen by choose.py


def solve(mesh: fv3d.Mesh, around: fv3d.Readings) -> tuple[fv3d.Run, fv3d.Run]:
    """The plain and the guided run."""
    case = make_case(mesh)
    plain = fv3d.solve_steady(case, tolerance=1e-6, max_iterations=2000, progress=False)
    law = fv3d.Feedback(around, radius=RADIUS, gain=GAIN)
    guided = fv3d.solve_steady(case, sources=[law], start=plain, tolerance=1e-6,
                               max_iterations=2000, progress=False)
    print(plain, guided, sep="\n")
    return plain, guided


def between_profiles(fed: fv3d.Readings, wanted: fv3d.Readings) -> np.ndarray:
    """(m,) what someone who knows the geometry would interpolate from the fed readings [m/s].

    Monotone cubic over the radius at each fed station, flat on the axis and zero on the wall;
    linear along the axis between the stations, held constant behind the last.
    """
    radius = np.hypot(*fed.point[:, :2].T)
    stations = np.unique(fed.point[:, 2])
    wanted_radius = np.hypot(*wanted.point[:, :2].T)
    at_station = []
    for z in stations:
        here = np.flatnonzero(fed.point[:, 2] == z)
        here = here[np.argsort(radius[here])]
        wall = [PIPE] if z > 1e-4 else [THROAT, PIPE]
        profile = PchipInterpolator([0.0, *radius[here[1:]], *wall],
                                    [*fed.component_value[here], *(0.0 for _ in wall)])
        at_station.append(profile(wanted_radius))
    values = np.array(at_station)
    place = np.interp(wanted.point[:, 2], stations, np.arange(len(stations)))
    low = np.minimum(place.astype(int), len(stations) - 2)
    column = np.arange(len(place))
    return (low + 1 - place) * values[low, column] + (place - low) * values[low + 1, column]


def print_force(guided: fv3d.Run) -> None:
    """What the feedback put in, for the whole circle, beside the momentum of the jet."""
    weight = 4.0 * DENSITY * guided.mesh.cell_volume
    push = guided.artificial_force
    throat = np.abs(guided.mesh.cell_centre[:, 2] + 0.001) < 0.001
    speed = guided.velocity[throat, 2]
    jet = DENSITY * np.pi * 0.002**2 * np.average(speed**2,
                                                  weights=guided.mesh.cell_volume[throat])
    power = float(weight @ np.einsum("ij,ij->i", push, guided.velocity))
    print(f"force put in: axial {weight @ push[:, 2]:+.3g} N, sum of magnitudes "
          f"{weight @ np.linalg.norm(push, axis=1):.3g} N, power {power:+.3g} W; momentum flux of "
          f"the jet {jet:.3g} N")


def figures() -> dict[str, float]:
    """Misfit at the withheld readings."""
    readings = fv3d.read_readings(HERE / "readings.csv")
    used, withheld = readings.split(
        withheld=[group for group in readings.groups if group.startswith("set")])
    around = fv3d.read_readings(HERE / "fed_around.csv")  # the same twelve, on circles
    mesh = sector(core=4)
    plain, guided = solve(mesh, around)
    comparison = fv3d.compare([plain, guided], withheld, fed=around)
    print(comparison)
    print_force(guided)
    profiles = between_profiles(used, withheld) - withheld.component_value
    profile_rms = float(np.sqrt(np.mean(profiles**2)))
    print(f"interpolation between profiles that are zero on the wall: rms {profile_rms:.3g} m/s")
    budget = fv3d.momentum_budget(guided)
    (HERE / "output").mkdir(exist_ok=True)
    fv3d.picture(guided, HERE / "output" / "guided.png", readings=used,
                 plane=((0.0, 0.0, 0.0), (1.0, -1.0, 0.0)))
    plain_rms, guided_rms = comparison.rms("plain"), comparison.rms("guided")
    return {"cells": mesh.n_cells,
            "rms at withheld, plain": plain_rms,
            "rms at withheld, interpolation": comparison.rms("interpolation"),
            "rms at withheld, interpolation of profiles": profile_rms,
            "rms at withheld, guided": guided_rms,
            "guided / plain": guided_rms / plain_rms,
            "guided / interpolation": guided_rms / comparison.rms("interpolation"),
            "guided / interpolation of profiles": guided_rms / profile_rms,
            "momentum left over": float(np.abs(budget.closure).max()) / budget.size}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
