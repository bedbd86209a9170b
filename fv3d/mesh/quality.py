"""How good a mesh is, and where it is worst."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..errors import MeshError, expect_mesh
from .mesh import Mesh
from .topology import LOCAL_FACES

_PLURAL = {"tetra": "tetrahedra", "hexahedron": "hexahedra", "wedge": "wedges",
           "pyramid": "pyramids"}
_CONE = {"tetra": 3.0, "pyramid": 3.0, "hexahedron": 1.0, "wedge": 1.0}


@dataclass(frozen=True, eq=False)
class Quality:
    """Measures of each face and cell.

    Attributes
    ----------
    non_orthogonality : (n_internal,) [deg]
        Angle between the face normal and the line that joins the cell centres.
    skewness : (n_internal,)
        Distance from the face centre to the interpolation point on that line, over its length.
    aspect_ratio : (n_cells,)
        Longest edge over smallest height; the height is the volume over the largest face,
        three times that for tetrahedra and pyramids.
    """

    non_orthogonality: np.ndarray
    skewness: np.ndarray
    aspect_ratio: np.ndarray


def quality(mesh: Mesh) -> Quality:
    """Non-orthogonality [deg], skewness and aspect ratio of a mesh.

    Parameters
    ----------
    mesh : Mesh

    Returns
    -------
    Quality

    Raises
    ------
    MeshError
        Not a mesh.
    """
    expect_mesh(mesh, "quality(mesh)")
    inside = slice(0, mesh.n_internal)
    delta, normal = mesh.delta[inside], mesh.face_normal[inside]
    length = np.linalg.norm(delta, axis=1)
    along = np.einsum("ij,ij->i", delta, normal)
    across = np.linalg.norm(delta - along[:, None] * normal, axis=1)
    return Quality(non_orthogonality=np.degrees(np.arctan2(across, along)),
                   skewness=np.linalg.norm(mesh.skew_offset, axis=1) / length,
                   aspect_ratio=_aspect_ratio(mesh))


def _aspect_ratio(mesh: Mesh) -> np.ndarray:
    largest = np.zeros(mesh.n_cells)
    np.maximum.at(largest, mesh.left, mesh.face_area_magnitude)
    np.maximum.at(largest, mesh.right, mesh.face_area_magnitude[:mesh.n_internal])
    ratio = np.empty(mesh.n_cells)
    for kind, connectivity, cells in mesh.cell_blocks:
        edges = {tuple(sorted((face[k - 1], face[k])))
                 for face in LOCAL_FACES[kind] for k in range(len(face))}
        longest = np.zeros(len(cells))
        for a, b in edges:
            edge = mesh.points[connectivity[:, a]] - mesh.points[connectivity[:, b]]
            np.maximum(longest, np.einsum("ij,ij->i", edge, edge), out=longest)
        height = _CONE[kind] * mesh.cell_volume[cells] / largest[cells]
        ratio[cells] = np.sqrt(longest) / height
    return ratio


def check_mesh(mesh: Mesh, *, source: str = "mesh") -> None:
    """Refuse cells that are not closed, folded over or without positive volume.

    Parameters
    ----------
    mesh : Mesh
    source : str
        Named in error messages.

    Raises
    ------
    MeshError
        Names the worst cell and its place.
    """
    expect_mesh(mesh, "check_mesh(mesh)")
    bad = np.flatnonzero(~(mesh.cell_volume > 0))
    if bad.size:
        _refuse(mesh, int(bad[0]), f"{bad.size} cell(s) have no positive volume.", source,
                f"volume {mesh.cell_volume[bad[0]]:.3e} m^3")
    outward, surface = np.zeros((mesh.n_cells, 3)), np.zeros(mesh.n_cells)
    for cells, faces, sign in ((mesh.left, slice(None), 1.0),
                               (mesh.right, slice(0, mesh.n_internal), -1.0)):
        surface += np.bincount(cells, mesh.face_area_magnitude[faces], mesh.n_cells)
        for axis in range(3):
            outward[:, axis] += np.bincount(cells, sign * mesh.face_area[faces, axis],
                                            mesh.n_cells)
    gap = np.linalg.norm(outward, axis=1) / surface
    worst = int(np.argmax(gap))
    if not gap[worst] < 1e-9:
        _refuse(mesh, worst, f"{np.count_nonzero(~(gap < 1e-9))} cell(s) are not closed.", source,
                f"area vectors sum to {gap[worst]:.1e} of the surface")
    inside = slice(0, mesh.n_internal)
    across = np.einsum("ij,ij->i", mesh.delta[inside], mesh.face_area[inside])
    folded = np.flatnonzero(~(across > 0))
    if folded.size:
        _refuse(mesh, int(mesh.left[folded[0]]),
                f"{folded.size} face(s) have their cells on the wrong sides.", source,
                f"face at {_place(mesh.face_centre[folded[0]])} turned by more than 90 degrees")


def _refuse(mesh: Mesh, cell: int, what: str, source: str, got: str) -> None:
    corners = next(connectivity[np.flatnonzero(cells == cell)[0]]
                   for _, connectivity, cells in mesh.cell_blocks if cell in cells)
    place = _place(mesh.points[corners].mean(axis=0))
    raise MeshError(what, where=f"{source}, cell {int(mesh.file_index[cell])} at {place}", got=got,
                    remedy="Mend the mesh there: look for flat, twisted or overlapping cells.")


def mesh_sheet(mesh: Mesh) -> str:
    """One sheet about a mesh: counts, extents, boundaries, worst places.

    Parameters
    ----------
    mesh : Mesh

    Returns
    -------
    str
        Lengths in metres.
    """
    kinds = ", ".join(f"{len(cells)} {_PLURAL[kind]}" for kind, _, cells in mesh.cell_blocks)
    lower, upper = mesh.points.min(axis=0), mesh.points.max(axis=0)
    volume = mesh.cell_volume
    lines = [f"Mesh of {kinds}; {len(mesh.points)} points, {mesh.n_internal} faces inside, "
             f"{mesh.n_boundary} on boundaries",
             "  extents  " + ", ".join(f"{axis} {low:.6g} to {high:.6g}" for axis, low, high
                                       in zip("xyz", lower, upper)) + " m",
             f"  volume   {volume.sum():.6g} m^3, cells {volume.min():.3g} to "
             f"{volume.max():.3g} m^3"]
    width = max([8, *(len(name) for name in mesh.boundaries)])
    lines.append(f"  {'boundary':<{width}}  {'faces':>8}  {'area [m^2]':>12}")
    for name, where in mesh.boundaries.items():
        area = mesh.face_area_magnitude[where].sum()
        lines.append(f"  {name:<{width}}  {where.stop - where.start:>8}  {area:>12.6g}")
    for name, chosen in mesh.zones.items():
        lines.append(f"  zone '{name}': {len(chosen)} cells, {volume[chosen].sum():.6g} m^3")
    lines.append(f"  {'cells':<24}  {'median':>8}  {'worst':>8}  at [m]")
    lines += _worst_lines(mesh)
    return "\n".join(lines)


def _worst_lines(mesh: Mesh) -> list[str]:
    measures = quality(mesh)
    rows = (("non-orthogonality [deg]", measures.non_orthogonality, mesh.face_centre),
            ("skewness", measures.skewness, mesh.face_centre),
            ("aspect ratio", measures.aspect_ratio, mesh.cell_centre))
    lines = []
    for label, values, places in rows:
        if not len(values):
            continue
        worst = int(np.argmax(values))
        lines.append(f"  {label:<24}  {round(float(np.median(values)), 6):>8.3g}  "
                     f"{round(float(values[worst]), 6):>8.3g}  "
                     f"{_place(places[worst])}")
    return lines


def _place(point: np.ndarray) -> str:
    return "(" + ", ".join(f"{x + 0.0:.4g}" for x in point) + ")"
