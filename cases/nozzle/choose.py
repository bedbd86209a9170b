"""Choose gain and radius of the feedback in the nozzle from the fed readings alone.

One fed station after the other is left out and predicted from the two others; the pair of gain
and radius with the smallest root mean square misfit over all left-out readings wins.  The
withheld readings are not looked at.  Takes about ten minutes; ``choice.txt`` is what it printed.
"""

from __future__ import annotations

import warnings

import numpy as np
from rig import HERE, make_case, sector

import fv3d

RADII = (0.0005, 0.00075, 0.001, 0.0015, 0.002, 0.003)  # [m]
GAINS = (300.0, 1000.0, None)  # [1/s]; None: 5 local speed / radius


def left_out(case: fv3d.Case, plain: fv3d.Run, fed: fv3d.Readings, around: fv3d.Readings, *,
             radius: float, gain: float | None) -> float:
    """Root mean square misfit at the stations left out in turn [m/s]; NaN if one run failed."""
    misfit = []
    for group in fed.groups:
        used, _ = around.split(withheld=[group])
        _, out = fed.split(withheld=[group])
        law = fv3d.Feedback(used, radius=radius, gain=gain)
        try:
            run = fv3d.solve_steady(case, sources=[law], start=plain, tolerance=1e-4,
                                    max_iterations=1000, progress=False)
        except fv3d.DivergenceError:
            return float("nan")
        if not run.outcome.good:
            return float("nan")
        misfit.append(fv3d.observe(run, out) - out.component_value)
    return float(np.sqrt(np.mean(np.concatenate(misfit) ** 2)))


def main() -> None:
    """Print the table of misfits."""
    warnings.simplefilter("ignore", fv3d.Fv3dWarning)
    readings = fv3d.read_readings(HERE / "readings.csv")
    fed = readings.select(np.array([group.startswith("fed") for group in readings.group]))
    around = fv3d.read_readings(HERE / "fed_around.csv")
    case = make_case(sector(core=4))
    plain = fv3d.solve_steady(case, tolerance=1e-6, max_iterations=2000, progress=False)
    misfit = fv3d.observe(plain, fed) - fed.component_value
    print(f"plain {np.sqrt(np.mean(misfit ** 2)):.5f} m/s")
    for radius in RADII:
        for gain in GAINS:
            rms = left_out(case, plain, fed, around, radius=radius, gain=gain)
            name = "5 U/radius" if gain is None else f"{gain:g} 1/s"
            print(f"radius {1e3 * radius:g} mm, gain {name}: {rms:.5f} m/s", flush=True)


if __name__ == "__main__":
    main()
