"""The README says what is true: its script runs, its commands and links exist."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import fv3d

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")


def blocks(kind: str) -> list[str]:
    return re.findall(rf"```{kind}\n(.*?)```", README, flags=re.DOTALL)


def test_two_commands_each_with_its_whole_set_up() -> None:
    commands = [block.strip() for block in blocks("bash")]
    assert len(commands) == 2
    for command in commands:
        assert command.startswith("python3 -m venv ") and "\n" not in command
        assert "pip install" in command
    demo, tests = commands
    assert (ROOT / demo.split()[-1]).is_file()
    assert tests.endswith("/bin/python -m tests")


def test_the_tests_in_a_clean_clone_are_the_readme_command() -> None:
    script = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    assert os.access(ROOT / ".ci" / "run", os.X_OK)
    pattern = re.search(r"grep -E '(.*?)' README.md", script)
    assert pattern
    assert [block.strip() for block in blocks("bash")][1] in [
        line for line in README.splitlines() if re.search(pattern.group(1), line)]


@pytest.mark.parametrize("text", [README, DEVELOPERS], ids=["README", "DEVELOPERS"])
def test_links_and_files_exist(text: str) -> None:
    links = re.findall(r"\]\(([^)#]+)\)", text)
    assert links
    named = re.findall(r"`((?:fv3d|tests|cases|meshes|\.ci)/[\w./]*)`", text)
    for target in links + named:
        assert target.startswith("http") or (ROOT / target).exists(), target


def test_the_script_runs(tmp_path: Path) -> None:
    """On a duct of its own with readings from another inflow, as a user would run it."""
    script, = blocks("python")
    assert len(script.strip().splitlines()) <= 15
    mesh = fv3d.channel_with_block(length=120.0, height=40.0, depth=8.0, lower=(30.0, 16.0),
                                   upper=(38.0, 24.0), first_layer=1.6, growth=1.2, coarsest=4.0)
    fv3d.write_mesh(mesh, tmp_path / "duct.msh")
    truth = rig(mesh)
    write_readings(truth, tmp_path / "readings.csv")
    (tmp_path / "script.py").write_text(script)
    done = subprocess.run([sys.executable, "-W", "error", "script.py"], cwd=tmp_path, text=True,
                          capture_output=True, env={**os.environ, "PYTHONPATH": str(ROOT)})
    assert done.returncode == 0, done.stderr
    for words in ("run 'plain'", "run 'guided'", "Misfit at withheld readings"):
        assert words in done.stdout
    assert done.stdout.count("converged") == 2
    assert (tmp_path / "guided.vtu").stat().st_size > 1000


def rig(mesh: fv3d.Mesh) -> fv3d.Run:
    """The "true" flow: a skewed inflow the script knows nothing of."""
    small = fv3d.channel_with_block(length=0.12, height=0.04, depth=0.008, lower=(0.03, 0.016),
                                    upper=(0.038, 0.024), first_layer=0.0016, growth=1.2,
                                    coarsest=0.004)
    assert small.n_cells == mesh.n_cells
    skewed = fv3d.Inlet(lambda x: np.outer(0.1 * (0.6 + 20.0 * x[:, 1]), (1.0, 0.0, 0.0)))
    air = fv3d.moist_air(temperature=295.4, pressure=100_900.0, relative_humidity=0.46)
    case = fv3d.Case(small, air, boundaries={
        "inlet": skewed, "outlet": fv3d.Outlet(), "block": fv3d.Wall(), "walls": fv3d.Wall(),
        "sides": fv3d.Symmetry()})
    return fv3d.solve_steady(case, tolerance=1e-5, max_iterations=2000, progress=False)


def write_readings(truth: fv3d.Run, path: Path) -> None:
    """Two rakes of four probes, in the layout the README shows."""
    header = next(line for block in blocks("text") for line in block.splitlines() if "[mm]" in line)
    lines = [header]
    for rake, x in ((1, 60.0), (2, 80.0)):
        for k, y in enumerate((8.0, 16.0, 24.0, 32.0)):
            u = truth.sample(np.array([[x, y, 4.0]]) * 1e-3).velocity[0, 0]
            lines.append(f"r{rake}-{k}, rake {rake}, {x}, {y}, 4.0, {u:.5f}, 0.002")
    path.write_text("\n".join(lines) + "\n")


def test_the_readings_shown_can_be_read(tmp_path: Path) -> None:
    shown = next(block for block in blocks("text") if "[mm]" in block)
    (tmp_path / "readings.csv").write_text(shown)
    readings = fv3d.read_readings(tmp_path / "readings.csv")
    assert readings.groups == ("rake 1",)
    np.testing.assert_allclose(readings.point[0], [0.060, 0.012, 0.004])


def test_cautions_are_there() -> None:
    for words in ("licence to skip codes", "medical", "laminar", "invented"):
        assert words in README
