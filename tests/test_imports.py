"""Shape of the package: imports point downward, heavy libraries stay in their rooms, sizes."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import fv3d

PACKAGE = Path(fv3d.__file__).parent
LAYERS = ("mesh", "operators", "flow", "measured", "results")  # each may import those before it
FOR_ALL = {"errors", "signals"}
LATE = {"pyvista", "vtkmodules", "vtk", "meshio", "pyamg", "pandas", "matplotlib", "gmsh"}
HOMES = {
    "pyamg": {"operators/linear.py", "operators/arrays_solving.py"},
    "numba": {"operators/compiling.py"},
    "meshio": {"mesh/read.py", "mesh/write.py"},
}
FILES = sorted(path for path in PACKAGE.rglob("*.py"))


def name_of(path: Path) -> str:
    return path.relative_to(PACKAGE).as_posix()


def layer_of(path: Path) -> str:
    parts = path.relative_to(PACKAGE).parts
    return parts[0] if len(parts) > 1 else parts[0].removesuffix(".py")


def type_checking_only(tree: ast.Module) -> set[ast.AST]:
    """Nodes under ``if TYPE_CHECKING:``, which never run."""
    skipped: set[ast.AST] = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.If) and "TYPE_CHECKING" in ast.dump(node.test):
            skipped.update(inner for line in node.body for inner in ast.walk(line))
    return skipped


def imports(path: Path) -> Iterator[tuple[str, bool, int]]:
    """Absolute module name, whether it is loaded with the file, and line of every import."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    skipped = type_checking_only(tree)
    late = {inner for node in ast.walk(tree)
            if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.Lambda))
            for inner in ast.walk(node)}
    own = ["fv3d", *path.relative_to(PACKAGE).parts[:-1]]
    for node in ast.walk(tree):
        if node in skipped:
            continue
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, node not in late, node.lineno
        elif isinstance(node, ast.ImportFrom):
            base = own[:len(own) - node.level + 1] if node.level else []
            stem = [*base, *(node.module or "").split(".")] if node.module else base
            for alias in node.names:
                yield ".".join([*stem, alias.name]), node not in late, node.lineno


def test_the_walk_sees_what_it_should(tmp_path: Path) -> None:
    """The checks below rest on :func:`imports`: it must find late, relative and guarded ones."""
    seen = {name: early for name, early, _ in imports(PACKAGE / "operators" / "linear.py")}
    assert seen["pyamg"] is False
    assert seen["fv3d.operators.kernels_solving"] is True
    assert seen["fv3d.errors.CaseError"] is True
    assert not any(name == "pandas" and early for name, early, _ in
                   imports(PACKAGE / "measured" / "readings.py"))  # guarded by TYPE_CHECKING


@pytest.mark.parametrize("path", FILES, ids=name_of)
def test_imports_point_downward(path: Path) -> None:
    mine = layer_of(path)
    if mine == "__init__":
        return
    wrong = []
    for name, _, line in imports(path):
        parts = name.split(".")
        if parts[0] != "fv3d" or len(parts) < 2 or parts[1] in FOR_ALL:
            continue
        if mine in FOR_ALL or LAYERS.index(parts[1]) > LAYERS.index(mine):
            wrong.append(f"line {line}: {name}")
    assert not wrong


@pytest.mark.parametrize("path", FILES, ids=name_of)
def test_heavy_libraries_stay_in_their_rooms(path: Path) -> None:
    wrong = []
    for name, early, line in imports(path):
        library = name.split(".")[0]
        if library in LATE and early:
            wrong.append(f"line {line}: {library} is loaded with the file")
        if library in HOMES and name_of(path) not in HOMES[library]:
            wrong.append(f"line {line}: {library} belongs to {', '.join(HOMES[library])}")
    assert not wrong


@pytest.mark.parametrize("path", FILES, ids=name_of)
def test_nothing_but_measurement_uses_the_array_path(path: Path) -> None:
    """It may import the compiled loops where it takes their place, nowhere else."""
    mine = name_of(path)
    for name, early, line in imports(path):
        if not mine.startswith("operators/arrays"):
            assert not name.startswith("fv3d.operators.arrays"), f"line {line}: {name}"
        elif name.startswith(("fv3d.operators.kernels", "numba")):
            assert mine == "operators/arrays.py" and not early, f"line {line}: {name}"


def test_import_loads_nothing_heavy() -> None:
    code = f"import sys, fv3d; print(sorted(sys.modules.keys() & {LATE!r}))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True,
                          check=True, cwd=PACKAGE.parent)
    assert done.stdout.strip() == "[]"


def test_public_names_exist_and_are_documented() -> None:
    assert len(fv3d.__all__) == len(set(fv3d.__all__))
    for name in fv3d.__all__:
        assert (getattr(fv3d, name).__doc__ or "").strip(), name


@pytest.mark.parametrize("path", FILES, ids=name_of)
def test_sizes(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    lengths = {node.name: (node.end_lineno or 0) - node.lineno + 1 - docstring_lines(node)
               for node in ast.walk(ast.parse(text))
               if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef))}
    assert len(text.splitlines()) <= 400
    assert {name: length for name, length in lengths.items() if length > 60} == {}


def docstring_lines(node: ast.FunctionDef | ast.AsyncFunctionDef) -> int:
    if ast.get_docstring(node) is None:
        return 0
    return (node.body[0].end_lineno or 0) - node.body[0].lineno + 1


@pytest.mark.parametrize("path", FILES, ids=name_of)
def test_at_most_two_positional_arguments(path: Path) -> None:
    """Public functions take two positional arguments, the rest by name.

    ``build_mesh(points, cells, boundaries)`` takes three: together they are one thing, a mesh.
    """
    wrong = [node.name for node in ast.parse(path.read_text(encoding="utf-8")).body
             if isinstance(node, ast.FunctionDef) and node.name in fv3d.__all__
             and node.name != "build_mesh"
             and len(node.args.posonlyargs) + len(node.args.args) > 2]
    assert not wrong


def test_this_file_checks_the_whole_package() -> None:
    assert {layer_of(path) for path in FILES} >= set(LAYERS)
    assert {"errors", "__init__"} <= {layer_of(path) for path in FILES}
