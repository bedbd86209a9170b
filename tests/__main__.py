"""Everything the project checks, in one command: ``python -m tests [pytest options]``.

Linter, type checker, then pytest (doctests included) on all cores; fails if any of them fails.
"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]


def main(options: list[str]) -> int:
    """Run the three checks; the exit code is 0 only if all passed."""
    os.chdir(ROOT)
    # pytest-xdist uses the cores: one thread each. A test of several threads starts its own process
    environment = {**os.environ, "NUMBA_NUM_THREADS": "1"}
    checks = {
        "ruff": ["ruff", "check", "."],
        "mypy": ["mypy"],
        "pytest": ["pytest", "-q", "-n", str(os.cpu_count() or 1), *options],
    }
    failed = []
    for name, command in checks.items():
        print(f"== {name}", flush=True)
        if subprocess.run([sys.executable, "-m", *command], env=environment).returncode:
            failed.append(name)
            if name != "pytest":  # whose own summary shall stay the last lines
                print(f"== {name} FAILED, so this command fails", flush=True)
    return 1 if failed else 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
