"""The step as one compiled function: measurement and memory to command, phase, causes, report and new memory.

    measurement -> checked -> pose carried to the instant of effect -> approach -> heading law -> limits -> command

One scalar core for the single step, the in-place door and plain Python. It checks data, never arguments, and raises on nothing:
bad data becomes a stop within the limits and a cause. Settings and memory are rows of floats; their places are named here.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

from steerkit.angles import difference_kernel, wrap_kernel
from steerkit.approach import bearing_kernel, constant_speed_kernel
from steerkit.compiled import kernel
from steerkit.heading import heading_rate_kernel, integrate_kernel, steer_kernel
from steerkit.kinematics import to_world_kernel, wheels_kernel
from steerkit.limits import clip_kernel, limit_kernel
from steerkit.prediction import carry_kernel, coast_kernel, motion_then_kernel
from steerkit.signals import HEAD, Causes, Frame, Phase

FAR = 1e12  # m, rad, s: a number beyond it is not a measurement
FAST = 1e4  # m/s, rad/s: nor is a motion beyond this
REST = 0.01  # m/s: wheels slower than this are at rest


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


# Places in a memory row; behind them, from HEAD on, the commands under way: age, speed, turn rate, the newest first.
TIME, SPEED, TURN_RATE, X, Y, HEADING, POSE_AGE, BASE_AGE, BASE_SPEED, BASE_TURN_RATE = range(10)
GOAL_X, GOAL_Y, INTEGRAL, HEADING_BEFORE, STOPPING, PHASE, GOAL_LOCAL, SPARE = range(10, HEAD)
# BASE is the motion of the wheels, as modelled, BASE_AGE before the last step: no pose in use is older.

MEASURED = 15  # numbers of a measurement: `controller.numbers` lists them
RESULT = 16  # numbers of a result: left, right, speed, turn rate, phase, causes, heading error, distance, pose, age, goal, wanted

Result = tuple[float, float, float, float, float, float, float, float, float, float, float, float, float, float, float, float]

DRIVING, ARRIVED, HELD = int(Phase.DRIVING), int(Phase.ARRIVED), int(Phase.HELD)
TOLD_TO_HOLD, BAD_POSE, STALE_POSE = int(Causes.TOLD_TO_HOLD), int(Causes.BAD_POSE), int(Causes.STALE_POSE)
TURN_RATE_LIMIT = int(Causes.TURN_RATE_LIMIT)
POSE_JUMPED, BAD_GOAL, BAD_CLOCK = int(Causes.POSE_JUMPED), int(Causes.BAD_GOAL), int(Causes.BAD_CLOCK)
BAD_FIELD, BAD_MEMORY, OTHERS = int(Causes.BAD_FIELD), int(Causes.BAD_MEMORY), int(Causes.APPLIED_BY_OTHERS)
ROBOT = float(Frame.ROBOT)
PI = math.pi


@kernel
def usable_kernel(value: float, most: float) -> bool:
    """Say whether a number can be a measurement: finite and not beyond `most` either way."""
    return -most <= value <= most


@kernel
def sound_kernel(memory: Sequence[float], rows: int) -> bool:
    """Say whether the numbers of a memory that must be finite are."""
    for i in range(HEAD, HEAD + 3 * rows):
        if not usable_kernel(memory[i], FAR):
            return False
    motion = usable_kernel(memory[SPEED], FAST) and usable_kernel(memory[TURN_RATE], FAST)
    base = usable_kernel(memory[BASE_SPEED], FAST) and usable_kernel(memory[BASE_TURN_RATE], FAST)
    return motion and base and usable_kernel(memory[BASE_AGE], FAR) and usable_kernel(memory[INTEGRAL], FAR)


@kernel
def fresh_kernel(out: list[float], rows: int, time: float, v: float, w: float, period: float, stale_after: float) -> None:
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
    for i in range(rows):
        out[HEAD + 3 * i] = i * period
        out[HEAD + 3 * i + 1] = v
        out[HEAD + 3 * i + 2] = w


@kernel
def jumped_kernel(
    dx: float, dy: float, turned: float, span: float, fastest: float, spin: float, position_noise: float, heading_noise: float
) -> bool:
    """Say whether the limits over `span`, plus six standard deviations of noise, leave a change of pose unexplained."""
    far = fastest * span + 6.0 * position_noise
    return dx * dx + dy * dy > far * far or abs(turned) > spin * span + 6.0 * heading_noise


@kernel
def step_kernel(settings: Sequence[float], memory: Sequence[float], measured: Sequence[float], out: list[float]) -> Result:
    """Return the result of a step, and write the new memory to `out` (which may be `memory` itself)."""
    period, dead_time, lag, top, reverse, turn = settings[0], settings[1], settings[2], settings[3], settings[4], settings[5]
    wheel, half_track, acceleration, braking = settings[6], settings[7], settings[8], settings[9]
    turn_acceleration, position_noise, heading_noise = settings[10], settings[11], settings[12]
    capture_radius, stay_radius, stop_radius, aim_radius = settings[13], settings[14], settings[15], settings[16]
    cruise, ceiling, gain, integral_time, derivative_time = settings[17], settings[18], settings[19], settings[20], settings[21]
    predict, stale_after = settings[22], settings[23]
    time, at_x, at_y, at_heading, pose_time, to_x, to_y, frame = (
        measured[0],
        measured[1],
        measured[2],
        measured[3],
        measured[4],
        measured[5],
        measured[6],
        measured[7],
    )
    seen_v, seen_w, limit, hold, applied_v, applied_w, garbage = (
        measured[8],
        measured[9],
        measured[10],
        measured[11],
        measured[12],
        measured[13],
        measured[14],
    )
    rows = (len(memory) - HEAD) // 3
    nan = math.nan
    causes = 0

    if not sound_kernel(memory, rows):
        fresh_kernel(out, rows, time + period if usable_kernel(time, FAR) else nan, 0.0, 0.0, period, stale_after)
        return 0.0, 0.0, 0.0, 0.0, float(HELD), float(BAD_MEMORY), nan, nan, nan, nan, nan, math.inf, nan, nan, 0.0, 0.0

    # The optional numbers: missing is missing, wrong is told and taken as the safer.
    if garbage != 0.0:
        causes |= BAD_FIELD
    if limit == limit:
        top = min(top, max(limit, 0.0))
        if limit < 0.0:
            causes |= BAD_FIELD
    if seen_v == seen_v and not usable_kernel(seen_v, FAST):
        seen_v = nan
        causes |= BAD_FIELD
    if seen_w == seen_w and not usable_kernel(seen_w, FAST):
        seen_w = nan
        causes |= BAD_FIELD

    # The clock. A step on a wrong clock counts as one period later than the last.
    clock = usable_kernel(time, FAR)
    since = time - memory[TIME]
    if not (clock and 0.0 < since <= stale_after + period):
        since = period
        causes |= BAD_CLOCK
    share = min(since, period)

    # The command before: ours, or what the wheels were given instead.
    last_v, last_w = memory[SPEED], memory[TURN_RATE]
    if usable_kernel(applied_v, FAST) and usable_kernel(applied_w, FAST):
        last_v, last_w = applied_v, applied_w
        causes |= OTHERS
    elif applied_v == applied_v or applied_w == applied_w:
        causes |= BAD_FIELD

    # The pose and its age. A goal seen from the robot needs none: the robot is then the origin.
    age = 0.0
    if pose_time == pose_time:
        age = time - pose_time if clock else nan
    aged = -0.5 * period <= age <= FAR
    age = max(age, 0.0)
    posed = usable_kernel(at_x, FAR) and usable_kernel(at_y, FAR) and usable_kernel(at_heading, FAR)
    local = frame == ROBOT and not posed
    if aged and (posed or local):
        x = at_x if posed else 0.0
        y = at_y if posed else 0.0
        heading = wrap_kernel(at_heading) if posed else 0.0
    else:
        causes |= BAD_POSE
        local = False
        age = memory[POSE_AGE] + since
        x, y, heading = memory[X], memory[Y], memory[HEADING]
    known = age <= stale_after + 1e-9
    if not known and age <= FAR:
        causes |= STALE_POSE

    # The motion at that time: measured, or modelled through the commands under way.
    v, w = memory[BASE_SPEED], memory[BASE_TURN_RATE]
    base = -(memory[BASE_AGE] + since)
    v, w = motion_then_kernel(memory, HEAD, rows, since, last_v, last_w, dead_time, lag, base, -min(age, stale_after), v, w)
    if seen_v == seen_v:
        v = seen_v
    if seen_w == seen_w:
        w = seen_w

    jumped = False
    if (causes & BAD_POSE) == 0 and not local and memory[POSE_AGE] <= FAR:
        span = abs(memory[POSE_AGE] + since - age) + period
        fastest = max(settings[3], reverse, abs(v), abs(last_v))
        spin = max(turn, abs(w), abs(last_w))
        turned = difference_kernel(heading, memory[HEADING])
        jumped = jumped_kernel(x - memory[X], y - memory[Y], turned, span, fastest, spin, position_noise, heading_noise)
        if jumped:
            causes |= POSE_JUMPED

    # The goal in the world. One that moved by more than its disc is a new one.
    goal_x, goal_y = to_x, to_y
    aimed = usable_kernel(to_x, FAR) and usable_kernel(to_y, FAR) and (frame == 0.0 or frame == ROBOT)
    if not aimed:
        goal_x, goal_y = nan, nan
        causes |= BAD_GOAL
    elif frame == ROBOT and known:
        goal_x, goal_y = to_world_kernel(x, y, heading, to_x, to_y)
    moved = bearing_kernel(memory[GOAL_X], memory[GOAL_Y], goal_x, goal_y)[0]
    new_goal = aimed and not (moved <= capture_radius or (local and memory[GOAL_LOCAL] != 0.0))
    integral = 0.0 if new_goal or jumped else memory[INTEGRAL]
    before = nan if jumped or local else memory[HEADING_BEFORE]
    stopping = memory[STOPPING] != 0.0 and not new_goal
    arrived = memory[PHASE] == ARRIVED and not new_goal

    if hold != 0.0 and hold == hold:
        causes |= TOLD_TO_HOLD
    held = (causes & (TOLD_TO_HOLD | BAD_CLOCK | BAD_GOAL)) != 0 or not known

    now_x, now_y, now_heading = nan, nan, nan
    distance, error, rest = nan, nan, False
    asked, wanted_v, wanted_w = 0.0, 0.0, 0.0
    if known:
        now_x, now_y, now_heading, v, w = carry_kernel(
            memory, HEAD, rows, since, last_v, last_w, dead_time, lag, -age, 0.0, x, y, heading, v, w
        )
        rest = abs(v) + abs(w) * half_track < REST
    if known and aimed:
        distance = bearing_kernel(now_x, now_y, goal_x, goal_y)[0]
    if not held:
        then_x, then_y, then_heading, v, w = carry_kernel(
            memory, HEAD, rows, since, last_v, last_w, dead_time, lag, 0.0, dead_time, now_x, now_y, now_heading, v, w
        )
        then_x, then_y, then_heading = coast_kernel(then_x, then_y, then_heading, v, w, lag)
        bearing, _, wanted_v, stopping = constant_speed_kernel(
            then_x,
            then_y,
            then_heading,
            last_v,
            last_w,
            goal_x,
            goal_y,
            stopping,
            cruise,
            aim_radius,
            stop_radius,
            capture_radius,
            braking,
            turn_acceleration,
            period,
        )
        if predict == 0.0:
            then_heading = heading
            bearing = bearing_kernel(x, y, goal_x, goal_y)[1]
        error = difference_kernel(bearing, then_heading)
        # With the goal behind, noise must not make the robot change its mind: within the noise of half a turn, it turns on.
        blur = 6.0 * (heading_noise + position_noise / max(distance, capture_radius))
        if abs(error) > PI - min(blur, 0.5) and error * last_w < 0.0:
            error -= math.copysign(2.0 * PI, error)
        rate = heading_rate_kernel(then_heading, before, since)
        before = then_heading
        if (arrived and distance <= stay_radius) or wanted_v == 0.0:
            wanted_v = 0.0
            integral = 0.0
        else:
            asked, wanted_w = steer_kernel(error, rate, integral, gain, ceiling, integral_time, derivative_time)
            if abs(asked) > ceiling:
                causes |= TURN_RATE_LIMIT
        if (causes & BAD_POSE) != 0:
            top = min(top, max(last_v, 0.0))
    else:
        integral = 0.0
        before = nan
        stopping = False

    v1, w1, bound = limit_kernel(
        last_v,
        last_w,
        wanted_v,
        wanted_w,
        top,
        reverse,
        turn,
        wheel,
        half_track,
        acceleration * share,
        braking * share,
        turn_acceleration * share,
    )
    causes |= bound
    if wanted_v != 0.0 and integral_time < math.inf:
        integral = clip_kernel(integrate_kernel(integral, error, asked, w1, share), -FAR, FAR)
    phase = DRIVING
    if held:
        phase = HELD
    elif v1 == 0.0 and w1 == 0.0 and ((arrived and distance <= stay_radius) or (rest and distance <= capture_radius)):
        phase = ARRIVED

    # The new memory; out may be memory, so each place is read before it is written.
    base_age = min(memory[BASE_AGE] + since, stale_after)
    base_v, base_w = motion_then_kernel(
        memory, HEAD, rows, since, last_v, last_w, dead_time, lag, base, -base_age, memory[BASE_SPEED], memory[BASE_TURN_RATE]
    )
    for i in range(rows - 1, 0, -1):
        j = HEAD + 3 * i
        out[j] = memory[j - 3] + since
        out[j + 1] = memory[j - 2] if i > 1 else last_v
        out[j + 2] = memory[j - 1] if i > 1 else last_w
    out[HEAD], out[HEAD + 1], out[HEAD + 2] = 0.0, v1, w1
    out[TIME] = time if clock else memory[TIME] + period
    out[SPEED], out[TURN_RATE] = v1, w1
    out[X], out[Y], out[HEADING] = (nan, nan, nan) if local else (x, y, heading)
    out[POSE_AGE] = math.inf if local else age
    out[BASE_AGE], out[BASE_SPEED], out[BASE_TURN_RATE] = base_age, base_v, base_w
    if aimed:
        out[GOAL_X], out[GOAL_Y] = (nan, nan) if local else (goal_x, goal_y)
        out[GOAL_LOCAL] = 1.0 if local else 0.0
    else:
        out[GOAL_X], out[GOAL_Y], out[GOAL_LOCAL] = memory[GOAL_X], memory[GOAL_Y], memory[GOAL_LOCAL]
    out[INTEGRAL] = integral
    out[HEADING_BEFORE] = before
    out[STOPPING] = 1.0 if stopping else 0.0
    out[PHASE] = float(phase)
    out[SPARE] = 0.0

    left, right = wheels_kernel(v1, w1, 2.0 * half_track)
    return (
        left,
        right,
        v1,
        w1,
        float(phase),
        float(causes),
        error,
        distance,
        now_x,
        now_y,
        now_heading,
        age,
        goal_x,
        goal_y,
        wanted_v,
        wanted_w,
    )


@kernel
def in_place_kernel(settings: Sequence[float], row: Sequence[float], size: int) -> None:
    """Step on one row [memory of `size` | measurement | result]: reads the first two, writes the first and the last."""
    memory = row[:size]
    m = row[size:]
    measured = (m[0], m[1], m[2], m[3], m[4], m[5], m[6], m[7], m[8], m[9], m[10], m[11], m[12], m[13], m[14])
    result = step_kernel(settings, memory, measured, memory)  # type: ignore[arg-type]
    for i in range(RESULT):
        row[size + MEASURED + i] = result[i]  # type: ignore[index]
