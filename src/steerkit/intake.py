"""Intake: what a measurement says beside the memory: time, motion, command before, pose, goal, and what is wrong with them.

Nothing here decides anything. Bad data is left out, or replaced by what is known, and told as a cause.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from steerkit.angles import difference_kernel, wrap_kernel
from steerkit.approach import bearing_kernel
from steerkit.compiled import kernel
from steerkit.kinematics import to_world_kernel
from steerkit.memory_row import (
    FAR,
    FAST,
    GOAL_LOCAL,
    GOAL_X,
    GOAL_Y,
    HEADING,
    POSE_AGE,
    RAMP_SPEED,
    RAMP_TURN_RATE,
    SPEED,
    TURN_RATE,
    X,
    Y,
    usable_kernel,
)
from steerkit.signals import Causes, Frame

BELIEVED = 2.0  # of the wheel-speed limit: a motion beyond it was not given to these wheels
SIGMAS = 6.0 * math.sqrt(2.0)  # of the difference of two poses
MEASURED = 17  # numbers of a measurement: `reading.numbers` lists them
BAD_POSE, STALE_POSE, BAD_FIELD, OTHERS = (
    int(Causes.BAD_POSE),
    int(Causes.STALE_POSE),
    int(Causes.BAD_FIELD),
    int(Causes.APPLIED_BY_OTHERS),
)
ROBOT = float(Frame.ROBOT)


@kernel
def clock_kernel(time: float, last: float, period: float, stale_after: float) -> tuple[float, bool]:
    """Return the time since the last step, and whether the clock is good. A step on a bad clock counts as one period."""
    since = time - last
    good = usable_kernel(time, FAR) and 0.0 < since <= stale_after + period
    return (since if good else period), good


@kernel
def seen_kernel(measured: Sequence[float]) -> tuple[float, float, float, int]:
    """Return the measured motion (NaN where missing), the limit of this step (infinite for none), and what was wrong with them."""
    v, w, limit = measured[8], measured[9], measured[10]
    wrong = measured[16] != 0.0 or limit < 0.0
    if limit != limit:
        limit = math.inf
    if v == v and not usable_kernel(v, FAST):
        v, wrong = math.nan, True
    if w == w and not usable_kernel(w, FAST):
        w, wrong = math.nan, True
    return v, w, max(limit, 0.0), BAD_FIELD if wrong else 0


@kernel
def before_kernel(
    memory: Sequence[float], measured: Sequence[float], wheel: float, half_track: float
) -> tuple[float, float, float, float, int]:
    """Return the command before and the motion from which ramps go on: ours, or what the wheels were given instead of ours.

    The latter if these wheels can have been given it.
    """
    v, w = measured[12], measured[13]
    if abs(v) + abs(w) * half_track <= BELIEVED * wheel:
        return v, w, v, w, OTHERS
    trouble = BAD_FIELD if v == v or w == w else 0
    return memory[SPEED], memory[TURN_RATE], memory[RAMP_SPEED], memory[RAMP_TURN_RATE], trouble


@kernel
def pose_kernel(
    memory: Sequence[float], measured: Sequence[float], since: float, period: float, stale_after: float
) -> tuple[float, float, float, float, bool, int]:
    """Return the pose to go by (x, y, heading), its age, whether it is local, and what was wrong with the measured one.

    The measured one where it is usable; else, or where it is stale and older, the last that was. A goal seen from the robot needs
    none: the robot is the origin.
    """
    time, x, y, heading, pose_time = measured[0], measured[1], measured[2], measured[3], measured[4]
    age = 0.0 if pose_time != pose_time else time - pose_time
    posed = usable_kernel(x, FAR) and usable_kernel(y, FAR) and usable_kernel(heading, FAR)
    local = measured[7] == ROBOT and not posed
    known_age = memory[POSE_AGE] + since
    if not (-0.5 * period <= age <= FAR and (posed or local)):
        return memory[X], memory[Y], memory[HEADING], known_age, False, BAD_POSE
    if age > stale_after + 1e-9 and known_age < age and not local:
        return memory[X], memory[Y], memory[HEADING], known_age, False, STALE_POSE
    if local:
        return 0.0, 0.0, 0.0, max(age, 0.0), True, 0
    return x, y, wrap_kernel(heading), max(age, 0.0), False, 0


@kernel
def jumped_kernel(
    memory: Sequence[float],
    settings: Sequence[float],
    x: float,
    y: float,
    heading: float,
    span: float,
    v: float,
    w: float,
) -> bool:
    """Say whether the pose changed by more than the limits over `span`, plus six standard deviations of noise, explain.

    (v, w) is the fastest motion known of, should it be beyond the limits.
    """
    dx = x - memory[X]
    dy = y - memory[Y]
    far = max(settings[3], settings[4], v) * span + SIGMAS * settings[11]
    turned = difference_kernel(heading, memory[HEADING])
    return dx * dx + dy * dy > far * far or abs(turned) > max(settings[5], w) * span + SIGMAS * settings[12]


@kernel
def goal_kernel(
    memory: Sequence[float], measured: Sequence[float], x: float, y: float, heading: float, local: bool, radius: float
) -> tuple[float, float, bool, bool, float]:
    """Return the goal in the world, whether there is one, whether it is new (moved by more than its disc), how far it moved."""
    goal_x, goal_y, frame = measured[5], measured[6], measured[7]
    if not (usable_kernel(goal_x, FAR) and usable_kernel(goal_y, FAR) and (frame == 0.0 or frame == ROBOT)):
        return math.nan, math.nan, False, False, math.nan
    if frame == ROBOT:
        goal_x, goal_y = to_world_kernel(x, y, heading, goal_x, goal_y)
    moved, _ = bearing_kernel(memory[GOAL_X], memory[GOAL_Y], goal_x, goal_y)
    if local and memory[GOAL_LOCAL] != 0.0:
        moved = 0.0  # seen from a robot that knows no pose: it cannot be told
    return goal_x, goal_y, True, not moved <= radius, moved


@kernel
def next_goal_kernel(measured: Sequence[float], x: float, y: float, heading: float) -> tuple[float, float, int]:
    """Return the goal after this one in the world, NaN where there is none, and what was wrong with it."""
    next_x, next_y = measured[14], measured[15]
    if not (usable_kernel(next_x, FAR) and usable_kernel(next_y, FAR)):
        return math.nan, math.nan, BAD_FIELD if next_x == next_x or next_y == next_y else 0
    if measured[7] == ROBOT:
        next_x, next_y = to_world_kernel(x, y, heading, next_x, next_y)
    return next_x, next_y, 0
