"""Controller: the step that a control loop calls.

Construction is where things fail, with a sentence. `step` is pure and never raises on data: the same memory and measurement give
the same bits, and bad data becomes a stop within the limits and a cause that says why.
"""

from __future__ import annotations

import functools
import math

import numpy as np
from numpy.typing import NDArray

from steerkit import compiled
from steerkit.checks import rounded_down, shown
from steerkit.intake import BELIEVED, MEASURED
from steerkit.memory_row import FAR, fresh_kernel
from steerkit.platforms import Platform
from steerkit.reading import PLAIN, SEVENTEEN, numbers
from steerkit.settings import Settings, check_flags, check_scheduled, constant_settings, scheduled_settings
from steerkit.signals import HEAD, Causes, Command, Decision, Measurement, Memory, Motion, Phase, Pose, Report, Slowing
from steerkit.step import RESULT, in_place_kernel, step_kernel
from steerkit.windows import Window, checked_radius

__all__ = ["Controller", "InPlace"]

Array = NDArray[np.float64]

NAN = math.nan
PHASES = tuple(Phase)
SLOWING = tuple(Slowing)
record = tuple.__new__  # fills a named tuple past its own constructor, in two thirds of the time
causes_of = functools.cache(Causes)  # at most 2**16 of them


class Controller:
    """Drives a platform to goals: nearly as fast as its limits allow, or at constant speed.

    Parameters
    ----------
    platform : Platform
    capture_radius : float, m
        Disc about the goal within which the middle of the axle shall come to rest.
    constant_speed : bool
        Drive at constant speed, with a heading gain; else (default) by the schedule, which slows for turns and brakes late.
        The next five are for constant speed only.
    speed : float, m/s, optional
        The fastest workable one if not given. Above that one construction refuses.
    gain : float, 1/s, optional
        Heading gain; chosen in the window of `sizing` if not given. Outside the window construction refuses.
    integral_time, derivative_time : float, s
        For PI and PID; infinite and 0, the default, make P. A gain that then swings for ever is refused.
    predict : bool
        Take the heading error where the command takes effect (default), or at the measured pose.
    stale_after : float, s, optional
        Age at which a pose is too old to be carried; dead time plus three periods if not given.

    Raises
    ------
    TypeError, ValueError
        Numbers that cannot work, with the binding reason and the nearest that can.

    Examples
    --------
    >>> cart = Platform(radius=0.30, track_width=0.42, wheel_speed_limit=1.1, speed_limit=0.9, turn_rate_limit=2.0,
    ...                 acceleration=0.8, braking=1.2, turn_acceleration=5.0, period=0.05, dead_time=0.12)
    >>> controller = Controller(cart, capture_radius=0.10)
    >>> decision = controller.step(controller.start(time=0.0), Measurement(time=0.0, pose=(0, 0, 0), goal=(2, 0)))
    >>> print(decision)
    driving: +0.040 m/s, +0.000 rad/s; goal 2.000 m away, +0.0 deg off; slowed by acceleration (acceleration limit)
    """

    __slots__ = ("_plain", "_row", "_rows", "_size", "capture_radius", "platform", "settings", "window")

    def __init__(
        self,
        platform: Platform,
        *,
        capture_radius: float,
        constant_speed: bool = False,
        speed: float | None = None,
        gain: float | None = None,
        integral_time: float = math.inf,
        derivative_time: float = 0.0,
        predict: bool = True,
        stale_after: float | None = None,
    ) -> None:
        radius = checked_radius(platform, capture_radius)
        check_flags(constant_speed=constant_speed, predict=predict)
        self.platform = platform
        self.capture_radius = radius
        self.window: Window | None = None
        law = {"speed": speed, "gain": gain, "integral_time": integral_time, "derivative_time": derivative_time, "predict": predict}
        if constant_speed:
            settings, self.window = constant_settings(platform, self.capture_radius, stale_after, **law)  # type: ignore[arg-type]
        else:
            check_scheduled(**law)
            settings = scheduled_settings(platform, self.capture_radius, stale_after)
        self._set(settings)

    def _set(self, settings: Settings) -> None:
        self.settings = settings
        self._plain = list(settings)
        self._row = np.array(settings)
        held = 2.0 * settings.dead_time + settings.stale_after
        self._rows = math.ceil(held / settings.period) + 3
        self._size = HEAD + 3 * self._rows
        self._row.setflags(write=False)
        readable = np.zeros(self._size)
        readable.setflags(write=False)
        compiled.compile_once(step_kernel, self._row, readable, (0.0,) * MEASURED, np.zeros(self._size))
        compiled.compile_once(fresh_kernel, np.zeros(self._size), self._rows, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0)

    @property
    def speed(self) -> float:
        """Fastest speed that it drives at, m/s."""
        return self.settings.cruise

    @property
    def gain(self) -> float:
        """Heading gain, 1/s; with the schedule, that of the last of a turn."""
        return self.settings.gain

    def unchecked(self, **changes: float) -> Controller:
        """Return a controller with some settings replaced and none checked: for experiments that must be able to fail."""
        other = object.__new__(Controller)
        other.platform, other.capture_radius, other.window = self.platform, self.capture_radius, self.window
        other._set(self.settings._replace(**changes))
        return other

    def start(self, time: float, motion: tuple[float, float] = (0.0, 0.0)) -> Memory:
        """Return the memory to begin with at `time` (s), for a robot at rest or already in motion (m/s, rad/s)."""
        began, v, w = float(time), float(motion[0]), float(motion[1])
        if not (abs(began) <= FAR and math.isfinite(v) and math.isfinite(w)):
            raise ValueError(f"start(time={time!r}, motion={motion!r}) must be finite; give seconds, m/s and rad/s")
        wheel = abs(v) + abs(w) * self.settings.half_track
        most = BELIEVED * self.settings.wheel_speed
        if wheel > most:
            raise ValueError(
                f"motion={motion!r} turns a wheel at {shown(wheel, 'm/s')}; it must be <= {shown(rounded_down(most), 'm/s')}, "
                "twice wheel_speed_limit; give m/s and rad/s"
            )
        row = np.empty(self._size)
        s = self.settings
        fresh_kernel(row, self._rows, began, v, w, s.period, s.stale_after, s.smallest_wheel_speed)  # type: ignore[arg-type]
        return Memory.of(row)

    def step(self, memory: Memory, measurement: Measurement) -> Decision:
        """Return what to do now. Pure; never raises on data.

        Parameters
        ----------
        memory : Memory
            From `start`, or of the last decision.
        measurement : Measurement

        Returns
        -------
        Decision
            Drive `command`, keep `memory` for the next step; `phase`, `causes` and `report` say why.
        """
        try:
            time, pose, goal, pose_time, frame, speed, turn_rate, limit, hold, applied, next_goal = measurement
            x, y, heading = pose  # type: ignore[misc]  # None, like anything else, goes the slower way below
            goal_x, goal_y = goal  # type: ignore[misc]
            applied_v, applied_w = applied  # type: ignore[misc]
            next_x, next_y = next_goal  # type: ignore[misc]
            if not (
                pose.__class__ in PLAIN and goal.__class__ in PLAIN and applied.__class__ in PLAIN and next_goal.__class__ in PLAIN
            ):
                raise TypeError
            first = (time, x, y, heading, pose_time, goal_x, goal_y, frame, speed, turn_rate, limit, hold)
            measured = SEVENTEEN.unpack(SEVENTEEN.pack(*first, applied_v, applied_w, next_x, next_y, 0.0))
        except Exception:  # anything at all may stand in a measurement
            measured = numbers(measurement)
        row = memory.row if isinstance(memory, Memory) else None
        if row is None or row.shape != (self._size,):
            row = np.full(self._size, NAN)
        out = np.empty(self._size)
        if compiled.ON:
            r = step_kernel(self._row, row, measured, out)  # type: ignore[arg-type]
        else:
            kept = [0.0] * self._size
            r = step_kernel(self._plain, row.tolist(), measured, kept)
            out[:] = kept
        wanted, slowed_by = record(Motion, r[14:16]), SLOWING[int(r[16])]
        report = record(Report, (r[6], r[7], record(Pose, r[8:11]), r[11], r[12:14], wanted, slowed_by, r[17]))
        return record(Decision, (record(Command, r[:4]), PHASES[int(r[4])], causes_of(int(r[5])), report, Memory.of(out)))

    def in_place(self, time: float, motion: tuple[float, float] = (0.0, 0.0)) -> InPlace:
        """Return the door for fast loops and recorders: one row of floats that `step()` reads and writes."""
        return InPlace(self, self.start(time, motion))

    def __repr__(self) -> str:
        return f"Controller(speed={self.speed:.4g} m/s, gain={self.gain:.4g} 1/s, capture_radius={self.capture_radius:.4g} m)"

    def __str__(self) -> str:
        s, w = self.settings, self.window
        turning = f"Turn rate up to {min(s.ceiling, self.platform.top_turn_rate):.3g} rad/s."
        if w is None:
            lines = [
                f"Speed by schedule, up to {rounded_down(self.speed):g} m/s; braking ends {s.aim_radius:.3g} m from the goal.",
                turning + f" The last of a turn takes {s.settling:.3g} s.",
            ]
        else:
            kept = "the fastest workable" if self.speed == w.fastest else f"the fastest workable is {rounded_down(w.fastest):g} m/s"
            lines = [
                f"Constant speed {rounded_down(self.speed):g} m/s ({kept}; bound by {w.bound}).",
                f"Heading gain {self.gain:.4g} 1/s; those from {w.low:.4g} to {w.high:.4g} 1/s work.{terms(s)}",
                turning,
            ]
        lines.append("Unguarded: no range sensor; nothing here looks for obstacles.")
        return "\n".join(lines + self.platform.notes())


def terms(settings: Settings) -> str:
    """Return what a sentence on the gain lacks where it is not P alone."""
    s = settings
    integral = f" integral time {s.integral_time:g} s" if s.integral_time < math.inf else ""
    derivative = f" derivative time {s.derivative_time:g} s" if s.derivative_time > 0.0 else ""
    both = ",".join(one for one in (integral, derivative) if one)
    return f" With{both} (the range is that of P alone)." if both else ""


class InPlace:
    """A row of floats [memory | measurement | result], with named views, stepped in place.

    `MEASURED` and `RESULT` name the places of `measurement` and `result`; the last of the former stays 0.
    """

    MEASURED = (
        *("time", "x", "y", "heading", "pose_time", "goal_x", "goal_y", "goal_frame", "speed", "turn_rate"),
        *("speed_limit", "hold", "applied_speed", "applied_turn_rate", "next_goal_x", "next_goal_y", "garbage"),
    )
    RESULT = (
        *("left", "right", "speed", "turn_rate", "phase", "causes", "heading_error", "distance", "x", "y", "heading"),
        *("pose_age", "goal_x", "goal_y", "wanted_speed", "wanted_turn_rate", "slowed_by", "slowest"),
    )
    __slots__ = ("_arguments", "_controller", "measurement", "memory", "result", "row")

    def __init__(self, controller: Controller, memory: Memory) -> None:
        size = len(memory.row)
        self._controller = controller
        self.row = np.full(size + MEASURED + RESULT, NAN)
        self.memory, self.measurement, self.result = np.split(self.row, [size, size + MEASURED])
        self.memory[:] = memory.row
        self.measurement[[7, 11, MEASURED - 1]] = 0.0
        self._arguments = (controller._row, self.row, size)
        compiled.compile_once(in_place_kernel, *self._arguments)

    def step(self) -> Array:
        """Step once on `measurement`; return `result`."""
        if compiled.ON:
            in_place_kernel(*self._arguments)  # type: ignore[arg-type]
        else:
            kept = self.memory.tolist()
            self.result[:] = step_kernel(self._controller._plain, kept, self.measurement.tolist(), kept)
            self.memory[:] = kept
        return self.result
