"""Mesh files: anything meshio reads, turned into a checked mesh with named boundaries."""

from __future__ import annotations

import contextlib
import io
import os
import warnings
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import connected_components

from ..errors import MeshError
from .geometry import signed_volumes
from .mesh import Mesh, build_mesh
from .quality import check_mesh
from .topology import CELL_KINDS

_SURFACE = {"triangle": 3, "quad": 4}
_LEFT_OUT = ("vertex", "line")
_TAG_KEYS = ("gmsh:physical", "cell_tags", "medit:ref", "gmsh:geometrical")
_GROUP_KEYS = ("gmsh:physical", "cell_tags")           # tag 0 means no group


def read_mesh(path: str | os.PathLike[str], *, scale: float = 1.0,
              names: Mapping[int | str, str] | None = None) -> Mesh:
    """Read a volume mesh with named boundaries and check it.

    Boundary names come from physical groups, cell sets or integer tags of the surface
    elements in the file, in this order; an integer tag ``3`` without a name becomes
    ``"tag 3"``.

    Parameters
    ----------
    path : path
        A file of any format meshio reads, with tetrahedra, hexahedra, wedges or pyramids and
        the triangles or quadrilaterals of the boundaries.
    scale : float
        Multiplies the coordinates to give metres, ``1e-3`` for a file in millimetres.
    names : mapping of tag or name in the file to boundary name
        Boundaries given the same name become one.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        A file that cannot be read, a cell without positive volume or not closed, a boundary
        face without a name or with two, a mesh that falls into parts.

    Examples
    --------
    >>> read_mesh("duct.msh")
    Traceback (most recent call last):
    fv3d.errors.MeshError: There is no such mesh file.
      where:  duct.msh
      got:    no file
      remedy: Check the path.
    """
    path = Path(path)
    if not (np.isfinite(scale) and scale > 0):
        raise MeshError("The scale must be a positive number.", where=str(path), got=scale,
                        remedy="Give the metres per unit of the file, 1e-3 for millimetres.")
    raw = _read_raw(path)
    source = path.name
    points = _checked_points(raw.points, source) * float(scale)
    cells, surfaces = _sorted_blocks(raw.cells, source)
    if not surfaces:
        raise MeshError("The file has no surface elements, so no boundary has a name.",
                        where=source, got="volume cells only",
                        remedy="Export the boundary surfaces as named groups with the volume.")
    boundaries = _renamed(_named_surfaces(raw, surfaces, source), names or {}, source)
    points, cells, boundaries = _compact(points, cells, boundaries, source)
    cells = [(kind, _wedges_outward(points, kind, conn)) for kind, conn in cells]
    mesh = build_mesh(points, cells, boundaries, source=source)
    check_mesh(mesh, source=source)
    _check_one_piece(mesh, source)
    return mesh


def _read_raw(path: Path) -> Any:
    """What meshio makes of the file; whatever it does on failure becomes our error."""
    if not path.is_file():
        raise MeshError("There is no such mesh file.", where=str(path),
                        got="a folder" if path.is_dir() else "no file", remedy="Check the path.")
    if path.stat().st_size == 0:
        raise MeshError("The mesh file is empty.", where=str(path), got="0 bytes",
                        remedy="Write the mesh again from the mesher.")
    import meshio
    said = io.StringIO()
    try:
        with (contextlib.redirect_stdout(said), contextlib.redirect_stderr(said),
              warnings.catch_warnings(), np.errstate(all="ignore")):
            warnings.simplefilter("ignore")
            return meshio.read(path)
    except (Exception, SystemExit) as reason:
        text = " ".join(said.getvalue().split()) or str(reason)
        failure = f"{type(reason).__name__}: {text[:300]}"
    known = sorted(meshio.extension_to_filetypes)
    if not any(path.name.lower().endswith(extension) for extension in known):
        raise MeshError("The kind of the mesh file is not known.", where=str(path),
                        got=f"ending '{path.suffix}'",
                        remedy=f"Use one of {', '.join(known)}.")
    raise MeshError("The mesh file cannot be read.", where=str(path), got=failure,
                    remedy="The file is damaged, cut off or not what its ending says: write it "
                           "again from the mesher.")


def _checked_points(points: Any, source: str) -> np.ndarray:
    try:
        points = np.array(points, dtype=np.float64)
    except (TypeError, ValueError):
        points = np.empty((0, 0))
    if points.ndim != 2 or points.shape[1] not in (2, 3) or not len(points):
        raise MeshError("The file has no table of points.", where=source,
                        got=f"shape {points.shape}", remedy="Write the mesh again.")
    if points.shape[1] == 2:
        raise MeshError("The mesh is plane.", where=source, got="points of two coordinates",
                        remedy="Sweep it one cell deep: fv3d computes in three dimensions.")
    return points


def _sorted_blocks(blocks: Iterable[Any], source: str) -> tuple[
        list[tuple[str, np.ndarray]], list[tuple[int, np.ndarray]]]:
    """Volume blocks, and surface blocks with their position in the file."""
    cells, surfaces = [], []
    for position, block in enumerate(blocks):
        if block.type in CELL_KINDS:
            cells.append((block.type, _whole_numbers(block.data, source)))
        elif block.type in _SURFACE:
            surfaces.append((position, _whole_numbers(block.data, source)))
        elif block.type not in _LEFT_OUT:
            raise MeshError("The file has elements that cannot be used.", where=source,
                            got=f"{len(block.data)} of kind {block.type}",
                            remedy="Export first-order tetrahedra, hexahedra, wedges or pyramids "
                                   "(switch second-order elements off in the mesher).")
    if not any(len(conn) for _, conn in cells):
        raise MeshError("The file has no volume cells.", where=source,
                        got=f"{sum(len(s) for _, s in surfaces)} surface elements",
                        remedy="Export the volume mesh, not only its surface.")
    return cells, [(position, conn) for position, conn in surfaces if len(conn)]


def _whole_numbers(table: Any, source: str) -> np.ndarray:
    table = np.asarray(table)
    if table.ndim != 2 or not np.issubdtype(table.dtype, np.integer):
        raise MeshError("A table of elements is damaged.", where=source,
                        got=f"{table.dtype} of shape {table.shape}",
                        remedy="Write the mesh again from the mesher.")
    return table.astype(np.int64)


def _named_surfaces(raw: Any, surfaces: list[tuple[int, np.ndarray]],
                    source: str) -> dict[int | str, list[np.ndarray]]:
    """Faces under each name of the file: sets first, then tags for what is left."""
    found: dict[int | str, list[np.ndarray]] = {}
    groups, all_tags = _group_names(raw), _tags(raw, surfaces)
    for position, faces in surfaces:
        covered = np.zeros(len(faces), dtype=bool)
        for name, sets in raw.cell_sets.items():
            if name.startswith("gmsh:") or position >= len(sets) or sets[position] is None:
                continue
            members = np.asarray(sets[position])
            members = np.flatnonzero(members) if members.dtype == bool else members.astype(int)
            if members.size and (members.min() < 0 or members.max() >= len(faces)):
                raise MeshError("A set refers to an element that does not exist.", where=source,
                                got=f"set '{name}'", remedy="Write the mesh again.")
            if members.size:
                found.setdefault(name, []).append(faces[members])
                covered[members] = True
        tags = all_tags.get(position, np.zeros(len(faces), dtype=np.int64))
        if position not in all_tags or any(key in raw.cell_data for key in _GROUP_KEYS):
            covered |= tags == 0
        for tag in np.unique(tags[~covered]):
            label = groups.get(int(tag), int(tag))
            found.setdefault(label, []).append(faces[~covered & (tags == tag)])
    if not found:
        raise MeshError("No boundary has a name.", where=source,
                        got=f"{sum(len(f) for _, f in surfaces)} surface elements without "
                            "physical group, set or integer tag",
                        remedy="Name the boundaries in the mesher before the export.")
    return found


def _tags(raw: Any, surfaces: list[tuple[int, np.ndarray]]) -> dict[int, np.ndarray]:
    """Integer tags of the first kind the file has, for each surface block; 0 of a group is none."""
    for key in (*_TAG_KEYS, *(key for key in raw.cell_data if key not in _TAG_KEYS)):
        found = {}
        for position, faces in surfaces:
            tags = np.asarray(raw.cell_data[key][position] if key in raw.cell_data else [])
            if (tags.shape == (len(faces),) and tags.dtype.kind in "iuf"
                    and np.all(np.isfinite(tags)) and np.array_equal(tags, np.round(tags))):
                found[position] = tags.astype(np.int64)
        if found and (key not in _GROUP_KEYS or any(np.any(tags) for tags in found.values())):
            return found
    return {}


def _group_names(raw: Any) -> dict[int, str]:
    """Names the file gives to the tags of its surface groups."""
    names = {}
    for name, entry in raw.field_data.items():
        entry = np.ravel(entry)
        if len(entry) >= 2 and entry[1] == 2:
            names[int(entry[0])] = str(name)
    for tag, families in getattr(raw, "cell_tags", {}).items():
        if families:
            names.setdefault(int(tag), str(families[0]))
    return names


def _renamed(found: dict[int | str, list[np.ndarray]], names: Mapping[int | str, str],
             source: str) -> dict[str, list[np.ndarray]]:
    labels: dict[int | str, str] = {key: key if isinstance(key, str) else f"tag {key}"
                                    for key in found}
    wanted: dict[int | str, int | str] = {label: key for key, label in labels.items()}
    wanted.update((key, key) for key in found)
    for old, new in names.items():
        if old not in wanted:
            raise MeshError("There is no such boundary to rename.", where=source, got=repr(old),
                            remedy=f"The file has {', '.join(map(repr, labels.values()))}.")
        if not isinstance(new, str) or not new:
            raise MeshError("A boundary name must be text.", where=source, got=repr(new),
                            remedy="Give names={3: 'inlet', ...}.")
        labels[wanted[old]] = new
    boundaries: dict[str, list[np.ndarray]] = {}
    for key, arrays in found.items():
        boundaries.setdefault(labels[key], []).extend(arrays)
    return boundaries


def _compact(points: np.ndarray, cells: list[tuple[str, np.ndarray]],
             boundaries: dict[str, list[np.ndarray]], source: str) -> tuple[
                 np.ndarray, list[tuple[str, np.ndarray]], dict[str, list[np.ndarray]]]:
    """The same without points that belong to nothing, such as centres of arcs."""
    tables = [conn for _, conn in cells] + [f for arrays in boundaries.values() for f in arrays]
    numbers = np.concatenate([table.ravel() for table in tables])
    if numbers.min() < 0 or numbers.max() >= len(points):
        bad = int(numbers.min() if numbers.min() < 0 else numbers.max())
        raise MeshError("An element refers to a point that does not exist.", where=source,
                        got=f"point {bad} of {len(points)}",
                        remedy="The file is damaged: write the mesh again.")
    used = np.zeros(len(points), dtype=bool)
    used[numbers] = True
    new = np.cumsum(used) - 1
    return (points[used], [(kind, new[conn]) for kind, conn in cells],
            {name: [new[f] for f in arrays] for name, arrays in boundaries.items()})


def _wedges_outward(points: np.ndarray, kind: str, conn: np.ndarray) -> np.ndarray:
    """Wedges turned over if all are inside out: file formats disagree about their order."""
    if kind == "wedge" and np.all(signed_volumes(points, kind, conn) < 0):
        return conn[:, [3, 4, 5, 0, 1, 2]]
    return conn


def _check_one_piece(mesh: Mesh, source: str) -> None:
    ones = np.ones(mesh.n_internal, dtype=np.int8)
    graph = sparse.coo_matrix((ones, (mesh.left[:mesh.n_internal], mesh.right)),
                              shape=(mesh.n_cells, mesh.n_cells))
    parts, label = connected_components(graph, directed=False)
    if parts > 1:
        count = np.bincount(label)
        small = int(np.argmin(count))
        place = np.round(mesh.cell_centre[np.argmax(label == small)], 6).tolist()
        raise MeshError(f"The mesh falls into {parts} parts that share no face.",
                        where=f"{source}, near {place}", got=f"{int(count[small])} cell(s) there",
                        remedy="Join the parts (merge coincident points) or export one of them.")
