"""Measured: one number of the robot with its uncertainty and a sentence; the log that it comes from, checked.

A log is three arrays of equal length: time (s), command, response. A row may be absent or its response NaN; a command that is NaN
is still the one before. `command[i]` is what was sent at `time[i]` and held from then on.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steerkit.checks import shown

__all__ = ["Measured"]

Array = NDArray[np.float64]

COVER = 2.0  # standard errors in an uncertainty; tests/measuring_studies.py counts how often that covers the truth
LEAST_ROWS = 20
SLOWEST_LOG = 2.0  # s between rows
MANY = 0.2  # share of rows at which a command may change and still be called steps
WRONG_UNIT = 10.0  # response over command, or its inverse
TAKE = "give one row per sample: time in seconds, the command sent, the response seen"


class Measured(NamedTuple):
    """A number of the robot as a log tells it.

    Parameters
    ----------
    name : str
        As in Platform where it is a number of the platform.
    value : float
        In `unit`; NaN where the log cannot tell.
    uncertainty : float
        Half width: the truth lies within value ± uncertainty in at least 90 of 100 logs.
    unit : str
    sentence : str
        What it is, or why the log cannot tell and which test would.
    """

    name: str
    value: float
    uncertainty: float
    unit: str
    sentence: str

    @property
    def told(self) -> bool:
        """Whether the log tells this number."""
        return math.isfinite(self.value)

    def __str__(self) -> str:
        return self.sentence


def told(name: str, value: float, uncertainty: float, unit: str, more: str = "") -> Measured:
    """Return a number that the log tells."""
    words = name.replace("_", " ")
    sentence = f"{words} {value:.4g} ± {uncertainty:.2g} {unit}".rstrip() + (f"; {more}" if more else "")
    return Measured(name, value, uncertainty, unit, sentence)


def untold(name: str, unit: str, why: str, better: str) -> Measured:
    """Return a number that the log does not tell, with the reason and a test that would."""
    return Measured(name, math.nan, math.nan, unit, f"{name.replace('_', ' ')}: cannot tell, {why}; {better}")


class Log(NamedTuple):
    """A checked log."""

    time: Array  # s, growing
    command: Array  # without gaps
    response: Array  # finite or NaN
    seen: NDArray[np.bool_]  # rows with a response
    interval: float  # s, mean between rows, pauses left out


def column(name: str, values: ArrayLike) -> Array:
    """Return a column of a log as floats, shape (n,)."""
    try:
        one = np.asarray([] if np.iscomplexobj(values) else values, dtype=np.float64)
    except (TypeError, ValueError):
        one = np.empty(0)
    if np.asarray(values).dtype.kind not in "biufO" or (one.size == 0 and np.size(values) > 0):
        raise TypeError(f"{name} of {type(values).__name__} must be numbers, NaN where missing; {TAKE}")
    if one.ndim != 1:
        raise ValueError(f"{name} of shape {one.shape} does not fit; {TAKE}")
    return one


def columns(**given: ArrayLike) -> list[Array]:
    """Return the columns of a log, all of one length, time growing."""
    found = [column(name, values) for name, values in given.items()]
    sizes = {name: len(one) for name, one in zip(given, found, strict=True)}
    if len(set(sizes.values())) > 1:
        told = ", ".join(f"{name} of {size}" for name, size in sizes.items())
        raise ValueError(f"{told} rows must be of one length; {TAKE}")
    time = found[0]
    if len(time) < LEAST_ROWS:
        raise ValueError(f"time of {len(time)} rows must be >= {LEAST_ROWS} rows; log for longer or faster")
    bad = np.flatnonzero(~np.isfinite(time))
    if len(bad):
        raise ValueError(
            f"time[{bad[0]}]={time[bad[0]]:.6g} s must be finite ({len(bad)} such); leave out the row, or stamp it when it is taken"
        )
    bad = np.flatnonzero(np.diff(time) <= 0.0) + 1
    if len(bad):
        how = "stands still" if time[bad[0]] == time[bad[0] - 1] else "goes backwards"
        raise ValueError(
            f"time[{bad[0]}]={time[bad[0]]:.6g} s must be > time[{bad[0] - 1}]={time[bad[0] - 1]:.6g} s "
            f"({len(bad)} such, time {how}); stamp rows with a monotonic clock and sort them"
        )
    if usual_gap(time) > SLOWEST_LOG:
        raise ValueError(
            f"time has {usual_gap(time):.4g} s between rows, must be <= {SLOWEST_LOG:g} s; "
            "is it in milliseconds? give seconds, log faster"
        )
    return found


def check_seen(name: str, values: Array) -> NDArray[np.bool_]:
    """Return the rows that are not NaN; infinite ones are refused, and so are too few."""
    bad = np.flatnonzero(np.isinf(values))
    if len(bad):
        raise ValueError(
            f"{name}[{bad[0]}]={values[bad[0]]:.6g} must be finite or NaN ({len(bad)} such); give NaN where it is missing"
        )
    seen = ~np.isnan(values)
    if np.count_nonzero(seen) < LEAST_ROWS:
        raise ValueError(
            f"{name} has {np.count_nonzero(seen)} rows that are not NaN of {len(values)}, must be >= {LEAST_ROWS}; "
            "look at its column in the log"
        )
    return seen


def checked_log(time: ArrayLike, command: ArrayLike, response: ArrayLike) -> Log:
    """Return a log of which every row is usable; refuse one that no row of can be used."""
    t, c, y = columns(time=time, command=command, response=response)
    check_seen("command", c)
    seen = check_seen("response", y)
    last = np.maximum.accumulate(np.where(np.isnan(c), 0, np.arange(len(c))))
    c = c[last]
    first = int(np.argmax(~np.isnan(c)))
    return Log(t[first:], c[first:], y[first:], seen[first:], usual_gap(t))


def usual_gap(time: Array) -> float:
    gaps = np.diff(time)
    return float(np.mean(gaps[gaps <= 3.0 * np.median(gaps)]))


def edges_of(log: Log) -> NDArray[np.intp]:
    """Return the rows at which the command changes; refuse a log without a step, or of nothing but changes."""
    change = np.abs(np.diff(log.command)) > 1e-6 * np.max(np.abs(log.command))
    edges = np.flatnonzero(change) + 1
    if len(edges) == 0:
        raise ValueError(
            f"command={shown(log.command[0])} in all {len(log.command)} rows must have a step; "
            "log from standing, through the step, until the response is steady"
        )
    if len(edges) > max(4.0, MANY * len(log.command)):
        raise ValueError(
            f"command changes at {len(edges)} of {len(log.command)} rows, must be held between steps; "
            "send a step and hold it until the response is steady"
        )
    return edges


def check_stands(log: Log, first: int) -> None:
    """Refuse a response that moves before the first step of the command, which is sent at row `first`."""
    y = log.response[:first][log.seen[:first]]
    n = len(y) // 3
    if n < 4:
        return
    moved = abs(float(np.median(y[-n:])) - float(np.median(y[:n])))
    reach = float(np.nanquantile(log.response, 0.95) - np.nanquantile(log.response, 0.05))
    if moved > max(0.15 * reach, 6.0 * float(np.median(np.abs(y[:n] - np.median(y[:n]))))):
        raise ValueError(
            f"response moves by {moved:.3g} before the command does at {log.time[first]:.6g} s, must stand until then; "
            "stamp both with one clock, and log the command when it is sent, not when it is answered"
        )


def check_response(gain: float, error: float, top: float) -> None:
    """Refuse a response that never moves, has the wrong sign or another unit."""
    if abs(gain) < max(5.0 * error, 1e-3):
        raise ValueError(
            f"response moves by {abs(gain):.2g} of the command, up to {top:.4g}, must move; "
            "is the drive enabled, is it the right column, is the step above the smallest speed, does the log go on after it?"
        )
    if gain < 0.0:
        raise ValueError(
            f"response is {gain:.3g} times the command, must be of the same sign; "
            "wheels swapped, an encoder counting backwards, or turn rate counted clockwise"
        )
    if not 1.0 / WRONG_UNIT <= gain <= WRONG_UNIT:
        raise ValueError(
            f"response is {gain:.3g} times the command, must be within {1.0 / WRONG_UNIT:g} to {WRONG_UNIT:g}; "
            "give both in m/s, or both in rad/s (not mm/s, deg/s, rpm, counts or per cent)"
        )


def correlation(residual: Array) -> float:
    """Return by how much neighbouring residuals of one sign widen the error of a mean: sqrt((1 + r)/(1 - r)), at least 1."""
    r = residual - np.mean(residual)
    size = float(r @ r)
    one = min(0.98, float(r[1:] @ r[:-1]) / size) if size > 0.0 else 0.0
    return math.sqrt((1.0 + one) / (1.0 - one)) if one > 2.0 / math.sqrt(len(r)) else 1.0
