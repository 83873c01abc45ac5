"""Signals: what flows through a step, in and out.

Measurement and memory in; decision out: command, phase, causes, report, memory. SI units, radians, ISO 8855 frames. NaN or None
means missing. Everything is a value: it prints, compares (but for a NaN, which equals nothing), and can be stored and replayed.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from enum import IntEnum, IntFlag
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "Causes",
    "Command",
    "Decision",
    "Frame",
    "Measurement",
    "Memory",
    "Motion",
    "Phase",
    "Pose",
    "Report",
    "Slowing",
    "Wheels",
]

NAN = math.nan
Row = Sequence[float] | NDArray[Any]


class Pose(NamedTuple):
    """Position (m) and heading (rad) in the world frame."""

    x: float
    y: float
    heading: float


class Motion(NamedTuple):
    """Speed along the heading (m/s, forward positive) and turn rate (rad/s, counter-clockwise positive)."""

    speed: float
    turn_rate: float


class Wheels(NamedTuple):
    """Speeds of the left and the right wheel over the floor (m/s)."""

    left: float
    right: float


class Frame(IntEnum):
    """Where a goal's numbers count from."""

    WORLD = 0
    """x, y in the frame of the pose."""
    ROBOT = 1
    """Ahead and left of the robot at `pose_time`, as a camera sees it; the pose may then be missing."""


class Measurement(NamedTuple):
    """What is known at one step. NaN or None: missing.

    Parameters
    ----------
    time : float, s
        Monotonic time of this step.
    pose : (float, float, float), m, m, rad
        x, y, heading.
    goal : (float, float), m
        In the world's or the robot's frame, see `goal_frame`. It may change at any step.
    pose_time : float, s
        When the pose (or the sighting of a goal in the robot's frame) was taken; this step's time if missing.
    goal_frame : Frame
    speed, turn_rate : float, m/s, rad/s
        Measured motion at `pose_time`, where there is one.
    speed_limit : float, m/s
        Limit of this step, besides the platform's.
    hold : bool
        Stand still: stop button, joystick, operator.
    applied : (float, float), m/s, rad/s
        The motion that the wheels were given during the period that ended now, where something overrode ours: a joystick, a
        safety controller, a drive that stopped by itself while the loop hung (0, 0).
    next_goal : (float, float), m
        Where there is one, `goal` is a way point: its disc is passed through without a stop, as fast as `next_goal` allows, and
        the phase is PASSED once the robot cannot but touch it. Then give `next_goal` as `goal`.
    """

    time: float | None
    pose: Row | None = (NAN, NAN, NAN)
    goal: Row | None = (NAN, NAN)
    pose_time: float | None = NAN
    goal_frame: int = Frame.WORLD
    speed: float | None = NAN
    turn_rate: float | None = NAN
    speed_limit: float | None = NAN
    hold: bool | float | None = False
    applied: Row | None = (NAN, NAN)
    next_goal: Row | None = (NAN, NAN)


class Command(NamedTuple):
    """Wheel speeds (m/s) and the motion they make (m/s, rad/s), to be held until the next step."""

    left: float
    right: float
    speed: float
    turn_rate: float


class Phase(IntEnum):
    """What the controller is doing: exactly one.

    Hold and bad data come first, then the goal:

    ==================  ==================================================  ========
    told to hold        or: no usable pose, goal or clock                   HELD
    neither             a way point's disc is touched, or will surely be    PASSED
    neither             at rest (command 0, wheels < 1 cm/s) in the disc    ARRIVED
    neither             else                                                DRIVING
    ==================  ==================================================  ========

    The wheels are at rest as measured, where `speed` or `turn_rate` is; else as modelled from the commands, dead time and lag.
    """

    DRIVING = 0
    ARRIVED = 1
    HELD = 2
    PASSED = 3


class Causes(IntFlag):
    """Why the command is what it is: any number of them. The first six are limits that bound."""

    NONE = 0
    SPEED_LIMIT = 1
    TURN_RATE_LIMIT = 2
    WHEEL_SPEED_LIMIT = 4
    ACCELERATION_LIMIT = 8
    BRAKING_LIMIT = 16
    TURN_ACCELERATION_LIMIT = 32
    TOLD_TO_HOLD = 64
    BAD_POSE = 128
    STALE_POSE = 256
    POSE_JUMPED = 512
    BAD_GOAL = 1024
    BAD_CLOCK = 2048
    BAD_FIELD = 4096
    BAD_MEMORY = 8192
    APPLIED_BY_OTHERS = 16384
    NO_ANSWER = 32768

    def words(self) -> str:
        """Return the causes in plain words, separated by commas."""
        return ", ".join(one.name.lower().replace("_", " ") for one in Causes if one in self and one.name) or "nothing to report"


class Slowing(IntEnum):
    """What keeps the speed from being higher: exactly one."""

    NONE = 0
    """Nothing: it drives as fast as it ever shall."""
    TURNING = 1
    """The goal is off the heading."""
    BRAKING = 2
    """It brakes for the goal, or for a way point."""
    STEP_LIMIT = 3
    """The `speed_limit` of this step, or a pose that is carried for want of a new one."""
    WHEEL_LIMIT = 4
    """The wheels cannot turn as asked and run faster."""
    ACCELERATION = 5
    """It is gaining speed as fast as it may."""
    STOPPING = 6
    """It stands, or stops: in its disc, held, or for want of data."""


class Report(NamedTuple):
    """What a log needs to explain the command.

    `heading_error` rad, at the pose where this command takes effect; `distance` m, now; `pose` carried to now (m, m, rad);
    `pose_age` s; `goal` m, in the world frame, the one driven to; `wanted` the motion that the laws ask for, before the limits of
    the robot (m/s, rad/s); `slowed_by` what keeps the speed from being higher; `slowest` the smallest wheel speed in use (m/s).
    """

    heading_error: float
    distance: float
    pose: Pose
    pose_age: float
    goal: tuple[float, float]
    wanted: Motion
    slowed_by: Slowing
    slowest: float


class Memory:
    """What a controller carries from step to step: one read-only row of floats. Equal where the bytes are equal."""

    __slots__ = ("row",)

    def __init__(self, row: NDArray[np.float64]) -> None:
        self.row = np.array(row, dtype=np.float64)
        self.row.setflags(write=False)

    @classmethod
    def of(cls, row: NDArray[np.float64]) -> Memory:
        """Return a memory that takes over a row which nobody else will write to."""
        made = object.__new__(cls)
        row.setflags(False)  # type: ignore[call-arg]  # by position: quicker
        made.row = row
        return made

    @property
    def time(self) -> float:
        """Time of the last step, s."""
        return float(self.row[0])

    @property
    def command(self) -> Motion:
        """The last command, m/s, rad/s."""
        return Motion(float(self.row[1]), float(self.row[2]))

    @property
    def under_way(self) -> NDArray[np.float64]:
        """Commands sent, the newest first, shape (n, 3): age at the last step s, speed m/s, turn rate rad/s."""
        return self.row[HEAD:].reshape(-1, 3)

    def to_bytes(self) -> bytes:
        """Return the row as bytes, for a log."""
        return self.row.tobytes()

    @classmethod
    def from_bytes(cls, stored: bytes) -> Memory:
        """Return the memory stored by `to_bytes`."""
        return cls(np.frombuffer(stored, dtype=np.float64))

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Memory) and self.row.tobytes() == other.row.tobytes()

    def __hash__(self) -> int:
        return hash(self.row.tobytes())

    def __reduce__(self) -> tuple[object, tuple[bytes]]:
        return Memory.from_bytes, (self.to_bytes(),)

    def __repr__(self) -> str:
        return f"Memory(time={self.time!r}, command={self.command}, under_way={len(self.under_way)})"


HEAD = 30  # floats of a memory row before the commands under way; their places are named in memory_row.py


class Decision(NamedTuple):
    """What a step decided: drive `command`, keep `memory` for the next step, log the rest."""

    command: Command
    phase: Phase
    causes: Causes
    report: Report
    memory: Memory

    def __str__(self) -> str:
        c, r = self.command, self.report
        away = f"goal {r.distance:.3f} m away" if r.distance == r.distance else "goal at an unknown distance"
        off = f", {math.degrees(r.heading_error):+.1f} deg off" if r.heading_error == r.heading_error else ""
        slow = (
            f"; slowed by {r.slowed_by.name.lower().replace('_', ' ')}"
            if r.slowed_by not in (Slowing.NONE, Slowing.STOPPING)
            else ""
        )
        does = f"{self.phase.name.lower()}: {c.speed:+.3f} m/s, {c.turn_rate:+.3f} rad/s"
        return f"{does}; {away}{off}{slow}" + (f" ({self.causes.words()})" if self.causes else "")
