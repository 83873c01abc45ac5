"""Step responses: dead time, motor lag, acceleration and braking from a log of starts and stops.

The model and its fit are in `step_fit`; here is what its parameters and their covariance tell, and when they do not.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from steerkit.measured import COVER, Array, Measured, check_response, checked_log, correlation, told, untold
from steerkit.step_fit import (
    DEAD,
    DOWN,
    GAIN,
    LAG,
    OFFSET,
    UP,
    Steps,
    covariance,
    first_guesses,
    fit,
    huber,
    model,
    plateaus,
    scale_of,
    steps_of,
)

__all__ = ["StepResponse", "speed_steps", "turn_steps"]

SAMPLES = 5.0  # a lag or a ramp shorter than this many samples is not told
LAG_SHARE = 0.2  # nor is a lag whose uncertainty is a larger share of it,
RAMP_SHARE = 0.08  # an acceleration,
LATE = 0.15  # intervals by which steps may be late where their own rows are lost: adds to the uncertainty of delays
ROUNDS = 40
ALIKE = 1.5  # correlation of residuals (1: none) from which on the model is doubted


class StepResponse(NamedTuple):
    """What a log of steps tells. Each is a Measured.

    `delay` is dead time and lag together, which a log tells better than either. `gain` is response over command. In a log of turn
    rates `acceleration` and `braking` are in rad/s^2. `fitted` is the model's response at each row of the log that was given.
    """

    dead_time: Measured
    motor_lag: Measured
    acceleration: Measured
    braking: Measured
    delay: Measured
    gain: Measured
    noise: Measured
    fitted: Array

    def __str__(self) -> str:
        return "\n".join(one.sentence for one in self[:-1])


def respond(time: ArrayLike, command: ArrayLike, response: ArrayLike, unit: str, names: tuple[str, str]) -> StepResponse:
    log = checked_log(time, command, response)
    s = steps_of(log)
    gain, error, offset = plateaus(s)
    check_response(gain, error, float(np.max(np.abs(s.levels))))
    rough = [fit(x, s, 8) for x in first_guesses(s, gain, offset)]
    costs = [huber(s.response - model(x, s.time, s.starts, s.levels), min(one[1] for one in rough)) for x, _ in rough]
    x, scale = fit(rough[int(np.argmin(costs))][0], s, ROUNDS)
    check_steady(x, s)
    C = covariance(x, s, scale)
    fitted = np.full(len(np.asarray(time)), x[OFFSET] + x[GAIN] * s.levels[0])
    fitted[-len(log.time) :] = model(x, log.time, s.starts, s.levels)
    return record(x, C, s.response - model(x, s.time, s.starts, s.levels), s, unit, names, fitted)


def check_steady(x: Array, s: Steps) -> None:
    """Refuse a log in which no step above 0 is held until the response is steady."""
    sizes = np.abs(np.diff(s.levels)) * x[GAIN]
    paces = np.where(np.abs(s.levels[1:]) > np.abs(s.levels[:-1]), x[UP], x[DOWN])
    needed = x[DEAD] + sizes * paces + 2.0 * x[LAG] + SAMPLES * s.interval
    held = np.append(s.starts[1:], s.time[-1]) - s.starts
    moving = s.levels[1:] != 0.0 if np.any(s.levels[1:] != 0.0) and s.levels[0] == 0.0 else np.ones(len(held), dtype=bool)
    if not np.any((held >= needed) & moving):
        raise ValueError(
            f"response still changes {np.max(held[moving]):.3g} s after its step, the longest hold, must become steady; "
            "hold each step until it is"
        )


def record(x: Array, C: Array, residual: Array, s: Steps, unit: str, names: tuple[str, str], fitted: Array) -> StepResponse:
    """Return what the parameters and their covariance tell."""
    u = COVER * np.sqrt(np.maximum(np.diag(C), 0.0)) + rounding(x, s)
    delay = x[DEAD] + x[LAG]
    delay_u = COVER * math.sqrt(max(C[DEAD, DEAD] + C[LAG, LAG] + 2.0 * C[DEAD, LAG], 0.0)) + LATE * s.interval
    if delay < -(delay_u + s.interval):
        raise ValueError(
            f"response moves {-delay:.3g} s before the command, must move after it; "
            "stamp both with one clock, and log the command when it is sent, not when it is answered"
        )
    return StepResponse(
        dead_time=dead_time(max(0.0, x[DEAD]), u[DEAD], s),
        motor_lag=motor_lag(x[LAG], u[LAG], s),
        acceleration=acceleration(names[0], x[UP], u[UP], True, s, x[GAIN], unit),
        braking=acceleration(names[1], x[DOWN], u[DOWN], False, s, x[GAIN], unit),
        delay=told("delay", max(0.0, delay), delay_u, "s", "dead time and motor lag together"),
        gain=told("gain", x[GAIN], u[GAIN], "", "response over command"),
        noise=noise(residual, unit),
        fitted=fitted,
    )


def rounding(x: Array, s: Steps) -> Array:
    """Return what the rounding of a response adds to each error: q/sqrt(12) does not average out while the wheels run evenly.

    How much it moves the lag was found by the study: three times its share of the step, besides what it moves the ramp.
    """
    size = grain(s.response) / math.sqrt(12.0)
    share = size / (float(np.max(np.abs(np.diff(s.levels)))) * x[GAIN])
    delay = size * max(x[UP], x[DOWN])
    return np.array([delay, delay + 3.0 * share * x[LAG], share * x[UP], share * x[DOWN], share * x[GAIN], size])


def grain(y: Array) -> float:
    """Return the step of a response of few values (encoder counts), 0 of one of many."""
    gaps = np.diff(np.unique(np.round(y, 12)))
    return float(np.median(gaps)) if 0 < len(gaps) < len(y) / 5 else 0.0


def noise(residual: Array, unit: str) -> Measured:
    size = scale_of(residual)
    alike = correlation(residual)
    more = (
        "; neighbouring rows err alike: slow noise, or a drive that is not quite dead time, ramp and lag" if alike > ALIKE else ""
    )
    u = COVER * size * alike / math.sqrt(2.0 * len(residual))
    return told("noise", size, u, unit, "standard deviation of the response" + more)


def dead_time(value: float, u: float, s: Steps) -> Measured:
    u = u + LATE * s.interval
    if u > 1.5 * max(0.01, s.interval):
        return untold(
            "dead_time",
            "s",
            f"{value:.3g} ± {u:.2g} s, for it is mixed up with the lag",
            "repeat the steps more often in one log, or log faster",
        )
    return told("dead_time", value, u, "s")


def motor_lag(value: float, u: float, s: Steps) -> Measured:
    if value < SAMPLES * s.interval:
        faster = f"log every {value / (2.0 * SAMPLES):.1g} s or faster, or " if value > max(u, 0.5 * s.interval) else ""
        return untold(
            "motor_lag",
            "s",
            f"at most {value + u:.2g} s, and {SAMPLES:g} samples of {s.interval:.2g} s are needed to see it",
            f"{faster}leave it in the delay",
        )
    if u > LAG_SHARE * value:
        return untold(
            "motor_lag",
            "s",
            f"{value:.2g} ± {u:.2g} s, for ramp and noise hide it",
            "repeat the steps more often in one log, log faster, or leave it in the delay",
        )
    return told("motor_lag", value, u, "s")


def acceleration(name: str, pace: float, u: float, rising: bool, s: Steps, gain: float, unit: str) -> Measured:
    kind = "start" if rising else "stop"
    unit = f"{unit}^2"
    sizes = np.abs(np.diff(s.levels))[(np.abs(s.levels[1:]) > np.abs(s.levels[:-1])) == rising]
    if len(sizes) == 0:
        return untold(name, unit, f"the log has no {kind}", f"add a {kind} to it")
    span = float(np.max(sizes)) * gain * pace
    if span < SAMPLES * s.interval:
        most = float(np.max(sizes)) * gain / (pace * float(np.max(sizes)) * gain + s.interval)
        return untold(
            name,
            unit,
            f"at least {most:.2g} {unit}, for the {kind} takes fewer than {SAMPLES:g} samples of {s.interval:.2g} s",
            "make a bigger step or log faster",
        )
    if u > RAMP_SHARE * pace:
        return untold(
            name,
            unit,
            f"{1.0 / pace:.2g} ± {u / pace**2:.1g} {unit}, for lag and noise hide it",
            "make a bigger step, or repeat it more often in one log",
        )
    return told(name, 1.0 / pace, u / pace**2, unit)


def speed_steps(time: ArrayLike, command: ArrayLike, response: ArrayLike) -> StepResponse:
    """Return what a log of steps of the speed (or of one wheel's speed) tells.

    Parameters
    ----------
    time : array, shape (n,), s
        When each row was taken; uneven and with rows missing if need be.
    command : array, shape (n,), m/s
        Sent at `time` and held. Several steps up and down, each held until the response is steady; from standing.
    response : array, shape (n,), m/s
        Measured; NaN where missing.

    Returns
    -------
    StepResponse

    Raises
    ------
    TypeError, ValueError
        A log that holds no step response, with what is wrong in it.

    Examples
    --------
    >>> time = np.arange(0.0, 4.0, 0.02)
    >>> command = np.where((time > 0.5) & (time < 2.2), 0.6, 0.0)
    >>> response = np.clip(np.minimum(0.8 * (time - 0.62), 1.2 * (2.82 - time)), 0.0, 0.6)
    >>> print(speed_steps(time, command, response).motor_lag.told)
    False
    """
    return respond(time, command, response, "m/s", ("acceleration", "braking"))


def turn_steps(time: ArrayLike, command: ArrayLike, response: ArrayLike) -> StepResponse:
    """Return what a log of steps of the turn rate on the spot tells; both accelerations are turn accelerations.

    Parameters
    ----------
    time : array, shape (n,), s
    command : array, shape (n,), rad/s
    response : array, shape (n,), rad/s

    Returns
    -------
    StepResponse
        `acceleration` is that of the starts, `braking` that of the stops.

    Raises
    ------
    TypeError, ValueError
        A log that holds no step response, with what is wrong in it.
    """
    return respond(time, command, response, "rad/s", ("turn_acceleration", "turn_acceleration"))
