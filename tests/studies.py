"""Studies over random robots: few draws in the tests, many with `python tests/studies.py --robots 2000`."""

from __future__ import annotations

import argparse
import math
import time
from collections import Counter
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from closed_loop import ARRIVED, CAPTURED, drive
from robots import Robot, draw, draw_start
from steerkit import Causes, Controller, Measurement, Platform, sizing

FREE = 1e9  # a limit that never binds
FAR_GOAL = 1e9  # m; its bearing does not change


def linear_robot(period: float, dead_time: float = 0.0, motor_lag: float = 0.0) -> Platform:
    """Return a platform for studies of the linear heading loop; its limits are lifted by `heading_errors`."""
    return Platform(
        radius=0.3,
        track_width=0.4,
        wheel_speed_limit=50.0,
        speed_limit=1.0,
        turn_rate_limit=30.0,
        acceleration=100.0,
        braking=100.0,
        turn_acceleration=1000.0,
        period=period,
        dead_time=dead_time,
        motor_lag=motor_lag,
    )


def heading_errors(platform, gain, duration, predict, ceiling=FREE, e0=1.0, motor_lag=None):
    """Return the heading error at each step of the library's loop toward a goal far away, its limits lifted."""
    controller = Controller(platform, capture_radius=0.3, constant_speed=True).unchecked(
        gain=gain,
        ceiling=ceiling,
        top_turn_rate=FREE,
        turn_acceleration=FREE,
        wheel_speed=FREE,
        cruise=1e-9,
        most_raised=0.0,
        predict=float(predict),
    )
    steps = math.ceil(duration / platform.period) + 1
    return drive(controller, (-FAR_GOAL, 0.0, -e0), steps=steps)[:, 7]


class Worst(NamedTuple):
    stable: float
    smooth: float


def bisect(fails, low: float, high: float, halvings: int = 9) -> float:
    for _ in range(halvings):
        middle = math.sqrt(low * high)
        low, high = (low, middle) if fails(middle) else (middle, high)
    return math.sqrt(low * high)


def gain_limits(pairs: int, predict: bool, seed: int, lag: bool = True) -> Worst:
    """Return the largest relative errors of the two gain limits against those bisected in the library's own loop."""
    rng = np.random.default_rng(seed)
    worst = Worst(0.0, 0.0)
    for _ in range(pairs):
        robot = draw(rng).platform
        motor_lag = robot.motor_lag if lag and rng.random() < 0.5 else 0.0
        platform = linear_robot(robot.period, robot.dead_time, motor_lag)
        delay = (0.0, 0.0) if predict else (robot.dead_time, motor_lag)
        stable, smooth = sizing.stable_gain(robot.period, *delay), sizing.no_overshoot_gain(robot.period, *delay)
        wave = max(robot.period, delay[0] + delay[1])

        def grows(gain: float, platform: Platform = platform, wave: float = wave) -> bool:
            size = np.abs(heading_errors(platform, gain, 400.0 * wave, predict, e0=1e-6))
            n = len(size) // 4
            return bool(np.max(size[-n:]) > np.max(size[n : 2 * n]))

        def swings(gain: float, platform: Platform = platform, wave: float = wave) -> bool:
            e = heading_errors(platform, gain, 60.0 * wave, predict, e0=1e-3)
            return bool(np.min(e) < -1e-3 * 1e-14)

        errors = Worst(
            abs(bisect(grows, 0.9 * stable, 1.12 * stable) / stable - 1.0),
            abs(bisect(swings, 0.9 * smooth, 1.12 * smooth) / smooth - 1.0),
        )
        worst = Worst(max(worst.stable, errors.stable), max(worst.smooth, errors.smooth))
    return worst


def orbit_errors(robots: int, seed: int) -> list[float]:
    """Return the relative errors of the orbit radius against the library's own loop, unsaturated, run until it is steady."""
    rng = np.random.default_rng(seed)
    errors = []
    while len(errors) < robots:
        robot = draw(rng)
        predict = bool(rng.integers(2))
        controller = Controller(robot.platform, capture_radius=robot.capture_radius, constant_speed=True, predict=predict)
        s = controller.settings
        gain = controller.gain * rng.uniform(0.2, 0.5)
        if not predict and gain * (s.dead_time + s.motor_lag) > 0.5:  # the circle attracts below 0.7315 (derived)
            continue
        radius = sizing.orbit_radius(controller.speed, gain)
        if s.ceiling < 1.2 * controller.speed / radius or radius < 1.3 * s.capture_radius:
            continue
        loose = controller.unchecked(gain=gain, capture_radius=1e-6, stop_radius=1e-6, aim_radius=1e-6)
        steps = math.ceil(30.0 / gain / s.period)
        motion = (controller.speed, controller.speed / radius)
        log = drive(loose, (1.05 * radius, 0.0, 1.6), motion=motion, steps=steps)
        if log[-1, 4] * log[-1, 3] == 0.0 or abs(abs(log[-1, 3]) - controller.speed) > 1e-9:
            continue  # the wheel limit slowed it: not at constant speed
        errors.append(abs(math.hypot(*log[-1, :2]) / radius - 1.0))
    return errors


def allowed(robot: Robot, controller: Controller, distance: float) -> int:
    """Return steps enough for any drive that works: three times the way, and ten turns, ramps and periods more."""
    s = controller.settings
    span = (
        3.0 * distance / s.cruise
        + 20.0 * math.pi / s.ceiling
        + 20.0 * s.cruise / s.acceleration
        + 20.0 * s.top_speed / s.braking
        + 10.0
    )
    return math.ceil(span / s.period)


def ringing(log: np.ndarray, radius: float = 0.0) -> float:
    """Return how far the heading error went beyond its first zero, over where it began: while the law steered, up to capture."""
    steering = np.flatnonzero((log[:, 10] == 0.0) | (log[:, 8] <= radius))
    e = log[: steering[0] if len(steering) else len(log), 7]
    if len(e) == 0:
        return 0.0
    beyond = np.flatnonzero(e * np.sign(e[0]) <= 0.0)
    return float(max(0.0, np.max(-e[beyond[0] :] * np.sign(e[0])) / abs(e[0]))) if len(beyond) and e[0] != 0.0 else 0.0


class Drives(NamedTuple):
    """Counts over robots with a random speed and gain in their window, from random starts."""

    robots: int
    drives: int
    refused: int
    missed: int
    not_arrived: int
    rings: int
    worst_ring: float
    steps: int


def window_drives(robots: int, starts: int, seed: int) -> Drives:
    """Drive each robot at its fastest speed or below it, its gain anywhere in the window, from random starts at rest."""
    rng = np.random.default_rng(seed)
    refused = missed = short = rings = steps = 0
    worst = 0.0
    for i in range(robots):
        robot = draw(rng)
        try:
            controller = Controller(robot.platform, capture_radius=robot.capture_radius, constant_speed=True)
            if i % 2:
                speed = controller.speed * rng.uniform(0.3, 1.0)
                found = sizing.window(robot.platform, robot.capture_radius, speed)
                gain = found.low * (found.high / found.low) ** rng.random()
                controller = Controller(
                    robot.platform, capture_radius=robot.capture_radius, constant_speed=True, speed=speed, gain=gain
                )
        except ValueError:
            refused += 1
            continue
        for _ in range(starts):
            start = draw_start(rng, robot)
            log = drive(controller, start, steps=allowed(robot, controller, math.hypot(*start[:2])), until=ARRIVED)
            steps += len(log)
            missed += not bool(np.any(log[:, 8] <= robot.capture_radius))
            short += log[-1, 5] != 1.0
            ring = ringing(log, robot.capture_radius)
            rings += ring > 0.02
            worst = max(worst, ring)
    return Drives(robots, (robots - refused) * starts, refused, missed, short, rings, worst, steps)


def below_the_window(robots: int, seed: int) -> tuple[int, int]:
    """Start on the orbit with a gain 20 % below the lower edge. Return (robots, captured)."""
    rng = np.random.default_rng(seed)
    captured = 0
    for _ in range(robots):
        robot = draw(rng)
        controller = Controller(robot.platform, capture_radius=robot.capture_radius, constant_speed=True)
        gain = 0.8 * sizing.window(robot.platform, robot.capture_radius, controller.speed).low
        loose = controller.unchecked(gain=gain)
        radius = sizing.orbit_radius(controller.speed, gain, controller.settings.ceiling)
        turns = math.ceil(10.0 * 2.0 * math.pi * radius / controller.speed / robot.platform.period)
        log = drive(loose, *orbit_start(controller, radius), steps=turns, until=CAPTURED)
        captured += bool(log[-1, 8] <= robot.capture_radius)
    return robots, captured


def orbit_start(controller: Controller, radius: float):
    """Return start, goal and motion on the circle about the goal, the wheels already within their limit on its curve."""
    s = controller.settings
    share = min(1.0, s.wheel_speed / (s.cruise + s.cruise / radius * s.half_track))
    return (radius, 0.0, math.pi / 2.0), (0.0, 0.0), (share * s.cruise, share * s.cruise / radius)


def above_the_stability(robots: int, seed: int) -> tuple[int, int]:
    """Steer at a goal far away with a gain 10 % above the stability edge. Return (robots, calm in the end)."""
    rng = np.random.default_rng(seed)
    calm = 0
    for i in range(robots):
        robot = draw(rng)
        predict = bool(i % 2)
        controller = Controller(robot.platform, capture_radius=robot.capture_radius, constant_speed=True, predict=predict)
        p = robot.platform
        limit = sizing.stable_gain(p.period) if predict else sizing.stable_gain(p.period, p.dead_time, p.motor_lag)
        log = drive(
            controller.unchecked(gain=1.1 * limit, ceiling=p.turn_rate_limit),
            (-1e6, 0.0, -1e-9),
            steps=math.ceil(300.0 * max(p.period, p.dead_time + p.motor_lag) / p.period),
        )
        calm += bool(np.max(np.abs(log[-len(log) // 5 :, 7])) <= 1e-9)
    return robots, calm


class Faster(NamedTuple):
    """At 1.25 times the fastest workable speed: robots by what binds, those for which a gain works all the same."""

    bound: Counter[str]
    works: Counter[str]
    nearest: float


def faster_than_workable(robots: int, seed: int, factor: float = 1.25) -> Faster:
    """Look for any gain and any ceiling that captures from the orbit and rings by at most 2 %, above the fastest speed.

    Speeds bound by the robot's own speed limits have no window above them and are left out.
    """
    rng = np.random.default_rng(seed)
    bound: Counter[str] = Counter()
    works: Counter[str] = Counter()
    nearest = math.inf
    for _ in range(robots):
        robot = draw(rng)
        p, radius = robot.platform, robot.capture_radius
        controller = Controller(p, capture_radius=radius, constant_speed=True)
        why = controller.window.bound
        bound[why] += 1
        if why in ("speed_limit", "wheel_speed_limit"):
            continue
        speed, found = factor * controller.speed, False
        for ceiling in np.unique(np.minimum(p.turn_rate_limit, speed / radius * np.geomspace(1.0, 3.0, 6))):
            if speed > ceiling * radius:
                continue
            for gain in 2.0 * speed / (math.pi * radius) * np.geomspace(1.0, 4.0, 9):
                loose = controller.unchecked(cruise=speed, gain=gain, ceiling=ceiling, top_speed=max(speed, p.top_speed))
                ring = worst_ring(loose, gain, ceiling)
                nearest = min(nearest, ring if why != "period" else math.inf)
                found = found or ring <= 0.02
        works[why] += found
    return Faster(bound, works, nearest)


def worst_ring(controller: Controller, gain: float, ceiling: float) -> float:
    """Return the largest ringing over first errors of 0.01 to 3.1 rad, up to the first that is above 2 %."""
    s = controller.settings
    span = 3.0 * math.pi / ceiling + 8.0 / gain + 2.0 + ceiling / s.turn_acceleration
    ring = 0.0
    for e0 in np.geomspace(0.01, 3.1, 24):
        ring = max(ring, ringing(drive(controller, (-1e6, 0.0, -e0), steps=math.ceil(span / s.period))))
        if ring > 0.02:
            break
    return ring


def proposed_speeds(robots: int, seed: int) -> tuple[int, int]:
    """Ask each robot for too much, read the proposal in the refusal, and construct with it. Return (refused, still refused)."""
    rng = np.random.default_rng(seed)
    refused = again = 0
    for _ in range(robots):
        robot = draw(rng)
        try:
            Controller(robot.platform, capture_radius=robot.capture_radius, constant_speed=True, speed=robot.platform.top_speed)
        except ValueError as refusal:
            refused += 1
            proposal = float(str(refusal).rsplit(" m/s or less", 1)[0].rsplit(" ", 1)[1])
            try:
                Controller(robot.platform, capture_radius=robot.capture_radius, constant_speed=True, speed=proposal)
            except ValueError:
                again += 1
    return refused, again


class Storm(NamedTuple):
    """Steps made under wild measurements and overrides, the worst excess over any limit (relative), steps of each cause."""

    steps: int
    worst: float
    causes: Counter[str]


def limit_storm(steps: int, seed: int) -> Storm:
    """Step random robots through wild measurements, limits of the step and overrides; measure the excess over every limit.

    Where the command before is within the limits, so must be the new one; each component changes by at most a period's worth;
    what is outside already comes back at the full rate.
    """
    rng = np.random.default_rng(seed)
    made, worst, causes = 0, 0.0, Counter[str]()
    while made < steps:
        robot = draw(rng)
        p = robot.platform
        controller = Controller(p, capture_radius=robot.capture_radius, constant_speed=bool(made % 1000))
        memory, time = controller.start(0.0), 0.0
        wild = rng.choice([0.0, -1.0, 1e-9, 1e3, math.nan, math.inf, -math.inf, 1e300], size=(500, 14))
        fields = np.where(rng.random((500, 14)) < 0.02, wild, rng.normal(0.0, 3.0, (500, 14)))
        place = np.repeat(rng.normal(0.0, 3.0, (10, 5)), 50, axis=0)  # a pose and a goal stay for fifty steps
        fields[:, 4:9] = np.where(rng.random((500, 5)) < 0.97, place, fields[:, 4:9])
        for f in fields.tolist():
            time += p.period * (1.0 if abs(f[0]) < 4.0 else rng.uniform(0.0, 2.0))
            told = time if abs(f[12]) < 7.0 else time + f[12]
            others = (f[1] * p.top_speed * 0.4, f[2] * p.turn_rate_limit * 0.4) if f[3] > 3.0 else (math.nan, math.nan)
            measurement = Measurement(
                told,
                (f[4], f[5], f[6]),
                (f[7], f[8]),
                speed_limit=abs(f[9]) if f[10] > 2.0 else math.nan,
                hold=f[11] > 4.0,
                applied=others,
            )
            decision = controller.step(memory, measurement)
            before = others if Causes.APPLIED_BY_OTHERS in decision.causes else memory.command
            since = told - memory.time
            early = since / p.period if 0.0 < since < p.period else 1.0  # an early step may change as much less
            worst = max(worst, excess(controller, before, decision, measurement, early))
            causes.update(one.name for one in Causes if one in decision.causes and one.name)
            memory = decision.memory
            made += 1
    return Storm(made, worst, causes)


def excess(controller: Controller, before, decision, measurement, early: float) -> float:
    """Return by how much, relative, a command breaks a limit that it could have kept.

    Wheels of which the robot does not answer to small speeds leave their ramps by up to the smallest speed, before and after.
    """
    p, command = controller.platform, decision.command
    jump = 2.0 * decision.report.slowest
    v0, w0 = before
    v, w = command.speed, command.turn_rate
    half = p.track_width / 2.0
    a, b, al = (rate * p.period * early for rate in (p.acceleration, p.braking, p.turn_acceleration))
    top = min(p.top_speed, max(0.0, measurement.speed_limit)) if measurement.speed_limit == measurement.speed_limit else p.top_speed
    slowest, least_turn = max(0.0, abs(v0) - b) + jump, max(0.0, abs(w0) - al) + jump / half
    a, b, al = a + jump, b + jump, al + jump / half
    grown = abs(v) - abs(v0) if v * v0 >= 0.0 else abs(v)
    shrunk = abs(v0) - abs(v) if v * v0 >= 0.0 else abs(v0)
    return max(
        grown / a - 1.0,
        shrunk / b - 1.0,
        abs(w - w0) / al - 1.0,
        abs(v) / max(top, slowest, 1e-12) - 1.0 if abs(v) > 1e-12 else 0.0,
        abs(w) / max(p.turn_rate_limit, least_turn) - 1.0,
        (abs(v) + abs(w) * half) / max(p.wheel_speed_limit, slowest + least_turn * half) - 1.0,
        -v / p.top_speed if v0 >= 0.0 else 0.0,  # forward only
        max(abs(command.left - (v - w * half)), abs(command.right - (v + w * half))) / p.wheel_speed_limit,
    )


STUDIES = {
    "gain limits, predicted": lambda n: gain_limits(n, True, 11),
    "gain limits, unpredicted": lambda n: gain_limits(n, False, 12),
    "orbit radius, largest error": lambda n: max(orbit_errors(n, 13)),
    "window": lambda n: window_drives(n, 20, 14),
    "20 % below the window (robots, captured)": lambda n: below_the_window(n, 15),
    "10 % above the stability (robots, calm)": lambda n: above_the_stability(n, 16),
    "1.25 x the fastest speed": lambda n: faster_than_workable(n, 17),
    "commands within limits": lambda n: limit_storm(500 * n, 19),
    "proposals (refused, refused again)": lambda n: proposed_speeds(n, 18),
}


def run(studies: dict[str, Callable[[int], object]], description: str | None) -> None:
    """Run the studies that the command line asks for, and print each with the time it took."""
    parser = argparse.ArgumentParser(description=description)
    parser.add_argument("--robots", type=int, default=200)
    parser.add_argument("--only", default="", help="part of a study's name")
    chosen = parser.parse_args()
    for name, study in studies.items():
        if chosen.only in name:
            began = time.monotonic()
            print(f"{name}: {study(chosen.robots)}  ({time.monotonic() - began:.0f} s)", flush=True)


if __name__ == "__main__":
    run(STUDIES, __doc__)
