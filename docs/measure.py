"""Measure a robot: the logs of an afternoon, the numbers that they tell, what to declare, three pictures.

The cart of `first_drive.py` carries seed trays through a greenhouse. NOTHING HERE IS RECORDED: `made_up` makes logs that look
recorded, from a cart whose true numbers are known, with noise, uneven sampling and lost rows, so that what is measured can be laid
beside what is true. `measure` is what you would write for your own robot.

    python docs/measure.py

The pictures are written beside this file; they need matplotlib (pip install 'steerkit[plot]').
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import NamedTuple

import numpy as np

from steerkit import Platform, Pose
from steerkit.kinematics import odometry
from steerkit.measuring import (
    Measured,
    SquareCheck,
    StepResponse,
    for_platform,
    rest_noise,
    smallest_wheel_speed,
    speed_steps,
    square,
    turn_steps,
    wheel_speed_limit,
    wheel_speed_resolution,
)

TRUE = {
    "acceleration": 0.5,
    "braking": 0.6,
    "turn_acceleration": 3.0,
    "dead_time": 0.18,
    "motor_lag": 0.09,
    "wheel_speed_limit": 0.70,
    "smallest_wheel_speed": 0.043,
    "wheel_speed_resolution": 0.010,
    "position_noise": 0.015,
    "heading_noise": 0.015,
    "track_width": 0.50,
}
TAPE_TRACK = 0.51  # m, by tape: 2 % wrong
LEFT_WHEEL, RIGHT_WHEEL = 0.997, 1.003  # of the size that odometry reckons with
SIDE = 4.0  # m, of the square
HERE = Path(__file__).resolve().parent

Log = tuple[np.ndarray, ...]  # time, command, response


# --- logs that look recorded


def instants(rng: np.random.Generator, interval: float, duration: float) -> np.ndarray:
    """Return when rows were taken: early or late by up to a third of the interval, one in twenty lost."""
    t = np.arange(0.0, duration, interval)
    t = t + rng.uniform(-0.33, 0.33, len(t)) * interval
    return t[rng.random(len(t)) > 0.05]


def drive(t: np.ndarray, command: np.ndarray, up: float, down: float) -> np.ndarray:
    """Return what the made-up drive does: dead time, a ramp, a lag, in steps of 1 ms."""
    grid = np.arange(0.0, t[-1] + 0.001, 0.001)
    told = command[np.maximum(np.searchsorted(t, grid - TRUE["dead_time"], side="right") - 1, 0)]
    told = np.where(grid < TRUE["dead_time"], 0.0, told)
    set_point, speed, seen = 0.0, 0.0, np.empty(len(grid))
    for i, wanted in enumerate(told.tolist()):
        most = 0.001 * (up if abs(wanted) > abs(set_point) else down)
        set_point += min(max(wanted - set_point, -most), most)
        speed += (set_point - speed) * 0.001 / TRUE["motor_lag"]
        seen[i] = speed
    return np.interp(t, grid, seen)


def steps(rng: np.random.Generator, top: float, up: float, down: float, hold: float, noise: float) -> Log:
    """Return a log of eight starts and stops."""
    t = instants(rng, 0.01, 17.0 * hold)
    command = np.where(np.floor(t / hold) % 2 == 1, top, 0.0)
    return t, command, drive(t, command, up, down) + rng.normal(0.0, noise, len(t))


def stairs(rng: np.random.Generator) -> Log:
    """Return the log of a wheel told to run 1 mm/s faster every half second: dead band, then steps of the drive."""
    t = instants(rng, 0.02, 80.0)
    told, late = (0.001 * np.floor(np.maximum(0.0, t - delay) / 0.5) for delay in (0.0, 0.27))
    step = TRUE["wheel_speed_resolution"]
    moved = np.where(late < TRUE["smallest_wheel_speed"], 0.0, np.round(late / step) * step)
    return t, told, moved + rng.normal(0.0, 0.0012, len(t))


def too_fast(rng: np.random.Generator) -> Log:
    """Return the log of a wheel told half of its most, then more than it can."""
    t = instants(rng, 0.02, 12.0)
    command = np.where(t < 1.0, 0.0, np.where(t < 5.0, 0.35, 0.9))
    clean = drive(t, np.minimum(command, TRUE["wheel_speed_limit"]), 0.5, 0.6)
    return t, command, clean + rng.normal(0.0, 0.008, len(t))


def rest(rng: np.random.Generator) -> Log:
    """Return time, x, y, heading of a minute at rest."""
    t = instants(rng, 0.05, 60.0)
    p, h = TRUE["position_noise"], TRUE["heading_noise"]
    return t, 2.0 + rng.normal(0.0, p, len(t)), 1.0 + rng.normal(0.0, p, len(t)), rng.normal(0.0, h, len(t))


def square_end(rng: np.random.Generator, way: int) -> tuple[float, float]:
    """Return true end minus odometry's end of one square (way 1: counter-clockwise)."""
    pose, reckoned = Pose(0.0, 0.0, 0.0), Pose(0.0, 0.0, 0.0)
    corner = way * math.pi / 4.0 * TAPE_TRACK
    for left, right in ((SIDE, SIDE), (-corner, corner)) * 4:
        slip = rng.normal(0.0, 0.002, 2)
        reckoned = odometry(reckoned, left, right, TAPE_TRACK)
        pose = odometry(pose, left * LEFT_WHEEL + slip[0], right * RIGHT_WHEEL + slip[1], TRUE["track_width"])
    return pose.x - reckoned.x, pose.y - reckoned.y


def made_up(seed: int = 4) -> dict[str, Log]:
    """Return the logs of an afternoon, all made up here."""
    rng = np.random.default_rng(seed)
    return {
        "speed_log": steps(rng, 0.4, TRUE["acceleration"], TRUE["braking"], 2.5, 0.008),
        "turn_log": steps(rng, 1.5, TRUE["turn_acceleration"], TRUE["turn_acceleration"], 2.0, 0.03),
        "stairs_log": stairs(rng),
        "fast_log": too_fast(rng),
        "rest_log": rest(rng),
        "clockwise": np.array([square_end(rng, -1) for _ in range(5)]),
        "counter_clockwise": np.array([square_end(rng, 1) for _ in range(5)]),
    }


# --- what you would write


class Afternoon(NamedTuple):
    """Everything that was measured."""

    speed: StepResponse
    turn: StepResponse
    smallest: Measured
    resolution: Measured
    limit: Measured
    rest: tuple[Measured, Measured]
    square: SquareCheck

    def all(self) -> list[StepResponse | Measured]:
        return [self.speed, self.turn, self.smallest, self.resolution, self.limit, *self.rest, *self.square[:3]]


def measure(logs: dict[str, Log]) -> Afternoon:
    """Return what the logs tell."""
    speed = speed_steps(*logs["speed_log"])
    return Afternoon(
        speed=speed,
        turn=turn_steps(*logs["turn_log"]),
        smallest=smallest_wheel_speed(*logs["stairs_log"], delay=speed.delay.value),
        resolution=wheel_speed_resolution(*logs["stairs_log"]),
        limit=wheel_speed_limit(*logs["fast_log"]),
        rest=rest_noise(*logs["rest_log"]),
        square=square(SIDE, logs["clockwise"], logs["counter_clockwise"], TAPE_TRACK),
    )


def table(found: Afternoon) -> str:
    """Return what was measured beside what is true of the made-up cart."""
    lines = [f"{'':24}{'measured':>10}{'±':>9}{'true':>9}"]
    ones = [one for each in found.all() for one in (each[:4] if isinstance(each, StepResponse) else [each])]
    true = TRUE | {"left_wheel": LEFT_WHEEL, "right_wheel": RIGHT_WHEEL}
    for one in ones:
        lines.append(f"{one.name.replace('_', ' '):24}{one.value:10.4f}{one.uncertainty:9.4f}{true[one.name]:9.4g} {one.unit}")
    return "\n".join(lines)


# --- pictures

BLUE, ORANGE, GREEN, PURPLE = "#0072b2", "#d55e00", "#009e73", "#8a5a83"  # told apart by the colour-blind (Okabe & Ito 2008)
INK, SOFT, FAINT = "#333333", "#8c8c8c", "#ebebeb"
STYLE = {
    "font.size": 12,
    "text.color": INK,
    "axes.labelcolor": INK,
    "axes.titlesize": 14,
    "axes.titlelocation": "left",
    "axes.titlepad": 10,
    "axes.edgecolor": SOFT,
    "axes.axisbelow": True,
    "axes.grid": True,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "grid.color": FAINT,
    "xtick.color": SOFT,
    "ytick.color": SOFT,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
}
NOTE = "made-up data that look recorded"


def pictures(logs: dict[str, Log], found: Afternoon) -> str:
    """Draw three pictures; return a sentence that says where they are, or how to get them."""
    try:
        from matplotlib import rc_context
        from matplotlib.figure import Figure
    except ImportError:
        return "No pictures, for matplotlib is missing: pip install 'steerkit[plot]', then run this again."
    names = []
    with rc_context(STYLE):
        for name, draw, size in (
            ("steps", draw_steps, (15, 6.5)),
            ("stairs", draw_stairs, (13, 6.5)),
            ("squares", draw_squares, (14, 6.5)),
        ):
            figure = Figure(figsize=size, dpi=100, layout="constrained")
            draw(figure, logs, found)
            figure.get_layout_engine().set(w_pad=0.15, h_pad=0.12)
            figure.savefig(HERE / f"measure_{name}.png")
            names.append(f"measure_{name}.png")
    return f"Pictures: {', '.join(names)} in {HERE}"


def folded(log: Log, rising: bool) -> tuple[np.ndarray, np.ndarray]:
    """Return the rows about every start (stop), time counted from the step."""
    t, command, response = log
    change = np.flatnonzero(np.diff(command) > 0.0 if rising else np.diff(command) < 0.0) + 1
    near = [(t >= t[i] - 0.62) & (t < t[i] + 1.7) for i in change]
    return np.concatenate([t[rows] - t[i] for rows, i in zip(near, change, strict=True)]), np.concatenate(
        [response[rows] for rows in near]
    )


def draw_steps(figure, logs: dict[str, Log], found: Afternoon) -> None:
    """Draw all starts over one another, and all stops, with the fitted response and the numbers where they belong."""
    s, top = found.speed, 0.4
    figure.suptitle(
        f"Eight starts and eight stops in one log tell dead time, lag and both slopes  ({NOTE})", fontsize=17, x=0.01, ha="left"
    )
    for number, (axes, rising) in enumerate(zip(figure.subplots(1, 2, sharey=True), (True, False), strict=True)):
        slope = s.acceleration if rising else s.braking
        dead, lag, ramp = s.dead_time.value, s.motor_lag.value, top / slope.value
        h, y = folded(logs["speed_log"], rising)
        axes.plot(h, y, ".", color=SOFT, markersize=3.5, alpha=0.55, zorder=2)
        fine = np.linspace(-0.62, 1.7, 900)
        share = np.clip((fine - dead) / ramp, 0.0, 1.0)
        behind = lagging(fine - dead, ramp, lag)
        first, last = (0.0, top) if rising else (top, 0.0)
        axes.step([-0.62, 0.0, 1.7], [first, last, last], where="post", color=INK, linewidth=1.6, linestyle=(0, (2, 2)))
        axes.plot(fine, first + (last - first) * share, color=BLUE, linewidth=1.8)
        axes.plot(fine, first + (last - first) * behind, color=ORANGE, linewidth=2.6)
        gap(axes, 0.0, dead, 0.06 if rising else 0.34, f"dead time\n{dead:.3f} ± {s.dead_time.uncertainty:.3f} s", before=True)
        level = 0.5 * top
        at = dead + ramp * 0.5
        gap(axes, at, at + lag, level, f"motor lag\n{lag:.3f} ± {s.motor_lag.uncertainty:.3f} s")
        middle = 0.78
        word = "acceleration" if rising else "braking"
        axes.annotate(
            f"{word}\n{slope.value:.3f} ± {slope.uncertainty:.3f} m/s²",
            (dead + middle * ramp, first + (last - first) * middle),
            xytext=(-12, 0),
            textcoords="offset points",
            ha="right",
            va="center",
            color=BLUE,
        )
        axes.set_title("Start" if rising else "Stop")
        axes.set_xlabel("time after the command (s)")
        axes.set_xlim(-0.62, 1.7)
        if number == 0:
            axes.set_ylabel("speed (m/s)")
            label(axes, 0.02, 0.405, "command", INK, "left")
            label(axes, 1.68, 0.125, "set-point of the drive", BLUE)
            label(axes, 1.68, 0.095, "fitted response", ORANGE)
            label(axes, 1.68, 0.065, "the log, all starts over one another", SOFT)
    axes.set_ylim(-0.03, 0.445)


def lagging(h: np.ndarray, ramp: float, lag: float) -> np.ndarray:
    """Return the response to a ramp from 0 to 1 in `ramp` seconds behind a lag."""

    def one(t: np.ndarray) -> np.ndarray:
        t = np.maximum(t, 0.0)
        return (t - lag * (1.0 - np.exp(-t / lag))) / ramp

    return one(h) - one(h - ramp)


def gap(axes, left: float, right: float, level: float, text: str, before: bool = False) -> None:
    """Draw a horizontal gap, its name after it, or before it."""
    how = {"arrowstyle": "<->", "color": GREEN, "linewidth": 2.2, "shrinkA": 0, "shrinkB": 0}
    axes.annotate("", (left, level), (right, level), arrowprops=how)
    place, off, side = (left, -8, "right") if before else (right, 12, "left")
    style = {"ha": side, "va": "center", "color": GREEN, "fontweight": "bold"}
    axes.annotate(text, (place, level), (off, 0), textcoords="offset points", **style)


def label(axes, x: float, y: float, text: str, colour: str, side: str = "right") -> None:
    axes.text(x, y, text, color=colour, ha=side, va="bottom")


def draw_stairs(figure, logs: dict[str, Log], found: Afternoon) -> None:
    """Draw command and response of the slow stairs, the smallest speed and the steps of the drive."""
    t, command, response = logs["stairs_log"]
    axes = figure.subplots()
    step = found.resolution.value
    for k in range(1, 17):
        axes.axhline(k * step, color=FAINT if k * step < 0.03 else "#d5d5d5", linewidth=1.0, zorder=1)
    axes.grid(visible=False)
    axes.plot(t, command, color=BLUE, linewidth=2.0, zorder=3)
    axes.plot(t, response, ".", color=ORANGE, markersize=3.0, alpha=0.7, zorder=2)
    low, high = (found.smallest.value + side * found.smallest.uncertainty for side in (-1, 1))
    begins = float(t[np.argmax(command >= high - 1e-9)])
    axes.axvline(begins, color=GREEN, linewidth=1.6, linestyle=(0, (5, 4)))
    axes.plot([0.0, begins], [found.smallest.value] * 2, color=GREEN, linewidth=1.6, linestyle=(0, (5, 4)))
    axes.text(
        begins + 1.0,
        0.010,
        f"smallest wheel speed {found.smallest.value:.4f} ± {found.smallest.uncertainty:.4f} m/s\n"
        f"stands at {low:.3f}, moves at {high:.3f} m/s",
        color=GREEN,
        fontweight="bold",
        va="bottom",
    )
    axes.text(begins - 0.8, 0.004, "stands, though told to move", color=ORANGE, ha="right", va="bottom")
    axes.text(
        79.5,
        0.095,
        f"the drive takes steps of\n{1000.0 * step:.2f} ± {1000.0 * found.resolution.uncertainty:.2f} mm/s",
        ha="right",
        va="top",
    )
    axes.text(66.0, 0.147, "command", color=BLUE, ha="right", fontweight="bold")
    axes.text(79.5, 0.128, "wheel", color=ORANGE, ha="right", fontweight="bold")
    axes.set_title(f"A wheel told to run 1 mm/s faster every half second  ({NOTE})", fontsize=17)
    axes.set_xlabel("time (s)")
    axes.set_ylabel("wheel speed (m/s)")
    axes.set_xlim(0.0, 80.0)
    axes.set_ylim(-0.006, 0.165)


def draw_squares(figure, logs: dict[str, Log], found: Afternoon) -> None:
    """Draw where ten squares end, and what the cart really drove."""
    floor, ends = figure.subplots(1, 2)
    figure.suptitle(f"Squares driven both ways tell track width and wheels apart  ({NOTE})", fontsize=17, x=0.01, ha="left")
    floor.plot([0, SIDE, SIDE, 0, 0], [0, 0, SIDE, SIDE, 0], color=SOFT, linewidth=1.4, linestyle=(0, (5, 4)))
    floor.plot([0, SIDE, SIDE, 0, 0], [0, 0, -SIDE, -SIDE, 0], color=SOFT, linewidth=1.4, linestyle=(0, (5, 4)))
    for way, colour, name in ((-1, ORANGE, "clockwise"), (1, BLUE, "counter-clockwise")):
        path = path_of_square(way)
        floor.plot(*path.T, color=colour, linewidth=2.4)
        floor.text(SIDE / 2.0, way * SIDE / 2.0, name, color=colour, ha="center", va="center", fontweight="bold")
        given = logs["clockwise" if way < 0 else "counter_clockwise"]
        ends.plot(*given.T, "o" if way > 0 else "s", color=colour, markersize=6, alpha=0.75)
        centre = np.mean(given, axis=0)
        ends.plot(*centre, "+", color=INK, markersize=16, markeredgewidth=2.2)
        ends.annotate(name, centre, (0, -44), textcoords="offset points", color=colour, ha="center", fontweight="bold")
    floor.plot(0, 0, "o", color=INK, markersize=7)
    floor.annotate("start", (0, 0), (-10, 0), textcoords="offset points", ha="right", va="center")
    floor.set_title("Dashed: as odometry believes.  Lines: the floor")
    ends.plot(0, 0, "o", color=INK, markersize=7)
    ends.annotate("where odometry ends", (0, 0), (0, 12), textcoords="offset points", ha="center")
    ends.set_title("True ends of five runs each way, + their centres")
    width, left, right = found.square[:3]
    ends.text(
        0.03,
        0.03,
        f"track width {width.value:.4f} ± {width.uncertainty:.4f} m (tape: {TAPE_TRACK:g} m)\n"
        f"left wheel {left.value:.4f} ± {left.uncertainty:.4f} of what it was taken for\n"
        f"right wheel {right.value:.4f} ± {right.uncertainty:.4f}",
        transform=ends.transAxes,
        va="bottom",
    )
    for axes in (floor, ends):
        axes.set_aspect("equal", adjustable="datalim")
        axes.set_xlabel("x (m)")
        axes.set_ylabel("y (m)")
    ends.margins(0.28)


def path_of_square(way: int) -> np.ndarray:
    """Return the true path of a square without slip, shape (n, 2)."""
    pose, path = Pose(0.0, 0.0, 0.0), [(0.0, 0.0)]
    corner = way * math.pi / 4.0 * TAPE_TRACK
    for _ in range(4):
        for left, right, pieces in ((SIDE, SIDE, 40), (-corner, corner, 1)):
            for _ in range(pieces):
                pose = odometry(pose, left * LEFT_WHEEL / pieces, right * RIGHT_WHEEL / pieces, TRUE["track_width"])
                path.append(pose[:2])
    return np.array(path)


def main() -> None:
    print("Nothing here is recorded: the logs are made up, of a cart whose true numbers are known.\n")
    logs = made_up()
    found = measure(logs)
    print(table(found), end="\n\n")
    declared = for_platform(*found.all())
    print(declared, end="\n\n")
    cart = Platform(radius=0.36, speed_limit=0.40, turn_rate_limit=1.8, period=0.05, **declared.numbers)
    print(cart.to_json())
    print(pictures(logs, found))


if __name__ == "__main__":
    main()
