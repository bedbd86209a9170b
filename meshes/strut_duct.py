"""Write ``strut_duct.msh``: a duct of 120 x 24 x 16 mm with a round strut of 4 mm across it.

The file is in millimetres: ``fv3d.read_mesh("meshes/strut_duct.msh", scale=1e-3)``.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import fv3d

LENGTH, HEIGHT, DEPTH, DIAMETER = 120.0, 24.0, 16.0, 4.0  # [mm]
AXIS = (30.0, 9.5)                                        # of the strut, x and y [mm]


def strut_duct(*, around: int, layers: int, coarsest: float, unit: float = 1.0,
               first_layer: float | None = None, tetra: bool = False) -> fv3d.Mesh:
    """The duct with ``inlet, outlet, walls, sides, strut``.

    ``around`` cells lie around the strut, ``layers`` along it, none longer along the stream
    than ``coarsest`` [mm], those on the strut ``first_layer`` [mm] thick; ``unit`` is the length
    of a millimetre in the points of the mesh.
    """
    grading = None if tetra else fv3d.TwoSided(3)
    mesh = fv3d.channel_with_cylinder(
        length=LENGTH * unit, height=HEIGHT * unit, depth=DEPTH * unit, diameter=DIAMETER * unit,
        centre=(AXIS[0] * unit, AXIS[1] * unit), around=around, layers=layers,
        depth_grading=grading, coarsest=coarsest * unit, tetra=tetra,
        first_layer=None if first_layer is None else first_layer * unit)
    names = {"cylinder": "strut"}
    return replace(mesh, boundaries={names.get(name, name): faces
                                     for name, faces in mesh.boundaries.items()})


if __name__ == "__main__":
    target = Path(__file__).with_suffix(".msh")
    mesh = strut_duct(around=32, layers=10, coarsest=3.0)
    fv3d.write_mesh(mesh, target)
    print(mesh, target, sep="\n")
