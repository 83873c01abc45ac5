"""Studies of the sizing report over random robots: few in the tests, many with `python tests/sizing_studies.py --robots 5000`."""

from __future__ import annotations

import math
import sys
import time
from collections import Counter
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np

from closed_loop import CAPTURED, drive
from robots import Robot, draw, draw_start
from steerkit import Controller, Platform, gain_limits, margins, sizing
from studies import FAR_GOAL, FREE, allowed, faster_than_workable, run

BAND = 0.02


def constant_speed(platform: Platform, capture_radius: float, **more) -> Controller:
    return Controller(platform, capture_radius=capture_radius, constant_speed=True, **more)


def loosened(platform: Platform, gain: float, predict: bool) -> Controller:
    """Return a controller of the linear heading loop at any gain: its limits lifted, its goal far away."""
    free = {"ceiling": FREE, "top_turn_rate": FREE, "turn_acceleration": FREE, "wheel_speed": FREE, "cruise": 0.01}
    free["most_raised"] = 0.0  # a dead time declared too short looks like wheels that do not answer: nothing is raised for it
    return constant_speed(platform, 0.3).unchecked(gain=gain, predict=float(predict), **free)


def headings(controller: Controller, error: float, steps: int, motion=(0.0, 0.0), dead_time=None) -> np.ndarray:
    """Return the heading error at each step, over the first, towards a goal far away."""
    log = drive(controller, (-FAR_GOAL, 0.0, -error), motion=motion, steps=steps, dead_time=dead_time)
    return -log[:, 2] / error


def settled(errors: np.ndarray, period: float) -> float:
    outside = np.flatnonzero(np.abs(errors) > BAND)
    return (int(outside[-1]) + 1) * period if len(outside) else 0.0


def start_near(rng: np.random.Generator, robot: Robot, controller: Controller) -> tuple[float, float, float]:
    """Return a random start, brought nearer where it is so far that the drive would begin with nothing but a straight line.

    By 12 times what the robot needs to turn right round and settle, it has done so.
    """
    x, y, heading = draw_start(rng, robot)
    p, s = robot.platform, controller.settings
    turn = math.pi / s.ceiling + s.ceiling / p.turn_acceleration + 4.0 / s.gain + p.dead_time + p.motor_lag + p.period
    share = min(1.0, 12.0 * (robot.capture_radius + controller.speed * turn) / math.hypot(x, y))
    return share * x, share * y, heading


class Captures(NamedTuple):
    """`missed`: drives that did not touch the disc. Every tenth robot starts from the whole range of distances."""

    robots: int
    drives: int
    missed: int


def captures(robots: int, starts: int, seed: int) -> Captures:
    """Drive each robot at the fastest workable speed with the chosen gain from random starts; every second one unpredicted."""
    rng, missed = np.random.default_rng(seed), 0
    for i in told(robots):
        robot, predict = draw(rng), i % 2 == 0
        controller = constant_speed(robot.platform, robot.capture_radius, predict=predict)
        for _ in range(starts):
            start = start_near(rng, robot, controller) if i % 10 else draw_start(rng, robot)
            log = drive(controller, start, steps=allowed(robot, controller, math.hypot(*start[:2])), until=CAPTURED)
            missed += not log[-1, 8] <= robot.capture_radius
    return Captures(robots, robots * starts, missed)


class Settling(NamedTuple):
    """`worst`: largest |measured/predicted - 1|; `differ`: robots beyond 10 %; `overshoot`: largest difference, a share."""

    robots: int
    worst: float
    differ: int
    overshoot: float


def settling(robots: int, seed: int) -> Settling:
    """Turn each robot, at speed and with all its limits, by an error too small for them; compare with the report."""
    rng = np.random.default_rng(seed)
    worst = overshoot = 0.0
    differ = 0
    for i in told(robots):
        robot, predict = draw(rng), i % 2 == 0
        p = robot.platform
        found = sizing.size(p, robot.capture_radius, predict=predict)
        controller = constant_speed(p, robot.capture_radius, predict=predict)
        assert controller.gain == found.gain
        turn_rate = min(0.2 * p.turn_acceleration * p.period, 0.2 * found.window.ceiling, 1e-3 * found.speed / p.track_width)
        error = min(1e-3, turn_rate / found.gain)
        errors = headings(controller, error, math.ceil(2.0 * found.settling_time / p.period) + 20, (found.speed, 0.0))
        off = abs(settled(errors, p.period) / found.settling_time - 1.0)
        worst, differ = max(worst, off), differ + (off > 0.1)
        overshoot = max(overshoot, abs(max(0.0, -float(np.min(errors))) - found.overshoot))
    return Settling(robots, worst, differ, overshoot)


class Overshoots(NamedTuple):
    """`worst`: largest difference of the overshoots, a share; `largest`: the largest measured one; `settling` as in Settling."""

    loops: int
    worst: float
    largest: float
    settling: float


def overshoots(robots: int, seed: int) -> Overshoots:
    """Answer a heading step with gains up to 97 % of the stable ones, the limits lifted; compare with `margins`."""
    rng = np.random.default_rng(seed)
    worst = largest = slowest = 0.0
    for i in told(robots):
        p, predict = draw(rng).platform, i % 4 == 0
        delay = (0.0, 0.0) if predict else (p.dead_time, p.motor_lag)
        gain = rng.uniform(0.2, 0.97) * gain_limits.stable_gain(p.period, *delay)
        judged = margins.margins(gain, period=p.period, dead_time=delay[0], motor_lag=delay[1])
        answer = gain_limits.sampled_step(gain, p.period, p.dead_time, p.motor_lag, predict=predict)
        errors = headings(loosened(p, gain, predict), 1e-3, math.ceil(1.5 * answer.time / p.period) + 20)
        got = max(0.0, -float(np.min(errors)))
        expected = answer.overshoot if predict else judged.overshoot
        worst, largest = max(worst, abs(got - expected)), max(largest, got)
        slowest = max(slowest, abs(settled(errors, p.period) / answer.time - 1.0))
    return Overshoots(robots, worst, largest, slowest)


class Mismatch(NamedTuple):
    """Loops with a wrong dead time: 3 % inside the stated border that do not decay, 3 % outside that do not grow."""

    loops: int
    inside: int
    outside: int


def mismatches(robots: int, seed: int) -> Mismatch:
    """Drive predicting and unpredicting loops with a true dead time 3 % to either side of the stated border."""
    rng = np.random.default_rng(seed)
    inside = outside = loops = 0
    for i in told(robots):
        p, predict = draw(rng).platform, i % 3 > 0
        if predict:
            gain = rng.uniform(0.2, 1.5) / p.period
            less, more = margins.prediction_margin(gain, p.period, p.dead_time, p.motor_lag)
            border = -less if rng.random() < 0.5 and less < math.inf else more
        else:
            gain = rng.uniform(0.2, 0.9) * gain_limits.stable_gain(p.period, p.dead_time, p.motor_lag)
            border = margins.margins(gain, period=p.period, dead_time=p.dead_time, motor_lag=p.motor_lag).delay_margin
        if not 0.1 * p.period < abs(border) < 100.0 * p.period or p.dead_time + 1.03 * border < 0.0:
            continue
        loops += 1
        for share in (0.97, 1.03):
            true = p.dead_time + share * border
            steps = 400 + math.ceil(100.0 * (true + p.dead_time + p.motor_lag + p.period + 1.0 / gain) / p.period)
            errors = np.abs(headings(loosened(p, gain, predict), 1e-5, steps, dead_time=true))
            early, late = np.max(errors[steps // 4 : steps // 2]), np.max(errors[3 * steps // 4 :])
            inside += share < 1.0 and not late < max(early, 1e-6)
            outside += share > 1.0 and not late > min(early, 1e3)  # beyond, it wraps
    return Mismatch(loops, inside, outside)


class Changes(NamedTuple):
    """Refused demands, changes proposed for them by name, those refused again, drives made with some, of those missed."""

    refused: int
    proposed: Counter[str]
    again: int
    drives: int
    missed: int


def changes(robots: int, driven: int, seed: int) -> Changes:
    """Ask each robot for its top speed; make each proposed change, size it again, and drive it for every `driven`-th robot."""
    rng = np.random.default_rng(seed)
    proposed: Counter[str] = Counter()
    refused = again = drives = missed = 0
    for i in told(robots):
        robot, predict = draw(rng), i % 2 == 0
        found = sizing.size(robot.platform, robot.capture_radius, robot.platform.top_speed, predict)
        refused += not found.works
        for change in found.changes:
            proposed[change.name] += 1
            demand = changed(found, change)
            again += not sizing.size(*demand).works
            if i % driven == 0:
                platform, radius, speed, foresees = demand
                controller = constant_speed(platform, radius, speed=speed, predict=foresees)
                for _ in range(5):
                    start = start_near(rng, Robot(platform, radius, 1.0), controller)
                    log = drive(controller, start, steps=allowed(robot, controller, math.hypot(*start[:2])), until=CAPTURED)
                    drives, missed = drives + 1, missed + (not log[-1, 8] <= radius)
    return Changes(refused, proposed, again, drives, missed)


def changed(found: sizing.Sizing, change: sizing.Change) -> tuple[Platform, float, float, bool]:
    """Return the demand with one change made: platform, capture radius, speed, predict."""
    numbers = {name: getattr(found.platform, name) for name in found.platform.__dataclass_fields__}
    demand = {"capture_radius": found.capture_radius, "speed": found.speed, "predict": found.predict}
    if change.name in demand:
        demand[change.name] = bool(change.value) if change.name == "predict" else change.value
    else:
        numbers[change.name] = change.value
    return Platform(**numbers), demand["capture_radius"], demand["speed"], demand["predict"]


def told(robots: int) -> Iterator[int]:
    """Count up to `robots`; tell every second on a terminal, every minute elsewhere, how far it is and how long it will take."""
    began = shown = time.monotonic()
    screen = sys.stderr.isatty()
    for i in range(robots):
        yield i
        now = time.monotonic()
        if now - shown > (1.0 if screen else 60.0):
            left = (now - began) * (robots - i - 1) / (i + 1)
            print(f"\r  {i + 1} of {robots}, {left:.0f} s left  ", end="" if screen else "\n", file=sys.stderr, flush=True)
            shown = now
    if screen:
        print("\r" + 40 * " " + "\r", end="", file=sys.stderr)


STUDIES = {
    "capture, chosen gain, 20 starts each": lambda n: captures(n, 20, 31),
    "settling time": lambda n: settling(n, 32),
    "overshoot, gains beyond the window": lambda n: overshoots(n, 33),
    "dead time declared wrong": lambda n: mismatches(n // 5, 34),
    "proposed changes": lambda n: changes(n, 10, 35),
    "1.25 x the fastest speed": lambda n: faster_than_workable(n // 5, 36),
}

if __name__ == "__main__":
    run(STUDIES, __doc__)
