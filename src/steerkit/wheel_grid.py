"""Wheel grid: from the motion that the ramps allow to wheel speeds that the drive can be told.

A wheel stands still below a smallest speed, and takes speeds in steps. Each wheel is given 0 or at least the smallest, in a whole
number of steps, so that the pair is near to the ramps' and turns nearly as they do. Within the dead band there is no ramp: a wheel
goes from 0 to the smallest speed at once, toward what the law wants. Metres per second. Derived; the weights were tuned.
"""

from __future__ import annotations

import math

from steerkit.compiled import kernel
from steerkit.platforms import ON_STEP, slowest_speed

CLOSE = ON_STEP
IN_BAND = 4.0  # weight of a wheel within the dead band
TURNING, PATH, SPOT = 2.0, 0.5, 4.0  # weights: wheels apart from each other; both from the path; the same on the spot
slowest_kernel = kernel(slowest_speed)  # of the speed in use, which may have been raised


@kernel
def choice_kernel(i: int, ramp: float, slowest: float, step: float, low: float, high: float) -> float:
    """Return the i-th of five speeds that a wheel may be given, NaN for none.

    `low`, `high`: what the speed of the other wheel leaves.
    """
    if abs(ramp) < slowest:
        given = -slowest if i == 0 else (0.0 if i == 1 else (slowest if i == 2 else math.nan))
        return given if abs(given - ramp) <= (slowest + step) * (1.0 + CLOSE) else math.nan
    aim = min(max(ramp, low), high) if i >= 3 else ramp
    if not step > 0.0:
        return aim if (i == 0 or i == 3) and abs(aim) >= slowest * (1.0 - CLOSE) else math.nan
    steps = aim / step
    near = math.floor(steps + CLOSE) if i == 0 or i == 3 else math.ceil(steps - CLOSE)
    given = step * near
    return given if i != 2 and abs(given) >= slowest * (1.0 - CLOSE) else math.nan


@kernel
def on_grid_kernel(
    v1: float,
    w1: float,
    v: float,
    w: float,
    slowest: float,
    step: float,
    top: float,
    turn: float,
    wheel: float,
    half_track: float,
) -> tuple[float, float, float, float]:
    """Return the motion to command, and the motion from which the ramps go on, for the ramps' (v1, w1) and the wanted (v, w).

    Not backwards, unless the ramps do. At rest only where rest is wanted, or for a period between two directions of the wheels.
    """
    if not slowest > 0.0:
        return v1, w1, v1, w1
    a, b = v1 - w1 * half_track, v1 + w1 * half_track
    want_a, want_b = v - w * half_track, v + w * half_track
    swapped = abs(b) < abs(a)  # the wheel within the dead band, or the slower, is chosen first
    if swapped:
        a, b, want_a, want_b = b, a, want_b, want_a
    band_a, band_b = abs(a) < slowest, abs(b) < slowest
    aim_a, aim_b = (want_a if band_a else a), (want_b if band_b else b)
    weight_a, weight_b = (IN_BAND if band_a else 1.0), (IN_BAND if band_b else 1.0)
    path = SPOT if v == 0.0 and w != 0.0 else PATH
    least = 2.0 * min(0.0, v1)
    most = 2.0 * (max(top, v1) if v > 0.0 else max(0.0, v1)) * (1.0 + CLOSE)
    apart = 2.0 * half_track * max(turn, abs(w1)) * (1.0 + CLOSE)
    fastest = max(wheel, abs(v1) + abs(w1) * half_track) * (1.0 + CLOSE)
    best, best_a, best_b = math.inf, 0.0, 0.0
    for i in range(3):
        given_a = choice_kernel(i, a, slowest, step, -fastest, fastest)
        if given_a == given_a and abs(given_a) <= fastest:
            low, high = max(least - given_a, given_a - apart, -fastest), min(most - given_a, given_a + apart, fastest)
            for j in range(5):
                given_b = choice_kernel(j, b, slowest, step, low, high)
                if given_b == given_b and low - CLOSE * slowest <= given_b <= high + CLOSE * slowest:
                    off_a, off_b = given_a - aim_a, given_b - aim_b
                    cost = weight_a * abs(off_a) + weight_b * abs(off_b) + TURNING * abs(off_a - off_b) + path * abs(off_a + off_b)
                    if cost < best:
                        best, best_a, best_b = cost, given_a, given_b
    ramp_a, ramp_b = a, b
    if band_b:
        ramp_b = best_b
    if band_a:
        ramp_a = best_a
        ramp_b = min(max(ramp_b, least - best_a, best_a - apart), most - best_a, best_a + apart)
    if swapped:
        best_a, best_b, ramp_a, ramp_b = best_b, best_a, ramp_b, ramp_a
    width = 2.0 * half_track
    return 0.5 * (best_a + best_b), (best_b - best_a) / width, 0.5 * (ramp_a + ramp_b), (ramp_b - ramp_a) / width
