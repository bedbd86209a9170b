"""Elements, named surfaces and cell zones of a mesh file, as meshio hands them on."""

from __future__ import annotations

import re
import warnings
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..errors import Fv3dWarning, MeshError
from .topology import CELL_KINDS, POINTS_PER_CELL

_CORNERS = {**POINTS_PER_CELL, "triangle": 3, "quad": 4}
_LEFT_OUT = re.compile(r"vertex|line\d*")
_HIGH_ORDER = re.compile(r"(tetra|hexahedron|wedge|pyramid|triangle|quad)\d+")
_TAG_KEYS = ("gmsh:physical", "cell_tags", "medit:ref", "nastran:ref", "gmsh:geometrical")
_GROUP_KEYS = ("gmsh:physical", "cell_tags")           # tag 0 means no group
_MOST_ZONES = 256

Label = int | str


@dataclass(frozen=True, eq=False)
class Elements:
    """Blocks of elements and their position in the file.

    Attributes
    ----------
    cells : list of (position, kind, connectivity)
    surfaces : list of (position, connectivity)
    """

    cells: list[tuple[int, str, np.ndarray]]
    surfaces: list[tuple[int, np.ndarray]]


def sorted_elements(blocks: Iterable[Any], source: str) -> Elements:
    """Volume and surface elements, those of higher order reduced to their corners.

    Raises
    ------
    MeshError
        Elements of other kinds, damaged tables, no volume.
    """
    cells: list[tuple[int, str, np.ndarray]] = []
    surfaces: list[tuple[int, np.ndarray]] = []
    reduced: dict[str, int] = {}
    for position, block in enumerate(blocks):
        if _LEFT_OUT.fullmatch(block.type):
            continue
        kind = block.type
        if _HIGH_ORDER.fullmatch(kind):
            reduced[kind] = reduced.get(kind, 0) + len(block.data)
            kind = kind.rstrip("0123456789")
        if kind not in _CORNERS:
            raise MeshError("The file has elements that cannot be used.", where=source,
                            got=f"{len(block.data)} of kind {block.type}",
                            remedy="Export tetrahedra, hexahedra, wedges or pyramids.")
        table = _whole_numbers(block.data, source)[:, :_CORNERS[kind]]
        if not len(table):
            continue
        if kind in CELL_KINDS:
            cells.append((position, kind, table))
        else:
            surfaces.append((position, table))
    if not cells:
        raise MeshError("The file has no volume cells.", where=source,
                        got=f"{sum(len(table) for _, table in surfaces)} surface elements",
                        remedy="Export the volume mesh, not only its surface.")
    if reduced:
        warnings.warn(
            f"{source}: elements of higher order are reduced to their corners ("
            + ", ".join(f"{count} {kind}" for kind, count in reduced.items())
            + "); curved faces become flat.", Fv3dWarning, stacklevel=3)
    return Elements(cells, surfaces)


def _whole_numbers(table: Any, source: str) -> np.ndarray:
    table = np.asarray(table)
    if table.ndim != 2 or not np.issubdtype(table.dtype, np.integer):
        raise MeshError("A table of elements is damaged.", where=source,
                        got=f"{table.dtype} of shape {table.shape}",
                        remedy="Write the mesh again from the mesher.")
    return table.astype(np.int64)


def named_surfaces(raw: Any, elements: Elements, source: str) -> dict[Label, list[np.ndarray]]:
    """Faces under each name of the file: sets first, then tags for what is left."""
    found: dict[Label, list[np.ndarray]] = {}
    groups = _group_names(raw, dimension=2)
    all_tags = _tags(raw, [(position, len(faces)) for position, faces in elements.surfaces])
    for position, faces in elements.surfaces:
        covered = np.zeros(len(faces), dtype=bool)
        for name, members in _sets(raw, position, len(faces), source):
            found.setdefault(name, []).append(faces[members])
            covered[members] = True
        tags = all_tags.get(position, np.zeros(len(faces), dtype=np.int64))
        if position not in all_tags or any(key in raw.cell_data for key in _GROUP_KEYS):
            covered |= tags == 0
        for tag in np.unique(tags[~covered]):
            label = groups.get(int(tag), [int(tag)])[0]
            found.setdefault(label, []).append(faces[~covered & (tags == tag)])
    return found


def cell_zones(raw: Any, elements: Elements, source: str, *,
               wanted: Collection[Label] = ()) -> dict[Label, np.ndarray]:
    """Cells of each volume group, by name, else by integer tag where there are several.

    ``wanted`` tags are groups even if there is only one.
    """
    found: dict[Label, list[np.ndarray]] = {}
    groups = _group_names(raw, dimension=3)
    sizes = [(position, len(conn)) for position, _, conn in elements.cells]
    starts = dict(zip((position for position, _ in sizes),
                      np.cumsum([0] + [size for _, size in sizes]).tolist()))
    all_tags = _tags(raw, sizes)
    for position, size in sizes:
        for name, members in _sets(raw, position, size, source):
            found.setdefault(name, []).append(starts[position] + members)
        tags = all_tags.get(position, np.zeros(size, dtype=np.int64))
        for tag in np.unique(tags):
            for name in groups.get(int(tag), []):
                found.setdefault(name, []).append(starts[position] + np.flatnonzero(tags == tag))
    if not found:
        tags = np.concatenate([all_tags.get(position, np.zeros(size, dtype=np.int64))
                               for position, size in sizes])
        present = np.unique(tags[tags != 0]).tolist()
        several = 1 < len(np.unique(tags)) <= min(_MOST_ZONES, len(tags) / 2)
        found = {tag: [np.flatnonzero(tags == tag)] for tag in present
                 if several or tag in wanted or f"zone {tag}" in wanted}
    return {label: np.unique(np.concatenate(parts)) for label, parts in found.items()}


def _sets(raw: Any, position: int, size: int, source: str) -> list[tuple[str, np.ndarray]]:
    """Name and members of each set that reaches into a block."""
    found = []
    for name, sets in raw.cell_sets.items():
        if name.startswith("gmsh:") or position >= len(sets) or sets[position] is None:
            continue
        members = np.asarray(sets[position])
        members = np.flatnonzero(members) if members.dtype == bool else members.astype(int)
        if members.size and (members.min() < 0 or members.max() >= size):
            raise MeshError("A set refers to an element that does not exist.", where=source,
                            got=f"set '{name}'", remedy="Write the mesh again, each set once.")
        if members.size:
            found.append((str(name), members))
    return found


def _tags(raw: Any, sizes: list[tuple[int, int]]) -> dict[int, np.ndarray]:
    """Integer tags of the first kind the file has, for each block; 0 of a group is none."""
    for key in (*_TAG_KEYS, *(key for key in raw.cell_data if key not in _TAG_KEYS)):
        found = {}
        for position, size in sizes:
            tags = np.asarray(raw.cell_data[key][position] if key in raw.cell_data else [])
            if (tags.shape == (size,) and tags.dtype.kind in "iuf"
                    and np.all(np.isfinite(tags)) and np.array_equal(tags, np.round(tags))):
                found[position] = tags.astype(np.int64)
        every = np.concatenate([*found.values()]) if found else np.empty(0)
        if key in _GROUP_KEYS and not np.any(every):
            continue
        if key not in _TAG_KEYS and len(every) > 6 and len(np.unique(every)) == len(every):
            continue                                    # a numbering of the elements
        if found:
            return found
    return {}


def _group_names(raw: Any, *, dimension: int) -> dict[int, list[str]]:
    """Names the file gives to the tags of its groups of one dimension."""
    names: dict[int, list[str]] = {}
    for name, entry in raw.field_data.items():
        entry = np.ravel(entry)
        if len(entry) >= 2 and entry[1] == dimension:
            names.setdefault(int(entry[0]), []).append(str(name))
    for tag, families in getattr(raw, "cell_tags", {}).items():
        if families:
            names.setdefault(int(tag), [str(family) for family in families])
    return names


def renamed(surfaces: dict[Label, list[np.ndarray]], zones: dict[Label, np.ndarray],
            names: Mapping[Label, str], source: str) -> tuple[
                dict[str, list[np.ndarray]], dict[str, np.ndarray]]:
    """Boundaries and zones under their final names.

    A key of ``names`` means the boundary of that tag or name, or the zone if there is none.
    """
    label_of = [{key: key if isinstance(key, str) else f"{word} {key}" for key in found}
                for word, found in (("tag", surfaces), ("zone", zones))]
    key_of = [{**{label: key for key, label in labels.items()}, **{key: key for key in labels}}
              for labels in label_of]
    offered = ", ".join(repr(label) for labels in label_of for label in labels.values())
    for old, new in names.items():
        if not isinstance(new, str) or not new:
            raise MeshError("A boundary name must be text.", where=source, got=repr(new),
                            remedy="Give names={3: 'inlet', ...}.")
        hit = [k for k in range(2) if old in key_of[k]][:1]
        if not hit:
            raise MeshError("There is no such boundary to rename.", where=source, got=repr(old),
                            remedy=f"The file has {offered}.")
        label_of[hit[0]][key_of[hit[0]][old]] = new
    boundaries: dict[str, list[np.ndarray]] = {}
    for key, arrays in surfaces.items():
        boundaries.setdefault(label_of[0][key], []).extend(arrays)
    cells: dict[str, list[np.ndarray]] = {}
    for key, members in zones.items():
        cells.setdefault(label_of[1][key], []).append(members)
    return boundaries, {name: np.unique(np.concatenate(parts)) for name, parts in cells.items()}
