"""Compiled loops against plain references, and one thread against two."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from loop_arguments import (
    LOOPS,
    REFERENCES,
    SINGLE_TOO,
    arguments,
    calls,
    copied,
    cut_pattern,
    small_mesh,
)

import fv3d
from fv3d.mesh.generate import box
from fv3d.operators import compiling, kernels, kernels_solving
from fv3d.operators.assembly import Pattern


def test_every_kernel_has_a_reference() -> None:
    compiled = {name for name, value in LOOPS.items()
                if isinstance(value, compiling.ThreadedKernel) or hasattr(value, "py_func")}
    assert compiled == set(REFERENCES)


@pytest.mark.parametrize("kind", ["hex", "tet"])
@pytest.mark.parametrize("name, variant", calls())
def test_kernel_equals_its_reference(name: str, variant: int, kind: str) -> None:
    given = arguments(name, small_mesh(kind), variant=variant)
    used = copied(given)
    LOOPS[name](*used)
    for place, wanted in REFERENCES[name](*copied(given)).items():
        size = np.abs(wanted).max()
        np.testing.assert_allclose(used[place], wanted, rtol=0, atol=1e-12 * max(size, 1.0))


@pytest.mark.parametrize("kind", ["hex", "tet"])
@pytest.mark.parametrize("name, variant", calls(sorted(SINGLE_TOO)))
def test_single_precision_to_its_rounding(name: str, variant: int, kind: str) -> None:
    given = arguments(name, small_mesh(kind), dtype=np.float32, variant=variant)
    used = copied(given)
    LOOPS[name](*used)
    for place, wanted in REFERENCES[name](*copied(given)).items():
        assert used[place].dtype == np.float32
        np.testing.assert_allclose(used[place], wanted, rtol=0, atol=1e-5 * np.abs(wanted).max())


@pytest.mark.parametrize("name, variant", calls())
def test_kernel_writes_only_what_the_reference_says(name: str, variant: int) -> None:
    given = arguments(name, small_mesh("tet"), variant=variant)
    used = copied(given)
    LOOPS[name](*used)
    written = REFERENCES[name](*copied(given))
    for place, (before, after) in enumerate(zip(given, used)):
        if place not in written and isinstance(before, np.ndarray):
            np.testing.assert_array_equal(before, after)


def neighbours_by_piece(layout: Pattern) -> np.ndarray:
    """How many pieces apart the two rows of each matrix entry lie."""
    n = len(layout.diagonal)
    piece = np.searchsorted(layout.pieces, np.arange(n), side="right") - 1
    return np.abs(np.repeat(piece, np.diff(layout.indptr)) - piece[layout.indices])


@pytest.mark.parametrize("most", [8, 50])
@pytest.mark.parametrize("cells, tetra, skew", [((30, 4, 4), False, 0.0), ((13, 5, 4), True, 0.0),
                                                ((6, 6, 6), False, 0.3), ((7, 3, 2), True, 0.3)])
def test_no_piece_touches_the_next_but_one(cells: tuple, tetra: bool, skew: float,
                                           most: int) -> None:
    layout = cut_pattern(box((0, 0, 0), (2.0, 1.0, 1.0), cells=cells, tetra=tetra, skew=skew),
                         most=most)
    assert len(layout.pieces) > 3 and (np.diff(layout.pieces) > 0).all()
    assert layout.pieces[0] == 0 and layout.pieces[-1] == len(layout.diagonal)
    assert neighbours_by_piece(layout).max() == 1


def test_joined_boundaries_keep_pieces_apart() -> None:
    mesh = fv3d.box((0, 0, 0), (6.0, 1.0, 1.0), cells=(40, 3, 3))
    layout = cut_pattern(fv3d.join_periodic(mesh, {"x_min": "x_max"}))
    assert layout.pieces.tolist() == [0, 360]  # the first cells touch the last


def test_small_meshes_are_one_piece() -> None:
    assert fv3d.operators.assembly.pattern(small_mesh("hex")).pieces.tolist() == [0, 36]


@pytest.mark.parametrize("backward", [False, True])
@pytest.mark.parametrize("dtype, close", [(np.float64, 1e-13), (np.float32, 1e-6)])
def test_pieces_swept_are_gauss_seidel_in_their_order(dtype: type, close: float,
                                                      backward: bool) -> None:
    """Even pieces, then odd ones; backwards the same order from its end."""
    mesh = box((0, 0, 0), (2.0, 1.0, 1.0), cells=(20, 6, 5), skew=0.2, seed=1)
    *equations, pieces, _, _, x = arguments("sweep_pieces", mesh, dtype=dtype)
    assert len(pieces) > 6
    number = np.arange(mesh.n_cells, dtype=np.int32)
    parts = np.split(number, pieces[1:-1])
    order, plain = np.concatenate(parts[::2] + parts[1::2]), x.copy()
    for odd in (1, 0) if backward else (0, 1):
        kernels_solving.sweep_pieces(*equations, pieces, odd, backward, x)
    kernels_solving.sweep(*equations, order, backward, plain)
    np.testing.assert_allclose(x, plain, rtol=0, atol=close * np.abs(plain).max())


def test_indices_are_handed_on_unsigned_and_uncopied(monkeypatch: pytest.MonkeyPatch) -> None:
    seen: list = []
    monkeypatch.setattr(kernels.net_outflow, "_single", lambda *values: seen.extend(values))
    given = arguments("net_outflow", small_mesh("hex"))
    kernels.net_outflow(*given)
    assert [a.dtype for a in seen] == [np.uint32, np.uint32, np.int8, np.float64, np.float64]
    assert all(np.shares_memory(a, b) for a, b in zip(seen, given))


THREADS = """
import numpy as np
from loop_arguments import LOOPS, SINGLE_TOO, arguments, box, calls, copied
from fv3d.operators import compiling, kernels
compiling.SMALL = 0
mesh = box((0, 0, 0), (2.0, 1.0, 1.0), cells=(24, 9, 8), skew=0.3, seed=3)

def run(loop, threads, given):
    compiling.set_threads(threads)
    assert compiling.get_threads() == threads
    used = copied(given)
    loop(*used)
    return [value for value in used if isinstance(value, np.ndarray)]

for name, variant in calls():
    for dtype in (np.float64, np.float32) if name in SINGLE_TOO else (np.float64,):
        given = arguments(name, mesh, dtype=dtype, variant=variant)
        loop = LOOPS[name]
        one, two = (run(loop, threads, given) for threads in (1, 2))
        others = [run(loop, 2, given)]
        if name in ROUNDED:
            for a, b in zip(one, two):
                np.testing.assert_allclose(a, b, rtol=0, atol=2e-15 * np.abs(a).max(initial=0))
            loop._single = loop._threaded
            others.append(run(loop, 1, given))
        else:
            others.append(one)
        for other in others:
            assert [a.tobytes() for a in two] == [a.tobytes() for a in other], (name, dtype)
print("same bits")
"""
ROUNDED = {"transport_faces"}  # compiled for several threads it fuses other products and sums


def test_one_and_two_threads_agree_bit_for_bit() -> None:
    """But for ``ROUNDED``, whose two compiled forms agree to rounding and each bit for bit."""
    done = subprocess.run([sys.executable, "-W", "error", "-c", f"ROUNDED = {ROUNDED}\n{THREADS}"],
                          capture_output=True, text=True, cwd=Path(__file__).parent,
                          env={**os.environ, "NUMBA_NUM_THREADS": "2",
                               "PYTHONPATH": str(Path(kernels.__file__).parents[2])})
    assert done.stdout.strip() == "same bits", done.stderr


def test_without_a_folder_for_compiled_code_a_sentence_and_the_same_numbers() -> None:
    """numba raises RuntimeError where it finds no folder to write to."""
    code = ("import warnings\n"
            "with warnings.catch_warnings(record=True) as said:\n"
            "    warnings.simplefilter('always')\n"
            "    import numba.core.caching as caching\n"
            "    caching.CacheImpl._locator_classes = []\n"
            "    import numpy as np\n"
            "    from fv3d.operators import kernels, kernels_solving\n"
            "assert any('NUMBA_CACHE_DIR' in str(one.message) for one in said), said\n"
            "x, direction = np.empty(3), np.empty(3)\n"
            "kernels_solving.chebyshev_start(np.ones(3), np.arange(3.0), 2.0, direction, x)\n"
            "print(x.tolist())")
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True,
                          cwd=Path(kernels.__file__).parents[2])
    assert done.stdout.strip() == "[0.0, 2.0, 4.0]", done.stderr
