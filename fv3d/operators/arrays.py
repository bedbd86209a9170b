"""The compiled loops once more as array code: what their speed is measured against.

:func:`array_path` puts functions of NumPy, SciPy and pyamg in the place of the compiled loops, for
measurements and tests; nothing else uses them.  They live in :mod:`fv3d.operators.arrays_faces`
(loops over cells and faces) and :mod:`fv3d.operators.arrays_solving` (solvers and limiters), with
the names and arguments of the loops.

They are written to be fast: sums over the faces of a cell and interpolation to faces are products
with sparse matrices that are made once, what remains runs over blocks of rows that fit the cache.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np
import scipy.sparse as sparse

BLOCK = 16384  # rows whose work arrays fit the cache of a core

_store: dict[Any, Any] | None = None  # what is kept while array_path is in use


@contextmanager
def array_path() -> Iterator[None]:
    """Run the array functions instead of the compiled loops, in this process.

    For measurement only.  Meanwhile the geometry, connectivity and weights that the loops are
    called with count as constant: what follows from them is computed once and kept until the end.

    Examples
    --------
    >>> import fv3d
    >>> from fv3d.operators.arrays import array_path
    >>> mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4))
    >>> case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.1),
    ...                  boundaries={name: fv3d.Wall() for name in mesh.boundaries})
    >>> with array_path():
    ...     state, record = next(fv3d.iterate(case))
    """
    global _store
    from . import arrays_faces, arrays_solving, kernels, kernels_limiting, kernels_solving
    outer, replaced = _store, []
    for module in (kernels, kernels_solving, kernels_limiting):
        for name, loop in list(vars(module).items()):
            function = getattr(arrays_faces, name, None) or getattr(arrays_solving, name, None)
            if function is not None and is_loop(loop):
                replaced.append((module, name, loop))
                setattr(module, name, function)
    _store = {}
    try:
        yield
    finally:
        _store = outer
        for module, name, loop in replaced:
            setattr(module, name, loop)


def is_loop(thing: Any) -> bool:
    """Whether this is a compiled loop."""
    return hasattr(thing, "plain") or hasattr(thing, "py_func")


def kept(make: Callable[..., Any], *given: np.ndarray | int, newest: bool = False) -> Any:
    """``make(*given)``, made once while :func:`array_path` is in use.

    ``newest``: only that made last is kept.  Arrays are told apart by their places in memory,
    which stay theirs because they are kept too.
    """
    if _store is None:
        return make(*given)
    names = tuple((a.__array_interface__["data"][0], a.shape, a.dtype.char)
                  if isinstance(a, np.ndarray) else a for a in given)
    key = make if newest else (make, names)
    found = _store.get(key)
    if found is None or found[0] != names:
        found = _store[key] = (names, make(*given), given)
    return found[1]


def signed(indices: np.ndarray) -> np.ndarray:
    """Indices as SciPy wants them (no copy)."""
    return indices.view(np.int32) if indices.dtype == np.uint32 else indices


def compressed(indptr: np.ndarray, indices: np.ndarray, data: np.ndarray,
               columns: int) -> sparse.csr_matrix:
    """Matrix of these compressed rows (no copy)."""
    return sparse.csr_matrix((data, signed(indices), signed(indptr)),
                             shape=(len(indptr) - 1, columns), copy=False)


def blocks(n: int) -> Iterator[slice]:
    """Slices of at most ``BLOCK`` rows."""
    for start in range(0, n, BLOCK):
        yield slice(start, min(start + BLOCK, n))


def along(table: np.ndarray, arm: np.ndarray, out: np.ndarray, *, add: bool = False) -> None:
    """out[f, i] = or += sum over j of table[f, 3 i + j] arm[j, f], column by column.

    NumPy's loops over three numbers cost more than their arithmetic.
    """
    for i in range(out.shape[1]):
        total = table[:, 3 * i] * arm[0]
        total += table[:, 3 * i + 1] * arm[1]
        total += table[:, 3 * i + 2] * arm[2]
        if add:
            out[:, i] += total
        else:
            out[:, i] = total
