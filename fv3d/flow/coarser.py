"""Coarse-to-fine start: the case is run on coarser meshes first, each run the start of the next.

The meshes are given, or made by joining cells (:mod:`fv3d.mesh.agglomerate`).

What is smooth in the fields costs little on a coarse mesh, and the fine one only has to add what
the coarse one could not show.  The solution stays that of the fine mesh alone.

Source: the nested iteration of Brandt, A. (1977), Math. Comput. 31, 333-390, section 6 (cited from
memory), without the correction cycles.
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise
from typing import Any

import numpy as np

from ..errors import CaseError, DivergenceError, Fv3dError, Fv3dWarning, as_number, did_you_mean
from ..mesh.agglomerate import AgglomeratedMesh, agglomerate
from ..mesh.mesh import Mesh
from .problem import Case, Source
from .resistance import resisting_cells
from .run import Run

SAME_PLACE = 0.1  # of the extent that the corners of two meshes of one domain may lie apart
SAME_VOLUME = 0.25  # share that their volumes may differ by
FEWEST_JOINED = 2000  # cells of a mesh that is agglomerated

Solve = Callable[[Case, tuple[Source, ...], Any, str], Run]


@dataclass(frozen=True, eq=False)
class CoarserMeshes:
    """Start of a steady run from runs of the same case on coarser meshes of its domain.

    Boundaries, fluid, forces and methods are those of the case; readings are fed on the coarser
    meshes, too.  A coarse run that fails is told and left out.

    Parameters
    ----------
    meshes : Mesh, or sequence of meshes from the coarsest to the finest
        With the boundary names of the case's mesh and fewer cells.
    tolerance : float
        Of the coarse runs, on all their residuals.
    max_iterations : int
        Of each coarse run.

    Raises
    ------
    CaseError
        No meshes or not from coarse to fine, a number that is not positive; when the run begins,
        also for meshes of another domain, with other boundary names or not coarser.

    Examples
    --------
    >>> import fv3d
    >>> coarse, fine = (fv3d.box((0, 0, 0), (2, 1, 1), cells=(2 * k, k, k)) for k in (3, 6))
    >>> walls = {name: fv3d.Wall() for name in fine.boundaries}
    >>> case = fv3d.Case(fine, fv3d.Fluid(density=1.0, viscosity=0.1), boundaries=walls | {
    ...     "x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "x_max": fv3d.Outlet()})
    >>> run = fv3d.solve_steady(case, start=fv3d.CoarserMeshes(coarse), tolerance=1e-5,
    ...                         max_iterations=200, progress=False)
    >>> run.outcome.name
    'converged'
    """

    meshes: Mesh | Sequence[Mesh]
    tolerance: float = field(default=1e-3, kw_only=True)
    max_iterations: int = field(default=300, kw_only=True)

    @property
    def family(self) -> tuple[Mesh, ...]:
        """The meshes from the coarsest on."""
        return (self.meshes,) if isinstance(self.meshes, Mesh) else tuple(self.meshes)

    def __post_init__(self) -> None:
        given = (self.meshes,) if isinstance(self.meshes, Mesh) else self.meshes
        whole = isinstance(given, Sequence) and len(given) > 0
        if not whole or not all(isinstance(one, Mesh) for one in given):
            raise CaseError("A coarse-to-fine start needs coarser meshes.", got=_kinds(given),
                            where="CoarserMeshes(meshes)",
                            remedy="Give CoarserMeshes((coarse, medium)), meshes from read_mesh "
                                   "or a generator.")
        cells = [one.n_cells for one in given]
        if any(fine <= coarse for coarse, fine in pairwise(cells)):
            raise CaseError("The meshes must go from the coarsest to the finest.",
                            where="CoarserMeshes(meshes)", remedy="Put them in that order.",
                            got=", ".join(f"{count} cells" for count in cells))
        _check_limits("CoarserMeshes", self.tolerance, self.max_iterations)

    def coarse_cases(self, case: Case) -> list[Case]:
        """The case on each mesh, from the coarsest on."""
        return [coarse_case(case, mesh) for mesh in self.family]

    def fed(self, sources: tuple[Source, ...]) -> tuple[Source, ...]:
        """Sources that act on the coarser meshes."""
        return sources


@dataclass(frozen=True)
class Agglomerated:
    """Start of a steady run from runs on meshes made of its own by joining cells.

    Each level has about an eighth of the cells of the one before.  For meshes without a family of
    coarser ones, of any kind of cells; not for periodic boundaries.  Readings are not fed on the
    coarse levels.  A coarse run that fails is told and left out.  It saves most in recirculating
    flows on many cells; a flow straight through gains little over the irrotational start.

    Parameters
    ----------
    levels : int
        Most levels; none is made of a mesh of fewer than 2000 cells.
    tolerance, max_iterations
        As of :class:`CoarserMeshes`.

    Raises
    ------
    CaseError
        A number that is not positive; when the run begins, also for periodic boundaries.
    """

    levels: int = 2
    tolerance: float = field(default=1e-3, kw_only=True)
    max_iterations: int = field(default=300, kw_only=True)

    def __post_init__(self) -> None:
        if not _whole(self.levels):
            raise CaseError("The number of levels is a whole number from 1.", got=repr(self.levels),
                            where="Agglomerated(levels=)", remedy="Give 2, say.")
        _check_limits("Agglomerated", self.tolerance, self.max_iterations)

    def coarse_cases(self, case: Case) -> list[Case]:
        """The case on each level, from the coarsest on."""
        if case.mesh.joined:
            raise CaseError("An agglomerated mesh has no periodic boundaries.",
                            where="start=Agglomerated(...)", got=", ".join(case.mesh.joined),
                            remedy="Give CoarserMeshes(...), or leave start= out.")
        cases = [case]
        while len(cases) <= self.levels and cases[0].mesh.n_cells >= FEWEST_JOINED:
            mesh = cases[0].mesh
            number = np.full(mesh.n_cells, -1)
            for k, cells in enumerate(resisting_cells(mesh, cases[0].resistances).values()):
                number[cells] = k
            cases.insert(0, _on_mesh(cases[0], agglomerate(mesh, apart=number)))
        return cases[:-1]

    def fed(self, sources: tuple[Source, ...]) -> tuple[Source, ...]:
        """None: there are no points to interpolate to."""
        return ()


def _whole(value: Any) -> bool:
    return not isinstance(value, str) and as_number(value) >= 1 and as_number(value) % 1 == 0


def _check_limits(call: str, tolerance: Any, max_iterations: Any) -> None:
    if isinstance(tolerance, str) or not 0.0 < as_number(tolerance) < np.inf:
        raise CaseError("The tolerance of the coarse runs must be positive.",
                        where=f"{call}(tolerance=)", got=repr(tolerance), remedy="Give 1e-3, say.")
    if not _whole(max_iterations):
        raise CaseError("The limit of iterations is a whole number from 1.",
                        where=f"{call}(max_iterations=)", got=repr(max_iterations),
                        remedy="Give 300, say.")


@dataclass(frozen=True, eq=False)
class Before:
    """What ran before a run: the run it starts from, lines for its sheet, and seconds spent."""

    start: Any
    lines: tuple[str, ...] = ()
    seconds: float = 0.0


def run_coarser(chosen: CoarserMeshes | Agglomerated, case: Case, sources: tuple[Source, ...],
                *, name: str, solve: Solve) -> Before:
    """Run a case on the coarser meshes, from the coarsest on.

    Parameters
    ----------
    solve : (case, sources, start, name) -> Run
        A steady run with the tolerance and the limit of ``chosen``.

    Raises
    ------
    CaseError, BoundaryError
        The meshes are not coarser ones of the same domain with the same names.
    KeyboardInterrupt
        The user stopped a coarse run: there is nothing to keep.
    """
    began, start, lines = time.perf_counter(), None, []
    for coarse in chosen.coarse_cases(case):
        label = f"{name}, {coarse.mesh.n_cells} cells"
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore", Fv3dWarning)
                run = solve(coarse, chosen.fed(sources), start, label)
        except DivergenceError as error:
            line = f"{coarse.mesh.n_cells} cells: diverged after " \
                   f"{len(error.run.history['iteration'])} iterations, left out"
        except Fv3dError as error:
            line = f"{coarse.mesh.n_cells} cells: left out. {error.what}"
        else:
            if run.outcome.name == "interrupted":
                raise KeyboardInterrupt
            start = fields_only(run)
            lines.append(f"{coarse.mesh.n_cells} cells: {run.outcome.name}, "
                         f"{len(run.history['iteration'])} iterations, {run.seconds:.1f} s")
            continue
        lines.append(line)
        warnings.warn(f"Coarse-to-fine start of run '{name}': {line}", Fv3dWarning, stacklevel=5)
    return Before(start, tuple(lines), time.perf_counter() - began)


def fields_only(run: Run) -> Run:
    """The run without its readings' force, whose strengths and gains belong to its own mesh."""
    kept = [(source, own) for source, own in zip(run.problem.sources, run.state.sources)
            if not getattr(source, "artificial", True)]
    return replace(run, problem=replace(run.problem, sources=tuple(s for s, _ in kept)),
                   state=replace(run.state, pressure=run.pressure,
                                 sources=tuple(own for _, own in kept)))


def coarse_case(case: Case, mesh: Mesh) -> Case:
    """The same case on a coarser mesh; values of cells become means, small zones are left out.

    Raises
    ------
    CaseError
        Not coarser, of another domain, or with other boundary names.
    """
    _check_names(case, mesh)
    _check_domain(case.mesh, mesh)
    return _on_mesh(case, mesh)


def _on_mesh(case: Case, mesh: Mesh) -> Case:
    values = {name: _on_coarse(case.mesh, mesh, getattr(case, name))
              for name in ("viscosity", "body_force")}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", Fv3dWarning)
        return replace(case, mesh=mesh, boundaries=dict[str, Any](case.boundaries, **case.periodic),
                       periodic={}, resistances=_present(case, mesh), **values)


def _present(case: Case, mesh: Mesh) -> dict[str, Any]:
    """Resistances that have cells on the coarser mesh."""
    return {name: law for name, law in case.resistances.items()
            if (name in mesh.zones if law.where is None
                else bool(np.any(law.where(mesh.cell_centre.copy()))))}


def _on_coarse(fine: Mesh, coarse: Mesh, value: Any) -> Any:
    """A field of the fine mesh's cells as means over the cells nearest to each coarse one."""
    if not isinstance(value, np.ndarray) or value.shape[:1] != (fine.n_cells,):
        return value
    from scipy.spatial import cKDTree
    home = coarse.group if isinstance(coarse, AgglomeratedMesh) \
        else cKDTree(coarse.cell_centre).query(fine.cell_centre)[1]
    share = np.bincount(home, fine.cell_volume, coarse.n_cells)
    columns = value.reshape(fine.n_cells, -1).T
    mean = np.stack([np.bincount(home, fine.cell_volume * column, coarse.n_cells)
                     for column in columns], axis=1) / np.maximum(share, 1e-300)[:, None]
    empty = np.flatnonzero(share == 0.0)
    if empty.size:
        _, near = cKDTree(fine.cell_centre).query(coarse.cell_centre[empty])
        mean[empty] = columns.T[near]
    return mean.reshape(coarse.n_cells, *value.shape[1:])


def _names(mesh: Mesh) -> set[str]:
    """Names of all boundaries, those of joined pairs included."""
    return set(mesh.boundaries) | set(mesh.joined) | {one.partner for one in mesh.joined.values()}


def _check_names(case: Case, mesh: Mesh) -> None:
    wanted, found = _names(case.mesh), _names(mesh)
    for name in sorted(wanted ^ found):
        missing = name in wanted
        raise CaseError("A coarser mesh must have the boundaries of the case's mesh.",
                        where=f"CoarserMeshes(meshes), mesh of {mesh.n_cells} cells",
                        got=f"no boundary '{name}'" if missing else f"another boundary '{name}'",
                        remedy=f"Name its boundaries {', '.join(sorted(wanted))}."
                               + ("" if missing else did_you_mean(name, wanted - found)))


def _check_domain(fine: Mesh, mesh: Mesh) -> None:
    where = f"CoarserMeshes(meshes), mesh of {mesh.n_cells} cells"
    if mesh.n_cells >= fine.n_cells:
        raise CaseError("The mesh is not coarser than that of the case.", where=where,
                        got=f"the case has {fine.n_cells} cells",
                        remedy="Give coarser meshes, or leave start= out.")
    low, high = fine.points.min(axis=0), fine.points.max(axis=0)
    corners = mesh.points.min(axis=0), mesh.points.max(axis=0)
    apart = np.maximum(np.abs(corners[0] - low), np.abs(corners[1] - high))
    ratio = float(mesh.cell_volume.sum() / fine.cell_volume.sum())
    if np.any(apart > SAME_PLACE * (high - low)) or abs(ratio - 1.0) > SAME_VOLUME:
        raise CaseError("The coarser mesh is one of another domain.", where=where,
                        got=f"{ratio:.3g} times the volume, corners up to {apart.max():.3g} m "
                            "away from those of the case's mesh",
                        remedy="Check the unit and the axes of both meshes (read_mesh(scale=)).")


def _kinds(given: Any) -> str:
    if isinstance(given, Sequence) and not isinstance(given, str):
        return ", ".join(type(one).__name__ for one in given) or "none"
    return type(given).__name__
