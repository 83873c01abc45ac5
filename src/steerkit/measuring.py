"""Measuring: the robot's numbers from logs of an afternoon, and what to declare of them.

The face of `step_response` (steps of speed and turn rate), `slow_tests` (smallest wheel speed, resolution, limit, rest) and
`odometry_check` (squares, turns, a tape), with `for_platform`, which takes each number on its safe side. Pure functions of arrays.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from steerkit.checks import rounded_down, rounded_up
from steerkit.measured import Measured
from steerkit.odometry_check import SquareCheck, square, straight_line, turns_on_the_spot
from steerkit.slow_tests import rest_noise, smallest_wheel_speed, wheel_speed_limit, wheel_speed_resolution
from steerkit.step_response import StepResponse, speed_steps, turn_steps

__all__ = [
    "Declared",
    "Measured",
    "SquareCheck",
    "StepResponse",
    "for_platform",
    "rest_noise",
    "smallest_wheel_speed",
    "speed_steps",
    "square",
    "straight_line",
    "turn_steps",
    "turns_on_the_spot",
    "wheel_speed_limit",
    "wheel_speed_resolution",
]


class Declared(NamedTuple):
    """What to declare: `numbers` for Platform(**numbers, ...), and a sentence for each, and for each that is left out."""

    numbers: dict[str, float]
    sentences: tuple[str, ...]

    def __str__(self) -> str:
        return "\n".join(self.sentences)


BITS = 1e-9  # so that 0.043 and a few bits more is not raised to 0.0431
LOWER = {
    "acceleration": "declared too high, the robot is slower than its plan",
    "braking": "declared too high, the robot rolls past its stop",
    "turn_acceleration": "declared too high, the robot turns past its heading",
    "wheel_speed_limit": "declared too high, arcs open",
}
HIGHER = {
    "smallest_wheel_speed": "declared too low, the robot stands before its goal",
    "position_noise": "declared too low, noise is taken for motion",
    "heading_noise": "declared too low, noise is taken for motion",
}
NEITHER = {
    "dead_time": "neither side is safe",
    "motor_lag": "neither side is safe",
    "wheel_speed_resolution": "neither side is safe",
    "track_width": "neither side is safe",
}


def for_platform(*found: StepResponse | Measured) -> Declared:
    """Return what to declare in Platform of all that was measured, each number on its safe side, to three digits.

    Accelerations, braking and the wheel-speed limit: value minus uncertainty, the lowest of several. Smallest wheel speed and
    noises: value plus uncertainty, the highest. Dead time, lag, resolution, track width: the value, the mean of several by their
    uncertainties. A lag that is not told is declared as dead time (`delay`).

    Parameters
    ----------
    found : StepResponse or Measured
        Any number of each.

    Returns
    -------
    Declared

    Raises
    ------
    TypeError
        Something that was not measured here.
    """
    ones = delays_resolved([one for each in found for one in singles(each)])
    numbers: dict[str, float] = {}
    sentences = []
    for name in dict.fromkeys(one.name for one in ones):
        same = [one for one in ones if one.name == name]
        good = [one for one in same if one.told]
        if not good:
            sentences.append(f"{name} is left out. {same[0].sentence}")
        elif name in LOWER or name in HIGHER or name in NEITHER:
            numbers[name], why = chosen(name, good)
            sentences.append(f"{name}={numbers[name]:.6g} {good[0].unit}: {why}")
    return Declared(numbers, tuple(sentences))


def singles(found: object) -> list[Measured]:
    if isinstance(found, StepResponse):
        return [found.dead_time, found.motor_lag, found.delay, found.acceleration, found.braking]
    if isinstance(found, Measured):
        return [found]
    raise TypeError(f"found={found!r} must be a StepResponse or a Measured; give what the functions of measuring return")


def delays_resolved(ones: list[Measured]) -> list[Measured]:
    """Return the list without delays. No lag told: the delay is the dead time; no dead time told: the delay less the lag."""
    named = {name: [one for one in ones if one.name == name] for name in ("dead_time", "motor_lag", "delay")}
    rest = [one for one in ones if one.name not in named]
    dead, lags, delays = named.values()
    lag_told = [one for one in lags if one.told]
    if delays and not lag_told:
        dead = [one._replace(name="dead_time") for one in delays]
    elif delays and not any(one.told for one in dead):
        lag = chosen("motor_lag", lag_told)[0]
        less = f"; less the motor lag, {lag:.3g} s"
        dead = [one._replace(name="dead_time", value=max(0.0, one.value - lag), sentence=one.sentence + less) for one in delays]
    return dead + lags + rest


def chosen(name: str, good: list[Measured]) -> tuple[float, str]:
    """Return what to declare, and why."""
    if name in LOWER:
        one = min(good, key=lambda one: one.value - one.uncertainty)
        size = max(one.value - one.uncertainty, 0.1 * one.value) * (1.0 + BITS)
        return rounded_down(size, 3), f"{one.sentence}, less its uncertainty ({LOWER[name]})"
    if name in HIGHER:
        one = max(good, key=lambda one: one.value + one.uncertainty)
        size = (one.value + one.uncertainty) * (1.0 - BITS)
        return rounded_up(size, 3), f"{one.sentence}, with its uncertainty ({HIGHER[name]})"
    shares = np.array([1.0 / max(one.uncertainty, 1e-9) ** 2 for one in good])
    value = float(shares @ [one.value for one in good] / np.sum(shares))
    texts = "; ".join(one.sentence for one in good)
    return float(f"{value:.3g}"), f"{texts} ({NEITHER[name]})"
