"""The memory row: what a controller carries from step to step as floats, and the places in it.

In front, up to HEAD, one number each; behind them the commands under way, (age, speed, turn rate) each, the newest first. SI units.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from steerkit.compiled import kernel
from steerkit.prediction import motion_then_kernel
from steerkit.signals import HEAD

FAR = 1e12  # m, rad, s: a number beyond it is not a measurement
FAST = 1e4  # m/s, rad/s: nor is a motion beyond this

TIME, SPEED, TURN_RATE, X, Y, HEADING, POSE_AGE, BASE_AGE, BASE_SPEED, BASE_TURN_RATE = range(10)
GOAL_X, GOAL_Y, INTEGRAL, HEADING_BEFORE, PROGRESS, PHASE, GOAL_LOCAL, STAYS = range(10, 18)
RAMP_SPEED, RAMP_TURN_RATE, SLOWEST, WATCH_X, WATCH_Y, WATCH_HEADING, WATCH_PATH, WATCH_TURN, WATCH_TIME, SILENT = range(18, 28)
TURNED, NEAREST = range(28, HEAD)
# SPEED, TURN_RATE: the last command as sent. RAMP: the same before it was put on the grid of wheel speeds.
# BASE is the motion of the wheels, as modelled, BASE_AGE before the last step: no pose in use is older.
# STAYS: arrived, and to stand still until the goal or the robot is moved.
# SLOWEST: the smallest wheel speed in use. WATCH: a pose, and the path, turn and time commanded since, without an answer;
# SILENT: it was noticed. TURNED: since the goal came nearer than NEAREST.


@kernel
def usable_kernel(value: float, most: float) -> bool:
    """Say whether a number can be a measurement: finite and not beyond `most` either way."""
    return -most <= value <= most


@kernel
def sound_kernel(memory: Sequence[float], rows: int) -> bool:
    """Say whether the numbers of a memory that must be finite are."""
    for i in range(HEAD, HEAD + 3 * rows, 3):
        if not (0.0 <= memory[i] <= FAR and usable_kernel(memory[i + 1], FAST) and usable_kernel(memory[i + 2], FAST)):
            return False
    posed = usable_kernel(memory[X], FAR) and usable_kernel(memory[Y], FAR) and usable_kernel(memory[HEADING], FAR)
    posed = posed or memory[POSE_AGE] > FAR  # none yet
    motion = usable_kernel(memory[SPEED], FAST) and usable_kernel(memory[TURN_RATE], FAST)
    base = usable_kernel(memory[BASE_SPEED], FAST) and usable_kernel(memory[BASE_TURN_RATE], FAST)
    ages = memory[POSE_AGE] >= 0.0 and 0.0 <= memory[BASE_AGE] <= FAR
    ramp = usable_kernel(memory[RAMP_SPEED], FAST) and usable_kernel(memory[RAMP_TURN_RATE], FAST)
    watch = 0.0 <= memory[SLOWEST] <= FAST and usable_kernel(memory[WATCH_PATH], FAR) and usable_kernel(memory[WATCH_TURN], FAR)
    watch = watch and 0.0 <= memory[WATCH_TIME] <= FAR and usable_kernel(memory[TURNED], FAR)
    return posed and ramp and watch and motion and base and ages and usable_kernel(memory[INTEGRAL], FAR)


@kernel
def fresh_kernel(
    out: list[float], rows: int, time: float, v: float, w: float, period: float, stale_after: float, slowest: float
) -> None:
    """Write the memory of a robot whose motion has been (v, w) for long, one period before `time`."""
    for i in range(HEAD):
        out[i] = 0.0
    out[TIME] = time - period
    out[SPEED] = v
    out[TURN_RATE] = w
    out[X] = math.nan
    out[Y] = math.nan
    out[HEADING] = math.nan
    out[POSE_AGE] = math.inf
    out[BASE_AGE] = stale_after
    out[BASE_SPEED] = v
    out[BASE_TURN_RATE] = w
    out[GOAL_X] = math.nan
    out[GOAL_Y] = math.nan
    out[HEADING_BEFORE] = math.nan
    out[RAMP_SPEED] = v
    out[RAMP_TURN_RATE] = w
    out[SLOWEST] = slowest
    out[WATCH_X] = math.nan
    out[NEAREST] = math.nan
    for i in range(rows):
        out[HEAD + 3 * i] = i * period
        out[HEAD + 3 * i + 1] = v
        out[HEAD + 3 * i + 2] = w


@kernel
def remember_kernel(
    memory: Sequence[float],
    out: list[float],
    rows: int,
    since: float,
    last_v: float,
    last_w: float,
    dead_time: float,
    lag: float,
    stale_after: float,
    v: float,
    w: float,
) -> None:
    """Write the new command to the commands under way, and move the base of the modelled motion on.

    `out` may be `memory`: each place is read before it is written.
    """
    base = memory[BASE_AGE] + since
    base_age = min(base, stale_after)
    base_v, base_w = motion_then_kernel(
        memory, HEAD, rows, since, last_v, last_w, dead_time, lag, -base, -base_age, memory[BASE_SPEED], memory[BASE_TURN_RATE]
    )
    out[BASE_AGE], out[BASE_SPEED], out[BASE_TURN_RATE] = base_age, base_v, base_w
    for i in range(rows - 1, 0, -1):
        j = HEAD + 3 * i
        out[j] = memory[j - 3] + since
        out[j + 1] = memory[j - 2] if i > 1 else last_v
        out[j + 2] = memory[j - 1] if i > 1 else last_w
    out[HEAD], out[HEAD + 1], out[HEAD + 2] = 0.0, v, w
    out[SPEED], out[TURN_RATE] = v, w
