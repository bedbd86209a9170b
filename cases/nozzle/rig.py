"""The benchmark nozzle: geometry, fluid, inflow, meshes."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np

import fv3d

HERE = Path(__file__).resolve().parent
DENSITY, VISCOSITY, FLOW_RATE = 1056.0, 0.0035, 5.20624e-6
PIPE, THROAT = 0.006, 0.002  # radii [m]
CONE = (PIPE - THROAT) / np.tan(np.radians(10.0))
INLET, OUTLET = -0.0927, 0.25
SECTIONS = [(INLET, PIPE), (-0.04 - CONE, PIPE), (-0.04, THROAT), (0.0, THROAT), (0.0, PIPE),
            (OUTLET, PIPE)]
PLACES = (INLET, -0.0627, -0.04, -0.008, 0.0, 0.006, 0.03, 0.1, OUTLET)
SIZES = (0.004, 0.002, 0.0012, 0.0014, 0.0004, 0.0006, 0.0016, 0.004, 0.01)


def sector(*, core: int, refinement: int = 1, stretch: float = 1.0) -> fv3d.Mesh:
    """A quarter of the nozzle; ``stretch`` lengthens the cells along the axis."""
    axial = fv3d.Spacing(at=PLACES, size=tuple(stretch * size for size in SIZES))
    return fv3d.nozzle(SECTIONS, core=core, axial=axial, quadrants=1, equal_area=True,
                       refinement=refinement)


def developed(points: np.ndarray) -> np.ndarray:
    """(n, 3) developed velocity in the pipe [m/s]."""
    share = (points[:, 0] ** 2 + points[:, 1] ** 2) / PIPE**2
    velocity = np.zeros_like(points)
    velocity[:, 2] = 2.0 * FLOW_RATE / (np.pi * PIPE**2) * np.maximum(1.0 - share, 0.0)
    return velocity


def make_case(mesh: fv3d.Mesh) -> fv3d.Case:
    """The nozzle at a throat Reynolds number of 500; the faces carry the exact flow rate."""
    inlet = mesh.boundaries["inlet"]
    carried = -4.0 * float(np.einsum("ij,ij->", mesh.face_area[inlet],
                                     developed(mesh.face_centre[inlet])))
    share = FLOW_RATE / carried
    return fv3d.Case(mesh, fv3d.Fluid(density=DENSITY, viscosity=VISCOSITY), boundaries={
        "inlet": fv3d.Inlet(lambda points: share * developed(points)),
        "outlet": fv3d.Outlet(0.0), "wall": fv3d.Wall(), "symmetry": fv3d.Symmetry()})


def read_table(name: str) -> list[tuple[int, ...]]:
    """Rows of one of the measured tables: data set, then numbers as in the header."""
    with open(HERE / name, newline="", encoding="utf-8") as file:
        rows = list(csv.reader(file))[1:]
    return [(int(row[0]), *map(float, row[1:])) for row in rows]


def in_sector(radius: np.ndarray, z: np.ndarray, *,
              azimuth: np.ndarray | float = 45.0) -> np.ndarray:
    """(n, 3) places [m] at radii and stations [m] in the quarter; azimuth [degrees]."""
    radius, angle = np.maximum(np.abs(radius), 1e-6), np.radians(azimuth)
    return np.stack([radius * np.cos(angle), radius * np.sin(angle), z], axis=1)
