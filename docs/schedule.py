"""How near the speed schedule comes to the least possible time: a histogram over random robots, and the ten slowest drives.

    python docs/schedule.py [--runs 20000]

Draws, drives and bound are those of tests/schedule_studies.py; pictures are written beside this file.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import matplotlib as mpl

mpl.use("Agg")

import matplotlib.pyplot as plt
import numpy as np

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE.parent / "tests"))

import schedule_studies as studies  # noqa: E402 the tests are no package
from rough_loop import rough_drive, true_of  # noqa: E402
from steerkit import Controller  # noqa: E402

FAR, NEAR, PATH, DISC = "#0072b2", "#d55e00", "#0072b2", "#f0d9b5"  # Okabe & Ito 2008, from memory; the last a light tint
INK, SOFT = "#333333", "#8c8c8c"
CASES = {"goals up to 10 m": (1, 10.0, FAR), "goals up to 1 m": (2, 1.0, NEAR)}


def drawn(seed: int, i: int, distance: float) -> studies.Run:
    return studies.common_draw(np.random.default_rng([seed, i]), distance)


def histogram(rows: dict[str, np.ndarray]) -> None:
    """Draw the share of drives by their time over the bound, the 99th percentile marked."""
    figure, axes = plt.subplots(figsize=(12, 6.2), dpi=100)
    edges = np.linspace(1.0, 1.6, 121)
    for (name, (_, _, colour)), height in zip(CASES.items(), (0.93, 0.86), strict=True):
        ratio = ratios(rows[name])
        share = np.histogram(np.minimum(ratio, edges[-1] - 1e-9), edges)[0] / len(ratio)
        axes.stairs(100.0 * share, edges, color=colour, linewidth=1.8, fill=False)
        middle, most = np.percentile(ratio, [50, 99])
        axes.axvline(most, color=colour, linewidth=1.0, linestyle=(0, (4, 3)))
        text = f"{name}: half within {100.0 * (middle - 1.0):.1f} % of the bound, 99 % within {100.0 * (most - 1.0):.0f} % (dashed)"
        axes.text(1.59, height, text, color=colour, fontsize=12, ha="right", transform=axes.get_xaxis_transform(), zorder=5)
    axes.set_yscale("log")
    axes.set_ylim(5e-3, 300.0)
    axes.set_yticks([0.01, 0.1, 1.0, 10.0], ["0.01", "0.1", "1", "10"])
    axes.set_xlim(1.0, 1.6)
    axes.set_xlabel("time to rest over a lower bound that no robot with these limits can beat (last bar: 1.6 and more)")
    axes.set_ylabel("drives per bar, % (log)")
    count = len(next(iter(rows.values())))
    axes.set_title(f"{count:,} random robots and starts each: most drives take hardly longer than is possible", loc="left", pad=12)
    axes.spines[["top", "right"]].set_visible(False)
    figure.savefig(HERE / "schedule_histogram.png", bbox_inches="tight")


def ratios(rows: np.ndarray) -> np.ndarray:
    r = studies.Row(*rows.T)
    judged = (r.bound > 0) & (r.arrived > 0)
    return r.time[judged] / r.bound[judged]


def slowest(rows: np.ndarray, count: int = 10) -> list[int]:
    """Return the numbers of the drives farthest above their bound, as a ratio."""
    r = studies.Row(*rows.T)
    with np.errstate(divide="ignore", invalid="ignore"):
        over = np.where((r.bound > 0) & (r.arrived > 0), r.time / r.bound, 0.0)
    return np.argsort(-over)[:count].tolist()


def ten_slowest(rows: np.ndarray, seed: int, distance: float) -> None:
    """Draw the ten drives farthest above their bound, with the numbers that explain them, and print those."""
    figure, panels = plt.subplots(2, 5, figsize=(16, 7.4), dpi=100)
    figure.suptitle(
        "The ten drives farthest above their bound: within a few periods, or a turn that could not be stopped in time",
        x=0.02,
        ha="left",
    )
    for axes, i in zip(panels.flat, slowest(rows), strict=True):
        run, row = drawn(seed, i, distance), studies.Row(*rows[i])
        p = run.platform
        controller = Controller(p, capture_radius=run.capture_radius)
        steps = int((row.time + p.dead_time + 1.0) / p.period) + 5
        _, log = rough_drive(controller, true_of(p), run.start, run.motion, steps=steps, log=True)
        axes.add_patch(plt.Circle((0.0, 0.0), run.capture_radius, facecolor=DISC, edgecolor=SOFT, linewidth=0.8))
        axes.plot(log[:, 0], log[:, 1], color=PATH, linewidth=2.0)
        x, y, heading = run.start
        size = 0.25 * max(np.ptp(log[:, 0]), np.ptp(log[:, 1]), run.capture_radius)
        axes.annotate(
            "", (x + size * np.cos(heading), y + size * np.sin(heading)), (x, y), arrowprops={"arrowstyle": "-|>", "color": INK}
        )
        axes.set_aspect("equal", adjustable="datalim")
        axes.tick_params(labelsize=7, colors=SOFT)
        periods = row.bound / p.period
        axes.set_title(
            f"{row.time:.2f} s, bound {row.bound:.2f} s ({periods:.0f} periods)\n"
            f"d {row.distance / row.radius:.2f} r, {run.motion[0]:.2f} m/s, {run.motion[1]:+.1f} rad/s",
            fontsize=8,
            loc="left",
        )
        print(
            f"run {i}: {row.time:.2f} s over a bound of {row.bound:.2f} s ({periods:.0f} periods of {p.period:.3f} s), "
            f"{row.distance / row.radius:.2f} capture radii away, started at {run.motion[0]:.2f} m/s, {run.motion[1]:+.2f} rad/s, "
            f"turn acceleration {p.turn_acceleration:.1f} rad/s^2"
        )
    figure.tight_layout()
    figure.savefig(HERE / "schedule_slowest.png")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--runs", type=int, default=20000)
    runs = parser.parse_args().runs
    rows = {
        name: studies.many(runs, seed, lambda rng, d=distance: studies.common_draw(rng, d), name)
        for name, (seed, distance, _) in CASES.items()
    }
    print()
    for name, found in rows.items():
        studies.show(name, found)
    histogram(rows)
    for name in rows:
        seed, distance, _ = CASES[name]
        print(name)
        if distance > 1.0:
            ten_slowest(rows[name], seed, distance)
        else:
            for i in slowest(rows[name]):
                run, row = drawn(seed, i, distance), studies.Row(*rows[name][i])
                print(f"run {i}: {row.time:.2f} s over {row.bound:.2f} s ({row.bound / run.platform.period:.0f} periods)")


if __name__ == "__main__":
    main()
