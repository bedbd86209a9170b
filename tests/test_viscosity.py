"""Viscosity that varies from cell to cell: layers with a jump of 100, exact profiles."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from made import solved

import fv3d
from fv3d.mesh.generate import box

THIN, THICK = 0.01, 1.0  # [Pa s], interface at mid-height


def layers(cells: tuple[int, int, int], *, tetra: bool = False, length: float = 1.0,
           **sides: Any) -> fv3d.Case:
    """Two layers between plates, thick below and thin above, periodic in effect along x."""
    mesh = box((0, 0, 0), (length, 1, 0.3), cells=cells, tetra=tetra)
    viscosity = np.where(mesh.cell_centre[:, 1] < 0.5, THICK, THIN)
    rest = {"y_min": fv3d.Wall(), "y_max": fv3d.Wall((1.0, 0.0, 0.0)), "z_min": fv3d.Symmetry(),
            "z_max": fv3d.Symmetry(), "x_max": fv3d.Outlet()}
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1.0), viscosity=viscosity,
                     boundaries=rest | sides)


def couette(x: np.ndarray) -> np.ndarray:
    """Equal shear stress in both layers: u = tau y / THICK below, 1 - tau (1 - y) / THIN above.

    Bird, R. B., Stewart, W. E. and Lightfoot, E. N. (2002), Transport Phenomena, 2nd ed., section
    2.5, without pressure gradient.
    """
    tau = 1.0 / (0.5 / THICK + 0.5 / THIN)
    y = x[:, 1]
    return np.outer(np.where(y < 0.5, tau * y / THICK, 1.0 - tau * (1.0 - y) / THIN),
                    (1.0, 0.0, 0.0))


@pytest.mark.parametrize("cells", [(4, 4, 1), (4, 8, 2)])
def test_two_layer_couette_is_exact_on_hexahedra(cells: tuple[int, int, int]) -> None:
    """The harmonic mean on the interface meets the kink to rounding, whatever the mesh."""
    case = layers(cells, x_min=fv3d.Inlet(couette))
    run = solved(case, tolerance=1e-11)
    np.testing.assert_allclose(run.velocity, couette(run.mesh.cell_centre), atol=1e-8)
    tau = 1.0 / (0.5 / THICK + 0.5 / THIN)
    for name, sign in (("y_min", 1.0), ("y_max", -1.0)):
        assert fv3d.force(run, name).friction[0] == pytest.approx(sign * tau * 0.3, rel=1e-7)


def test_two_layer_couette_on_tetrahedra() -> None:
    """Gradients across the kink spoil the tetrahedra beside it; the error falls with the mesh."""
    errors = []
    for n in (4, 8):
        run = solved(layers((n, n, 2), tetra=True, x_min=fv3d.Inlet(couette)), tolerance=1e-8)
        gap = run.velocity - couette(run.mesh.cell_centre)
        errors.append(float(np.sqrt(np.average((gap**2).sum(axis=1),
                                               weights=run.mesh.cell_volume))))
    assert errors[1] < 0.02 and errors[0] / errors[1] > 1.7


def poiseuille(x: np.ndarray) -> np.ndarray:
    """Two layers driven by a force of 1 N/m3 between plates at rest.

    Bird, Stewart and Lightfoot (2002), section 2.5: stress linear over the whole height,
    velocity and stress continuous at the interface.
    """
    total = 1.0 / (0.5 / THICK + 0.5 / THIN)
    zero = total * (0.125 / THICK + 0.375 / THIN)  # height of zero stress
    y = x[:, 1]
    below = (zero * y - 0.5 * y**2) / THICK
    above = ((0.5 - 0.5 * y**2) - zero * (1.0 - y)) / THIN
    return np.outer(np.where(y < 0.5, below, above), (1.0, 0.0, 0.0))


def test_the_profile_satisfies_its_equations() -> None:
    """Continuous velocity and stress at the interface, no slip: by numbers of their own."""
    at = np.array([[0.0, 0.5 - 1e-12, 0.0], [0.0, 0.5 + 1e-12, 0.0], [0, 0, 0], [0, 1.0, 0]])
    low, high, floor, roof = poiseuille(at)[:, 0]
    assert low == pytest.approx(high, abs=1e-9) and floor == 0.0 and roof == 0.0
    h = 1e-5
    slope = np.diff(poiseuille(np.array([[0, 0.5 - h, 0], [0, 0.5 - 1e-12, 0], [0, 0.5 + 1e-12, 0],
                                         [0, 0.5 + h, 0]]))[:, 0]) / h
    assert THICK * slope[0] == pytest.approx(THIN * slope[2], rel=1e-3)


def test_two_layer_poiseuille_at_second_order() -> None:
    errors = []
    for n in (16, 32):
        case = layers((8, n, 1), length=4.0, x_min=fv3d.Inlet(poiseuille), y_max=fv3d.Wall())
        case = fv3d.Case(case.mesh, fv3d.Fluid(density=0.01, viscosity=1.0),  # creeping
                         boundaries=case.boundaries, viscosity=case.viscosity,
                         body_force=(100.0, 0.0, 0.0))
        run = solved(case, tolerance=1e-9)
        x = run.mesh.cell_centre
        late = x[:, 0] > 2.0
        gap = (run.velocity - poiseuille(x))[late]
        errors.append(float(np.sqrt((gap**2).mean()) / poiseuille(x).max()))
    assert errors[1] < 1e-3 and errors[0] / errors[1] > 3.7
