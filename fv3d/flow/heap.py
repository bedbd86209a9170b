"""Memory that an iteration frees is kept for the next one.

The C library gives large arrays back to the system as soon as they are freed, and the system
clears every page it hands out again: about a fifth of the time of an iteration.  While a run lasts
freed memory is kept instead, where the C library has the switches (GNU: ``mallopt``).
"""

from __future__ import annotations

import ctypes
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache
from typing import Any

TRIM_THRESHOLD, MMAP_MAX = -1, -4  # numbers of the switches in malloc.h
USUAL_TRIM_THRESHOLD, USUAL_MMAP_MAX = 128 * 1024, 65536  # their values at the start of a process
_users = [0]


@cache
def _library() -> Any:
    """The C library, or None where it has no such switches."""
    if not sys.platform.startswith("linux"):
        return None
    try:
        library = ctypes.CDLL(None)
        return library if hasattr(library, "mallopt") and hasattr(library, "malloc_trim") else None
    except OSError:
        return None


@contextmanager
def kept_memory() -> Iterator[None]:
    """Keep freed memory in the process within the block; give it back at the end.

    Blocks may be nested and may end in any order.
    """
    library = _library()
    if library is None:
        yield
        return
    _users[0] += 1
    if _users[0] == 1:
        library.mallopt(MMAP_MAX, 0)
        library.mallopt(TRIM_THRESHOLD, 2 ** 31 - 1)
    try:
        yield
    finally:
        _users[0] -= 1
        if _users[0] == 0:
            library.mallopt(MMAP_MAX, USUAL_MMAP_MAX)
            library.mallopt(TRIM_THRESHOLD, USUAL_TRIM_THRESHOLD)
            library.malloc_trim(0)
