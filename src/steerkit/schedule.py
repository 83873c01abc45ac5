"""Schedule: from here to rest in the goal's disc, nearly as fast as the limits allow, without overshoot.

The robot steers at the nearer tangent of a disc inside the capture disc: once on it, it drives straight and brakes at the last
moment, to end where braking may end. It turns on the spot only while that is faster than a curve (the structure of the quickest
drive without ramps: turn, tightest curve, straight line; `shortest`). On the way the speed is the least of

- what can be held for a period and then be braked away before the disc, or to the speed allowed at a way point;
- what lets the turn that is left end before the goal is abreast;
- none, while the goal is further off the heading than the tightest curve can bring in.

Distances and errors count from the pose at which the command takes effect, coasted (`prediction`); (v0, w0) is the command before.
Metres, seconds, radians. Derived, unless a source is given; SHARE and so on were tuned on random robots.
"""

from __future__ import annotations

import math

from steerkit.compiled import kernel
from steerkit.limits import held_speed_kernel, held_stop_kernel

AIM, AIM_NEAR = 0.85, 0.95  # radius of the disc steered at, of the disc where braking ends; from two capture radii, within one
GROWTH = 3.0  # that radius is at most this many times the circle of the top speed, in radians of the goal's width
SHARE = 0.95  # of braking and turn acceleration is planned with; the rest is for what no plan knows
TURN_SHARE = 0.85  # of the turning that is left the speed may spoil
LEAD = 0.4  # of the ramp of speed that a turn on the spot may run ahead of
LEAST_GATE = 0.05  # rad; an error below this never stops the robot
ENTRY = 1.13  # rad; asin of AIM_NEAR squared: a disc is touched this far aside of the way at most
CIRCLES = 2.5 * math.pi  # rad
NEARER = 0.9  # of the distance counts as nearer
TINY = 1e-12
PI = math.pi
FREE, TURNING, BRAKING = 0.0, 1.0, 2.0  # what holds the speed down; the step adds its own


@kernel
def turn_time_kernel(error: float, rate: float, acceleration: float, most: float) -> float:
    """Return the least time (s) to turn by `error` >= 0 and end at rest; `rate` is positive where it turns there already.

    Full acceleration, at most the rate `most`, full deceleration (Pontryagin et al. 1962, from memory).
    """
    if rate > math.sqrt(2.0 * acceleration * error):
        return rate / acceleration
    before = 0.0
    if rate < 0.0:
        before = -rate / acceleration
        error += rate * rate / (2.0 * acceleration)
        rate = 0.0
    peak = min(most, math.sqrt(acceleration * error + rate * rate / 2.0))
    if peak <= 0.0:
        return before
    steady = error - (peak * peak - rate * rate / 2.0) / acceleration
    return before + (2.0 * peak - rate) / acceleration + steady / peak


@kernel
def peak_speed_kernel(way: float, v0: float, top: float, acceleration: float, braking: float) -> float:
    """Return the highest speed of a straight drive of `way` to rest that begins at v0."""
    return min(top, math.sqrt((v0 * v0 * braking + 2.0 * acceleration * braking * max(way, 0.0)) / (acceleration + braking)))


@kernel
def entering_kernel(way: float, passing: float, braking: float, period: float, top: float) -> float:
    """Return the speed from which the robot, braking after a period, is down to `passing` in `way` metres."""
    if passing > 0.0:
        way = max(0.0, way) + held_stop_kernel(passing, braking, period)
    return held_speed_kernel(way, braking, period, top)


@kernel
def slow_kernel(
    speed: float, rate: float, off: float, turning: bool, slowest: float, half_track: float, period: float, tightest: float
) -> tuple[float, float]:
    """Return speed and turn rate (>= 0) where the wheels stand still below `slowest`: drive no slower, or turn on the spot.

    On the spot also where a curve at `slowest`, of radius `tightest`, might circle the goal.
    """
    if slowest <= 0.0 or speed >= slowest:
        return speed, rate
    if turning and (speed < 0.5 * slowest or slowest > tightest * rate) and off * half_track >= 0.5 * slowest * period:
        return 0.0, max(rate, slowest / half_track)
    return slowest, rate


@kernel
def schedule_kernel(
    distance: float,
    error: float,
    v0: float,
    w0: float,
    passing: float,
    capture_radius: float,
    target_radius: float,
    top: float,
    turn: float,
    acceleration: float,
    braking: float,
    turn_acceleration: float,
    period: float,
    settling: float,
    slowest: float,
    half_track: float,
    on_the_spot: bool,
) -> tuple[float, float, float]:
    """Return speed (m/s), turn rate (rad/s) and what holds the speed down, for a goal at `distance`, `error` off the heading.

    Braking ends at `target_radius`, at the speed `passing`. `settling` (s, >= period): the last of a turn takes out the error at
    this time constant. `on_the_spot`: no driving while the goal is off. Where it is within the disc steered at, both are 0.
    """
    b, al = SHARE * braking, SHARE * turn_acceleration
    least_v0 = max(v0, slowest)  # wheels go from 0 to the slowest speed at once: the same answer before and after
    peak = max(least_v0, peak_speed_kernel(distance - target_radius, least_v0, top, acceleration, braking))
    near = min(1.0, max(0.0, 2.0 - distance / capture_radius))
    aim = target_radius * (AIM + (AIM_NEAR - AIM) * near)
    if distance > 0.0:
        aim = min(aim, target_radius * GROWTH * peak / (turn * distance))
    if distance <= max(aim, TINY):
        return 0.0, 0.0, BRAKING
    size = abs(error)
    off = size - math.asin(aim / distance)
    if off <= TINY:
        across = distance * math.sin(size)
        way = distance * math.cos(size) - math.sqrt(max(0.0, target_radius * target_radius - across * across))
        speed = entering_kernel(way, passing, b, period, top)
        return max(speed, slowest), 0.0, FREE if speed >= top else BRAKING
    far = math.sqrt(distance * distance - aim * aim)
    way = far - math.sqrt(target_radius * target_radius - aim * aim)
    side = 1.0 if error >= 0.0 else -1.0
    if w0 * side < 0.0:
        other = 2.0 * PI - 2.0 * size + off
        if turn_time_kernel(other, abs(w0), al, turn) < turn_time_kernel(off, -abs(w0), al, turn):
            off, side = other, -side
    rate = min(turn, held_speed_kernel(off, al, settling, turn) + max(0.0, v0 * math.sin(min(off, PI)) / far))

    speed = entering_kernel(way, passing, b, period, top)
    why = FREE if speed >= top else BRAKING
    quick = min(turn, max(abs(w0), math.sqrt(al * off)))
    ahead = min(PI, PI / 2.0 + LEAD * quick * max(0.0, peak - least_v0) / (2.0 * acceleration))
    cap = 0.0
    if off <= max(LEAST_GATE, ahead - math.atan2(peak / quick, far)) and not on_the_spot:
        left = turn_time_kernel(off, w0 * side, al, turn) + period
        cap = off * far / (left * 2.0 * TURN_SHARE * math.sin(min(off, PI / 2.0)))
    if cap < speed:
        speed, why = cap, TURNING
    speed, rate = slow_kernel(speed, rate, off, why == TURNING, slowest, half_track, period, 0.5 * target_radius)
    return speed, side * rate, why


@kernel
def circling_kernel(
    distance: float, turned: float, nearest: float, rate: float, since: float, other_goal: bool
) -> tuple[float, float, bool]:
    """Return what is turned (rad) since the goal came nearer, how near it was (m), and whether the robot circles it.

    Whatever is wrong with the numbers of the robot: who has turned by more than a turn and a quarter, and is no nearer, circles.
    """
    if other_goal or not distance >= NEARER * nearest:
        return 0.0, distance, False
    turned += rate * since
    return turned, nearest, abs(turned) > CIRCLES


@kernel
def passing_kernel(
    turned: float,
    distance: float,
    capture_radius: float,
    target_radius: float,
    top: float,
    turn: float,
    acceleration: float,
    braking: float,
    turn_acceleration: float,
    period: float,
) -> float:
    """Return the speed (m/s) at a way point that its next goal allows: one `distance` on, by `turned` off the way to the way point.

    From where its disc is touched, at worst ENTRY aside, the robot can still stop at the next goal, and its tightest curve brings
    it there; where the next goal lies behind, it stops.
    """
    size = abs(turned)
    aim = min(AIM * target_radius, 0.5 * distance)
    if distance <= target_radius or size >= PI / 2.0:
        return 0.0
    b, al = SHARE * braking, SHARE * turn_acceleration
    r, cosine = capture_radius, math.cos(min(size + ENTRY, PI))
    left = math.sqrt(max(0.0, distance * distance + r * r + 2.0 * distance * r * cosine))
    speed = held_speed_kernel(left - target_radius, b, period, top)
    off = size - math.asin(aim / distance)
    if off <= TINY:
        return speed
    far = math.sqrt(distance * distance - aim * aim)
    left = turn_time_kernel(off, 0.0, al, turn) + period
    cap = off * far / (left * 2.0 * TURN_SHARE * math.sin(off))
    return min(speed, cap, min(turn, math.sqrt(al * off)) * far / math.tan(off))


@kernel
def cut_stop_kernel(speed: float, braking: float, period: float, slowest: float) -> float:
    """Return the path of a held stop that ends when its speed falls below `slowest`: there the wheels stand still."""
    whole = held_stop_kernel(speed, braking, period)
    if slowest <= 0.0 or speed <= 0.0:
        return whole
    if speed < slowest:
        return 0.0
    below = speed - braking * period * (math.floor((speed - slowest) / (braking * period)) + 1.0)
    return whole - held_stop_kernel(max(0.0, below), braking, period)


@kernel
def stops_kernel(
    distance: float,
    error: float,
    v0: float,
    w0: float,
    stop_radius: float,
    rest_radius: float,
    braking: float,
    turn_acceleration: float,
    period: float,
    slowest: float,
) -> bool:
    """Say whether to stop now: the hardest stop, straight or curved as far as the turn rate falls, ends within `stop_radius`.

    A robot that does not drive stays anywhere within `rest_radius`.
    """
    if v0 <= 0.0:
        return distance <= rest_radius
    path = cut_stop_kernel(max(0.0, v0 - braking * period), braking, period, slowest)
    spin = math.copysign(held_stop_kernel(max(0.0, abs(w0) - turn_acceleration * period), turn_acceleration, period), w0)
    if abs(spin) >= 1.0:
        return distance + path <= stop_radius
    for turned in (0.0, spin):
        ahead = distance * math.cos(error - turned) - path
        across = distance * math.sin(error - turned)
        if ahead * ahead + across * across > stop_radius * stop_radius:
            return False
    return True
