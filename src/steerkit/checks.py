"""Wrong arguments at construction become a sentence: name=value, what is expected, how to repair. One small check per rule."""

from __future__ import annotations

import math
import numbers

import numpy as np
from numpy.typing import ArrayLike, NDArray


def shown(value: object, unit: str = "") -> str:
    """Return `value` as it stands in a sentence, with its unit."""
    text = f"{float(value):.6g}" if isinstance(value, numbers.Real) and not isinstance(value, bool) else repr(value)
    return f"{text} {unit}".rstrip()


def rounded_down(value: float, digits: int = 4) -> float:
    """Return a positive number cut to some digits, so that what a sentence proposes can be asked for."""
    near = float(f"{value:.{digits}g}")
    unit = 10.0 ** (math.floor(math.log10(value)) - digits + 1)
    return near if near <= value else float(f"{near - unit:.{digits}g}")


def rounded_up(value: float, digits: int = 4) -> float:
    """Return a number >= 0 raised to some digits."""
    if value == 0.0:
        return 0.0
    near = float(f"{value:.{digits}g}")
    unit = 10.0 ** (math.floor(math.log10(value)) - digits + 1)
    return near if near >= value else float(f"{near + unit:.{digits}g}")


def check_number(name: str, value: object, unit: str, repair: str) -> float:
    """Return `value` as a finite float."""
    if isinstance(value, bool) or not isinstance(value, numbers.Real):
        raise TypeError(f"{name}={value!r} must be a number in {unit}; {repair}")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise ValueError(f"{name}={shown(number, unit)} must be finite; {repair}")
    return number


def check_above_zero(name: str, value: object, unit: str, repair: str) -> float:
    number = check_number(name, value, unit, repair)
    if not number > 0.0:
        raise ValueError(f"{name}={shown(number, unit)} must be > 0; {repair}")
    return number


def check_not_negative(name: str, value: object, unit: str, repair: str) -> float:
    number = check_number(name, value, unit, repair)
    if number < 0.0:
        raise ValueError(f"{name}={shown(number, unit)} must be >= 0; {repair}")
    return number


def check_at_most(name: str, value: float, unit: str, most: float, repair: str) -> float:
    if value > most:
        raise ValueError(f"{name}={shown(value, unit)} must be <= {shown(rounded_down(most, 6), unit)}; {repair}")
    return value


def check_shapes(name: str, fits: bool, shape: tuple[int, ...], expected: str) -> None:
    if not fits:
        raise ValueError(f"{name} of shape {shape} does not fit; give {expected}")


def check_weights(weights: ArrayLike, shape: tuple[int, ...]) -> NDArray[np.float64]:
    """Return weights broadcast to `shape`; the sentence names the first bad one and how many there are."""
    given = np.asarray(weights, dtype=np.float64)
    try:
        shares = np.broadcast_to(given, shape)
    except ValueError:
        raise ValueError(f"weights of shape {given.shape} does not fit; give one weight per angle, shape {shape}") from None
    bad = np.argwhere(~(np.isfinite(shares) & (shares >= 0.0)))
    if len(bad):
        first = tuple(int(i) for i in bad[0])
        raise ValueError(
            f"weights{list(first)}={shares[first]:.6g} must be finite and >= 0 ({len(bad)} such); drop the sample or give it 0"
        )
    return shares
