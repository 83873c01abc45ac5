"""Settings: what the step knows of robot and task, derived from the platform, and what cannot work refused with a sentence.

SI units. The depths within the capture disc are where stops are aimed and begun; noise of the position deepens them.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from steerkit import windows
from steerkit.checks import check_above_zero, check_not_negative, rounded_down, rounded_up, shown
from steerkit.gain_limits import slowest_root
from steerkit.platforms import Platform

PRINTED = 1e-3  # a gain that was read from a sentence, four digits, is one of the window
QUIET = 0.05  # of the fastest turn: what noise of the heading may move the turn rate by, standard deviation; chosen
STOP_DEPTH, AIM_DEPTH = 0.02, 0.05  # of the capture radius: how deep the schedule's stops end, and its braking
FLAGS = {
    "constant_speed": "True drives at constant speed, False by the schedule",
    "predict": "True takes the error where the command takes effect",
}


class Settings(NamedTuple):
    """What the step knows of robot and task; packed once into a row of floats. SI units."""

    period: float
    dead_time: float
    motor_lag: float
    top_speed: float
    reverse_speed: float
    top_turn_rate: float
    wheel_speed: float
    half_track: float
    acceleration: float
    braking: float
    turn_acceleration: float
    position_noise: float
    heading_noise: float
    capture_radius: float
    stay_radius: float
    stop_radius: float
    aim_radius: float
    cruise: float
    ceiling: float
    gain: float
    integral_time: float
    derivative_time: float
    predict: float
    stale_after: float
    rest_radius: float
    scheduled: float
    settling: float
    smallest_wheel_speed: float
    wheel_speed_step: float
    most_raised: float


def scheduled_settings(platform: Platform, capture_radius: float, stale_after: float | None) -> Settings:
    """Return the settings of the speed schedule."""
    noise = platform.position_noise
    settling = settling_time(platform)
    return common_settings(platform, capture_radius, stale_after)._replace(
        stop_radius=capture_radius - max(2.0 * noise, STOP_DEPTH * capture_radius),
        aim_radius=capture_radius - max(4.0 * noise, AIM_DEPTH * capture_radius),
        gain=1.0 / settling,
        settling=settling,
    )


def constant_settings(
    platform: Platform,
    capture_radius: float,
    stale_after: float | None,
    speed: object,
    gain: object,
    integral_time: object,
    derivative_time: object,
    predict: bool,
) -> tuple[Settings, windows.Window]:
    """Return the settings of a constant speed, and the window of gains there."""
    window = windows.window(platform, capture_radius, checked_speed(platform, speed), predict)
    cruise = window.fastest if speed is None else float(speed)  # type: ignore[arg-type]
    check_window(platform, window, cruise, capture_radius)
    chosen = checked_gain(platform, window, gain, integral_time, derivative_time, predict)
    depth = windows.stop_depth(capture_radius, platform.position_noise)
    settings = common_settings(platform, capture_radius, stale_after)._replace(
        stop_radius=capture_radius * (1.0 - depth / 2.0),
        aim_radius=capture_radius * (1.0 - max(depth, 0.2)),
        cruise=cruise,
        ceiling=window.ceiling,
        gain=chosen,
        integral_time=float(integral_time),  # type: ignore[arg-type]
        derivative_time=float(derivative_time),  # type: ignore[arg-type]
        predict=float(predict),
        scheduled=0.0,
        settling=1.0 / chosen,
    )
    return settings, window


def common_settings(platform: Platform, capture_radius: float, stale_after: float | None) -> Settings:
    """Return what both laws share; what only one knows is of the schedule, or idle."""
    p = platform
    return Settings(
        period=p.period,
        dead_time=p.dead_time,
        motor_lag=p.motor_lag,
        top_speed=p.top_speed,
        reverse_speed=p.reverse_speed_limit,
        top_turn_rate=p.turn_rate_limit,
        wheel_speed=p.wheel_speed_limit,
        half_track=p.track_width / 2.0,
        acceleration=p.acceleration,
        braking=p.braking,
        turn_acceleration=p.turn_acceleration,
        position_noise=p.position_noise,
        heading_noise=p.heading_noise,
        capture_radius=capture_radius,
        stay_radius=capture_radius + 4.0 * p.position_noise,
        stop_radius=math.nan,
        aim_radius=math.nan,
        cruise=p.top_speed,
        ceiling=p.top_turn_rate,
        gain=math.nan,
        integral_time=math.inf,
        derivative_time=0.0,
        predict=1.0,
        stale_after=checked_age(p, stale_after),
        rest_radius=capture_radius - 2.0 * p.position_noise,
        scheduled=1.0,
        settling=math.nan,
        smallest_wheel_speed=p.smallest_wheel_speed,
        wheel_speed_step=p.wheel_speed_resolution,
        most_raised=most_raised(p, capture_radius),
    )


def most_raised(platform: Platform, capture_radius: float) -> float:
    """Return how far the smallest wheel speed may be raised where the robot does not answer (m/s): what works, within reason."""
    p = platform
    reason = max(3.0 * p.slowest_wheel_speed, 0.1 * p.top_speed)
    return min(windows.CHORD * capture_radius / p.period, p.top_turn_rate * p.track_width / 2.0, p.top_speed, reason)


def check_flags(**given: object) -> None:
    for name, flag in given.items():
        if not isinstance(flag, (bool, np.bool_)):
            raise TypeError(f"{name}={flag!r} must be True or False; {FLAGS[name]}")


def settling_time(platform: Platform) -> float:
    """Return the time constant (s) at which the schedule takes out the last of a heading error.

    One period, where noise of the heading and an error of the delay allow it (a gain of 2/delay bears 30 %; see `windows`).
    """
    delay = platform.dead_time + platform.motor_lag
    quiet = platform.heading_noise / (QUIET * platform.top_turn_rate)
    return max(platform.period, quiet, delay / windows.DELAYS)


def check_scheduled(**given: object) -> None:
    """Refuse what only a constant speed has."""
    idle = {"speed": None, "gain": None, "integral_time": math.inf, "derivative_time": 0.0, "predict": True}
    for name, value in given.items():
        if value is not idle[name] and value != idle[name]:
            raise ValueError(f"{name}={value!r} is for constant_speed=True; pass that too, or leave {name} out")


def checked_speed(platform: Platform, speed: object) -> float | None:
    if speed is None:
        return None
    asked = check_above_zero("speed", speed, "m/s", "give the constant speed, or leave it out for the fastest workable")
    for name in ("speed_limit", "wheel_speed_limit"):
        most = getattr(platform, name)
        if asked > most:
            raise ValueError(f"speed={shown(asked, 'm/s')} must be <= {name}={shown(rounded_down(most), 'm/s')}; ask for less")
    if asked < platform.slowest_wheel_speed:
        least = shown(rounded_up(platform.slowest_wheel_speed), "m/s")
        raise ValueError(f"speed={shown(asked, 'm/s')} must be >= {least}, the slowest that the wheels can run; ask for more")
    return asked


def check_window(platform: Platform, found: windows.Window, speed: float, capture_radius: float) -> None:
    """Refuse a speed at which no gain works, with the binding reason and the fastest speed at which one does."""
    workable = shown(rounded_down(found.fastest), "m/s")
    slowest = platform.slowest_wheel_speed
    if found.fastest < slowest:
        raise ValueError(
            f"constant_speed=True: the fastest that works is {workable}, slower than the wheels can run ({shown(slowest, 'm/s')}); "
            "leave it out, for the schedule turns on the spot, or widen capture_radius"
        )
    if speed * platform.period > windows.CHORD * capture_radius * (1.0 + 1e-12):
        raise ValueError(
            f"capture_radius={shown(capture_radius, 'm')} must be >= speed * period / {windows.CHORD:g} = "
            f"{shown(rounded_up(speed * platform.period / windows.CHORD), 'm')}, for a step must not pass over the disc; "
            f"widen it, or drive at {workable} or less"
        )
    if speed > found.fastest * (1.0 + 1e-12):
        raise ValueError(f"speed={shown(speed, 'm/s')}: no gain works, bound by {found.bound}; at {workable} or less one does")


def checked_gain(
    platform: Platform, found: windows.Window, gain: object, integral_time: object, derivative_time: object, predict: bool
) -> float:
    chosen = windows.chosen_gain(platform, found)
    if gain is not None:
        chosen = check_above_zero("gain", gain, "1/s", "give turn rate per heading error, or leave it out")
        if not found.low * (1.0 - PRINTED) <= chosen <= found.high * (1.0 + PRINTED):
            what = "circles the goal" if chosen < found.low else "swings"
            working = f"{found.low:.4g} to {found.high:.4g} 1/s"
            raise ValueError(f"gain={shown(chosen, '1/s')} {what}; give {working}, or leave it out")
    if not (isinstance(integral_time, (float, np.floating)) and integral_time == math.inf):
        check_above_zero("integral_time", integral_time, "s", "give the time in which the integral repeats the error; inf for none")
    check_not_negative("derivative_time", derivative_time, "s", "give the time by which the derivative looks ahead; 0 for none")
    delay = () if predict else (platform.dead_time, platform.motor_lag)
    size = slowest_root(chosen, float(integral_time), float(derivative_time), platform.period, *delay)  # type: ignore[arg-type]
    if size >= 1.0:
        raise ValueError(
            f"gain={shown(chosen, '1/s')} with integral_time={shown(integral_time, 's')} and "
            f"derivative_time={shown(derivative_time, 's')} swings for ever; lengthen the first or shorten the second"
        )
    return chosen


def checked_age(platform: Platform, stale_after: object) -> float:
    if stale_after is None:
        return platform.dead_time + 3.0 * platform.period
    age = check_above_zero("stale_after", stale_after, "s", "give the age at which a pose is too old")
    if age < platform.period:
        raise ValueError(
            f"stale_after={shown(age, 's')} must be >= period={shown(rounded_up(platform.period), 's')}; a fresh pose must count"
        )
    if age > 20.0:
        raise ValueError(f"stale_after={shown(age, 's')} must be <= 20 s; a pose that old says nothing")
    return age
