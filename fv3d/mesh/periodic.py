"""Boundaries joined by a translation: their faces become internal ones."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType

import numpy as np

from ..errors import MeshError, expect_mesh
from .mesh import Mesh, Pair, read_only, with_geometry

TOLERANCE = 1e-4  # of the size of a face: how far matching points may lie apart


@dataclass(frozen=True, eq=False)
class _Match:
    """Faces ``near`` of one boundary, the partner's ``far`` they fall upon; pairs of points.

    Faces are counted from the first of their boundary.
    """

    name: str
    partner: str
    shift: np.ndarray
    near: np.ndarray
    far: np.ndarray
    points: np.ndarray


def join_periodic(mesh: Mesh, pairs: Mapping[str, str]) -> Mesh:
    """The mesh with pairs of boundaries joined face to face.

    What leaves through the one boundary enters through the other.  Points of the partners are
    moved onto the translated points where they are off by rounding.  The cells keep their numbers.

    Parameters
    ----------
    pairs : mapping of boundary name to the name of its partner

    Returns
    -------
    Mesh
        Without the joined boundaries; ``mesh.joined`` describes them.

    Raises
    ------
    MeshError
        A name that is no boundary, faces that do not fall upon those of the partner, fewer than
        three cells from one boundary to the other.
    """
    expect_mesh(mesh, "join_periodic(mesh, pairs)")
    if not isinstance(pairs, Mapping):
        raise MeshError("Pairs are given as a mapping of one boundary to its partner.",
                        where="join_periodic(pairs)", got=repr(pairs)[:60],
                        remedy="Give {'left': 'right'}, with curly brackets.")
    matches = [_match(mesh, name, partner) for name, partner in pairs.items()]
    points = np.array(mesh.points)
    for match in matches:
        points[match.points[:, 1]] = points[match.points[:, 0]] + match.shift
    if not mesh.joined and np.any(points != mesh.points):
        mesh = with_geometry(points, mesh.cell_blocks, np.array(mesh.face_points),
                             np.array(mesh.left), np.array(mesh.right), dict(mesh.boundaries),
                             mesh.zones)
    for match in matches:
        mesh = _as_internal(mesh, match)
    return mesh


def _match(mesh: Mesh, name: str, partner: str) -> _Match:
    for one in (name, partner):
        if one not in mesh.boundaries:
            raise MeshError("A boundary to be joined is not in the mesh.", got=repr(one),
                            where=f"boundaries '{name}' and '{partner}'",
                            remedy=f"The mesh has: {', '.join(mesh.boundaries)}.")
    where = f"boundaries '{name}' and '{partner}'"
    near, far = (np.arange(mesh.boundaries[one].start, mesh.boundaries[one].stop)
                 for one in (name, partner))
    if name == partner or len(near) != len(far):
        raise MeshError("Boundaries can be joined face to face only.", where=where,
                        got=f"{len(near)} and {len(far)} faces",
                        remedy="Make both with the same surface mesh, a translation apart.")
    middle = [np.average(mesh.face_centre[faces], axis=0, weights=mesh.face_area_magnitude[faces])
              for faces in (near, far)]
    shift = middle[1] - middle[0]
    far = far[_nearest(mesh.face_centre[near] + shift, mesh.face_centre[far],
                       np.sqrt(mesh.face_area_magnitude[near]), shift, (name, partner))]
    if np.any(mesh.face_area[near] @ shift >= 0.0):
        bad = near[int(np.argmax(mesh.face_area[near] @ shift))]
        raise MeshError("The translation between joined boundaries must lead through the domain.",
                        where=f"'{name}' at {_place(mesh.face_centre[bad])}",
                        got=f"translation {_place(shift)} m along or out of this face",
                        remedy="Join boundaries that face each other.")
    used, image = _points_of(mesh, near), _points_of(mesh, far)
    size = np.full(len(used), np.sqrt(mesh.face_area_magnitude[near].min()))
    image = image[_nearest(mesh.points[used] + shift, mesh.points[image], size, shift,
                           (name, partner))]
    twin = np.full(len(mesh.points) + 1, -1)
    twin[used] = image
    same = np.sort(twin[mesh.face_points[near]], axis=1) == np.sort(mesh.face_points[far], axis=1)
    if not np.all(same):
        bad = near[int(np.argmin(same.all(axis=1)))]
        raise MeshError("A face to be joined has other corners than its partner.",
                        where=f"'{name}' at {_place(mesh.face_centre[bad])}",
                        got=f"no such face of '{partner}'",
                        remedy="Make both with the same surface mesh, a translation apart.")
    return _Match(name, partner, shift, near - near[0], far - far.min(),
                  np.column_stack([used, image]))


def _points_of(mesh: Mesh, faces: np.ndarray) -> np.ndarray:
    corners = np.unique(mesh.face_points[faces])
    return corners[corners >= 0]


def _nearest(wanted: np.ndarray, given: np.ndarray, size: np.ndarray, shift: np.ndarray,
             names: tuple[str, str]) -> np.ndarray:
    """(n,) place of each wanted point among the given ones, each taken once."""
    from scipy.spatial import cKDTree
    distance, place = cKDTree(given).query(wanted)
    worst = int(np.argmax(distance / size))
    if distance[worst] > TOLERANCE * size[worst] or len(np.unique(place)) < len(given):
        raise MeshError("Joined boundaries do not fall upon each other.",
                        where=f"'{names[0]}' at {_place(wanted[worst] - shift)}",
                        got=f"moved by {_place(shift)} m it misses '{names[1]}' by "
                            f"{distance[worst]:.2g} m",
                        remedy="Make both with the same surface mesh, a translation apart.")
    return np.asarray(place)


def _place(point: np.ndarray) -> list[float]:
    return [float(value) for value in np.round(point, 6)]


def _as_internal(mesh: Mesh, match: _Match) -> Mesh:
    """The mesh with matched boundary faces as internal ones, in the order of their cells."""
    n = mesh.n_internal
    near = match.near + mesh.boundaries[match.name].start
    far = match.far + mesh.boundaries[match.partner].start
    ahead = mesh.left[far] < mesh.left[near]
    own, other = np.where(ahead, far, near), np.where(ahead, near, far)
    left = np.concatenate([mesh.left[:n], mesh.left[own]])
    right = np.concatenate([mesh.right, mesh.left[other]])
    key = left.astype(np.int64) * mesh.n_cells + right
    _check_period(mesh, match, key, left, right)
    arm = mesh.face_centre[own] - mesh.cell_centre[mesh.left[own]]
    delta = arm - (mesh.face_centre[other] - mesh.cell_centre[mesh.left[other]])
    before = np.abs(np.einsum("ij,ij->i", arm, mesh.face_area[own]))
    behind = np.abs(np.einsum("ij,ij->i", delta - arm, mesh.face_area[own]))
    order = np.argsort(key, kind="stable")
    rest = np.setdiff1d(np.arange(n, mesh.n_faces), np.concatenate([near, far]))
    take = np.concatenate([np.concatenate([np.arange(n), own])[order], rest])
    moved = np.empty(len(order), dtype=np.int32)
    moved[order] = np.arange(len(order))
    pair = Pair(match.partner, match.shift, read_only(moved[n:]),
                read_only(np.where(ahead, 1.0, -1.0)), read_only(mesh.face_points[other]),
                read_only(match.points.astype(np.int32)))
    joined = {name: replace(old, faces=read_only(moved[old.faces]))
              for name, old in mesh.joined.items()} | {match.name: pair}
    inner = np.concatenate([mesh.weight, behind / (before + behind)])
    return replace(
        mesh, face_points=read_only(mesh.face_points[take]), left=read_only(mesh.left[take]),
        right=read_only(right[order]), face_area=read_only(mesh.face_area[take]),
        face_centre=read_only(mesh.face_centre[take]),
        delta=read_only(np.concatenate([np.concatenate([mesh.delta[:n], delta])[order],
                                        mesh.delta[rest]])),
        weight=read_only(inner[order]), warp=mesh.warp[take] if mesh.warped else mesh.warp,
        boundaries=_remaining(mesh, match, len(order)), joined=MappingProxyType(joined))


def _check_period(mesh: Mesh, match: _Match, key: np.ndarray, left: np.ndarray,
                  right: np.ndarray) -> None:
    """A cell cannot be its own neighbour, nor a neighbour twice."""
    _, first, count = np.unique(key, return_index=True, return_counts=True)
    bad = np.concatenate([np.flatnonzero(left == right), first[count > 1]])
    if bad.size:
        raise MeshError("Joined boundaries need three cells from one to the other.",
                        where=f"boundaries '{match.name}' and '{match.partner}', near "
                              f"{_place(mesh.cell_centre[left[bad[0]]])}",
                        got="a cell that would be its own neighbour" if left[bad[0]]
                        == right[bad[0]] else "two cells with two common faces",
                        remedy="Mesh the period with three layers, or give Symmetry() to both.")


def _remaining(mesh: Mesh, match: _Match, start: int) -> Mapping[str, slice]:
    slices = {}
    for name, faces in sorted(mesh.boundaries.items(), key=lambda item: item[1].start):
        if name not in (match.name, match.partner):
            slices[name] = slice(start, start + faces.stop - faces.start)
            start = slices[name].stop
    return MappingProxyType({name: slices[name] for name in mesh.boundaries if name in slices})
