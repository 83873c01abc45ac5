"""Angles: into (-pi, pi], differences, unwrapping, means.

Radians, counter-clockwise positive. A turn is the true 2 pi (through sine and cosine), not its nearest float: at 1e12 rad the two
are 4e-5 apart. An angle already in (-pi, pi] comes back untouched, so that tiny angles keep every bit. NaN and infinity give NaN.

`wrap`, `difference`, `unwrap` and `mean` take floats and arrays of any shape; each `*_kernel` is the same law on floats (or rows)
without checks, callable from your own compiled code.
"""

from __future__ import annotations

import math
from typing import NamedTuple, overload

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steerkit.checks import check_shapes, check_weights
from steerkit.compiled import kernel

__all__ = ["CircularMean", "difference", "mean", "unwrap", "wrap"]

PI = math.pi
TURN = 2.0 * math.pi
UNDEFINED = 1e-12  # a mean resultant length below this is rounding: the directions cancel, and the mean has no direction

Array = NDArray[np.float64]


class CircularMean(NamedTuple):
    """Mean direction (rad; NaN where the directions cancel) and mean resultant length (0 scattered .. 1 all alike)."""

    direction: float | Array
    resultant: float | Array


@kernel
def wrap_kernel(angle: float) -> float:
    """Return `angle` (rad) moved by whole turns into (-pi, pi]."""
    if -PI < angle <= PI:
        return angle
    if not (-math.inf < angle < math.inf):
        return math.nan
    wrapped = math.atan2(math.sin(angle), math.cos(angle))
    return wrapped if wrapped > -PI else PI


@kernel
def difference_kernel(target: float, origin: float) -> float:
    """Return the turn (rad) that takes `origin` to `target` the short way round."""
    return wrap_kernel(target - origin)


@kernel
def wrap_row_kernel(angles: Array, out: Array) -> None:
    for i in range(len(angles)):
        out[i] = wrap_kernel(angles[i])


@kernel
def unwrap_row_kernel(angles: Array, out: Array) -> None:
    turns = 0.0
    last = math.nan
    for i in range(len(angles)):
        angle = angles[i]
        step = angle - last
        if PI < abs(step) < math.inf:
            turns += math.floor((wrap_kernel(step) - step) / TURN + 0.5)
        out[i] = angle + turns * TURN
        if -math.inf < angle < math.inf:
            last = angle


@kernel
def mean_kernel(angles: Array, weights: Array) -> tuple[float, float]:
    """Return mean direction (rad) and resultant length of a row of angles (Mardia & Jupp 2000, section 2.2)."""
    c = 0.0
    s = 0.0
    total = 0.0
    for i in range(len(angles)):
        if not (-math.inf < angles[i] < math.inf):
            return math.nan, math.nan
        c += weights[i] * math.cos(angles[i])
        s += weights[i] * math.sin(angles[i])
        total += weights[i]
    if not total > 0.0:
        return math.nan, math.nan
    c /= total
    s /= total
    resultant = min(1.0, math.sqrt(c * c + s * s))
    direction = math.atan2(s, c) if resultant > UNDEFINED else math.nan
    return (PI if direction == -PI else direction), resultant


@overload
def wrap(angle: float) -> float: ...
@overload
def wrap(angle: ArrayLike) -> float | Array: ...
def wrap(angle: ArrayLike) -> float | Array:
    """Return `angle` moved by whole turns into (-pi, pi].

    Parameters
    ----------
    angle : float or array, shape (...), rad

    Returns
    -------
    float or array, shape (...), rad
        Exactly +pi stays +pi; -pi becomes +pi. NaN and infinity give NaN.

    Examples
    --------
    >>> wrap(-math.pi) == math.pi
    True
    >>> wrap(1e-20)
    1e-20
    """
    values = np.ascontiguousarray(angle, dtype=np.float64)
    if np.ndim(angle) == 0:
        return float(wrap_kernel(float(values.item())))
    out = np.empty_like(values)
    wrap_row_kernel(values.reshape(-1), out.reshape(-1))
    return out


@overload
def difference(target: float, origin: float) -> float: ...
@overload
def difference(target: ArrayLike, origin: ArrayLike) -> float | Array: ...
def difference(target: ArrayLike, origin: ArrayLike) -> float | Array:
    """Return the turn that takes `origin` to `target` the short way round, in (-pi, pi].

    Parameters
    ----------
    target, origin : float or array, shapes that broadcast, rad

    Returns
    -------
    float or array, rad
        Positive: counter-clockwise. Half a turn is +pi.

    Examples
    --------
    >>> round(difference(-3.0, 3.0), 6)
    0.283185
    """
    with np.errstate(invalid="ignore", over="ignore"):  # infinity less infinity is NaN, and NaN is what comes out
        return wrap(np.subtract(np.asarray(target, np.float64), np.asarray(origin, np.float64)))


def unwrap(angles: ArrayLike, axis: int = -1) -> Array:
    """Return `angles` with whole turns added so that no step along `axis` exceeds half a turn.

    Whole turns of the float 2 pi are added. A step of exactly half a turn is left as it is (as in `numpy.unwrap`). Unlike there,
    a NaN or infinite sample spoils only itself: the ones behind it are joined to the last finite one.

    Parameters
    ----------
    angles : array, shape (...), rad
    axis : int
        The axis along which the samples follow each other.

    Returns
    -------
    array, shape (...), rad

    Examples
    --------
    >>> unwrap([3.0, -3.0]).round(6).tolist()
    [3.0, 3.283185]
    """
    values = np.asarray(angles, dtype=np.float64)
    check_shapes("angles", values.ndim >= 1, values.shape, "an array with at least one axis; wrap takes single floats")
    rows = np.ascontiguousarray(np.moveaxis(values, axis, -1))
    out = np.empty_like(rows)
    for index in np.ndindex(rows.shape[:-1]):
        unwrap_row_kernel(rows[index], out[index])
    return np.moveaxis(out, -1, axis)


def mean(angles: ArrayLike, weights: ArrayLike | None = None, axis: int | None = None) -> CircularMean:
    """Return the weighted mean direction and how much the directions agree (Mardia & Jupp 2000, section 2.2).

    Directions are averaged on the circle, as unit vectors, never by adding angles: the mean of 350 and 10 degrees is 0.

    Parameters
    ----------
    angles : array, shape (...), rad
    weights : array, shape that broadcasts to that of `angles`, none negative; 1 each if not given
    axis : int, or None for all samples together

    Returns
    -------
    CircularMean
        `direction` in (-pi, pi], rad; NaN where directions cancel, weights sum to 0, or a sample is not finite.
        `resultant` in [0, 1].

    Raises
    ------
    ValueError
        A negative or non-finite weight, or shapes that do not fit.

    Examples
    --------
    >>> direction, resultant = mean(np.radians([355.0, 5.0, 15.0]))
    >>> round(math.degrees(direction), 6), round(resultant, 5)
    (5.0, 0.98987)
    """
    values = np.asarray(angles, dtype=np.float64)
    if weights is None:
        shares = np.ones(values.shape)
    else:
        shares = check_weights(weights, values.shape)
    if axis is None:
        direction, resultant = mean_kernel(np.ascontiguousarray(values).reshape(-1), np.ascontiguousarray(shares).reshape(-1))
        return CircularMean(float(direction), float(resultant))
    rows = np.ascontiguousarray(np.moveaxis(values, axis, -1))
    row_shares = np.ascontiguousarray(np.moveaxis(shares, axis, -1))
    found = np.empty((2, *rows.shape[:-1]))
    for index in np.ndindex(rows.shape[:-1]):
        found[(slice(None), *index)] = mean_kernel(rows[index], row_shares[index])
    return CircularMean(found[0], found[1])
