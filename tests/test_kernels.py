"""Compiled loops against plain references, and one thread against two."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from loops import REFERENCES, SINGLE_TOO, arguments, small_mesh

from fv3d.operators import kernels, kernels_limiting

LOOPS = {**vars(kernels), **vars(kernels_limiting)}


def copied(values: list) -> list:
    return [v.copy() if isinstance(v, np.ndarray) else v for v in values]


def test_every_kernel_has_a_reference() -> None:
    compiled = {name for name, value in LOOPS.items()
                if isinstance(value, kernels.ThreadedKernel) or hasattr(value, "py_func")}
    assert compiled == set(REFERENCES)


@pytest.mark.parametrize("variant", [0, 1])
@pytest.mark.parametrize("kind", ["hex", "tet"])
@pytest.mark.parametrize("name", REFERENCES)
def test_kernel_equals_its_reference(name: str, kind: str, variant: int) -> None:
    given = arguments(name, small_mesh(kind), seed=variant, variant=variant)
    used = copied(given)
    LOOPS[name](*used)
    for place, wanted in REFERENCES[name](*copied(given)).items():
        size = np.abs(wanted).max()
        np.testing.assert_allclose(used[place], wanted, rtol=0, atol=1e-12 * max(size, 1.0))


@pytest.mark.parametrize("kind", ["hex", "tet"])
@pytest.mark.parametrize("name", sorted(SINGLE_TOO))
def test_single_precision_to_its_rounding(name: str, kind: str) -> None:
    given = arguments(name, small_mesh(kind), dtype=np.float32)
    used = copied(given)
    LOOPS[name](*used)
    for place, wanted in REFERENCES[name](*copied(given)).items():
        assert used[place].dtype == np.float32
        np.testing.assert_allclose(used[place], wanted, rtol=0, atol=1e-5 * np.abs(wanted).max())


@pytest.mark.parametrize("name", REFERENCES)
def test_kernel_writes_only_what_the_reference_says(name: str) -> None:
    given = arguments(name, small_mesh("tet"))
    used = copied(given)
    LOOPS[name](*used)
    written = REFERENCES[name](*copied(given))
    for place, (before, after) in enumerate(zip(given, used)):
        if place not in written and isinstance(before, np.ndarray):
            np.testing.assert_array_equal(before, after)


THREADS = """
import numpy as np, sys
from loops import REFERENCES, SINGLE_TOO, arguments, small_mesh
from test_kernels import LOOPS, copied
from fv3d.operators import kernels
kernels.SMALL = 0
mesh = small_mesh("hex")
for name in REFERENCES:
    for dtype in (np.float64, np.float32) if name in SINGLE_TOO else (np.float64,):
        given = arguments(name, mesh, dtype=dtype)
        results = []
        for count in (1, 2):
            kernels.set_threads(count)
            assert kernels.get_threads() == count
            used = copied(given)
            LOOPS[name](*used)
            results.append(used)
        for one, two in zip(*results):
            if isinstance(one, np.ndarray):
                assert one.tobytes() == two.tobytes(), (name, dtype)
print("same bits")
"""


def test_one_and_two_threads_agree_bit_for_bit() -> None:
    done = subprocess.run([sys.executable, "-W", "error", "-c", THREADS], capture_output=True,
                          text=True, cwd=Path(__file__).parent,
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
            "    from fv3d.operators import kernels\n"
            "assert any('NUMBA_CACHE_DIR' in str(one.message) for one in said), said\n"
            "x, direction = np.empty(3), np.empty(3)\n"
            "kernels.chebyshev_start(np.ones(3), np.arange(3.0), 2.0, direction, x)\n"
            "print(x.tolist())")
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True,
                          cwd=Path(kernels.__file__).parents[2])
    assert done.stdout.strip() == "[0.0, 2.0, 4.0]", done.stderr
