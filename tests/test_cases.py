"""The validated cases: against the published values and against our own stored results.

Quick ones (marker ``case``) run with the other tests; those that take minutes carry ``long``
too: ``pytest -m "case and long" tests/test_cases.py``.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import pytest
from case_table import README, REFRESH, case_folders, rows, with_rows, write_rows
from judge import Figure, judge, load

FOLDERS = case_folders()


def script_of(folder: Path, monkeypatch: pytest.MonkeyPatch) -> ModuleType:
    """The case's script as a module; as when it is run, its folder is searched for modules."""
    monkeypatch.syspath_prepend(str(folder))
    spec = importlib.util.spec_from_file_location(f"case_{folder.name}", folder / "run.py")
    assert spec and spec.loader
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def marked(folder: Path) -> object:
    marks = [pytest.mark.case] + ([pytest.mark.long] if load(folder).get("long") else [])
    return pytest.param(folder, marks=marks, id=folder.name)


@pytest.mark.parametrize("folder", [marked(folder) for folder in FOLDERS])
def test_case(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    found = judge(folder, script_of(folder, monkeypatch).figures())
    assert found
    missed = [f"{f.name}: {f.computed:.8g}, expected {f.expected}" for f in found
              if not f.meets_published]
    moved = [f"{f.name}: {f.computed:.8g}, stored {f.reference['stored']:.8g}" for f in found
             if not f.meets_stored]
    assert not missed, f"against the published values: {missed}"
    assert not moved, (f"against the stored results: {moved}; if the change is wanted: "
                       f"python cases/{folder.name}/run.py --store")


@pytest.mark.parametrize("folder", FOLDERS, ids=lambda folder: folder.name)
def test_reference_is_whole(folder: Path) -> None:
    content = load(folder)
    assert content["title"]
    for name, reference in content["figures"].items():
        assert reference["source"], name
        assert sum(key in reference for key in ("published", "interval", "at_most",
                                                "reported")) == 1, name
        assert Figure(name, reference["stored"], reference).meets_published, name


def test_a_figure_off_its_reference_is_seen() -> None:
    published = {"published": 2.0, "relative_tolerance": 0.01, "stored": 2.0}
    assert Figure("x", 2.01, published).meets_published
    assert not Figure("x", 2.03, published).meets_published
    assert not Figure("x", float("nan"), published).meets_published
    assert Figure("x", 2.0001, published).meets_stored
    assert not Figure("x", 2.001, published).meets_stored
    interval = {"interval": [1.0, 2.0], "stored": 1.5}
    assert Figure("x", 1.0, interval).meets_published
    assert not Figure("x", 0.99, interval).meets_published
    assert not Figure("x", -3e-6, {"at_most": 1e-6}).meets_published


def test_readme_rows_are_up_to_date() -> None:
    text = README.read_text(encoding="utf-8")
    assert with_rows(text) == text, f"The README's table of cases is stale: {REFRESH}"


def test_rows_are_written_between_the_markers(tmp_path: Path) -> None:
    path = tmp_path / "README.md"
    path.write_text("before\n<!-- cases:start -->\nold\n<!-- cases:end -->\nafter\n")
    assert write_rows(path)
    text = path.read_text(encoding="utf-8")
    assert text.startswith("before\n") and text.endswith("\nafter\n") and "old" not in text
    assert rows() in text
    assert not write_rows(path)
    path.write_text("no markers")
    with pytest.raises(ValueError, match="cases:start"):
        write_rows(path)
