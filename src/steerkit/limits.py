"""Limits: what the wheels can do next, and how far it takes to stop.

Metres, seconds, radians. A command is held for one period, and differs from the one before by at most one period's worth of
acceleration, braking and turn acceleration. Where a limit of speed, turn rate or wheels binds, speed and turn rate shrink together:
the robot keeps to its curve and takes longer, and does not cut the corner. Formulas of the held stop: derived (sums of the held
speeds).
"""

from __future__ import annotations

import math

from steerkit.checks import check_above_zero, check_not_negative, check_number
from steerkit.compiled import kernel
from steerkit.platforms import Platform
from steerkit.signals import Causes, Motion

__all__ = ["held_speed_to_stop_within", "held_stopping_distance", "limit", "speed_to_stop_within", "stopping_distance"]

SPEED = int(Causes.SPEED_LIMIT)
TURN_RATE = int(Causes.TURN_RATE_LIMIT)
WHEELS = int(Causes.WHEEL_SPEED_LIMIT)
ACCELERATION = int(Causes.ACCELERATION_LIMIT)
BRAKING = int(Causes.BRAKING_LIMIT)
TURN_ACCELERATION = int(Causes.TURN_ACCELERATION_LIMIT)
ROUNDING = 1e-9  # of a limit; less than this does not count as bound


@kernel
def clip_kernel(value: float, low: float, high: float) -> float:
    return low if value < low else (high if value > high else value)


@kernel
def reach_kernel(speed: float, faster: float, slower: float) -> tuple[float, float]:
    """Return the least and the greatest speed reachable from `speed` within a period.

    `faster` and `slower` (m/s) are what the period gains and loses; a period that crosses zero brakes first, then accelerates.
    """
    v = abs(speed)
    back = v - slower if v >= slower else -faster * (1.0 - v / slower)
    return (back, v + faster) if speed >= 0.0 else (-v - faster, -back)


@kernel
def limit_kernel(
    v0: float,
    w0: float,
    v: float,
    w: float,
    top: float,
    reverse: float,
    turn: float,
    wheel: float,
    half_track: float,
    faster: float,
    slower: float,
    turning: float,
) -> tuple[float, float, int]:
    """Return the motion nearest to (v, w) that may follow (v0, w0), and which limits bound.

    In order: (v, w) shrunk along its curve into the limits of speed, turn rate and wheel speed; then the speed as near as a
    period allows, the turn rate, while it brakes, going with the speed really reached (while it gains speed it turns as asked);
    then, where the wheels still cannot do both, less of both as far as a period allows. (0, 0) brakes along the curve of
    (v0, w0). A limit that is broken already is approached at full rate.
    """
    bound = 0
    share = 1.0
    if v > top or v < -reverse:
        bound |= SPEED if v > top + ROUNDING or v < -reverse - ROUNDING else 0
        if v > 0.0 or reverse > 0.0:
            share = (top if v > 0.0 else reverse) / abs(v)
        else:
            v = 0.0  # forward only: what is left of a curve backwards is the turn
    if abs(w) * share > turn:
        share = turn / abs(w)
        bound |= TURN_RATE
    side = abs(v) + abs(w) * half_track
    if side * share > wheel * (1.0 + ROUNDING):
        share = wheel / side
        bound |= WHEELS

    low, high = reach_kernel(v0, faster, slower)
    v1 = clip_kernel(share * v, low, high)
    if abs(v1 - share * v) > ROUNDING:
        bound |= BRAKING if (v1 - share * v) * v0 > 0.0 else ACCELERATION
    if v * v1 > 0.0 and abs(v1) > abs(share * v):
        share = max(share, min(1.0, v1 / v))

    aim = clip_kernel(share * w, -turn, turn)
    if v == 0.0 and w == 0.0 and v0 != 0.0:
        aim = clip_kernel(w0 * max(0.0, v1 / v0), -turn, turn)
    w1 = clip_kernel(aim, w0 - turning, w0 + turning)
    if abs(w1 - aim) > ROUNDING:
        bound |= TURN_ACCELERATION

    side = abs(v1) + abs(w1) * half_track
    if side > wheel * (1.0 + ROUNDING):
        bound |= WHEELS
        least_v = max(0.0, low, -high)
        least_w = max(0.0, abs(w0) - turning)
        size_v = min(abs(v1), max(abs(v1) * wheel / side, least_v))
        size_w = min(abs(w1), max((wheel - size_v) / half_track, least_w))
        size_v = min(size_v, max(wheel - size_w * half_track, least_v))
        v1 = math.copysign(size_v, v1)
        w1 = math.copysign(size_w, w1)
    return v1, w1, bound


@kernel
def turn_first_kernel(
    v0: float,
    w0: float,
    v: float,
    w: float,
    top: float,
    turn: float,
    wheel: float,
    half_track: float,
    faster: float,
    slower: float,
    turning: float,
) -> tuple[float, float, int]:
    """Return the motion that may follow (v0, w0) and turns as asked, its speed what the wheels then leave; which limits bound.

    Only the speed that a period cannot take away goes before the turn. Forwards only. A limit that is broken already is
    approached at full rate.
    """
    bound = 0
    low, high = reach_kernel(v0, faster, slower)
    least_v = max(0.0, low, -high)
    least_w = max(0.0, abs(w0) - turning)
    w1 = clip_kernel(w, w0 - turning, w0 + turning)
    if abs(w1 - w) > ROUNDING:
        bound |= TURN_ACCELERATION
    most = max(least_w, min(turn, (wheel - least_v) / half_track))
    if abs(w1) > most:
        bound |= TURN_RATE if most == turn else WHEELS
        w1 = clip_kernel(w1, -most, most)
    aim = clip_kernel(v, 0.0, top)
    v1 = clip_kernel(aim, low, high)
    if abs(v1 - v) > ROUNDING:
        bound |= BRAKING if v1 > aim else (ACCELERATION if v1 < aim else SPEED)
    room = max(least_v, wheel - abs(w1) * half_track)
    if abs(v1) > room:
        bound |= WHEELS if abs(v1) > room * (1.0 + ROUNDING) else 0
        v1 = clip_kernel(v1, -room, room)
    return v1, w1, bound


@kernel
def held_stop_kernel(speed: float, braking: float, period: float) -> float:
    """Return the path (m) of a speed held for a period, then reduced by braking*period each period until it is zero."""
    step = braking * period
    n = math.floor(speed / step)
    return period * (speed * (n + 1.0) - step * n * (n + 1.0) / 2.0)


@kernel
def held_speed_kernel(distance: float, braking: float, period: float, top: float) -> float:
    """Return the largest speed up to `top` that, held for a period, can still be stopped within `distance`."""
    if not distance > 0.0:
        return 0.0
    step = braking * period
    u = distance / (step * period)
    if u > 1e15:
        return top
    n = math.floor((math.sqrt(1.0 + 8.0 * u) - 1.0) / 2.0)
    return min(top, (n + (u - n * (n + 1.0) / 2.0) / (n + 1.0)) * step)


def limit(platform: Platform, before: tuple[float, float], wanted: tuple[float, float]) -> tuple[Motion, Causes]:
    """Return the motion nearest to `wanted` that the robot can be given after `before`, and which limits bound.

    Parameters
    ----------
    platform : Platform
    before, wanted : (float, float), m/s, rad/s

    Returns
    -------
    (Motion, Causes)
        On the curve of `wanted` where its limits allow. Each component differs from `before` by at most a period's worth.

    Examples
    --------
    >>> cart = Platform(radius=0.3, track_width=0.4, wheel_speed_limit=1.0, speed_limit=1.0, turn_rate_limit=2.0,
    ...                 acceleration=20.0, braking=20.0, turn_acceleration=100.0, period=0.05, dead_time=0.1)
    >>> motion, causes = limit(cart, (0.9, 0.0), (1.0, 2.0))
    >>> round(motion.speed, 6), round(motion.turn_rate, 6), causes
    (0.714286, 1.428571, <Causes.WHEEL_SPEED_LIMIT: 4>)
    """
    p = platform
    v, w, bound = limit_kernel(
        check_number("before[0]", before[0], "m/s", "give the speed of the command before"),
        check_number("before[1]", before[1], "rad/s", "give the turn rate of the command before"),
        check_number("wanted[0]", wanted[0], "m/s", "give the speed that is wanted"),
        check_number("wanted[1]", wanted[1], "rad/s", "give the turn rate that is wanted"),
        p.speed_limit,
        p.reverse_speed_limit,
        p.turn_rate_limit,
        p.wheel_speed_limit,
        p.track_width / 2.0,
        p.acceleration * p.period,
        p.braking * p.period,
        p.turn_acceleration * p.period,
    )
    return Motion(v, w), Causes(bound)


def stopping_distance(speed: float, braking: float, reaction: float = 0.0) -> float:
    """Return how far it takes to stop: the reaction time at full speed, then steady braking, v t + v^2/(2 b).

    Parameters
    ----------
    speed : float, m/s
    braking : float, m/s^2
    reaction : float, s
        Dead time plus one period for a robot that decides once a period.

    Returns
    -------
    float, m

    References
    ----------
    AASHTO, A Policy on Geometric Design of Highways and Streets, 2011, section 3.2.2 (from memory).
    """
    b = check_above_zero("braking", braking, "m/s^2", "give the steady deceleration of a full stop")
    t = check_not_negative("reaction", reaction, "s", "give the time before the brakes act")
    v = check_not_negative("speed", speed, "m/s", "give its size")
    return v * t + v * v / (2.0 * b)


def speed_to_stop_within(distance: float, braking: float, reaction: float = 0.0) -> float:
    """Return the speed whose `stopping_distance` is `distance`: its exact inverse, 0 for no distance.

    The well-known sqrt(2 b d) leaves the reaction out, and overruns by v T/2 in sampled time.

    Parameters
    ----------
    distance : float, m
    braking : float, m/s^2
    reaction : float, s

    Returns
    -------
    float, m/s
        -b t + sqrt(b^2 t^2 + 2 b d), written without its cancellation (derived).
    """
    b = check_above_zero("braking", braking, "m/s^2", "give the steady deceleration of a full stop")
    t = check_not_negative("reaction", reaction, "s", "give the time before the brakes act")
    d = max(0.0, float(distance))
    if d == math.inf:
        return math.inf
    return 2.0 * b * d / (b * t + math.sqrt(b * b * t * t + 2.0 * b * d)) if d > 0.0 else 0.0


def held_stopping_distance(speed: float, braking: float, period: float) -> float:
    """Return the path of a command held for a period, then ramped down by braking * period each period (derived).

    Parameters
    ----------
    speed : float, m/s, >= 0
    braking : float, m/s^2
    period : float, s

    Returns
    -------
    float, m
    """
    b = check_above_zero("braking", braking, "m/s^2", "give the steady deceleration of a full stop")
    t = check_above_zero("period", period, "s", "give the control period")
    return held_stop_kernel(check_not_negative("speed", speed, "m/s", "give its size"), b, t)


def held_speed_to_stop_within(distance: float, braking: float, period: float) -> float:
    """Return the largest command whose `held_stopping_distance` is at most `distance`: its exact inverse (derived).

    Parameters
    ----------
    distance : float, m
    braking : float, m/s^2
    period : float, s

    Returns
    -------
    float, m/s
    """
    b = check_above_zero("braking", braking, "m/s^2", "give the steady deceleration of a full stop")
    t = check_above_zero("period", period, "s", "give the control period")
    return held_speed_kernel(float(distance), b, t, math.inf)
