"""Sizing: the gain of a constant speed with its margins and its reasons; where none works, the nearest changes that would do.

The heading loop is turn_rate = clip(gain * error, +-ceiling). A gain works at a speed when it is high enough not to circle the goal
outside its capture disc, and low enough not to swing. SI units; gains in 1/s. Derived, unless a source is given.

With prediction the loop sees its error where the command takes effect, and behaves as if there were no delay and no lag.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import NamedTuple

import numpy as np

from steerkit.checks import check_above_zero, rounded_down, rounded_up, shown
from steerkit.gain_limits import no_overshoot_gain, sampled_step, slowest_root, stable_gain
from steerkit.gain_reasons import reasons
from steerkit.margins import Margins, margins, prediction_margin
from steerkit.pictures import GainWindow, draw_window
from steerkit.platforms import SHORTEST_PERIOD, Platform
from steerkit.windows import (
    Window,
    best_ceiling,
    checked_radius,
    chosen_gain,
    circles,
    no_ringing_gain,
    orbit_radius,
    speed_bounds,
    window,
)

__all__ = [
    "Change",
    "Sizing",
    "Window",
    "no_overshoot_gain",
    "no_ringing_gain",
    "orbit_radius",
    "size",
    "slowest_root",
    "stable_gain",
    "window",
]

LINE = 108  # characters of a printed line
PRINTED = 1e-3  # a gain that was read from a sentence, four digits, is one of the window


class Change(NamedTuple):
    """One change that alone makes a refused demand work: the argument or number of the platform, its new value, its unit."""

    name: str
    value: float
    unit: str

    def __str__(self) -> str:
        if self.name == "predict":
            return "predict=True"
        more = "at least" if self.name in MORE or self.name == "capture_radius" else "at most"
        return f"{self.name} {more} {shown(self.value, self.unit)}"


MORE = {"turn_rate_limit": 30.0, "turn_acceleration": 1000.0, "speed_limit": 100.0, "wheel_speed_limit": 100.0}
LESS = {"dead_time": 0.0, "motor_lag": 0.0, "period": SHORTEST_PERIOD}
UNITS = {"turn_rate_limit": "rad/s", "turn_acceleration": "rad/s^2", "speed_limit": "m/s", "wheel_speed_limit": "m/s"}


@dataclass(frozen=True, slots=True)
class Sizing:
    """The sizing report of a heading loop at constant speed; `print` it.

    Attributes
    ----------
    platform : Platform
    capture_radius, speed : float
        m; m/s, as asked for, or the fastest workable.
    predict : bool
    works : bool
        Whether the gain works at the speed; where it does not, `reason` names the number that binds and `changes` holds the
        nearest changes each of which alone would do.
    window : Window
    gain : float
        1/s; NaN where none works.
    margins : Margins or None
        Of the loop that the controller runs: with prediction, without the delay.
    shorter, longer : float
        s; how much the true dead time may fall short of the declared one, and exceed it, before the loop is unstable. Infinite
        for `shorter` where none at all is borne.
    settling_time : float
        s; until the heading stays within 2 % of a small error.
    longest_settling_time : float
        s; the same from any error up to pi, at the ceiling and with the turn acceleration.
    orbit_radius : float
        m; of the circle about the goal that the robot would end in, were it not captured.
    why : tuple of str
        Sentences, each with its number and its source, or "derived", "measured", "chosen".
    """

    platform: Platform
    capture_radius: float
    speed: float
    predict: bool
    works: bool
    reason: str
    changes: tuple[Change, ...]
    window: Window
    gain: float
    margins: Margins | None
    shorter: float
    longer: float
    settling_time: float
    longest_settling_time: float
    orbit_radius: float
    why: tuple[str, ...]

    @property
    def overshoot(self) -> float:
        """Overshoot of a small heading step, as a share of it; NaN where no gain works."""
        return self.margins.overshoot if self.margins else math.nan

    def save_picture(self, path: str | Path) -> None:
        """Save the picture of the window, gain against speed; needs Matplotlib, and no display."""
        draw_window(shown_window(self), path)

    def __str__(self) -> str:
        return "\n".join(report(self))


def size(
    platform: Platform,
    capture_radius: float,
    speed: float | None = None,
    predict: bool = True,
    gain: float | None = None,
) -> Sizing:
    """Return which heading gains work, the chosen one, its margins, and why; a demand that cannot work is told, not raised.

    Parameters
    ----------
    platform : Platform
    capture_radius : float, m
    speed : float, m/s, or None for the fastest workable
    predict : bool
        Whether the heading error is taken where the command takes effect.
    gain : float, 1/s, or None for the chosen one

    Returns
    -------
    Sizing

    Examples
    --------
    >>> cart = Platform(radius=0.30, track_width=0.42, wheel_speed_limit=1.1, speed_limit=0.9, turn_rate_limit=2.0,
    ...                 acceleration=0.8, braking=1.2, turn_acceleration=5.0, period=0.05, dead_time=0.12)
    >>> size(cart, capture_radius=0.10, speed=0.5).changes[0]
    Change(name='speed', value=0.1818, unit='m/s')
    """
    radius = checked_radius(platform, capture_radius)
    if not isinstance(predict, (bool, np.bool_)):
        raise TypeError(f"predict={predict!r} must be True or False; True takes the error where the command takes effect")
    if gain is not None:
        gain = check_above_zero("gain", gain, "1/s", "give turn rate per heading error, or leave it out")
    predict = bool(predict)
    found = window(platform, radius, speed, predict)
    asked = found.fastest if speed is None else float(speed)
    chosen = chosen_gain(platform, found) if gain is None else gain
    why = reasons(platform, radius, asked, predict, found, chosen)
    if too_fast(platform, radius, asked, predict):
        changes = changes_for(platform, radius, asked, predict, found)
        why = reasons(platform, radius, asked, predict, found, math.nan)
        nothing = (math.nan,) * 5
        return Sizing(platform, radius, asked, predict, False, found.bound, changes, found, math.nan, None, *nothing, why)
    works = found.low * (1.0 - PRINTED) <= chosen <= found.high * (1.0 + PRINTED)
    near = Change("gain", rounded_up(found.low) if chosen < found.low else rounded_down(found.high), "1/s")
    reason, changes = ("", ()) if works else ("gain", (near,))
    judged = judgement(platform, asked, predict, chosen, found.ceiling)
    orbit = orbit_radius(asked, chosen, found.ceiling)
    return Sizing(platform, radius, asked, predict, works, reason, changes, found, chosen, *judged, orbit, why)


def judgement(
    platform: Platform, speed: float, predict: bool, gain: float, ceiling: float
) -> tuple[Margins, float, float, float, float]:
    """Return the margins, how much shorter and longer the dead time may truly be, and the two settling times of a sizing (s)."""
    p = platform
    delay = (0.0, 0.0) if predict else (p.dead_time, p.motor_lag)
    judged = margins(gain, period=p.period, dead_time=delay[0], motor_lag=delay[1])
    if not judged.stable:
        return judged, 0.0, 0.0, math.inf, math.inf
    shorter, longer = math.inf, judged.delay_margin
    if predict:
        shorter, longer = prediction_margin(gain, p.period, p.dead_time, p.motor_lag)
    small = sampled_step(gain, p.period, p.dead_time, p.motor_lag, predict=predict).time
    return judged, shorter, longer, small, longest_settling(p, speed, predict, gain, ceiling, small)


def longest_settling(p: Platform, speed: float, predict: bool, gain: float, ceiling: float, least: float) -> float:
    """Return the time (s) until the heading stays within 2 % of an error, the longest of errors up to pi, with all limits."""
    wheels = (speed, p.wheel_speed_limit, p.track_width / 2.0)
    limits = {"ceiling": ceiling, "turn_acceleration": p.turn_acceleration}

    def time(error: float) -> float:
        return sampled_step(gain, p.period, p.dead_time, p.motor_lag, predict=predict, step=error, wheels=wheels, **limits).time

    return max(least, *(time(error) for error in np.linspace(math.pi / 8.0, math.pi, 8).tolist()))


def too_fast(platform: Platform, capture_radius: float, speed: float, predict: bool) -> bool:
    """Say whether no gain works at a speed (m/s)."""
    most = min(speed_bounds(platform, capture_radius).values())
    slower = speed * (1.0 - 1e-12)
    return slower > most or circles(platform, capture_radius, slower, predict)


def changes_for(platform: Platform, radius: float, speed: float, predict: bool, found: Window) -> tuple[Change, ...]:
    """Return the nearest changes each of which alone makes a speed workable, to four digits on the safe side, sized again."""
    changes = [Change("speed", rounded_down(found.fastest), "m/s")]

    def fails(name: str, value: float) -> bool:
        if name == "capture_radius":
            return too_fast(platform, value, speed, predict)
        try:
            return too_fast(replace(platform, **{name: value}), radius, speed, predict)
        except ValueError:  # not a platform
            return True

    def nearest(name: str, value: float, most: float, rounded: Callable[[float], float]) -> None:
        if most != value and not fails(name, most):
            bad, good = value, most
            for _ in range(50):
                middle = 0.5 * (bad + good)
                bad, good = (middle, good) if fails(name, middle) else (bad, middle)
            good = rounded(good) if good > 0.0 else 0.0
            if not fails(name, good):
                unit = "m" if name == "capture_radius" else UNITS.get(name, "s")
                changes.append(Change(name, good, unit))

    nearest("capture_radius", radius, 1000.0 * radius, rounded_up)
    for name, most in MORE.items():
        nearest(name, getattr(platform, name), max(most, getattr(platform, name)), rounded_up)
    for name, least in LESS.items():
        if name == "period" or not predict:
            nearest(name, getattr(platform, name), min(least, getattr(platform, name)), rounded_down)
    if not predict and not too_fast(platform, radius, speed, True):
        changes.append(Change("predict", 1.0, ""))
    return tuple(changes)


def report(s: Sizing) -> list[str]:
    """Return the lines of a printed sizing."""
    w, how = s.window, "with prediction" if s.predict else "without prediction"
    lines = [f"Heading loop at constant speed, {how}, capture radius {shown(s.capture_radius, 'm')}"]
    if s.margins is None:
        lines.append(f"  NO GAIN WORKS at {shown(s.speed, 'm/s')}: bound by {s.reason}. Any one of these would do:")
        lines += [f"    {one}" for one in s.changes]
    else:
        if not s.works:
            fault = "circles the goal" if s.gain < w.low else "swings"
            nearest = f"the nearest that works is {s.changes[0].value:g} 1/s"
            lines.append(f"  DOES NOT WORK: gain {shown(s.gain, '1/s')} {fault}; {nearest}")
        lines += [f"  {name:13}{value:13}{note}" for name, value, note in [*point_rows(s), *margin_rows(s, s.margins)]]
    lines.append("Why:")
    for sentence in s.why:
        lines += textwrap.wrap(sentence, LINE, initial_indent="  - ", subsequent_indent="    ")
    return lines


def point_rows(s: Sizing) -> list[tuple[str, str, str]]:
    """Return the printed rows of the point that is driven at."""
    w = s.window
    fastest = "the fastest workable" if s.speed >= w.fastest else f"up to {rounded_down(w.fastest):g} m/s works"
    return [
        ("speed", f"{rounded_down(s.speed):g} m/s", f"{fastest}; bound by {w.bound}"),
        ("gain", f"{s.gain:.4g} 1/s", f"{w.low:.4g} to {w.high:.4g} 1/s work"),
        ("turn rate", f"{min(w.ceiling, s.platform.top_turn_rate):.3g} rad/s", "at most"),
        ("orbit", f"{s.orbit_radius:.3g} m", "radius of the circle that it would end in, were it not captured"),
    ]


def margin_rows(s: Sizing, m: Margins) -> list[tuple[str, str, str]]:
    """Return the printed rows of how the loop stands."""
    if not m.stable:
        return [("margins", "none", f"unstable; stable below {s.gain * m.gain_margin:.4g} 1/s")]
    large = f"{s.longest_settling_time:.3g} s of any up to 180 deg"
    return [
        ("gain margin", f"{m.gain_margin:.3g}", "times this gain the linear loop begins to swing for ever"),
        ("phase margin", f"{math.degrees(m.phase_margin):.3g} deg", f"sensitivity {m.sensitivity:.3g}"),
        ("dead time", f"{s.platform.dead_time:.4g} s", tolerated(s)),
        ("settling", f"{s.settling_time:.3g} s", f"to 2 % of a small error; {large}"),
        ("overshoot", f"{100.0 * m.overshoot:.2g} %", "of a small heading step"),
    ]


def tolerated(s: Sizing) -> str:
    """Say how wrong the declared dead time may be."""
    more = f"{s.longer:.3g} s longer"
    if not s.predict:
        return f"stable while it is truly less than {more}"
    return f"stable while it is truly less than {more}" + (f" and {s.shorter:.3g} s shorter" if s.shorter < math.inf else "")


def shown_window(s: Sizing) -> GainWindow:
    """Return what the picture of a sizing shows."""
    w = s.window
    end = min(1.18 * max(w.fastest, s.speed), 3.0 * w.fastest)
    speeds = np.union1d(np.linspace(end / 1000.0, end, 100), [w.fastest]).tolist()
    low = [w.margin * 2.0 * v / (math.pi * s.capture_radius) for v in speeds]
    high = [no_ringing_gain(s.platform, v, best_ceiling(s.platform, v, s.predict), s.predict) for v in speeds]
    own = s.margins is None or s.gain == chosen_gain(s.platform, w)
    name = f"{'chosen' if own else 'asked'}: {s.gain:.3g} 1/s at {s.speed:.3g} m/s"
    if s.works and own and s.gain < 0.999 * w.high:
        name += f"\n{w.high:.3g} 1/s would still not swing"
    if not s.works:
        name += "\ncircles the goal" if s.gain < w.low else "\nswings"
    title = f"Gains that work, {'with' if s.predict else 'without'} prediction, capture radius {s.capture_radius:.3g} m"
    asked = s.speed if s.margins is None else math.nan
    return GainWindow(speeds, low, high, w.fastest, w.bound, s.speed, s.gain, name, asked, title)
