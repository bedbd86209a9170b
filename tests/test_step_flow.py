"""Reattachment behind a step against plane finite elements (scikit-fem).

Taylor-Hood elements and Picard iteration on triangles of a mesh of their own, at a Reynolds number
of 50 with the mean speed and twice the channel in front of the step.
"""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sparse
import skfem
from made import solved

import fv3d

VISCOSITY, INLET, OUTLET = 0.04, 1.0, 8.0  # step, channel before it, mean speed, density: one


def inflow(y: np.ndarray) -> np.ndarray:
    """Developed speed in the channel 1 < y < 2 of mean speed one."""
    return np.asarray(6.0 * (y - 1.0) * (2.0 - y))


def by_finite_elements(n: int) -> float:
    """Reattachment length: where the shear on the floor changes its sign for the last time."""
    from skfem.helpers import ddot, div, dot, grad, mul
    x = np.concatenate([np.linspace(-INLET, 0.0, n + 1)[:-1], np.linspace(0.0, OUTLET, 6 * n + 1)])
    grid = skfem.MeshTri.init_tensor(x, np.linspace(0.0, 2.0, 2 * n + 1))
    middle = grid.p[:, grid.t].mean(axis=1)
    grid = grid.remove_elements(np.flatnonzero((middle[0] < 0) & (middle[1] < 1)))
    velocity = skfem.Basis(grid, skfem.ElementVector(skfem.ElementTriP2()), intorder=5)
    pressure = velocity.with_element(skfem.ElementTriP1())

    @skfem.BilinearForm
    def momentum(u, v, w):
        return VISCOSITY * ddot(grad(u), grad(v)) + dot(mul(grad(u), w.wind), v)

    @skfem.BilinearForm
    def divergence(u, q, w):
        return -div(u) * q
    b = divergence.assemble(velocity, pressure)
    walls = grid.facets_satisfying(lambda x: x[0] < OUTLET - 1e-9, boundaries_only=True)
    fixed = velocity.get_dofs(walls).all()
    first = velocity.get_dofs(grid.facets_satisfying(lambda x: x[0] < 1e-9 - INLET,
                                                     boundaries_only=True)).all()
    state = np.zeros(velocity.N + pressure.N)
    along = first[np.isin(first, velocity.split_indices()[0])]
    state[along] = inflow(velocity.doflocs[1, along])
    for _ in range(40):
        wind = velocity.interpolate(state[:velocity.N])
        matrix = sparse.bmat([[momentum.assemble(velocity, wind=wind), b.T], [b, None]],
                             format="csr")
        last = state
        state = skfem.solve(*skfem.condense(matrix, np.zeros(len(state)), x=state, D=fixed))
        if np.abs(state - last)[:velocity.N].max() < 1e-8:
            break
    floor = grid.facets_satisfying(lambda x: (np.abs(x[1]) < 1e-9) & (x[0] > 0),
                                   boundaries_only=True)
    at = skfem.FacetBasis(grid, velocity.elem, facets=floor, quadrature=(np.array([[0.5]]),
                                                                         np.array([1.0])))
    shear = at.interpolate(state[:velocity.N]).grad[0, 1, :, 0]
    place = at.global_coordinates()[0, :, 0]
    return last_rise(place, shear)


def last_rise(place: np.ndarray, shear: np.ndarray) -> float:
    """Where linearly interpolated values become positive for the last time."""
    order = np.argsort(place)
    place, shear = place[order], shear[order]
    k = int(np.flatnonzero((shear[:-1] < 0) & (shear[1:] >= 0))[-1])
    return float(np.interp(0.0, shear[k:k + 2], place[k:k + 2]))


def by_finite_volumes(n: int) -> float:
    """The same length by the shear on the floor of a plane mesh."""
    mesh = fv3d.backward_step(step=1.0, height=1.0, inlet_length=INLET, outlet_length=OUTLET,
                              depth=0.2, first_layer=0.5 / n, growth=1.0 + 1.0 / n,
                              coarsest=1.0 / n)

    def stream(points: np.ndarray) -> np.ndarray:
        return np.outer(inflow(points[:, 1]), (1.0, 0.0, 0.0))
    run = solved(fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=VISCOSITY), boundaries={
        "inlet": fv3d.Inlet(stream), "outlet": fv3d.Outlet(), "step": fv3d.Wall(),
        "floor": fv3d.Wall(), "roof": fv3d.Wall(), "sides": fv3d.Symmetry()}), tolerance=1e-6)
    found = fv3d.shear_reversals(run, "floor", along=(1.0, 0.0, 0.0))
    return float(found.points[found.reattaching, 0].max())


def test_reattachment_against_finite_elements() -> None:
    elements = [by_finite_elements(n) for n in (6, 12)]
    volumes = [by_finite_volumes(n) for n in (8, 16)]
    assert elements[1] == pytest.approx(elements[0], rel=0.01)
    assert volumes[1] == pytest.approx(elements[1], rel=0.01)
    assert abs(volumes[1] - elements[1]) < 0.5 * abs(volumes[0] - elements[1])
