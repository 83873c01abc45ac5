"""Step fit: the model of a drive's step response, and its least squares.

Model: the command, times a gain, is delayed by the dead time; a set-point follows it, steeper than neither a while its size grows
nor b while it falls; the wheels follow the set-point with a first-order lag tau_m. On a piece of slope g of the set-point u

    y1 = u1 - g tau_m + (y0 - u0 + g tau_m) e^(-h/tau_m)                                   (derived: y' = (u - y)/tau_m)

Fitted by least squares (Levenberg 1944, Marquardt 1963) with Huber's weights (1964), all from memory, in 1/a and 1/b, so that no
ramp and no lag are the points 0 of one model and the fit chooses.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from steerkit.measured import Array, Log, check_stands, correlation, edges_of

GAP = 1.75  # a step whose row may be missing (gap before it, in intervals) is left out
HUBER = 1.345  # scales; 95 % efficient on normal noise (Huber 1964, from memory)
EDGE = 0.05  # intervals: the least lag and ramp of the fit, which keeps its slopes finite
UNSEEN = 3.0  # intervals: a lag or ramp below this has the uncertainty of one of this length; at 0 it cannot be told from dead time
DEAD, LAG, UP, DOWN, GAIN, OFFSET = range(6)


def ramps(u: float, target: float, up: float, down: float) -> list[tuple[float, float]]:
    """Return (where to, s per unit) of the ramps from u to the target: down towards 0, up away from it."""
    if u * target < 0.0:
        return [(0.0, down), (target, up)]
    return [(target, down if abs(target) < abs(u) else up)]


def set_point(starts: Array, levels: Array, up: float, down: float) -> tuple[Array, Array]:
    """Return the corners (time, value) of a set-point that ramps to levels[j + 1] from starts[j] on."""
    u = float(levels[0])
    times, values = [float(starts[0])], [u]
    for j, target in enumerate(levels[1:].tolist()):
        now = float(starts[j])
        end = float(starts[j + 1]) if j + 1 < len(starts) else math.inf
        for goal, pace in ramps(u, target, up, down):
            span = abs(goal - u) * pace
            if now + span > end:
                u += (goal - u) * (end - now) / span
                now = end
            else:
                now, u = now + span, goal
            times.append(now)
            values.append(u)
            if now == end:
                break
        if now < end < math.inf:
            times.append(end)
            values.append(u)
    return np.array(times), np.array(values)


def lagged(time: Array, corners: Array, values: Array, lag: float) -> Array:
    """Return the response at `time` of wheels that follow a set-point given by its corners; at rest before the first."""
    span = np.diff(corners, append=math.inf)
    slope = np.where(span > 0.0, np.diff(values, append=values[-1]) / np.where(span > 0.0, span, 1.0), 0.0)
    place = np.searchsorted(corners, time, side="right") - 1
    i = np.maximum(place, 0)
    h = np.where(place < 0, 0.0, time - corners[i])
    u = values[i] + slope[i] * h
    if lag <= 0.0:
        return np.asarray(np.where(place < 0, values[0], u))
    behind = np.zeros(len(corners))  # y - u + g tau_m at each corner, that is how far the lag has not settled
    decays = np.exp(-span / lag)
    y = float(values[0])
    for k in range(len(corners)):
        behind[k] = y - values[k] + slope[k] * lag
        if span[k] > 0.0 and k + 1 < len(corners):
            y = values[k + 1] - slope[k] * lag + behind[k] * decays[k]
    return np.asarray(np.where(place < 0, values[0], u - slope[i] * lag + behind[i] * np.exp(-h / lag)))


def model(x: Array, time: Array, starts: Array, levels: Array) -> Array:
    """Return the response of the model at `time`."""
    corners, values = set_point(starts + x[DEAD], x[GAIN] * levels, x[UP], x[DOWN])
    out: Array = x[OFFSET] + lagged(time, corners, values, x[LAG])
    return out


class Steps(NamedTuple):
    """The rows that are fitted, and the steps in them."""

    time: Array
    response: Array
    starts: Array  # s, when each step was sent
    levels: Array  # commands, one more than steps
    interval: float
    least: Array  # smallest parameters
    small: Array  # steps of the parameters for slopes


def usable(log: Log, edges: NDArray[np.intp]) -> NDArray[np.bool_]:
    """Return the rows to fit: not those after a step whose own row may be missing, unless that is so of most starts or stops."""
    sure = log.time[edges] - log.time[edges - 1] <= GAP * log.interval
    rising = np.abs(log.command[edges]) > np.abs(log.command[edges - 1])
    for kind in (rising, ~rising):
        if 2 * np.count_nonzero(sure & kind) < np.count_nonzero(kind):
            sure = sure | kind
    keep = log.seen.copy()
    for first, last, good in zip(edges, [*edges[1:], len(log.time)], sure, strict=True):
        keep[first:last] &= bool(good)
    return keep


def steps_of(log: Log) -> Steps:
    edges = edges_of(log)
    check_stands(log, int(edges[0]))
    keep = usable(log, edges)
    levels = np.concatenate((log.command[:1], log.command[edges]))
    pace = log.interval / float(np.max(np.abs(np.diff(levels))))
    least = np.array([-math.inf, EDGE * log.interval, EDGE * pace, EDGE * pace, -math.inf, -math.inf])
    small = np.array([1e-3 * log.interval, 1e-3 * log.interval, 1e-3 * pace, 1e-3 * pace, 1e-6, 1.0])
    return Steps(log.time[keep], log.response[keep], log.time[edges], levels, log.interval, least, small)


def plateaus(s: Steps) -> tuple[float, float, float]:
    """Return gain, its error and offset from the last third of each hold."""
    ends = np.append(s.starts, s.time[-1] + s.interval)
    begins = np.insert(s.starts, 0, s.time[0])
    held, seen, spread = [], [], []
    for level, begin, end in zip(s.levels, begins, ends, strict=True):
        rows = s.response[(s.time >= end - (end - begin) / 3.0) & (s.time < end)]
        if len(rows):
            held.append(level)
            seen.append(float(np.median(rows)))
            spread.append(1.5 * float(np.median(np.abs(rows - seen[-1]))) / math.sqrt(len(rows)))
    c, y = np.array(held), np.array(seen)
    if len(c) < 2 or np.ptp(c) == 0.0:
        raise ValueError(
            f"response has rows at {len(set(held))} level of the command, must have rows before and after a step; "
            "log from standing, through the step, until the response is steady"
        )
    away = c - np.mean(c)
    size = float(away @ away)
    gain = float(away @ y) / size
    return gain, float(np.max(spread)) / math.sqrt(size), float(np.mean(y) - gain * np.mean(c))


def crossing(s: Steps, gain: float, offset: float, rising: bool) -> tuple[float, float, float] | None:
    """Return the size of the starts (stops) and when 20 % and 80 % of them are made, by the median of all in bins."""
    ends = np.append(s.starts[1:], s.time[-1] + s.interval)
    after, share, sizes = [], [], []
    for j, (begin, end) in enumerate(zip(s.starts, ends, strict=True)):
        step = s.levels[j + 1] - s.levels[j]
        if (abs(s.levels[j + 1]) > abs(s.levels[j])) == rising:
            rows = (s.time >= begin - s.interval) & (s.time < end)
            after.append(s.time[rows] - begin)
            share.append((s.response[rows] - offset - gain * s.levels[j]) / (gain * step))
            sizes.append(abs(gain * step))
    if not after or len(h := np.concatenate(after)) < 3:
        return None
    order = np.argsort(h)
    h, z = h[order], np.concatenate(share)[order]
    width = max(3, min(len(after), len(h) // 8) | 1)
    smooth = np.median(np.lib.stride_tricks.sliding_window_view(np.pad(z, width // 2, mode="edge"), width), axis=1)
    at = [float(h[min(int(np.argmax(smooth >= level)), len(h) - 1)]) for level in (0.2, 0.8)]
    return float(np.median(sizes)), at[0], max(at[1], at[0] + 0.1 * s.interval)


def first_guesses(s: Steps, gain: float, offset: float) -> list[Array]:
    """Return starts of the fit: all ramp, all lag, half of each."""
    found = [crossing(s, gain, offset, rising) for rising in (True, False)]
    spans = [one[2] - one[1] for one in found if one]
    guesses = []
    for ramp in (1.0, 0.5, 0.02):
        lag = (1.0 - ramp) * min(spans) / math.log(4.0)
        paces = [ramp * (one[2] - one[1]) / 0.6 / one[0] if one else 0.0 for one in found]
        dead = [one[1] - 0.2 * pace * one[0] - lag * math.log(1.25) for one, pace in zip(found, paces, strict=True) if one]
        guesses.append(np.maximum(np.array([float(np.mean(dead)), lag, *paces, gain, offset]), s.least))
    return guesses


def slopes(x: Array, s: Steps) -> Array:
    """Return the derivative of the model by each parameter, shape (rows, 6), by central differences."""
    J = np.empty((len(s.time), 6))
    for i in range(5):
        step = np.zeros(6)
        step[i] = s.small[i]
        J[:, i] = (model(x + step, s.time, s.starts, s.levels) - model(x - step, s.time, s.starts, s.levels)) / (2.0 * s.small[i])
    J[:, OFFSET] = 1.0
    return J


def scale_of(residual: Array) -> float:
    """Return the standard deviation of normal residuals by their median size."""
    return max(1.4826 * float(np.median(np.abs(residual))), 1e-12)


def scale_of_fit(residual: Array, J: Array) -> float:
    """Return the scale of all rows, or of those in which the response moves where that is larger: encoders stand still exactly."""
    moves = np.abs(J[:, DEAD])
    moving = residual[moves > 0.05 * np.max(moves)]
    return max(scale_of(residual), scale_of(moving) if len(moving) >= 8 else 0.0)


def weights(residual: Array, scale: float) -> Array:
    return np.minimum(1.0, HUBER * scale / np.maximum(np.abs(residual), 1e-300))


def huber(residual: Array, scale: float) -> float:
    """Return Huber's cost."""
    r = np.abs(residual) / scale
    return float(np.sum(np.where(r <= HUBER, 0.5 * r * r, HUBER * (r - 0.5 * HUBER))))


def fit(x: Array, s: Steps, rounds: int) -> tuple[Array, float]:
    """Return the parameters improved by Levenberg's and Marquardt's steps, and the scale of the residuals."""
    damping = 1e-3
    residual = s.response - model(x, s.time, s.starts, s.levels)
    for _ in range(rounds):
        J = slopes(x, s)
        scale = scale_of_fit(residual, J)
        cost = huber(residual, scale)
        w = weights(residual, scale)
        A, b = J.T @ (J * w[:, None]), J.T @ (w * residual)
        held = (x <= s.least) & (b < 0.0)  # at its end, and pushed beyond it
        diagonal = np.diag(A) + 1e-12 * np.max(np.diag(A))
        while damping < 1e8:
            B = A + damping * np.diag(diagonal)
            B[held], B[:, held] = 0.0, 0.0
            B[held, held] = 1.0
            tried = np.maximum(x + np.linalg.solve(B, np.where(held, 0.0, b)), s.least)
            left = s.response - model(tried, s.time, s.starts, s.levels)
            better = huber(left, scale)
            if better < cost:
                break
            damping *= 8.0
        else:
            break
        x, residual, damping = tried, left, max(damping / 8.0, 1e-9)
        if cost - better < 1e-7 * cost:
            break
    return x, scale_of_fit(residual, slopes(x, s))


def covariance(x: Array, s: Steps, scale: float) -> Array:
    """Return the covariance of the parameters: the larger of the plain one and White's (1980, from memory), widened where
    neighbouring residuals agree."""
    residual = s.response - model(x, s.time, s.starts, s.levels)
    w = weights(residual, scale)
    J = slopes(np.maximum(x, s.least * (UNSEEN / EDGE)), s)
    units = np.sqrt(np.sum(w[:, None] * J * J, axis=0))
    units = np.where(units > 0.0, units, 1.0)
    J = J / units
    inverse = np.linalg.pinv(J.T @ (J * w[:, None]), rcond=1e-12)
    plain = scale**2 * inverse
    white = inverse @ (J.T @ (J * ((w * residual) ** 2)[:, None])) @ inverse
    wider = np.sqrt(np.maximum(1.0, np.diag(white) / np.maximum(np.diag(plain), 1e-300)))
    out: Array = correlation(residual) ** 2 * plain * np.outer(wider, wider) / np.outer(units, units)
    return out
