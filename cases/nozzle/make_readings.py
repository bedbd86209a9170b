"""Readings of the benchmark nozzle from the measured profiles.

Fed: twelve readings of set 763 at z = 0, 8 and 24 mm, four radii each.  It is the set whose
three profiles there integrate best to the stated flow rate (0.95 on average).  Withheld: every
reading of the other sets at z = 16 and 32 mm.

The flow is axisymmetric, so a reading at a signed radius r is placed at the radius |r| in the
middle plane of the modelled quarter.  Standard deviation of a reading: 3 % of the value, 4 mm/s
and a place known to 0.05 mm, in quadrature, which repeats the scatter between the sets at the
fed stations (0.02 m/s in the jet and its edge, 0.004 m/s outside).
"""

from __future__ import annotations

import csv

import numpy as np
from rig import HERE, PIPE, in_sector, read_table

FED_SET = 763
FED = {0.0: (0.0, 0.6, 1.2, 1.75), 8.0: (0.0, 1.0, 2.0, 3.0), 24.0: (0.0, 1.0, 2.0, 3.0)}  # [mm]
WITHHELD = (16.0, 32.0)
SHARE, FLOOR, PLACE = 0.03, 0.004, 5e-5


def spread(radius: np.ndarray, value: np.ndarray) -> np.ndarray:
    """(n,) standard deviation [m/s] of a profile of values at radii [m]."""
    width = 5e-4
    order = np.argsort(radius)
    slope = (np.interp(radius + width, radius[order], value[order])
             - np.interp(radius - width, radius[order], value[order])) / (2.0 * width)
    return np.sqrt((SHARE * value) ** 2 + FLOOR**2 + (PLACE * slope) ** 2)


def profile(table: np.ndarray, number: int, station: float) -> tuple[np.ndarray, ...]:
    """Radius [m], value and standard deviation [m/s] of one set at one station [mm]."""
    rows = table[(table[:, 0] == number) & (table[:, 1] == station)]
    radius, value = 1e-3 * rows[:, 2], rows[:, 3]
    return radius, value, spread(radius, value)


def rows_of(group: str, number: int, station: float, radius: np.ndarray, value: np.ndarray,
            std: np.ndarray) -> list[list[str]]:
    """Rows of the table of readings."""
    z = np.full(len(radius), 1e-3 * station)
    z[z == 0.0] = 1e-6  # just behind the step
    return [[f"{number} z {station:g} r {1e3 * r:.3f}", group,
             *(f"{1e3 * x:.5f}" for x in place), f"{w:.5f}", f"{error:.5f}"]
            for r, w, error, place in zip(radius, value, std, in_sector(radius, z), strict=True)]


def main() -> None:
    """Write ``readings.csv``."""
    table = np.array(read_table("profiles.csv"))
    rows = []
    for station, radii in FED.items():
        radius, value, std = profile(table, FED_SET, station)
        near = [int(np.argmin(np.abs(radius - 1e-3 * wanted))) for wanted in radii]
        rows += rows_of(f"fed z {station:g}", FED_SET, station, radius[near], value[near],
                        std[near])
    for station in WITHHELD:
        others = np.unique(table[(table[:, 1] == station) & (table[:, 0] != FED_SET), 0])
        for number in others.astype(int):
            radius, value, std = profile(table, number, station)
            inside = np.abs(radius) < 0.99 * PIPE
            rows += rows_of(f"set {number} z {station:g}", number, station, radius[inside],
                            value[inside], std[inside])
    with open(HERE / "readings.csv", "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["name", "group", "x [mm]", "y [mm]", "z [mm]", "w [m/s]",
                         "w_std [m/s]"])
        writer.writerows(rows)
    print(f"{len(rows)} readings written")


if __name__ == "__main__":
    main()
