"""Geometry and connectivity of meshes against plain loops, VTK and formulas."""

from __future__ import annotations

import dataclasses
import itertools

import numpy as np
import pytest

from fv3d.errors import MeshError
from fv3d.mesh.generate import box
from fv3d.mesh.geometry import signed_volumes
from fv3d.mesh.mesh import Mesh, build_mesh
from fv3d.mesh.quality import check_mesh, mesh_sheet, quality

# Written down a second time on purpose, from the pictures of the VTK file format.
FACES = {
    "tetra": ["021", "013", "123", "032"],
    "hexahedron": ["0321", "4567", "0154", "1265", "2376", "3047"],
    "wedge": ["012", "354", "0341", "1452", "2530"],
    "pyramid": ["0321", "014", "124", "234", "304"],
}


def four_kinds(shake: float = 0.0) -> tuple[np.ndarray, list, dict]:
    """A hexahedron with a pyramid on top, a tetrahedron on that and a wedge beside it."""
    points = np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0],
                       [0, 0, 1], [1, 0, 1], [1, 1, 1], [0, 1, 1],
                       [0.5, 0.5, 1.7], [1.4, 0.4, 1.8], [1.8, 0, 0.1], [1.8, 1, 0.1]])
    points = points + shake * np.random.default_rng(3).uniform(-1, 1, points.shape)
    cells = [("hexahedron", np.array([[0, 1, 2, 3, 4, 5, 6, 7]])),
             ("pyramid", np.array([[4, 5, 6, 7, 8]])),
             ("tetra", np.array([[5, 6, 8, 9]])),
             ("wedge", np.array([[1, 10, 5, 2, 11, 6]]))]
    names = {"low": [np.array([[0, 1, 2, 3]])],
             "ends": [np.array([[0, 3, 7, 4], [0, 1, 5, 4], [2, 3, 7, 6]])],
             "roof": [np.array([[4, 5, 8], [6, 7, 8], [7, 4, 8], [5, 6, 9], [6, 8, 9], [8, 5, 9]])],
             "ramp": [np.array([[1, 5, 10], [2, 6, 11]]), np.array([[5, 6, 11, 10],
                                                                    [1, 2, 11, 10]])]}
    return points, cells, names


def loop_geometry(points: np.ndarray, cells: list) -> dict:
    """Faces and cells by plain loops: each face a fan of triangles about its mean point."""
    faces: dict[tuple, dict] = {}
    volumes, centres = [], []
    for kind, connectivity in cells:
        for row in connectivity:
            volume, moment = 0.0, np.zeros(3)
            for local in FACES[kind]:
                ring = [points[row[int(c)]] for c in local]
                hub = sum(ring) / len(ring)
                area, parts = np.zeros(3), []
                for k in range(len(ring)):
                    a, b = ring[k], ring[(k + 1) % len(ring)]
                    piece = 0.5 * np.cross(a - hub, b - hub)
                    area = area + piece
                    parts.append((piece, (a + b + hub) / 3))
                    tet = np.dot(hub, np.cross(a, b)) / 6.0    # cone from the origin
                    volume += tet
                    moment = moment + tet * (hub + a + b) / 4.0
                normal = area / np.linalg.norm(area)
                share = [np.dot(p, normal) for p, _ in parts]
                centre = sum(s * c for s, (_, c) in zip(share, parts)) / sum(share)
                key = tuple(sorted(int(row[int(c)]) for c in local))
                warp = sum(np.outer(c - centre, p) for p, c in parts)
                faces.setdefault(key, {"area": area, "centre": centre, "warp": warp, "cells": []})
                faces[key]["cells"].append(len(volumes))
            volumes.append(volume)
            centres.append(moment / volume)
    return {"faces": faces, "volume": volumes, "centre": centres}


@pytest.mark.parametrize("shake", [0.0, 0.08])
def test_geometry_equals_plain_loops(shake: float) -> None:
    points, cells, names = four_kinds(shake)
    mesh = build_mesh(points, cells, names)
    loops = loop_geometry(points, cells)
    number = mesh.file_index
    np.testing.assert_allclose(mesh.cell_volume, np.array(loops["volume"])[number], rtol=1e-12)
    np.testing.assert_allclose(mesh.cell_centre, np.array(loops["centre"])[number], atol=1e-12)
    assert mesh.n_faces == len(loops["faces"])
    assert mesh.warped == (shake > 0)
    for face in range(mesh.n_faces):
        ring = mesh.face_points[face]
        found = loops["faces"][tuple(sorted(int(p) for p in ring if p >= 0))]
        own = int(number[mesh.left[face]])
        sign = 1.0 if found["cells"][0] == own else -1.0
        np.testing.assert_allclose(mesh.face_area[face], sign * found["area"], atol=1e-14)
        np.testing.assert_allclose(mesh.face_centre[face], found["centre"], atol=1e-13)
        warp = mesh.warp[face] if mesh.warped else np.zeros((3, 3))
        np.testing.assert_allclose(warp, sign * found["warp"], atol=1e-13)
        if face < mesh.n_internal:
            other = int(number[mesh.right[face]])
            assert sorted(found["cells"]) == sorted([own, other])
            delta = np.array(loops["centre"][other]) - loops["centre"][own]
        else:
            assert found["cells"] == [own]
            delta = found["centre"] - loops["centre"][own]
        np.testing.assert_allclose(mesh.delta[face], delta, atol=1e-12)


def test_weight_is_exact_for_linear_fields_along_the_normal() -> None:
    mesh = build_mesh(*four_kinds(0.05))
    for face in range(mesh.n_internal):
        normal = mesh.face_normal[face]
        near, far = (normal @ mesh.cell_centre[c] for c in (mesh.left[face], mesh.right[face]))
        w = mesh.weight[face]
        assert w * near + (1 - w) * far == pytest.approx(normal @ mesh.face_centre[face], abs=1e-13)
        foot = mesh.cell_centre[mesh.left[face]] * w + mesh.cell_centre[mesh.right[face]] * (1 - w)
        np.testing.assert_allclose(mesh.skew_offset[face], mesh.face_centre[face] - foot,
                                   atol=1e-13)


def test_surface_integrals_of_a_linear_field_are_exact_on_warped_faces() -> None:
    """Gauss: over each cell the integral of x_j dS_i is the volume where i = j, else zero."""
    mesh = box((0, 0, 0), (1, 2, 1), cells=(3, 4, 3), skew=0.35, seed=2)
    assert mesh.warped
    for i, j in itertools.product(range(3), range(3)):
        over_face = mesh.face_centre[:, j] * mesh.face_area[:, i] + mesh.warp[:, j, i]
        expected = mesh.cell_volume if i == j else 0.0
        np.testing.assert_allclose(mesh.outflow @ over_face, expected, atol=1e-15)


def test_order_of_faces_and_read_only_arrays() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(3, 4, 2), tetra=True)
    assert np.all(mesh.left[:mesh.n_internal] < mesh.right)
    stops = [mesh.n_internal] + [where.stop for where in mesh.boundaries.values()]
    assert [where.start for where in mesh.boundaries.values()] == stops[:-1]
    assert stops[-1] == mesh.n_faces == mesh.n_internal + mesh.n_boundary
    outward = np.einsum("ij,ij->i", mesh.face_area, mesh.delta)
    assert np.all(outward > 0)
    for field in dataclasses.fields(Mesh):
        value = getattr(mesh, field.name)
        if isinstance(value, np.ndarray):
            assert not value.flags.writeable, field.name
    assert mesh.boundary_of_face(0) == "inside"
    assert mesh.boundary_of_face(mesh.n_faces - 1) == "z_max"


@pytest.mark.parametrize("tetra", [False, True])
def test_cells_are_closed_and_fill_the_domain(tetra: bool) -> None:
    mesh = box((-1, 0, 2), (1, 3, 3), cells=(4, 5, 3), tetra=tetra, skew=0.3, seed=5)
    assert np.abs(mesh.outflow @ mesh.face_area).max() < 1e-14
    assert mesh.cell_volume.sum() == pytest.approx(6.0, rel=1e-13)
    # Gauss: the sum of x . area over the boundary is three times the volume.
    outer = slice(mesh.n_internal, None)
    flux = np.einsum("ij,ij->", mesh.face_centre[outer], mesh.face_area[outer])
    assert flux == pytest.approx(18.0, rel=1e-12)
    first_moment = mesh.cell_volume @ mesh.cell_centre
    np.testing.assert_allclose(first_moment, 6.0 * np.array([0.0, 1.5, 2.5]), atol=1e-12)
    check_mesh(mesh)


def test_volumes_equal_those_of_vtk() -> None:
    """Outside check: cell volumes of the VTK library through pyvista."""
    pyvista = pytest.importorskip("pyvista")
    codes = {"tetra": 10, "hexahedron": 12, "wedge": 13, "pyramid": 14}
    tets = box((0, 0, 0), (1, 2, 3), cells=(3, 3, 3), tetra=True, skew=0.4)
    mixed = build_mesh(*four_kinds())
    for mesh in (tets, mixed):
        for kind, connectivity, cells in mesh.cell_blocks:
            grid = pyvista.UnstructuredGrid({codes[kind]: connectivity}, mesh.points)
            sizes = np.abs(grid.compute_cell_sizes(length=False, area=False)["Volume"])
            np.testing.assert_allclose(mesh.cell_volume[cells], sizes, rtol=1e-12)
            centres = grid.cell_centers().points
            if kind == "tetra":
                np.testing.assert_allclose(mesh.cell_centre[cells], centres, atol=1e-6)


def test_numbering_keeps_the_cells() -> None:
    plain = build_mesh(*four_kinds(), renumber=False)
    turned = build_mesh(*four_kinds(), renumber=True)
    np.testing.assert_array_equal(plain.file_index, np.arange(4))
    np.testing.assert_allclose(turned.cell_volume, plain.cell_volume[turned.file_index])
    for kind, connectivity, cells in turned.cell_blocks:
        np.testing.assert_allclose(turned.cell_volume[cells],
                                   signed_volumes(turned.points, kind, connectivity))


def test_renumbering_narrows_the_band() -> None:
    cells = [("hexahedron", np.random.default_rng(0).permutation(
        box((0, 0, 0), (1, 1, 1), cells=(8, 8, 8)).cell_blocks[0][1]))]
    source = box((0, 0, 0), (1, 1, 1), cells=(8, 8, 8))
    names = {n: [source.face_points[w]] for n, w in source.boundaries.items()}
    bands = [int((m.right - m.left[:m.n_internal]).max()) for m in
             (build_mesh(source.points, cells, names, renumber=r) for r in (False, True))]
    assert bands[1] < 100 < 400 < bands[0]


def test_many_faces_are_paired_as_by_a_dictionary() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(4, 3, 5), tetra=True)
    sides: dict[tuple, list] = {}
    for _, connectivity, cells in mesh.cell_blocks:
        for row, cell in zip(connectivity, cells):
            for three in itertools.combinations(sorted(row.tolist()), 3):
                sides.setdefault(three, []).append(int(cell))
    for face in range(mesh.n_faces):
        key = tuple(sorted(mesh.face_points[face, :3].tolist()))
        beside = [int(mesh.left[face])]
        if face < mesh.n_internal:
            beside.append(int(mesh.right[face]))
        assert sorted(sides.pop(key)) == beside
    assert not sides


def _broken(which: str) -> tuple[np.ndarray, list, dict]:
    points, cells, names = four_kinds()
    if which == "inverted":
        cells[2] = ("tetra", np.array([[6, 5, 8, 9]]))
    elif which == "flat":
        points[9] = (points[5] + points[6]) / 2
    elif which == "not finite":
        points[4, 1] = np.nan
    elif which == "no table":
        points = points[:, :2]
    elif which == "three cells":
        cells.append(("tetra", np.array([[5, 6, 8, 9]])))
    elif which == "no name":
        del names["low"]
    elif which == "two names":
        names["again"] = [np.array([[3, 2, 1, 0]])]
    elif which == "inside":
        names["low"].append(np.array([[4, 5, 6, 7]]))
    elif which == "no face":
        names["low"].append(np.array([[0, 1, 6, 7]]))
    elif which == "missing point":
        cells[0] = ("hexahedron", np.array([[0, 1, 2, 3, 4, 5, 6, 99]]))
    elif which == "unknown kind":
        cells[0] = ("hexahedron", np.array([[0, 1, 2, 3, 4, 5, 6]]))
    elif which == "text":
        points = [["a", "b", "c"]]
    elif which == "fractions":
        cells[2] = ("tetra", np.array([[5.0, 6.0, 8.0, 9.5]]))
    elif which == "twice":
        cells[0] = ("hexahedron", np.array([[0, 1, 2, 2, 4, 5, 6, 6]]))
    elif which == "far":
        points[4, 1] = 1e120
    elif which == "five corners":
        names["low"].append(np.array([[0, 1, 2, 3, 4]]))
    elif which == "face of fractions":
        names["low"] = [np.array([[0.0, 1.0, 2.0, 3.0]])]
    elif which == "face beyond":
        names["low"].append(np.array([[0, 1, 2, 99]]))
    elif which == "nameless":
        names[""] = names.pop("low")
    elif which == "no cells":
        cells = []
    return points, cells, names


@pytest.mark.parametrize("which, words", [
    ("inverted", "no positive volume"), ("flat", "no positive volume"),
    ("not finite", "not finite"), ("no table", "three coordinates"),
    ("three cells", "more than two cells"), ("no name", "have no name"),
    ("two names", "two names"), ("inside", "inside the domain"),
    ("no face", "no face of any cell"), ("missing point", "does not exist"),
    ("unknown kind", "not of a known kind"), ("no cells", "no volume cells"),
    ("text", "table of numbers"), ("fractions", "not of a known kind"), ("twice", "point twice"),
    ("far", "too far away"), ("five corners", "is damaged"), ("face of fractions", "is damaged"),
    ("face beyond", "does not exist"), ("nameless", "must be text")])
def test_bad_meshes_are_refused(which: str, words: str) -> None:
    with pytest.raises(MeshError, match=words) as caught:
        build_mesh(*_broken(which))
    assert caught.value.where and caught.value.got is not None and caught.value.remedy


def test_quality_of_a_sheared_box() -> None:
    flat = box((0, 0, 0), (1, 2, 4), cells=(4, 4, 4))
    angle = np.radians(30.0)
    points = flat.points.copy()
    points[:, 0] += np.tan(angle) * points[:, 2]
    kind, connectivity, _ = flat.cell_blocks[0]
    names = {n: [flat.face_points[w]] for n, w in flat.boundaries.items()}
    measures = quality(build_mesh(points, [(kind, connectivity)], names))
    assert measures.non_orthogonality.max() == pytest.approx(30.0)
    assert measures.skewness.max() < 1e-14
    straight = quality(flat)
    assert straight.non_orthogonality.max() < 1e-12
    np.testing.assert_allclose(straight.aspect_ratio, 4.0)


def test_quality_of_a_regular_tetrahedron() -> None:
    points = np.array([[1, 1, 1], [-1, 1, -1], [1, -1, -1], [-1, -1, 1]], dtype=float)
    mesh = build_mesh(points, [("tetra", np.array([[0, 1, 2, 3]]))],
                      {"wall": [np.array([[0, 1, 2], [0, 1, 3], [0, 2, 3], [1, 2, 3]])]})
    # Height of a regular tetrahedron: sqrt(2/3) of its edge.
    assert quality(mesh).aspect_ratio[0] == pytest.approx(np.sqrt(1.5))
    assert "1 tetrahedra" in str(mesh)


def test_skewness_is_the_distance_from_the_centre_line() -> None:
    points = np.array([[x, y, z] for z in (0, 1) for y in (0, 1) for x in (0, 1, 2)], dtype=float)
    points[[4, 10], 1] = 2.0                      # the middle plane is twice as high
    hexes = np.array([[0, 1, 4, 3, 6, 7, 10, 9], [1, 2, 5, 4, 7, 8, 11, 10]])
    names = {"wall": [np.array([[0, 1, 4, 3], [6, 7, 10, 9], [0, 1, 7, 6], [3, 4, 10, 9],
                                [0, 3, 9, 6], [1, 2, 5, 4], [7, 8, 11, 10], [1, 2, 8, 7],
                                [4, 5, 11, 10], [2, 5, 11, 8]])]}
    mesh = build_mesh(points, [("hexahedron", hexes)], names)
    # Trapezia of heights 1 and 2 (width 1): centroid at x = 5/9, y = 7/9; the face centre is
    # at (1, 1, 1/2), the line joins (5/9, 7/9) and (13/9, 7/9).
    assert quality(mesh).skewness[0] == pytest.approx((2 / 9) / (8 / 9))
    assert quality(mesh).non_orthogonality[0] == pytest.approx(0.0, abs=1e-10)


def test_sheet_names_worst_places_and_boundaries() -> None:
    mesh = build_mesh(*four_kinds())
    sheet = mesh_sheet(mesh)
    assert str(mesh) == sheet
    for words in ("1 hexahedra, 1 pyramids, 1 tetrahedra, 1 wedges", "extents", "ramp", "roof",
                  "non-orthogonality [deg]", "skewness", "aspect ratio"):
        assert words in sheet
    worst = int(np.argmax(quality(mesh).non_orthogonality))
    row = next(line for line in sheet.splitlines() if "non-orthogonality" in line)
    assert f"{quality(mesh).non_orthogonality[worst]:.3g}" in row
    assert f"({mesh.face_centre[worst, 0] + 0.0:.4g}" in row


def test_check_mesh_finds_open_and_empty_cells() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(2, 2, 2))
    area = mesh.face_area.copy()
    area[3] *= 1.001
    with pytest.raises(MeshError, match="are not closed"):
        check_mesh(dataclasses.replace(mesh, face_area=area))
    delta = mesh.delta.copy()
    delta[2] *= -1.0
    with pytest.raises(MeshError, match="wrong sides"):
        check_mesh(dataclasses.replace(mesh, delta=delta))
    volume = mesh.cell_volume.copy()
    volume[5] = -1e-3
    with pytest.raises(MeshError, match="no positive volume") as caught:
        check_mesh(dataclasses.replace(mesh, cell_volume=volume))
    assert f"cell {mesh.file_index[5]} " in caught.value.where


# ---- zones

@pytest.mark.parametrize("renumber", [False, True])
def test_zones_follow_the_numbering(renumber: bool) -> None:
    points, cells, names = four_kinds()
    zones = {"core": np.array([3, 0]), "tip": np.array([False, False, True, False])}
    mesh = build_mesh(points, cells, names, zones=zones, renumber=renumber)
    assert list(mesh.zones) == ["core", "tip"]
    assert mesh.file_index[mesh.zones["tip"]].tolist() == [2]
    assert sorted(mesh.file_index[mesh.zones["core"]].tolist()) == [0, 3]
    assert np.all(np.diff(mesh.zones["core"]) > 0) and mesh.zones["core"].dtype == np.int32
    assert not mesh.zones["core"].flags.writeable
    with pytest.raises(TypeError):
        mesh.zones["more"] = np.array([0])
    volume = float(mesh.cell_volume[mesh.zones["tip"]].sum())
    assert f"zone 'tip': 1 cells, {volume:.6g} m^3" in str(mesh)
    assert "zones: core, tip" in repr(mesh)
    assert not build_mesh(points, cells, names).zones


@pytest.mark.parametrize("zone", [
    {"a": np.array([0, 4])}, {"a": np.array([-1])}, {"a": np.array([], dtype=int)},
    {"a": np.array([0.5])}, {"a": np.array([[0, 1]])}, {"a": np.array([True, False])},
    {"": np.array([0])}, {"a": np.zeros(4, dtype=bool)}], ids=str)
def test_bad_zones_are_refused(zone: dict[str, np.ndarray]) -> None:
    points, cells, names = four_kinds()
    with pytest.raises(MeshError, match="A zone must be") as caught:
        build_mesh(points, cells, names, zones=zone)
    assert caught.value.got and caught.value.remedy
