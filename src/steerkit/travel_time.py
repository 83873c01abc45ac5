"""Travel time: a lower bound that no robot of a platform can beat, to judge a drive by.

Metres, seconds, radians; from a motion to rest inside a disc, with ramps, held commands and the wheel limit (derived).
"""

from __future__ import annotations

import math

from steerkit.checks import check_above_zero, check_not_negative, check_number
from steerkit.compiled import kernel
from steerkit.kinematics import arc_kernel, to_robot_kernel
from steerkit.platforms import Platform
from steerkit.shortest import steering_time_kernel
from steerkit.way_ahead import Limits, forbidden_kernel, ramp_kernel, ramp_sum_kernel

__all__ = ["least_travel_time"]

PI = math.pi
DIRECTIONS = 27  # looked at, from that of the goal to one at most at a right angle to it (or straight behind the robot)
SAFE = 1e-9  # of a period, and of a length: rounding never raises the bound


@kernel
def whole_way_kernel(periods: float, first: float, up: float, flat: float, down: float) -> float:
    rise, fall = ramp_kernel(periods, first, up, flat, down)
    return ramp_sum_kernel(periods, periods, rise, fall, first, up, flat, down)


@kernel
def fewest_periods_kernel(periods: float, need: float, first: float, up: float, flat: float, down: float) -> float:
    """Return the least number of periods, from `periods` on, in which a held ramp up and down passes `need`."""
    if whole_way_kernel(periods, first, up, flat, down) >= need:
        return periods
    low, step = periods, 1.0
    while whole_way_kernel(low + step, first, up, flat, down) < need:
        low += step
        step *= 2.0
    high = low + step
    while high - low > 1.0:
        middle = math.floor(0.5 * (low + high))
        if whole_way_kernel(middle, first, up, flat, down) < need:
            low = middle
        else:
            high = middle
    return high


@kernel
def past_direction_kernel(stage: int, periods: float, need: float, angle: float, limits: Limits, half_track: float) -> float:
    """Return `periods`, or more where too few for `need` along a direction: one more than a number that is excluded.

    Who is at rest in the disc may stay there, so with a number every smaller one is excluded.
    """
    if not forbidden_kernel(stage, need, angle, periods, limits, half_track):
        return periods
    low, step = periods, 1.0
    while forbidden_kernel(stage, need, angle, low + step, limits, half_track):
        low += step
        step *= 2.0
    high = low + step
    while high - low > 1.0:
        middle = math.floor(0.5 * (low + high))
        if forbidden_kernel(stage, need, angle, middle, limits, half_track):
            low = middle
        else:
            high = middle
    return high


@kernel
def past_directions_kernel(
    stage: int,
    periods: float,
    distance: float,
    radius: float,
    angle: float,
    first: float,
    last: float,
    directions: int,
    limits: Limits,
    half_track: float,
) -> float:
    """Return `periods`, or more where too few along one of the `directions` from `first` to `last`, off the goal's at `angle`."""
    for i in range(directions):
        beside = first + (last - first) * i / max(1, directions - 1)
        need = distance * math.cos(beside) - radius - SAFE * (distance + radius)
        periods = past_direction_kernel(stage, periods, need, angle + beside, limits, half_track)
    return periods


@kernel
def travel_time_kernel(
    distance: float,
    error: float,
    v0: float,
    w0: float,
    radius: float,
    top: float,
    turn: float,
    wheel: float,
    half_track: float,
    acceleration: float,
    braking: float,
    turn_acceleration: float,
    period: float,
    directions: int,
    tight: bool,
) -> float:
    """Return a time (s) that no forward drive beats, from the motion (v0 >= 0, w0) to rest in the disc; see `least_travel_time`.

    `error` is the goal's bearing off the heading (rad, left positive). Not `tight`: w0 counts as turning the right way and as
    stopped at will, and the price of turning only in the sum of path and turn.
    """
    up, down, step = acceleration * period, braking * period, turn_acceleration * period
    top = max(min(top, wheel), v0 - down)  # a limit that is broken already is come back to at full rate
    turn = max(min(turn, wheel / half_track), abs(w0) - step)
    wheel = max(wheel, max(0.0, v0 - down) + half_track * max(0.0, abs(w0) - step), top, half_track * turn)
    phi, w = abs(error), abs(w0)
    periods = max(0.0, math.ceil(max(v0 / down, w / step) - SAFE) - 1.0)
    if distance > radius:
        near, aside = (1.0 - SAFE) * distance - radius, max(0.0, phi - math.asin(radius / distance))
        periods = max(periods, math.ceil(steering_time_kernel(max(0.0, near), aside, top, turn) / period - SAFE))
        periods = fewest_periods_kernel(periods, near / period, v0, up, top, down)
        sums = v0 + half_track * w, up + half_track * step, wheel, down + half_track * step
        periods = fewest_periods_kernel(periods, (near + half_track * aside) / period, sums[0], sums[1], sums[2], sums[3])
    square = math.acos(radius / distance) if distance > radius and v0 <= down else PI  # beyond, what is needed is below zero
    widest = min(PI - phi, square)  # directions farther round are nearer to the heading and ask for less
    away = tight and w0 * error < 0.0
    limits = (v0 * period, up * period, top * period, down * period, w * period, step * period, turn * period, wheel * period)
    turned = (limits[0], limits[1], limits[2], limits[3], -limits[4] if away else limits[4], limits[5], limits[6], limits[7])
    for stage in range(2 if tight and wheel < top + half_track * turn else 1):
        periods = past_directions_kernel(stage, periods, distance, radius, phi, 0.0, widest, directions, turned, half_track)
    if tight and w > step:
        side = -phi if away else phi
        periods = past_directions_kernel(2, periods, distance, radius, side, -square, square, directions, limits, half_track)
    return periods * period


def least_travel_time(
    platform: Platform,
    pose: tuple[float, float, float],
    goal: tuple[float, float],
    capture_radius: float,
    motion: tuple[float, float] = (0.0, 0.0),
) -> float:
    """Return a time that no forward drive of this platform can beat, to rest with the centre within a disc about the goal.

    Bounded from below, rigorously: the dead time, in which `motion` goes on, then whole periods, commands held in each, each
    within one period's acceleration, braking and turn acceleration of the one before, within the limits of speed, turn rate and
    wheels, until speed and turn rate are zero. Not counted: motor lag, smallest wheel speed, resolution, noise, which cost more
    time. Not covered: driving backwards, which may be quicker, and passing a goal without stopping.

    Parameters
    ----------
    platform : Platform
    pose : (float, float, float), m, m, rad
    goal : (float, float), m, m
        In the same frame.
    capture_radius : float, m
    motion : (float, float), m/s, rad/s
        What is driven now and was sent last; speed >= 0.

    Returns
    -------
    float, s
        0 where the robot stands in the disc already.

    Notes
    -----
    Derived. Along any direction the end lies at most the sum of speed * cosine ahead, the speed the most that ramps from now and
    to rest allow, the angle between heading and direction the least; the end must lie goal distance * cosine - capture_radius
    ahead. The largest number of periods that a direction excludes counts, of 27 between the bearing and 90 degrees from it. Where
    full speed and full turn rate are too much for the wheels, the best sharing of the two replaces the most of each. A robot that
    turns is also held to what it cannot help but turn until its turn rate has fallen, in 27 directions to both sides. Never less
    than `steering_time` to the disc, and than the sum of path and turn over the wheel speed.

    Examples
    --------
    >>> cart = Platform(radius=0.30, track_width=0.42, wheel_speed_limit=1.1, speed_limit=0.9, turn_rate_limit=2.0,
    ...                 acceleration=0.8, braking=1.2, turn_acceleration=5.0, period=0.05, dead_time=0.12)
    >>> round(least_travel_time(cart, pose=(0.0, 0.0, 0.0), goal=(3.0, 0.0), capture_radius=0.1), 2)
    4.27
    """
    p = platform
    repair = "give x, y and heading"
    x, y, heading = (check_number(f"pose[{i}]", pose[i], unit, repair) for i, unit in enumerate(("m", "m", "rad")))
    goal_x, goal_y = (check_number(f"goal[{i}]", goal[i], "m", "give x and y") for i in range(2))
    r = check_above_zero("capture_radius", capture_radius, "m", "give the radius of the disc in which to stop")
    v0 = check_not_negative("motion[0]", motion[0], "m/s", "the bound is for drives forwards; ask again once it stands")
    w0 = check_number("motion[1]", motion[1], "rad/s", "give the turn rate")
    x, y, heading = arc_kernel(x, y, heading, v0, w0, p.dead_time)
    ahead, left = to_robot_kernel(x, y, heading, goal_x, goal_y)
    distance, error = math.sqrt(ahead * ahead + left * left), math.atan2(left, ahead)
    limits = (p.speed_limit, p.turn_rate_limit, p.wheel_speed_limit, p.track_width / 2.0)
    ramps = (p.acceleration, p.braking, p.turn_acceleration)
    time = travel_time_kernel(distance, error, v0, w0, r, *limits, *ramps, p.period, DIRECTIONS, True)
    return time + p.dead_time if time > 0.0 or v0 > 0.0 or w0 != 0.0 else 0.0
