"""Generated meshes against formulas for their volumes, areas and cell sizes."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from fv3d.errors import MeshError
from fv3d.mesh.blocks import Block, join_blocks
from fv3d.mesh.cut import to_tetra
from fv3d.mesh.generate import box
from fv3d.mesh.generate_channel import channel_with_block, channel_with_cylinder
from fv3d.mesh.generate_nozzle import nozzle
from fv3d.mesh.geometry import signed_volumes
from fv3d.mesh.grading import OneSided, Spacing, TwoSided, Uniform, line
from fv3d.mesh.mesh import Mesh
from fv3d.mesh.quality import check_mesh, quality

# Geometry of the benchmark of Schaefer and Turek (1996), plane case.
PLANE = {"length": 2.2, "height": 0.41, "depth": 0.02, "centre": (0.2, 0.2), "diameter": 0.1}
# Geometry of the benchmark nozzle (Hariharan et al., 2011): pipe, 20 degree cone, throat, step.
SECTIONS = [(-0.1227, 0.006), (-0.0627, 0.006), (-0.04, 0.002), (0.0, 0.002), (0.0, 0.006),
            (0.1, 0.006)]
AXIAL = Spacing(at=(-0.1227, -0.0627, -0.04, -0.008, 0.0, 0.006, 0.03, 0.1),
                size=(0.006, 0.002, 0.0012, 0.0014, 0.0004, 0.0006, 0.0016, 0.004))


def areas(mesh: Mesh) -> dict[str, float]:
    return {name: float(mesh.face_area_magnitude[where].sum())
            for name, where in mesh.boundaries.items()}


def growth(mesh: Mesh) -> np.ndarray:
    """(n_internal,) larger over smaller volume of the cells beside a face."""
    a, b = mesh.cell_volume[mesh.left[:mesh.n_internal]], mesh.cell_volume[mesh.right]
    return np.maximum(a / b, b / a)


def polygon(corners: int) -> float:
    """Area of a regular polygon over that of the circle through its corners."""
    return np.sin(2 * np.pi / corners) * corners / (2 * np.pi)


# ---- gradings

def test_two_sided_is_symmetric_with_the_given_ratio() -> None:
    step = np.diff(TwoSided(5.0).nodes(1.0, 3.0, 400))
    np.testing.assert_allclose(step, step[::-1], rtol=1e-9)
    assert step.max() / step[0] == pytest.approx(5.0, rel=0.02)
    assert step.sum() == pytest.approx(2.0)


@pytest.mark.parametrize("ratio", [0.2, 1.0, 7.0])
def test_one_sided_is_a_geometric_progression(ratio: float) -> None:
    step = np.diff(OneSided(ratio).nodes(-1.0, 1.0, 20))
    np.testing.assert_allclose(step[1:] / step[:-1], ratio ** (1 / 20), rtol=1e-9)
    assert step.sum() == pytest.approx(2.0)


def test_spacing_gives_the_wanted_sizes() -> None:
    wish = Spacing(at=(0.0, 1.0), size=(0.01, 0.11))
    cells = wish.wanted_cells(0.0, 1.0)
    # Number of cells of size a + g x: ln(b / a) / g.
    assert cells == round(np.log(11.0) / 0.1)
    nodes = wish.nodes(0.0, 1.0, cells)
    middle = 0.5 * (nodes[1:] + nodes[:-1])
    np.testing.assert_allclose(np.diff(nodes), 0.01 + 0.1 * middle, rtol=0.02)


@pytest.mark.parametrize("grading", [Uniform(), TwoSided(4), OneSided(6),
                                     Spacing((0.2, 0.5), (0.05, 0.1))])
def test_families_are_nested(grading: Any) -> None:
    coarse, fine = grading.nodes(0.0, 2.0, 7), grading.nodes(0.0, 2.0, 21)
    np.testing.assert_allclose(fine[::3], coarse, atol=1e-12)


@pytest.mark.parametrize("bad", [
    lambda: line(0.0, 1.0, cells=0), lambda: line(1.0, 1.0, cells=3),
    lambda: line(0.0, np.nan, cells=3),
    lambda: line(0.0, 1.0, cells=2, grading=np.array([0.0, 0.5, 0.9])),
    lambda: line(0.0, 1.0, cells=2, grading=np.array([0.0, 0.0, 1.0])),
    lambda: TwoSided(0.5).nodes(0, 1, 4), lambda: OneSided(-1).nodes(0, 1, 4),
    lambda: Spacing((0.0, 0.0), (1.0, 1.0)), lambda: Spacing((0.0,), (1.0, 2.0)),
    lambda: Spacing((0.0, 1.0), (1.0, 0.0))])
def test_bad_gradings_are_refused(bad: Callable[[], Any]) -> None:
    with pytest.raises(MeshError) as caught:
        bad()
    assert caught.value.where and caught.value.remedy


# ---- box

def test_box_names_and_areas() -> None:
    mesh = box((0, 0, 0), (1, 2, 3), cells=(2, 3, 4),
               names={"y_max": "lid", "x_min": "walls", "x_max": "walls"})
    assert areas(mesh) == pytest.approx({"walls": 12.0, "y_min": 3.0, "lid": 3.0, "z_min": 2.0,
                                         "z_max": 2.0})
    assert (mesh.n_cells, mesh.n_boundary) == (24, 2 * (12 + 8 + 6))
    lid = mesh.boundaries["lid"]
    np.testing.assert_allclose(mesh.face_normal[lid], [[0.0, 1.0, 0.0]] * 8, atol=1e-15)
    np.testing.assert_allclose(mesh.face_centre[lid, 1], 2.0)


def test_box_takes_gradings_and_nodes() -> None:
    nodes = np.array([0.0, 0.1, 0.4, 1.0])
    mesh = box((0, 0, 0), (1, 1, 1), cells=(3, 4, 2), grading=(nodes, OneSided(3.0), None))
    np.testing.assert_allclose(np.unique(mesh.points[:, 0]), nodes)
    np.testing.assert_allclose(np.unique(mesh.points[:, 1]), OneSided(3.0).nodes(0, 1, 4))


def test_skew_keeps_the_sides_and_is_repeatable() -> None:
    straight = box((0, 0, 0), (1, 1, 1), cells=(5, 5, 5))
    one, same, other = (box((0, 0, 0), (1, 1, 1), cells=(5, 5, 5), skew=0.3, seed=s)
                        for s in (1, 1, 2))
    np.testing.assert_array_equal(one.points, same.points)
    assert np.abs(one.points - other.points).max() > 0.05
    shift = np.abs(one.points - straight.points)
    assert 0.05 < shift.max() <= 0.3 * 0.2
    assert areas(one) == pytest.approx(areas(straight))
    assert quality(one).non_orthogonality.max() > 10
    thin = box((0, 0, 0), (1, 1, 0.1), cells=(6, 6, 1), skew=0.3)
    assert set(np.unique(thin.points[:, 2])) == {0.0, 0.1}
    low, high = thin.points[thin.points[:, 2] == 0], thin.points[thin.points[:, 2] > 0]
    np.testing.assert_array_equal(low[:, :2], high[:, :2])


@pytest.mark.parametrize("bad", [
    {"cells": (2, 0, 2)}, {"cells": (2, 2, 2), "names": {"top": "lid"}},
    {"cells": (2, 2, 2), "skew": 0.5}, {"cells": (2, 2, 2), "skew": -0.1},
    {"cells": (2, 2)}, {"cells": 4}, {"cells": (2, 2, 2), "grading": (None, None)},
    {"cells": (2, 2, 2), "upper": (1, 1)}, {"cells": (2, 2, "many")},
    {"cells": (2, 2, 2), "grading": (np.linspace(0, 2, 3), None, None)}])
def test_bad_boxes_are_refused(bad: dict[str, Any]) -> None:
    with pytest.raises(MeshError):
        box(**{"lower": (0, 0, 0), "upper": (1, 1, 1), **bad})


# ---- tetrahedra

def test_tetrahedra_fill_shuffled_hexahedra() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(3, 3, 3), skew=0.2)
    order = np.random.default_rng(4).permutation(len(mesh.points))
    points = np.empty_like(mesh.points)
    points[order] = mesh.points
    hexes = order[mesh.cell_blocks[0][1]]
    tets, triangles = to_tetra(hexes, {"wall": order[mesh.face_points[mesh.n_internal:]]})
    volume = signed_volumes(points, "tetra", tets)
    assert len(tets) == 6 * len(hexes) and volume.min() > 0
    assert volume.sum() == pytest.approx(1.0)
    faces: dict[tuple, int] = {}
    for row in tets:
        for three in ((0, 1, 2), (0, 1, 3), (0, 2, 3), (1, 2, 3)):
            key = tuple(sorted(row[list(three)].tolist()))
            faces[key] = faces.get(key, 0) + 1
    assert set(faces.values()) == {1, 2}
    outer = {tuple(sorted(row.tolist())) for row in triangles["wall"]}
    assert outer == {key for key, count in faces.items() if count == 1}


@pytest.mark.parametrize("make", [
    lambda tetra: channel_with_cylinder(**PLANE, around=32, tetra=tetra),
    lambda tetra: channel_with_block(length=1.0, height=0.4, depth=0.3, lower=(0.2, 0.1, 0.1),
                                     upper=(0.3, 0.2, 0.2), first_layer=0.03, tetra=tetra),
    lambda tetra: nozzle(SECTIONS, core=2, axial=AXIAL, tetra=tetra),
    lambda tetra: nozzle(SECTIONS, core=2, quadrants=2, axial=AXIAL, tetra=tetra)])
def test_tetrahedra_equal_hexahedra_in_volume_and_areas(make: Callable[[bool], Mesh]) -> None:
    hexes, tets = make(False), make(True)
    assert tets.n_cells == 6 * hexes.n_cells
    assert tets.cell_volume.min() > 0
    assert tets.cell_volume.sum() == pytest.approx(hexes.cell_volume.sum(), rel=1e-12)
    assert areas(tets) == pytest.approx(areas(hexes), rel=1e-12)
    for mesh in (hexes, tets):
        check_mesh(mesh)


# ---- cylinder

def test_cylinder_volume_and_areas() -> None:
    mesh = channel_with_cylinder(**PLANE, around=64)
    body = polygon(64) * np.pi * 0.05 ** 2
    assert mesh.cell_volume.sum() == pytest.approx((2.2 * 0.41 - body) * 0.02, rel=1e-12)
    assert areas(mesh) == pytest.approx({
        "inlet": 0.41 * 0.02, "outlet": 0.41 * 0.02, "walls": 2 * 2.2 * 0.02,
        "sides": 2 * (2.2 * 0.41 - body), "cylinder": 64 * 0.1 * np.sin(np.pi / 64) * 0.02})
    wall = mesh.boundaries["cylinder"]
    assert wall.stop - wall.start == 64
    radius = np.hypot(*(mesh.points[np.unique(mesh.face_points[wall]), :2] - 0.2).T)
    np.testing.assert_allclose(radius, 0.05, rtol=1e-12)
    assert np.all(mesh.face_centre[mesh.boundaries["inlet"], 0] == 0)
    np.testing.assert_allclose(mesh.face_centre[mesh.boundaries["outlet"], 0], 2.2)


def test_cylinder_mesh_is_smooth_and_a_family() -> None:
    coarse, fine = (channel_with_cylinder(**PLANE, refinement=r) for r in (1, 2))
    assert fine.n_cells == 4 * coarse.n_cells < 25_000
    wall = fine.boundaries["cylinder"]
    assert wall.stop - wall.start == 192
    for mesh in (coarse, fine):
        measures = quality(mesh)
        assert measures.non_orthogonality.max() < 25
        assert measures.skewness.max() < 0.25
    assert np.quantile(growth(fine), 0.99) < 1.15 and growth(fine).max() < 1.3
    # The wall cells and the radial growth.
    layer = 2 * np.linalg.norm(fine.delta[wall], axis=1)
    assert layer.max() / layer.min() < 2.0
    ray = np.abs(fine.cell_centre[:, 1] - 0.2) < 0.004
    ray &= (fine.cell_centre[:, 0] > 0.25) & (fine.cell_centre[:, 0] < 0.3)
    x = np.unique(fine.cell_centre[ray, 0].round(5))
    x = x[np.concatenate([[True], np.diff(x) > 1e-4])]
    step = np.diff(x)
    assert len(step) > 15 and np.all(step[1:] / step[:-1] < 1.15)


def test_cylinder_in_three_dimensions() -> None:
    mesh = channel_with_cylinder(length=2.5, height=0.41, depth=0.41, centre=(0.5, 0.2),
                                 diameter=0.1, around=32, layers=10, depth_grading=TwoSided(4))
    levels = np.unique(mesh.points[:, 2])
    np.testing.assert_allclose(levels, TwoSided(4).nodes(0, 0.41, 10))
    body = polygon(32) * np.pi * 0.05 ** 2
    assert mesh.cell_volume.sum() == pytest.approx((2.5 * 0.41 - body) * 0.41, rel=1e-12)


@pytest.mark.parametrize("change", [
    {"diameter": 0.5}, {"diameter": -0.1}, {"centre": (0.02, 0.2)}, {"around": 30},
    {"layers": 0}, {"refinement": 0}, {"depth": 0.0}, {"refinement": 1.5}])
def test_bad_cylinders_are_refused(change: dict[str, Any]) -> None:
    with pytest.raises(MeshError):
        channel_with_cylinder(**{**PLANE, **change})


# ---- block

def test_block_volume_and_areas() -> None:
    mesh = channel_with_block(length=2.0, height=0.5, depth=0.1, lower=(0.4, 0.2),
                              upper=(0.5, 0.3), first_layer=0.01, wall_layer=0.01)
    assert mesh.cell_volume.sum() == pytest.approx((1.0 - 0.01) * 0.1)
    assert areas(mesh) == pytest.approx({"inlet": 0.05, "outlet": 0.05, "walls": 0.4,
                                         "sides": 2 * 0.99, "block": 0.04})
    assert quality(mesh).non_orthogonality.max() < 1e-6
    assert growth(mesh).max() < 1.2
    layer = 2 * np.linalg.norm(mesh.delta[mesh.boundaries["block"]], axis=1)
    np.testing.assert_allclose(layer, 0.01, rtol=0.1)
    fine = channel_with_block(length=2.0, height=0.5, depth=0.1, lower=(0.4, 0.2),
                              upper=(0.5, 0.3), first_layer=0.01, wall_layer=0.01, refinement=3)
    assert fine.n_cells == 9 * mesh.n_cells


def test_block_on_the_wall_makes_a_step() -> None:
    mesh = channel_with_block(length=2.0, height=0.5, depth=0.1, lower=(0, 0), upper=(0.5, 0.25),
                              first_layer=0.02)
    assert mesh.cell_volume.sum() == pytest.approx((1.0 - 0.125) * 0.1)
    assert areas(mesh) == pytest.approx({"inlet": 0.025, "outlet": 0.05, "walls": 0.35,
                                         "sides": 2 * 0.875, "block": 0.075})


def test_block_inside_the_depth() -> None:
    mesh = channel_with_block(length=1.0, height=0.4, depth=0.3, lower=(0.2, 0.1, 0.1),
                              upper=(0.3, 0.2, 0.2), first_layer=0.02)
    assert mesh.cell_volume.sum() == pytest.approx(0.12 - 0.001)
    assert areas(mesh)["block"] == pytest.approx(0.06)
    check_mesh(mesh)


@pytest.mark.parametrize("change", [
    {"upper": (0.1, 0.3)}, {"upper": (0.5, 0.9)}, {"lower": (0.4, 0.0), "upper": (0.5, 0.5)},
    {"first_layer": 0.0}, {"growth": 1.0}, {"layers": -1}, {"lower": (0.4, 0.2, 0.0)}])
def test_bad_blocks_are_refused(change: dict[str, Any]) -> None:
    good = {"length": 2.0, "height": 0.5, "depth": 0.1, "lower": (0.4, 0.2), "upper": (0.5, 0.3),
            "first_layer": 0.02}
    with pytest.raises(MeshError):
        channel_with_block(**{**good, **change})


# ---- nozzle

def revolution_volume() -> float:
    """Frusta of the contour."""
    total = 0.0
    for (z0, a), (z1, b) in itertools.pairwise(SECTIONS):
        total += np.pi * (z1 - z0) * (a * a + a * b + b * b) / 3.0
    return total


@pytest.mark.parametrize("quadrants", [1, 2, 4])
def test_nozzle_volume_and_areas(quadrants: int) -> None:
    mesh = nozzle(SECTIONS, core=3, quadrants=quadrants, axial=AXIAL)
    share = quadrants / 4.0 * polygon(24)
    assert mesh.cell_volume.sum() == pytest.approx(share * revolution_volume(), rel=1e-10)
    found = areas(mesh)
    assert found["inlet"] == pytest.approx(share * np.pi * 0.006 ** 2)
    assert found["outlet"] == pytest.approx(found["inlet"])
    flat = 2.0 * sum((z1 - z0) * (a + b) / 2.0
                     for (z0, a), (z1, b) in itertools.pairwise(SECTIONS))
    if quadrants == 4:
        assert "symmetry" not in found
    else:
        assert found["symmetry"] == pytest.approx(flat)      # one plane, or two half planes
    step = np.isclose(mesh.face_centre[:, 2], 0.0, atol=1e-12)
    step[:mesh.boundaries["wall"].start] = step[mesh.boundaries["wall"].stop:] = False
    assert mesh.face_area_magnitude[step].sum() == pytest.approx(
        share * np.pi * (0.006 ** 2 - 0.002 ** 2))
    check_mesh(mesh)


def test_nozzle_converges_to_the_body_of_revolution() -> None:
    errors = [abs(nozzle(SECTIONS, core=2, quadrants=1, refinement=r).cell_volume.sum()
                  - revolution_volume() / 4) for r in (1, 2)]
    assert errors[0] / errors[1] == pytest.approx(4.0, rel=0.03)
    mesh = nozzle(SECTIONS, core=2, quadrants=1, equal_area=True)
    assert mesh.cell_volume.sum() == pytest.approx(revolution_volume() / 4, rel=1e-12)
    assert areas(mesh)["inlet"] == pytest.approx(np.pi * 0.006 ** 2 / 4, rel=1e-12)


def test_nozzle_meshes_are_smooth_and_a_family() -> None:
    coarse, fine = (nozzle(SECTIONS, core=4, quadrants=1, axial=AXIAL, refinement=r)
                    for r in (1, 2))
    assert 15_000 < coarse.n_cells < 20_000 and fine.n_cells == 8 * coarse.n_cells
    for mesh in (coarse, fine):
        assert quality(mesh).non_orthogonality.max() < 30
        assert quality(mesh).skewness.max() < 0.3
        assert growth(mesh).max() < 1.35
    # Thin cells on both sides of the edge of the step, r = 2 mm.
    radius = np.hypot(*fine.cell_centre[:, :2].T)
    behind = (fine.cell_centre[:, 2] > 0) & (fine.cell_centre[:, 2] < 0.0004)
    behind &= np.arctan2(fine.cell_centre[:, 1], fine.cell_centre[:, 0]) < 0.1
    rays = np.unique(radius[behind].round(7))
    near = np.diff(rays[np.abs(rays - 0.002) < 0.0003])
    assert near.max() < 0.00012


def test_straight_pipe_and_cells_per_piece() -> None:
    mesh = nozzle([(0.0, 1.0), (2.0, 1.0)], core=2, axial=[(5, TwoSided(2))])
    assert areas(mesh)["wall"] == pytest.approx(16 * 2 * np.sin(np.pi / 16) * 2.0)
    np.testing.assert_allclose(np.unique(mesh.points[:, 2].round(12)),
                               TwoSided(2).nodes(0, 2, 5), atol=1e-11)
    pieces = [(2, None), (3, None), (4, None), (6, OneSided(3))]
    stepped = nozzle(SECTIONS, core=2, axial=pieces, refinement=2, quadrants=1)
    assert len(np.unique(stepped.points[:, 2].round(9))) == 2 * (2 + 3 + 4 + 6) + 1


@pytest.mark.parametrize("sections, options", [
    ([(0, 1)], {}), ([(0, 1), (1, -1)], {}), ([(0, 1), (2, 1), (1, 1)], {}),
    ([(0, 2), (1, 2), (1, 1), (2, 1)], {}), ([(0, 1), (0, 2), (1, 2)], {}),
    ([(0, 1), (1, np.nan)], {}), ([(0, 1), (1, 1)], {"core": 0}),
    ([(0, 1), (1, 1)], {"quadrants": 3}), ([(0, 1), (1, 1)], {"wall_share": 0.0}),
    ([(0, 1), (1, 1)], {"growth": 1.0}), ([(0, 1), (1, 1)], {"refinement": 0}),
    ([(0, 1), (1, 1)], {"axial": [(3, None), (3, None)]})])
def test_bad_nozzles_are_refused(sections: list, options: dict[str, Any]) -> None:
    with pytest.raises(MeshError) as caught:
        nozzle(sections, **options)
    assert caught.value.where and caught.value.remedy


def test_blocks_that_do_not_meet_are_refused() -> None:
    grid = np.stack(np.meshgrid([0.0, 1.0], [0.0, 1.0], [0.0, 1.0], indexing="ij"), axis=-1)
    sides = {side: "wall" for side in ("j_min", "j_max", "k_min", "k_max")}
    fits = [Block(grid, {**sides, "i_min": "wall"}),
            Block(grid + np.array([1.0, 0.0, 0.0]), {**sides, "i_max": "wall"})]
    assert join_blocks(fits).n_internal == 1
    apart = [fits[0], Block(grid + np.array([1.01, 0.0, 0.0]), fits[1].sides)]
    with pytest.raises(MeshError, match="no name"):
        join_blocks(apart)
    with pytest.raises(MeshError, match="no such side"):
        join_blocks([Block(grid, {"top": "wall"})])
