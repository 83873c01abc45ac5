"""The recorded ride of tests/data driven by the speed schedule: way points passed without a stop, and the rider followed.

The carriage, the simulated robot, the log, and what *the long way round* means are those of `test_ride`.

A way point counts as touched where the true path, arcs between the samples included, comes within the capture radius, at or after
the touch of the one before. Its phase PASSED says so beforehand. Precisely, for a way point farther than the capture radius from
the one before: PASSED never comes after the touch; and dead time and one period after PASSED, when the command of that step has
acted for its period, the path up to where the robot rolls out by its lag (lag times the speed of then) has touched. So at a steady
speed PASSED comes dead time, lag and one period before the touch at most. All derived from the law of the lag, tau v' = u - v.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from dataclasses import replace
from typing import NamedTuple

import numpy as np
import pytest

import test_ride as ride
from robots import draw
from schedule_studies import common_draw
from steerkit import Causes, Controller, Phase, Platform, compiled
from steerkit.compiled import kernel
from steerkit.following import following_distance
from steerkit.limits import held_stopping_distance
from steerkit.step import step_kernel

CARRIAGE = ride.CARRIAGE
FOLLOW_RADIUS = 1.0  # m, the carriage's own; the schedule needs no 20 m
BAND = replace(CARRIAGE, smallest_wheel_speed=0.3, wheel_speed_resolution=0.1)
FINE = 20  # pieces of half a period; the fraction of the dead time is half a period, too
FINE_STEP = 0.0025  # s, so; 4 cm at top speed


def follower(radius: float = FOLLOW_RADIUS) -> Controller:
    return Controller(CARRIAGE, capture_radius=radius)


def drive_through(
    controller: Controller,
    points: np.ndarray,
    stop: bool = False,
    noise: tuple[float, float] = (0.0, 0.0),
    seed: int = 0,
    patience: float = 60.0,
) -> ride.Log:
    """Drive through `points`, m, shape (n, 2), to rest at the last: the next one given where this one is PASSED (or ARRIVED at).

    `noise`: standard deviations of the pose, m, rad. Gives up after `patience` (s) at one of them.
    """
    track, period = ride.read_ride(), controller.platform.period
    drive = ride.Drive(controller, (0.0, 0.0, math.atan2(track.y[1], track.x[1])))
    goals = [tuple(point) for point in points.tolist()]
    rng, sizes = np.random.default_rng(seed), np.array([noise[0], noise[0], noise[1]])
    i = begun = step = 0
    while (step - begun) * period < patience:
        last = i + 1 == len(goals)
        off = tuple(rng.normal(0.0, 1.0, 3) * sizes)
        _, phase = drive.step(step * period, goals[i], i, ride.NO_GOAL if last or stop else goals[i + 1], off)
        step += 1
        if last and phase == Phase.ARRIVED:
            break
        if not last and phase == (Phase.ARRIVED if stop else Phase.PASSED):
            i, begun = i + 1, step
    return drive.log()


def spaced(spacing: float) -> np.ndarray:
    """Return the fixes `spacing` (m of path) apart, m, shape (n, 2)."""
    track = ride.read_ride()
    length = ride.path_lengths(track)
    return np.column_stack([track.x, track.y])[np.unique(np.searchsorted(length, np.arange(spacing, length[-1], spacing)))]


class Path(NamedTuple):
    """The true path, finely: s, m, m, m along it; how far its pieces are off the simulated robot at their ends, m."""

    time: np.ndarray
    x: np.ndarray
    y: np.ndarray
    length: np.ndarray
    off: float


def piece(
    start: tuple[np.ndarray, ...], command: tuple[np.ndarray, np.ndarray], span: float, lag: float
) -> tuple[np.ndarray, np.ndarray]:
    """Return x, y (m), shape (steps, FINE + 1), from pose and motion under a held command: the law of the lag, trapezia."""
    x, y, heading, v, w = (one[:, None] for one in start)
    told_v, told_w = (one[:, None] for one in command)
    t = np.linspace(0.0, span, FINE + 1)
    left = np.exp(-t / lag)
    speed = told_v + (v - told_v) * left
    angle = heading + told_w * t + (w - told_w) * lag * (1.0 - left)
    found = []
    for begin, rate in ((x, speed * np.cos(angle)), (y, speed * np.sin(angle))):
        moved = np.cumsum(0.5 * (rate[:, 1:] + rate[:, :-1]), axis=1) * span / FINE
        found.append(np.concatenate([begin, begin + moved], axis=1))
    return found[0], found[1]


def true_path(log: ride.Log, platform: Platform) -> Path:
    late, steps = ride.periods_of_dead_time(platform), len(log.time)
    first = platform.dead_time - late * platform.period
    sent = [np.concatenate([np.zeros(late + 1), one]) for one in (log.command_speed, log.command_turn_rate)]
    before, after = ((sent[0][i : i + steps], sent[1][i : i + steps]) for i in (0, 1))
    x0, y0 = piece((log.x, log.y, log.heading, log.speed, log.turn_rate), before, first, platform.motor_lag)
    x1, y1 = piece(tuple(log[7:12]), after, platform.period - first, platform.motor_lag)
    off = max(np.abs([x0[:, -1] - log.acting_x, y0[:, -1] - log.acting_y]).max(), np.abs(x1[:-1, -1] - log.x[1:]).max())
    inner = np.concatenate([np.linspace(0.0, first, FINE + 1)[:-1], np.linspace(first, platform.period, FINE + 1)[:-1]])
    x, y = (np.concatenate([a[:, :-1], b[:, :-1]], axis=1).ravel() for a, b in ((x0, x1), (y0, y1)))
    length = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))])
    return Path((log.time[:, None] + inner).ravel(), x, y, length, float(off))


class Touches(NamedTuple):
    """A number a way point, in order: PASSED (s; ARRIVED at the last), touched (s, NaN: never), nearest (m), path left (m).

    `left`: path from where the command of PASSED has acted for its period to the touch, less the roll-out of the lag.
    """

    passed: np.ndarray
    touched: np.ndarray
    nearest: np.ndarray
    left: np.ndarray


def touches(log: ride.Log, platform: Platform, points: np.ndarray, radius: float, watched: float = 5.0) -> Touches:
    """Return when discs of `radius` are touched, looking until `watched` (s) after PASSED."""
    path = true_path(log, platform)
    passed = log.time[np.flatnonzero(np.diff(log.row, append=log.row[-1] + 1.0) > 0.0)]
    touched, nearest, since = np.full(len(points), np.nan), np.full(len(points), np.inf), 0.0
    for i, (time, point) in enumerate(zip(passed.tolist(), points.tolist(), strict=False)):
        first, last = np.searchsorted(path.time, [since, time + watched])
        away = np.hypot(path.x[first:last] - point[0], path.y[first:last] - point[1])
        nearest[i] = away.min()
        if nearest[i] <= radius:
            k = int(np.argmax(away <= radius))
            since = path.time[first + k]
            touched[i] = since if k == 0 else since - FINE_STEP * (radius - away[k]) / (away[k - 1] - away[k])
    acted = passed + platform.dead_time + platform.period
    speed = np.interp(acted, log.time, log.speed)
    left = np.interp(touched[: len(passed)], path.time, path.length) - np.interp(acted, path.time, path.length)
    return Touches(passed, touched, nearest, left - platform.motor_lag * speed)


def loose_limits(log: ride.Log, platform: Platform) -> dict[str, int]:
    """Return the broken limits of a robot with a wheel grid: its ramps are kept to within what the grid moves a command."""
    p = platform
    slack = 2.0 * (p.slowest_wheel_speed + p.wheel_speed_resolution) / p.period  # m/s^2: both commands off their ramp values
    ramps = {
        "acceleration": p.acceleration + slack,
        "braking": p.braking + slack,
        "turn_acceleration": p.turn_acceleration + 2.0 * slack / p.track_width,
    }
    return ride.broken_limits(log, replace(p, **ramps))


MADE: dict[str, Callable[[], ride.Driven]] = {
    "every fix": lambda: ride.Driven(follower(), ride.follow(follower()), True),
    "every tenth fix": lambda: ride.Driven(follower(), ride.follow(follower(), every=10), False),
    "a fix a minute": lambda: ride.Driven(follower(), ride.follow(follower(), every=60, more=60.0), False),
    "stop at each": lambda: ride.Driven(follower(5.0), drive_through(follower(5.0), ride.waypoints(), stop=True), False),
    "passed": lambda: ride.Driven(follower(5.0), drive_through(follower(5.0), ride.waypoints()), False),
}


@functools.cache
def driven(name: str) -> ride.Driven:
    return MADE[name]()


def spread(errors: np.ndarray) -> str:
    """Return median, 95 % and worst of relative errors for print."""
    size = 100.0 * np.abs(errors)
    return f"median {100.0 * np.median(errors):+.1f} %, 95 % {np.percentile(size, 95):.1f} %, worst {size.max():.1f} %"


@functools.cache
def constant() -> ride.Log:
    """Return the drive through the way points at constant speed: a step before each disc the next one is steered at."""
    return drive_through(ride.visitor(), ride.waypoints())


def table() -> str:
    return ride.table({name: driven(name) for name in MADE})


def sentences() -> str:
    """Return what the table does not tell: the way points, and the distance behind the rider."""
    points, radius = ride.waypoints(), ride.WAYPOINT_RADIUS
    log, way = driven("passed").log, ride.path_lengths(ride.read_ride())[-1]
    got = touches(log, CARRIAGE, points, radius)
    before = (got.touched - got.passed)[:-1]
    lines = [
        f"way points passed: {np.count_nonzero(got.nearest <= radius)} of {len(points)} touched; "
        f"PASSED {before.min():.2f} to {before.max():.2f} s before; nearest at most {got.nearest.max():.2f} m"
    ]
    drives = {"passed": log, "stop at each": driven("stop at each").log, "constant speed": constant()}
    for name, one in drives.items():
        time = len(one.time) * CARRIAGE.period
        path = np.hypot(np.diff(one.x), np.diff(one.y)).sum()
        lines.append(f"{name}: {time:.1f} s, {way / time:.2f} m/s of track, path {path:.0f} m")
    for radius, log in ((FOLLOW_RADIUS, driven("every fix").log), (ride.FOLLOW_RADIUS, wide_follow())):
        found = stretches(radius, log)
        what = f"disc of {radius:g} m, behind the rider against the prediction"
        lines.append(f"{what} straight behind, {len(found.straight)} steady stretches, {found.seconds} s: {spread(found.straight)}")
        lines.append(f"{what} to the side: {spread(found.to_the_side)}")
        lines.append(f"{what} straight behind, each of {len(found.each_second)} steady seconds: {spread(found.each_second)}")
    return "\n".join(lines)


# Way points


@pytest.mark.parametrize(
    ("platform", "spacing", "radius"),
    [
        *[(CARRIAGE, spacing, radius) for spacing in (25.0, 10.0, 100.0) for radius in (5.0, 1.0)],
        *[(BAND, 25.0, radius) for radius in (5.0, 1.0)],
    ],
)
def test_every_way_point_is_touched_and_passed_is_told_just_before(platform, spacing, radius):
    points = spaced(spacing)
    log = drive_through(Controller(platform, capture_radius=radius), points)
    got = touches(log, platform, points, radius)
    assert len(got.passed) == len(points)
    assert true_path(log, platform).off < 1e-4
    assert not np.isnan(got.touched).any()
    assert log.phase[-1] == Phase.ARRIVED
    apart = np.hypot(*np.diff(points, axis=0, prepend=[[0.0, 0.0]]).T) > radius
    apart[-1] = False  # the last is driven into
    assert apart.sum() >= 0.99 * len(points) - 1.0
    assert (got.passed <= got.touched)[apart].all()
    assert got.left[apart].max() <= 0.0
    assert loose_limits(log, platform) == {}
    assert platform is BAND or ride.broken_limits(log, platform) == {}
    assert not (log.causes.astype(int) & (ride.UNASKED | Causes.BAD_CLOCK | Causes.NO_ANSWER)).any()


def test_the_25_m_way_points_are_1486():
    assert np.array_equal(spaced(25.0), ride.waypoints())
    assert len(ride.waypoints()) == 1486


def test_every_wheel_command_is_on_the_grid_of_the_drive():
    log = drive_through(Controller(BAND, capture_radius=5.0), ride.waypoints()[:300])
    wheels = np.concatenate([log.left, log.right]) / BAND.wheel_speed_resolution
    assert np.abs(wheels - np.rint(wheels)).max() < 1e-9
    assert np.abs(wheels[np.rint(wheels) != 0.0]).min() >= 3.0 - 1e-9


def test_passing_is_quicker_than_stopping_and_than_constant_speed_and_no_quicker_than_the_way_at_top_speed():
    passing, stopping = (len(driven(name).log.time) for name in ("passed", "stop at each"))
    legs = np.hypot(*np.diff(ride.waypoints(), axis=0).T) - 2.0 * ride.WAYPOINT_RADIUS
    assert legs[legs > 0.0].sum() / CARRIAGE.top_speed <= passing * CARRIAGE.period
    assert passing <= 0.3 * stopping
    assert passing <= 0.4 * len(constant().time)
    assert constant().phase[-1] == Phase.ARRIVED
    assert driven("stop at each").log.phase[-1] == Phase.ARRIVED


def test_way_points_are_passed_no_faster_than_the_next_goal_lets_it_stop():
    """Six legs of 25 m at a time, to rest: at top speed a stop takes 16^2 / (2 * 4) = 32 m. In the last disc it stays."""
    for i in range(0, 1479, 30):
        points = ride.waypoints()[i + 1 : i + 7] - ride.waypoints()[i]
        log = drive_through(follower(5.0), points)
        got, path = touches(log, CARRIAGE, points, 5.0), true_path(log, CARRIAGE)
        after = path.time >= got.touched[-1] + FINE_STEP
        assert log.phase[-1] == Phase.ARRIVED
        assert np.hypot(path.x - points[-1, 0], path.y - points[-1, 1])[after].max() <= 5.0, i


@pytest.mark.parametrize("told", [True, False])
@pytest.mark.parametrize("radius", [5.0, 1.0])
def test_with_noise_no_way_point_is_passed_untouched(radius, told):
    """Position noise of an eighth of the radius, heading noise of 1 deg; told to the controller, or not."""
    noise = (radius / 8.0, math.radians(1.0))
    platform = replace(CARRIAGE, position_noise=noise[0], heading_noise=noise[1]) if told else CARRIAGE
    points = ride.waypoints()
    log = drive_through(Controller(platform, capture_radius=radius), points, noise=noise)
    got = touches(log, platform, points, radius)
    assert len(got.passed) == len(points)
    assert np.isnan(got.touched).sum() == 0, got.nearest[np.isnan(got.touched)] - radius
    assert ride.broken_limits(log, platform) == {}
    assert log.phase[-1] == Phase.ARRIVED


def test_way_points_not_touched_are_seen():
    """Discs of 8 m passed are not all discs of 1 m."""
    points = ride.waypoints()[:200]
    log = drive_through(follower(8.0), points)
    assert not np.isnan(touches(log, CARRIAGE, points, 8.0).touched).any()
    assert np.isnan(touches(log, CARRIAGE, points, 1.0).touched).sum() > 20


def test_a_way_point_within_the_disc_of_the_one_before_is_touched_too():
    along = math.atan2(ride.read_ride().y[1], ride.read_ride().x[1])  # straight ahead of the start
    ahead, left = np.array([math.cos(along), math.sin(along)]), np.array([-math.sin(along), math.cos(along)])
    points = np.array([20.0 * ahead, 20.0 * ahead + 4.9 * left, -20.0 * ahead - 10.0 * left])
    got = touches(drive_through(follower(5.0), points), CARRIAGE, points, 5.0)
    assert got.nearest.max() <= 5.0


def test_passed_too_early_or_too_late_is_seen():
    points = ride.waypoints()[:200]
    early = touches(drive_through(follower(5.0).unchecked(stop_radius=8.0), points), CARRIAGE, points, 5.0)
    assert np.nanmax(early.left) > 0.0 or np.isnan(early.touched).any()
    unaware = follower(5.0).unchecked(dead_time=0.0, motor_lag=0.0, stop_radius=4.0)
    late = touches(drive_through(unaware, points), CARRIAGE, points, 5.0)
    assert (late.passed > late.touched).any()


# Steering


@pytest.mark.parametrize("name", MADE)
def test_no_step_turns_the_long_way_round(name):
    """At a new goal the robot is mostly on its way already; then nothing is judged where it wants no turn, and rightly."""
    one = driven(name)
    error = ride.error_where_it_acts(one.log, one.platform)
    turns = ride.driving(one.log) & (one.log.wanted_turn_rate != 0.0) & ride.clear(error)
    assert turns.sum() >= 1000
    assert name == "passed" or ride.fixes_at_rest(one.log, one.platform).sum() >= 70
    assert ride.long_way_round(one.log, one.platform, one.disc).tolist() == []


@pytest.mark.parametrize("name", MADE)
def test_all_commands_are_within_the_limits(name):
    assert ride.broken_limits(driven(name).log, CARRIAGE) == {}


@pytest.mark.parametrize("name", MADE)
def test_no_fault_of_the_data_is_told(name):
    log = driven(name).log
    assert not (log.causes.astype(int) & (ride.UNASKED | Causes.BAD_CLOCK | Causes.NO_ANSWER)).any()
    assert not (log.phase == Phase.HELD).any()


def test_the_long_way_round_and_no_turn_where_one_is_due_are_seen():
    one = driven("every tenth fix")
    turns = (ride.driving(one.log) & (one.log.wanted_turn_rate != 0.0)).sum()
    mirrored = one.log._replace(wanted_turn_rate=-one.log.wanted_turn_rate)
    assert len(ride.long_way_round(mirrored, CARRIAGE, one.disc)) >= 0.99 * turns
    idle = one.log._replace(wanted_turn_rate=0.0 * one.log.wanted_turn_rate, wanted_speed=one.log.wanted_speed + 1.0)
    assert len(ride.long_way_round(idle, CARRIAGE, one.disc)) >= 0.5 * turns


@pytest.mark.parametrize(
    ("name", "changes"),
    [
        ("speed_limit", {"top_speed": 30.0, "cruise": 30.0, "wheel_speed": 40.0}),
        ("turn_rate_limit", {"top_turn_rate": 1.1}),
        ("wheel_speed_limit", {"wheel_speed": 40.0}),
        ("acceleration", {"acceleration": 2.02}),
        ("braking", {"braking": 4.2}),
        ("turn_acceleration", {"turn_acceleration": 4.04}),
    ],
)
def test_a_limit_that_is_not_kept_is_seen(name, changes):
    log = ride.follow(follower().unchecked(**changes), every=10, rows=2400)
    assert name in ride.broken_limits(log, CARRIAGE)


def test_the_table_tells_of_every_drive():
    text = table() + "\n" + sentences()
    print(text)
    assert all(name in text for name in MADE)
    assert "1486 of 1486 touched" in text


# Following


@kernel
def behind_kernel(settings, memory, distance, speed, every, settled, steps):
    """Return the mean distance (m) behind a goal that moves along x at `speed`, after `settled` steps; NaN where the robot turned.

    Wheels with dead time and lag, exact: path = command * time + lag * (speed before - speed after). The mean is weighted by a
    raised cosine, so that it does not matter where in a cycle it begins and ends (von Hann's window, from memory).
    """
    period, dead_time, lag, nan = settings[0], settings[1], settings[2], math.nan
    d = math.floor(dead_time / period + 1e-12)
    m = max(0.0, dead_time / period - d)
    sent = np.zeros(steps + d + 2)
    x, v, area, spans = -distance, 0.0, 0.0, 0.0
    for k in range(steps):
        time = k * period
        goal = speed * (time if every == 0.0 else every * math.floor(time / every + 1e-9))
        measured = (time, x, 0.0, 0.0, nan, goal, 0.0, 0.0, nan, nan, nan, 0.0, nan, nan, nan, nan, 0.0)
        r = step_kernel(settings, memory, measured, memory)
        if r[3] != 0.0:
            return nan
        sent[k + d + 1] = r[2]
        for part in range(2):
            span = m * period if part == 0 else (1.0 - m) * period
            left = math.exp(-span / lag) if lag > 0.0 else 0.0
            before, told = speed * time - x, sent[k + part]
            v1 = told + (v - told) * left
            x, v, time = x + told * span + lag * (v - v1), v1, time + span
            if k >= settled:
                weight = (1.0 - math.cos(2.0 * math.pi * (k - settled) / (steps - settled))) * span
                area, spans = area + 0.5 * (before + speed * time - x) * weight, spans + weight
    return area / spans


def behind(platform: Platform, radius: float, speed: float, every: float, cycles: float = 150.0) -> float:
    """Drive behind a goal; return the mean distance (m) over `cycles` tellings, or changes of speed where those take longer."""
    controller = Controller(platform, capture_radius=radius)
    change = speed / platform.acceleration + speed / platform.braking
    start = 1.2 * following_distance(platform, radius, speed, every)
    settled = 20.0 * (every + change) + 0.4 * start / (platform.top_speed - speed)
    mean = cycles * max(every, change, 0.05 * radius / speed)
    memory = controller.start(0.0).row.copy()
    counts = (int(settled / platform.period), int((settled + mean) / platform.period))
    return behind_kernel(np.array(controller.settings), memory, start, speed, every, *counts)


@pytest.mark.skipif(not compiled.ON, reason="closed loops over many robots want the compiler")
def test_the_distance_behind_a_steady_goal_is_the_one_predicted():
    """Two hundred robots of `robots`; a goal of 2 to 95 % of their top speed, told at every step or every 0.1 to 2 s."""
    errors = []
    for i in range(200):
        rng = np.random.default_rng([303, i])
        robot = draw(rng)
        speed, every = rng.uniform(0.02, 0.95) * robot.platform.top_speed, (0.0 if i % 2 else rng.uniform(0.1, 2.0))
        expected = following_distance(robot.platform, robot.capture_radius, speed, every)
        errors.append(behind(robot.platform, robot.capture_radius, speed, every) / expected - 1.0)
    size = np.abs(errors)
    print(f"median {np.median(size):.1e}, 95 % {np.percentile(size, 95):.1e}, worst {size.max():.1e}")
    assert size.max() <= 0.02
    assert np.median(size) <= 1e-3


@pytest.mark.skipif(not compiled.ON, reason="closed loops over many robots want the compiler")
def test_the_distance_behind_is_predicted_with_a_wheel_grid_and_with_noise_told_too():
    """Robots of `schedule_studies`, half with a dead band and a resolution, half with position noise told, which is not there.

    A robot told of noise starts and stops by wider margins; when its wheels count as at rest is not predicted to the period.
    """
    errors = []
    for i in range(60):
        rng = np.random.default_rng([305, i])
        run = common_draw(rng, 10.0, lag=True, band=bool(i % 2))
        platform = run.platform if i % 2 else replace(run.platform, position_noise=rng.uniform(0.0, run.capture_radius / 8.0))
        speed, every = rng.uniform(0.05, 0.95) * platform.top_speed, (0.0 if i % 4 < 2 else rng.uniform(0.1, 2.0))
        expected = following_distance(platform, run.capture_radius, speed, every)
        errors.append(behind(platform, run.capture_radius, speed, every) / expected - 1.0)
    size = np.abs(errors)
    print(f"median {np.median(size):.1e}, 95 % {np.percentile(size, 95):.1e}, worst {size.max():.1e}")
    assert np.percentile(size, 95) <= 0.02
    assert size.max() <= 0.05


def test_told_at_every_step_it_is_the_sum_of_radius_stop_and_delay():
    """Where braking ends, the held stop (sum of the held speeds, `test_limits`), and what the goal goes in dead time and lag."""
    for i in range(300):
        rng = np.random.default_rng([304, i])
        robot = draw(rng)
        p, speed = robot.platform, rng.uniform(0.3, 0.99) * robot.platform.top_speed
        stop = held_stopping_distance(speed, 0.95 * p.braking, p.period)
        expected = 0.95 * robot.capture_radius + stop + speed * (p.dead_time + p.motor_lag)
        in_hand = stop - held_stopping_distance(max(0.0, speed - p.braking * p.period), p.braking, p.period)
        if in_hand > 0.03 * robot.capture_radius * 1.001:  # else it stops within the disc now and then
            assert following_distance(p, robot.capture_radius, speed) == pytest.approx(expected, rel=1e-9)


def test_a_goal_told_now_and_then_is_followed_from_farther_than_its_age_explains():
    """The speed that can be braked away is concave in the distance, and the robot never faster: so in the mean the distance to the
    goal told is no less than at every step (Jensen 1906). The goal told is half the time between tellings old, less half a period.
    """
    for every in (0.2, 0.5, 1.0, 3.0):
        for speed in (3.0, 8.0, 15.0):
            steady = following_distance(CARRIAGE, FOLLOW_RADIUS, speed)
            got = following_distance(CARRIAGE, FOLLOW_RADIUS, speed, every)
            assert steady + speed * (every - CARRIAGE.period) / 2.0 * (1.0 - 1e-9) <= got <= steady + 1.5 * speed * every


def test_a_goal_that_hardly_moves_is_left_at_the_edge_of_the_disc():
    for every in (0.0, 1.0):
        got = following_distance(CARRIAGE, FOLLOW_RADIUS, 1e-5, every)
        assert 0.95 * FOLLOW_RADIUS <= got <= FOLLOW_RADIUS + 1e-4


@pytest.mark.parametrize("speed", [16.0, 20.0])
def test_a_goal_that_outruns_the_robot_is_refused(speed):
    with pytest.raises(ValueError, match=r"^speed=\d+ m/s must be < 16 m/s, .* or the goal outruns it; slow the goal down"):
        following_distance(CARRIAGE, FOLLOW_RADIUS, speed)
    assert following_distance(CARRIAGE, FOLLOW_RADIUS, 15.99) < math.inf


@functools.cache
def wide_follow() -> ride.Log:
    return ride.follow(follower(ride.FOLLOW_RADIUS))


# The rider followed. A second is *steady* where, over the last STEADY seconds and the next one, the stamps are one second apart,
# the recorded speed stays within SAME of its mean, and the directions of the two halves differ by less than STRAIGHT. A stretch is
# at least STRETCH such seconds on end: a fix is off by up to 1 m, for the recording has a grid (tests/data/README.md).
STEADY, SAME, STRAIGHT, STRETCH = 10, 0.05, math.radians(5.0), 5


def steady_speeds() -> np.ndarray:
    """Return the rider's speed (m/s), from the fixes, at steady rows; NaN at all others; shape (rows,)."""
    track, found = ride.read_ride(), np.full(4391, np.nan)
    for i in range(STEADY, 4390):
        speeds = track.speed[i - STEADY : i + 2]
        x, y = (one[[i - STEADY, i - STEADY // 2, i]] for one in (track.x, track.y))
        turn = math.remainder(float(np.diff(np.arctan2(np.diff(y), np.diff(x)))[0]), 2.0 * math.pi)
        even = (np.diff(track.time[i - STEADY : i + 2]) == 1.0).all()
        if even and np.abs(speeds / speeds.mean() - 1.0).max() <= SAME and abs(turn) <= STRAIGHT:
            found[i] = math.hypot(x[2] - x[0], y[2] - y[0]) / STEADY
    return found


def behind_rider(log: ride.Log) -> tuple[np.ndarray, np.ndarray]:
    """Return how far the robot is behind the rider, the mean of the second after each fix, and how far its goal lies to the side.

    m, shape (rows,). Between fixes the rider moves evenly.
    """
    track, far, beside = ride.read_ride(), np.full(4391, np.nan), np.full(4391, np.nan)
    share, starts = np.linspace(0.0, 1.0, 11), np.flatnonzero(ride.new_goals(log))
    for i in np.flatnonzero(np.diff(starts) == 10).tolist():
        x, y, heading = (one[starts[i] : starts[i] + 11] for one in (log.x, log.y, log.heading))
        dx, dy = (one[i] + share * (one[i + 1] - one[i]) - place for one, place in ((track.x, x), (track.y, y)))
        far[i] = np.trapezoid(np.hypot(dx, dy), share)
        beside[i] = np.abs(np.cos(heading) * (track.y[i] - y) - np.sin(heading) * (track.x[i] - x)).mean()
    return far, beside


class Stretches(NamedTuple):
    """Steady stretches: how many seconds, the distance over the predicted one less 1, for each; the same for each second."""

    seconds: int
    straight: np.ndarray
    to_the_side: np.ndarray
    each_second: np.ndarray


def stretches(radius: float, log: ride.Log) -> Stretches:
    """Compare with `following_distance`: straight behind, and to the side by as much as the robot was.

    To the side by s the disc where braking ends, of radius r, is sqrt(r^2 - s^2) deep.
    """
    speeds, (far, beside) = steady_speeds(), behind_rider(log)
    steady = np.flatnonzero(~np.isnan(speeds + far))
    ends = 0.95 * radius
    straight = np.array([following_distance(CARRIAGE, radius, speed, 1.0) for speed in speeds[steady].tolist()])
    across = np.minimum(beside[steady], ends)
    side = np.hypot(straight - ends + np.sqrt(ends**2 - across**2), across)
    parts = np.split(np.arange(len(steady)), np.flatnonzero(np.diff(steady) > 1) + 1)
    parts = [part for part in parts if len(part) >= STRETCH]
    errors = [[far[steady[part]].mean() / told[part].mean() - 1.0 for part in parts] for told in (straight, side)]
    return Stretches(sum(map(len, parts)), *map(np.array, errors), far[steady] / straight - 1.0)


def test_in_steady_stretches_the_robot_is_as_far_behind_the_rider_as_predicted():
    got = stretches(FOLLOW_RADIUS, driven("every fix").log)
    size, each = np.abs(got.straight), np.abs(got.each_second)
    assert len(size) >= 30
    assert got.seconds >= 450
    assert size.max() <= 0.10
    assert np.percentile(each, 95) <= 0.10


def test_with_a_disc_of_20_m_it_follows_to_the_side_and_so_nearer():
    """The radius that constant speed needs: here the robot is up to the disc's edge beside the rider's line after each bend."""
    got = stretches(ride.FOLLOW_RADIUS, wide_follow())
    assert np.median(got.straight) < -0.05
    assert np.abs(got.to_the_side).max() <= 0.10
