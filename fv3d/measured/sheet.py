"""The short sheet a table of readings prints as."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .table import PLACE, VALUES

if TYPE_CHECKING:
    from .readings import Readings


def readings_sheet(readings: Readings) -> str:
    """Places, groups, quantities, extents and typical uncertainty in a few lines."""
    lines = [f"Readings: {len(readings)} places, {readings.n_components} components, "
             f"{len(readings.groups)} groups"]
    if len(readings) == 0:
        return lines[0]
    label = np.array(readings.component_label)
    group_of = np.array(readings.group)[readings.component_place]
    width = max(len(group) for group in (*readings.groups, "group"))
    lines.append(f"  {'group':<{width}}  places  quantities")
    for group in readings.groups:
        held = [kind for kind in VALUES if np.any((group_of == group) & (label == kind))]
        lines.append(f"  {group:<{width}}  {readings.group.count(group):6d}  {' '.join(held)}")
    low, high = readings.point.min(axis=0), readings.point.max(axis=0)
    for axis, start, stop in zip(PLACE, low, high, strict=True):
        lines.append(f"  {axis:<5} {start:12.5g} ... {stop:.5g} m")
    for kind in VALUES:
        which = label == kind
        if which.any():
            value, unit = readings.component_value[which], VALUES[kind].unit
            lost = int(np.isnan(value).sum())
            span = "no values" if lost == len(value) else \
                f"{np.nanmin(value):12.5g} ... {np.nanmax(value):.5g} {unit}"
            lines.append(f"  {kind:<5} {span}, "
                         f"typical std {np.median(readings.component_std[which]):.3g} {unit}"
                         + (f", {lost} lost" if lost else ""))
    if not np.isnan(readings.time).all():
        lines.append(f"  time  {np.nanmin(readings.time):12.5g} ... "
                     f"{np.nanmax(readings.time):.5g} s")
    return "\n".join(lines)
