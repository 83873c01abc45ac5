"""The way ahead: the most that a robot can get ahead along a direction in a number of periods that end at rest.

Each is an upper bound: held against the way that is needed, it tells which times are too short (`travel_time`). Commands are held
for a period, so all is told in periods, and in metres and radians a period; a ramp is a row of one value for each period. Angles
count to the side to which the robot has to turn. Derived, unless a source is given.
"""

from __future__ import annotations

import math

from steerkit.compiled import kernel
from steerkit.kinematics import sinc_kernel

PI = math.pi
TURN = 2.0 * math.pi
PIECES = 48.0  # into which a long turn is cut
SHARED_PIECES = 24.0  # and a ramp, where speed and turn rate share the wheels

# speed now, its step up, its most, its step down; turn rate now, its step, its most; the most of the wheels
Limits = tuple[float, float, float, float, float, float, float, float]


@kernel
def ramp_kernel(periods: float, first: float, up: float, flat: float, down: float) -> tuple[float, float]:
    """Return where min(flat, first + (i+1) up, (periods - i) down) leaves its rise and where its fall begins (whole i)."""
    rise = float(math.floor(min((flat - first) / up, (periods * down - first - up) / (up + down) + 1.0)))
    rise = min(max(rise, 0.0), periods)
    return rise, min(max(rise, math.ceil(periods - flat / down)), periods)


@kernel
def ramp_sum_kernel(
    count: float, periods: float, rise: float, fall: float, first: float, up: float, flat: float, down: float
) -> float:
    """Return the sum of the first `count` values of that row."""
    n = min(count, rise)
    m = max(0.0, count - fall)
    return n * first + up * n * (n + 1.0) / 2.0 + flat * (count - n - m) + down * (m * (periods - fall) - m * (m - 1.0) / 2.0)


@kernel
def least_path_kernel(count: float, v0: float, brake: float) -> float:
    """Return the sum of the first `count` values of max(0, v0 - (i+1) brake)."""
    n = max(0.0, min(count, math.floor(v0 / brake)))
    return n * v0 - brake * n * (n + 1.0) / 2.0


@kernel
def cosine_kernel(start: float, end: float, rate: float) -> float:
    """Return the integral of the cosine of an angle that falls from `start` to `end` at `rate` a period."""
    return (start - end) / rate * math.cos(0.5 * (start + end)) * sinc_kernel(0.5 * (start - end)) if start > end else 0.0


@kernel
def cosines_kernel(start: float, rate: float, periods: float) -> tuple[float, float]:
    """Return the integral of the cosine over some periods, parts above and below zero, angle max(0, start - rate t)."""
    end = max(0.0, start - rate * periods)
    if not rate * periods > 1e-12:
        c = math.cos(end) * periods
        return max(0.0, c), max(0.0, -c)
    square = 0.5 * PI
    above = cosine_kernel(min(start, square), end, rate) + max(0.0, periods - start / rate)
    return above, -cosine_kernel(start, max(end, square), rate)


@kernel
def turned_kernel(count: float, periods: float, back: float, w: float, step: float, turn: float) -> float:
    """Return the most that can be turned toward a direction within `count` periods, of `periods` at the end of which all is still.

    `w` is the turn rate now, > 0 toward it the short way; `back` is how much longer the long way is. All in radians a period.
    """
    rise, fall = ramp_kernel(periods, w, step, turn, step)
    turned = ramp_sum_kernel(count, periods, rise, fall, w, step, turn, step)
    if w < 0.0:
        rise, fall = ramp_kernel(periods, -w, step, turn, step)
        turned = max(turned, ramp_sum_kernel(count, periods, rise, fall, -w, step, turn, step) - back)
    return max(0.0, turned)


@kernel
def most_ahead_kernel(angle: float, periods: float, limits: Limits) -> float:
    """Return a length (m) that the way along a direction, `angle` off the heading now, cannot pass in `periods` that end at rest.

    It is the sum over the periods of speed * cosine, the speed the most (the least, where the cosine is negative) that leads from
    the motion now to rest, the angle the least. Long turns are cut into pieces of more periods than one; within a piece the turned
    angle lies below its chord (below its first tangent, where the turn rate falls), the mean of products is at most the product of
    the means where one factor falls, else at most a quarter of the product of the ranges more (Gruess 1935, from memory).
    """
    v0, up, top, down, w, step, turn, _ = limits
    rise, fall = ramp_kernel(periods, v0, up, top, down)
    whole = ramp_sum_kernel(periods, periods, rise, fall, v0, up, top, down)
    _, slowing = ramp_kernel(periods, abs(w), step, turn, step)
    long = min(periods, angle / turn + min(turn / step, 2.0 * math.sqrt(angle / step)) + 2.0 * max(0.0, -w) / step)
    size = max(1.0, math.ceil(long / PIECES))
    back = 2.0 * (PI - angle)
    i = turned = gone = held = way = 0.0
    while i < periods and turned < angle:
        k = min(size, periods - i)
        next_turned = turned_kernel(i + k, periods, back, w, step, turn)
        next_gone = ramp_sum_kernel(i + k, periods, rise, fall, v0, up, top, down)
        next_held = least_path_kernel(i + k, v0, down)
        most, least = next_gone - gone, next_held - held
        if k == 1.0:
            above, below = cosines_kernel(angle - turned, next_turned - turned, 1.0)
            way += (above - below) * (most if above > below else least)
        else:
            rate = (next_turned - turned) / k if i + k <= slowing else min(turn, abs(w) + (i + k) * step, (periods - i) * step)
            above, below = cosines_kernel(angle - turned, rate, k)
            way += (most * above - least * below) / k
            if i < rise:
                v = min(v0 + (i + 1.0) * up, (periods - i - k + 1.0) * down)
                spread = max(0.0, math.cos(max(0.0, angle - turned - rate * k))) - max(0.0, math.cos(angle - turned))
                way += 0.25 * k * max(0.0, min(top, v0 + (i + k) * up) - v) * spread
        i, turned, gone, held = i + k, next_turned, next_gone, next_held
    return way + (whole - gone if i < periods else 0.0)


@kernel
def sine_kernel(start: float, end: float, moving: float) -> tuple[float, float]:
    """Return the integrals of cosine and sine over the time `moving` in which an angle falls evenly from `start` to `end`."""
    chord = moving * sinc_kernel(0.5 * (start - end))
    return chord * math.cos(0.5 * (start + end)), chord * math.sin(0.5 * (start + end))


@kernel
def shared_step_kernel(angle: float, rate: float, speed: float, span: float) -> tuple[float, float, float]:
    """Return angle, way along the direction and speed * sine after `span` periods; nobody drives while the direction is behind."""
    behind = (
        min(span, max(0.0, angle - 0.5 * PI) / rate) if angle > 0.5 * PI and rate > 0.0 else (span if angle > 0.5 * PI else 0.0)
    )
    start = max(0.0, angle - rate * behind)
    left = span - behind
    if not left > 0.0:
        return start, 0.0, 0.0
    moving = min(left, start / rate) if rate > 0.0 else left
    end = max(0.0, start - rate * moving) if rate * left < start else 0.0
    c, s = sine_kernel(start, end, moving)
    return end, speed * (c + left - moving), speed * s


@kernel
def shared_way_kernel(switch: float, angle: float, periods: float, limits: Limits, half_track: float) -> tuple[float, float, float]:
    """Return way, worth of turning and angle, of the drive at the full turn rate until `switch` and then at full speed.

    In the first part the speed is what the wheels leave, in the second the turn rate is. Worth: that of a radian at `switch`, the
    integral of speed * sine after it, less its price, half_track * cosine.
    """
    v0, up, top, down, w, step, turn, wheel = limits
    rise, fall = ramp_kernel(periods, v0, up, top, down)
    rise_w, fall_w = ramp_kernel(periods, abs(w), step, turn, step)
    even, uneven = max(rise, rise_w), min(fall, fall_w)
    size = max(1.0, math.ceil(max(even, periods - uneven) / SHARED_PIECES))
    i = way = worth = 0.0
    at = angle if switch <= 0.0 else 0.0
    while i < periods and not (angle == 0.0 and i >= switch):
        k = uneven - i if even <= i < uneven else min(size, (even if i < even else periods) - i)
        k = min(k, periods - i)
        speed = min(top, v0 + (i + k) * up, (periods - i) * down)
        rate = min(turn, abs(w) + (i + k) * step, (periods - i) * step)
        first = min(k, max(0.0, switch - i))
        if first > 0.0:
            angle, ahead, _ = shared_step_kernel(angle, rate, min(speed, wheel - half_track * rate), first)
            at = angle
            way += ahead
        if first < k:
            angle, ahead, gain = shared_step_kernel(angle, min(rate, (wheel - speed) / half_track), speed, k - first)
            way, worth = way + ahead, worth + gain
        i += k
    if i < periods:
        whole = ramp_sum_kernel(periods, periods, rise, fall, v0, up, top, down)
        way += whole - ramp_sum_kernel(i, periods, rise, fall, v0, up, top, down)
    return way, worth - half_track * math.cos(at), at


@kernel
def wheels_forbid_kernel(need: float, angle: float, periods: float, limits: Limits, half_track: float) -> bool:
    """Say whether the way along a direction cannot be `need` in `periods`, where turning takes from the speed of the wheels.

    Derived, by the maximum principle (Pontryagin 1962): with only speed, turn rate and their sum at the wheels limited, each by a
    bound that depends on time, the best drive turns at the full rate, v what is left, until the worth of turning falls to its
    price, and then drives at full speed, w what is left. The worth falls and the price rises with time, so there is one switch;
    the way gains at most worth - price a radian that is turned after a moment before it, so `way + (worth - price) * angle` is
    never less than the best: whichever moment is looked at, the answer is safe.
    """
    low, high = 0.0, min(periods, angle / limits[6] + min(limits[6] / limits[5], 2.0 * math.sqrt(angle / limits[5])))
    for trial in range(16):
        switch = 0.5 * (low + high) if trial > 0 else 0.0
        way, worth, left = shared_way_kernel(switch, angle, periods, limits, half_track)
        if way >= need:
            return False
        if (trial == 0 and worth <= 0.0) or (worth >= 0.0 and left <= 0.5 * PI and way + worth * left < need):
            return True
        if worth >= 0.0 or left > 0.5 * PI:
            low = switch
        else:
            high = switch
    return False


@kernel
def gap_kernel(
    below: float, least: float, most: float, next_least: float, next_most: float, slack: float
) -> tuple[float, float, float]:
    """Return the means of the cosine above and below zero and the least cosine, of the angle to the nearer end of a gap.

    The gap is a whole turn wide and begins at `below`. What has been turned lies between `least` and `most`, which move evenly to
    the next ones, or at most `slack` outside. The lesser of two even distances is concave: never below its chord.
    """
    start = min(least - below, below + TURN - most) - slack
    end = min(next_least - below, below + TURN - next_most) - slack
    if max(start, end) <= 0.0:
        return 1.0, 0.0, 1.0
    above, under = cosines_kernel(max(start, end), abs(start - end), 1.0)
    return above, under, math.cos(max(start, end))


@kernel
def apart_kernel(
    angle: float, least: float, most: float, next_least: float, next_most: float, slack: float
) -> tuple[float, float, float]:
    """Return the same for a direction at `angle` and whole turns from it: in the gaps where `least` begins and ends."""
    first, last = math.floor((least - angle) / TURN), math.floor((next_least - angle) / TURN)
    above, under, lowest = gap_kernel(angle + TURN * first, least, most, next_least, next_most, slack)
    if last != first:  # never in both at once
        more, less, c = gap_kernel(angle + TURN * last, least, most, next_least, next_most, slack)
        above, under, lowest = above + more - 1.0, under + less, min(lowest, c)
    return above, under, lowest


@kernel
def swing_speed_kernel(gained: float, braked: float, periods: float, limits: Limits, half_track: float) -> float:
    """Return the most speed after `gained` periods of ramp, `braked` gone; the turn rate, falling, leaves it to the wheels."""
    v0, up, top, down, w, step, _, wheel = limits
    return min(v0 + gained * up, top, (periods - braked) * down, wheel - half_track * max(0.0, w - gained * step))


@kernel
def piece_way_kernel(
    i: float, k: float, most: float, above: float, under: float, lowest: float, periods: float, limits: Limits, half_track: float
) -> float:
    """Return the way along a direction in `k` periods from `i` on: path at most `most`, cosine known by its means and its least.

    The mean of a product is at most the product of the means and a quarter of that of the ranges (Gruess 1935, from memory).
    """
    v0, _, _, down, w, step, _, wheel = limits
    most = min(most, k * (wheel - half_track * max(0.0, w - (i + 0.5 * (k + 1.0)) * step)))
    least = k * max(0.0, v0 - (i + k) * down)
    if k == 1.0:
        return (above - under) * (most if above > under else least)
    first = swing_speed_kernel(i + 1.0, i, periods, limits, half_track)
    last = swing_speed_kernel(i + k, i + k - 1.0, periods, limits, half_track)
    uneven = swing_speed_kernel(i + k, i, periods, limits, half_track) - min(first, last)
    return most * above - least * under + 0.25 * k * uneven * (1.0 - max(0.0, lowest))


@kernel
def swing_forbids_kernel(need: float, angle: float, periods: float, limits: Limits, half_track: float) -> bool:
    """Say whether the way along a direction cannot be `need` in `periods`, for a robot that cannot stop turning at once.

    What is turned lies between two rows: the turn rate falls by the full step from now on, or rises by it; both end at rest. The
    direction, `angle` off the heading to the side to which `w` > 0 turns, is as far from the heading as from the nearest angle
    between them, whole turns included. In a piece of k periods a row leaves its chord by at most step * floor(k^2/4)/2. From
    where the two hold the direction between them for good the way is that of the ramp.
    """
    v0, up, top, down, w, step, turn, _ = limits
    rise, fall = ramp_kernel(periods, v0, up, top, down)
    rise_least, fall_least = ramp_kernel(periods, -w, step, turn, step)
    rise_most, fall_most = ramp_kernel(periods, w, step, turn, step)
    ahead = ramp_sum_kernel(periods, periods, rise, fall, v0, up, top, down)
    enough = need + least_path_kernel(periods, v0, down)  # more than that can not be lost again
    size = max(1.0, math.ceil(min(periods, 2.0 * w / step, 2.0 * math.sqrt(PI / step) + TURN / turn) / PIECES))
    i = gone = way = least = most = 0.0
    while i < periods and most - least < TURN and way < enough and way + ahead >= need:
        if (i + 1.0) * step >= w and math.floor((most - angle) / TURN) > math.floor((least - angle) / TURN):
            break
        k = min(size, periods - i)
        slack = 0.5 * step * math.floor(0.25 * k * k)
        next_least = -ramp_sum_kernel(i + k, periods, rise_least, fall_least, -w, step, turn, step)
        next_most = ramp_sum_kernel(i + k, periods, rise_most, fall_most, w, step, turn, step)
        next_gone = ramp_sum_kernel(i + k, periods, rise, fall, v0, up, top, down)
        above, under, lowest = apart_kernel(angle, least, most, next_least, next_most, slack)
        way += piece_way_kernel(i, k, next_gone - gone, above, under, lowest, periods, limits, half_track)
        ahead -= next_gone - gone
        i, gone, least, most = i + k, next_gone, next_least, next_most
    return way + ahead < need


@kernel
def forbidden_kernel(stage: int, need: float, angle: float, periods: float, limits: Limits, half_track: float) -> bool:
    """Say whether the way along a direction cannot be `need` in `periods`; turning freely (0), at a price (1), too long (2)."""
    if stage == 2:
        return swing_forbids_kernel(need, angle, periods, limits, half_track)
    if stage == 1:
        return wheels_forbid_kernel(need, angle, periods, limits, half_track)
    return most_ahead_kernel(angle, periods, limits) < need
