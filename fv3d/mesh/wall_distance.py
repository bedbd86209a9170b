"""Distance to walls: exact, from points to the flat pieces of their faces."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from ..errors import MeshError, did_you_mean, expect_mesh
from .mesh import Mesh


def wall_distance(mesh: Mesh, walls: Sequence[str], *,
                  points: np.ndarray | None = None) -> np.ndarray:
    """Distance of cell centres, or of any points, to the nearest of some boundaries.

    Triangles are taken as they are, quadrilaterals as four triangles about the mean of their
    points.  Faces are searched in classes of like size, so that large faces far off do not
    lengthen the search among small ones nearby.  Across joined boundaries the images of the walls
    one translation away count, too.

    Parameters
    ----------
    mesh : Mesh
    walls : sequence of str
        Boundaries.
    points : (n, 3) [m], optional
        The cell centres if left out.

    Returns
    -------
    (n,) or (n_cells,) [m]

    Raises
    ------
    MeshError
        Not a mesh, no boundary or one the mesh does not have, points that are none.
    """
    expect_mesh(mesh, "wall_distance(mesh, walls)")
    triangles = _triangles(mesh, _checked_names(mesh, walls))
    places = mesh.cell_centre if points is None else _checked_points(points)
    centre = triangles.mean(axis=1)
    radius = np.linalg.norm(triangles - centre[:, None], axis=2).max(axis=1)
    grade = np.floor(np.log2(radius / radius.min())).astype(int)
    best = np.full(len(places), np.inf)
    for shift in _images(mesh):
        for one in np.unique(grade):
            chosen = grade == one
            _search(places + shift, triangles[chosen], centre[chosen],
                    float(radius[chosen].max()), best)
    return best


def _images(mesh: Mesh) -> list[np.ndarray]:
    """Translations to the images of a point next to it; zero first."""
    images = [np.zeros(3)]
    for pair in mesh.joined.values():
        images += [image + turn * pair.shift for image in images for turn in (-1.0, 1.0)]
    return images


def _checked_names(mesh: Mesh, walls: Any) -> list[str]:
    names = [walls] if isinstance(walls, str) else walls
    known = list(mesh.boundaries)
    if not isinstance(names, Sequence) or not len(names):
        raise MeshError("The distance needs the names of the walls.", got=repr(walls),
                        where="wall_distance(mesh, walls)",
                        remedy=f"Give a list out of {', '.join(known)}.")
    for name in names:
        if name not in known:
            raise MeshError("No such boundary.", where="wall_distance(mesh, walls)",
                            got=repr(name), remedy=f"The mesh has: {', '.join(known)}."
                                                   f"{did_you_mean(name, known)}")
    return list(names)


def _checked_points(points: Any) -> np.ndarray:
    try:
        array = np.asarray(points, dtype=float)
    except (TypeError, ValueError):
        array = np.empty(0)
    if array.ndim != 2 or array.shape[1] != 3 or not np.all(np.isfinite(array)):
        raise MeshError("Points must be a table of three finite coordinates.",
                        where="wall_distance(points=)", got=f"shape {array.shape}",
                        remedy="Give an (n, 3) array [m].")
    return array


def _triangles(mesh: Mesh, names: list[str]) -> np.ndarray:
    """(k, 3, 3) corners of the flat pieces of the faces."""
    faces = np.concatenate([np.arange(mesh.boundaries[name].start, mesh.boundaries[name].stop)
                            for name in names])
    corners = mesh.face_points[faces]
    three = corners[:, 3] < 0
    pieces = [mesh.points[corners[three, :3]]]
    ring = mesh.points[corners[~three]]
    hub = ring.mean(axis=1)
    pieces += [np.stack([hub, ring[:, k], ring[:, (k + 1) % 4]], axis=1) for k in range(4)]
    return np.concatenate(pieces)


def _search(places: np.ndarray, triangles: np.ndarray, centre: np.ndarray, reach: float,
            best: np.ndarray) -> None:
    """Lower ``best`` to the distance to these triangles where that is less.

    A triangle further off than its centre less ``reach`` cannot come nearer than that, so the
    search among the nearest centres ends where the next one is beyond ``best + reach``.
    """
    from scipy.spatial import cKDTree
    tree, done, count = cKDTree(centre), 0, min(8, len(centre))
    open_ = np.arange(len(places))
    while len(open_):
        gap, near = tree.query(places[open_], k=[*range(1, count + 1)])
        for k in range(done, count):
            _lower(places, triangles, open_, near[:, k], best)
        if count == len(centre):
            return
        open_ = open_[gap[:, -1] < best[open_] + reach]
        done, count = count, min(2 * count, len(centre))


def _lower(places: np.ndarray, triangles: np.ndarray, which: np.ndarray, near: np.ndarray,
           best: np.ndarray) -> None:
    best[which] = np.minimum(best[which], triangle_distance(places[which], triangles[near]))


def triangle_distance(points: np.ndarray, triangles: np.ndarray) -> np.ndarray:
    """(n,) distance of each point (n, 3) to its triangle (n, 3, 3) [m].

    The foot of the normal counts where it lies inside, else the nearest of the three edges.
    """
    a, b, c = triangles[:, 0], triangles[:, 1], triangles[:, 2]
    normal = np.cross(b - a, c - a)
    size = np.einsum("ij,ij->i", normal, normal)
    height = np.einsum("ij,ij->i", points - a, normal)
    inside = np.ones(len(points), bool)
    distance = np.full(len(points), np.inf)
    for start, stop in ((a, b), (b, c), (c, a)):
        edge, arm = stop - start, points - start
        inside &= np.einsum("ij,ij->i", np.cross(edge, arm), normal) >= 0.0
        length = np.einsum("ij,ij->i", edge, edge)
        share = np.clip(np.einsum("ij,ij->i", arm, edge) / np.maximum(length, 1e-300), 0.0, 1.0)
        distance = np.minimum(distance, np.linalg.norm(arm - share[:, None] * edge, axis=1))
    flat = np.abs(height) / np.sqrt(np.maximum(size, 1e-300))
    return np.where(inside & (size > 0.0), flat, distance)
