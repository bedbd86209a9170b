"""Turbulent channel flow at a friction Reynolds number of 178 in a small box, with WALE.

The mean speed is that of the published flow, and the friction is found: with a given force the
bulk speed would take some nine passing times h/u_tau to settle, with a given flow the friction
follows within one or two.  Lengths are in half heights h, speeds in published friction velocities,
so that a friction velocity of one is the published flow.

The box is 500 by 250 wall units, a fifth of the published one's length and a third of its width,
about twice the smallest in which turbulence lives on (Jimenez, J. and Moin, P. 1991, J. Fluid
Mech. 225, 213-240; from memory), so that few cells make a fine mesh.  With cells of 30 by 15 wall
units along and across the flow, in boxes twice as large, the friction was a sixth too small,
without the model and with half the time step alike; with 17 by 7 a tenth.  Effects of the box and
of the cells were not told apart.

The walls move upstream and the fluid rests in the mean of its speeds (Galilei's invariance;
Bernardini, M., Pirozzoli, S., Quadrio, M. and Orlandi, P. 2013, J. Comput. Phys. 232, 1-6; from
memory): Courant numbers and the errors of convection are half those between walls at rest.
Convection is central.  A run on a coarse mesh, from a smooth profile with random vortices, is the
start of the fine one.

Takes some seven minutes on one core.  ``profile.csv`` and ``profile.png`` keep the profiles
beside the published ones, ``record.png`` the friction, ``streaks.png`` the flow at the end.
"""

from __future__ import annotations

import csv
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.interpolate import CubicSpline

import fv3d
from fv3d.flow.monitors import Keeper

HERE = Path(__file__).resolve().parent
LENGTH, WIDTH = 2.8, 1.4
VISCOSITY, BULK = 1.0 / 178.12, 15.680  # of the published flow
FRAME = 10.0                            # speed of the frame, against which the walls move back
COARSE, FINE = (24, 32, 24), (40, 48, 40)
SPUN, SETTLED, RECORDED = 8.0, 3.0, 9.0  # [s], passing times h/u_tau
STEP, COARSE_STEP = 0.005, 0.008


def make_case(cells: tuple[int, int, int]) -> fv3d.Case:
    """The channel in the moving frame; flow along x, walls across y."""
    mesh = fv3d.box((0, 0, 0), (LENGTH, 2.0, WIDTH), cells=cells,
                    grading=(None, fv3d.TwoSided(7.0), None))
    wall = fv3d.Wall((-FRAME, 0.0, 0.0))
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=VISCOSITY), boundaries={
        "x_min": fv3d.Periodic("x_max", mean_speed=BULK - FRAME),
        "z_min": fv3d.Periodic("z_max"), "y_min": wall, "y_max": wall},
        turbulence=fv3d.WALE(), numerics=fv3d.Numerics(convection=fv3d.Central()))


def start_field(points: np.ndarray) -> np.ndarray:
    """(n, 3) law of the wall with the curl of random waves, which vanish on the walls [m/s].

    The law for all heights is that of Reichardt, H. (1951), Z. Angew. Math. Mech. 31, 208-219.
    """
    x, y, z = points.T
    height = np.minimum(y, 2.0 - y) / VISCOSITY
    velocity = np.zeros_like(points)
    velocity[:, 0] = law_of_the_wall(height) - FRAME
    random, waves = np.random.default_rng(1), np.zeros_like(points)
    bump, slope = (y * (2.0 - y)) ** 2, 4.0 * (1.0 - y) * y * (2.0 - y)
    for _ in range(40):
        along = 2.0 * np.pi / LENGTH * random.integers(0, 5)
        across = 2.0 * np.pi / WIDTH * random.integers(1, 8)
        up = np.pi * random.integers(0, 4)
        one, two = random.uniform(0.0, 2.0 * np.pi, 2)
        a, b, c = random.normal(size=3) / np.sqrt(along**2 + across**2 + up**2)
        wave, turned = (f(along * x + across * z + one) for f in (np.cos, np.sin))
        shape = bump * np.cos(up * y + two)
        change = slope * np.cos(up * y + two) - up * bump * np.sin(up * y + two)
        waves += np.stack([c * change * wave + b * across * shape * turned,
                           (c * along - a * across) * shape * turned,
                           -b * along * shape * turned - a * change * wave], axis=1)
    return velocity + 2.0 * waves / np.sqrt(np.mean(np.sum(waves**2, axis=1)))


def law_of_the_wall(height: np.ndarray) -> np.ndarray:
    """Mean speed in wall units at heights in wall units (Reichardt, 1951)."""
    return (np.log1p(0.4 * height) / 0.4
            + 7.8 * (1.0 - np.exp(-height / 11.0) - height / 11.0 * np.exp(-height / 3.0)))


class LayerMonitor(Keeper):
    """Driving force, shear stress between the layers of cells, eddy viscosity of the layers.

    The stress is that of the equations: carried by the mass flux of the faces and the interpolated
    velocity, and by the viscosity of fluid and eddies; without the eddies' part of the transposed
    gradient, and the upwind share of convection.
    """

    def see(self, problem: object, state: object, record: object) -> None:
        """Keep one row every ten steps."""
        if state.iteration % 10:
            return
        mesh, speed = problem.mesh, state.velocity[:, 0]
        n = mesh.n_internal
        faces = np.flatnonzero(np.abs(mesh.face_area[:n, 1])
                               > 0.5 * mesh.face_area_magnitude[:n])
        left, right, weight = mesh.left[faces], mesh.right[faces], mesh.weight[faces]
        carried = state.mass_flux[faces] * (weight * speed[left] + (1 - weight) * speed[right])
        viscous = (problem.face_viscosity * problem.orthogonal)[faces] * (
            speed[right] - speed[left])
        stress = np.sign(mesh.face_area[faces, 1]) * (viscous - carried)
        _, plane = np.unique(mesh.face_centre[faces, 1].round(9), return_inverse=True)
        self.keep(state, drive=np.array(state.sources[0].strength),
                  stress=np.bincount(plane, stress) / (LENGTH * WIDTH),
                  eddies=by_layer(mesh, problem.viscosity / VISCOSITY - 1.0))


def by_layer(mesh: fv3d.Mesh, values: np.ndarray) -> np.ndarray:
    """(layers,) mean of values (n_cells,) over the cells of one height."""
    _, layer = np.unique(mesh.cell_centre[:, 1].round(9), return_inverse=True)
    return np.bincount(layer, values) / np.bincount(layer)


def folded(values: np.ndarray, sign: float = 1.0) -> np.ndarray:
    """Mean of both halves, the upper one mirrored."""
    half = len(values) // 2
    return 0.5 * (values[:half] + sign * values[::-1][:half])


@dataclass(frozen=True, eq=False)
class Found:
    """Profiles over half the channel, in wall units of the friction found.

    ``height`` (n,), ``speed`` (n,), ``rms`` (n, 3), ``shear`` (n,) resolved, ``eddies`` (n,) over
    the fluid's viscosity; ``level`` (m,) heights over h between the layers, ``stress`` (m,) there.
    """

    friction_velocity: float
    height: np.ndarray
    speed: np.ndarray
    rms: np.ndarray
    shear: np.ndarray
    eddies: np.ndarray
    level: np.ndarray
    stress: np.ndarray


def evaluate(run: fv3d.Run) -> Found:
    """Averages over time, planes and both halves."""
    mesh, mean, layers = run.mesh, run.series["mean"], run.series["layers"]
    late = layers.time >= SETTLED
    square = float(np.mean(friction(run)[1][run.series["lower"].time >= SETTLED]))
    speed = by_layer(mesh, mean.velocity[:, 0])
    _, layer = np.unique(mesh.cell_centre[:, 1].round(9), return_inverse=True)
    away = mean.velocity - np.stack([by_layer(mesh, v) for v in mean.velocity.T], axis=1)[layer]
    full = mean.reynolds_stress + np.einsum("ci,cj->cij", away, away)
    scale = np.sqrt(square)
    rms = np.stack([folded(by_layer(mesh, full[:, i, i])) for i in range(3)], axis=1)
    height = folded(by_layer(mesh, np.minimum(mesh.cell_centre[:, 1],
                                              2.0 - mesh.cell_centre[:, 1])))
    nodes = np.unique(mesh.points[:, 1].round(9))[1:-1]
    middle = len(nodes) // 2
    stress = layers.stress[late].mean(axis=0)
    return Found(scale, height * scale / VISCOSITY, (folded(speed) + FRAME) / scale,
                 np.sqrt(rms) / scale, -folded(by_layer(mesh, full[:, 0, 1]), -1.0) / square,
                 folded(layers.eddies[late].mean(axis=0)), nodes[:middle],
                 0.5 * (stress[:middle] - stress[::-1][:middle]) / square)


def friction(run: fv3d.Run) -> tuple[np.ndarray, np.ndarray]:
    """Times [s] and mean friction of both walls over density [m^2/s^2]."""
    lower, upper = run.series["lower"], run.series["upper"]
    return lower.time, (lower.friction + upper.friction)[:, 0] / (2.0 * LENGTH * WIDTH)


def published() -> np.ndarray:
    """The table of the direct simulation, by the names of its columns."""
    return np.genfromtxt(HERE / "moser_1999.csv", delimiter=",", names=True, skip_header=4)


def follow() -> fv3d.Run:
    """The flow on the fine mesh from developed flow on the coarse one."""
    coarse = fv3d.solve_transient(make_case(COARSE), time_step=COARSE_STEP, end_time=SPUN,
                                  start=start_field, progress=False)
    return fv3d.solve_transient(
        make_case(FINE), time_step=STEP, end_time=SETTLED + RECORDED, start=coarse,
        progress=False, monitors=[
            fv3d.MeanMonitor(name="mean", begin=SETTLED), LayerMonitor("layers"),
            fv3d.ForceMonitor("y_min", name="lower"), fv3d.ForceMonitor("y_max", name="upper")])


def keep(found: Found, data: np.ndarray) -> None:
    """The profiles as a table, with the published mean speed at the same heights."""
    speed = CubicSpline(data["y_plus"], data["U_plus"])(found.height)
    with open(HERE / "profile.csv", "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["y+", "U+", "U+ published", "u_rms+", "v_rms+", "w_rms+", "-uv+",
                         "eddy viscosity / viscosity"])
        for row in zip(found.height, found.speed, speed, *found.rms.T, found.shear, found.eddies,
                       strict=True):
            writer.writerow([f"{value:.4f}" for value in row])


def draw(found: Found, data: np.ndarray) -> None:
    """Mean speed, fluctuations and stresses beside the published ones.

    Constants of the law of the wall: Pope, S. B. (2000), Turbulent Flows, section 7.1; from memory.
    """
    from matplotlib.figure import Figure
    figure = Figure(figsize=(14.0, 4.6), layout="constrained")
    mean, rms, stress = figure.subplots(1, 3)
    height = np.geomspace(0.5, 178.0, 200)
    mean.semilogx(height, np.where(height < 12, height, np.nan), "k:", label="U+ = y+")
    mean.semilogx(height, np.where(height > 8, np.log(height) / 0.41 + 5.2, np.nan), "k--",
                  linewidth=0.8, label="ln(y+) / 0.41 + 5.2")
    mean.plot(data["y_plus"][1:], data["U_plus"][1:], "k-", label="Moser et al. (1999)")
    mean.plot(found.height, found.speed, "o", color="C3", markersize=4, label="fv3d")
    mean.set(xlabel="y+", ylabel="U+", ylim=(0, 22), title="mean speed")
    for k, name in enumerate("uvw"):
        rms.plot(data["y_plus"], np.sqrt(data[2 * name + "_plus"]), color=f"C{k}")
        rms.plot(found.height, found.rms[:, k], "o", color=f"C{k}", markersize=4,
                 label=f"{name}, resolved")
    rms.set(xlabel="y+", ylabel="rms+", title="fluctuations; lines: published")
    line = np.linspace(0.0, 1.0, 2)
    stress.plot(line, 1.0 - line, "k--", linewidth=0.8, label="1 - y/h")
    stress.plot(data["y_over_h"], -data["uv_plus"], "k-", label="-uv, published")
    height = found.height * VISCOSITY / found.friction_velocity
    stress.plot(height, found.shear, "o", color="C3", markersize=4, label="-uv, resolved")
    stress.plot(found.level, found.stress, "+", color="C0", label="all stresses, fv3d")
    stress.set(xlabel="y/h", ylabel="stress over that of the wall", title="shear stress")
    for panel in (mean, rms, stress):
        panel.grid(alpha=0.3)
        panel.legend(fontsize=8)
    figure.savefig(HERE / "profile.png", dpi=110)


def draw_record(run: fv3d.Run) -> None:
    """Friction of both walls over time, and where averaging begins."""
    from matplotlib.figure import Figure
    figure = Figure(figsize=(9.0, 3.0), layout="constrained")
    panel = figure.subplots()
    panel.plot(*friction(run), color="C3", linewidth=1.0, label="mean friction of the walls")
    panel.axvline(SETTLED, color="k", linewidth=0.8, label="averages begin")
    panel.axhline(1.0, color="k", linestyle="--", linewidth=0.8, label="published flow")
    panel.set(xlabel="time [h/u_tau]", ylabel="friction")
    panel.grid(alpha=0.3)
    panel.legend(fontsize=8)
    figure.savefig(HERE / "record.png", dpi=110)


def draw_streaks(run: fv3d.Run) -> None:
    """Streamwise velocity at the end, near the lower wall and across the channel."""
    from matplotlib.figure import Figure
    centre, speed = run.mesh.cell_centre, run.velocity[:, 0] + FRAME
    heights = np.unique(centre[:, 1].round(9))
    near = heights[int(np.argmin(np.abs(heights / VISCOSITY - 12.0)))]
    figure = Figure(figsize=(12.0, 3.6), layout="constrained")
    wall, across = figure.subplots(1, 2)
    for panel, cells, (i, j), title in (
            (wall, np.abs(centre[:, 1] - near) < 1e-6, (0, 2),
             f"streamwise velocity at y+ = {near / VISCOSITY:.0f}"),
            (across, centre[:, 0] < LENGTH / FINE[0], (2, 1), "across the flow")):
        drawn = panel.tricontourf(centre[cells, i], centre[cells, j], speed[cells], levels=24,
                                  cmap="viridis")
        figure.colorbar(drawn, ax=panel, label="u / published friction velocity")
        panel.set(xlabel=f"{'xyz'[i]}/h", ylabel=f"{'xyz'[j]}/h", title=title, aspect="equal")
    figure.savefig(HERE / "streaks.png", dpi=110)


def resolution(mesh: fv3d.Mesh, scale: float) -> dict[str, float]:
    """Cell sizes in wall units; the first height is that of the first cell's centre."""
    return {"dx+": LENGTH / FINE[0] * scale / VISCOSITY,
            "dz+": WIDTH / FINE[2] * scale / VISCOSITY,
            "first y+": float(mesh.cell_centre[:, 1].min()) * scale / VISCOSITY,
            "cells": mesh.n_cells}


def figures() -> dict[str, float]:
    """Deviations from the published flow, its peaks and the resolution."""
    run, data = follow(), published()
    found = evaluate(run)
    keep(found, data)
    draw(found, data)
    draw_record(run)
    draw_streaks(run)
    away = found.speed / CubicSpline(data["y_plus"], data["U_plus"])(found.height) - 1.0
    times, record = friction(run)
    stress = fv3d.mean_value(record[times >= SETTLED])
    layers = run.series["layers"]
    drive = layers.drive[layers.time >= SETTLED].mean()
    scale = found.friction_velocity
    return {"greatest deviation of U+": float(np.abs(away[found.height > 1.0]).max()),
            "U+ at the centre": float(found.speed[-1]), "bulk speed, U_b+": BULK / scale,
            "c_f": 2.0 * scale**2 / BULK**2, "std of c_f": 2.0 * stress.std / BULK**2,
            **{f"peak of {name}_rms+": float(found.rms[:, k].max())
               for k, name in enumerate("uvw")},
            "peak of -uv+": float(found.shear.max()),
            "total stress less 1 - y/h": float(np.abs(found.stress - 1.0 + found.level).max()),
            "wall friction over drive - 1": scale**2 / drive - 1.0,
            "eddy viscosity / viscosity": float(np.average(found.eddies, weights=np.diff(
                [0.0, *found.level, 1.0]))),
            **resolution(run.mesh, scale), "steps": len(times)}


if __name__ == "__main__":
    sys.path.insert(0, str(HERE.parent))
    from judge import main
    main(__file__, figures)
