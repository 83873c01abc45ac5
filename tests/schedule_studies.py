"""Studies of the speed schedule over random robots: few draws in the tests, many with `python tests/schedule_studies.py --runs N`.

A run is a robot and a start. Its time is judged against `travel_time`, a rigorous lower bound without lag, dead band or resolution:
time from the instant at which the first command takes effect to rest, over the bound from the state at that instant.
"""

from __future__ import annotations

import argparse
import dataclasses
import math
import sys
import time
from collections.abc import Callable
from itertools import pairwise
from typing import NamedTuple

import numpy as np

from robots import draw
from rough_loop import Truth, rough_drive, true_of
from steerkit import Controller, Platform
from steerkit.kinematics import arc_kernel
from steerkit.travel_time import travel_time_kernel

MORE = 40  # steps watched after rest
SPIN = 0.3  # of the turn-rate limit: the most that a robot in motion turns at its start, but for the draws "spinning"


class Run(NamedTuple):
    """A robot, its task and its start: goal at the origin, (x, y, heading), and the motion that has been commanded."""

    platform: Platform
    capture_radius: float
    start: tuple[float, float, float]
    motion: tuple[float, float]


def log_uniform(rng, low: float, high: float) -> float:
    return low * (high / low) ** rng.random()


def moving(rng, platform: Platform, spin: float) -> tuple[float, float]:
    """Return a motion that the wheels can have, one in five; else rest."""
    p = platform
    if rng.random() >= 0.2:
        return 0.0, 0.0
    while True:
        v, w = rng.uniform(0.0, p.speed_limit), rng.uniform(-spin, spin) * p.turn_rate_limit
        if v + abs(w) * p.track_width / 2.0 <= p.wheel_speed_limit:
            return v, w


def common_draw(rng, distance: float, lag: bool = False, band: bool = False, spin: float = SPIN) -> Run:
    """Return a run with the ranges in which the law was developed; `distance` (m) is the farthest goal, any heading."""
    speed, turn = log_uniform(rng, 0.2, 2.0), log_uniform(rng, 0.5, 6.0)
    width = rng.uniform(0.2, 0.8)
    alone, together = max(speed, turn * width / 2.0), speed + turn * width / 2.0
    wheel = alone + (together - alone) * rng.random()
    platform = Platform(
        radius=width,
        track_width=width,
        wheel_speed_limit=wheel,
        speed_limit=speed,
        turn_rate_limit=turn,
        acceleration=log_uniform(rng, 0.3, 3.0),
        braking=log_uniform(rng, 0.3, 3.0),
        turn_acceleration=log_uniform(rng, 1.0, 20.0),
        period=log_uniform(rng, 0.01, 0.2),
        dead_time=rng.uniform(0.0, 0.3),
        motor_lag=rng.uniform(0.0, 0.15) if lag and rng.random() < 0.8 else 0.0,
    )
    if band:
        smallest = min(rng.uniform(0.0, min(0.08, min(speed, wheel) / 10.0)), 0.45 * turn * width / 2.0)
        step = min(rng.uniform(0.0, 0.02), 0.45 * turn * width / 2.0)
        step = step if step > 1e-4 else 0.0  # finer is none
        platform = dataclasses.replace(platform, smallest_wheel_speed=smallest, wheel_speed_resolution=step)
    radius = log_uniform(rng, 0.03, 0.3)
    radius = max(radius, 1.3 * platform.slowest_wheel_speed * platform.period)
    return Run(platform, radius, start_at(rng, rng.uniform(0.0, distance)), moving(rng, platform, spin))


def committed_draw(rng, distance: float, lag: bool = True, band: bool = False, spin: float = SPIN) -> Run:
    """Return a run with a robot of the committed distribution (`robots`); `distance` is the farthest goal, log-uniform."""
    robot = draw(rng)
    platform = robot.platform if lag else dataclasses.replace(robot.platform, motor_lag=0.0)
    return Run(platform, robot.capture_radius, start_at(rng, log_uniform(rng, 0.01, distance)), moving(rng, platform, spin))


def start_at(rng, distance: float) -> tuple[float, float, float]:
    place = rng.uniform(-math.pi, math.pi)
    return distance * math.cos(place), distance * math.sin(place), rng.uniform(-math.pi, math.pi)


def bound_of(run: Run, tight: bool = True) -> tuple[float, float]:
    """Return the lower bound (s) from the state at the instant of effect, and the distance then (m)."""
    p = run.platform
    x, y, heading = arc_kernel(*run.start, *run.motion, p.dead_time)
    distance = math.hypot(x, y)
    error = math.remainder(math.atan2(-y, -x) - heading, 2.0 * math.pi)
    limits = (p.top_speed, p.top_turn_rate, p.wheel_speed_limit, p.track_width / 2.0, p.acceleration, p.braking)
    return (
        travel_time_kernel(distance, error, *run.motion, run.capture_radius, *limits, p.turn_acceleration, p.period, 27, tight),
        distance,
    )


class Row(NamedTuple):
    """What is kept of a run: seconds, metres, 1/s."""

    time: float
    bound: float
    loose: float
    distance: float
    radius: float
    lag: float
    from_rest: float
    sign_changes: float
    arrived: float
    left: float
    excess: float
    stalls: float
    starts: float
    tries: float
    raised: float


def drive_one(run: Run, truth: Truth, rng, noise=(0.0, 0.0), jitter=0.0, goals=((0, 0.0, 0.0),), measured=False) -> Row:
    """Drive a run on the robot `truth`; a drive that has not come to rest in 10 x bound + 5 s never arrives."""
    p = run.platform
    bound, distance = bound_of(run)
    loose, _ = bound_of(run, tight=False)
    controller = Controller(p, capture_radius=run.capture_radius)
    far = sum(math.dist(a[1:], b[1:]) for a, b in pairwise(goals))
    span = 10.0 * (bound + far / p.top_speed + 2.0 * len(goals) - 2.0) + 5.0 + goals[-1][0] * p.period + p.dead_time + p.motor_lag
    steps = math.ceil(span / p.period / (1.0 - jitter)) + MORE
    got, _log = rough_drive(
        controller,
        truth,
        run.start,
        run.motion,
        goals,
        steps,
        MORE,
        rng=rng,
        noise=noise,
        jitter=jitter,
        measured_motion=measured,
    )
    took = got.rest - truth.dead_time
    seconds = got.steps * p.period
    told = p.slowest_wheel_speed
    return Row(
        *(took, bound, loose, distance, run.capture_radius, p.motor_lag, float(run.motion == (0.0, 0.0))),
        *(
            got.sign_changes / seconds,
            float(got.rest >= 0.0),
            got.left,
            got.excess,
            got.stalls,
            got.starts,
            got.tries,
            got.raised / told if told else 0.0,
        ),
    )


def many(runs: int, seed: int, drawn, name: str = "", **how) -> np.ndarray:
    """Return a row for each of `runs` runs; `drawn(rng)` gives a run, or a run and its truth. Progress where asked for."""
    rows, began, told = [], time.monotonic(), time.monotonic()
    for i in range(runs):
        rng = np.random.default_rng([seed, i])
        run = drawn(rng)
        run, truth = run if isinstance(run[1], Truth) else (run, true_of(run.platform))
        rows.append(
            drive_one(run, truth, rng, **{key: value(rng, run) if callable(value) else value for key, value in how.items()})
        )
        if name and time.monotonic() - told > 10.0:
            told = time.monotonic()
            left = (told - began) * (runs - i - 1) / (i + 1)
            print(f"\r{name}: {i + 1} of {runs}, {left:.0f} s left ", end="", file=sys.stderr, flush=True)
    return np.array(rows)


def spread(ratios: np.ndarray) -> str:
    ratios = ratios[np.isfinite(ratios)]
    q = np.percentile(ratios, [50, 95, 99]) if len(ratios) else [math.nan] * 3
    return f"n {len(ratios)}, median {q[0]:.4f}, 95 % {q[1]:.3f}, 99 % {q[2]:.3f}, max {max(ratios, default=math.nan):.2f}"


def report(rows: np.ndarray, by_lag: bool = False) -> str:
    r = Row(*rows.T)
    counts = {
        "not at rest": r.arrived == 0,
        "left after rest": r.left > 0,
        "drove on after ARRIVED": r.starts > 0,
        "stopped twice": r.tries > 0,
        "outside limits": r.excess > 1e-9,
        "told less than the smallest wheel speed": r.stalls > 0,
        "smallest wheel speed raised": r.raised > 1.01,
    }
    changes = 60.0 * r.sign_changes
    lines = [
        f"  runs {len(rows)}; " + ", ".join(f"{name} {int(np.sum(which))}" for name, which in counts.items()),
        f"  farthest outside after rest {np.max(r.left / r.radius):.3f} r; turn-rate sign changes a minute: "
        f"mean {np.mean(changes):.1f}, 95 % {np.percentile(changes, 95):.1f}",
    ]
    with np.errstate(divide="ignore", invalid="ignore"):
        tight = np.where((r.bound > 0) & (r.arrived > 0), r.time / r.bound, np.nan)
        loose = np.where((r.bound > 0) & (r.arrived > 0), r.time / r.loose, np.nan)
    outside = r.distance > 1.5 * r.radius
    parts = {
        "all": r.bound >= 0,
        "from rest": r.from_rest > 0,
        "moving": r.from_rest == 0,
        "from rest, d > 1.5 r": (r.from_rest > 0) & outside,
    }
    for name, which in parts.items():
        lines.append(f"  {name}: {spread(tight[which])}; over the plain bound: {spread(loose[which])}")
    if by_lag:
        for low, high in ((-1.0, 0.0), (0.0, 0.05), (0.05, 0.1), (0.1, 0.15)):
            which = (r.from_rest > 0) & outside & (r.lag > low) & (r.lag <= high)
            lines.append(f"  lag {max(low, 0):g} to {high:g} s, from rest, d > 1.5 r: {spread(loose[which])}")
    return "\n".join(lines)


def changing(rng, run: Run):
    """Return goals, rows (step, x, y), that change three times on the way, wherever the robot is then."""
    period = run.platform.period
    rows = [(0, 0.0, 0.0)]
    for _ in range(3):
        rows.append((rows[-1][0] + 1 + int(rng.uniform(0.0, 3.0) / period), *rng.uniform(-3.0, 3.0, 2)))
    return rows


WRONG = {  # what may be declared wrong, and the number of the truth that it scales
    "dead_time": "dead_time",
    "motor_lag": "motor_lag",
    "smallest wheel speed": "smallest",
    "wheel radius (speed)": "speed_scale",
    "track width (turn)": "turn_scale",
    "acceleration": "acceleration",
    "braking": "braking",
    "turn_acceleration": "turn_acceleration",
    "speed limits": "top_speed",
    "turn-rate limits": "top_turn_rate",
}


def wrong(rng, names=tuple(WRONG), scale: float | None = None) -> tuple[Run, Truth]:
    """Return a run, lag, dead band and resolution drawn, and a truth `scale` times what is declared (None: 0.8 or 1.2 each)."""
    run = common_draw(rng, 1.0 if rng.random() < 0.22 else 10.0, True, True)
    p = run.platform
    true = true_of(p)._asdict()
    declared = true | {"speed_scale": 1.0, "turn_scale": 1.0, "top_speed": p.top_speed, "top_turn_rate": p.top_turn_rate}
    declared |= {name: getattr(p, name) for name in ("acceleration", "braking", "turn_acceleration")}
    for name in names:
        true[WRONG[name]] = declared[WRONG[name]] * (scale or rng.choice([0.8, 1.2]))
    return run, Truth(**true)


def noisy(rng, share: float, heading: float) -> Run:
    """Return a run whose position noise is a share of the capture radius, its heading noise `heading` (rad)."""
    run = common_draw(rng, 1.0 if rng.random() < 0.22 else 10.0, True)
    noise = share * run.capture_radius * (1.0 - 1e-9)
    return run._replace(platform=dataclasses.replace(run.platform, position_noise=noise, heading_noise=heading))


def noise_of(_rng, run: Run) -> tuple[float, float]:
    return run.platform.position_noise, run.platform.heading_noise


def show(name: str, rows: np.ndarray, by_lag: bool = False) -> None:
    print(f"\r{name}\n{report(rows, by_lag)}\n", flush=True)


def studies(n: int) -> dict[str, tuple[Callable[[str], np.ndarray], bool]]:
    """Return name, study and whether it is told by lag."""
    found = {
        "goals 0-10 m": (lambda name: many(n, 1, lambda rng: common_draw(rng, 10.0), name), False),
        "goals 0-1 m": (lambda name: many(n, 2, lambda rng: common_draw(rng, 1.0), name), False),
        "spinning starts, goals 0-10 m": (lambda name: many(n, 3, lambda rng: common_draw(rng, 10.0, spin=1.0), name), False),
        "spinning starts, goals 0-1 m": (lambda name: many(n, 4, lambda rng: common_draw(rng, 1.0, spin=1.0), name), False),
        "lag": (lambda name: many(n, 5, lambda rng: mixed(rng, True, False), name), True),
        "lag, dead band, resolution": (lambda name: many(n, 6, lambda rng: mixed(rng, True, True), name), True),
        "committed robots without lag": (lambda name: many(n, 7, lambda rng: committed_draw(rng, 20.0, lag=False), name), False),
        "committed robots": (lambda name: many(n, 8, lambda rng: committed_draw(rng, 20.0), name), True),
        "changing goals": (lambda name: many(n, 9, lambda rng: common_draw(rng, 5.0, True, True), name, goals=changing), False),
        "wrong: nothing": (lambda name: many(n, 10, lambda rng: wrong(rng, ()), name), False),
        "wrong: jitter of a fifth": (lambda name: many(n, 10, lambda rng: wrong(rng, ()), name, jitter=0.2), False),
    }
    for what in WRONG:
        for scale in (0.8, 1.2):
            found[f"wrong: {what} is {scale} of declared"] = (
                lambda name, what=what, scale=scale: many(n, 10, lambda rng: wrong(rng, (what,), scale), name),
                False,
            )
    found["wrong: all by a fifth, and jitter"] = (lambda name: many(n, 11, wrong, name, jitter=0.2), False)
    for share, degrees in ((0.0, 1.0), (0.05, 0.0), (0.05, 1.0), (0.125, 0.0), (0.125, 1.0)):
        found[f"noise: {share:g} r, {degrees:g} deg"] = (
            lambda name, share=share, degrees=degrees: many(
                n, 12, lambda rng: noisy(rng, share, math.radians(degrees)), name, noise=noise_of
            ),
            False,
        )
    return found


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--runs", type=int, default=2000)
    parser.add_argument("--only", default="", help="how a study's name begins")
    parser.add_argument("--save", default="", help="write the rows of each study to this folder, as NumPy files")
    chosen = parser.parse_args()
    for name, (study, by_lag) in studies(chosen.runs).items():
        if name.startswith(chosen.only):
            rows = study(name)
            show(name, rows, by_lag)
            if chosen.save:
                np.save(f"{chosen.save}/{name.replace(' ', '_').replace(',', '').replace(':', '').replace('/', '_')}.npy", rows)


def mixed(rng, lag: bool, band: bool) -> Run:
    """Return a run of which 30 % have a goal within 1 m."""
    return common_draw(rng, 1.0 if rng.random() < 2.0 / 9.0 else 10.0, lag, band)


if __name__ == "__main__":
    main()
