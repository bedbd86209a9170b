"""Coarser meshes made by joining cells, and runs that start from them."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from made import distance, duct, solved

import fv3d
from fv3d.errors import CaseError, MeshError
from fv3d.flow.coarser import Agglomerated
from fv3d.mesh.agglomerate import agglomerate
from fv3d.mesh.generate import box, mixed_box
from fv3d.operators.gradient import BoundaryKnowledge, LeastSquares

MESHES = {
    "hex": box((0, 0, 0), (2, 1, 1), cells=(24, 12, 12)),
    "skewed": box((0, 0, 0), (2, 1, 1), cells=(20, 10, 10), skew=0.25),
    "tet": box((0, 0, 0), (2, 1, 1), cells=(12, 6, 6), tetra=True, skew=0.1),
    "mixed": mixed_box((0, 0, 0), (2, 1, 1), cells=(12, 8, 8)),
    "pipe": fv3d.pipe(length=2.0, diameter=1.0, cells=16),
}


@pytest.fixture(params=MESHES, scope="module")
def pair(request: pytest.FixtureRequest) -> tuple[fv3d.Mesh, Any]:
    """A mesh and the coarser one made of it."""
    mesh = MESHES[request.param]
    return mesh, agglomerate(mesh)


def test_groups_are_whole_and_connected(pair: tuple[fv3d.Mesh, Any]) -> None:
    """SciPy finds one connected part in each group; about eight cells go into one."""
    from scipy.sparse import csr_matrix
    from scipy.sparse.csgraph import connected_components
    mesh, coarse = pair
    n = mesh.n_internal
    same = coarse.group[mesh.left[:n]] == coarse.group[mesh.right]
    links = csr_matrix((np.ones(same.sum()), (mesh.left[:n][same], mesh.right[same])),
                       shape=(mesh.n_cells,) * 2)
    assert connected_components(links, directed=False)[0] == coarse.n_cells
    assert 5.0 < mesh.n_cells / coarse.n_cells < 10.0


def test_closed_with_the_volume_of_the_mesh(pair: tuple[fv3d.Mesh, Any]) -> None:
    """Gauss' theorem for 1 and x: closed cells, and first moments that give their volume."""
    mesh, coarse = pair
    assert np.abs(coarse.outflow @ coarse.face_area).max() < 1e-13
    assert coarse.cell_volume.sum() == pytest.approx(mesh.cell_volume.sum(), rel=1e-13)
    assert list(coarse.boundaries) == list(mesh.boundaries)
    moment = coarse.face_centre[:, :, None] * coarse.face_area[:, None, :]
    moment = moment + coarse.warp if coarse.warped else moment
    integral = (coarse.outflow @ moment.reshape(-1, 9)).reshape(-1, 3, 3)
    expected = coarse.cell_volume[:, None, None] * np.eye(3)
    np.testing.assert_allclose(integral, expected, atol=1e-13)


def test_gradients_of_linear_fields_are_exact(pair: tuple[fv3d.Mesh, Any]) -> None:
    _, coarse = pair
    slope = np.array([0.3, -0.7, 0.2])
    method = LeastSquares(smoothing=0.0).weights(coarse, BoundaryKnowledge.everywhere(coarse))
    found = method(coarse.cell_centre @ slope, coarse.face_centre[coarse.n_internal:] @ slope)
    np.testing.assert_allclose(found, np.tile(slope, (coarse.n_cells, 1)), atol=1e-10)


def test_same_solution(pair: tuple[fv3d.Mesh, Any]) -> None:
    """On any kind of cells; through flows on so few cells gain nothing, and lose nothing."""
    mesh, _ = pair
    case = duct(mesh) if "x_min" in mesh.boundaries else fv3d.Case(
        mesh, fv3d.Fluid(density=1.0, viscosity=0.02), boundaries={
            "inlet": fv3d.Inlet((0.0, 0.0, 1.0)), "outlet": fv3d.Outlet(), "wall": fv3d.Wall()})
    rest = solved(case, tolerance=1e-6)
    run = solved(case, tolerance=1e-6, start=Agglomerated(levels=1))
    assert "converged" in run.before[0]
    assert distance(mesh, run.velocity, rest.velocity) < 2e-5
    assert len(run.history["iteration"]) <= len(rest.history["iteration"]) + 2


def test_fewer_iterations_of_a_closed_flow() -> None:
    """Tetrahedra that fluid at rest is a poor start for: the lid-driven cube, Reynolds 100."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(10, 10, 10), tetra=True, skew=0.1)
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.01), boundaries={
        name: fv3d.Wall() for name in mesh.boundaries} | {"y_max": fv3d.Wall((1.0, 0.0, 0.0))})
    counts = [len(solved(case, tolerance=1e-6, start=start).history["iteration"])
              for start in (None, Agglomerated())]
    assert counts[1] < 0.9 * counts[0]


def test_two_levels_with_readings_left_out_of_them() -> None:
    case = duct(box((0, 0, 0), (2, 1, 1), cells=(40, 20, 20)), viscosity=0.1)
    run = fv3d.solve_steady(case, start=Agglomerated(levels=3), tolerance=1e-4,
                            max_iterations=200, progress=False)
    cells = [int(line.split()[0]) for line in run.before]
    assert len(cells) == 2 and 200 < cells[0] < cells[1] / 5 < case.mesh.n_cells / 25
    assert run.outcome.good and Agglomerated().fed((object(),)) == ()


def test_zones_and_resistances_are_kept_apart() -> None:
    """No group has cells of a zone, or of a resistance given by its place, and others."""
    grid = MESHES["hex"]
    inside = np.abs(grid.cell_centre[:, 0] - 1.0) < 0.1
    mesh = fv3d.build_mesh(grid.points, [(kind, conn) for kind, conn, _ in grid.cell_blocks],
                           {name: [grid.face_points[where]]
                            for name, where in grid.boundaries.items()},
                           zones={"block": inside[grid.cell_blocks[0][2]]})
    case = duct(mesh, resistances={
        "block": fv3d.Resistance(linear=1.0),
        "end": fv3d.Resistance(linear=2.0, where=lambda x: x[:, 0] > 1.8)})
    coarse, = Agglomerated(levels=1).coarse_cases(case)
    group, place = coarse.mesh.group, mesh.cell_centre[:, 0]
    for own in (np.abs(place - 1.0) < 0.1, place > 1.8):
        assert set(np.bincount(group, own) / np.bincount(group)) == {0.0, 1.0}
    np.testing.assert_array_equal(np.unique(group[mesh.zones["block"]]),
                                  coarse.mesh.zones["block"])


def test_refused() -> None:
    for options in ({"levels": 0}, {"levels": "2"}, {"tolerance": -1.0}, {"max_iterations": 0}):
        with pytest.raises(CaseError):
            Agglomerated(**options)
    mesh = box((0, 0, 0), (2, 1, 1), cells=(4, 2, 2))
    walls = {name: fv3d.Wall() for name in ("y_min", "y_max", "z_min", "z_max")}
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.1), boundaries=walls | {
        "x_min": fv3d.Periodic("x_max", mean_speed=1.0)})
    with pytest.raises(CaseError, match="no periodic"):
        solved(case, start=Agglomerated())
    with pytest.raises(MeshError, match="joined"):
        agglomerate(case.mesh)
