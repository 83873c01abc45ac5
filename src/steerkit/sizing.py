"""Sizing: which heading gains work for a robot, and the fastest constant speed at which one does.

The heading loop is turn_rate = clip(gain * error, +-ceiling). A gain works at a speed when it is high enough not to circle the goal
outside its capture disc, and low enough not to swing. SI units; gains in 1/s. Derived, unless a source is given.

Dead time is counted in periods: delay = d + m, d whole, 0 <= m < 1. The command of step k-d-1 acts for m periods more, then that of
step k-d. With prediction the loop sees its error where the command takes effect, and behaves as if there were no delay and no lag.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from steerkit.checks import check_above_zero, check_not_negative
from steerkit.limits import held_stop_kernel
from steerkit.platforms import Platform

__all__ = ["Window", "no_overshoot_gain", "no_ringing_gain", "orbit_radius", "slowest_root", "stable_gain", "window"]

Array = NDArray[np.float64]

CAPTURE_MARGIN = 1.1  # the orbit is kept this much smaller than the capture disc
CHORD = 0.8  # a step at constant speed is at most this share of the capture radius, so that no disc is stepped over
SHARES = 64  # turn rates at which swinging is judged, up to the ceiling
DELAYS = 2.0  # gain times delay; at 0.8 to 2 times the error of the delay a loop begins to swing (measured)
NOISE_SHARE = 0.1  # heading noise may move the turn rate by this share of its ceiling (standard deviation); chosen
SHORT_LAG = 1e-4  # periods; a lag below this is none


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


def split_delay(dead_time: float, period: float) -> tuple[int, float]:
    """Return the dead time as whole periods and the fraction of one, (d, m)."""
    check_above_zero("period", period, "s", "give the control period")
    check_not_negative("dead_time", dead_time, "s", "give the time before a command acts")
    whole = math.floor(dead_time / period + 1e-12)
    return whole, max(0.0, dead_time / period - whole)


@functools.lru_cache(maxsize=64)
def no_overshoot_gain(period: float, dead_time: float = 0.0, motor_lag: float = 0.0) -> float:
    """Return the highest proportional gain at which the heading error does not change its sign.

    For the loop without prediction; with it, leave dead time and lag at 0. m = 0 is Erbe & Zhang 1989 (from memory).

    Parameters
    ----------
    period : float, s
    dead_time : float, s
    motor_lag : float, s

    Returns
    -------
    float, 1/s
    """
    d, m = split_delay(dead_time, period)
    if motor_lag > SHORT_LAG * period:
        return lagged_no_overshoot(d, m, motor_lag / period) / period
    if m == 0.0:
        return (math.exp(d * math.log(d / (d + 1.0))) if d else 1.0) / (d + 1.0) / period
    q, n = 1.0 - m, d + 1.0
    b = n * (1.0 - 2.0 * m) - 1.0
    s = math.sqrt(b * b + 4.0 * n * n * q * m)
    z = (b + s) / (2.0 * n * q) if b >= 0.0 else 2.0 * n * m / (s - b)
    return z ** (d + 1) * (1.0 - z) / (q * z + m) / period


def stable_gain(period: float, dead_time: float = 0.0, motor_lag: float = 0.0) -> float:
    """Return the proportional gain below which the heading loop is stable.

    For the loop without prediction; with it, leave dead time and lag at 0. m = 0 is Levin & May 1976 (from memory).

    Parameters
    ----------
    period : float, s
    dead_time : float, s
    motor_lag : float, s

    Returns
    -------
    float, 1/s
    """
    d, m = split_delay(dead_time, period)
    if motor_lag > SHORT_LAG * period:
        return lagged_stable(d, m, motor_lag / period) / period
    q = 1.0 - m
    if d == 0:
        return min(1.0 / m if m > 0.0 else math.inf, 2.0 / (1.0 - 2.0 * m) if m < 0.5 else math.inf) / period
    low, high = math.pi / (2 * d + 3), math.pi / (2 * d + 1)
    for _ in range(60):
        angle = 0.5 * (low + high)
        phase = (d + 1.5) * angle - math.pi / 2.0 - math.atan2(q * math.sin(angle), q * math.cos(angle) + m)
        low, high = (angle, high) if phase < 0.0 else (low, angle)
    return 2.0 * math.sin(angle / 2.0) / math.hypot(q * math.cos(angle) + m, q * math.sin(angle)) / period


def lagged_loop(d: int, m: float, mu: float) -> tuple[Array, Array]:
    """Return the open loop behind a lag of `mu` periods as polynomials in z, (denominator, numerator), highest power first.

    z^(d+1) (z-1)(z-p) and (q z + m)(z-p) - mu (c0 z + c1)(z-1); the closed loop is denominator + gain*period * numerator.
    """
    q, p = 1.0 - m, math.exp(-1.0 / mu) if mu > 0.0 else 0.0
    c0 = -math.expm1(-q / mu) if mu > 0.0 else 1.0
    c1 = 1.0 - p - c0
    numerator = np.polymul([q, m], [1.0, -p]) - mu * np.polymul([c0, c1], [1.0, -1.0])
    return np.concatenate([np.polymul([1.0, -1.0], [1.0, -p]), np.zeros(d + 1)]), numerator


def lagged_no_overshoot(d: int, m: float, mu: float) -> float:
    """Return max of z^(d+1) (1-z)(z-p)/N on p < z < 1: the largest gain*period that keeps a positive real root."""
    denominator, numerator = lagged_loop(d, m, mu)
    p = math.exp(-1.0 / mu)

    def gain(z: float) -> float:
        return float(-np.polyval(denominator, z) / np.polyval(numerator, z))

    low, high = p, 1.0
    golden = (math.sqrt(5.0) - 1.0) / 2.0
    for _ in range(90):
        left, right = high - golden * (high - low), low + golden * (high - low)
        low, high = (low, right) if gain(left) > gain(right) else (left, high)
    return gain(0.5 * (low + high))


def lagged_stable(d: int, m: float, mu: float) -> float:
    """Return the least gain*period at which a root of the loop crosses the unit circle."""
    denominator, numerator = lagged_loop(d, m, mu)

    def loop(angle: Array) -> NDArray[np.complex128]:
        z = np.exp(1j * angle)
        return np.asarray(np.polyval(numerator, z) / np.polyval(denominator, z))

    grid = np.linspace(1e-6, math.pi, 400 * (d + 3))
    side = loop(grid).imag
    crossings = np.flatnonzero(side[:-1] * side[1:] < 0.0)
    low, high = grid[crossings], grid[crossings + 1]
    for _ in range(60):
        middle = 0.5 * (low + high)
        same = np.sign(loop(middle).imag) == np.sign(loop(low).imag)
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    crossed = np.append(loop(0.5 * (low + high)).real, loop(np.array([math.pi])).real)
    return float(np.min(-1.0 / crossed[crossed < 0.0]))


def slowest_root(
    gain: float, integral_time: float, derivative_time: float, period: float, dead_time: float = 0.0, motor_lag: float = 0.0
) -> float:
    """Return the size of the largest root of the heading loop with P, PI or PID: below 1 it is stable.

    The controller is gain (1 + T/Ti 1/(z-1) + Td/T (z-1)/z), T the period. Used to refuse gains that swing for ever.

    Parameters
    ----------
    gain : float, 1/s
    integral_time : float, s
        Infinite for none.
    derivative_time : float, s
    period : float, s
    dead_time : float, s
    motor_lag : float, s

    Returns
    -------
    float, no unit
    """
    d, m = split_delay(dead_time, period)
    denominator, numerator = lagged_loop(d, m, motor_lag / period if motor_lag > SHORT_LAG * period else 0.0)
    share = period / integral_time
    control = np.polyadd(np.polyadd([1.0, -1.0, 0.0], [share, 0.0]), derivative_time / period * np.array([1.0, -2.0, 1.0]))
    closed = np.polyadd(np.polymul(denominator, [1.0, -1.0, 0.0]), gain * period * np.polymul(numerator, control))
    if share == 0.0:
        closed = np.polydiv(closed, [1.0, -1.0])[0]
    return float(np.max(np.abs(np.roots(closed))))


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
    margin = CAPTURE_MARGIN * 0.95 / (1.0 - stop_depth(capture_radius, platform.position_noise) / 2.0)
    reach = capture_radius / margin

    def circles(v: float) -> bool:
        return v > reach * math.pi / 2.0 * no_ringing_gain(platform, v, v / reach, predict)

    most = {
        "speed_limit": platform.speed_limit,
        "wheel_speed_limit": platform.wheel_speed_limit,
        "period": CHORD * capture_radius / platform.period,
        "turn_rate_limit": reach * platform.turn_rate_limit,
    }
    bound = min(most, key=lambda name: most[name])
    fastest = bisected(circles, most[bound])
    if fastest < most[bound]:
        bound = swing_reason(platform, fastest / reach, predict)
    asked = fastest if speed is None else speed
    ceiling = best_ceiling(platform, asked, predict)
    low = margin * 2.0 * asked / (math.pi * capture_radius)
    high = no_ringing_gain(platform, asked, ceiling, predict)
    return Window(min(low, high) if speed is None else low, high, ceiling, margin, fastest, bound)


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
