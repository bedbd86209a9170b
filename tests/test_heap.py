"""The switch that keeps freed memory while a run lasts."""

from __future__ import annotations

import pytest

from fv3d.flow import heap


class Library:
    """Notes what the C library is told."""

    def __init__(self) -> None:
        self.said: list[tuple[int, ...]] = []

    def mallopt(self, switch: int, value: int) -> int:
        self.said.append((switch, value))
        return 1

    def malloc_trim(self, kept: int) -> int:
        self.said.append((kept,))
        return 1


@pytest.fixture
def library(monkeypatch: pytest.MonkeyPatch) -> Library:
    made = Library()
    monkeypatch.setattr(heap, "_library", lambda: made)
    return made


ON = [(heap.MMAP_MAX, 0), (heap.TRIM_THRESHOLD, 2 ** 31 - 1)]
OFF = [(heap.MMAP_MAX, heap.USUAL_MMAP_MAX), (heap.TRIM_THRESHOLD, heap.USUAL_TRIM_THRESHOLD), (0,)]


def test_kept_within_the_block_and_given_back(library: Library) -> None:
    with heap.kept_memory():
        assert library.said == ON
    assert library.said == ON + OFF


def test_blocks_may_overlap_and_fail(library: Library) -> None:
    """Two iterations at once, the first ended before the second; the second by an error."""
    first, second = heap.kept_memory(), heap.kept_memory()
    first.__enter__()
    second.__enter__()
    first.__exit__(None, None, None)
    assert library.said == ON
    with pytest.raises(ValueError, match="stop"), heap.kept_memory():
        raise ValueError("stop")
    assert library.said == ON
    second.__exit__(None, None, None)
    assert library.said == ON + OFF


def test_a_system_without_the_switch(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(heap.sys, "platform", "elsewhere")
    heap._library.cache_clear()
    try:
        assert heap._library() is None
        with heap.kept_memory():
            pass
    finally:
        heap._library.cache_clear()
