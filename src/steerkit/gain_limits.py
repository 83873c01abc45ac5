"""The heading loop: the gains at which it begins to swing and to swing for ever, and how it answers a step of its target.

The loop is turn rate = gain * heading error, an integrator behind a dead time and a lag, commands held for a period. Seconds,
radians, gains in 1/s. Derived, unless a source is given.

Dead time is counted in periods: delay = d + m, d whole, 0 <= m < 1. The command of step k-d-1 acts for m periods more, then that of
step k-d.

Steps are answered in two ways. With a period: the controller's own arithmetic in one dimension, the wheels exact. Without: the
method of steps, each delay solved by collocation at Chebyshev points. The heading rests before; the derivative acts on it alone.
"""

from __future__ import annotations

import functools
import math
from typing import NamedTuple

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from steerkit.checks import check_above_zero, check_not_negative
from steerkit.compiled import kernel
from steerkit.limits import clip_kernel

__all__ = ["no_overshoot_gain", "slowest_root", "stable_gain"]

Array = NDArray[np.float64]

SHORT_LAG = 1e-4  # periods; a lag below this is none
BAND = 0.02  # of the step: settled
NODES = 20
LONGEST = 400_000  # periods; a loop that has not settled by then is told as never settling
MOST_PIECES = 100_000  # the same without a period
SHORT_DELAY = 1e-4  # of 1/gain: too short to be stepped through; its effect on a step is smaller still


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


def lagged_numerator(m: float, mu: float) -> tuple[float, float, float]:
    """Return (q z + m)(z-p) - mu (c0 z + c1)(z-1) as the factors of z^2, z and 1; a lag of `mu` periods, 0 for none."""
    q, p = 1.0 - m, math.exp(-1.0 / mu) if mu > 0.0 else 0.0
    c0 = -math.expm1(-q / mu) if mu > 0.0 else 1.0
    c1 = 1.0 - p - c0
    return q - mu * c0, m - q * p - mu * (c1 - c0), -m * p + mu * c1


def lagged_loop(d: int, m: float, mu: float) -> tuple[Array, Array]:
    """Return the open loop behind a lag of `mu` periods as polynomials in z, (denominator, numerator), highest power first.

    z^(d+1) (z-1)(z-p) and `lagged_numerator`; the closed loop is denominator + gain*period * numerator.
    """
    p = math.exp(-1.0 / mu) if mu > 0.0 else 0.0
    return np.array([1.0, -1.0 - p, p, *(d + 1) * [0.0]]), np.array(lagged_numerator(m, mu))


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


class Settled(NamedTuple):
    """`overshoot`, a share of the step; `time` s from which on the error stays within 2 % of it, infinite for never."""

    overshoot: float
    time: float


@kernel
def turned_kernel(rate: float, first: float, then: float, m: float, period: float, lag: float) -> tuple[float, float]:
    """Return the turn over a period, and the rate after it: wheels behind a lag, `first` held for m periods, then `then`."""
    turn = 0.0
    for part in range(2):
        command = first if part == 0 else then
        span = m * period if part == 0 else (1.0 - m) * period
        after = command + (rate - command) * math.exp(-span / lag) if lag > 0.0 else command
        turn += command * span + lag * (rate - after)
        rate = after
    return turn, rate


@kernel
def heading_errors_kernel(law: Array, true: Array, declared: Array, step: float, sent: Array, out: Array) -> None:
    """Write the heading error at each period after a step of the target.

    `law`: gain, integral time, derivative time, ceiling, most change a period, predict (0, 1), speed, wheel limit, half track.
    `true`, `declared`: period, whole periods of delay, rest of one, lag. `sent`: zeros, as many rows of command as wanted and
    delayed.
    """
    gain, integral_time, derivative_time, ceiling, change = law[0], law[1], law[2], law[3], law[4]
    predict, speed, wheel, half_track = law[5], law[6], law[7], law[8]
    period, d, m, lag = true[0], int(true[1]), true[2], true[3]
    told_d, told_m, told_lag = int(declared[1]), declared[2], declared[3]
    pad = max(d, told_d) + 1
    heading, rate, told_heading, told_rate, all_sent = 0.0, 0.0, 0.0, 0.0, 0.0
    integral, before, last = 0.0, math.nan, 0.0
    for k in range(len(out)):
        out[k] = step - heading
        error = out[k] - (all_sent - told_heading) if predict != 0.0 else out[k]
        falling = (before - error) / period if before == before else 0.0
        before = error
        asked = gain * (error + integral / integral_time - derivative_time * falling)
        given = clip_kernel(asked, -ceiling, ceiling)
        side = speed + abs(given) * half_track
        given = clip_kernel(given * wheel / side if side > wheel else given, last - change, last + change)
        if not (asked - given) * error > 0.0:
            integral += error * period
        last = given
        all_sent += given * period
        sent[k + pad] = given
        turn, rate = turned_kernel(rate, sent[k + pad - d - 1], sent[k + pad - d], m, period, lag)
        heading += turn
        turn, told_rate = turned_kernel(told_rate, sent[k + pad - told_d - 1], sent[k + pad - told_d], told_m, period, told_lag)
        told_heading += turn


def sampled_errors(
    law: tuple[float, ...], period: float, true: tuple[float, float], declared: tuple[float, float], step: float, periods: int
) -> Array:
    """Return the heading errors of `heading_errors_kernel`."""
    is_so, is_told = (
        np.array([period, *split_delay(dead_time, period), lag if lag > SHORT_LAG * period else 0.0])
        for dead_time, lag in (true, declared)
    )
    sent = np.zeros(periods + int(max(is_so[1], is_told[1])) + 2)
    out = np.empty(periods)
    heading_errors_kernel(np.array(law, dtype=float), is_so, is_told, float(step), sent, out)
    return out


def sampled_step(
    gain: float,
    period: float,
    dead_time: float,
    motor_lag: float,
    integral_time: float = math.inf,
    derivative_time: float = 0.0,
    predict: bool = False,
    step: float = 1.0,
    ceiling: float = math.inf,
    turn_acceleration: float = math.inf,
    wheels: tuple[float, float, float] = (0.0, math.inf, 0.0),
    true_dead_time: float | None = None,
) -> Settled:
    """Return overshoot and settling time of a stable sampled loop after a step of its target."""
    law = (gain, integral_time, derivative_time, ceiling, turn_acceleration * period, float(predict), *wheels)
    declared = (dead_time, motor_lag)
    true = (dead_time if true_dead_time is None else true_dead_time, motor_lag)
    ramp = ceiling / turn_acceleration if ceiling < math.inf else 0.0
    span = 10.0 / gain + 10.0 * (dead_time + true[0] + motor_lag + period) + 2.0 * step / ceiling + 2.0 * ramp
    span += 10.0 * integral_time if integral_time < math.inf else 0.0
    periods = math.ceil(min(span / period, LONGEST))
    while True:
        errors = sampled_errors(law, period, true, declared, step, periods) / step
        outside = np.flatnonzero(np.abs(errors) > BAND)
        last = int(outside[-1]) + 1 if len(outside) else 0
        if last < 0.6 * periods or periods >= LONGEST:
            break
        periods *= 2
    return Settled(max(0.0, -float(np.min(errors))), last * period if last < periods else math.inf)


@functools.cache
def collocation() -> tuple[Array, Array]:
    """Return Chebyshev points on [0, 1] and the matrix that integrates from 0 to each of them."""
    x = 0.5 - 0.5 * np.cos(math.pi * np.arange(NODES) / (NODES - 1))
    integrals = [chebyshev.chebint(np.eye(NODES)[i], lbnd=-1.0) for i in range(NODES)]
    values = np.stack([chebyshev.chebval(2.0 * x - 1.0, one) for one in integrals], axis=1) / 2.0
    return x, values @ np.linalg.inv(chebyshev.chebvander(2.0 * x - 1.0, NODES - 1))


def continuous_step(gain: float, integral_time: float, derivative_time: float, dead_time: float, motor_lag: float) -> Settled:
    """Return overshoot and settling time of a stable continuous loop after a step of its target."""
    span = 10.0 / gain + 10.0 * (dead_time + motor_lag) + (10.0 * integral_time if integral_time < math.inf else 0.0)
    while True:
        length, errors = continuous_errors(gain, integral_time, derivative_time, dead_time, motor_lag, span)
        outside = np.flatnonzero(np.max(np.abs(errors), axis=1) > BAND)
        last = int(outside[-1]) if len(outside) else 0
        if last < 0.6 * len(errors) or len(errors) >= MOST_PIECES:
            break
        span *= 2.0
    if last + 1 >= len(errors):
        return Settled(deepest(errors), math.inf)
    return Settled(deepest(errors), length * (last + leaving(errors[last])))


def deepest(errors: Array) -> float:
    """Return how far the error goes below zero, between the points too."""
    low = int(np.argmin(np.min(errors, axis=1)))
    found = [0.0]
    for piece in errors[max(0, low - 1) : low + 2]:
        curve = chebyshev.Chebyshev.fit(collocation()[0], piece, NODES - 1, domain=[0.0, 1.0])
        turns = curve.deriv().trim(1e-14).roots()
        inside = turns.real[(np.abs(turns.imag) < 1e-9) & (turns.real > 0.0) & (turns.real < 1.0)]
        found += [-float(np.min(piece)), *(-curve(inside)).tolist()]
    return max(found)


def leaving(piece: Array) -> float:
    """Return where on [0, 1] a piece of error comes within the band for the last time, bisected from the last point outside."""
    x = collocation()[0]
    curve = chebyshev.Chebyshev.fit(x, piece, NODES - 1, domain=[0.0, 1.0])
    fine = np.union1d(x, np.linspace(0.0, 1.0, 101))
    outside = np.flatnonzero(np.abs(curve(fine)) > BAND)
    i = int(outside[-1])
    if i + 1 == len(fine):
        return 1.0
    low, high = float(fine[i]), float(fine[i + 1])
    for _ in range(50):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if abs(curve(middle)) > BAND else (low, middle)
    return high


def continuous_errors(
    gain: float, integral_time: float, derivative_time: float, dead_time: float, motor_lag: float, span: float
) -> tuple[float, Array]:
    """Return the length of the pieces (s) and the error in each at the Chebyshev points, for a unit step of the target.

    In a piece of length H, J integrating over it: heading = h0 + H J w, integral = i0 + H J error,
    u = gain (error + integral/Ti - Td w); the wheels follow a = u a dead time ago: w = a, or w = w0 + H/lag J (a - w).
    """
    x, j = collocation()
    delayed = dead_time > SHORT_DELAY / gain
    fastest = gain + (5.0 / motor_lag if motor_lag > 0.0 else 0.0) + 1.0 / integral_time
    parts = min(100, math.ceil(dead_time * fastest / 5.0)) if delayed else 1
    length = dead_time / parts if delayed else 2.0 / fastest
    one, hj = np.ones(NODES), length * j
    feedback = gain * (hj + hj @ hj / integral_time + derivative_time * np.eye(NODES))  # u = u0 - feedback w
    behind = hj / motor_lag if motor_lag > 0.0 else np.zeros_like(j)
    own = np.zeros_like(j) if delayed else feedback
    matrix = np.eye(NODES) + (behind + behind @ own if motor_lag > 0.0 else own)
    solve = np.linalg.inv(matrix)
    heading, integral, rate = 0.0, 0.0, 0.0
    under_way = [np.zeros(NODES)] * parts
    pieces = max(4, math.ceil(min(span / length, MOST_PIECES)))
    errors = np.empty((pieces, NODES))
    for i in range(pieces):
        error = 1.0 - heading
        u0 = gain * (error + (integral + length * x * error) / integral_time) * one
        a = under_way[i % parts] if delayed else u0
        w = solve @ (rate + behind @ a if motor_lag > 0.0 else a)
        under_way[i % parts] = u0 - feedback @ w
        errors[i] = error - hj @ w
        integral += float((hj @ errors[i])[-1])
        heading, rate = 1.0 - float(errors[i, -1]), float(w[-1])
    return length, errors
