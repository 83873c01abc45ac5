"""The recorded ride of tests/data: `python docs/ride.py` prints how it is driven and draws it to docs/ride.png.

The drives, their definitions and their checks are in tests/test_ride.py (constant speed) and tests/test_ride_schedule.py.
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
import test_ride_schedule as schedule  # noqa: E402

PICTURE = HERE / "ride.png"
TRACK, DRIVEN, WAYPOINT, DISC = "#56b4e9", "#000000", "#d55e00", "#f0d9b5"  # Okabe & Ito 2008, from memory; the last a light tint
PASSING = "#009e73"  # the same
PHASE, CAUSE, NO_CAUSE = "#0072b2", "#a04d00", "#666666"
DRIVES = {  # what a stranger to the tests reads above each panel
    "every fix": "goal: the rider's\nlatest fix",
    "every tenth fix": "goal: every\ntenth fix",
    "a fix a minute": "goal: one fix\na minute",
    "stamps as times": "goal: the latest fix;\nits stamp the step's time",
    "waypoints": "goal: the next\nwaypoint",
    "stop at each": "goal: the next\nwaypoint, stop at each",
    "passed": "waypoints passed\nwithout a stop",
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
    passing = schedule.true_path(schedule.driven("passed").log, schedule.CARRIAGE)
    axes.plot(track.x, track.y, color=TRACK, linewidth=3.5 * width, solid_joinstyle="round", label="recorded track")
    axes.plot(log.x, log.y, color=DRIVEN, linewidth=width, label="driven at constant speed")
    axes.plot(passing.x, passing.y, color=PASSING, linewidth=1.2 * width, label="by the schedule, waypoints passed")
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
    passed = schedule.driven("passed").log
    touched = np.count_nonzero(schedule.touches(passed, one.platform, points, ride.WAYPOINT_RADIUS).nearest <= ride.WAYPOINT_RADIUS)
    axes.set_title(
        f"A recorded ride, driven from waypoint to waypoint. At constant speed: {captured} of {len(points)} captured, in order, "
        f"in {hours(one.log):.2f} h\nat {one.controller.speed:.2f} m/s. By the schedule, passed without a stop: "
        f"{touched} of {len(points)} touched, in order, in {hours(passed):.2f} h at up to {passed.speed.max():.2f} m/s",
        fontsize=11,
    )


def hours(log: ride.Log) -> float:
    return len(log.time) * ride.CARRIAGE.period / 3600.0


def draw_shares(panels: np.ndarray, told: dict[str, ride.Shares], causes: list[str]) -> None:
    """Draw a panel a drive: the share of its steps in each phase and with each of `causes`."""
    phases = list(next(iter(told.values())).phases)
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
    """Draw the map, and below it the shares at constant speed and by the schedule, for the causes that any drive had."""
    told = [{name: ride.shares(one.driven(name).log) for name in one.MADE} for one in (ride, schedule)]
    every = [share for row in told for share in row.values()]
    causes = [name for name in every[0].causes if any(share.causes[name] > 0.0 for share in every)]
    figure = plt.figure(figsize=(11, 16.5), layout="constrained")
    figure.get_layout_engine().set(w_pad=0.15, h_pad=0.15)
    upper, middle, lower = figure.subfigures(3, 1, height_ratios=[2.75, 1.05, 1.05])
    draw_map(upper.subplots())
    what = "percentage of the steps in each phase (one a step) and with each cause (any number)"
    for part, row, law in zip((middle, lower), told, ("At constant speed", "By the schedule"), strict=True):
        draw_shares(part.subplots(1, len(row), sharey=True), row, causes)
        part.suptitle(f"{law}: {what}", fontsize=12)
    return figure


if __name__ == "__main__":
    print("At constant speed\n" + ride.table())
    print("\nBy the schedule\n" + schedule.table() + "\n\n" + schedule.sentences())
    draw().savefig(PICTURE, dpi=110)
