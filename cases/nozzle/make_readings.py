"""Readings of the benchmark nozzle from the measured profiles.

Fed: twelve readings of set 763 at z = 0, 8 and 24 mm, four radii each.  It is the set whose
three profiles there integrate best to the stated flow rate (0.95 on average).  Withheld: every
reading of the other sets at z = 16 and 32 mm.

The flow is axisymmetric, so a reading at a signed radius r stands for the whole circle of radius
|r|.  In ``readings.csv`` the fed ones lie in the middle plane of the modelled quarter, the
withheld ones at azimuths spread over it; ``fed_around.csv`` has the same twelve values at 15, 45
and 75 degrees (those near the axis at 45 only), for the feedback to act on the circle.

Standard deviation of a reading: 3 % of the value, 4 mm/s and a place known to 0.05 mm, in
quadrature, which repeats the scatter between the sets at the fed stations (0.02 m/s in the jet
and its edge, 0.004 m/s outside).
"""

from __future__ import annotations

import csv

import numpy as np
from rig import HERE, PIPE, in_sector, read_table

FED_SET = 763
FED = {0.0: (0.0, 0.6, 1.2, 1.75), 8.0: (0.0, 1.0, 2.0, 3.0), 24.0: (0.0, 1.0, 2.0, 3.0)}  # [mm]
WITHHELD = (16.0, 32.0)
SHARE, FLOOR, PLACE = 0.03, 0.004, 5e-5
NEAR_AXIS = 0.0005  # [m]
GOLDEN = 0.6180339887


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


def rows_of(group: str, number: int, station: float, part: tuple[np.ndarray, ...], *,
            azimuth: np.ndarray | float = 45.0, ending: str = "") -> list[list[str]]:
    """Rows of the table of readings; ``part`` holds radius, value and standard deviation."""
    radius, value, std = part
    z = np.full(len(radius), 1e-3 * station if station else 1e-6)  # just behind the step
    places = in_sector(radius, z, azimuth=azimuth)
    return [[f"{number} z {station:g} r {1e3 * r:.3f}{ending}", group,
             *(f"{1e3 * x:.5f}" for x in place), f"{w:.5f}", f"{error:.5f}"]
            for r, w, error, place in zip(radius, value, std, places, strict=True)]


def fed_rows(table: np.ndarray, *, around: bool) -> list[list[str]]:
    """The fed readings, in the middle plane or at three azimuths."""
    rows = []
    for station, radii in FED.items():
        whole = profile(table, FED_SET, station)
        near = [int(np.argmin(np.abs(whole[0] - 1e-3 * wanted))) for wanted in radii]
        part = tuple(column[near] for column in whole)
        group = f"fed z {station:g}"
        rows += rows_of(group, FED_SET, station, part)
        off_axis = tuple(column[np.abs(part[0]) > NEAR_AXIS] for column in part)
        for azimuth in (15.0, 75.0) if around else ():
            rows += rows_of(group, FED_SET, station, off_axis, azimuth=azimuth,
                            ending=f" at {azimuth:g}")
    return rows


def withheld_rows(table: np.ndarray) -> list[list[str]]:
    """All readings of the other sets, at azimuths spread by the golden section."""
    rows: list[list[str]] = []
    for station in WITHHELD:
        others = np.unique(table[(table[:, 1] == station) & (table[:, 0] != FED_SET), 0])
        for number in others.astype(int):
            whole = profile(table, number, station)
            part = tuple(column[np.abs(whole[0]) < 0.99 * PIPE] for column in whole)
            azimuth = 1.0 + 88.0 * ((len(rows) + np.arange(len(part[0]))) * GOLDEN % 1.0)
            rows += rows_of(f"set {number} z {station:g}", number, station, part,
                            azimuth=azimuth)
    return rows


def write(name: str, rows: list[list[str]]) -> None:
    """A table of readings beside this script."""
    with open(HERE / name, "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["name", "group", "x [mm]", "y [mm]", "z [mm]", "w [m/s]",
                         "w_std [m/s]"])
        writer.writerows(rows)
    print(f"{name}: {len(rows)} rows")


def main() -> None:
    """Write ``readings.csv`` and ``fed_around.csv``."""
    table = np.array(read_table("profiles.csv"))
    write("readings.csv", fed_rows(table, around=False) + withheld_rows(table))
    write("fed_around.csv", fed_rows(table, around=True))


if __name__ == "__main__":
    main()
