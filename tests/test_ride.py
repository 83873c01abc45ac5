"""A recorded ride, nothing repaired (tests/data/ride.csv), as real input: its fixes as a goal that moves, its stamps, its headings.

One carriage, simulated with dead time and lag, drives

- `follow`: the latest fix is the goal. A doubled second brings two goals, at two steps; a missing second brings none. Also with
  every tenth fix only, so that the robot turns at full speed, and with one a minute, so that it mostly turns from rest.
- `follow_rows`: one step a row of the file, at the time in it, doubled or not, or at evenly spaced times to compare.
- `drive_waypoints`: a fix every 25 m of path, the next one given when the path touches the disc about the last.

Every drive is checked step by step, `figures` says how it went, and `python docs/ride.py` prints and draws that.

Turning *the long way round* is defined here so. Where a step drives (it wants a speed), let e be the error

    e = remainder(atan2(goal - place) - heading, 2 pi)                    IEEE 754-2019, remainder

at the true pose from which the command of that step acts: that of the simulated robot, the dead time later, rolled out by its lag.
The turn rate that the step wants, before the limits, must have the sign of e, at new goals and at all other steps. Where |e| or
pi - |e| is below BAND the sign is a rounding's and is not judged; the figures count such goals. A robot that neither turns nor has
a turn under way keeps the goal on one side until the new command acts, so there the sign of e at the pose of now, with no model at
all, must be wanted too (`fixes_at_rest`).
"""

from __future__ import annotations

import functools
import math
from collections import deque
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pytest

from closed_loop import plant_kernel
from steerkit import Causes, Controller, Measurement, Phase, Platform, Slowing, angles

RIDE = Path(__file__).parent / "data" / "ride.csv"
BAND = 1e-5  # rad; the simulated robot moves in arcs of lag/20, the prediction by quadrature: 1e-6 rad apart at most, measured
STILL = 1e-9  # rad/s; behind a lag a turn rate dies away and is never zero
ROUNDING = 1e-9  # share of a limit

# A light carriage that can keep up with the rider. The ride sets two of its numbers. Speed limit: 16 m/s, above the rider's 15.009.
# Turn rate: from leg to leg of 25 m, at the mean speed of 8.46 m/s, the heading moves at 0.51 rad/s at most; 1 rad/s is twice that.
# The wheels give the speed limit and no more, so that a turn at full speed costs speed. The rest is chosen, round, and plausible at
# that size; nothing here knows of sideways grip. The dead time is no whole number of periods, so that the fraction counts.
CARRIAGE = Platform(
    radius=1.0,
    track_width=1.2,
    wheel_speed_limit=16.0,
    speed_limit=16.0,
    turn_rate_limit=1.0,
    acceleration=2.0,
    braking=4.0,
    turn_acceleration=4.0,
    period=0.1,
    dead_time=0.25,
    motor_lag=0.15,
)
# At 16 m/s and 1 rad/s the window wants 1.1 * 16 / 1 = 17.6 m, and at one step a second 16 * 1 / 0.8 = 20 m; both drives get 20 m.
FOLLOW_RADIUS = 20.0  # m
SPACING = 25.0  # m of path from waypoint to waypoint
WAYPOINT_RADIUS = 5.0  # m, a fifth of that; the fastest workable speed is then 5 * 1 / 1.1 = 4.55 m/s
NO_GOAL, EXACT = (math.nan, math.nan), (0.0, 0.0, 0.0)
AWAY = (0.0, 0.0, -math.pi / 2.0)  # at the first fix, and the rider leaves north

BAD = Causes.BAD_POSE | Causes.STALE_POSE | Causes.POSE_JUMPED | Causes.BAD_GOAL | Causes.BAD_FIELD | Causes.BAD_MEMORY
UNASKED = BAD | Causes.TOLD_TO_HOLD | Causes.APPLIED_BY_OTHERS  # what no drive here gives a reason for


class Ride(NamedTuple):
    """The columns of the file, shape (rows,) each: s, m, m, m/s."""

    time: np.ndarray
    x: np.ndarray
    y: np.ndarray
    speed: np.ndarray


class Log(NamedTuple):
    """One number a step, shape (steps,) each; SI units.

    Pose and motion are those of the simulated robot at the step; `acting_*` where the command whose turn has come starts to act.
    """

    time: np.ndarray
    row: np.ndarray  # number of the goal
    x: np.ndarray
    y: np.ndarray
    heading: np.ndarray
    speed: np.ndarray
    turn_rate: np.ndarray
    acting_x: np.ndarray
    acting_y: np.ndarray
    acting_heading: np.ndarray
    acting_speed: np.ndarray
    acting_turn_rate: np.ndarray
    nearest: np.ndarray  # to the goal, from this step to the next
    goal_x: np.ndarray
    goal_y: np.ndarray
    left: np.ndarray
    right: np.ndarray
    command_speed: np.ndarray
    command_turn_rate: np.ndarray
    phase: np.ndarray
    causes: np.ndarray
    heading_error: np.ndarray
    distance: np.ndarray
    wanted_speed: np.ndarray
    wanted_turn_rate: np.ndarray
    slowed_by: np.ndarray


class Robot:
    """The carriage, simulated: a command starts to act after the dead time, and the wheels follow it with a lag."""

    def __init__(self, platform: Platform, pose: tuple[float, float, float]) -> None:
        self.platform = platform
        self.state = (*(float(value) for value in pose), 0.0, 0.0)
        periods = periods_of_dead_time(platform)
        self.first = platform.dead_time - periods * platform.period  # s of a period in which the command before still acts
        self.under_way = deque([(0.0, 0.0)] * (periods + 1))

    def hold(self, command: tuple[float, float], goal: tuple[float, float]) -> tuple[tuple[float, ...], float]:
        """Move for a period; return pose and motion where the command in turn starts to act, and how near the goal came."""
        p = self.platform
        self.under_way.append(command)
        *state, nearest = plant_kernel(*self.state, *self.under_way.popleft(), self.first, p.motor_lag, *goal, math.inf)
        acting = tuple(state)
        *state, nearest = plant_kernel(*acting, *self.under_way[0], p.period - self.first, p.motor_lag, *goal, nearest)
        self.state = tuple(state)
        return acting, nearest


class Drive:
    """A controller on the robot it was made for, and the log of both."""

    def __init__(self, controller: Controller, pose: tuple[float, float, float], time: float = 0.0) -> None:
        self.controller, self.robot = controller, Robot(controller.platform, pose)
        self.memory = controller.start(time)
        self.steps: list[tuple[float, ...]] = []

    def step(
        self,
        time: float,
        goal: tuple[float, float],
        row: int,
        next_goal: tuple[float, float] = NO_GOAL,
        noise: tuple[float, float, float] = EXACT,
    ) -> tuple[float, Phase]:
        """Step, and drive for a period; return how near the goal came (m), and the phase. The pose is seen off by `noise`."""
        state = self.robot.state
        seen = (state[0] + noise[0], state[1] + noise[1], state[2] + noise[2])
        decision = self.controller.step(self.memory, Measurement(time, seen, goal, next_goal=next_goal))
        self.memory, c, r = decision.memory, decision.command, decision.report
        acting, nearest = self.robot.hold((c.speed, c.turn_rate), goal)
        told = (decision.phase, decision.causes, r.heading_error, r.distance, *r.wanted, r.slowed_by)
        self.steps.append((time, row, *state, *acting, nearest, *goal, *c, *told))
        return nearest, decision.phase

    def log(self) -> Log:
        return Log(*np.array(self.steps).T.copy())


@functools.cache
def read_ride() -> Ride:
    return Ride(*np.loadtxt(RIDE, delimiter=",", skiprows=4).T.copy())


def periods_of_dead_time(platform: Platform) -> int:
    return math.floor(platform.dead_time / platform.period + 1e-12)


def step_of_each_row(time: np.ndarray, period: float) -> np.ndarray:
    """Return at which step each row is given: that of its stamp, or the next one where that step has had its row."""
    steps = np.rint(time / period).astype(int)
    for i in range(1, len(steps)):
        steps[i] = max(steps[i], steps[i - 1] + 1)
    return steps


def follow(controller: Controller, every: int = 1, rows: int | None = None, more: float = 30.0) -> Log:
    """Drive after the latest of every so many rows, and `more` seconds (s) after the last one."""
    ride, period = Ride(*(column[: rows or len(column)] for column in read_ride())), controller.platform.period
    given = step_of_each_row(ride.time, period)[::every]
    x, y = ride.x[::every].tolist(), ride.y[::every].tolist()
    steps = int(given[-1] + more / period)
    drive = Drive(controller, AWAY)
    for k, i in enumerate(np.searchsorted(given, np.arange(steps), side="right").tolist()):
        drive.step(k * period, (x[i - 1], y[i - 1]), i - 1)
    return drive.log()


def follow_rows(controller: Controller, times: np.ndarray) -> Log:
    """Drive one period a row, told `times` (s), shape (rows,). The rider rode the rows evenly, whatever the stamps say (README)."""
    ride = read_ride()
    drive = Drive(controller, AWAY)
    for i, (time, x, y) in enumerate(zip(times.tolist(), ride.x.tolist(), ride.y.tolist(), strict=True)):
        drive.step(time, (x, y), i)
    return drive.log()


def path_lengths(ride: Ride) -> np.ndarray:
    """Return how far along the path each row lies, m."""
    return np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(ride.x), np.diff(ride.y)))])


def thinned(ride: Ride) -> np.ndarray:
    """Return the rows kept as waypoints: the first at or beyond each whole multiple of SPACING along the path."""
    length = path_lengths(ride)
    return np.searchsorted(length, np.arange(SPACING, length[-1], SPACING))


def waypoints() -> np.ndarray:
    """Return the waypoints, m, shape (n, 2)."""
    ride = read_ride()
    return np.column_stack([ride.x, ride.y])[thinned(ride)]


def drive_waypoints(controller: Controller, points: np.ndarray, patience: float = 60.0) -> Log:
    """Drive through `points`, m, shape (n, 2), and come to rest at the last; give up after `patience` (s) at one of them."""
    ride, period = read_ride(), controller.platform.period
    drive = Drive(controller, (0.0, 0.0, math.atan2(ride.y[1], ride.x[1])))
    goals = [tuple(point) for point in points.tolist()]
    i = begun = step = 0
    while (step - begun) * period < patience:
        nearest, phase = drive.step(step * period, goals[i], i)
        step += 1
        if i + 1 < len(goals) and nearest <= controller.capture_radius:
            i, begun = i + 1, step
        elif phase == Phase.ARRIVED:
            break
    return drive.log()


def remainder(angle: np.ndarray) -> np.ndarray:
    """Return angles (rad) to the nearest whole turn: IEEE 754-2019, remainder, one by one in the standard library."""
    return np.array([math.remainder(one, 2.0 * math.pi) for one in angle.tolist()])


def goal_where_it_acts(log: Log, platform: Platform) -> tuple[np.ndarray, np.ndarray]:
    """Return distance (m) and short-way error (rad) of the goal at the true pose from which each step's command acts.

    Rolled out by the lag at the motion of then: an arc, by its chord. NaN for the last few steps.
    """
    late = periods_of_dead_time(platform)
    steps = len(log.time) - late
    x, y, heading, v, w = (column[late:] for column in log[7:12])
    half = 0.5 * w * platform.motor_lag
    chord = v * platform.motor_lag * np.sinc(half / np.pi)
    x, y = x + chord * np.cos(heading + half), y + chord * np.sin(heading + half)
    distance, error = np.full((2, len(log.time)), np.nan)
    dx, dy = log.goal_x[:steps] - x, log.goal_y[:steps] - y
    distance[:steps] = np.hypot(dx, dy)
    error[:steps] = remainder(np.arctan2(dy, dx) - heading - 2.0 * half)
    return distance, error


def error_where_it_acts(log: Log, platform: Platform) -> np.ndarray:
    return goal_where_it_acts(log, platform)[1]


def error_now(log: Log) -> np.ndarray:
    """Return the short-way error (rad) at the true pose of each step."""
    return remainder(np.arctan2(log.goal_y - log.y, log.goal_x - log.x) - log.heading)


def driving(log: Log) -> np.ndarray:
    return (log.phase == Phase.DRIVING) & ((log.wanted_speed > 0.0) | (log.wanted_turn_rate != 0.0))


def clear(error: np.ndarray) -> np.ndarray:
    """Say which errors (rad) have a sign: not within BAND of 0 or of half a turn. NaN has none."""
    return (np.abs(error) > BAND) & (np.abs(error) < math.pi - BAND)


def straight_ahead(log: Log, error: np.ndarray) -> np.ndarray:
    """Say which driving steps have an error (rad) too small for a sign: the robot is on its way to the goal."""
    return driving(log) & (np.abs(error) <= BAND)


def new_goals(log: Log) -> np.ndarray:
    return np.diff(log.row, prepend=-1.0) > 0.0


def not_turning(log: Log, platform: Platform) -> np.ndarray:
    """Say at which steps the robot does not turn, and no command under way will make it."""
    still = np.abs(log.turn_rate) <= STILL
    for back in range(1, periods_of_dead_time(platform) + 2):
        still[back:] &= log.command_turn_rate[:-back] == 0.0
    return still


def fixes_at_rest(log: Log, platform: Platform) -> np.ndarray:
    """Say which steps drive off to a new goal, not yet turning, with an error now that has a sign."""
    return new_goals(log) & driving(log) & not_turning(log, platform) & clear(error_now(log))


def long_way_round(log: Log, platform: Platform, disc: float = 0.0) -> np.ndarray:
    """Return the steps that turn the long way round, or not at all: see the head of this file.

    Not to turn is right where the heading meets a disc of radius `disc` (m) about the goal.
    """
    distance, error = goal_where_it_acts(log, platform)
    ahead = (np.abs(error) < math.pi / 2.0) & (distance * np.abs(np.sin(error)) <= disc)
    judged = driving(log) & ~(ahead & (log.wanted_turn_rate == 0.0))
    wrong = judged & clear(error) & (np.sign(log.wanted_turn_rate) != np.sign(error))
    at_rest = judged & fixes_at_rest(log, platform) & (np.sign(log.wanted_turn_rate) != np.sign(error_now(log)))
    return np.flatnonzero(wrong | at_rest)


def broken_limits(log: Log, platform: Platform) -> dict[str, int]:
    """Return how many commands break each limit of the platform, those that break none left out."""
    p, v, w = platform, log.command_speed, log.command_turn_rate
    faster, turned = np.diff(v, prepend=0.0), np.diff(w, prepend=0.0)
    wheels = np.maximum(np.abs(v - w * p.track_width / 2.0), np.abs(v + w * p.track_width / 2.0))
    sizes = {
        "speed_limit": (v, p.speed_limit),
        "reverse_speed_limit": (-v, p.reverse_speed_limit),
        "turn_rate_limit": (np.abs(w), p.turn_rate_limit),
        "wheel_speed_limit": (wheels, p.wheel_speed_limit),
        "wheel_speed_limit, as told to the wheels": (np.maximum(np.abs(log.left), np.abs(log.right)), p.wheel_speed_limit),
        "acceleration": (faster, p.acceleration * p.period),
        "braking": (-faster, p.braking * p.period),
        "turn_acceleration": (np.abs(turned), p.turn_acceleration * p.period),
    }
    broken = {name: int((~(size <= most * (1.0 + ROUNDING) + 1e-12)).sum()) for name, (size, most) in sizes.items()}
    return {name: count for name, count in broken.items() if count}


def captured(log: Log, radius: float) -> np.ndarray:
    """Return the goals, in the order given, that a logged pose came within `radius` (m) of before the next one; m, shape (n, 2)."""
    found = []
    starts = np.flatnonzero(new_goals(log)).tolist()
    for start, end in zip(starts, [*starts[1:], len(log.time)], strict=True):
        x = np.concatenate([log.x[start : end + 1], log.acting_x[start:end]]) - log.goal_x[start]
        y = np.concatenate([log.y[start : end + 1], log.acting_y[start:end]]) - log.goal_y[start]
        if np.hypot(x, y).min() <= radius:
            found.append((log.goal_x[start], log.goal_y[start]))
    return np.array(found)


class Shares(NamedTuple):
    """Shares of the steps, by name: one phase each, any number of causes."""

    phases: dict[str, float]
    causes: dict[str, float]
    no_cause: float


def shares(log: Log) -> Shares:
    causes = log.causes.astype(int)
    return Shares(
        {one.name: float(np.mean(log.phase == one)) for one in Phase},
        {str(one.name): float(np.mean((causes & one) != 0)) for one in Causes},
        float(np.mean(causes == 0)),
    )


@functools.cache
def follower(period: float = CARRIAGE.period) -> Controller:
    return Controller(replace(CARRIAGE, period=period), capture_radius=FOLLOW_RADIUS, constant_speed=True)


@functools.cache
def visitor() -> Controller:
    return Controller(CARRIAGE, capture_radius=WAYPOINT_RADIUS, constant_speed=True)


class Driven(NamedTuple):
    """A drive that was made: the controller, its log, and whether the goal is where the rider is."""

    controller: Controller
    log: Log
    rider: bool

    @property
    def platform(self) -> Platform:
        return self.controller.platform

    @property
    def disc(self) -> float:
        """Radius of the disc that the schedule drives into without a turn; 0 at constant speed, m."""
        return 0.0 if self.controller.window else self.controller.settings.aim_radius


MADE: dict[str, Callable[[], Driven]] = {
    "every fix": lambda: Driven(follower(), follow(follower()), True),
    "every tenth fix": lambda: Driven(follower(), follow(follower(), every=10), False),
    "a fix a minute": lambda: Driven(follower(), follow(follower(), every=60, more=60.0), False),
    "stamps as times": lambda: Driven(follower(1.0), follow_rows(follower(1.0), read_ride().time), True),
    "waypoints": lambda: Driven(visitor(), drive_waypoints(visitor(), waypoints()), False),
}


EVEN_CLOCK = [name for name in MADE if name != "stamps as times"]


@functools.cache
def driven(name: str) -> Driven:
    return MADE[name]()


def figures(one: Driven) -> dict[str, str]:
    """Return what is told of a drive, by name."""
    log, told, error = one.log, shares(one.log), error_where_it_acts(one.log, one.platform)
    drives, new = driving(log), new_goals(log)
    behind = np.hypot(log.goal_x - log.x, log.goal_y - log.y)
    found = {
        "capture radius, m": f"{one.controller.capture_radius:.1f}",
        "speed of the controller, m/s": f"{one.controller.speed:.2f}",
        "gain, 1/s": f"{one.controller.gain:.2f}",
        "goals": f"{new.sum()}",
        "steps": f"{len(log.time)}",
        "duration, s": f"{len(log.time) * one.platform.period:.1f}",
        "mean speed, m/s": f"{log.speed.mean():.2f}",
        "goals driven at when new": f"{(new & drives).sum()}",
        "... turning not yet": f"{fixes_at_rest(log, one.platform).sum()}",
        "... error too small to judge": f"{(new & straight_ahead(log, error)).sum()}",
        "... largest error, deg": f"{np.degrees(np.nanmax(np.abs(error[new & drives]))):.1f}",
        "steps the long way round": f"{len(long_way_round(log, one.platform, one.disc))}",
        "commands beyond a limit": f"{sum(broken_limits(log, one.platform).values())}",
    }
    for name, value in zip(("mean", "median", "95 %", "most"), [behind.mean(), *np.percentile(behind, [50, 95, 100])], strict=True):
        found[f"behind the rider, {name}, m"] = f"{value:.1f}" if one.rider else "-"
    found |= {f"phase {name}, %": f"{100.0 * share:.2f}" for name, share in told.phases.items()}
    found |= {f"slowed by {one.name}, %": f"{100.0 * np.mean(log.slowed_by == one):.2f}" for one in Slowing}
    found |= {f"cause {name}, %": f"{100.0 * share:.2f}" for name, share in told.causes.items()}
    return found | {"no cause, %": f"{100.0 * told.no_cause:.2f}"}


def table(drives: dict[str, Driven] | None = None) -> str:
    """Return the figures of drives (all here), a column each; causes that never came stand together in the last line."""
    columns = {name: figures(one) for name, one in (drives or {name: driven(name) for name in MADE}).items()}
    names = list(next(iter(columns.values())))
    never = [name for name in names if name.startswith("cause") and all(column[name] == "0.00" for column in columns.values())]
    lines = [f"{'':<32}" + "".join(f"{name:>17}" for name in columns)]
    lines += [f"{name:<32}" + "".join(f"{column[name]:>17}" for column in columns.values()) for name in names if name not in never]
    return "\n".join([*lines, "never: " + ", ".join(name[6:-3] for name in never)])


def headings() -> np.ndarray:
    """Return the directions (rad) from each fix to the next, where they differ."""
    dx, dy = np.diff(read_ride().x), np.diff(read_ride().y)
    moved = (dx != 0.0) | (dy != 0.0)
    return np.arctan2(dy[moved], dx[moved])


def test_every_row_is_given_as_a_goal_at_a_step_of_its_own():
    """63 seconds of the file come twice and 64 never (tests/data/README.md): 63 gaps of one step, and 64 of two seconds."""
    log = driven("every fix").log
    given = np.flatnonzero(new_goals(log))
    assert np.array_equal(log.row[given], np.arange(4391))
    gaps = np.diff(given)
    assert (gaps == 1).sum() == 63
    assert (gaps >= 19).sum() == 64
    assert np.array_equal(log.goal_x[given], read_ride().x)
    assert np.array_equal(log.goal_y[given], read_ride().y)


@pytest.mark.parametrize("name", MADE)
def test_no_step_turns_the_long_way_round(name):
    log, platform = driven(name).log, driven(name).platform
    error = error_where_it_acts(log, platform)
    assert (clear(error) & driving(log) & new_goals(log)).sum() >= 0.95 * new_goals(log).sum()  # else: stopping, at rest, held
    assert fixes_at_rest(log, platform).any()
    assert long_way_round(log, platform).tolist() == []


def test_at_a_fix_a_minute_the_robot_has_come_to_rest_before_nearly_each():
    """So that the plain form of the definition, with no model, is the one that judges; to both sides, and behind."""
    one = driven("a fix a minute")
    error = error_now(one.log)[fixes_at_rest(one.log, one.platform)]
    assert len(error) >= 70
    assert error.min() < -math.pi / 2.0
    assert error.max() > math.pi / 2.0


@pytest.mark.parametrize("name", EVEN_CLOCK)
def test_the_turn_rate_wanted_is_the_gain_times_the_true_error_where_it_acts(name):
    """P law with a ceiling, on the simulated robot's own pose: dead time, its fraction and lag are all taken out."""
    controller, log, _ = driven(name)
    error = error_where_it_acts(log, controller.platform)
    expected = np.clip(controller.gain * error, -controller.window.ceiling, controller.window.ceiling)
    drives = driving(log) & ~np.isnan(error)
    assert np.abs(log.wanted_turn_rate - expected)[drives].max() <= controller.gain * BAND


@pytest.mark.parametrize("name", MADE)
def test_all_commands_are_within_the_limits(name):
    assert broken_limits(driven(name).log, driven(name).platform) == {}


def test_standing_at_any_fix_the_robot_turns_home_the_short_way():
    """At each fix, at rest, facing the next: the first fix as goal is in every direction. Heading law P, written out."""
    ride, controller = read_ride(), follower()
    start = controller.start(0.0)
    dx, dy = np.diff(ride.x), np.diff(ride.y)
    poses = np.column_stack([ride.x[:-1], ride.y[:-1], np.arctan2(dy, dx)])[(dx != 0.0) | (dy != 0.0)]
    poses = poses[np.hypot(poses[:, 0], poses[:, 1]) > FOLLOW_RADIUS]
    error = remainder(np.arctan2(-poses[:, 1], -poses[:, 0]) - poses[:, 2])
    reports = [controller.step(start, Measurement(0.0, tuple(pose), (0.0, 0.0))).report for pose in poses.tolist()]
    got = np.array([report.wanted.turn_rate for report in reports])
    assert clear(error).all()
    assert (np.abs(error) > 3.0).sum() > 50
    assert np.array_equal(np.sign(got), np.sign(error))
    assert got == pytest.approx(np.clip(controller.gain * error, -1.0, 1.0), abs=1e-12)


def test_the_rider_is_never_left_behind():
    """At rest at the edge of the disc when the rider leaves at top speed V: radius, and V^2/(2 a) until it is as fast, and V times
    fix period, period, dead time and lag (derived)."""
    log, p, top = driven("every fix").log, CARRIAGE, read_ride().speed.max()
    most = FOLLOW_RADIUS + top**2 / (2.0 * p.acceleration) + top * (1.0 + p.period + p.dead_time + p.motor_lag)
    got = np.hypot(log.goal_x - log.x, log.goal_y - log.y)
    assert got.max() <= most
    assert got == pytest.approx(log.distance, abs=1e-6)
    assert log.phase[-1] == Phase.ARRIVED
    assert got[-1] <= FOLLOW_RADIUS


@pytest.mark.parametrize("name", EVEN_CLOCK)
def test_no_fault_of_the_data_is_told_where_the_clock_is_good(name):
    log = driven(name).log
    assert not ((log.causes.astype(int) & (UNASKED | Causes.BAD_CLOCK)) != 0).any()
    assert not (log.phase == Phase.HELD).any()


def test_a_doubled_stamp_is_a_bad_clock_and_nothing_else_is_bad():
    log = driven("stamps as times").log
    causes = log.causes.astype(int)
    doubled = np.diff(read_ride().time, prepend=-1.0) == 0.0
    assert doubled.sum() == 63  # tests/data/README.md
    assert np.array_equal((causes & Causes.BAD_CLOCK) != 0, doubled)
    assert np.array_equal(log.phase == Phase.HELD, doubled)
    assert not ((causes & UNASKED) != 0).any()


def test_a_bad_clock_leaves_nothing_behind():
    """Two minutes after the last uneven stamp the robot is where even stamps would have brought it, to rounding: the place behind
    the rider draws it in, ten times nearer every six seconds (measured)."""
    log = driven("stamps as times").log
    even = follow_rows(follower(1.0), np.arange(4391.0))
    far = np.hypot(log.x - even.x, log.y - even.y)
    uneven = np.flatnonzero(np.diff(read_ride().time, prepend=-1.0) != 1.0)
    assert far[: uneven[0] + 1].max() == 0.0
    assert far[uneven[0] : uneven[-1]].max() > 1.0
    assert far[uneven[-1] + 120 :].max() <= 1e-9


def test_the_step_after_a_bad_clock_drives_on():
    log = driven("stamps as times").log
    after = np.flatnonzero(log.causes.astype(int) & Causes.BAD_CLOCK) + 1
    assert (log.phase[after] == Phase.DRIVING).all()
    assert (log.command_speed[after] > 0.0).all()
    assert not (log.causes[after].astype(int) & Causes.BAD_CLOCK).any()


def test_the_waypoints_are_fixes_25_m_of_path_apart():
    ride = read_ride()
    length = path_lengths(ride)
    assert length[-1] == pytest.approx(37171.3, abs=0.05)  # tests/data/README.md
    beyond = length[thinned(ride)] - SPACING * np.arange(1, 1487)
    assert beyond.min() >= 0.0
    assert beyond.max() <= 18.0 + 0.0005  # the largest step of the ride, tests/data/README.md


def test_every_waypoint_is_captured_in_order_and_the_last_one_arrived_at():
    log = driven("waypoints").log
    assert len(waypoints()) == 1486
    assert np.array_equal(captured(log, WAYPOINT_RADIUS), waypoints())
    assert log.phase[-1] == Phase.ARRIVED
    assert log.distance[-1] <= WAYPOINT_RADIUS


@pytest.mark.parametrize("name", MADE)
def test_the_shares_told_count_every_step_once(name):
    log = driven(name).log
    got = shares(log)
    assert sum(got.phases.values()) == pytest.approx(1.0, abs=1e-12)
    assert got.phases["ARRIVED"] * len(log.time) == pytest.approx(np.count_nonzero(log.phase == 1), abs=1e-6)
    bits = sum(bin(int(one)).count("1") for one in log.causes)
    assert sum(got.causes.values()) * len(log.time) == pytest.approx(bits, abs=1e-6)
    assert got.no_cause * len(log.time) == pytest.approx(np.count_nonzero(log.causes == 0), abs=1e-6)


def test_the_table_tells_of_every_drive():
    text = table()
    print(text)
    assert all(name in text for name in [*MADE, *(one.name for one in Phase), *(str(one.name) for one in Causes)])


def test_wrap_of_the_headings_is_the_ieee_remainder():
    """Whole turns added, up to 1000: math.remainder takes out the float 2 pi, wrap the true one; they differ by 2 sin(float pi)."""
    turns = np.arange(len(headings())) % 2001 - 1000.0
    wound = headings() + 2.0 * math.pi * turns
    expected = remainder(wound)
    got = angles.wrap(wound)
    assert np.abs(remainder(got - expected)).max() <= 1000.0 * 2.0 * math.sin(math.pi) + 4.0 * np.spacing(math.pi)
    assert np.abs(remainder(got - headings())).max() <= 1000.0 * 2.0 * math.sin(math.pi) + np.spacing(6283.0)  # of turns and sum
    assert (np.abs(got) <= math.pi).all()
    assert np.array_equal(angles.wrap(headings()), headings())


def test_unwrap_of_the_headings_is_that_of_numpy():
    assert (np.abs(np.diff(headings())) > math.pi).sum() == 72  # tests/data/README.md
    got, expected = angles.unwrap(headings()), np.unwrap(headings())
    assert got == pytest.approx(expected, abs=1e-12)
    assert np.abs(np.diff(got)).max() < math.pi / 2.0
    assert np.abs(remainder(angles.wrap(got) - headings())).max() <= 1e-13  # of due west, +pi, there may be -pi: a whole turn


def test_differences_of_the_headings_are_ieee_remainders_and_add_up_to_the_turning():
    h = headings()
    got = angles.difference(h[1:], h[:-1])
    assert np.abs(got - remainder(h[1:] - h[:-1])).max() <= 4.0 * np.spacing(math.pi)
    assert np.abs(got).max() == pytest.approx(1.207, abs=0.0005)  # tests/data/README.md
    total = math.fsum(got)
    unwrapped = angles.unwrap(h)
    assert total == pytest.approx(unwrapped[-1] - unwrapped[0], abs=1e-11)
    assert total == pytest.approx(np.unwrap(h)[-1] - h[0], abs=1e-11)
    assert total / (2.0 * math.pi) == pytest.approx(-2.175, abs=0.0005)  # tests/data/README.md


def test_a_law_that_turns_the_long_way_is_seen():
    wrong = follower().unchecked(gain=-follower().gain)
    log = follow(wrong, rows=300)
    assert len(long_way_round(log, CARRIAGE)) >= 0.9 * driving(log).sum()


@pytest.mark.parametrize(
    ("name", "changes"),
    [
        ("speed_limit", {"top_speed": 30.0, "cruise": 30.0, "wheel_speed": 40.0}),
        ("turn_rate_limit", {"top_turn_rate": 1.1, "ceiling": 1.1}),
        ("wheel_speed_limit", {"wheel_speed": 40.0}),
        ("acceleration", {"acceleration": 2.02}),
        ("braking", {"braking": 4.04}),
        ("turn_acceleration", {"turn_acceleration": 4.04}),
    ],
)
def test_a_limit_that_is_not_kept_is_seen(name, changes):
    log = follow(follower().unchecked(**changes), every=10, rows=2400)
    assert name in broken_limits(log, CARRIAGE)


def test_a_waypoint_left_out_is_seen():
    points = waypoints()[:40]
    log = drive_waypoints(visitor(), np.delete(points, 17, axis=0))
    assert len(captured(log, WAYPOINT_RADIUS)) == 39
    assert not np.array_equal(captured(log, WAYPOINT_RADIUS), points)


def test_a_waypoint_not_reached_is_seen():
    """A disc of 8 m lets the robot turn to the next waypoint too early for one of 5 m."""
    wide = Controller(CARRIAGE, capture_radius=8.0, constant_speed=True)
    log = drive_waypoints(wide, waypoints()[:40])
    assert np.array_equal(captured(log, 8.0), waypoints()[:40])
    assert len(captured(log, WAYPOINT_RADIUS)) < 40
