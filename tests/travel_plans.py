"""Plans and drives that end at rest, to hold against the lower bound of travel time.

    python tests/travel_plans.py --plans 60000 --seed 1

says how near random feasible plans, and the drives of the schedule, come to the bound; none may beat it.
"""

from __future__ import annotations

import argparse
import math
from typing import NamedTuple

import numpy as np

from steerkit.compiled import kernel
from steerkit.kinematics import arc_kernel
from steerkit.limits import turn_first_kernel
from steerkit.schedule import schedule_kernel, stops_kernel
from steerkit.travel_time import DIRECTIONS, travel_time_kernel

NEAR = 1e-9  # rounding of a few dozen operations
PI = math.pi


class Limits(NamedTuple):
    top: float
    turn: float
    wheel: float
    half_track: float
    acceleration: float
    braking: float
    turn_acceleration: float
    period: float


@kernel
def allowed_kernel(v0, w0, v, w, limits):
    """Return the command nearest to (v, w) that may follow (v0, w0), turning first."""
    top, turn, wheel, half, a, b, al, T = limits
    low = max(0.0, v0 - b * T)
    most = min(turn, (wheel - low) / half)
    w = min(max(w, w0 - al * T), w0 + al * T)
    w = min(max(w, -most), most)
    v = min(max(v, low), v0 + a * T, top)
    return max(low, min(v, wheel - half * abs(w))), w


@kernel
def plan_kernel(v0, w0, limits, wanted):
    """Return end point, periods until rest and worst excess over a limit; rows of `wanted`: speed, turn rate, periods."""
    top, turn, wheel, half, a, b, al, T = limits
    x = y = heading = excess = 0.0
    n = stage = used = 0
    while True:
        while stage < len(wanted) and used >= wanted[stage, 2]:
            stage, used = stage + 1, 0
        over = stage >= len(wanted)
        v, w = allowed_kernel(v0, w0, 0.0 if over else wanted[stage, 0], 0.0 if over else wanted[stage, 1], limits)
        excess = max(excess, v - top, abs(w) - turn, v + half * abs(w) - wheel, -v)
        excess = max(excess, v - v0 - a * T, v0 - v - b * T, abs(w - w0) - al * T)
        if over and v < 1e-12 and abs(w) < 1e-12:
            return x, y, n, excess
        x, y, heading = arc_kernel(x, y, heading, v, w, T)
        v0, w0, n, used = v, w, n + 1, used + 1


def drawn(rng, low, high):
    """Return a log-uniform number, a tenth of them at the ends."""
    return float(low * (high / low) ** (rng.random() if rng.random() > 0.1 else rng.integers(2)))


def draw_limits(rng):
    top, turn, half = drawn(rng, 0.2, 2.0), drawn(rng, 0.5, 6.0), drawn(rng, 0.1, 0.4)
    wheel = max(top, turn * half) + min(top, turn * half) * rng.choice([0.0, 1.0, rng.random()])
    ramps = drawn(rng, 0.3, 3.0), drawn(rng, 0.3, 3.0), drawn(rng, 1.0, 20.0)
    return Limits(top, turn, float(wheel), half, *ramps, drawn(rng, 0.01, 0.2))


def draw_motion(rng, limits, spinning=False):
    """Return a motion within the limits, at rest in 60 %, or turning fast in all."""
    if not spinning and rng.random() < 0.6:
        return 0.0, 0.0
    v, w = limits.top * rng.random() * (rng.random() < 0.8), limits.turn * rng.uniform(-1.0, 1.0) * (rng.random() < 0.7)
    w = limits.turn * rng.choice([-1.0, 1.0]) * rng.uniform(0.3, 1.0) if spinning else w
    share = min(1.0, limits.wheel / (v + limits.half_track * abs(w) + 1e-300))
    return v * share, w * share


def draw_spin(rng):
    """Return limits with a small turn acceleration, and a motion that turns fast."""
    limits = draw_limits(rng)._replace(turn_acceleration=drawn(rng, 0.5, 5.0))
    return limits, draw_motion(rng, limits, spinning=True)


def draw_wanted(rng, limits):
    """Return what a plan wants: anything, full or nothing, turn then drive, straight."""
    style, length = rng.integers(4), rng.choice([1, 5, 20, 100])
    rows = []
    for left in range(int(rng.integers(1, 5)) - 1, -1, -1):
        v, w = (
            (rng.random(), rng.uniform(-1.0, 1.0)),
            (rng.integers(2), rng.integers(-1, 2)),
            (1.0, 0.0) if left == 0 else (rng.integers(2), 1.0),
            (1.0, 0.0),
        )[style]
        rows.append((v * limits.top, w * limits.turn, rng.integers(1, 1 + length)))
    return np.array(rows, dtype=float)


def draw_goal(rng, x, y, radius):
    """Return a goal anywhere within `radius` of the end, or beyond the end so far that the disc just holds it."""
    far = rng.random() < 0.5
    where = math.atan2(y, x) + rng.normal(0.0, 0.5) if far else rng.uniform(-PI, PI)
    off = radius * (1.0 - 1e-12) * (1.0 if far else math.sqrt(rng.random()))
    return x + off * math.cos(where), y + off * math.sin(where)


def ratio(took, bound):
    """Return a time over its bound, infinite where that is 0, and 1 for no time at all."""
    return took / bound if bound > 0.0 else (math.inf if took > 0.0 else 1.0)


def ratios_of_plans(count, seed, tight=True, spinning=False):
    """Return the times of random plans over the bound."""
    rng = np.random.default_rng(seed)
    found = np.ones(count)
    for i in range(count):
        limits = draw_limits(rng)
        radius, motion = drawn(rng, 0.03, 0.3), draw_motion(rng, limits)
        if spinning:
            limits, motion = draw_spin(rng)
        x, y, periods, excess = plan_kernel(*motion, limits, draw_wanted(rng, limits))
        assert excess < NEAR
        goal_x, goal_y = draw_goal(rng, x, y, radius)
        place = math.hypot(goal_x, goal_y), math.atan2(goal_y, goal_x)
        found[i] = ratio(periods * limits.period, travel_time_kernel(*place, *motion, radius, *limits, DIRECTIONS, tight))
    return found


@kernel
def drive_kernel(distance, error, v0, w0, radius, limits, depth, most):
    """Return how many periods the schedule takes from a motion to rest in the disc, -1 for more than `most`."""
    top, turn, wheel, half, a, b, al, T = limits
    x, y, heading, none = -distance, 0.0, -error, 0.0
    top, turn = min(top, wheel), min(turn, wheel / half)
    for i in range(most):
        rho, off = math.sqrt(x * x + y * y), math.atan2(-y, -x) - heading
        off = math.atan2(math.sin(off), math.cos(off))
        if v0 == 0.0 and w0 == 0.0 and rho <= radius:
            return i
        v, w = 0.0, 0.0
        if not stops_kernel(rho, off, v0, w0, (1.0 - 0.5 * depth) * radius, radius, b, al, T, none):
            r = (1.0 - depth) * radius
            v, w, _ = schedule_kernel(rho, off, v0, w0, none, radius, r, top, turn, a, b, al, T, T, none, half, False)
        v0, w0, _ = turn_first_kernel(v0, w0, v, w, top, turn, wheel, half, a * T, b * T, al * T)
        x, y, heading = arc_kernel(x, y, heading, v0, w0, T)
    return -1


def ratios_of_drives(count, seed):
    """Return the times of good drives from a fast turn over the bound: the best of three depths."""
    rng = np.random.default_rng(seed)
    found = []
    while len(found) < count:
        limits, motion = draw_spin(rng)
        radius, distance = drawn(rng, 0.03, 0.3), drawn(rng, 0.05, 4.0)
        error = rng.choice([rng.uniform(-PI, PI), rng.normal(0.0, 0.1)])
        took = [drive_kernel(distance, error, *motion, radius, limits, depth, 20_000) for depth in (0.05, 0.2, 0.4)]
        if max(took) >= 0:
            best = min(k for k in took if k >= 0)
            bound = travel_time_kernel(distance, error, *motion, radius, *limits, DIRECTIONS, True)
            found.append(ratio(best * limits.period, bound))
    return np.array(found)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--plans", type=int, default=60_000)
    parser.add_argument("--seed", type=int, default=1)
    told = parser.parse_args()
    for tight in (False, True):
        got = ratios_of_plans(told.plans, told.seed, tight)
        shares = ", ".join(f"{np.percentile(got, share):.4f}" for share in (1, 10, 25, 50))
        print(f"{told.plans} plans, tight={tight}: {np.sum(got < 1.0 - NEAR)} beat the bound, least ratio {got.min():.9f},")
        print(f"  1, 10, 25, 50 % of them below {shares}")
    for name, got in (
        ("plans", ratios_of_plans(told.plans, told.seed, spinning=True)),
        ("drives", ratios_of_drives(told.plans, told.seed)),
    ):
        shares = ", ".join(f"{np.percentile(got, share):.4f}" for share in (1, 10, 50, 95, 99))
        print(f"{told.plans} {name} from a fast turn: {np.sum(got < 1.0 - NEAR)} beat the bound, least ratio {got.min():.9f},")
        print(f"  1, 10, 50, 95, 99 % of them below {shares}")


if __name__ == "__main__":
    main()
