"""Pictures: the window of workable gains, gain against speed. Needs Matplotlib, and no display.

Colours of Okabe & Ito 2008 (from memory), told apart by the colour-blind; every edge is named on its line.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from importlib import import_module
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = ["GainWindow", "draw_window"]

Array = NDArray[np.float64]

BLUE, ORANGE, GREEN, RED, GREY = "#0072B2", "#E69F00", "#009E73", "#D55E00", "#555555"
BROWN = "#8A5F00"  # the orange, dark enough to be read
SIZE = (9.6, 5.4)  # inches, 16:9


class GainWindow(NamedTuple):
    """What the picture shows.

    `speeds` m/s and the gains `low`, `high` 1/s at each; `fastest` m/s and `bound`, its reason; `speed`, `gain`, the point driven
    at (NaN for none) and `name`, what is written at it; `asked` m/s, a speed that was refused (NaN for none).
    """

    speeds: Sequence[float]
    low: Sequence[float]
    high: Sequence[float]
    fastest: float
    bound: str
    speed: float
    gain: float
    name: str
    asked: float
    title: str


def draw_window(shown: GainWindow, path: str | Path) -> None:
    """Save the picture of a window; the ending of `path` says in which format.

    Parameters
    ----------
    shown : GainWindow
    path : str or Path
    """
    try:
        figure_of, effects = import_module("matplotlib.figure").Figure, import_module("matplotlib.patheffects")
    except ImportError:
        raise ImportError("the picture needs Matplotlib; install it with: pip install matplotlib") from None
    figure = figure_of(figsize=SIZE, dpi=150, layout="constrained")
    axes = figure.add_subplot()
    halo = {"path_effects": [effects.withStroke(linewidth=3.5, foreground="white")]}
    speeds, low, high = (np.array(row, dtype=float) for row in (shown.speeds, shown.low, shown.high))
    inside = speeds <= shown.fastest * (1.0 + 1e-9)
    top = 1.25 * float(max(np.max(high[inside]), np.max(low[inside]), 0.0 if math.isnan(shown.gain) else shown.gain))
    axes.set(xlim=(0.0, speeds[-1]), ylim=(0.0, top), xlabel="speed, m/s", ylabel="heading gain, 1/s")
    axes.set_title(shown.title, loc="left", fontsize=12)
    axes.spines[["top", "right"]].set_visible(False)
    axes.fill_between(speeds[inside], low[inside], high[inside], color=GREEN, alpha=0.22, linewidth=0.0)
    axes.plot(speeds, low, color=BLUE, linewidth=2.2)
    axes.plot(speeds, high, color=ORANGE, linewidth=2.2)
    axes.axvline(shown.fastest, color=GREY, linewidth=1.4, linestyle="--")
    if shown.asked <= speeds[-1]:
        axes.axvline(shown.asked, color=RED, linewidth=1.8, linestyle=":")
    if math.isfinite(shown.gain):
        axes.plot([shown.speed], [shown.gain], "o", color="black", markersize=9, clip_on=False, zorder=5)
    import_module("matplotlib.backends.backend_agg").FigureCanvasAgg(figure)
    figure.draw_without_rendering()
    figure.set_layout_engine("none")  # what is written below stays where it was measured
    lines = [axes.transData.transform(np.column_stack([speeds, row])) for row in (low, high)]
    heights = np.linspace(0.0, top, 200)
    for x in (shown.fastest, shown.asked):
        if x <= speeds[-1]:
            lines.append(axes.transData.transform(np.column_stack([np.full(200, x), heights])))
    wide = shown.fastest > 0.5 * speeds[-1]
    middle = 0.4 * shown.fastest if wide else shown.fastest + 0.35 * (speeds[-1] - shown.fastest)
    steep = 0.5 * shown.fastest if float(np.interp(middle, speeds, low)) > 0.7 * top else middle
    x, x_steep = (float(axes.transData.transform((at, 0.0))[0]) for at in (middle, steep))
    written = [name_edge(axes, lines[0], x_steep, "circles the goal below", BLUE, halo)]
    written.append(name_edge(axes, lines[1], x, "swings above", BROWN, halo))
    for words, at, colour in names(shown, speeds[-1], top):
        write(axes, words, at, colour, np.concatenate(lines), written, halo)
    figure.savefig(path)


def names(shown: GainWindow, end: float, top: float) -> list[tuple[str, tuple[float, float], str]]:
    """Return what is written at the point driven at, at the fastest workable speed and at a refused one, each with its place."""
    found = []
    if math.isfinite(shown.gain):
        found.append((shown.name, (shown.speed, shown.gain), "black"))
    found.append((f"fastest workable: {shown.fastest:.3g} m/s\nbound by {shown.bound}", (shown.fastest, 0.95 * top), GREY))
    if math.isfinite(shown.asked):
        where = f"asked: {shown.asked:.3g} m/s" + (", far to the right" if shown.asked > end else "")
        found.append((f"{where}\nno gain works", (min(shown.asked, end), 0.1 * top), RED))
    return found


def name_edge(axes: Any, line: Array, x_wanted: float, words: str, colour: str, halo: dict[str, Any]) -> Any:
    """Write the name of an edge along its line (pixels), where the line is inside the picture; return their box."""
    box = axes.get_window_extent()
    seen = line[(line[:, 1] > box.y0) & (line[:, 1] < box.y1)]
    i = int(np.argmin(np.abs(seen[:, 0] - x_wanted)))
    (x0, y0), (x1, y1) = seen[max(0, i - 3)], seen[min(len(seen) - 1, i + 3)]
    x, y = seen[i]
    above = words.startswith("swings") or y - box.y0 < 0.1 * box.height
    text = axes.annotate(
        words,
        axes.transData.inverted().transform((x, y)),
        xytext=(0, 5 if above else -5),
        textcoords="offset points",
        rotation=math.degrees(math.atan2(y1 - y0, x1 - x0)),
        rotation_mode="anchor",
        ha="center",
        va="bottom" if above else "top",
        color=colour,
        fontsize=11,
        **halo,
    )
    return extent(text)


def extent(text: Any) -> Any:
    """Return the box of an annotation's words, in pixels, without its leader."""
    renderer = text.figure.canvas.get_renderer()
    text.update_positions(renderer)
    return import_module("matplotlib.text").Text.get_window_extent(text, renderer)


def write(
    axes: Any, words: str, at: tuple[float, float], colour: str, lines: Array, written: list[Any], halo: dict[str, Any]
) -> None:
    """Write words near a place, at the first of many offsets where they cross no line, no other words and no border."""
    box = axes.get_window_extent().padded(-2.0)
    best, least = None, math.inf
    for far in (8.0, 30.0, 60.0, 100.0, 150.0):
        for turn in (225, 315, 135, 45, 180, 0, 260, 280):
            dx, dy = far * 1.6 * math.cos(math.radians(turn)), far * math.sin(math.radians(turn))
            text = axes.annotate(
                words,
                at,
                xytext=(dx, dy),
                textcoords="offset points",
                ha="right" if dx < 0.0 else "left",
                va="top" if dy < -1.0 else ("bottom" if dy > 1.0 else "center"),
                color=colour,
                fontsize=10.5,
                fontweight="bold" if colour == "black" else "normal",
                arrowprops={"arrowstyle": "-", "color": colour, "shrinkA": 0, "shrinkB": 6} if far > 10.0 else None,
                zorder=6,
                **halo,
            )
            own = extent(text).padded(5.0)
            crossed = int(np.sum(own.count_contains(lines))) + 50 * sum(own.overlaps(other) for other in written)
            crossed += 500 * (own.x0 < box.x0 or own.x1 > box.x1 or own.y0 < box.y0 or own.y1 > box.y1)
            if crossed < least:
                if best is not None:
                    best[0].remove()
                best, least = (text, own), crossed
            else:
                text.remove()
            if least == 0:
                break
        if least == 0:
            break
    if best is not None:
        written.append(best[1])
