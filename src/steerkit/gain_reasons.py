"""Gain reasons: why a gain and a speed were chosen, each a sentence with its number and where it comes from."""

from __future__ import annotations

import math
from dataclasses import replace

from steerkit.checks import rounded_down, shown
from steerkit.gain_limits import sampled_step
from steerkit.platforms import Platform
from steerkit.windows import (
    DELAYS,
    NOISE_SHARE,
    Window,
    chosen_gain,
    fastest_not_circling,
    speed_bounds,
    swing_reason,
    window,
)


def reasons(platform: Platform, radius: float, speed: float, predict: bool, found: Window, gain: float) -> tuple[str, ...]:
    """Return why the window is what it is, why this gain and this speed, and what comes next; a sentence each."""
    sentences = [low_reason(radius, speed, found), high_reason(platform, speed, predict, found)]
    tightest = speed / found.ceiling
    if found.margin * tightest > radius * (1.0 + 1e-9):
        sentences.append(
            f"turn rate {found.ceiling:.4g} rad/s: at {rounded_down(speed):g} m/s the tightest circle has a radius of "
            f"{tightest:.4g} m; it shall be {found.margin:.3g} times smaller than the disc (derived)."
        )
    if gain == gain:
        sentences.append(gain_reason(platform, found, gain))
    sentences += [speed_reason(platform, radius, predict, found), *lag_reason(platform, radius, predict, found, gain)]
    return tuple(sentences)


def low_reason(radius: float, speed: float, found: Window) -> str:
    return (
        f"low {found.low:.4g} 1/s: at {rounded_down(speed):g} m/s less gain circles the goal; the circle 2 v/(pi gain) shall be "
        f"{found.margin:.3g} times smaller than the disc of {radius:.4g} m (derived)."
    )


def high_reason(platform: Platform, speed: float, predict: bool, found: Window) -> str:
    p, high = platform, f"high {found.high:.4g} 1/s: above it the heading swings; "
    why = swing_reason(platform, found.high * math.pi / 2.0, predict)
    if why == "turn_acceleration":
        what = f"{shown(p.turn_acceleration, 'rad/s^2')} cannot end a turn at {found.ceiling:.4g} rad/s sooner (derived)."
        return high + f"turn_acceleration {what}"
    if predict:
        return high + f"one period of {p.period:.4g} s answers a whole error, gain = 1/period (derived)."
    what = "(derived)" if p.motor_lag > 0.0 else "(derived; Erbe & Zhang 1989 for whole periods, from memory)"
    return high + f"dead time {p.dead_time:.4g} s, lag {p.motor_lag:.4g} s and period {p.period:.4g} s {what}."


def gain_reason(platform: Platform, found: Window, gain: float) -> str:
    p, delay = platform, platform.dead_time + platform.motor_lag
    told = f"gain {gain:.4g} 1/s: "
    if gain != chosen_gain(platform, found):
        return told + f"as asked; {chosen_gain(platform, found):.4g} 1/s would have been chosen."
    if gain == found.high:
        return told + "the highest that does not swing, for it settles soonest (chosen)."
    quiet = NOISE_SHARE * found.ceiling / p.heading_noise if p.heading_noise > 0.0 else math.inf
    least = "the lowest that works, though " if gain > min(quiet, DELAYS / delay if delay > 0.0 else math.inf) else ""
    if quiet <= (DELAYS / delay if delay > 0.0 else math.inf):
        return told + (
            f"{least}heading noise of {math.degrees(p.heading_noise):.3g} deg moves the turn rate by "
            f"{gain * p.heading_noise:.3g} rad/s; "
            f"{100.0 * NOISE_SHARE:g} % of the ceiling asks for {quiet:.4g} 1/s (chosen)."
        )
    return told + (
        f"{least}{DELAYS:g}/(dead time + lag) = {DELAYS / delay:.4g} 1/s bears dead time and lag wrong by 30 % without "
        "swinging (measured)."
    )


def speed_reason(platform: Platform, radius: float, predict: bool, found: Window) -> str:
    """Return what bounds the speed, and what would bound it next."""
    most = speed_bounds(platform, radius)
    swings = fastest_not_circling(platform, radius, 1e3, predict)
    loop = swing_reason(platform, found.margin * swings / radius, predict)
    others = [(speed, name) for name, speed in most.items()] + [(swings, f"{loop} (heading loop)")]
    speed, name = sorted(others)[1]
    return (
        f"fastest {rounded_down(found.fastest):g} m/s: bound by {found.bound}; were that no bound, "
        f"{name} would be the next, at {rounded_down(speed):g} m/s (derived)."
    )


def lag_reason(platform: Platform, radius: float, predict: bool, found: Window, gain: float) -> list[str]:
    """Return what the motor lag costs; nothing where there is none."""
    p = platform
    if p.motor_lag == 0.0:
        return []
    if predict:
        if gain != gain:
            return [f"motor_lag {p.motor_lag:.4g} s costs no speed: the error is taken after it (derived)."]
        times = [sampled_step(gain, p.period, p.dead_time, lag, predict=True).time for lag in (p.motor_lag, 0.0)]
        return [
            f"motor_lag {p.motor_lag:.4g} s costs no speed, for the error is taken after it, and {times[0] - times[1]:.3g} s "
            "of settling (derived)."
        ]
    without = window(replace(p, motor_lag=0.0), radius, None, predict).fastest
    if without <= found.fastest:
        return [f"motor_lag {p.motor_lag:.4g} s costs no speed: another number binds (derived)."]
    cost = without - found.fastest
    return [f"motor_lag {p.motor_lag:.4g} s costs {cost:.3g} m/s: without it {rounded_down(without):g} m/s (derived)."]
