"""Write the table of the inlet: an invented traverse of five rings, as a probe might give it."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np

RADIUS = 10.0  # of the pipe [mm]


def main() -> None:
    """A full, slightly lopsided profile; the last ring lies on the wall."""
    rows = []
    for ring, radius in enumerate(np.linspace(0.0, RADIUS, 6)):
        count = 1 if ring == 0 else 6 * ring
        for k in range(count):
            angle = 2.0 * np.pi * k / count
            x, y = radius * np.cos(angle), radius * np.sin(angle)
            speed = 0.0 if ring == 5 else 0.06 * (1 - (radius / RADIUS)**6) * (1 + 0.02 * x / 2)
            rows.append([f"{x:.4f}", f"{y:.4f}", "0.0", "0.0", "0.0", f"{100 * speed:.4f}",
                         *["0.05"] * 3])
    path = Path(__file__).with_name("inlet.csv")
    with path.open("w", newline="", encoding="utf-8") as file:
        file.write("# invented traverse of the entry of a pipe\n")
        writer = csv.writer(file)
        writer.writerow(["x [mm]", "y [mm]", "z [mm]", "u [cm/s]", "v [cm/s]", "w [cm/s]",
                         "u_std [cm/s]", "v_std [cm/s]", "w_std [cm/s]"])
        writer.writerows(rows)


if __name__ == "__main__":
    main()
