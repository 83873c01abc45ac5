"""Slow tests: smallest wheel speed, resolution, wheel-speed limit; and a minute at rest. Derived, unless a source is named."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steerkit.angles import wrap
from steerkit.checks import check_not_negative
from steerkit.measured import (
    COVER,
    Array,
    Log,
    Measured,
    check_response,
    check_seen,
    checked_log,
    columns,
    correlation,
    told,
    untold,
)

__all__ = ["rest_noise", "smallest_wheel_speed", "wheel_speed_limit", "wheel_speed_resolution"]

STAIR_SHARE = 0.25  # a smallest wheel speed whose uncertainty is a larger share is not told
STEPS_SEEN = 4.0  # steps of the resolution that the response must span
COHERENT = 0.6  # share of the coherence that clean steps with this noise would have
SATURATED = 0.95  # of the command (times the gain at half of it)
NEAR_TOP = 0.9  # of the largest command
WIDEST = 0.5  # rad, of a heading at rest; more is in degrees
INDEPENDENT = 30.0  # samples of noise, of those at rest


def growing(log: Log, delay: float) -> tuple[Array, Array]:
    """Return command (delayed, as a size) and response of the rows until the command stops growing."""
    sign = math.copysign(1.0, float(log.command[np.argmax(np.abs(log.command))]))
    size = sign * log.command
    until = int(np.flatnonzero(size >= np.max(size) * (1.0 - 1e-9))[0])
    while until + 1 < len(size) and size[until + 1] >= size[until] * (1.0 - 1e-9):
        until += 1
    if np.max(np.maximum.accumulate(size[: until + 1]) - size[: until + 1]) > 0.1 * np.max(size):
        raise ValueError(
            "command falls before it is largest, must grow slowly from 0; "
            "send stairs or a ramp up from standing, one direction a log"
        )
    at = np.maximum(np.searchsorted(log.time, log.time - delay, side="right") - 1, 0)
    rows = np.flatnonzero(log.seen & (np.arange(len(size)) <= until))
    return size[at[rows]], sign * log.response[rows]


def split_costs(c: Array, y: Array) -> tuple[NDArray[np.intp], Array]:
    """Return the rows at which the wheels may have begun to move, and for each the squares left by 0 before, a line after."""
    places = np.flatnonzero(np.diff(c) > 0.0) + 1
    still = np.cumsum(y * y)
    n, sc, sy, scc, scy, syy = (np.cumsum(one[::-1])[::-1] for one in (np.ones(len(c)), c, y, c * c, c * y, y * y))
    vcc, vcy, vyy = scc - sc * sc / n, scy - sc * sy / n, syy - sy * sy / n
    slope = np.where(vcc > 1e-9 * scc, vcy / np.where(vcc > 1e-9 * scc, vcc, 1.0), 0.0)
    return places, (still[places - 1] + (vyy - slope * vcy)[places])


def smallest_wheel_speed(time: ArrayLike, command: ArrayLike, response: ArrayLike, delay: float = 0.0) -> Measured:
    """Return the wheel speed below which the wheel stands still, from a command that grows slowly from 0.

    The row at which the wheel begins to move is where 0 before it and a line after it leave the least squares; the answer lies
    between the command before and the command there, or as far around as squares within noise allow.

    Parameters
    ----------
    time : array, shape (n,), s
    command : array, shape (n,), m/s
        Stairs (better) or a ramp, one direction.
    response : array, shape (n,), m/s
    delay : float, s
        Of the response behind the command, from `speed_steps`; stairs held for a second hardly need it, a ramp does.

    Returns
    -------
    Measured
        The lowest speed that moves.

    Raises
    ------
    TypeError, ValueError
        A log that holds no such test, with what is wrong in it.
    """
    log = checked_log(time, command, response)
    late = check_not_negative("delay", delay, "s", "give the dead time and motor lag found by speed_steps")
    c, y = growing(log, late)
    check_moves(c, y)
    places, costs = split_costs(c, y)
    best = int(np.argmin(costs))
    noise = math.sqrt(costs[best] / len(y))
    left = np.where(np.arange(len(y)) < places[best], y, y - line_after(c, y, int(places[best])))
    near = places[costs <= costs[best] + (COVER * noise * correlation(left)) ** 2]
    low, high = float(c[near[0] - 1]), float(c[near[-1]])
    value, u = 0.5 * (low + high), 0.5 * (high - low)
    if near[0] == places[0]:
        return untold(
            "smallest_wheel_speed",
            "m/s",
            f"the wheel moves at {high:.3g} m/s, the least that was told or hidden in the noise",
            "begin with finer stairs, or leave it at 0",
        )
    if u > STAIR_SHARE * value:
        return untold(
            "smallest_wheel_speed",
            "m/s",
            f"it lies between {low:.3g} and {high:.3g} m/s",
            "take finer stairs, or hold each for longer",
        )
    return told("smallest_wheel_speed", value, u, "m/s", f"stands at {low:.4g}, moves at {high:.4g} m/s")


def line_after(c: Array, y: Array, first: int) -> Array:
    """Return the straight line in c through the rows from `first` on, at every row."""
    a, b = c[first:], y[first:]
    away = a - np.mean(a)
    slope = float(away @ b) / float(away @ away) if np.ptp(a) > 0.0 else 0.0
    out: Array = np.mean(b) + slope * (c - np.mean(a))
    return out


def check_moves(c: Array, y: Array) -> None:
    """Refuse a command without growth, and what `check_response` refuses, by the rows near the largest command."""
    top = float(np.max(c))
    if len(np.unique(c)) < 3:
        raise ValueError(
            f"command has {len(np.unique(c))} levels before it stops growing, must grow slowly from 0; "
            "send stairs or a ramp up from standing, one direction a log"
        )
    rows = c >= NEAR_TOP * top
    spread = 1.5 * float(np.median(np.abs(y[rows] - np.median(y[rows])))) / math.sqrt(np.count_nonzero(rows))
    check_response(float(np.median(y[rows])) / top, spread / top, top)


def noise_of(y: Array) -> float:
    """Return the standard deviation of what changes from row to row."""
    return 1.4826 * float(np.median(np.abs(np.diff(y)))) / math.sqrt(2.0)


def coherence(y: Array, per_step: Array) -> Array:
    """Return how far values are multiples of a common step, 0 to 1, for each number of steps per unit."""
    return np.array([abs(np.mean(np.exp(2j * math.pi * f * y))) for f in per_step])


def wheel_speed_resolution(time: ArrayLike, command: ArrayLike, response: ArrayLike) -> Measured:
    """Return the step in which the drive takes wheel speeds, where the log shows it.

    Steps show as coherence of the response at 1/step that the command has not (periodogram: Schuster 1898, from memory).

    Parameters
    ----------
    time : array, shape (n,), s
    command : array, shape (n,), m/s
        A ramp, or stairs much finer than the steps of the drive.
    response : array, shape (n,), m/s

    Returns
    -------
    Measured

    Raises
    ------
    TypeError, ValueError
        A log that holds no such test, with what is wrong in it.
    """
    log = checked_log(time, command, response)
    c, y = growing(log, 0.0)
    check_moves(c, y)
    noise = max(noise_of(y), 1e-4 * float(np.max(y)))
    reach = float(np.ptp(y))
    per_step = np.arange(STEPS_SEEN / reach, 1.0 / (4.0 * noise), 0.1 / reach)
    name, unit = "wheel_speed_resolution", "m/s"
    better = "send a finer ramp, take a sensor with less noise, or look it up in the drive's data sheet"
    if len(per_step) == 0:
        return untold(name, unit, f"noise of {noise:.2g} m/s hides it", better)
    seen = coherence(y, per_step)
    best = int(np.argmax(seen))
    f = float(per_step[best])
    gain = float(c @ y) / float(c @ c)
    clean = math.exp(-2.0 * (math.pi * noise * f) ** 2)
    if seen[best] < COHERENT * clean or coherence(gain * c, per_step[best : best + 1])[0] > 0.5 * seen[best]:
        return untold(name, unit, "no steps are seen that the command has not", better)
    k = np.round(y * f)
    size = float(k @ k)
    step = float(k @ y) / size
    return told(name, step, COVER * noise * correlation(y - k * step) / math.sqrt(size) + 1e-3 * step, unit)


def settled(log: Log, rows: NDArray[np.bool_]) -> Array:
    """Return the responses of the later half of each run of rows, as sizes."""
    ends = np.flatnonzero(np.diff(np.concatenate(([False], rows, [False])).astype(int)))
    kept = np.zeros(len(rows), dtype=bool)
    for first, last in zip(ends[::2], ends[1::2], strict=True):
        kept[(first + last) // 2 : last] = True
    kept &= log.seen
    out: Array = log.response[kept] * np.sign(log.command[kept])
    return out


def wheel_speed_limit(time: ArrayLike, command: ArrayLike, response: ArrayLike) -> Measured:
    """Return the speed at which the wheel saturates: told more than it can, what it does in the end.

    Parameters
    ----------
    time : array, shape (n,), s
    command : array, shape (n,), m/s
        More than the wheel can, held until it is steady; half of it before that shows the gain.
    response : array, shape (n,), m/s

    Returns
    -------
    Measured

    Raises
    ------
    TypeError, ValueError
        A log that holds no such test, with what is wrong in it.
    """
    log = checked_log(time, command, response)
    size = np.abs(log.command)
    top = float(np.max(size))
    y = settled(log, size >= NEAR_TOP * top) if top > 0.0 else np.empty(0)
    if len(y) < 8:
        raise ValueError(
            f"response has {len(y)} settled rows at the largest command, {top:.4g} m/s, must have >= 8; "
            "tell the wheel more than it can and hold it"
        )
    value = float(np.median(y))
    error = math.sqrt(math.pi / 2.0) * float(np.std(y)) * correlation(y) / math.sqrt(len(y))  # of a median
    check_response(value / top, error / top, top)
    low = settled(log, (size > 0.2 * top) & (size <= 0.6 * top))
    told_low = settled(log._replace(response=log.command), (size > 0.2 * top) & (size <= 0.6 * top))
    gain = float(np.median(low)) / float(np.mean(told_low)) if len(low) >= 8 and len(told_low) else 1.0
    name = "wheel_speed_limit"
    drift = abs(float(np.median(y[: len(y) // 2])) - float(np.median(y[len(y) // 2 :])))
    if value >= SATURATED * gain * NEAR_TOP * top and value >= SATURATED * gain * float(np.mean(size[size >= NEAR_TOP * top])):
        return untold(name, "m/s", f"the wheel follows up to {value:.3g} m/s, all that was told", "tell it more")
    if drift > max(6.0 * noise_of(y) / math.sqrt(len(y)), 0.01 * value):
        return untold(name, "m/s", f"at {value:.3g} m/s the speed still changes by {drift:.2g} m/s", "hold the command for longer")
    u = COVER * error + 0.5 * drift
    return told(name, value, u, "m/s", f"told up to {top:.3g} m/s")


def rest_noise(time: ArrayLike, x: ArrayLike, y: ArrayLike, heading: ArrayLike) -> tuple[Measured, Measured]:
    """Return position noise (of the noisier coordinate) and heading noise of a minute at rest.

    Parameters
    ----------
    time : array, shape (n,), s
    x, y : array, shape (n,), m
    heading : array, shape (n,), rad

    Returns
    -------
    (Measured, Measured)
        Standard deviations, m and rad.

    Raises
    ------
    TypeError, ValueError
        A log that holds no such test, with what is wrong in it.
    """
    _, *given = columns(time=time, x=x, y=y, heading=heading)
    names = ("x", "y", "heading")
    seen = [one[check_seen(name, one)] for name, one in zip(names, given, strict=True)]
    places = [spread("position_noise", one, "m") for one in seen[:2]]
    unsure = [one for one in places if not one.told]
    position = unsure[0] if unsure else max(places, key=lambda one: one.value)
    return position, spread("heading_noise", np.asarray(wrap(seen[2] - seen[2][0])), "rad")


def spread(name: str, y: Array, unit: str) -> Measured:
    """Return the standard deviation of y; untold where neighbours agree so much that few samples are independent."""
    value = float(np.std(y, ddof=1))
    if unit == "rad" and value > WIDEST:
        raise ValueError(
            f"heading varies by {value:.3g} rad at rest, must be <= {WIDEST:g} rad; is it in degrees? give radians, stand still"
        )
    independent = (len(y) - 1) / correlation(y) ** 2
    if value > 0.0 and independent < min(INDEPENDENT, 0.5 * len(y)):
        return untold(
            name,
            unit,
            f"it wanders ({value:.2g} {unit} altogether), about {max(1.0, independent):.0f} samples are independent",
            "stand still for longer, and make sure that nothing rolls",
        )
    return told(name, value, COVER * value / math.sqrt(2.0 * independent), unit)
