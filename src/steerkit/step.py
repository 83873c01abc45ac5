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
BELIEVED = 2.0  # of the wheel-speed limit: a motion beyond it was not given to these wheels
SIGMAS = 6.0 * math.sqrt(2.0)  # of the difference of two poses


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


# Places in a memory row; behind them, from HEAD on, the commands under way: age, speed, turn rate, the newest first.
TIME, SPEED, TURN_RATE, X, Y, HEADING, POSE_AGE, BASE_AGE, BASE_SPEED, BASE_TURN_RATE = range(10)
GOAL_X, GOAL_Y, INTEGRAL, HEADING_BEFORE, PROGRESS, PHASE, GOAL_LOCAL, STAYS = range(10, HEAD)
# BASE is the motion of the wheels, as modelled, BASE_AGE before the last step: no pose in use is older.
# STAYS: arrived, and to stand still until the goal or the robot is moved.

MEASURED = 15  # numbers of a measurement: `reading.numbers` lists them
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
    for i in range(HEAD, HEAD + 3 * rows, 3):
        if not (0.0 <= memory[i] <= FAR and usable_kernel(memory[i + 1], FAST) and usable_kernel(memory[i + 2], FAST)):
            return False
    posed = not (abs(memory[X]) > FAR or abs(memory[Y]) > FAR or abs(memory[HEADING]) > FAR)  # NaN: none yet
    motion = usable_kernel(memory[SPEED], FAST) and usable_kernel(memory[TURN_RATE], FAST)
    base = usable_kernel(memory[BASE_SPEED], FAST) and usable_kernel(memory[BASE_TURN_RATE], FAST)
    ages = memory[POSE_AGE] >= 0.0 and 0.0 <= memory[BASE_AGE] <= FAR
    return posed and motion and base and ages and usable_kernel(memory[INTEGRAL], FAR)


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
def clock_kernel(time: float, last: float, period: float, stale_after: float) -> tuple[float, bool]:
    """Return the time since the last step, and whether the clock is good. A step on a bad clock counts as one period."""
    since = time - last
    good = usable_kernel(time, FAR) and 0.0 < since <= stale_after + period
    return (since if good else period), good


@kernel
def seen_kernel(measured: Sequence[float]) -> tuple[float, float, float, int]:
    """Return the measured motion (NaN where missing), the limit of this step (infinite for none), and what was wrong with them."""
    v, w, limit = measured[8], measured[9], measured[10]
    wrong = measured[14] != 0.0 or limit < 0.0
    if limit != limit:
        limit = math.inf
    if v == v and not usable_kernel(v, FAST):
        v, wrong = math.nan, True
    if w == w and not usable_kernel(w, FAST):
        w, wrong = math.nan, True
    return v, w, max(limit, 0.0), BAD_FIELD if wrong else 0


@kernel
def before_kernel(memory: Sequence[float], measured: Sequence[float], wheel: float, half_track: float) -> tuple[float, float, int]:
    """Return the command before: ours, or what the wheels were given instead, if these wheels can have been given it."""
    v, w = measured[12], measured[13]
    if abs(v) + abs(w) * half_track <= BELIEVED * wheel:
        return v, w, OTHERS
    return memory[SPEED], memory[TURN_RATE], BAD_FIELD if v == v or w == w else 0


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
def turning_on_kernel(error: float, w: float, blur: float) -> float:
    """Return the heading error; where the goal is behind within the noise, on the side to which the robot turns already."""
    if abs(error) > PI - min(blur, 0.5) and error * w < 0.0:
        return error - math.copysign(2.0 * PI, error)
    return error


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


@kernel
def step_kernel(settings: Sequence[float], memory: Sequence[float], measured: Sequence[float], out: list[float]) -> Result:
    """Return the result of a step, and write the new memory to `out` (which may be `memory` itself)."""
    period, dead_time, lag, top, reverse, turn = settings[0], settings[1], settings[2], settings[3], settings[4], settings[5]
    wheel, half_track, acceleration, braking, turn_acceleration = settings[6], settings[7], settings[8], settings[9], settings[10]
    capture_radius, stay_radius, stop_radius, aim_radius = settings[13], settings[14], settings[15], settings[16]
    cruise, ceiling, gain, integral_time, derivative_time = settings[17], settings[18], settings[19], settings[20], settings[21]
    predict, stale_after, rest_radius = settings[22], settings[23], settings[24]
    rows = (len(memory) - HEAD) // 3
    nan = math.nan
    time = measured[0]
    if not sound_kernel(memory, rows):
        fresh_kernel(out, rows, time + period if usable_kernel(time, FAR) else nan, 0.0, 0.0, period, stale_after)
        return 0.0, 0.0, 0.0, 0.0, float(HELD), float(BAD_MEMORY), nan, nan, nan, nan, nan, math.inf, nan, nan, 0.0, 0.0

    # What is known: the time, the command before, the pose and its age, the motion at that time, the goal.
    since, clock = clock_kernel(time, memory[TIME], period, stale_after)
    seen_v, seen_w, limit, causes = seen_kernel(measured)
    last_v, last_w, trouble = before_kernel(memory, measured, wheel, half_track)
    x, y, heading, age, local, pose_trouble = pose_kernel(memory, measured, since, period, stale_after)
    causes |= trouble | pose_trouble | (0 if clock else BAD_CLOCK)
    known = age <= stale_after + 1e-9
    if not known and age <= FAR:
        causes |= STALE_POSE
    v, w = motion_then_kernel(
        memory,
        HEAD,
        rows,
        since,
        last_v,
        last_w,
        dead_time,
        lag,
        -(memory[BASE_AGE] + since),
        -min(age, stale_after),
        memory[BASE_SPEED],
        memory[BASE_TURN_RATE],
    )
    v = seen_v if seen_v == seen_v else v
    w = seen_w if seen_w == seen_w else w
    jumped = False
    if pose_trouble == 0 and not local and memory[POSE_AGE] <= FAR:
        span = abs(memory[POSE_AGE] + since - age) + period
        fastest_v, fastest_w = max(abs(v), abs(last_v)), max(abs(w), abs(last_w))
        jumped = jumped_kernel(memory, settings, x, y, heading, span, fastest_v, fastest_w)
    goal_x, goal_y, aimed, new_goal, moved = goal_kernel(memory, measured, x, y, heading, local, capture_radius)
    if jumped:
        causes |= POSE_JUMPED
    if not aimed:
        causes |= BAD_GOAL
    if measured[11] != 0.0 and measured[11] == measured[11]:
        causes |= TOLD_TO_HOLD
    held = (causes & (TOLD_TO_HOLD | BAD_CLOCK | BAD_GOAL)) != 0 or not known

    # Now, and when the new command takes effect.
    now_x, now_y, now_heading, distance, error, rest = nan, nan, nan, nan, nan, False
    if known:
        now_x, now_y, now_heading, v, w = carry_kernel(
            memory, HEAD, rows, since, last_v, last_w, dead_time, lag, -age, 0.0, x, y, heading, v, w
        )
        rest = abs(v) + abs(w) * half_track < REST
        if (seen_v == seen_v and abs(seen_v) >= REST) or (seen_w == seen_w and abs(seen_w) * half_track >= REST):
            rest = False
        if aimed:
            distance, _ = bearing_kernel(now_x, now_y, goal_x, goal_y)
    # Noise of pose and goal does not make a robot that has arrived start again.
    stood = memory[STAYS] != 0.0 and not new_goal
    same_place = moved <= stay_radius - capture_radius
    stays = stood and distance <= (stay_radius if same_place else capture_radius)
    integral, before, progress = 0.0, nan, 0.0
    asked, wanted_v, wanted_w = 0.0, 0.0, 0.0
    if not held:
        then_x, then_y, then_heading, v, w = carry_kernel(
            memory, HEAD, rows, since, last_v, last_w, dead_time, lag, 0.0, dead_time, now_x, now_y, now_heading, v, w
        )
        then_x, then_y, then_heading = coast_kernel(then_x, then_y, then_heading, v, w, lag)
        bearing, _, wanted_v, progress = constant_speed_kernel(
            then_x,
            then_y,
            then_heading,
            last_v,
            last_w,
            goal_x,
            goal_y,
            memory[PROGRESS] if same_place else 0.0,
            cruise,
            aim_radius,
            stop_radius,
            capture_radius,
            rest_radius,
            braking,
            turn_acceleration,
            period,
        )
        if predict == 0.0:
            then_heading = heading
            _, bearing = bearing_kernel(x, y, goal_x, goal_y)
        error = difference_kernel(bearing, then_heading)
        turning_to = turning_on_kernel(error, last_w, 6.0 * (settings[12] + settings[11] / max(distance, capture_radius)))
        before = then_heading
        if stays:
            wanted_v = 0.0
        if wanted_v != 0.0:
            integral = 0.0 if new_goal or jumped else memory[INTEGRAL]
            rate = heading_rate_kernel(then_heading, nan if jumped or local else memory[HEADING_BEFORE], since)
            asked, wanted_w = steer_kernel(turning_to, rate, integral, gain, ceiling, integral_time, derivative_time)
            if abs(asked) > ceiling:
                causes |= TURN_RATE_LIMIT

    # The command, within the limits. A pose that is carried on for want of a new one makes nothing faster.
    top = min(top, limit)
    if pose_trouble != 0:
        top = min(top, max(last_v, 0.0))
    share = min(since, period)
    faster, slower, turning = acceleration * share, braking * share, turn_acceleration * share
    v1, w1, bound = limit_kernel(last_v, last_w, wanted_v, wanted_w, top, reverse, turn, wheel, half_track, faster, slower, turning)
    causes |= bound
    if wanted_v != 0.0 and integral_time < math.inf:
        integral = clip_kernel(integrate_kernel(integral, error, asked, w1, share), -FAR, FAR)
    phase = DRIVING
    if held:
        phase = HELD
    elif v1 == 0.0 and w1 == 0.0 and rest and (stays or distance <= rest_radius):
        phase = ARRIVED

    remember_kernel(memory, out, rows, since, last_v, last_w, dead_time, lag, stale_after, v1, w1)
    out[TIME] = time if usable_kernel(time, FAR) else memory[TIME] + period
    out[X], out[Y], out[HEADING], out[POSE_AGE] = (nan, nan, nan, math.inf) if local else (x, y, heading, age)
    stays = phase == ARRIVED or (stood if held else stays)
    if aimed and not (stays and stood):
        out[GOAL_X], out[GOAL_Y], out[GOAL_LOCAL] = (nan, nan, 1.0) if local else (goal_x, goal_y, 0.0)
    else:
        out[GOAL_X], out[GOAL_Y], out[GOAL_LOCAL] = memory[GOAL_X], memory[GOAL_Y], memory[GOAL_LOCAL]
    out[INTEGRAL], out[HEADING_BEFORE] = integral, before
    out[PROGRESS], out[PHASE], out[STAYS] = progress, float(phase), 1.0 if stays else 0.0

    left, right = wheels_kernel(v1, w1, 2.0 * half_track)
    code, why = float(phase), float(causes)
    return left, right, v1, w1, code, why, error, distance, now_x, now_y, now_heading, age, goal_x, goal_y, wanted_v, wanted_w


@kernel
def in_place_kernel(settings: Sequence[float], row: Sequence[float], size: int) -> None:
    """Step on one row [memory of `size` | measurement | result]: reads the first two, writes the first and the last."""
    memory = row[:size]
    m = row[size:]
    measured = (m[0], m[1], m[2], m[3], m[4], m[5], m[6], m[7], m[8], m[9], m[10], m[11], m[12], m[13], m[14])
    result = step_kernel(settings, memory, measured, memory)  # type: ignore[arg-type]
    for i in range(RESULT):
        row[size + MEASURED + i] = result[i]  # type: ignore[index]
