"""Creeping flow against finite elements (scikit-fem) on the same tetrahedra.

scikit-fem: Gustafsson, T. and McBain, G. D. (2020), J. Open Source Softw. 5(52), 2369.  Elements of
Taylor, C. and Hood, P. (1973), Computers and Fluids 1, 73-100: quadratic velocity, linear pressure,
one order better than what they are compared with.
"""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sparse
import skfem
from contracts import observed_order
from made import solved
from scipy.sparse.linalg import LinearOperator, minres, splu

import fv3d

VISCOSITY = 0.7


def stirring(x: np.ndarray) -> np.ndarray:
    """(n, 3) force per volume [N/m^3] that no pressure can balance."""
    a, b, c = x.T
    return np.stack([np.sin(2 * b) * np.cos(c), np.cos(3 * a) + c**2, np.sin(a - b)], axis=1)


def tetrahedra(n: int) -> fv3d.Mesh:
    """Shaken unit cube."""
    return fv3d.box((0, 0, 0), (1, 1, 1), cells=(n, n, n), tetra=True, skew=0.1, seed=3)


def by_finite_elements(mesh: fv3d.Mesh) -> tuple[np.ndarray, np.ndarray]:
    """Velocity (n_cells, 3) at the cell centres and pressure (n_cells,) less its mean."""
    from skfem.helpers import ddot, div, dot, grad
    (_, connectivity, cells), = mesh.cell_blocks
    tets = skfem.MeshTet(mesh.points.T, connectivity.T.astype(np.int64))
    velocity = skfem.Basis(tets, skfem.ElementVector(skfem.ElementTetP2()), intorder=4)
    pressure = velocity.with_element(skfem.ElementTetP1())

    @skfem.BilinearForm
    def viscous(u, v, w):
        return VISCOSITY * ddot(grad(u), grad(v))

    @skfem.BilinearForm
    def divergence(u, q, w):
        return -div(u) * q

    @skfem.LinearForm
    def load(v, w):
        shape = w.x.shape[1:]
        force = stirring(w.x.reshape(3, -1).T).T.reshape(3, *shape)
        return dot(force, v)
    b = divergence.assemble(velocity, pressure)
    matrix = sparse.bmat([[viscous.assemble(velocity), b.T], [b, None]], format="csr")
    rhs = np.concatenate([load.assemble(velocity), np.zeros(pressure.N)])
    mass = skfem.BilinearForm(lambda p, q, w: p * q).assemble(pressure).diagonal()
    free = np.setdiff1d(np.arange(matrix.shape[0]), velocity.get_dofs().all())
    x = np.zeros(matrix.shape[0])
    x[free] = saddle_point(matrix[free][:, free], rhs[free], mass=mass)
    centre = tets.mapping().F(np.full((3, 1), 0.25))[:, :, 0]
    at = skfem.Basis(tets, velocity.elem, quadrature=(np.full((3, 1), 0.25), np.ones(1)))
    level = at.with_element(pressure.elem)
    u = np.asarray(at.interpolate(x[:velocity.N]))[:, :, 0]
    p = np.asarray(level.interpolate(x[velocity.N:]))[:, 0]
    speed, head = np.empty((mesh.n_cells, 3)), np.empty(mesh.n_cells)
    speed[cells], head[cells] = u.T, p
    where = np.empty((mesh.n_cells, 3))
    where[cells] = centre.T
    np.testing.assert_allclose(where, mesh.cell_centre, atol=1e-12)
    return speed, head - np.average(head, weights=mesh.cell_volume)


def saddle_point(matrix: sparse.csr_matrix, rhs: np.ndarray, *, mass: np.ndarray) -> np.ndarray:
    """MINRES with the factors of the viscous part and the pressure's mass as preconditioner.

    Wathen, A. and Silvester, D. (1993), SIAM J. Numer. Anal. 30, 630-649; the constant pressure
    stays open and is subtracted afterwards.
    """
    k = matrix.shape[0] - len(mass)
    viscous = splu(matrix[:k][:, :k].tocsc(), permc_spec="MMD_AT_PLUS_A",
                   options={"SymmetricMode": True}, diag_pivot_thresh=0.0)
    about = LinearOperator(matrix.shape, lambda r: np.concatenate(
        [viscous.solve(r[:k]), VISCOSITY * r[k:] / mass]))
    x, failed = minres(matrix, rhs, M=about, rtol=1e-9, maxiter=500)
    assert failed == 0
    return np.asarray(x)


def by_finite_volumes(mesh: fv3d.Mesh) -> fv3d.Run:
    """The same flow; a density so small that inertia does not matter."""
    density = 1e-4
    return solved(fv3d.Case(mesh, fv3d.Fluid(density=density, viscosity=VISCOSITY),
                            boundaries={b: fv3d.Wall() for b in mesh.boundaries},
                            body_force=lambda x: stirring(x) / density), tolerance=1e-8)


def differences(sizes: tuple[int, ...]) -> tuple[np.ndarray, np.ndarray]:
    """Relative differences of velocities and of pressures on a family, volume-weighted."""
    velocity, pressure = [], []
    for n in sizes:
        mesh = tetrahedra(n)
        speed, head = by_finite_elements(mesh)
        run, volume = by_finite_volumes(mesh), mesh.cell_volume
        gap = ((run.velocity - speed)**2).sum(axis=1)
        velocity.append(np.average(gap, weights=volume)
                        / np.average((speed**2).sum(axis=1), weights=volume))
        pressure.append(np.average((run.pressure - head)**2, weights=volume)
                        / np.average(head**2, weights=volume))
    return np.sqrt(velocity), np.sqrt(pressure)


def test_creeping_flow_approaches_taylor_hood_elements() -> None:
    velocity, pressure = differences((4, 7))
    assert observed_order(list(velocity), [1 / 4, 1 / 7]) > 1.6, velocity
    assert pressure[1] < pressure[0], pressure


@pytest.mark.long
def test_creeping_flow_against_taylor_hood_elements() -> None:
    """The difference of the velocities falls at second order; that of the pressures falls.

    On shaken tetrahedra the pressures approach each other at about order 0.75.
    """
    sizes = (6, 9, 13)
    velocity, pressure = differences(sizes)
    h = [1.0 / n for n in sizes]
    assert observed_order(list(velocity), h) > 1.8, velocity
    assert observed_order(list(velocity[1:]), h[1:]) > 1.9, velocity
    assert pressure[0] > pressure[1] > pressure[2], pressure
    assert velocity[-1] < 0.03
