"""Checkpoints: all a run needs to go on to the last bit, in one file.

The file is a NumPy archive of plain arrays (no pickled objects) with one text that says what they
are, the version of the format, fingerprints of mesh and case, and a digest over everything.  It is
written aside and renamed, so that the one before stays whole until the next is.
"""

from __future__ import annotations

import io
import json
import os
import time
import warnings
import zipfile
import zlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import CaseError, FileError, Fv3dWarning, as_number
from ..operators import linear
from .coupling import Record, Workspace
from .monitors import Monitor
from .packing import Packer, array_digest, digest, unpack
from .problem import Problem, State

VERSION = 2
REBUILT = ("response", "tracer", "prepared", "projection", "pseudo_step")  # of the workspace
MOMENTS = (0.0, 0.013, 0.17, 1.0, 7.3, 110.0)  # times at which factors are compared [s]


@dataclass(frozen=True)
class Checkpoint:
    """Where and how often a run is stored, for ``solve_...(checkpoint=)``.

    Parameters
    ----------
    path : path of the file, which each storing replaces
    every : int, optional
        Iterations, or time steps, between two storings.
    minutes : float, optional
        Minutes between two storings.

    The end of a run is stored in any case, also after an interruption.

    Raises
    ------
    CaseError
        A number that is not positive.
    FileError
        The folder does not exist or cannot be written to.
    """

    path: str | os.PathLike[str]
    every: int | None = field(default=None, kw_only=True)
    minutes: float | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        whole = self.every is None or as_number(self.every) % 1 == 0
        for name, value in (("every", self.every), ("minutes", self.minutes)):
            if value is not None and not (as_number(value) > 0 and whole):
                raise CaseError("The interval between checkpoints must be positive.", got=value,
                                where=f"Checkpoint({name}=)", remedy="Give every=100, say.")
        if not isinstance(self.path, str | os.PathLike) or \
                not os.access(Path(self.path).parent, os.W_OK):
            raise FileError("The folder of the checkpoint does not exist or is closed to writing.",
                            got=repr(self.path), where="Checkpoint(path)",
                            remedy="Make the folder first, or choose another.")


@dataclass(frozen=True, eq=False)
class Stored:
    """A checkpoint read from its file; give it as ``start=`` to the verb that wrote it."""

    path: Path
    about: Mapping[str, Any]
    arrays: list[np.ndarray] = field(repr=False)

    def __str__(self) -> str:
        when = f", {self.about['time']:g} s" if self.about["clock"] == "time" else ""
        return (f"checkpoint of run '{self.about['name']}' after {self.about['count']} "
                f"{'time steps' if when else 'iterations'}{when}")


def read_checkpoint(path: str | os.PathLike[str]) -> Stored:
    """Read and check a checkpoint.

    Raises
    ------
    FileError
        No such file; a file that is cut off, changed, of another kind or another version.
    """
    if not isinstance(path, str | os.PathLike):
        raise FileError("A checkpoint is read from its file.", where="read_checkpoint(path)",
                        got=repr(path)[:60], remedy="Give the path that Checkpoint(path) had.")
    target = Path(path)
    try:
        with np.load(io.BytesIO(target.read_bytes()), allow_pickle=False) as archive:
            about = json.loads(str(archive["about"]))
            arrays = [archive[f"array_{k}"] for k in range(int(about["arrays"]))]
            found = str(archive["digest"])
        version = about["version"]
    except FileNotFoundError:
        raise FileError("There is no checkpoint of this name.", where=str(target), got="no file",
                        remedy="Check the path.") from None
    except (OSError, EOFError, ValueError, KeyError, TypeError, zipfile.BadZipFile, zlib.error,
            NotImplementedError, RuntimeError) as error:
        raise FileError("This is no whole checkpoint.", where=str(target),
                        got=f"{type(error).__name__}: {error}"[:200],
                        remedy="The file is cut off, damaged or of another kind: take an earlier "
                               "one, or start the run anew.") from None
    if version != VERSION:
        raise FileError("The checkpoint has another version.", where=str(target),
                        got=f"version {version}, this program writes {VERSION}",
                        remedy="Go on with the program that wrote it, or start the run anew.")
    if found != array_digest(json.dumps(about, sort_keys=True), arrays):
        raise FileError("The checkpoint was changed after it was written.", where=str(target),
                        got="contents that do not fit their digest",
                        remedy="Take an untouched copy, or start the run anew.")
    return Stored(target, about, arrays)


def fingerprint(problem: Problem, pseudo_step: Any) -> dict[str, str]:
    """Digests of the parts of a case that a run cannot change on its way."""
    case, mesh = problem.case, problem.mesh
    named = {name: [span.start, span.stop] for name, span in mesh.boundaries.items()}
    kinds = [type(boundary).__name__ for boundary in case.boundaries.values()]
    factors = [_factors(getattr(boundary, "factor", None)) for boundary in case.boundaries.values()]
    known = ("mesh", "fluid", "boundaries", "body_force", "body_force_factor", "viscosity",
             "numerics", "resistances")
    zones = problem.zones
    return {
        "mesh": digest(mesh.points, mesh.left, mesh.right, mesh.face_area, mesh.cell_volume, named),
        "fluid": digest(case.fluid, problem.viscosity),
        "boundaries": digest(problem.table, list(case.boundaries), kinds, factors),
        "body force": digest(problem.force, _factors(case.body_force_factor)),
        "numerical methods": digest(case.numerics, pseudo_step),
        "resistances": digest(None if zones is None else (zones.linear, zones.quadratic)),
        "sources and readings": digest(list(problem.sources)),
        "turbulence model or periodic pair": digest([getattr(case, f.name) for f in fields(case)
                                    if f.name not in known]),
    }


def _factors(function: Any) -> list[float] | None:
    if function is None:
        return None
    try:
        return [float(function(moment)) for moment in MOMENTS]
    except Exception as error:
        raise CaseError("A factor in time failed.", where=f"at one of the times {MOMENTS} s",
                        got=f"{type(error).__name__}: {error}",
                        remedy="Return one finite number for every time.") from error


@dataclass(eq=False)
class Storing:
    """Stores a run as its checkpoint asks for."""

    checkpoint: Checkpoint
    problem: Problem
    about: dict[str, Any]
    _first: float = field(default_factory=time.monotonic)
    _last: float = field(default_factory=time.monotonic)
    _count: int = -1

    def after(self, records: list[Record], state: State, workspace: Workspace,
              monitors: Sequence[Monitor], *, end: bool = False) -> None:
        """Store if it is time to."""
        every, minutes = self.checkpoint.every, self.checkpoint.minutes
        due = end or (every is not None and len(records) % every == 0)
        due = due or (minutes is not None and time.monotonic() - self._last >= 60.0 * minutes)
        if not due or len(records) == self._count:
            return
        packer = Packer()
        tree = {"state": packer.pack(state), "workspace": packer.pack(_kept(workspace)),
                "records": packer.pack(_columns(records)),
                "monitors": packer.pack({m.name: m.stored() for m in monitors
                                         if hasattr(m, "stored")})}
        about = {**self.about, "version": VERSION, "tree": tree, "arrays": len(packer.arrays),
                 "count": len(records), "time": state.time,
                 "seconds": self.about["seconds"] + time.monotonic() - self._first}
        try:
            write_whole(Path(self.checkpoint.path), about, packer.arrays)
        except FileError as error:  # the run is worth more than its checkpoint
            warnings.warn(str(error), Fv3dWarning, stacklevel=2)
        self._last, self._count = time.monotonic(), len(records)


def _kept(workspace: Workspace) -> dict[str, Any]:
    """What a workspace cannot make anew: counters, and the matrices its hierarchy came from."""
    kept = {f.name: getattr(workspace, f.name) for f in fields(workspace)
            if f.name not in REBUILT}
    built = None if workspace.prepared is None else [m.data for m in workspace.prepared.built_from]
    return {"numbers": kept, "hierarchy": built}


def _columns(records: list[Record]) -> dict[str, np.ndarray]:
    return {f.name: np.array([getattr(record, f.name) for record in records])
            for f in fields(Record)}


def write_whole(target: Path, about: dict[str, Any], arrays: list[np.ndarray]) -> None:
    """Write a checkpoint aside and rename it.

    Raises
    ------
    FileError
        It cannot be written.
    """
    text = json.dumps(about, sort_keys=True)
    aside = target.with_name(f".{target.name}.part")
    try:
        with open(aside, "wb") as file:
            np.savez(file, allow_pickle=False, about=np.array(text),
                     digest=np.array(array_digest(text, arrays)),
                     **{f"array_{k}": array for k, array in enumerate(arrays)})
            file.flush()
            os.fsync(file.fileno())
        os.replace(aside, target)
    except OSError as error:
        aside.unlink(missing_ok=True)
        raise FileError("The checkpoint cannot be written.", where=str(target),
                        got=error.strerror or str(error),
                        remedy="Check permissions and free space of the folder.") from None


@dataclass(frozen=True, eq=False)
class Beginning:
    """What a run begins with: fields, records and seconds so far, and how it is stored."""

    state: State
    records: list[Record]
    seconds: float
    began: float
    storing: Storing | None
    before: tuple[str, ...] = ()


def begin(problem: Problem, workspace: Workspace, *, start: Any, fresh: Callable[[], State],
          checkpoint: Checkpoint | None, clock: str, name: str, monitors: Sequence[Monitor],
          before: tuple[str, ...] = (), seconds: float = 0.0) -> Beginning:
    """Begin a run anew with ``fresh()``, or where a checkpoint given as ``start`` ended.

    ``before`` and ``seconds`` tell of runs on coarser meshes.

    Raises
    ------
    CaseError
        ``checkpoint`` is none, ``start`` one that belongs to another case, or two monitors have
        one name.
    """
    if not (checkpoint is None or isinstance(checkpoint, Checkpoint)):
        raise CaseError("This is no checkpoint.", where="solve_...(checkpoint=)",
                        got=type(checkpoint).__name__,
                        remedy="Give Checkpoint(path, every=100).")
    names = [monitor.name for monitor in monitors]
    twice = [one for one in names if names.count(one) > 1]
    if twice:
        raise CaseError("Two monitors have one name; the series of one would be lost.",
                        where="solve_...(monitors=)", got=repr(twice[0]),
                        remedy="Give each monitor a name of its own.")
    stored = start if isinstance(start, Stored) else None
    marks = fingerprint(problem, workspace.pseudo_step) if checkpoint or stored else {}
    if stored is None:
        state, records = fresh(), list[Record]()
        began = state.time
        for monitor in monitors:
            if state.older is None and hasattr(monitor, "restart"):
                monitor.restart()  # a run that goes on in time goes on with its series
    else:
        state, records = restored(stored, problem, workspace, clock=clock, monitors=monitors,
                                  fingerprint=marks)
        seconds, began = stored.about["seconds"], stored.about["began"]
        before = tuple(stored.about.get("before", ()))
    if checkpoint is not None:
        Packer().pack(state)  # refused before the first step, not at the first storing
    about = {"name": name, "clock": clock, "fingerprint": marks, "seconds": seconds,
             "began": began, "before": list(before)}
    return Beginning(state, records, seconds, began,
                     None if checkpoint is None else Storing(checkpoint, problem, about), before)


def restored(stored: Stored, problem: Problem, workspace: Workspace, *, clock: str,
             monitors: Sequence[Monitor], fingerprint: Mapping[str, str]
             ) -> tuple[State, list[Record]]:
    """State and records of a checkpoint; workspace and monitors are set to where they were.

    Raises
    ------
    CaseError
        The checkpoint belongs to another case, or to another kind of run.
    """
    about = stored.about
    other = [part for part, value in fingerprint.items() if about["fingerprint"].get(part) != value]
    if clock != about["clock"] or other:
        kind = "a run in time" if about["clock"] == "time" else "an iteration"
        raise CaseError("The checkpoint belongs to another case or run.", where=str(stored.path),
                        got=f"another {', another '.join(other)}" if other else kind,
                        remedy="Give the case, sources and verb of the run that was stored, or "
                               "start the run anew.")
    tree = about["tree"]
    kept = unpack(tree["workspace"], stored.arrays)
    for name, value in kept["numbers"].items():
        setattr(workspace, name, value)
    if kept["hierarchy"] is not None:
        first, newest = (problem.pattern.matrix(data) for data in kept["hierarchy"])
        workspace.prepared = linear.prepare(first, method=problem.case.numerics.multigrid,
                                            singular=problem.closed)
        workspace.prepared = linear.refresh(workspace.prepared, newest)
    seen = unpack(tree["monitors"], stored.arrays)
    for monitor in monitors:
        if monitor.name in seen and hasattr(monitor, "restore"):
            monitor.restore(seen[monitor.name])
    columns = unpack(tree["records"], stored.arrays)
    rows = zip(*(column.tolist() for column in columns.values()), strict=True)
    return (unpack(tree["state"], stored.arrays),
            [Record(**dict(zip(columns, row, strict=True))) for row in rows])
