"""The step as one compiled function: measurement and memory to command, phase, causes, report and new memory.

    measurement -> checked -> pose carried to the instant of effect -> approach and heading law, or schedule -> limits -> wheel grid
    -> command

One scalar core for the single step, the in-place door and plain Python. It checks data, never arguments, and raises on nothing:
bad data becomes a stop within the limits and a cause. Settings (`settings.py`), memory and measurement are rows of floats.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from steerkit.angles import difference_kernel
from steerkit.answering import SILENT_PERIODS, SILENT_TIME, watch_kernel
from steerkit.approach import ON_THE_WAY, bearing_kernel, constant_speed_kernel
from steerkit.compiled import kernel
from steerkit.heading import heading_rate_kernel, integrate_kernel, steer_kernel
from steerkit.intake import (
    MEASURED,
    before_kernel,
    clock_kernel,
    goal_kernel,
    jumped_kernel,
    next_goal_kernel,
    pose_kernel,
    seen_kernel,
)
from steerkit.kinematics import wheels_kernel
from steerkit.limits import ROUNDING, clip_kernel, limit_kernel, turn_first_kernel
from steerkit.memory_row import (
    BASE_AGE,
    BASE_SPEED,
    BASE_TURN_RATE,
    FAR,
    GOAL_LOCAL,
    GOAL_X,
    GOAL_Y,
    HEADING,
    HEADING_BEFORE,
    INTEGRAL,
    NEAREST,
    PHASE,
    POSE_AGE,
    PROGRESS,
    RAMP_SPEED,
    RAMP_TURN_RATE,
    SILENT,
    SLOWEST,
    STAYS,
    TIME,
    TURNED,
    X,
    Y,
    fresh_kernel,
    remember_kernel,
    sound_kernel,
    usable_kernel,
)
from steerkit.prediction import carry_kernel, coast_kernel, hold_kernel, motion_then_kernel
from steerkit.schedule import BRAKING, FREE, circling_kernel, passing_kernel, schedule_kernel, stops_kernel
from steerkit.signals import HEAD, Causes, Phase, Slowing
from steerkit.wheel_grid import on_grid_kernel, slowest_kernel

REST = 0.01  # m/s: wheels slower than this are at rest
SAME = 0.05  # of the capture radius: a way point that moved less is the same
PASSED, STOPPING = 3.0, 2.0  # progress toward a goal, beside those of `approach`


RESULT = 18  # left, right, speed, turn rate, phase, causes, error, distance, pose, age, goal, wanted, slowed by, slowest wheel

Result = tuple[
    *tuple[float, float, float, float, float, float, float, float, float],
    *tuple[float, float, float, float, float, float, float, float, float],
]

DRIVING, ARRIVED, HELD, GONE_BY = int(Phase.DRIVING), int(Phase.ARRIVED), int(Phase.HELD), int(Phase.PASSED)
TOLD_TO_HOLD, STALE_POSE, TURN_RATE_LIMIT = int(Causes.TOLD_TO_HOLD), int(Causes.STALE_POSE), int(Causes.TURN_RATE_LIMIT)
POSE_JUMPED, BAD_GOAL, BAD_CLOCK = int(Causes.POSE_JUMPED), int(Causes.BAD_GOAL), int(Causes.BAD_CLOCK)
BAD_MEMORY, NO_ANSWER = int(Causes.BAD_MEMORY), int(Causes.NO_ANSWER)
SPEED_LIMIT, WHEEL_LIMIT = int(Causes.SPEED_LIMIT), int(Causes.WHEEL_SPEED_LIMIT)
BY_NOTHING, BY_STEP, BY_WHEELS = float(Slowing.NONE), float(Slowing.STEP_LIMIT), float(Slowing.WHEEL_LIMIT)
BY_RAMP, BY_STOP = float(Slowing.ACCELERATION), float(Slowing.STOPPING)
PI = math.pi


@kernel
def turning_on_kernel(error: float, w: float, blur: float) -> float:
    """Return the heading error; where the goal is behind within the noise, on the side to which the robot turns already."""
    if abs(error) > PI - min(blur, 0.5) and error * w < 0.0:
        return error - math.copysign(2.0 * PI, error)
    return error


@kernel
def touched_kernel(
    x: float,
    y: float,
    heading: float,
    v: float,
    w: float,
    command_v: float,
    command_w: float,
    span: float,
    lag: float,
    x1: float,
    y1: float,
    near: float,
) -> bool:
    """Say whether the path under a command held for `span` comes within `near` of a point: four chords of it."""
    for _ in range(4):
        x2, y2, heading, v, w = hold_kernel(x, y, heading, v, w, command_v, command_w, 0.25 * span, lag)
        dx, dy = x2 - x, y2 - y
        long = dx * dx + dy * dy
        share = clip_kernel(((x1 - x) * dx + (y1 - y) * dy) / long, 0.0, 1.0) if long > 0.0 else 0.0
        away, _ = bearing_kernel(x + share * dx, y + share * dy, x1, y1)
        if away <= near:
            return True
        x, y = x2, y2
    return False


@kernel
def passed_within_kernel(settings: Sequence[float], v: float) -> float:
    """Return how far away (m, squared) a way point can be that was just passed, or is about to be touched."""
    far = settings[13] + max(v, 0.0) * (settings[1] + settings[2] + 3.0 * settings[0])
    return far * far


@kernel
def scheduled_kernel(
    settings: Sequence[float],
    distance: float,
    error: float,
    v0: float,
    w0: float,
    top: float,
    slowest: float,
    stopping: bool,
    settled: float,
    way_point: bool,
    turned: float,
    next_distance: float,
    on_the_spot: bool,
) -> tuple[float, float, float, bool]:
    """Return speed, turn rate, what slows, and whether to stop, by the schedule."""
    capture_radius, stop_radius, target_radius = settings[13], settings[15], settings[16]
    acceleration, braking, turn_acceleration, period = settings[8], settings[9], settings[10], settings[0]
    half_track, settling = settings[7], settings[26]
    turn = min(settings[5], settings[6] / half_track)
    passing = 0.0
    if way_point:
        passing = passing_kernel(
            turned, next_distance, capture_radius, target_radius, top, turn, acceleration, braking, turn_acceleration, period
        )
    else:
        within = capture_radius if stopping else stop_radius
        if stops_kernel(distance, error, v0, w0, within, settled, braking, turn_acceleration, period, slowest):
            return 0.0, 0.0, BRAKING, True
    v, w, why = schedule_kernel(
        distance,
        error,
        v0,
        w0,
        passing,
        capture_radius,
        target_radius,
        top,
        turn,
        acceleration,
        braking,
        turn_acceleration,
        period,
        settling,
        slowest,
        half_track,
        on_the_spot,
    )
    return v, w, why, v == 0.0 and w == 0.0


@kernel
def constant_kernel(
    settings: Sequence[float],
    x: float,
    y: float,
    heading: float,
    v0: float,
    w0: float,
    goal_x: float,
    goal_y: float,
    progress: float,
    way_point: bool,
    stays: bool,
    slowest: float,
    seen_x: float,
    seen_y: float,
    seen_heading: float,
    last_w: float,
    blur: float,
    integral: float,
    heading_before: float,
    since: float,
) -> tuple[float, float, float, float, float, float, float, float]:
    """Return speed, turn rate, what slows, progress, integral, heading error, turn rate asked for and heading, at constant speed.

    The pose is that at which the command takes effect; the one seen counts for the heading where nothing is predicted.
    """
    capture_radius, stop_radius, aim_radius, rest_radius = settings[13], settings[15], settings[16], settings[24]
    cruise, ceiling, gain, integral_time, derivative_time = settings[17], settings[18], settings[19], settings[20], settings[21]
    bearing, _, speed, progress = constant_speed_kernel(
        x,
        y,
        heading,
        v0,
        w0,
        goal_x,
        goal_y,
        progress,
        cruise,
        aim_radius,
        stop_radius,
        capture_radius,
        rest_radius,
        settings[9],
        settings[10],
        settings[0],
    )
    if way_point:
        speed, progress = cruise, ON_THE_WAY
    if settings[22] == 0.0:
        heading = seen_heading
        _, bearing = bearing_kernel(seen_x, seen_y, goal_x, goal_y)
    error = difference_kernel(bearing, heading)
    if stays or speed == 0.0:
        return 0.0, 0.0, FREE, progress, 0.0, error, 0.0, heading
    speed = max(speed, slowest)
    rate = heading_rate_kernel(heading, heading_before, since)
    error_to = turning_on_kernel(error, last_w, blur)
    asked, turn_rate = steer_kernel(error_to, rate, integral, gain, ceiling, integral_time, derivative_time)
    return speed, turn_rate, FREE if speed >= cruise else BRAKING, progress, integral, error, asked, heading


@kernel
def slowed_kernel(v: float, wanted: float, why: float, bound: int, top: float, most: float, stopped: bool) -> float:
    """Return what keeps the speed v from being higher: `why` the law's own reason, `top` the limit of this step."""
    if stopped:
        return BY_STOP
    if v < min(wanted, top) - ROUNDING:
        return BY_WHEELS if bound & WHEEL_LIMIT else BY_RAMP
    if why != FREE:
        return why
    return BY_STEP if top < most else BY_NOTHING


@kernel
def step_kernel(settings: Sequence[float], memory: Sequence[float], measured: Sequence[float], out: list[float]) -> Result:
    """Return the result of a step, and write the new memory to `out` (which may be `memory` itself)."""
    period, dead_time, lag, top, reverse, turn = settings[0], settings[1], settings[2], settings[3], settings[4], settings[5]
    wheel, half_track, acceleration, braking, turn_acceleration = settings[6], settings[7], settings[8], settings[9], settings[10]
    capture_radius, stay_radius, stop_radius = settings[13], settings[14], settings[15]
    cruise, ceiling, integral_time = settings[17], settings[18], settings[20]
    stale_after, rest_radius, scheduled = settings[23], settings[24], settings[25] != 0.0
    rows = (len(memory) - HEAD) // 3
    nan = math.nan
    time = measured[0]
    if not sound_kernel(memory, rows):
        began = time + period if usable_kernel(time, FAR) else nan
        fresh_kernel(out, rows, began, 0.0, 0.0, period, stale_after, settings[27])
        held_code, why_held = float(HELD), float(BAD_MEMORY)
        return 0.0, 0.0, 0.0, 0.0, held_code, why_held, nan, nan, nan, nan, nan, math.inf, nan, nan, 0.0, 0.0, BY_STOP, settings[27]

    # What is known: the time, the command before, the pose and its age, the motion at that time, the goal.
    since, clock = clock_kernel(time, memory[TIME], period, stale_after)
    seen_v, seen_w, limit, causes = seen_kernel(measured)
    last_v, last_w, ramp_v, ramp_w, trouble = before_kernel(memory, measured, wheel, half_track)
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
    told_v, told_w = motion_then_kernel(
        memory, HEAD, rows, since, last_v, last_w, dead_time, lag, -min(age, stale_after), 0.0, v, w
    )
    v = seen_v if seen_v == seen_v else v
    w = seen_w if seen_w == seen_w else w
    jumped = False
    if pose_trouble == 0 and not local and memory[POSE_AGE] <= FAR:
        span = abs(memory[POSE_AGE] + since - age) + period
        fastest_v, fastest_w = max(abs(v), abs(last_v)), max(abs(w), abs(last_w))
        jumped = jumped_kernel(memory, settings, x, y, heading, span, fastest_v, fastest_w)
    # A pose that is carried on for want of a new one makes nothing faster.
    most = cruise
    top = min(top, limit)
    if pose_trouble != 0:
        top = min(top, max(last_v, 0.0))
    blur = settings[11] + settings[12] * half_track
    patience = max(SILENT_PERIODS * period, SILENT_TIME) + dead_time + lag + min(age, stale_after)
    fresh = pose_trouble == 0 and not local and not age > memory[POSE_AGE] + since - 1e-9
    if watch_kernel(
        memory, out, fresh, x, y, heading, told_v, told_w, since, blur, half_track, patience, most, min(settings[29], top)
    ):
        causes |= NO_ANSWER
    slowest = slowest_kernel(max(settings[27], min(out[SLOWEST], settings[29], top)), settings[28])
    goal_x, goal_y, aimed, new_goal, moved = goal_kernel(memory, measured, x, y, heading, local, capture_radius)
    next_x, next_y, trouble = next_goal_kernel(measured, x, y, heading)
    causes |= trouble
    given_x, given_y = goal_x, goal_y
    way_point = aimed and next_x == next_x
    passed = memory[PROGRESS] == PASSED and moved <= max(stay_radius - capture_radius, SAME * capture_radius)
    if passed and local:  # a sighted goal farther than a way point just passed can be is another
        passed = measured[5] * measured[5] + measured[6] * measured[6] <= passed_within_kernel(settings, v)
    was_passed = passed and not way_point and trouble != 0
    passed = passed and way_point
    if passed:
        goal_x, goal_y, way_point = next_x, next_y, False
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
    stays = stood and distance <= (stay_radius if same_place else capture_radius) and not way_point
    kept = not aimed and memory[PROGRESS] == PASSED
    integral, before, progress, why = 0.0, nan, PASSED if passed or was_passed or kept else ON_THE_WAY, FREE
    asked, wanted_v, wanted_w, stopping = 0.0, 0.0, 0.0, True
    then_x, then_y, then_heading, from_x, from_y, from_heading = nan, nan, nan, nan, nan, nan
    settled, turned, nearest = rest_radius, 0.0, nan
    if not held:
        then_x, then_y, then_heading, v, w = carry_kernel(
            memory, HEAD, rows, since, last_v, last_w, dead_time, lag, 0.0, dead_time, now_x, now_y, now_heading, v, w
        )
        from_x, from_y, from_heading = then_x, then_y, then_heading
        then_x, then_y, then_heading = coast_kernel(then_x, then_y, then_heading, v, w, lag)
        away, bearing = bearing_kernel(from_x, from_y, goal_x, goal_y)
        passes = way_point and away <= stop_radius
        away, bearing = bearing_kernel(then_x, then_y, goal_x, goal_y)
        if passes:
            progress, way_point, goal_x, goal_y = PASSED, False, next_x, next_y
            away, bearing = bearing_kernel(then_x, then_y, goal_x, goal_y)
            distance, _ = bearing_kernel(now_x, now_y, goal_x, goal_y)
        went = memory[PROGRESS] if same_place and progress != PASSED and memory[PROGRESS] != PASSED else ON_THE_WAY
        blur_of_error = 6.0 * (settings[12] + settings[11] / max(distance, capture_radius))
        if scheduled:
            error = difference_kernel(bearing, then_heading)
            if went == STOPPING:
                settled = capture_radius
            turned, nearest, circles = circling_kernel(
                away, memory[TURNED], memory[NEAREST], last_w, since, jumped or progress == PASSED or not same_place
            )
            next_away, next_bearing = bearing_kernel(goal_x, goal_y, next_x, next_y)
            wanted_v, wanted_w, why, stopping = scheduled_kernel(
                settings,
                away,
                turning_on_kernel(error, last_w, blur_of_error),
                ramp_v,
                ramp_w,
                top,
                slowest,
                went == STOPPING,
                settled,
                way_point,
                difference_kernel(next_bearing, bearing) if way_point else 0.0,
                next_away,
                circles,
            )
            if wanted_w == 0.0 and wanted_v > 0.0:
                turned = 0.0
            if stays:
                wanted_v, wanted_w, stopping = 0.0, 0.0, True
            if progress != PASSED:
                progress = STOPPING if stopping else ON_THE_WAY
        else:
            wanted_v, wanted_w, why, went, integral, error, asked, before = constant_kernel(
                settings,
                then_x,
                then_y,
                then_heading,
                ramp_v,
                ramp_w,
                goal_x,
                goal_y,
                went,
                way_point,
                stays,
                slowest,
                x,
                y,
                heading,
                last_w,
                blur_of_error,
                0.0 if new_goal or jumped else memory[INTEGRAL],
                nan if jumped or local else memory[HEADING_BEFORE],
                since,
            )
            progress = went if progress != PASSED else PASSED
            stopping = wanted_v == 0.0
            if abs(asked) > ceiling:
                causes |= TURN_RATE_LIMIT
        if top < slowest:
            wanted_v = 0.0  # no wheel can be told to run as slowly as this step asks

    # The command, within the limits.
    share = min(since, period)
    faster, slower, turning = acceleration * share, braking * share, turn_acceleration * share
    if scheduled and not held:
        ramp_v, ramp_w, bound = turn_first_kernel(
            ramp_v, ramp_w, wanted_v, wanted_w, top, turn, wheel, half_track, faster, slower, turning
        )
    else:
        ramp_v, ramp_w, bound = limit_kernel(
            ramp_v, ramp_w, wanted_v, wanted_w, top, reverse, turn, wheel, half_track, faster, slower, turning
        )
    causes |= bound
    v1, w1, ramp_v, ramp_w = on_grid_kernel(ramp_v, ramp_w, wanted_v, wanted_w, slowest, settings[28], top, turn, wheel, half_track)
    if wanted_v != 0.0 and integral_time < math.inf:
        integral = clip_kernel(integrate_kernel(integral, error, asked, w1, share), -FAR, FAR)
    if (
        way_point
        and not held
        and touched_kernel(from_x, from_y, from_heading, v, w, v1, w1, period, lag, goal_x, goal_y, stop_radius)
    ):
        progress = PASSED
    phase = DRIVING
    if held:
        phase = HELD
    elif progress == PASSED:
        phase = GONE_BY
    elif v1 == 0.0 and w1 == 0.0 and rest and not way_point and (stays or distance <= settled):
        phase = ARRIVED

    remember_kernel(memory, out, rows, since, last_v, last_w, dead_time, lag, stale_after, v1, w1)
    out[TIME] = time if usable_kernel(time, FAR) else memory[TIME] + period
    out[X], out[Y], out[HEADING], out[POSE_AGE] = (nan, nan, nan, math.inf) if local else (x, y, heading, age)
    out[RAMP_SPEED], out[RAMP_TURN_RATE] = ramp_v, ramp_w
    if (held or phase == ARRIVED) and v1 == 0.0 and w1 == 0.0:
        out[SILENT] = 0.0  # told to stand: there is nothing to answer
    stays = phase == ARRIVED or (stood if held else stays)
    if aimed and not (stays and stood):
        out[GOAL_X], out[GOAL_Y], out[GOAL_LOCAL] = (nan, nan, 1.0) if local else (given_x, given_y, 0.0)
    else:
        out[GOAL_X], out[GOAL_Y], out[GOAL_LOCAL] = memory[GOAL_X], memory[GOAL_Y], memory[GOAL_LOCAL]
    out[INTEGRAL], out[HEADING_BEFORE], out[TURNED], out[NEAREST] = integral, before, clip_kernel(turned, -FAR, FAR), nearest
    out[PROGRESS], out[PHASE], out[STAYS] = progress, float(phase), 1.0 if stays else 0.0

    slowed = slowed_kernel(v1, wanted_v, why, bound, top, most, held or phase == ARRIVED or stopping)
    if scheduled and slowed == BY_STEP:
        causes |= SPEED_LIMIT
    if scheduled and abs(wanted_w) >= min(turn, wheel / half_track):
        causes |= TURN_RATE_LIMIT
    left, right = wheels_kernel(v1, w1, 2.0 * half_track)
    code, causes_code = float(phase), float(causes)
    return (
        left,
        right,
        v1,
        w1,
        code,
        causes_code,
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
        slowed,
        slowest,
    )


@kernel
def in_place_kernel(settings: Sequence[float], row: Sequence[float], size: int) -> None:
    """Step on one row [memory of `size` | measurement | result]: reads the first two, writes the first and the last."""
    memory = row[:size]
    m = row[size:]
    first = (m[0], m[1], m[2], m[3], m[4], m[5], m[6], m[7], m[8])
    measured = (*first, m[9], m[10], m[11], m[12], m[13], m[14], m[15], m[16])
    result = step_kernel(settings, memory, measured, memory)  # type: ignore[arg-type]
    for i in range(RESULT):
        row[size + MEASURED + i] = result[i]  # type: ignore[index]
