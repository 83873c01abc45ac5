"""Shortest drives without ramps: the closed forms below which no time can fall, where speed and turn rate may jump.

Metres, seconds, radians; a point is (ahead, left) in the robot's frame; any heading at the end. Shortest curve (Dubins 1957), speed
and turn rate limited each for itself or together by the wheels (derived), straight from rest to rest (derived).
"""

from __future__ import annotations

import math

from steerkit.checks import check_above_zero, check_not_negative, check_number
from steerkit.compiled import kernel

__all__ = [
    "shortest_curve_to_point",
    "steering_time",
    "straight_time",
    "wheel_time",
]

PI = math.pi
TURN = 2.0 * math.pi


@kernel
def positive_angle_kernel(angle: float) -> float:
    """Return an angle in (-2 pi, 2 pi) moved into [0, 2 pi); what is below 0 by rounding counts as 0."""
    if angle >= 0.0:
        return angle if angle < TURN else angle - TURN
    return 0.0 if angle > -1e-12 else angle + TURN


@kernel
def arc_then_straight_kernel(x: float, y: float) -> float:
    """Return the length of the arc of radius 1 to the left and the straight on to (x, y), outside that circle (Dubins 1957)."""
    tangent = math.sqrt(max(0.0, x * x + (y - 1.0) * (y - 1.0) - 1.0))
    arc = math.atan2(y - 1.0, x) + 0.5 * PI - math.atan2(tangent, 1.0)
    return (max(0.0, arc) if x >= 0.0 and y >= 0.0 else positive_angle_kernel(arc)) + tangent


@kernel
def two_arcs_kernel(x: float, y: float, side: float) -> float:
    """Return the least length of an arc a about a circle that touches the last one, then an arc to the left on to (x, y), radius 1.

    `side` 1: forwards to the right; -1: backwards, turning left. Either way the last circle is about (2 side sin a, 2 cos a - 1),
    and passes through the point where (y+1) cos a + side x sin a = (D^2 + 3)/4, D from (0, -1). Infinite where there is none.
    """
    D = math.sqrt(x * x + (y + 1.0) * (y + 1.0))
    if not D > 0.0 or D * D + 3.0 > 4.0 * D:
        return math.inf
    half = math.acos((D * D + 3.0) / (4.0 * D))
    best = math.inf
    for i in range(2):
        a = positive_angle_kernel(side * math.atan2(x, y + 1.0) + (half if i == 0 else -half))
        heading = math.atan2(y + 1.0 - 2.0 * math.cos(a), x - 2.0 * side * math.sin(a)) + 0.5 * PI
        best = min(best, a + positive_angle_kernel(positive_angle_kernel(heading) + side * a - (TURN if side > 0.0 else 0.0)))
    return best


@kernel
def curve_kernel(x: float, y: float) -> float:
    """Return the shortest curve to (x, y), any heading there, forwards, curvature at most 1 (Dubins 1957)."""
    y = abs(y)
    if x * x + (y - 1.0) * (y - 1.0) >= 1.0:
        return arc_then_straight_kernel(x, y)
    return two_arcs_kernel(x, y, 1.0)


@kernel
def steering_time_kernel(distance: float, angle: float, V: float, W: float) -> float:
    """Return the least time to a point at `distance` and `angle` >= 0 off the heading: 0 <= v <= V, |w| <= W, both may jump.

    Derived: turn on the spot until the last straight is 90 degrees off (or the goal lies on the tightest circle), then arc, then
    straight. It grows with both arguments.
    """
    R = V / W
    if distance >= math.sqrt(2.0) * R:
        on_the_spot = angle - math.acos(R / distance)
        if on_the_spot >= 0.0:
            return (on_the_spot + 0.5 * PI) / W + (math.sqrt(distance * distance - R * R) - R) / V
    elif angle >= math.asin(distance / (2.0 * R)):
        return (angle + math.asin(distance / (2.0 * R))) / W
    return arc_then_straight_kernel(distance * math.cos(angle) / R, distance * math.sin(angle) / R) / W


@kernel
def both_ways_kernel(x: float, y: float) -> float:
    """Return the least time to (x, y), |v| <= 1 and |w| <= 1 (derived).

    Arc and straight; arc back, a quarter circle, straight; arc back, arc. Also the best without reverse.
    """
    x, y = abs(x), abs(y)
    D = math.sqrt(x * x + (y + 1.0) * (y + 1.0))
    best = min(steering_time_kernel(math.sqrt(x * x + y * y), math.atan2(y, x), 1.0, 1.0), two_arcs_kernel(x, y, -1.0))
    back = math.atan2(y + 1.0, x) - math.acos(min(1.0, 1.0 / D))
    straight = math.sqrt(max(0.0, D * D - 1.0)) - 2.0
    if back >= 0.0 and straight >= 0.0:
        best = min(best, back + 0.5 * PI + straight)
    return best


@kernel
def wheel_time_kernel(x: float, y: float, V: float, W: float, reverse: bool) -> float:
    """Return the least time to (x, y >= 0), |v|/V + |w|/W <= 1: turn, drive; with reverse (x >= 0) back up first (derived)."""
    R = V / W
    phi = math.atan2(y, x)
    if reverse and 0.0 < y <= R:
        psi = math.acos(1.0 - y / R)
        if phi > psi:
            return (y / math.tan(psi) - x) / V + psi / W + y / (V * math.sin(psi))
    return phi / W + math.sqrt(x * x + y * y) / V


def checked_point(point: tuple[float, float]) -> tuple[float, float]:
    ahead = check_number("point[0]", point[0], "m", "give how far ahead of the robot it lies")
    return ahead, check_number("point[1]", point[1], "m", "give how far to the left of the robot it lies")


def checked_limits(speed: float, turn_rate: float) -> tuple[float, float]:
    V = check_above_zero("speed", speed, "m/s", "give the fastest speed")
    return V, check_above_zero("turn_rate", turn_rate, "rad/s", "give the fastest turn rate")


def shortest_curve_to_point(point: tuple[float, float], turning_radius: float) -> float:
    """Return the length of the shortest curve to a point, forwards, never tighter than a radius, any heading at its end.

    Parameters
    ----------
    point : (float, float), m, m
        (ahead, left).
    turning_radius : float, m

    Returns
    -------
    float, m

    References
    ----------
    L. E. Dubins, On curves of minimal length with a constraint on average curvature, American Journal of Mathematics 79, 1957.
    To a point: arc and straight, or inside the circle arc and arc (derived).

    Examples
    --------
    >>> round(shortest_curve_to_point((2.0, 1.0), turning_radius=1.0), 9)
    2.255649583
    """
    x, y = checked_point(point)
    R = check_above_zero("turning_radius", turning_radius, "m", "give the tightest radius that is driven")
    return R * curve_kernel(x / R, y / R)


def steering_time(point: tuple[float, float], speed: float, turn_rate: float, reverse: bool = False) -> float:
    """Return the least time to a point where speed and turn rate are limited each for itself, and both may jump.

    Parameters
    ----------
    point : (float, float), m, m
        (ahead, left).
    speed : float, m/s
    turn_rate : float, rad/s
    reverse : bool
        Whether the robot may drive backwards as fast as forwards.

    Returns
    -------
    float, s

    Notes
    -----
    Derived. Forwards: turn on the spot until the last straight is 90 degrees off, then arc and straight, after Dubins 1957.
    With reverse: of a point on the side that is nearer, the best of arc and straight; arc back, quarter circle, straight; two arcs.

    Examples
    --------
    >>> round(steering_time((0.0, 1.0), speed=1.0, turn_rate=1.0), 5), round(steering_time((0.0, 1.0), 1.0, 1.0, reverse=True), 5)
    (2.0944, 1.82348)
    """
    x, y = checked_point(point)
    V, W = checked_limits(speed, turn_rate)
    if reverse:
        return both_ways_kernel(x * W / V, y * W / V) / W
    return steering_time_kernel(math.sqrt(x * x + y * y), abs(math.atan2(y, x)), V, W)


def wheel_time(point: tuple[float, float], speed: float, turn_rate: float, reverse: bool = False) -> float:
    """Return the least time to a point where the wheels limit speed and turn rate together, |v|/speed + |w|/turn_rate <= 1.

    Parameters
    ----------
    point : (float, float), m, m
        (ahead, left).
    speed : float, m/s
        Straight, that of a wheel.
    turn_rate : float, rad/s
        On the spot: two wheel speeds over the track width.
    reverse : bool
        Whether the robot may drive backwards as fast as forwards.

    Returns
    -------
    float, s

    Notes
    -----
    Derived: turn, then drive; with reverse, back up first where that pays. That only turns on the spot and straights are needed is
    of Balkcom & Mason, Time optimal trajectories for bounded velocity differential drive vehicles, 2002.

    Examples
    --------
    >>> round(wheel_time((0.0, 1.0), speed=1.0, turn_rate=1.0), 5)
    2.5708
    """
    x, y = checked_point(point)
    V, W = checked_limits(speed, turn_rate)
    return wheel_time_kernel(abs(x) if reverse else x, abs(y), V, W, reverse)


def straight_time(distance: float, speed: float, acceleration: float, braking: float) -> float:
    """Return the least time for a straight way from rest to rest: steady acceleration, top speed, steady braking.

    Parameters
    ----------
    distance : float, m
    speed : float, m/s
    acceleration, braking : float, m/s^2

    Returns
    -------
    float, s
        D/v + v (1/a + 1/b)/2, or sqrt(2 D (1/a + 1/b)) where the top speed is not reached (derived).

    Examples
    --------
    >>> straight_time(2.0, speed=1.0, acceleration=0.8, braking=0.8)
    3.25
    """
    D = check_not_negative("distance", distance, "m", "give its size")
    v = check_above_zero("speed", speed, "m/s", "give the fastest speed")
    a = check_above_zero("acceleration", acceleration, "m/s^2", "give the steepest gain of speed")
    b = check_above_zero("braking", braking, "m/s^2", "give the steepest loss of speed, as a positive number")
    ramps = 1.0 / a + 1.0 / b
    return D / v + v * ramps / 2.0 if v * v * ramps <= 2.0 * D else math.sqrt(2.0 * D * ramps)
