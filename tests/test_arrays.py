"""The array path: a second reference of every compiled loop, and of whole iterations."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from loop_arguments import LOOPS, REFERENCES, SINGLE_TOO, arguments, calls, copied, small_mesh
from made import solved

import fv3d
from fv3d.operators import (
    arrays,
    arrays_faces,
    arrays_solving,
    kernels,
    kernels_limiting,
    kernels_solving,
)
from fv3d.operators.arrays import array_path, is_loop, kept

FUNCTIONS = {name: getattr(arrays_faces, name, None) or getattr(arrays_solving, name, None)
             for name in REFERENCES}


def compare(name: str, variant: int, kind: str, dtype: type, close: float) -> None:
    given = arguments(name, small_mesh(kind), dtype=dtype, variant=variant)
    by_loop, by_arrays = copied(given), copied(given)
    LOOPS[name](*by_loop)
    FUNCTIONS[name](*by_arrays)
    for one, other in zip(by_loop, by_arrays):
        if isinstance(one, np.ndarray):
            assert one.dtype == other.dtype
            size = np.abs(one).max(initial=1.0) if one.dtype.kind == "f" else 0.0
            np.testing.assert_allclose(other, one, rtol=0, atol=close * size)


@pytest.mark.parametrize("kind", ["hex", "tet"])
@pytest.mark.parametrize("name, variant", calls())
def test_array_function_equals_its_kernel(name: str, variant: int, kind: str) -> None:
    compare(name, variant, kind, np.float64, 1e-12)


@pytest.mark.parametrize("kind", ["hex", "tet"])
@pytest.mark.parametrize("name, variant", calls(sorted(SINGLE_TOO)))
def test_in_single_precision_too(name: str, variant: int, kind: str) -> None:
    compare(name, variant, kind, np.float32, 1e-5)


@pytest.mark.parametrize("odd, backward", [*itertools.product([0, 1], [False, True])])
def test_sweeps_with_diagonal_blocks(odd: int, backward: bool) -> None:
    """Components that do not meet in a block are swept column by column."""
    given = arguments("sweep_pieces", small_mesh("tet"))
    given[3][:, 3:] = 0.0
    given[3][::3, 1:3] = given[3][::3, :1]
    given[6], given[7] = odd, backward
    by_loop, by_arrays = copied(given), copied(given)
    kernels_solving.sweep_pieces(*by_loop)
    arrays_solving.sweep_pieces(*by_arrays)
    np.testing.assert_allclose(by_arrays[8], by_loop[8], rtol=0, atol=1e-12)


def test_every_loop_is_replaced_and_comes_back() -> None:
    modules = (kernels, kernels_solving, kernels_limiting)
    before = [dict(vars(module)) for module in modules]
    with pytest.raises(ZeroDivisionError):
        with array_path():
            replaced = [name for module in modules for name in REFERENCES
                        if getattr(module, name, None) is FUNCTIONS[name]]
            assert sorted(replaced) == sorted(REFERENCES)
            assert not any(is_loop(thing) for module in modules for thing in vars(module).values())
            raise ZeroDivisionError
    assert [dict(vars(module)) for module in modules] == before


def test_what_is_kept_belongs_to_its_arrays() -> None:
    assert kept(np.sum, np.ones(3)) == 3.0  # nothing is kept outside
    with array_path():
        values = np.ones(3)
        assert kept(np.sum, values) == 3.0
        values[:] = 2.0
        assert kept(np.sum, values) == 3.0  # counts as constant
        assert [kept(np.sum, np.full(3, float(k))) for k in range(5)] == [0, 3, 6, 9, 12]
        assert kept(np.sum, values[:2]) == 4.0
        with array_path():
            assert kept(np.sum, values) == 6.0
        assert kept(np.sum, values) == 3.0
        assert [kept(np.sum, a, newest=True) for a in (values, values[1:], values)] == [6, 4, 6]
    assert arrays._store is None


def state_after(count: int, case: fv3d.Case) -> fv3d.State:
    return next(itertools.islice(fv3d.iterate(case), count - 1, None))[0]


def cavity(*, tetra: bool, skew: float = 0.0, **options) -> fv3d.Case:
    mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(6, 6, 6), tetra=tetra, skew=skew)
    walls = {name: fv3d.Wall() for name in mesh.boundaries}
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.01),
                     boundaries=walls | {"y_max": fv3d.Wall((1.0, 0.0, 0.0))},
                     numerics=fv3d.Numerics(**options))


CAVITIES = pytest.mark.parametrize("tetra, skew, options", [
    (False, 0.0, {}), (False, 0.3, {"convection": fv3d.LimitedUpwind()}), (True, 0.0, {}),
    (False, 0.0, {"convection": fv3d.Blended()})], ids=["hex", "shaken", "tet", "blended"])


def compare_states(one: fv3d.State, other: fv3d.State, close: float) -> None:
    for name in ("velocity", "pressure", "mass_flux"):
        wanted, got = getattr(one, name), getattr(other, name)
        np.testing.assert_allclose(got, wanted, rtol=0, atol=close * np.abs(wanted).max())


@CAVITIES
def test_iterations_of_a_cavity_agree_to_the_precision_of_the_sweeps(
        tetra: bool, skew: float, options: dict) -> None:
    """Sweeps and multigrid cycles run in single precision, whose unit is 6e-8."""
    case = cavity(tetra=tetra, skew=skew, **options)
    compiled = state_after(5, case)
    with array_path():
        state = state_after(5, case)
    assert not np.array_equal(state.velocity, compiled.velocity)  # both have run
    compare_states(compiled, state, 1e-6)


@CAVITIES
def test_converged_cavities_agree_to_nine_digits(tetra: bool, skew: float, options: dict) -> None:
    case = cavity(tetra=tetra, skew=skew, **options)
    compiled = solved(case, tolerance=1e-11)
    with array_path():
        run = solved(case, tolerance=1e-11)
    compare_states(compiled.state, run.state, 1e-9)
