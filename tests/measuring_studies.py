"""Studies of measuring: logs of random robots with noise, jitter and losses, measured.

python tests/measuring_studies.py --robots 1000
"""

from __future__ import annotations

import argparse
import math
import sys
import time as clock
from collections import defaultdict
from dataclasses import fields
from typing import NamedTuple

import numpy as np

from closed_loop import ARRIVED, drive
from robots import draw, draw_start
from steerkit import Controller, Platform, Pose
from steerkit.kinematics import odometry
from steerkit.measuring import (
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
from steerkit.step_fit import lagged, set_point

NOISE = 0.02  # standard deviation, of the step
JITTER = 0.02  # s, either way, of the sampling instants
LOST = 0.05  # of the rows
FASTEST_LOG = 0.01  # s
REPEATS = 8  # starts and stops in one log
SAMPLES = 5.0


class Test(NamedTuple):
    """A step test of a robot: what is true, and its log."""

    truth: dict[str, float]
    ramps: dict[str, float]  # s, how long each ramp takes
    interval: float
    time: np.ndarray
    command: np.ndarray
    response: np.ndarray


def reference(time, starts, levels, dead_time, lag, up, down):
    """Return the response of the library's own model of a drive: dead time, ramp, first-order lag."""
    corners, values = set_point(np.asarray(starts) + dead_time, np.asarray(levels), 1.0 / up, 1.0 / down)
    return lagged(np.asarray(time), corners, values, lag)


def instants(rng, interval: float, duration: float, jitter: float) -> np.ndarray:
    """Return the true sampling instants: a grid, each moved by up to the jitter either way, in order."""
    grid = np.arange(0.0, duration, interval)
    return np.sort(grid + rng.uniform(-jitter, jitter, len(grid)))


def step_test(
    rng,
    platform: Platform,
    turning: bool,
    noise=NOISE,
    jitter=JITTER,
    lost=LOST,
    repeats=REPEATS,
    stamps=0.0,
    interval=None,
    grains=None,
) -> Test:
    """Return the log of starts and stops of a robot. Commands are sent at rows of the log; `stamps` makes the stamps late."""
    p = platform
    top, up, down = (
        (p.top_turn_rate, p.turn_acceleration, p.turn_acceleration) if turning else (p.top_speed, p.acceleration, p.braking)
    )
    if interval is None:
        interval = FASTEST_LOG * max(1.0, p.period / FASTEST_LOG) ** rng.random()
    hold = 1.2 * (p.dead_time + 5.0 * p.motor_lag + max(top / up, top / down)) + max(0.5, 8.0 * interval)
    t = instants(rng, interval, hold * (2 * repeats + 1), jitter)
    hold_number = np.minimum(np.floor((t - t[0]) / hold), 2 * repeats).astype(int)
    command = np.where(hold_number % 2 == 1, top, 0.0)
    edges = np.flatnonzero(np.diff(command)) + 1
    levels = np.concatenate((command[:1], command[edges]))
    clean = reference(t, t[edges], levels, p.dead_time, p.motor_lag, up, down)
    response = clean + rng.normal(0.0, noise * top, len(t))
    if grains:
        grain = top / rng.uniform(*grains)
        response = np.round(response / grain) * grain
    if stamps > 0.0:
        t = np.maximum.accumulate(t + rng.uniform(0.0, stamps, len(t))) + 1e-9 * np.arange(len(t))
    kept = rng.random(len(t)) >= lost
    truth = {"dead_time": p.dead_time, "motor_lag": p.motor_lag, "acceleration": up, "braking": down}
    return Test(truth, {"acceleration": top / up, "braking": top / down}, interval, t[kept], command[kept], response[kept])


def within(name: str, test: Test, period: float) -> float:
    """Return the error that is asked for."""
    truth = test.truth[name]
    return {"dead_time": max(0.01, period), "motor_lag": 0.15 * truth}.get(name, 0.05 * truth)


class Outcome(NamedTuple):
    """One number of one log."""

    spans: float  # samples that the lag or the ramp takes
    told: bool
    error: float  # over the error asked for
    sigmas: float  # error over stated uncertainty
    close: bool


def outcomes(robots: int, seed: int, say=None, **how) -> dict[str, list[Outcome]]:
    """Return for each number what came of it, in one log of speed and one of turn rate a robot."""
    rng = np.random.default_rng(seed)
    found = defaultdict(list)
    begun = clock.monotonic()
    for number in range(robots):
        platform = draw(rng).platform
        for turning in (False, True):
            test = step_test(rng, platform, turning, **how)
            got = (turn_steps if turning else speed_steps)(test.time, test.command, test.response)
            for name, truth in test.truth.items():
                one = getattr(got, name)
                span = test.ramps.get(name, test.truth["motor_lag"] if name == "motor_lag" else math.inf) / test.interval
                error = abs(one.value - truth)
                allowed = within(name, test, platform.period)
                key = ("turn_" if turning and name in test.ramps else "") + name
                found[key].append(Outcome(span, one.told, error / max(allowed, 1e-300), error / one.uncertainty, error <= allowed))
        if say and (number + 1) % 25 == 0:
            spent = clock.monotonic() - begun
            say(f"{number + 1}/{robots} robots, {spent * (robots / (number + 1) - 1):.0f} s left")
    return found


def summary(found: dict[str, list[Outcome]]) -> str:
    """Return the table of a study."""
    lines = [
        f"{'number':24}{'spans >= 5':>11}{'told':>7}{'within':>8}{'covers':>8}{'> 2 u':>7}{'> 3 u':>7}{'spans < 5':>11}{'told':>6}"
    ]
    for name, rows in found.items():
        seen = [one for one in rows if one.spans >= SAMPLES]
        short = [one for one in rows if one.spans < SAMPLES]
        told = [one for one in seen if one.told]
        n = max(1, len(told))
        lines.append(
            f"{name:24}{len(seen):11}{len(told) / max(1, len(seen)):7.1%}{sum(o.close for o in told) / n:8.1%}"
            f"{sum(o.sigmas <= 1.0 for o in told) / n:8.1%}{sum(o.sigmas > 2.0 for o in told) / n:7.1%}"
            f"{sum(o.sigmas > 3.0 for o in told) / n:7.1%}{len(short):11}{sum(o.told for o in short):6}"
        )
    return "\n".join(lines)


def quantised(command: np.ndarray, smallest: float, step: float) -> np.ndarray:
    """Return what wheels with a dead band and a resolution make of a command."""
    moved = np.where(np.abs(command) < smallest, 0.0, command)
    return np.round(moved / step) * step if step > 0.0 else moved


def creep_test(rng, smallest: float, stairs: int, top: float, hold=1.0, interval=0.02, noise=NOISE, delay=0.2, step=0.0):
    """Return the log (time, command, response) of a wheel told to run a little faster every `hold` seconds."""
    t = instants(rng, interval, hold * (stairs + 1), 0.25 * interval)
    command = top * np.clip(np.floor(t / hold), 0, stairs) / stairs
    before = top * np.clip(np.floor((t - delay) / hold), 0, stairs) / stairs
    response = quantised(before, smallest, step) + rng.normal(0.0, noise * top, len(t))
    kept = rng.random(len(t)) >= LOST
    return t[kept], command[kept], response[kept]


def creeps(logs: int, seed: int) -> tuple[int, int, int]:
    """Return how many smallest wheel speeds were told, and how many of those the uncertainty covers, once and twice."""
    rng = np.random.default_rng(seed)
    told = once = twice = 0
    for _ in range(logs):
        truth = rng.uniform(0.02, 0.12)
        got = smallest_wheel_speed(*creep_test(rng, truth, int(rng.integers(20, 60)), 0.25))
        told += got.told
        once += abs(got.value - truth) <= got.uncertainty + 1e-9
        twice += abs(got.value - truth) <= 2.0 * got.uncertainty + 1e-9
    return told, once, twice


def resolutions(logs: int, seed: int) -> tuple[int, int, int, int]:
    """Return of how many logs with visible steps the resolution was told, how many of those it covers, how many are off by more
    than 2 %, and of how many logs without steps one was told."""
    rng = np.random.default_rng(seed)
    told = covered = off = invented = 0
    for _ in range(logs):
        truth = 0.25 / rng.uniform(6.0, 40.0)
        t = np.arange(0.0, 60.0, 0.02)
        command = 0.25 * t / 60.0
        noise = rng.normal(0.0, truth * rng.uniform(0.02, 0.15), len(t))
        got = wheel_speed_resolution(t, command, quantised(command, 0.0, truth) + noise)
        told += got.told
        covered += abs(got.value - truth) <= got.uncertainty
        off += got.told and abs(got.value - truth) > 0.02 * truth
        stairs = 0.25 * np.floor(t) / 60.0
        invented += wheel_speed_resolution(t, stairs if rng.random() < 0.5 else command, command + noise).told
    return told, covered, off, invented


def limits_told(logs: int, seed: int) -> tuple[int, int, int]:
    """Return how many saturated logs told the wheel-speed limit, how many of those it covers, how many others told one."""
    rng = np.random.default_rng(seed)
    told = covered = invented = 0
    for _ in range(logs):
        truth, asked = rng.uniform(0.3, 1.5), rng.uniform(1.1, 2.0)
        t = instants(rng, 0.02, 9.0, 0.005)
        command = np.where(t < 1.0, 0.0, np.where(t < 4.0, 0.5, asked)) * truth
        clean = lagged(t, *set_point(np.array([1.1, 4.1]), np.array([0.0, 0.5, asked]) * truth, 0.5, 0.5), 0.1)
        noise = rng.normal(0.0, NOISE * truth, len(t))
        got = wheel_speed_limit(t, command, np.minimum(clean, truth) + noise)
        told += got.told
        covered += abs(got.value - truth) <= got.uncertainty
        invented += wheel_speed_limit(t, command, clean + noise).told
    return told, covered, invented


def rests(logs: int, seed: int) -> tuple[int, int, int]:
    """Return how many of the position and heading noises of a minute at rest were told and covered, white noise and wandering."""
    rng = np.random.default_rng(seed)
    told = covered = wandering = 0
    for _ in range(logs):
        sigma = 0.02 * rng.uniform(0.1, 1.0)
        t = np.arange(0.0, 60.0, 0.1)
        x, y, h = rng.normal(0.0, sigma, (3, len(t)))
        position, heading = rest_noise(t, x, y, math.pi + h)
        told += position.told + heading.told
        covered += abs(position.value - sigma) <= position.uncertainty
        covered += abs(heading.value - sigma) <= heading.uncertainty
        wandering += rest_noise(t, np.cumsum(x), y, h)[0].told
    return told, covered, wandering


def drive_square(side: float, believed: float, true_width: float, left: float, right: float, turn: int, noise=0.0, rng=None):
    """Return true end minus odometry's end of a square that odometry believes in; wheels `left`, `right` times as large as told."""
    pose, told = Pose(0.0, 0.0, 0.0), Pose(0.0, 0.0, 0.0)
    corner = turn * math.pi / 4.0 * believed  # m that each wheel rolls for a quarter turn
    for _ in range(4):
        for wheels in ((side, side), (-corner, corner)):
            slip = rng.normal(0.0, noise, 2) if rng is not None else (0.0, 0.0)
            told = odometry(told, *wheels, believed)
            pose = odometry(pose, wheels[0] * left + slip[0], wheels[1] * right + slip[1], true_width)
    return pose.x - told.x, pose.y - told.y


def squares(logs: int, seed: int) -> dict[str, list[float]]:
    """Return errors over uncertainty and relative errors of track width and wheel ratio, five squares each way."""
    rng = np.random.default_rng(seed)
    found = defaultdict(list)
    for _ in range(logs):
        width = rng.uniform(0.2, 0.8)
        wrong, ratio = 1.0 + rng.uniform(-0.03, 0.03), 1.0 + rng.uniform(-0.01, 0.01)
        left, right = 2.0 / (1.0 + ratio), 2.0 * ratio / (1.0 + ratio)
        ways = [[drive_square(4.0, width * wrong, width, left, right, way, 0.001, rng) for _ in range(5)] for way in (-1, 1)]
        got = square(4.0, *ways, width * wrong)
        found["width over u"].append(abs(got.track_width.value - width) / got.track_width.uncertainty)
        found["width, share"].append(abs(got.track_width.value / width - 1.0))
        found["wheel over u"].append(abs(got.left_wheel.value - left) / got.left_wheel.uncertainty)
        found["wheel, share"].append(abs(got.left_wheel.value / left - 1.0))
    return found


class Drives(NamedTuple):
    """Drives of controllers built from measured numbers, on the true robot."""

    robots: int
    refused: int
    driven: int
    arrived: int


def declared(rng, platform: Platform) -> tuple[dict[str, float], StepResponse]:
    """Return the platform's numbers as its own logs tell them, the rest as they are; log at its period or 10 ms."""
    found = []
    for turning in (False, True):
        test = step_test(rng, platform, turning, interval=min(platform.period, 2.0 * FASTEST_LOG))
        found.append((turn_steps if turning else speed_steps)(test.time, test.command, test.response))
    return for_platform(*found).numbers, found[0]


def drives(robots: int, seed: int, say=None) -> Drives:
    """Measure, declare, drive: each controller goes from random starts to the goal on the robot as it truly is."""
    rng = np.random.default_rng(seed)
    refused = driven = arrived = 0
    for number in range(robots):
        robot = draw(rng)
        p = robot.platform
        numbers, _ = declared(rng, p)
        names = ("acceleration", "braking", "turn_acceleration", "dead_time", "motor_lag")
        given = (
            {one.name: getattr(p, one.name) for one in fields(p)}
            | {"motor_lag": 0.0}
            | {n: numbers[n] for n in names if n in numbers}
        )
        try:
            controller = Controller(Platform(**given), capture_radius=robot.capture_radius)
        except ValueError:
            refused += 1
            continue
        start = draw_start(rng, robot)
        period, speed = p.period, getattr(controller, "speed", p.top_speed)
        patience = 20.0 * (math.hypot(*start[:2]) / speed + 2.0 * math.pi / p.top_turn_rate + 10.0 * p.dead_time) + 20.0
        log = drive(controller, start, steps=math.ceil(patience / period), until=ARRIVED, dead_time=p.dead_time, lag=p.motor_lag)
        driven += 1
        arrived += log[-1, 5] == 1.0
        if say and (number + 1) % 10 == 0:
            say(f"drives: {number + 1}/{robots}")
    return Drives(robots, refused, driven, int(arrived))


STUDIES = {
    "as asked: 2 % noise, instants ± 20 ms, 5 % lost": {},
    "stamps late by up to 20 ms": {"stamps": 0.02},
    "no noise, no jitter, nothing lost": {"noise": 1e-6, "jitter": 0.0, "lost": 0.0},
    "no noise, response rounded to a 15th to a 60th of the step": {"noise": 0.0, "grains": (15.0, 60.0)},
    "two starts and stops instead of eight": {"repeats": 2},
    "5 % noise, 20 % lost": {"noise": 0.05, "lost": 0.2},
}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--robots", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    asked = parser.parse_args()
    n, seed = asked.robots, asked.seed
    say = (lambda text: print(f"\r{text:60}", end="", flush=True)) if sys.stdout.isatty() else None
    for name, how in STUDIES.items():
        count = n if not how else max(1, n // 4)
        found = outcomes(count, seed, say, **how)
        print(f"\r{name}; {count} robots, a log of speed and one of turn rate each\n{summary(found)}\n", flush=True)
    print(f"smallest wheel speed, {n} logs: told, covered, covered twofold", creeps(n, seed), flush=True)
    print(f"resolution, {n} logs: told, covered, off by 2 %, invented", resolutions(n // 4, seed), f"of {n // 4}", flush=True)
    print(f"wheel-speed limit, {n} logs: told, covered, invented", limits_told(n, seed), flush=True)
    print(f"rest, {n} logs, 2 noises: told, covered, told though it wanders", rests(n, seed), flush=True)
    for what, values in squares(n, seed).items():
        print(f"squares, {what}: p90 {np.quantile(values, 0.9):.2g}, max {np.max(values):.2g}", flush=True)
    print(f"\r{drives(max(200, n // 4), seed, say)}", flush=True)


if __name__ == "__main__":
    main()
