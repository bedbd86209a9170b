"""What every coupling of pressure and velocity promises."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

import fv3d
from fv3d.flow.problem import make_problem
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh

from .tools import Check

MESHES: dict[str, Callable[[], Mesh]] = {
    "hex": lambda: box((0, 0, 0), (2, 1, 1), cells=(10, 8, 8), skew=0.2),
    "tet": lambda: box((0, 0, 0), (2, 1, 1), cells=(6, 4, 4), tetra=True, skew=0.1),
}
_solutions: dict[str, Any] = {}


def common_solution(kind: str) -> Any:
    """The duct flow all couplings must reach, converged tightly with SIMPLEC 0.8."""
    from made import duct, solved
    if kind not in _solutions:
        numerics = fv3d.Numerics(coupling=fv3d.SIMPLEC(velocity_relaxation=0.8))
        _solutions[kind] = solved(duct(MESHES[kind](), numerics=numerics), tolerance=1e-9)
    return _solutions[kind]


def coupling_conserves_mass_in_every_cell(method: Any) -> None:
    """As it iterates, before the last correction: to the accuracy of its own pressure solve."""
    import itertools

    from made import duct
    for kind, mesh in MESHES.items():
        case = duct(mesh(), numerics=fv3d.Numerics(coupling=method, pressure_tolerance=1e-8))
        ready = make_problem(case)
        inflow = -ready.fixed_flux.clip(max=0.0).sum()
        for state, _ in itertools.islice(fv3d.iterate(case), 5):
            imbalance = np.abs(ready.mesh.outflow @ state.mass_flux)
            assert imbalance.sum() <= 1e-6 * inflow, kind


def coupling_reaches_the_common_solution(method: Any) -> None:
    """Independent of the method and its relaxation to 0.1 %; mass to 1e-8 of the inflow."""
    from made import distance, duct, solved
    for kind in MESHES:
        wanted = common_solution(kind)
        case = duct(wanted.mesh, numerics=fv3d.Numerics(coupling=method))
        run = solved(case, tolerance=1e-6)
        assert distance(run.mesh, run.velocity, wanted.velocity) <= 1e-3, kind
        assert distance(run.mesh, run.pressure, wanted.pressure) <= 1e-3, kind
        inflow = -run.mass_flux.clip(max=0.0)[run.mesh.n_internal:].sum()
        assert np.abs(run.mesh.outflow @ run.mass_flux).sum() <= 1e-8 * inflow


def coupling_removes_a_checkerboard(method: Any) -> None:
    """From a start pressure that alternates from cell to cell, ten dynamic pressures high."""
    from dataclasses import replace

    from made import distance, duct, solved
    for kind in MESHES:
        wanted = common_solution(kind)
        mesh = wanted.mesh
        sign = np.where(np.floor(mesh.cell_centre / [0.2, 0.125, 0.125]).sum(axis=1) % 2, 1., -1.)
        if kind == "tet":
            sign = np.random.default_rng(0).choice([-1.0, 1.0], mesh.n_cells)
        spoiled = replace(wanted, state=replace(wanted.state,
                                                pressure=wanted.pressure + 5.0 * sign))
        run = solved(duct(mesh, numerics=fv3d.Numerics(coupling=method)), start=spoiled,
                     tolerance=1e-6)
        left = (run.pressure - wanted.pressure) @ sign / mesh.n_cells
        assert abs(left) <= 1e-3 * np.ptp(wanted.pressure), kind
        assert distance(mesh, run.pressure, wanted.pressure) <= 1e-3, kind


def coupling_stays_at_the_solution(method: Any) -> None:
    """Started from the converged run it converges at once and does not move."""
    from made import distance, duct
    for kind in MESHES:
        wanted = common_solution(kind)
        case = duct(wanted.mesh, numerics=fv3d.Numerics(coupling=method))
        run = fv3d.solve_steady(case, start=wanted, tolerance=1e-6, max_iterations=3,
                                progress=False)
        assert len(run.history["iteration"]) == 1
        assert distance(run.mesh, run.velocity, wanted.velocity) <= 1e-6


COUPLING: dict[str, Check] = {f.__name__: f for f in (
    coupling_conserves_mass_in_every_cell, coupling_reaches_the_common_solution,
    coupling_removes_a_checkerboard, coupling_stays_at_the_solution)}
