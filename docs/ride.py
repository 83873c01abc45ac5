"""The recorded ride of tests/data: `python docs/ride.py` prints how it is driven and draws it to docs/ride.png.

The drives, their definitions and their checks are in tests/test_ride.py.
"""

from __future__ import annotations

import sys
from pathlib import Path

import matplotlib as mpl

mpl.use("Agg")

import matplotlib.pyplot as plt
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE.parent / "tests"))

import test_ride as ride  # noqa: E402 the tests are no package

PICTURE = HERE / "ride.png"
TRACK, DRIVEN, WAYPOINT, DISC = "#56b4e9", "#000000", "#d55e00", "#f0d9b5"  # Okabe & Ito 2008, from memory; the last a light tint
PHASE, CAUSE, NO_CAUSE = "#0072b2", "#a04d00", "#666666"
DRIVES = {  # what a stranger to the tests reads above each panel
    "every fix": "goal: the rider's\nlatest fix",
    "every tenth fix": "goal: every\ntenth fix",
    "a fix a minute": "goal: one fix\na minute",
    "stamps as times": "goal: the latest fix;\nits stamp the step's time",
    "waypoints": "goal: the next\nwaypoint",
}
AROUND = 75.0  # m, half the side of the detail
DETAIL = (1000.0, -1800.0, 1060.0, 1060.0)  # m, where the map is empty: west, south, width, height


def sharpest(points: np.ndarray) -> int:
    """Return the number of the waypoint, of those of shape (n, 2), m, at which the way to the next turns most."""
    legs = np.diff(points, axis=0)
    return int(np.argmax(np.abs(ride.remainder(np.diff(np.arctan2(legs[:, 1], legs[:, 0])))))) + 1


def draw_ways(axes: Axes, width: float, size: float) -> None:
    """Draw track, driven path and waypoints, lines of `width` and points of `size`, in points."""
    track, log, points = ride.read_ride(), ride.driven("waypoints").log, ride.waypoints()
    axes.plot(track.x, track.y, color=TRACK, linewidth=3.5 * width, solid_joinstyle="round", label="recorded track")
    axes.plot(log.x, log.y, color=DRIVEN, linewidth=width, label="driven path")
    axes.plot(points[:, 0], points[:, 1], "o", color=WAYPOINT, markersize=size, markeredgewidth=0.0, label="waypoint")
    axes.set_aspect("equal")


def draw_detail(axes: Axes, middle: np.ndarray) -> None:
    """Draw the surroundings of a place, m, shape (2,), with the capture discs."""
    draw_ways(axes, 1.5, 6.0)
    for x, y in ride.waypoints():
        axes.add_patch(plt.Circle((x, y), ride.WAYPOINT_RADIUS, facecolor=DISC, edgecolor=WAYPOINT, linewidth=0.8, zorder=0.5))
    axes.set_xlim(middle[0] - AROUND, middle[0] + AROUND)
    axes.set_ylim(middle[1] - AROUND, middle[1] + AROUND)
    axes.set(xticks=[], yticks=[])
    axes.set_title(f"sharpest bend, {2.0 * AROUND:.0f} m across", fontsize=10)


def draw_map(axes: Axes) -> None:
    """Draw the whole ride, and the sharpest bend in the empty middle."""
    one, points = ride.driven("waypoints"), ride.waypoints()
    draw_ways(axes, 0.7, 2.0)
    axes.set(xlabel="east, m", ylabel="north, m")
    track = ride.read_ride()
    for name, i, shift, side in (("start", 0, (9, 2), "left"), ("end", -1, (-9, -3), "right")):
        axes.annotate(name, (track.x[i], track.y[i]), xytext=shift, textcoords="offset points", ha=side, fontsize=10)
        axes.plot(track.x[i], track.y[i], "s", color=DRIVEN, markersize=6)
    detail = axes.inset_axes(DETAIL, transform=axes.transData)
    draw_detail(detail, points[sharpest(points)])
    axes.indicate_inset_zoom(detail, edgecolor="0.3")
    handles, labels = detail.get_legend_handles_labels()
    disc = plt.Line2D([], [], linestyle="", marker="o", markersize=11, markerfacecolor=DISC, markeredgecolor=WAYPOINT)
    axes.legend([*handles, disc], [*labels, f"capture disc, radius {ride.WAYPOINT_RADIUS:.0f} m"], loc="lower right", frameon=False)
    captured = len(ride.captured(one.log, ride.WAYPOINT_RADIUS))
    axes.set_title(
        f"A recorded ride, driven from waypoint to waypoint: {captured} of {len(points)} captured, in order, "
        f"in {len(one.log.time) * one.platform.period / 3600.0:.2f} h at up to {one.controller.speed:.2f} m/s",
        fontsize=12,
    )


def draw_shares(panels: np.ndarray) -> None:
    """Draw a panel a drive: the share of its steps in each phase and with each cause that any of them had."""
    told = {name: ride.shares(ride.driven(name).log) for name in ride.MADE}
    phases = list(next(iter(told.values())).phases)
    causes = [name for name in next(iter(told.values())).causes if any(share.causes[name] > 0.0 for share in told.values())]
    names = [f"phase {name.lower()}" for name in phases] + [words(name) for name in causes] + ["no cause"]
    places = np.concatenate([np.arange(len(phases)), np.arange(len(phases), len(names)) + 0.6])
    for axes, (drive, share) in zip(panels, told.items(), strict=True):
        sizes = 100.0 * np.array([*share.phases.values(), *(share.causes[name] for name in causes), share.no_cause])
        axes.barh(places, sizes, color=[PHASE] * len(phases) + [CAUSE] * len(causes) + [NO_CAUSE], height=0.75)
        for place, size in zip(places, sizes, strict=True):
            inside = size > 60.0
            axes.text(
                size + (-3.0 if inside else 3.0),
                place,
                percent(size),
                va="center",
                ha="right" if inside else "left",
                color="white" if inside else "black",
                fontsize=9,
            )
        axes.set(xlim=(0.0, 100.0), xticks=[])
        axes.set_title(DRIVES[drive], fontsize=10)
        axes.set_yticks(places, names)
        axes.tick_params(axis="y", length=0)
        axes.spines[["top", "right", "bottom"]].set_visible(False)
    panels[0].invert_yaxis()
    for axes in panels[1:]:
        axes.tick_params(labelleft=False)


def words(name: str) -> str:
    return name.lower().replace("_", " ")


def percent(size: float) -> str:
    """Return a share (%) for print: what is none at all as 0, what is little with its decimals."""
    return "0" if size == 0.0 else f"{size:.1f}" if size >= 0.1 else "< 0.1"


def draw() -> Figure:
    figure = plt.figure(figsize=(11, 13), layout="constrained")
    figure.get_layout_engine().set(w_pad=0.15, h_pad=0.15)
    upper, lower = figure.subfigures(2, 1, height_ratios=[2.75, 1.0])
    draw_map(upper.subplots())
    panels = lower.subplots(1, len(ride.MADE), sharey=True)
    draw_shares(panels)
    lower.suptitle("Percentage of the steps in each phase (one a step) and with each cause (any number), five drives", fontsize=12)
    return figure


if __name__ == "__main__":
    print(ride.table())
    draw().savefig(PICTURE, dpi=110)
