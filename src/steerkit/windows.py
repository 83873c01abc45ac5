"""Windows: which heading gains work at a constant speed, and the fastest speed at which one does.

The heading loop is turn_rate = clip(gain * error, +-ceiling). A gain works at a speed when it is high enough not to circle the goal
outside its capture disc, and low enough not to swing. SI units; gains in 1/s. Derived, unless a source is given.

With prediction the loop sees its error where the command takes effect, and behaves as if there were no delay and no lag.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from steerkit.checks import check_above_zero, rounded_up, shown
from steerkit.gain_limits import no_overshoot_gain
from steerkit.limits import held_stop_kernel
from steerkit.platforms import Platform

__all__ = ["Window", "no_ringing_gain", "orbit_radius", "window"]

CAPTURE_MARGIN = 1.1  # the orbit is kept this much smaller than the capture disc
CHORD = 0.8  # a step at constant speed is at most this share of the capture radius, so that no disc is stepped over
SHARES = 64  # turn rates at which swinging is judged, up to the ceiling
DELAYS = 2.0  # gain times delay; at 0.8 to 2 times the error of the delay a loop begins to swing (measured)
NOISE_SHARE = 0.1  # heading noise may move the turn rate by this share of its ceiling (standard deviation); chosen
NOISE_RADII = 8.0  # standard deviations of position that the capture radius must span


class Window(NamedTuple):
    """The gains that work at one constant speed, and the fastest speed at which any does.

    `low`, `high` 1/s; `ceiling` rad/s, the most that the heading law asks for; `margin`, orbit to capture disc;
    `fastest` m/s; `bound`, the number of the platform that keeps it from being faster.
    """

    low: float
    high: float
    ceiling: float
    margin: float
    fastest: float
    bound: str


def orbit_radius(speed: float, gain: float, ceiling: float = math.inf) -> float:
    """Return the radius of the circle about the goal that a constant speed and a gain end in.

    speed / min(ceiling, pi gain/2): on the circle the heading error is a right angle. Dead time leaves it as it is (derived).

    Parameters
    ----------
    speed : float, m/s
    gain : float, 1/s
    ceiling : float, rad/s

    Returns
    -------
    float, m
    """
    check_above_zero("gain", gain, "1/s", "give turn rate per heading error")
    check_above_zero("ceiling", min(ceiling, 1e9), "rad/s", "give the most that the heading law asks for")
    return speed / min(ceiling, math.pi * gain / 2.0)


def no_ringing_gain(platform: Platform, speed: float, ceiling: float, predict: bool = True) -> float:
    """Return the highest gain at which the heading does not swing at a constant speed, the turn acceleration counted.

    With prediction, T the period: from any turn rate w up to what the wheels leave of the ceiling, the fall by al T a step must
    not carry past the goal heading: e >= T w + X(w - al T), X the path of a held stop. e is asked/gain, and the wheels shrink what
    is asked to w along the curve. Without prediction: no overshoot of the linear loop, and gain <= al/w (derived).

    Parameters
    ----------
    platform : Platform
    speed : float, m/s
    ceiling : float, rad/s
    predict : bool

    Returns
    -------
    float, 1/s
    """
    asked = np.linspace(ceiling / SHARES, ceiling, SHARES)
    given = asked * np.minimum(1.0, platform.wheel_speed_limit / (speed + asked * platform.track_width / 2.0))
    al, period = platform.turn_acceleration, platform.period
    if not predict:
        linear = no_overshoot_gain(period, platform.dead_time, platform.motor_lag)
        return min(linear, al / float(np.max(given)))
    carried = np.array([held_stop_kernel(max(0.0, w - al * period), al, period) for w in given.tolist()])
    return float(1.0 / max(period, np.max((period * given + carried) / asked)))


def best_ceiling(platform: Platform, speed: float, predict: bool) -> float:
    """Return the turn-rate ceiling (rad/s) with the smallest orbit at a speed: a lower ceiling allows a higher gain."""

    def too_high(ceiling: float) -> bool:
        return ceiling > math.pi / 2.0 * no_ringing_gain(platform, speed, ceiling, predict)

    return bisected(too_high, platform.turn_rate_limit)


def bisected(fails: Callable[[float], bool], most: float) -> float:
    """Return the largest value up to `most` that does not fail, for a test that fails from some value on."""
    if not fails(most):
        return most
    low, high = 0.0, most
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if fails(middle) else (middle, high)
    return low


def stop_depth(capture_radius: float, position_noise: float) -> float:
    """Return how deep inside the disc a stop is aimed, as a share of its radius: four standard deviations, 0.1 to 0.5."""
    return min(0.5, max(0.1, 4.0 * position_noise / capture_radius))


def window(platform: Platform, capture_radius: float, speed: float | None = None, predict: bool = True) -> Window:
    """Return the gains that work at a constant speed (m/s), or at the fastest one that has any.

    `low`: on the final circle about the goal the disc is still reached, gain >= margin * 2 v/(pi r). `high`: no swinging. The
    window is empty (low > high) above `fastest`.

    Parameters
    ----------
    platform : Platform
    capture_radius : float, m
    speed : float, m/s, or None for the fastest workable
    predict : bool
        Whether the heading loop sees its error where the command takes effect.

    Returns
    -------
    Window
    """
    check_above_zero("capture_radius", capture_radius, "m", "give the disc about the goal to come to rest in")
    if speed is not None:
        check_above_zero("speed", speed, "m/s", "give the constant speed, or leave it out for the fastest workable")
    margin = orbit_margin(platform, capture_radius)
    most = speed_bounds(platform, capture_radius)
    bound = min(most, key=lambda name: most[name])
    fastest = fastest_not_circling(platform, capture_radius, most[bound], predict)
    if fastest < most[bound]:
        bound = swing_reason(platform, margin * fastest / capture_radius, predict)
    asked = fastest if speed is None else speed
    ceiling = best_ceiling(platform, asked, predict)
    low = margin * 2.0 * asked / (math.pi * capture_radius)
    high = no_ringing_gain(platform, asked, ceiling, predict)
    return Window(min(low, high) if speed is None else low, high, ceiling, margin, fastest, bound)


def orbit_margin(platform: Platform, capture_radius: float) -> float:
    """Return by how much the orbit is kept smaller than the capture disc."""
    return CAPTURE_MARGIN * 0.95 / (1.0 - stop_depth(capture_radius, platform.position_noise) / 2.0)


def speed_bounds(platform: Platform, capture_radius: float) -> dict[str, float]:
    """Return the speeds (m/s) above which no gain works, whatever the heading loop, by the number that sets each."""
    return {
        "speed_limit": platform.speed_limit,
        "wheel_speed_limit": platform.wheel_speed_limit,
        "period": CHORD * capture_radius / platform.period,
        "turn_rate_limit": capture_radius / orbit_margin(platform, capture_radius) * platform.turn_rate_limit,
    }


def circles(platform: Platform, capture_radius: float, speed: float, predict: bool) -> bool:
    """Say whether the goal is circled outside its disc even at the highest gain that does not swing."""
    reach = capture_radius / orbit_margin(platform, capture_radius)
    return speed > reach * math.pi / 2.0 * no_ringing_gain(platform, speed, speed / reach, predict)


def fastest_not_circling(platform: Platform, capture_radius: float, most: float, predict: bool) -> float:
    return bisected(lambda v: circles(platform, capture_radius, v, predict), most)


def swing_reason(platform: Platform, turn_rate: float, predict: bool) -> str:
    """Return which number keeps the gain from being high enough to turn at `turn_rate` (rad/s) without swinging."""
    gain = turn_rate * 2.0 / math.pi
    if predict:
        return "period" if gain > 0.99 / platform.period else "turn_acceleration"
    linear = no_overshoot_gain(platform.period, platform.dead_time, platform.motor_lag)
    if gain < 0.99 * linear:
        return "turn_acceleration"
    return "dead_time and motor_lag" if platform.dead_time + platform.motor_lag > platform.period else "period"


def chosen_gain(platform: Platform, found: Window) -> float:
    """Return the gain to drive with (1/s): the highest of the window, lower where noise or a long delay asks for it.

    Prediction takes the delay out of the loop as far as it is known: a gain of 2/(dead time + lag) bears an error of 30 % in it.
    """
    quiet = NOISE_SHARE * found.ceiling / platform.heading_noise if platform.heading_noise > 0.0 else math.inf
    delay = platform.dead_time + platform.motor_lag
    steady = DELAYS / delay if delay > 0.0 else math.inf
    return max(min(found.low, found.high), min(found.high, quiet, steady))


def checked_radius(platform: object, capture_radius: object) -> float:
    """Return the capture radius, refused where the platform's noise or its smallest wheel speed is too large for it."""
    if not isinstance(platform, Platform):
        raise TypeError(f"platform={platform!r} must be a Platform; build one from the robot's measured numbers")
    radius = check_above_zero("capture_radius", capture_radius, "m", "give the disc about the goal to come to rest in")
    least = NOISE_RADII * platform.position_noise
    if radius < least:
        raise ValueError(
            f"capture_radius={shown(radius, 'm')} must be >= {shown(rounded_up(least), 'm')}, eight standard deviations of "
            "position_noise; widen the disc or measure the pose better"
        )
    slowest = platform.slowest_wheel_speed
    least = slowest * platform.period / CHORD
    if radius < least:
        raise ValueError(
            f"capture_radius={shown(radius, 'm')} must be >= {shown(rounded_up(least), 'm')}, for in one period at its slowest "
            f"wheel speed, {shown(slowest, 'm/s')}, the robot passes over the disc; widen it, or shorten the period"
        )
    return radius
