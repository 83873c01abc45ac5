"""Following: how far behind a goal that moves steadily straight on the robot settles, where its goal is the latest place told.

Behind such a goal the speed schedule is a motion along a line, solved here step by step without the controller. The place that
counts is the one from which a command acts, coasted; until then goal and robot go on, the goal by U (dead time + lag) in the mean.
Where the goal is told at every step and nothing stops, the speed that can be braked away before the disc equals that of the goal:

    behind = radius where braking ends + X(U; SHARE b) + U (dead time + lag)      X: held stop, `limits.held_stop_kernel`

A goal told now and then is behind itself besides, and leaps: the robot speeds up and slows down with it. A goal slower than what
the robot keeps in hand lets it stop inside the disc and start again when the goal leaves it. Then the mean over the cycle counts.
Metres, seconds. Derived.
"""

from __future__ import annotations

import math

from steerkit.checks import check_above_zero, check_not_negative, shown
from steerkit.compiled import kernel
from steerkit.limits import clip_kernel, held_stop_kernel
from steerkit.platforms import Platform
from steerkit.schedule import SHARE, entering_kernel, stops_kernel
from steerkit.settings import Settings, scheduled_settings
from steerkit.wheel_grid import on_grid_kernel, slowest_kernel
from steerkit.windows import checked_radius

__all__ = ["following_distance"]

SETTLED = 200.0  # tellings, and times to speed up and slow down, after which the motion repeats itself
CYCLES = 400.0  # over which the mean is taken at least


@kernel
def told_kernel(time: float, speed: float, every: float) -> float:
    """Return where the goal was at the last telling."""
    return speed * (time if every == 0.0 else every * math.floor(time / every + 1e-9))


@kernel
def waited_kernel(time: float, leave: float, speed: float, every: float) -> float:
    """Return a time (s) up to which the goal, as told, surely is not beyond `leave`."""
    if every == 0.0:
        return leave / speed
    return every * max(math.floor(leave / (speed * every)), math.floor(time / every + 1e-9) + 1.0)


@kernel
def next_speed_kernel(distance: float, v0: float, within: float, rest: float, s: Settings) -> tuple[float, float, bool]:
    """Return the next command, the speed from which the ramps go on, and whether to stop, for a goal `distance` straight ahead."""
    slowest = slowest_kernel(s.smallest_wheel_speed, s.wheel_speed_step)
    top = min(s.top_speed, s.wheel_speed)
    wanted = 0.0
    if not stops_kernel(distance, 0.0, v0, 0.0, within, rest, s.braking, s.turn_acceleration, s.period, slowest):
        wanted = max(slowest, entering_kernel(distance - s.aim_radius, 0.0, SHARE * s.braking, s.period, top))
    v = clip_kernel(wanted, max(0.0, v0 - s.braking * s.period), v0 + s.acceleration * s.period)
    turn = min(s.top_turn_rate, s.wheel_speed / s.half_track)
    v, _, v0, _ = on_grid_kernel(v, 0.0, wanted, 0.0, slowest, s.wheel_speed_step, top, turn, s.wheel_speed, s.half_track)
    return v, v0, wanted == 0.0


@kernel
def mean_behind_kernel(speed: float, every: float, s: Settings, settled: float, end: float) -> float:
    """Return how far the coasted place is behind the goal, mean of the whole cycles between the times `settled` and `end`.

    A cycle begins where the robot starts from rest; where it never rests, where the goal is told. At rest it stays until the
    goal, as told, is beyond `leave`.
    """
    period, slack, still = s.period, s.stay_radius - s.capture_radius, s.dead_time + 3.0 * s.motor_lag
    place, v0, k, area = -s.aim_radius - held_stop_kernel(speed, SHARE * s.braking, s.period), speed, 0.0, 0.0
    last, leave, stopped, stopping = -math.inf, -math.inf, 0.0, False
    first_start, last_start, area_first, area_last = -1.0, -1.0, 0.0, 0.0
    first_told, last_told, area_told, area_now = -1.0, -1.0, 0.0, 0.0
    while k * period < end:
        time = k * period
        goal = told_kernel(time, speed, every)
        if time >= settled and goal != last:
            if first_told < 0.0:
                first_told, area_told = time, area
            last_told, area_now = time, area
        v, ramp, stop = 0.0, 0.0, True
        if goal > leave:
            kept = stopping and goal - last <= slack
            within, rest = (s.capture_radius, s.capture_radius) if kept else (s.stop_radius, s.rest_radius)
            v, ramp, stop = next_speed_kernel(goal - place, v0, within, rest, s)
            if time >= settled and v0 == 0.0 and v > 0.0:
                if first_start < 0.0:
                    first_start, area_first = time, area
                last_start, area_last = time, area
            stopped = time if v > 0.0 or v0 > 0.0 else stopped
            if time - stopped >= still and v == 0.0:
                leave = max(place + s.capture_radius, min(goal, place + s.capture_radius) + slack)
        steps = 1.0
        if goal <= leave:
            steps = max(1.0, math.floor(waited_kernel(time, leave, speed, every) / period) - 1.0 - k)
        span = steps * period
        area += span * (speed * time - place) + 0.5 * (speed - v) * span * span
        place, v0, k, last, stopping = place + v * span, ramp, k + steps, goal, stop
    if last_start > first_start:
        return (area_last - area_first) / (last_start - first_start)
    return (area_now - area_told) / (last_told - first_told)


def following_distance(platform: Platform, capture_radius: float, speed: float, every: float = 0.0) -> float:
    """Return how far behind a goal that moves straight on at constant speed the robot settles, its goal the latest place told.

    Straight behind it, by the speed schedule. Less, by up to the capture radius, where it follows to the side of the goal's line,
    as after a bend: it steers no closer to a goal than into the disc. Noise counts by the room that it takes from the disc.

    Parameters
    ----------
    platform : Platform
    capture_radius : float, m
        That of the controller.
    speed : float, m/s
        Of the goal; less than the robot's fastest, or it never settles.
    every : float, s
        From one telling of the goal to the next; 0 where each step has its present place.

    Returns
    -------
    float, m
        From the robot to where the goal is then, told or not: the mean over the cycle of a motion that repeats itself (derived).

    Raises
    ------
    TypeError, ValueError
        Numbers with which no controller can be made, and a goal that outruns the robot.

    Examples
    --------
    >>> cart = Platform(radius=0.30, track_width=0.42, wheel_speed_limit=1.1, speed_limit=0.9, turn_rate_limit=2.0,
    ...                 acceleration=0.8, braking=1.2, turn_acceleration=5.0, period=0.05, dead_time=0.12)
    >>> round(following_distance(cart, 0.10, 0.5), 3)
    0.277
    """
    s = scheduled_settings(platform, checked_radius(platform, capture_radius), None)
    u = check_above_zero("speed", speed, "m/s", "give the speed of the goal")
    between = check_not_negative("every", every, "s", "give the time from one telling of the goal to the next, 0 for every step")
    if u >= platform.top_speed:
        raise ValueError(
            f"speed={shown(u, 'm/s')} must be < {shown(platform.top_speed, 'm/s')}, the robot's fastest straight speed, or the "
            "goal outruns it; slow the goal down, or raise the smaller of speed_limit and wheel_speed_limit"
        )
    change = u / s.acceleration + u / s.braking + 4.0 * s.period
    settled = SETTLED * (between + change)
    end = settled + CYCLES * (between + change + 0.1 * s.capture_radius / u)
    return mean_behind_kernel(u, between, s, settled, end) + u * (s.dead_time + s.motor_lag)
