"""Mesh files: anything meshio reads, turned into a checked mesh with named boundaries."""

from __future__ import annotations

import contextlib
import io
import os
import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import connected_components

from ..errors import MeshError, as_number
from .geometry import signed_volumes
from .mesh import Mesh, build_mesh
from .quality import check_mesh
from .read_groups import cell_zones, named_surfaces, renamed, sorted_elements
from .surfaces import between_zones, boundary_map, unnamed_surfaces, without_interfaces

_TURNED = {"tetra": [0, 2, 1, 3], "hexahedron": [4, 5, 6, 7, 0, 1, 2, 3],
           "wedge": [3, 4, 5, 0, 1, 2], "pyramid": [0, 3, 2, 1, 4]}


def read_mesh(path: str | os.PathLike[str], *, scale: float = 1.0,
              names: Mapping[int | str, str] | None = None,
              feature_angle: float = 30.0) -> Mesh:
    """Read a volume mesh with named boundaries and check it.

    Boundary names come from physical groups, cell sets or integer tags of the surface
    elements in the file, in this order; an integer tag ``3`` without a name becomes
    ``"tag 3"``.  Without any of these every flat region of the surface becomes a boundary,
    ``"surface 1"`` the largest.  Where names are missing a map of the boundaries is printed
    by which they can be told apart and named in ``names``.

    Groups of volume cells become the zones of the mesh: by name, or ``"zone 3"`` where there
    are several integer tags without names.  Elements of higher order are reduced to their
    corners with a warning.

    ==================  ===========================================================
    file                carries
    ==================  ===========================================================
    msh 2.2, 4.1        names of boundaries and zones (physical groups)
    med                 names of boundaries and zones (families)
    inp                 names of boundaries and zones (sets); no pyramids
    vtu, vtk, xdmf      integer tags: name them in ``names``
    mesh, bdf           integer tags; bdf keeps twelve digits of the coordinates
    ==================  ===========================================================

    Parameters
    ----------
    path : path
        A file of any format meshio reads, with tetrahedra, hexahedra, wedges or pyramids and
        the triangles or quadrilaterals of the boundaries.
    scale : float
        Multiplies the coordinates to give metres, ``1e-3`` for a file in millimetres.
    names : mapping of tag or name in the file to boundary or zone name
        Boundaries given the same name become one.  A tag means the boundary, or the zone if
        no boundary has it.
    feature_angle : float [deg]
        Where nothing is named: neighbouring faces whose normals differ by less belong to one
        boundary.

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
    if not isinstance(path, str | os.PathLike) or not isinstance(names or {}, Mapping):
        raise MeshError("The arguments make no sense.", where="read_mesh",
                        got=f"path {path!r}, names {names!r}",
                        remedy="Give the path of a file and names={3: 'inlet', ...}.")
    path = Path(path)
    if not 0.0 < as_number(scale) < np.inf:
        raise MeshError("The scale must be a positive number.", where=str(path), got=scale,
                        remedy="Give the metres per unit of the file, 1e-3 for millimetres.")
    raw = _read_raw(path)
    source = path.name
    points = _checked_points(raw.points, source) * float(scale)
    names = names or {}
    elements = sorted_elements(raw.cells, source)
    found = named_surfaces(raw, elements, source)
    groups = cell_zones(raw, elements, source, wanted=[key for key in names if key not in found])
    points, cells, found = _compact(points, [(kind, conn) for _, kind, conn in elements.cells],
                                    found, source)
    cells = [(kind, _outward(points, kind, conn)) for kind, conn in cells]
    if not found:
        found = unnamed_surfaces(points, cells, feature_angle=feature_angle, source=source)
    boundaries, zones = renamed(found, groups, names, source)
    if len(zones) > 1:
        interface = between_zones(cells, points, zones.values(), source=source)
        boundaries = without_interfaces(boundaries, interface, source=source)
    mesh = build_mesh(points, cells, boundaries, zones=zones, source=source)
    check_mesh(mesh, source=source)
    _check_one_piece(mesh, source)
    nameless = [name for name in mesh.boundaries if name in _own_labels(found)]
    if nameless:
        print(f"{source}: {len(nameless)} boundaries without a name; give "
              f"names={{'{nameless[0]}': ...}}\n{boundary_map(mesh)}")
    return mesh


def _own_labels(found: Mapping[int | str, object]) -> set[str]:
    """Labels made up here for what the file does not name."""
    return {str(key) if isinstance(key, str) else f"tag {key}" for key in found
            if not isinstance(key, str) or key.startswith("surface ")}


def meshio_with_all_kinds() -> Any:
    """The meshio module; its table of dimensions lacks three of the kinds its formats know."""
    import meshio
    try:
        from meshio._mesh import topological_dimension
    except ImportError:                                 # a version that keeps it elsewhere
        return meshio
    for kind in ("wedge12", "wedge15", "pyramid13"):
        topological_dimension.setdefault(kind, 3)
    return meshio


def _read_raw(path: Path) -> Any:
    """What meshio makes of the file; whatever it does on failure becomes our error."""
    if not path.is_file():
        raise MeshError("There is no such mesh file.", where=str(path),
                        got="a folder" if path.is_dir() else "no file", remedy="Check the path.")
    if path.stat().st_size == 0:
        raise MeshError("The mesh file is empty.", where=str(path), got="0 bytes",
                        remedy="Write the mesh again from the mesher.")
    meshio = meshio_with_all_kinds()
    said = io.StringIO()
    try:
        with (contextlib.redirect_stdout(said), contextlib.redirect_stderr(said),
              warnings.catch_warnings(), np.errstate(all="ignore")):
            warnings.simplefilter("ignore")
            raw = meshio.read(path)
    except (Exception, SystemExit) as reason:
        failure, remedy = _failure(path, reason)
    else:
        text = " ".join(said.getvalue().split())
        if "cannot handle" in text:                    # such elements were left out
            raise MeshError("The file has elements that cannot be used.", where=str(path),
                            got=text[:300],
                            remedy="Export tetrahedra, hexahedra, wedges or pyramids.")
        return raw
    known = sorted(meshio.extension_to_filetypes)
    if not any(path.name.lower().endswith(extension) for extension in known):
        raise MeshError("The kind of the mesh file is not known.", where=str(path),
                        got=f"ending '{path.suffix}'",
                        remedy=f"Use one of {', '.join(known)}.")
    raise MeshError("The mesh file cannot be read.", where=str(path), got=failure, remedy=remedy)


def _failure(path: Path, reason: BaseException) -> tuple[str, str]:
    """What was got and what to do, in our own words, where the file could not be read."""
    if isinstance(reason, ImportError):
        return (f"no Python package '{reason.name}', which this kind of file needs",
                f"Install it (pip install {reason.name}) or export another kind of file.")
    if isinstance(reason, PermissionError):
        return "no permission to read the file", "Ask for it, or copy the file."
    if isinstance(reason, MemoryError):
        return f"{path.stat().st_size} bytes, too many for the memory", "Use a larger machine."
    return (f"{path.stat().st_size} bytes that are no whole '{path.suffix}' file",
            "The file is damaged, cut off or not what its ending says: write it again from the "
            "mesher.")


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


def _compact(points: np.ndarray, cells: list[tuple[str, np.ndarray]],
             boundaries: dict[int | str, list[np.ndarray]], source: str) -> tuple[
                 np.ndarray, list[tuple[str, np.ndarray]], dict[int | str, list[np.ndarray]]]:
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


def _outward(points: np.ndarray, kind: str, conn: np.ndarray) -> np.ndarray:
    """Cells turned over if all are inside out: file formats disagree about their order."""
    with np.errstate(all="ignore"):                    # what is not finite is refused later
        volume = signed_volumes(points, kind, conn)
    return conn[:, _TURNED[kind]] if np.all(volume < 0) else conn


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
