"""How loops are compiled, for one thread and for several, and the number of threads."""

from __future__ import annotations

import os
import types
import warnings
from collections.abc import Callable
from numbers import Integral
from typing import Any

# Threads that wait for work give their core away soon: beside another job on the same cores a loop
# is else up to ten times slower than on one thread.  Read by the OpenMP library when it is loaded.
os.environ.setdefault("GOMP_SPINCOUNT", "1000")

import numba
import numpy as np

from ..errors import CaseError, Fv3dWarning

prange = numba.prange
SMALL = 20_000  # below this many rows a second thread costs more than it brings


def _jit(function: Callable, **options: Any) -> Callable:
    options = {"error_model": "numpy", "fastmath": {"contract"}, **options}
    try:
        return numba.njit(cache=True, **options)(function)
    except RuntimeError:
        warnings.warn("No folder for compiled code can be written: loops are compiled again at "
                      "every start (some seconds). Set NUMBA_CACHE_DIR to a writable folder.",
                      Fv3dWarning, stacklevel=3)
        return numba.njit(**options)(function)


def compiled(function: Callable) -> Callable:
    """Compile a loop for one thread, cached on disk where a folder can be written."""
    return _jit(function)


class ThreadedKernel:
    """A loop compiled twice, for one thread and for several; the size of the work decides."""

    def __init__(self, function: Callable) -> None:
        single = types.FunctionType(function.__code__, function.__globals__, function.__name__)
        single.__qualname__ = function.__qualname__ + "_single"  # a cache entry of its own
        single.__module__ = function.__module__
        self.plain = function
        self._single = _jit(single)
        self._threaded = _jit(function, parallel=True)

    def __call__(self, *arguments: Any) -> None:
        """Run over the rows of the first argument."""
        arguments = tuple(a.view(np.uint32) if isinstance(a, np.ndarray) and a.dtype == np.int32
                          else a for a in arguments)
        if len(arguments[0]) < SMALL or numba.get_num_threads() == 1:
            self._single(*arguments)
        else:
            self._threaded(*arguments)


def set_threads(count: int) -> None:
    """Set the number of threads of the compiled loops, for this process.

    Parameters
    ----------
    count : int
        From 1 to the number of cores, or to the environment variable ``NUMBA_NUM_THREADS``
        where it is set.

    Raises
    ------
    CaseError
        Not a whole number in this range.
    """
    most = int(numba.config.NUMBA_NUM_THREADS)  # type: ignore[attr-defined]
    whole = isinstance(count, Integral) and not isinstance(count, bool)
    if not whole or not 1 <= count <= most:
        raise CaseError(f"The number of threads is a whole number from 1 to {most} here.",
                        where="set_threads(count)", got=repr(count),
                        remedy="Give a number in this range; for more, set the environment "
                               "variable NUMBA_NUM_THREADS before Python starts.")
    numba.set_num_threads(int(count))


def get_threads() -> int:
    """Number of threads of the compiled loops.

    Returns
    -------
    int
        All cores, unless :func:`set_threads` or ``NUMBA_NUM_THREADS`` says otherwise.
    """
    return int(numba.get_num_threads())
