"""How things end: exceptions for input that cannot be used, outcomes for iterations.

Every exception says what went wrong, where, what was got and what to do about it.
Every iteration ends in a named :class:`Outcome` with a sentence and a next step.
"""

from __future__ import annotations

import os
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any


class Fv3dError(Exception):
    """Base of all errors raised on purpose by fv3d.

    Parameters
    ----------
    what : str
        What is wrong, one sentence.
    where : str
        File, boundary, cell, reading or argument the sentence is about.
    got : object
        The offending value.
    remedy : str
        What the user can do.
    """

    def __init__(self, what: str, *, where: str = "", got: Any = None, remedy: str = "") -> None:
        self.what, self.where, self.got, self.remedy = what, where, got, remedy
        lines = [what]
        if where:
            lines.append(f"  where:  {where}")
        if got is not None:
            lines.append(f"  got:    {got}")
        if remedy:
            lines.append(f"  remedy: {remedy}")
        super().__init__("\n".join(lines))


class MeshError(Fv3dError):
    """The mesh cannot be used (geometry, connectivity, names or file)."""


class BoundaryError(Fv3dError):
    """Boundary conditions do not fit the mesh or each other."""


class ReadingError(Fv3dError):
    """The table of readings cannot be used."""


class CaseError(Fv3dError):
    """A case, an option or a start field cannot be used."""


class FileError(Fv3dError):
    """A file could not be read or written."""


class DivergenceError(Fv3dError):
    """The iteration produced values that are not finite.

    ``run`` carries the last finite state.
    """

    def __init__(self, what: str, *, run: Any = None, where: str = "", got: Any = None,
                 remedy: str = "") -> None:
        super().__init__(what, where=where, got=got, remedy=remedy)
        self.run = run


class Fv3dWarning(UserWarning):
    """A result is returned but deserves a second look."""


@dataclass(frozen=True)
class Outcome:
    """How an iteration ended.

    Attributes
    ----------
    name : str
        Short name, such as ``"converged"``.
    sentence : str
        What happened.
    next_step : str
        What to do now.
    good : bool
        Whether the result meets what was asked for.
    """

    name: str
    sentence: str
    next_step: str
    good: bool

    def __str__(self) -> str:
        return f"{self.name}: {self.sentence} {self.next_step}".rstrip()


def as_number(value: Any) -> float:
    """The value as a float; NaN for what is no number, so that a range check refuses it."""
    try:
        return float(value)
    except (TypeError, ValueError):
        return float("nan")


def did_you_mean(word: Any, known: Iterable[str]) -> str:
    """A question naming the known word nearest to a wrong one, or nothing."""
    from difflib import get_close_matches
    lower = {name.lower(): name for name in known}
    near = get_close_matches(str(word).lower(), lower, 1)
    return f" Did you mean '{lower[near[0]]}'?" if near else ""


def expect_run(thing: Any, where: str) -> None:
    """Refuse, with CaseError, an argument that is no run; ``where`` shows the call."""
    if isinstance(thing, type) or not hasattr(thing, "sample"):
        raise CaseError("This argument must be a run.", where=where, got=_short(thing),
                        remedy="Give what solve_steady(...) returned, at the place shown above.")


def expect_readings(thing: Any, where: str) -> None:
    """Refuse, with ReadingError, an argument that is no table of readings."""
    if isinstance(thing, type) or not hasattr(thing, "component_value"):
        raise ReadingError("This argument must be a table of readings.", where=where,
                           got=_short(thing),
                           remedy="Give what read_readings(...) or split(...) returned, at the "
                                  "place shown above.")


def expect_mesh(thing: Any, where: str) -> None:
    """Refuse, with MeshError, an argument that is no mesh."""
    if isinstance(thing, type) or not hasattr(thing, "n_internal"):
        raise MeshError("This argument must be a mesh.", where=where, got=_short(thing),
                        remedy="Give what read_mesh(...) or a generator returned, at the place "
                               "shown above.")


def _short(thing: Any) -> str:
    """Kind of an object, and the object itself where that is short."""
    if isinstance(thing, type):
        return f"the class {thing.__name__}"
    simple = thing is None or isinstance(thing, str | int | float | os.PathLike)
    return f"{type(thing).__name__} {str(thing)[:60]!r}" if simple else type(thing).__name__


def converged(iterations: int, tolerance: float) -> Outcome:
    """Outcome of an iteration whose residuals all fell below the tolerance."""
    return Outcome("converged",
                   f"All residuals fell below {tolerance:g} after {iterations} iterations.",
                   "", True)


def iteration_limit(iterations: int, residual: float, tolerance: float) -> Outcome:
    """Outcome of an iteration that used all iterations it was allowed."""
    return Outcome("iteration limit",
                   f"The largest residual is still {residual:.2e} after {iterations} iterations, "
                   f"above the tolerance {tolerance:g}.",
                   "Raise max_iterations or go on with start=run; if the residual stands still, "
                   "look at the worst cells of the mesh or lower the relaxation.", False)


def interrupted(iterations: int) -> Outcome:
    """Outcome of a run stopped by the user."""
    return Outcome("interrupted", f"Stopped by the user after {iterations} iterations.",
                   "The run so far is kept; go on with start=run.", False)


def stopped_by_monitor(iterations: int, reason: str) -> Outcome:
    """Outcome of a run that a monitor stopped."""
    return Outcome("stopped by monitor", f"Stopped after {iterations} iterations: {reason}",
                   "", True)


def diverged(iterations: int) -> Outcome:
    """Outcome of a run whose fields are no longer finite."""
    return Outcome("diverged", f"Values stopped being finite in iteration {iterations}.",
                   "Lower velocity_relaxation, check boundary values and units, and look at the "
                   "worst cells of the mesh.", False)
