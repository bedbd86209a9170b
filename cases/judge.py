"""Judge the figures of a case: against the published value and against our stored result.

Every case is a folder with ``run.py`` (``figures()`` computes, running the script prints) and
``reference.json``.  A figure in ``reference.json`` carries one of

``published`` with ``relative_tolerance``; ``interval`` (lowest, highest); ``at_most``; or
``reported``, a text, where nothing is published and the figure is only kept

and ``source``; ``stored`` is our result, met again within ``stored_tolerance`` (relative) unless
that is null (figures of rounding size).
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

CASES = Path(__file__).resolve().parent
STORED_TOLERANCE = 1e-4


@dataclass(frozen=True)
class Figure:
    """One figure of a case beside what it is judged by."""

    name: str
    computed: float
    reference: Mapping[str, Any]

    @property
    def expected(self) -> str:
        """The published value or bound, in words."""
        unit = f" {self.reference['unit']}" if self.reference.get("unit") else ""
        if "published" in self.reference:
            return (f"{self.reference['published']:.6g}{unit} "
                    f"± {100 * self.reference['relative_tolerance']:g} %")
        if "interval" in self.reference:
            low, high = self.reference["interval"]
            return f"{low:g} … {high:g}{unit}"
        if "at_most" in self.reference:
            return f"≤ {self.reference['at_most']:g}{unit}"
        return str(self.reference["reported"])

    @property
    def deviation(self) -> str:
        """Relative deviation from the published value, where there is one."""
        if "published" not in self.reference:
            return ""
        return f"{100 * (self.computed / self.reference['published'] - 1):+.3f} %"

    @property
    def meets_published(self) -> bool:
        """Whether the figure agrees with the published value or bound."""
        if "published" in self.reference:
            published = self.reference["published"]
            allowed = self.reference["relative_tolerance"] * abs(published)
            return bool(abs(self.computed - published) <= allowed)
        if "interval" in self.reference:
            low, high = self.reference["interval"]
            return bool(low <= self.computed <= high)
        if "at_most" in self.reference:
            return bool(abs(self.computed) <= self.reference["at_most"])
        return True

    @property
    def meets_stored(self) -> bool:
        """Whether the figure repeats our stored result."""
        tolerance = self.reference.get("stored_tolerance", STORED_TOLERANCE)
        if tolerance is None:
            return True
        stored = self.reference["stored"]
        return bool(abs(self.computed - stored) <= tolerance * abs(stored))


def load(folder: Path) -> dict[str, Any]:
    """The content of ``reference.json`` of a case."""
    return json.loads((folder / "reference.json").read_text(encoding="utf-8"))


def judge(folder: Path, computed: Mapping[str, float]) -> list[Figure]:
    """Computed figures beside their references.

    Raises
    ------
    KeyError
        The names do not agree with those of ``reference.json``.
    """
    references = load(folder)["figures"]
    if list(computed) != list(references):
        raise KeyError(f"{folder.name}: computed {list(computed)}, referenced {list(references)}")
    return [Figure(name, float(value), references[name]) for name, value in computed.items()]


def store(folder: Path, computed: Mapping[str, float]) -> None:
    """Keep the computed figures as our result in ``reference.json``."""
    content = load(folder)
    for figure in judge(folder, computed):
        content["figures"][figure.name]["stored"] = float(f"{figure.computed:.8g}")
    text = json.dumps(content, indent=2, ensure_ascii=False) + "\n"
    (folder / "reference.json").write_text(text, encoding="utf-8")


def sheet(title: str, figures: list[Figure]) -> str:
    """A table of figures for the terminal."""
    wide = max(len(figure.name) for figure in figures)
    lines = [title, f"  {'figure':<{wide}} {'computed':>13} {'stored':>13}  expected"]
    for figure in figures:
        verdict = "ok" if figure.meets_published else "MISSED"
        stored = figure.reference.get("stored")
        kept = "-" if stored is None else f"{stored:.6g}"
        lines.append(f"  {figure.name:<{wide}} {figure.computed:>13.6g} {kept:>13}  "
                     f"{figure.expected} {figure.deviation} {verdict}")
    return "\n".join(lines)


def main(script: str, figures: Callable[[], Mapping[str, float]]) -> None:
    """Run a case from its script: print its figures, keep them with ``--store``."""
    folder = Path(script).resolve().parent
    computed = figures()
    print(sheet(load(folder)["title"], judge(folder, computed)))
    if "--store" in sys.argv[1:]:
        store(folder, computed)
        print(f"kept in {folder / 'reference.json'}")
