"""Files: read back equal by general tools, whole or not at all; pictures that show something."""

from __future__ import annotations

from types import SimpleNamespace

import meshio
import numpy as np
import pandas as pd
import pytest
import pyvista as pv

import fv3d.results.files as files
from fv3d.errors import CaseError, FileError, Fv3dWarning
from fv3d.measured.readings import Readings
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import build_mesh
from fv3d.results.canvas import frame_of_plane, ticks
from fv3d.results.files import vorticity, write_history, write_readings, write_vtk
from fv3d.results.pictures import picture, picture_readings
from fv3d.results.scene import surface_of

SPIN = np.array([[0.0, -2.0, 0.5], [3.0, 0.0, 0.0], [0.0, 1.0, 0.0]])  # du_i/dx_j [1/s]


def stand_in(mesh, name="plain"):
    """A linear flow: everything about it is known."""
    centre = mesh.cell_centre

    def sample(points):
        return SimpleNamespace(velocity=points @ SPIN.T, pressure=5.0 * points[:, 0])
    return SimpleNamespace(
        mesh=mesh, velocity=centre @ SPIN.T, pressure=5.0 * centre[:, 0], name=name,
        artificial_force=np.outer(centre[:, 1], [0.0, 1.0, 0.0]), sample=sample,
        velocity_gradient=lambda: np.tile(SPIN, (mesh.n_cells, 1, 1)),
        history={"iteration": np.arange(1, 4), "u": np.array([1.0, 1 / 3, 1e-17])})


def two_kinds():
    """A wedge between two hexahedra and a pyramid on top, numbered anew inside."""
    points = np.array([
        [0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0], [0, 0, 1], [1, 0, 1], [1, 1, 1], [0, 1, 1],
        [2, 0, 0], [2, 0, 1], [0.5, 0.5, 1.5], [1, -1, 0], [0, -1, 0], [1, -1, 1], [0, -1, 1]],
        dtype=float)
    cells = [("hexahedron", np.array([[0, 1, 2, 3, 4, 5, 6, 7], [12, 11, 1, 0, 14, 13, 5, 4]])),
             ("wedge", np.array([[1, 2, 8, 5, 6, 9]])), ("pyramid", np.array([[4, 5, 6, 7, 10]]))]
    faces = [[0, 3, 2, 1], [3, 0, 4, 7], [2, 3, 7, 6], [12, 11, 1, 0], [14, 13, 5, 4],
             [12, 11, 13, 14], [11, 1, 5, 13], [0, 12, 14, 4], [1, 8, 9, 5], [8, 2, 6, 9]]
    triangles = [[1, 2, 8], [5, 6, 9], [4, 5, 10], [5, 6, 10], [6, 7, 10], [7, 4, 10]]
    return points, cells, build_mesh(points, cells, {"skin": [np.array(faces),
                                                              np.array(triangles)]})


def rig():
    return Readings(pd.DataFrame({
        "x [m]": [0.2, 0.4, 0.6], "y [m]": 0.1, "z [m]": 0.1, "group": ["a", "a", "b"],
        "u [m/s]": [0.0, 0.1, 0.2], "u_std [m/s]": 0.05, "p [Pa]": [1.0, np.nan, np.nan],
        "p_std [Pa]": [0.5, np.nan, np.nan]}))


@pytest.mark.parametrize("tool", ["pyvista", "meshio"])
def test_fields_read_back_equal_in_the_order_of_the_file(tmp_path, tool):
    points, cells, mesh = two_kinds()
    run = stand_in(mesh)
    assert write_vtk(run, tmp_path / "run.vtu") == tmp_path / "run.vtu"
    assert [path.name for path in tmp_path.iterdir()] == ["run.vtu"]
    centres = np.concatenate([_centres(mesh, kind) for kind, _ in cells])
    turn = [3, 4, 5, 0, 1, 2]  # of wedges: positive for VTK's own filters
    if tool == "pyvista":
        back = pv.read(tmp_path / "run.vtu")
        read_points, data = back.points, back.cell_data
        connectivity = np.split(back.cell_connectivity, back.cell_offsets[1:-1])
    else:
        back = meshio.read(tmp_path / "run.vtu")
        read_points = back.points
        turn = [3, 5, 4, 0, 2, 1]  # meshio turns wedges when it reads VTK
        data = {key: np.concatenate(parts) for key, parts in back.cell_data.items()}
        connectivity = [row for block in back.cells for row in block.data]
    np.testing.assert_array_equal(read_points, points)
    for got, wanted in zip(connectivity, [row for _, rows in cells for row in rows], strict=True):
        turned = wanted[turn] if len(wanted) == 6 else wanted
        np.testing.assert_array_equal(got, turned)
    np.testing.assert_array_equal(data["velocity"], centres @ SPIN.T)
    np.testing.assert_array_equal(data["pressure"], 5.0 * centres[:, 0])
    np.testing.assert_array_equal(data["artificial_force"][:, 1], centres[:, 1])
    np.testing.assert_allclose(data["vorticity"], np.tile([1.0, 0.5, 5.0], (4, 1)))


def _centres(mesh, kind):
    return np.concatenate([mesh.cell_centre[numbers] for name, _, numbers in mesh.cell_blocks
                           if name == kind])


def test_vorticity_of_a_solid_rotation_is_twice_its_rate():
    rate = np.array([0.3, -1.2, 0.7])
    gradient = np.array([[0, -rate[2], rate[1]], [rate[2], 0, -rate[0]], [-rate[1], rate[0], 0]])
    np.testing.assert_allclose(vorticity(gradient[None])[0], 2 * rate)


def test_vtk_agrees_with_the_volumes_of_every_kind(tmp_path):
    """Outside check: cell volumes of the written grid by VTK's own integration."""
    _, _, mesh = two_kinds()
    write_vtk(stand_in(mesh), tmp_path / "run.vtu")
    sizes = pv.read(tmp_path / "run.vtu").compute_cell_sizes(length=False, area=False)
    np.testing.assert_allclose(sizes["Volume"], mesh.cell_volume[files.file_order(mesh)])


@pytest.mark.parametrize("ending", [".vtp", ".vtu"])
def test_readings_read_back_equal(tmp_path, ending):
    readings = rig()
    run = stand_in(box((0, 0, 0), (1, 0.2, 0.2), cells=(4, 2, 2)))
    path = write_readings(readings, tmp_path / f"rig{ending}", run=run)
    back = pv.read(path)
    np.testing.assert_array_equal(back.points, readings.point[[0, 0, 1, 2]])
    np.testing.assert_array_equal(back["value"], [0.0, 1.0, 0.1, 0.2])
    np.testing.assert_allclose(back["computed"], [-0.15, 1.0, -0.15, -0.15])
    np.testing.assert_allclose(back["misfit"], [-0.15, 0.0, -0.25, -0.35], atol=1e-15)
    np.testing.assert_allclose(back["misfit_in_std"], [-3.0, 0.0, -5.0, -7.0], atol=1e-13)
    assert list(back["label"]) == ["u", "p", "u", "u"] and list(back["group"]) == list("aaab")
    assert "computed" not in pv.read(write_readings(readings, path)).point_data


def test_history_reads_back_to_the_last_bit(tmp_path):
    run = stand_in(box((0, 0, 0), (1, 1, 1), cells=(2, 2, 2)))
    frame = pd.read_csv(write_history(run, tmp_path / "history.csv"))
    assert list(frame.columns) == ["iteration", "u"] and frame["iteration"].dtype == np.int64
    np.testing.assert_array_equal(frame["u"], run.history["u"])


def writers(run):
    return {"vtk": lambda path: write_vtk(run, path.with_suffix(".vtu")),
            "readings": lambda path: write_readings(rig(), path.with_suffix(".vtp")),
            "history": lambda path: write_history(run, path.with_suffix(".csv")),
            "picture": lambda path: picture(run, path.with_suffix(".png")),
            "scene": lambda path: picture_readings(run.mesh, rig(),
                                                   path=path.with_suffix(".png"))}


@pytest.mark.parametrize("kind", ["vtk", "readings", "history", "picture", "scene"])
def test_what_cannot_be_written_leaves_nothing(tmp_path, monkeypatch, kind):
    write = writers(stand_in(box((0, 0, 0), (1, 0.2, 0.2), cells=(2, 2, 2))))[kind]
    with pytest.raises(FileError, match="does not exist"):
        write(tmp_path / "absent" / "file")
    (tmp_path / "taken").write_text("")
    with pytest.raises(FileError):
        write(tmp_path / "taken" / "file")

    def refused(*_):
        raise PermissionError(13, "Permission denied")
    monkeypatch.setattr(files.os, "replace", refused)
    with pytest.raises(FileError, match="Permission denied"):
        write(tmp_path / "file")
    monkeypatch.setattr(files.os, "access", lambda *_: False)
    with pytest.raises(FileError, match="closed to writing"):
        write(tmp_path / "file")
    assert [path.name for path in tmp_path.iterdir()] == ["taken"]


def test_a_broken_write_keeps_the_old_file(tmp_path):
    run = stand_in(box((0, 0, 0), (1, 0.2, 0.2), cells=(2, 2, 2)))
    path = write_history(run, tmp_path / "history.csv")
    before = path.read_bytes()
    run.history["v"] = np.zeros(2)  # another length: fails after the first rows
    with pytest.raises(ValueError):
        write_history(run, path)
    assert path.read_bytes() == before and len(list(tmp_path.iterdir())) == 1


def test_wrong_endings_and_folders_are_refused(tmp_path):
    run = stand_in(box((0, 0, 0), (1, 0.2, 0.2), cells=(2, 2, 2)))
    for write in (lambda: write_vtk(run, tmp_path / "run.vtk"),
                  lambda: write_history(run, tmp_path / "run"),
                  lambda: picture(run, tmp_path / "run.jpg")):
        with pytest.raises(FileError, match=r"ending|PNG"):
            write()
    (tmp_path / "run.vtu").mkdir()
    with pytest.raises(FileError, match="folder of this name"):
        write_vtk(run, tmp_path / "run.vtu")


def pixels(path):
    from PIL import Image
    with Image.open(path) as image:
        return np.asarray(image.convert("RGB")).astype(int)


def test_picture_shows_field_readings_and_clear_margins(tmp_path):
    run = stand_in(box((0, 0, 0), (1, 0.4, 0.1), cells=(10, 4, 2)))
    bare = pixels(picture(run, tmp_path / "bare.png"))
    image = pixels(picture(run, tmp_path / "run.png", readings=rig()))
    assert image.shape[1] == 1800
    white = np.all(image == 255, axis=2)
    assert white[:, :8].all() and white[:, -8:].all() and white[:8].all() and white[-8:].all()
    # The field, 1 m by 0.4 m in true scale, fills the width: at least half of the picture.
    assert np.mean(~white) > 0.5
    orange = np.all(np.abs(image - [0xE6, 0x9F, 0x00]) < 12, axis=2)
    assert orange.sum() > 300 and np.all(np.abs(bare - [0xE6, 0x9F, 0]) < 12, axis=2).sum() < 30
    # Readings of group "a" at x = 0.2 and 0.4, y = 0.1: their marks stand where the axes say.
    columns = np.nonzero(orange[120:])[1]
    left, right = _field_columns(image)
    share = (columns - left) / (right - left)
    assert np.all((np.abs(share - 0.2) < 0.01) | (np.abs(share - 0.4) < 0.01))


def _field_columns(image):
    """First and last column of the field: those where a third of the height has a colour."""
    coloured = np.ptp(image, axis=2) > 40
    filled = np.flatnonzero(coloured.mean(axis=0) > 0.33)
    return filled[0], filled[-1]


def test_planes(tmp_path):
    run = stand_in(box((0, 0, 0), (1, 0.4, 0.3), cells=(4, 4, 4)))
    assert picture(run, tmp_path / "slant.png", plane=((0.5, 0.2, 0.15), (1, 1, 0)),
                   limits=(0.0, 1.0), title="slanted")
    for plane in (((9, 9, 9), (0, 0, 1)), ((0, 0, 0), (0, 0, 0)), "middle", ((0, 0), (1, 0)),
                  ((np.nan, 0, 0), (1, 0, 0))):
        with pytest.raises(CaseError):
            picture(run, tmp_path / "no.png", plane=plane)


def test_scene_shows_every_group(tmp_path):
    mesh = box((0, 0, 0), (1, 0.4, 0.3), cells=(4, 4, 4), tetra=True)
    image = pixels(picture_readings(mesh, rig(), path=tmp_path / "scene.png"))
    white = np.all(image == 255, axis=2)
    assert white[:, :8].all() and white[:, -8:].all() and white[:8].all() and white[-8:].all()
    red, green, blue = np.moveaxis(image, 2, 0)
    assert np.sum((red - blue > 100) & (green - blue > 60)) > 200  # orange balls
    assert np.sum((red - green > 50) & (blue - green > 20)) > 200  # purple balls
    # Outside check: the surface handed to the picture has the area of the box, by VTK.
    assert surface_of(mesh).area == pytest.approx(2 * (0.4 + 0.3 + 0.12))


def test_without_graphics_a_sentence_and_no_file(tmp_path, monkeypatch):
    run = stand_in(box((0, 0, 0), (1, 0.4, 0.3), cells=(2, 2, 2)))

    def broken(*_, **__):
        raise OSError("libGL.so.1: cannot open shared object file")
    monkeypatch.setattr(pv, "Plotter", broken)
    with pytest.warns(Fv3dWarning, match="No picture run.png"):
        assert picture(run, tmp_path / "run.png") is None
    with pytest.warns(Fv3dWarning, match="OpenGL"):
        assert picture_readings(run.mesh, rig(), path=tmp_path / "run.png") is None
    assert not list(tmp_path.iterdir())


def test_frame_lays_the_long_side_across():
    points = np.array([[0, 0, 0], [0.1, 0.0, 0.0], [0, 0, 2.0]])
    frame = frame_of_plane(points, origin=np.zeros(3), normal=np.array([0.0, 1.0, 0.0]))
    assert frame.labels == ("z [m]", "x [m]") and frame.width == 2.0 and frame.height == 0.1
    np.testing.assert_allclose(np.abs(frame.toward), [0, 1, 0])


@pytest.mark.parametrize("start, stop, most", [(0, 0.41, 2), (-0.006, 0.006, 1), (1e-9, 3e-9, 5),
                                               (-7, 1234, 8), (0.999, 1.001, 1)])
def test_ticks_are_few_round_and_inside(start, stop, most):
    marks = ticks(start, stop, most=most)
    assert 2 <= len(marks) <= most + 4
    assert marks[0] >= start - 1e-3 * (stop - start) and marks[-1] <= stop + 1e-3 * (stop - start)
    digits = f"{marks[1] - marks[0]:.6e}".split("e")[0]
    assert float(digits) in (1.0, 2.0, 5.0)
