"""First drive: a described cart, a plain control loop, five goals, a table and a picture.

A cart carries seed trays through a greenhouse by night; a camera under the roof tells it where it is. Five goals come one after
the other: a bench ahead, a tray straight behind, one close beside it (inside its turning circle), the far end of the house, and
home. `drive` is what you would write for your own robot; `StandIn` takes the place of that robot here, no more.

    python docs/first_drive.py

The picture is written beside this file; it needs matplotlib (pip install 'steerkit[plot]').
"""

from __future__ import annotations

import math
from collections import deque
from pathlib import Path
from typing import NamedTuple

import numpy as np

from steerkit import Causes, Command, Controller, Frame, Measurement, Phase, Platform, Pose, Slowing
from steerkit.kinematics import arc, to_motion, to_world
from steerkit.travel_time import least_travel_time

CART = Platform(
    radius=0.36,
    track_width=0.50,
    wheel_speed_limit=0.70,
    speed_limit=0.40,
    turn_rate_limit=1.8,
    acceleration=0.5,
    braking=0.6,
    turn_acceleration=3.0,
    period=0.05,
    dead_time=0.18,
    motor_lag=0.09,
    position_noise=0.015,
    heading_noise=0.015,
    smallest_wheel_speed=0.02,
    wheel_speed_resolution=0.005,
)
CAPTURE_RADIUS = 0.25  # m; the benches are within reach from anywhere in this disc
TIME_OUT = 60.0  # s for each goal
TICK = 0.002  # s, the stand-in's own step
STANDS_BELOW = 0.018  # m/s; its wheels do not run more slowly
FOOTNOTE = """\
Arrived is: standing still within {radius:g} m of the goal. Places are the true ones, not those measured.
`shortest` is a lower bound, proven (steerkit.travel_time): from where it was given the goal, no robot that drives forwards within
the limits, ramps, periods and dead time of this platform is quicker. It knows of no motor lag and no noise; the cart has both."""
PICTURE = Path(__file__).resolve().with_suffix(".png")


class Goal(NamedTuple):
    """A place to go, in the world or as seen from where the cart stands when the goal is given (ahead, left)."""

    name: str
    frame: Frame
    point: tuple[float, float]


GOALS = [
    Goal("bench ahead", Frame.WORLD, (6.0, 0.9)),
    Goal("straight behind", Frame.ROBOT, (-2.2, 0.0)),
    Goal("beside, inside the turning circle", Frame.ROBOT, (0.0, -0.38)),
    Goal("far end of the house", Frame.WORLD, (1.0, 7.0)),
    Goal("home", Frame.WORLD, (0.0, 0.0)),
]


class StandIn:
    """In place of a robot: dead time, motor lag, wheels that stand still below a speed, noisy poses."""

    def __init__(self, cart: Platform, seed: int) -> None:
        self.cart, self.rng = cart, np.random.default_rng(seed)
        self.pose, self.ticks = Pose(0.0, 0.0, 0.0), 0
        self.wheels = self.told = (0.0, 0.0)
        self.under_way: deque[tuple[int, tuple[float, float]]] = deque()

    @property
    def time(self) -> float:
        return self.ticks * TICK

    def measure(self) -> tuple[float, float, float]:
        """Return the pose as the camera tells it."""
        c = self.cart
        x, y, heading = self.rng.normal(self.pose, (c.position_noise, c.position_noise, c.heading_noise))
        return x, y, heading

    def drive(self, command: Command, duration: float) -> None:
        """Send a command and let `duration` pass; the wheels hear of it after the dead time."""
        runs = tuple(speed if abs(speed) > STANDS_BELOW else 0.0 for speed in (command.left, command.right))
        self.under_way.append((self.ticks + round(self.cart.dead_time / TICK), runs))
        for _ in range(round(duration / TICK)):
            if self.under_way and self.under_way[0][0] <= self.ticks:
                self.told = self.under_way.popleft()[1]
            self.roll()
            self.ticks += 1

    def roll(self) -> None:
        """Let one tick pass: each wheel nears its command exponentially, the cart rolls along an arc."""
        lag = self.cart.motor_lag
        decay = math.exp(-TICK / lag) if lag > 0.0 else 0.0
        after = tuple(told + (now - told) * decay for now, told in zip(self.wheels, self.told, strict=True))
        left, right = (told + lag * (a - b) / TICK for told, a, b in zip(self.told, self.wheels, after, strict=True))
        self.pose = arc(self.pose, to_motion((left, right), self.cart.track_width), TICK)
        self.wheels = after


class Row(NamedTuple):
    """One step of the log; pose and distance are the true ones."""

    goal: int
    time: float
    pose: Pose
    wheels: tuple[float, float]
    heading_error: float
    distance: float
    phase: Phase
    causes: Causes
    slowed_by: Slowing


class Trip(NamedTuple):
    """One goal: its place in the world, when it was given, and the shortest time to it."""

    name: str
    point: tuple[float, float]
    given: float
    shortest: float


def drive(controller: Controller, robot: StandIn, goals: list[Goal]) -> tuple[list[Trip], list[Row]]:
    """Drive to one goal after the other. This is the whole control loop."""
    period = controller.platform.period
    memory = controller.start(time=robot.time)
    trips, log = [], []
    for number, goal in enumerate(goals):
        point = to_world(robot.pose, goal.point) if goal.frame == Frame.ROBOT else goal.point
        given = robot.time
        shortest = least_travel_time(controller.platform, robot.pose, point, controller.capture_radius)
        trips.append(Trip(goal.name, point, given, shortest))
        phase = Phase.DRIVING
        while phase != Phase.ARRIVED and robot.time < given + TIME_OUT:
            measurement = Measurement(time=robot.time, pose=robot.measure(), goal=point)
            decision = controller.step(memory, measurement)
            memory, phase = decision.memory, decision.phase
            log.append(
                Row(
                    goal=number,
                    time=robot.time,
                    pose=robot.pose,
                    wheels=(decision.command.left, decision.command.right),
                    heading_error=decision.report.heading_error,
                    distance=math.dist(robot.pose[:2], point),
                    phase=phase,
                    causes=decision.causes,
                    slowed_by=decision.report.slowed_by,
                )
            )
            robot.drive(decision.command, period)
    return trips, log


def table(controller: Controller, trips: list[Trip], log: list[Row]) -> str:
    """Return the table as text, with its footnote."""
    width = max(len(trip.name) for trip in trips) + 3
    lines = [f"{'goal':{width}}    time  shortest   stopped at, m  off goal  slowed by, share of steps"]
    for number, trip in enumerate(trips):
        rows = [row for row in log if row.goal == number]
        last = rows[-1]
        took = f"{last.time - trip.given:.1f} s" if last.phase == Phase.ARRIVED else "gave up"
        place = f"{last.pose.x:.2f}, {last.pose.y:.2f}"
        name = f"{number + 1}  {trip.name}"
        lines.append(f"{name:{width}} {took:>7} {trip.shortest:7.1f} s {place:>15} {last.distance:7.3f} m  {shares(rows)}")
    return "\n".join([*lines, "", FOOTNOTE.format(radius=controller.capture_radius)])


def shares(rows: list[Row]) -> str:
    """Return what kept the speed down, the most frequent first, with its share of the steps."""
    counts = {one: sum(row.slowed_by == one for row in rows) for one in Slowing}
    seen = sorted((one for one in counts if counts[one]), key=lambda one: -counts[one])
    names = {Slowing.NONE: "nothing"}
    words = [names.get(one, one.name.lower().replace("_", " ")) for one in seen]
    return ", ".join(f"{word} {counts[one] / len(rows):.0%}" for word, one in zip(words, seen, strict=True))


COLOURS = ("#33658a", "#c8553d", "#6a994e", "#86588f", "#c08a1e")  # one a goal
LEFT, RIGHT = "#b9b9b9", "#333333"
INK, SOFT, FAINT = "#333333", "#8c8c8c", "#ebebeb"
DASHED = {"color": INK, "linewidth": 0.9, "linestyle": (0, (5, 4)), "zorder": 1}
STYLE = {
    "font.size": 11,
    "text.color": INK,
    "axes.labelcolor": INK,
    "axes.titlesize": 13,
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


def picture(controller: Controller, trips: list[Trip], log: list[Row]) -> str:
    """Draw the drive; return a sentence that says where the picture is, or how to get one."""
    try:
        from matplotlib import rc_context
        from matplotlib.figure import Figure
    except ImportError:
        return "No picture, for matplotlib is missing: pip install 'steerkit[plot]', then run this again."
    with rc_context(STYLE):
        figure = Figure(figsize=(16, 9), dpi=100)
        figure.text(
            0.045, 0.93, "A night round with seed trays: five goals, forwards only, each nearly as fast as can be", fontsize=19
        )
        floor = figure.add_axes((0.045, 0.08, 0.47, 0.775))
        error = figure.add_axes((0.585, 0.665, 0.35, 0.19))
        wheels = figure.add_axes((0.585, 0.3725, 0.35, 0.19), sharex=error)
        distance = figure.add_axes((0.585, 0.08, 0.35, 0.19), sharex=error)
        draw_floor(floor, controller, trips, log)
        draw_error(error, trips, log)
        draw_wheels(wheels, controller, log)
        draw_distance(distance, controller, trips, log)
        error.set_xlim(0.0, log[-1].time)
        for axes in (error, wheels, distance):
            axes.yaxis.set_label_coords(-0.1, 0.5)
            for trip in trips[1:]:
                axes.axvline(trip.given, color=SOFT, linewidth=0.8, zorder=1)
        for axes in (error, wheels):
            axes.tick_params(labelbottom=False)
        figure.savefig(PICTURE)
    return f"Picture: {PICTURE}"


def draw_floor(axes, controller: Controller, trips: list[Trip], log: list[Row]) -> None:
    """Draw the goals, the paths, and the cart to scale: every two seconds in outline, where it stopped filled."""
    from matplotlib.patches import Circle, Rectangle

    radius = controller.platform.radius
    every = round(2.0 / controller.platform.period)
    stops = [number for number, row in enumerate(log) if row.phase == Phase.ARRIVED]
    for number, row in enumerate(log):
        if number % every and number not in stops:
            continue
        colour = COLOURS[row.goal]
        strength = 0.9 if number in stops else 0.4
        axes.add_patch(Circle(row.pose[:2], radius, fill=False, edgecolor=colour, linewidth=1.0, alpha=strength))
        axes.plot(*zip(row.pose[:2], to_world(row.pose, (radius, 0.0)), strict=True), color=colour, linewidth=1.0, alpha=strength)
    axes.add_patch(Rectangle((0.41, 0.7), 0.59, 0.3, transform=axes.transAxes, color="white", zorder=0.6))  # the names' ground
    for number, trip in enumerate(trips):
        rows = [row for row in log if row.goal == number]
        colour = COLOURS[number]
        axes.plot([row.pose.x for row in rows], [row.pose.y for row in rows], color=colour, linewidth=2.4, solid_capstyle="round")
        axes.add_patch(Circle(trip.point, controller.capture_radius, color=colour, alpha=0.28, linewidth=0.0))
        numeral(axes, *trip.point, number)
        line = 0.93 - 0.045 * number
        axes.text(0.43, line, f"{number + 1}", transform=axes.transAxes, color=colour, fontweight="bold")
        axes.text(0.46, line, trip.name, transform=axes.transAxes)
        axes.text(0.86, line, f"{rows[-1].time - trip.given:.1f} s", transform=axes.transAxes, ha="right")
        axes.text(1.0, line, f"{trip.shortest:.1f} s", transform=axes.transAxes, ha="right", color=SOFT)
    axes.text(0.86, 0.975, "time", transform=axes.transAxes, ha="right")
    axes.text(1.0, 0.975, "at best", transform=axes.transAxes, ha="right", color=SOFT)
    axes.plot(*log[0].pose[:2], marker="o", markersize=5, color=INK)
    axes.annotate("start", log[0].pose[:2], (0, -30), textcoords="offset points", ha="center")
    axes.set_aspect("equal", adjustable="datalim")
    axes.set_title("The cart is drawn to scale every 2 s; the discs are where it may stop")
    axes.set_xlabel("x (m)")
    axes.set_ylabel("y (m)")


def numeral(axes, x: float, y: float, number: int, **how) -> None:
    """Write the number of a goal in its colour, with a white rim."""
    from matplotlib.patheffects import withStroke

    rim = [withStroke(linewidth=3, foreground="white")]
    how = {"ha": "center", "va": "center_baseline", "fontweight": "bold", "color": COLOURS[number], "zorder": 5} | how
    axes.text(x, y, str(number + 1), path_effects=rim, **how)


def draw_error(axes, trips: list[Trip], log: list[Row]) -> None:
    """Draw the heading error, broken where it goes from half a turn to minus half a turn; above it the goals' numbers."""
    for number, trip in enumerate(trips):
        rows = [row for row in log if row.goal == number]
        error = np.degrees([row.heading_error for row in rows])
        error[1:][np.abs(np.diff(error)) > 180.0] = np.nan
        axes.plot([row.time for row in rows], error, color=COLOURS[number], linewidth=1.6)
        numeral(axes, 0.5 * (trip.given + rows[-1].time), -200, number, va="top")
    axes.set_ylim(-185, 185)
    axes.set_yticks(range(-180, 181, 90))
    axes.set_title("The cart turns to each new goal the short way")
    axes.set_ylabel("heading error (deg)")


def draw_wheels(axes, controller: Controller, log: list[Row]) -> None:
    """Draw the commanded wheel speeds and their limits."""
    limit = controller.platform.wheel_speed_limit
    time = [row.time for row in log]
    for side, (name, colour) in enumerate((("left", LEFT), ("right", RIGHT))):
        axes.step(time, [row.wheels[side] for row in log], where="post", color=colour, linewidth=2.0 - 0.9 * side, label=name)
    for side in (-limit, limit):
        axes.axhline(side, **DASHED)
        axes.annotate("limit", (1.0, side), (6, 0), xycoords=("axes fraction", "data"), textcoords="offset points", va="center")
    axes.set_ylim(-0.85, 0.85)
    axes.set_title("Each wheel keeps to its limits")
    axes.set_ylabel("wheel speed (m/s)")
    axes.legend(frameon=False, ncols=2, loc="lower right", bbox_to_anchor=(1.0, 1.0), borderaxespad=0.3, handlelength=1.4)


def draw_distance(axes, controller: Controller, trips: list[Trip], log: list[Row]) -> None:
    """Draw the distance to the goal, the edge of the disc, and the shortest times as triangles."""
    edge = controller.capture_radius
    for number, trip in enumerate(trips):
        rows = [row for row in log if row.goal == number]
        axes.plot([row.time for row in rows], [row.distance for row in rows], color=COLOURS[number], linewidth=1.6)
        axes.plot(trip.given + trip.shortest, edge, marker="v", color=COLOURS[number], markersize=8, markeredgecolor="white")
    axes.axhline(edge, **DASHED)
    axes.annotate("disc", (1.0, edge), (6, 0), xycoords=("axes fraction", "data"), textcoords="offset points", va="center")
    axes.set_yscale("log")
    axes.set_ylim(0.1, 12.0)
    axes.set_yticks([0.1, 0.3, 1.0, 3.0, 10.0], ["0.1", "0.3", "1", "3", "10"])
    axes.minorticks_off()
    axes.set_title("Triangles: the least possible time of any robot with these limits")
    axes.set_ylabel("distance (m), log")
    axes.set_xlabel("time (s)")


def main() -> None:
    controller = Controller(CART, capture_radius=CAPTURE_RADIUS)
    print(controller, end="\n\n")
    trips, log = drive(controller, StandIn(CART, seed=7), GOALS)
    print(table(controller, trips, log), end="\n\n")
    print(picture(controller, trips, log))


if __name__ == "__main__":
    main()
