"""Fields, readings and histories to files that general tools read.

Every file is written aside, in the same folder, and renamed when it is whole.
"""

from __future__ import annotations

import csv
import os
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import CaseError, FileError, expect_readings, expect_run
from ..measured.readings import Readings, observe
from ..mesh.mesh import Mesh

VTK_CELL_TYPE = {"tetra": 10, "hexahedron": 12, "wedge": 13, "pyramid": 14}  # VTK file formats

PathLike = str | os.PathLike[str]


def write_vtk(run: Any, path: PathLike, *,
              fields: Mapping[str, np.ndarray] | None = None) -> Path:
    """Write the fields of a run as a VTK unstructured grid (``.vtu``).

    Cells stand in the order of the mesh file and points keep its numbers.  Cell data:
    ``velocity`` [m/s], ``pressure`` [Pa], ``vorticity`` [1/s], ``artificial_force`` [m/s^2].

    Parameters
    ----------
    run : Run
    path : path ending in ``.vtu``
    fields : mapping of name to (n_cells,) or (n_cells, 3) array, optional
        More cell data in the mesh's own numbering, such as a scalar or the wall distance.

    Returns
    -------
    Path
        Of the file.

    Raises
    ------
    CaseError
        Not a run; a field of another length or under a name that is taken.
    FileError
        The folder does not exist, the file cannot be written, or another ending.
    """
    expect_run(run, "write_vtk(run, path)")
    target = target_path(path, (".vtu",))
    own = {"velocity": run.velocity, "pressure": run.pressure,
           "vorticity": vorticity(run.velocity_gradient()),
           "artificial_force": run.artificial_force}
    grid = vtk_grid(run.mesh, cell_data=own | _more_fields(run.mesh, fields, own))
    return write_aside(target, lambda aside: write_xml(grid, aside))


def _more_fields(mesh: Mesh, fields: Any, taken: Mapping[str, Any]) -> dict[str, np.ndarray]:
    """Further cell data, checked."""
    if fields is not None and not isinstance(fields, Mapping):
        raise CaseError("Further fields are a mapping of name to array.", got=type(fields).__name__,
                        where="write_vtk(fields=)", remedy="Give {'smoke': scalar.values}, say.")
    more = {}
    for name, values in (fields or {}).items():
        try:
            more[name] = np.asarray(values, dtype=float)
        except (TypeError, ValueError):
            more[name] = np.empty(0)
        if name in taken or more[name].shape not in ((mesh.n_cells,), (mesh.n_cells, 3)):
            raise CaseError("A further field needs a name of its own and a value per cell.",
                            where=f"write_vtk(fields=), {name!r}",
                            got=f"shape {more[name].shape} for {mesh.n_cells} cells",
                            remedy=f"Give an (n_cells,) or (n_cells, 3) array; "
                                   f"{', '.join(taken)} are taken.")
    return more


def write_readings(readings: Readings, path: PathLike, *, run: Any = None) -> Path:
    """Write readings as VTK points (``.vtp`` or ``.vtu``), one point per component.

    Point data: ``value``, ``std``, ``direction``, ``quantity`` (0 velocity component, 1 speed,
    2 pressure), ``label``, ``name``, ``group``, ``time``; with a run also ``computed``,
    ``misfit`` (computed minus measured) and ``misfit_in_std``.

    Parameters
    ----------
    readings : Readings
    path : path ending in ``.vtp`` or ``.vtu``
    run : Run, optional

    Returns
    -------
    Path

    Raises
    ------
    FileError
        The folder does not exist, the file cannot be written, or another ending.
    ReadingError
        Not a table of readings, or with a run: a reading outside its mesh.
    """
    import pyvista as pv
    expect_readings(readings, "write_readings(readings, path)")
    target = target_path(path, (".vtp", ".vtu"))
    row = readings.component_place
    points = pv.PolyData(np.array(readings.point[row]))
    data = points.point_data
    data["value"], data["std"] = readings.component_value, readings.component_std
    data["direction"] = np.nan_to_num(readings.component_direction)
    data["quantity"], data["time"] = readings.component_quantity, readings.time[row]
    if run is not None:
        data["computed"] = observe(run, readings)
        data["misfit"] = data["computed"] - readings.component_value
        data["misfit_in_std"] = data["misfit"] / readings.component_std
    data["label"] = np.array(readings.component_label)
    data["name"] = np.array([readings.name[k] for k in row])
    data["group"] = np.array([readings.group[k] for k in row])
    whole = points.cast_to_unstructured_grid() if target.suffix == ".vtu" else points
    return write_aside(target, lambda aside: write_xml(whole, aside))


def write_history(run: Any, path: PathLike) -> Path:
    """Write the history of a run as CSV: one column per quantity, one row per iteration.

    Parameters
    ----------
    run : Run
    path : path ending in ``.csv``

    Returns
    -------
    Path

    Raises
    ------
    FileError
        The folder does not exist, the file cannot be written, or another ending.
    """
    expect_run(run, "write_history(run, path)")
    target = target_path(path, (".csv",))
    columns = {name: np.asarray(column).tolist() for name, column in run.history.items()}

    def write(aside: Path) -> None:
        with open(aside, "w", newline="", encoding="utf-8") as file:
            writer = csv.writer(file)
            writer.writerow(columns)
            writer.writerows(zip(*columns.values(), strict=True))
    return write_aside(target, write)


def vorticity(gradient: np.ndarray) -> np.ndarray:
    """(n, 3) curl of the velocity [1/s] from its gradient (n, 3, 3), [c, i, j] = du_i/dx_j."""
    return np.stack([gradient[:, 2, 1] - gradient[:, 1, 2],
                     gradient[:, 0, 2] - gradient[:, 2, 0],
                     gradient[:, 1, 0] - gradient[:, 0, 1]], axis=1)


def vtk_grid(mesh: Mesh, *, cell_data: dict[str, np.ndarray] | None = None) -> Any:
    """The mesh as a pyvista unstructured grid, cells in the order of the mesh file.

    Parameters
    ----------
    mesh : Mesh
    cell_data : mapping of name to (n_cells,) or (n_cells, 3) array, optional
        In the mesh's own cell numbering.
    """
    import pyvista as pv
    cells, types = [], []
    for kind, connectivity, _ in mesh.cell_blocks:
        if kind == "wedge":  # the turn VTK's own filters count as a positive volume
            connectivity = connectivity[:, [3, 4, 5, 0, 1, 2]]
        count = np.full((len(connectivity), 1), connectivity.shape[1])
        cells.append(np.hstack([count, connectivity]).ravel())
        types.append(np.full(len(connectivity), VTK_CELL_TYPE[kind], dtype=np.uint8))
    grid = pv.UnstructuredGrid(np.concatenate(cells), np.concatenate(types),
                               np.array(mesh.points))
    order = file_order(mesh)
    for name, values in (cell_data or {}).items():
        grid.cell_data[name] = np.ascontiguousarray(values[order])
    return grid


def file_order(mesh: Mesh) -> np.ndarray:
    """(n_cells,) the mesh's own number of each cell, in the order of the mesh file."""
    return np.argsort(mesh.file_index)


def write_xml(data: Any, path: Path) -> None:
    """Write a VTK data set in its XML format, binary and compressed."""
    from vtkmodules.vtkIOXML import vtkXMLPolyDataWriter, vtkXMLUnstructuredGridWriter
    writer = vtkXMLPolyDataWriter() if path.suffix == ".vtp" else vtkXMLUnstructuredGridWriter()
    writer.SetFileName(str(path))
    writer.SetInputData(data)
    if not writer.Write() or writer.GetErrorCode():
        raise OSError(f"the VTK writer stopped with error {writer.GetErrorCode()}")


def target_path(path: PathLike, endings: tuple[str, ...]) -> Path:
    """The path of a file to write, its ending and its folder checked.

    Raises
    ------
    FileError
        Another ending, no path, a folder that is missing or closed.
    """
    target = as_path(path)
    if target.suffix.lower() not in endings:
        raise FileError("The ending of the file does not fit what is written.", where=str(target),
                        got=target.suffix or "no ending", remedy=f"Use {' or '.join(endings)}.")
    check_folder(target)
    return target


def as_path(path: PathLike) -> Path:
    """The path of a file to write.

    Raises
    ------
    FileError
        Something that is no path.
    """
    if not isinstance(path, str | os.PathLike):
        raise FileError("The file to write must be given by its path.", where="path",
                        got=type(path).__name__, remedy="Give a text such as 'flow.vtu', after "
                                                        "what is to be written.")
    return Path(path)


def check_folder(target: Path) -> None:
    """Refuse a file whose folder is missing or closed to us, or that is itself a folder.

    Raises
    ------
    FileError
    """
    if not target.parent.is_dir():
        raise FileError("The folder of the file does not exist.", where=str(target),
                        got=str(target.parent), remedy="Make the folder first or mend the path.")
    if not os.access(target.parent, os.W_OK):
        raise FileError("The folder of the file is closed to writing.", where=str(target),
                        got=str(target.parent), remedy="Choose another folder or ask for "
                                                       "permission to write there.")
    if target.is_dir():
        raise FileError("There is a folder of this name.", where=str(target), got="a folder",
                        remedy="Choose another name for the file.")


def write_aside(target: Path, write: Callable[[Path], None]) -> Path:
    """Write to a temporary name beside the target, then rename: whole or not at all."""
    aside = target.with_name(f".{target.stem}.{os.getpid()}.part{target.suffix}")
    try:
        write(aside)
        os.replace(aside, target)
    except OSError as error:
        raise FileError("The file cannot be written.", where=str(target),
                        got=error.strerror or str(error),
                        remedy="Check permissions and free space of the folder.") from None
    finally:
        aside.unlink(missing_ok=True)
    return target
