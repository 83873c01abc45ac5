"""Heading: error to turn rate, by P, PI or PID.

turn_rate = clip(gain * (error + integral/integral_time - derivative_time * heading rate), +-ceiling), the error the short way
round. The derivative acts on the measured heading, not on the error, so that a new goal gives no kick. The integral stands still
while more is asked than is given, and so never has to be unwound (conditional integration: Astrom & Hagglund 2006, section 3.5,
from memory).

Radians, seconds; counter-clockwise positive.
"""

from __future__ import annotations

import math
from typing import NamedTuple

from steerkit.angles import difference_kernel
from steerkit.checks import check_above_zero
from steerkit.compiled import kernel
from steerkit.limits import clip_kernel

__all__ = ["HeadingLaw", "HeadingMemory", "steer"]


SHORTEST = 1e-6  # s; over a shorter time no rate can be told


class HeadingLaw(NamedTuple):
    """Settings: gain 1/s; ceiling rad/s; integral_time s, infinite for none; derivative_time s, 0 for none."""

    gain: float
    ceiling: float
    integral_time: float = math.inf
    derivative_time: float = 0.0


class HeadingMemory(NamedTuple):
    """What the law carries: integral of the error, rad s; heading of the last step, rad, NaN for none yet."""

    integral: float = 0.0
    heading: float = math.nan


@kernel
def heading_rate_kernel(heading: float, before: float, duration: float) -> float:
    """Return how fast the heading moved (rad/s), the short way round; 0 where there is no heading before."""
    turned = difference_kernel(heading, before)
    return turned / duration if turned == turned and duration > SHORTEST else 0.0


@kernel
def steer_kernel(
    error: float, rate: float, integral: float, gain: float, ceiling: float, integral_time: float, derivative_time: float
) -> tuple[float, float]:
    """Return the turn rate asked for, without and with the ceiling."""
    asked = gain * (error + integral / integral_time - derivative_time * rate)
    return asked, clip_kernel(asked, -ceiling, ceiling)


@kernel
def integrate_kernel(integral: float, error: float, asked: float, given: float, duration: float) -> float:
    """Return the integral after `duration`: still while the robot is given less than asked in the direction of the error."""
    if (asked - given) * error > 0.0:
        return integral
    return integral + error * duration


def steer(
    law: HeadingLaw, memory: HeadingMemory, target: float, heading: float, duration: float, given: float | None = None
) -> tuple[float, HeadingMemory]:
    """Return the turn rate toward a target heading, and the memory for the next step.

    Parameters
    ----------
    law : HeadingLaw
    memory : HeadingMemory
        `HeadingMemory()` at the start and at a new goal.
    target, heading : float, rad
    duration : float, s
        Time since the last step.
    given : float, rad/s, or None
        What is left of the answer where more than the ceiling limits it, for the integral; None where nothing does.

    Returns
    -------
    (float, HeadingMemory)
        rad/s

    Examples
    --------
    >>> law = HeadingLaw(gain=2.0, ceiling=1.5)
    >>> steer(law, HeadingMemory(), target=-3.0, heading=3.0, duration=0.05)[0].__round__(6)
    0.566371
    """
    check_above_zero("gain", law.gain, "1/s", "give turn rate per heading error")
    if law.integral_time != math.inf:
        check_above_zero(
            "integral_time", law.integral_time, "s", "give the time in which the integral repeats the error; inf for none"
        )
    error = difference_kernel(float(target), float(heading))
    rate = heading_rate_kernel(float(heading), memory.heading, float(duration))
    asked, wanted = steer_kernel(error, rate, memory.integral, *(float(setting) for setting in law))
    integral = integrate_kernel(memory.integral, error, asked, wanted if given is None else float(given), float(duration))
    return wanted, HeadingMemory(integral, float(heading))
