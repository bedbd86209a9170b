"""The lagged feedback law, a reference for tests only: it is unstable above a critical gain.

The strengths ``a = K (H u - u*)`` of the velocity at the end of one momentum step act as a given
force in the next.  Momentum relaxed by ``alpha`` answers ``u' = (1 - alpha - alpha q) u`` with
``q = density K volume / a_P``, so it is stable for ``q < (2 - alpha) / alpha`` and overshoots
above ``(1 - alpha) / alpha`` (derived: Patankar's relaxation with the source on the old side).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

import fv3d
from fv3d.flow.problem import Correction, Force, Problem, State
from fv3d.measured.feedback import FeedbackState


@dataclass(frozen=True)
class Lagged:
    """The force of a ``Feedback`` law, its strengths one iteration old."""

    law: fv3d.Feedback

    def start(self, problem: Problem, state: State, earlier: Any) -> FeedbackState:
        return self.law.start(problem, state, earlier)

    def force(self, own: FeedbackState) -> Force:
        return self.law.force(own)

    def correct(self, own: FeedbackState, problem: Problem, state: State, change: np.ndarray,
                relax: Callable[..., Any]) -> Correction:
        before = own.layout.sample(problem, state.velocity, state.boundary_velocity)
        off = own.misfit(before) - own.strength / own.gain
        misfit = own.misfit(before + own.layout.sample_change(change))
        scale = max(float(np.abs(own.readings.component_value).max()), 1e-300)
        return Correction(replace(own, strength=own.gain * misfit), change,
                          float(np.abs(off).max()) / scale)
