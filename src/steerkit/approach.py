"""Approach: from here to the goal at constant speed, braking only to stop inside the capture disc.

The robot heads for the goal, the short way round, at its cruising speed. It brakes when

- the goal lies ahead: steering on, so that the held speed ends at the near edge of a smaller disc about the goal; or
- the stop along its present curve ends inside the disc: a robot that circles inside the disc stops on its circle; or
- its path has touched the disc and it could not stop there: it comes back no faster than it can stop from at that distance.

Off to the side of a goal not yet touched it does not brake: a speed and a gain outside the window of `sizing` circle it for ever.
Everything counts from the pose at which the new command takes effect, coasted (`prediction`). Metres, seconds, radians; derived.
"""

from __future__ import annotations

import math

from steerkit.angles import difference_kernel
from steerkit.compiled import kernel
from steerkit.limits import held_speed_kernel, held_stop_kernel
from steerkit.prediction import stop_end_kernel

NEAR = 1e-3  # of the capture radius: a way shorter than this is not worth driving
PI = math.pi
ON_THE_WAY, CAPTURED, STOPPING = 0.0, 1.0, 2.0
AHEAD = 0.5  # rad; a goal this close to the heading is driven at: the heading loop takes out the rest on the way


@kernel
def bearing_kernel(x: float, y: float, goal_x: float, goal_y: float) -> tuple[float, float]:
    """Return distance (m) and bearing (rad, world frame) of the goal."""
    dx = goal_x - x
    dy = goal_y - y
    return math.sqrt(dx * dx + dy * dy), math.atan2(dy, dx)


@kernel
def way_ahead_kernel(distance: float, error: float, radius: float) -> float:
    """Return how far (m) along the heading the disc of `radius` about the goal is entered; infinite where the goal is not ahead.

    A heading that passes the disc counts up to the point nearest to the goal.
    """
    across = distance * math.sin(error)
    if math.cos(error) <= 0.0 or (abs(error) > AHEAD and abs(across) > radius):
        return 0.0 if distance <= radius else math.inf
    return distance * math.cos(error) - math.sqrt(max(0.0, radius * radius - across * across))


@kernel
def stop_kept_kernel(
    x: float,
    y: float,
    heading: float,
    v0: float,
    w0: float,
    goal_x: float,
    goal_y: float,
    radius: float,
    braking: float,
    turn_acceleration: float,
    path: float,
) -> bool:
    """Say whether the stop of length `path` along the present curve ends within `radius` of the goal.

    One of more than half a turn counts only where its whole circle lies within.
    """
    if v0 > 0.0 and abs(w0) * path > PI * v0:
        curve = v0 / w0
        away, _ = bearing_kernel(x - curve * math.sin(heading), y + curve * math.cos(heading), goal_x, goal_y)
        return away + abs(curve) <= radius
    end_x, end_y = stop_end_kernel(x, y, heading, v0, w0, braking, turn_acceleration, path)
    away, _ = bearing_kernel(end_x, end_y, goal_x, goal_y)
    return away <= radius


@kernel
def constant_speed_kernel(
    x: float,
    y: float,
    heading: float,
    v0: float,
    w0: float,
    goal_x: float,
    goal_y: float,
    progress: float,
    cruise: float,
    aim_radius: float,
    stop_radius: float,
    capture_radius: float,
    rest_radius: float,
    braking: float,
    turn_acceleration: float,
    period: float,
) -> tuple[float, float, float, float]:
    """Return bearing (rad), distance (m), speed (m/s; 0: stop along the curve) and progress toward this goal.

    (v0, w0) is the command before. Progress: ON_THE_WAY; CAPTURED once the path has touched the disc; STOPPING along the curve.
    That stop begins when it ends within `stop_radius`, goes on while it ends within `capture_radius`. At rest within
    `rest_radius` the robot stays.
    """
    distance, bearing = bearing_kernel(x, y, goal_x, goal_y)
    if v0 == 0.0 and distance <= rest_radius:
        return bearing, distance, 0.0, STOPPING
    slower = max(0.0, v0 - braking * period)
    path = held_stop_kernel(slower, braking, period)
    way = way_ahead_kernel(distance, difference_kernel(bearing, heading), aim_radius)
    speed = cruise if way == math.inf else held_speed_kernel(way, braking, period, cruise)
    reached = CAPTURED if progress != ON_THE_WAY or distance <= capture_radius else ON_THE_WAY
    if reached == CAPTURED:
        near = distance - aim_radius
        speed = min(speed, held_speed_kernel(near, braking, period, cruise) if near > NEAR * capture_radius else 0.0)
    if NEAR * capture_radius < way < math.inf and path <= way + aim_radius:
        return bearing, distance, speed, reached
    radius = capture_radius if progress == STOPPING else stop_radius
    if stop_kept_kernel(x, y, heading, v0, w0, goal_x, goal_y, radius, braking, turn_acceleration, path):
        return bearing, distance, 0.0, STOPPING
    return bearing, distance, speed, reached
