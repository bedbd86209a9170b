"""Rows of the README's table of validated cases, from the cases' own ``reference.json``.

``python tests/case_table.py`` refreshes the rows; nothing changes where they are up to date.
"""

from __future__ import annotations

import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT / "cases"))

from judge import Figure, load  # noqa: E402

README = ROOT / "README.md"
START, END = "<!-- cases:start -->", "<!-- cases:end -->"
HEAD = ("| case | figure | ours | reference | deviation | source |\n"
        "|---|---|---|---|---|---|")
REFRESH = "python tests/case_table.py"


def case_folders() -> list[Path]:
    """Folders of all cases, in the order of their names."""
    return sorted(path.parent for path in (ROOT / "cases").glob("*/reference.json"))


def rows() -> str:
    """The whole table, one row per figure."""
    lines = [HEAD]
    for folder in case_folders():
        content = load(folder)
        first = f"[{content['title']}](cases/{folder.name}/run.py)"
        for name, reference in content["figures"].items():
            if "stored" not in reference:  # a long family that has not been run to its end
                continue
            figure = Figure(name, reference["stored"], reference)
            missed = "" if figure.meets_published else " **missed**"
            digits = 2 if reference.get("stored_tolerance", 1.0) is None else 6  # rounding size
            lines.append(f"| {first} | {name} | {figure.computed:.{digits}g} "
                         f"| {figure.expected}{missed} "
                         f"| {figure.deviation} | {reference['source']} |")
            first = ""
    return "\n".join(lines)


def with_rows(text: str) -> str:
    """A README text with the table between the markers replaced.

    Raises
    ------
    ValueError
        The markers are missing.
    """
    before, start, rest = text.partition(START)
    _, end, after = rest.partition(END)
    if not (start and end):
        raise ValueError(f"The README has no line {START} with {END} after it.")
    return f"{before}{START}\n{rows()}\n{END}{after}"


def write_rows(path: Path = README) -> bool:
    """Refresh the rows of a README; returns whether anything changed."""
    old = path.read_text(encoding="utf-8")
    new = with_rows(old)
    if new != old:
        path.write_text(new, encoding="utf-8")
    return new != old


if __name__ == "__main__":
    print("README refreshed" if write_rows() else "README is up to date")
