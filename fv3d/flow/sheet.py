"""The short sheet a run prints."""

from __future__ import annotations

import resource
from typing import Any

import numpy as np

from .inlets import beyond_shares
from .residuals import mass_residual


@np.errstate(all="ignore")  # the last finite state of a diverged run may overflow in a norm
def run_sheet(run: Any) -> str:
    """What was run, how it ended, how well, what it cost."""
    case, mesh, history = run.case, run.mesh, run.history
    numerics, in_time = case.numerics, "time" in history
    coupling = "backward differencing and projection" if in_time else \
        f"{type(numerics.coupling).__name__} {numerics.coupling.velocity_relaxation:g}"
    kinds = ", ".join(f"{len(cells)} {kind}" for kind, _, cells in mesh.cell_blocks)
    last = {key: values[-1] for key, values in history.items() if len(values)}
    lines = [
        f"run '{run.name}'",
        f"  mesh       {kinds}",
        f"  fluid      density {case.fluid.density:.6g} kg/m3, "
        f"viscosity {case.fluid.viscosity:.6g} Pa s",
        f"  methods    {coupling}, {type(numerics.convection).__name__}, "
        f"{type(numerics.gradient).__name__}",
        f"  outcome    {run.outcome}",
    ]
    lines += [f"  {'start' if k == 0 else '':<11}{line}" for k, line in enumerate(run.before)]
    guided = any(getattr(source, "artificial", True) for source in run.problem.sources)
    if last:
        lines.append(f"  residuals  momentum {last['momentum']:.1e}, mass {last['mass']:.1e}"
                     + (f", readings {last['misfit']:.1e}" if guided else ""))
    imbalance = mass_residual(run.problem, run.mass_flux, run.velocity, run.state.pressure)
    lines.append(f"  mass       summed imbalance {imbalance:.1e} of the reference flux")
    speed = np.linalg.norm(run.velocity, axis=1)
    lines.append(f"  speed      mean {np.average(speed, weights=mesh.cell_volume):.4g} m/s, "
                 f"largest {speed.max():.4g} m/s")
    if case.turbulence is not None:
        ratio = run.problem.viscosity.max() / case.fluid.viscosity - 1.0
        lines.append(f"  eddies     {case.turbulence}, viscosity up to {ratio:.3g} times the "
                     "fluid's")
    lines += [f"  inlet      {share:.1%} of '{name}' lie beyond the points of its table"
              for name, share in beyond_shares(mesh, case.boundaries).items() if share > 0.0]
    lines += [f"  outlet     '{one.name}' at {level:.6g} Pa for {one.flow:.6g} kg/s"
              for one, level in zip(run.problem.outlets, run.state.levels, strict=True)]
    for source, own in zip(run.problem.sources, run.state.sources, strict=True):
        if hasattr(source, "describe"):
            lines += ["  " + line for line in source.describe(own)]
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
    lines.append(f"  cost       {run.seconds:.1f} s, {len(history['iteration'])} "
                 f"{'steps' if in_time else 'iterations'}, "
                 f"peak memory of the process {peak:.2f} GiB")
    return "\n".join(lines)
