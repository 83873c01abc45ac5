"""Kinematics: exact arcs, wheels, odometry, frames.

Metres, radians, seconds; x forward, y left, counter-clockwise positive (ISO 8855). The robot is a unicycle: its reference point is
the middle of the axle, it moves along its heading at `speed` (m/s) and turns at `turn_rate` (rad/s). *Motion* is that pair.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steerkit.angles import wrap_kernel
from steerkit.checks import check_above_zero, check_shapes
from steerkit.compiled import kernel
from steerkit.signals import Motion, Pose, Wheels

__all__ = ["arc", "count_step", "odometry", "sighting", "to_motion", "to_robot", "to_wheels", "to_world"]

Array = NDArray[np.float64]


@kernel
def sinc_kernel(angle: float) -> float:
    """Return sin(angle)/angle, 1 at 0: chord over arc. Exact down to the smallest angle, no cliff and no series."""
    return math.sin(angle) / angle if angle != 0.0 else 1.0


@kernel
def arc_kernel(x: float, y: float, heading: float, speed: float, turn_rate: float, duration: float) -> tuple[float, float, float]:
    """Return the pose after `duration` of a constant motion: a chord of length s sinc(w/2), turned by half the turn w.

    The same as Thrun, Burgard & Fox 2005, eq. 5.9 (from memory), without its division by the turn rate.
    """
    half = 0.5 * turn_rate * duration
    chord = speed * duration * sinc_kernel(half)
    return x + chord * math.cos(heading + half), y + chord * math.sin(heading + half), wrap_kernel(heading + 2.0 * half)


@kernel
def wheels_kernel(speed: float, turn_rate: float, track_width: float) -> tuple[float, float]:
    """Return the wheel speeds (left, right) of a motion."""
    half = 0.5 * turn_rate * track_width
    return speed - half, speed + half


@kernel
def motion_kernel(left: float, right: float, track_width: float) -> tuple[float, float]:
    """Return the motion (speed, turn rate) of two wheel speeds (Dudek & Jenkin 2010, chapter 3, from memory)."""
    return 0.5 * (left + right), (right - left) / track_width


@kernel
def to_world_kernel(x: float, y: float, heading: float, ahead: float, left: float) -> tuple[float, float]:
    """Return in the world frame a point that the robot at (x, y, heading) sees at (ahead, left)."""
    c = math.cos(heading)
    s = math.sin(heading)
    return x + c * ahead - s * left, y + s * ahead + c * left


@kernel
def to_robot_kernel(x: float, y: float, heading: float, point_x: float, point_y: float) -> tuple[float, float]:
    """Return in the robot's frame a point of the world frame."""
    c = math.cos(heading)
    s = math.sin(heading)
    return c * (point_x - x) + s * (point_y - y), c * (point_y - y) - s * (point_x - x)


@kernel
def arc_row_kernel(poses: Array, motions: Array, durations: Array, out: Array) -> None:
    for i in range(len(poses)):
        p = poses[i]
        m = motions[i]
        out[i, 0], out[i, 1], out[i, 2] = arc_kernel(p[0], p[1], p[2], m[0], m[1], durations[i])


def arc(pose: ArrayLike, motion: ArrayLike, duration: ArrayLike) -> Pose | Array:
    """Return the pose after a constant motion, exactly.

    Parameters
    ----------
    pose : array, shape (..., 3), m, m, rad
    motion : array, shape (..., 2), m/s, rad/s
    duration : float or array, shape (...), s

    Returns
    -------
    Pose, or array of shape (..., 3) where any argument is an array of more than one
        Heading in (-pi, pi].

    Raises
    ------
    ValueError
        Shapes that do not fit.

    Examples
    --------
    >>> [round(value, 6) for value in arc((0, 0, 0), (1.0, math.pi / 2), 1.0)]
    [0.63662, 0.63662, 1.570796]
    """
    poses, motions, spans = (np.asarray(value, dtype=np.float64) for value in (pose, motion, duration))
    check_shapes("pose", poses.shape[-1:] == (3,), poses.shape, "x, y, heading along the last axis")
    check_shapes("motion", motions.shape[-1:] == (2,), motions.shape, "speed, turn rate along the last axis")
    shapes = (poses.shape[:-1], motions.shape[:-1], spans.shape)
    try:
        shape = np.broadcast_shapes(*shapes)
    except ValueError:
        raise ValueError(f"pose, motion, duration of shapes {shapes} do not fit; give as many of each, or one for all") from None
    if shape == ():
        x, y, heading = poses.tolist()
        speed, turn_rate = motions.tolist()
        return Pose(*arc_kernel(x, y, heading, speed, turn_rate, float(spans)))
    out = np.empty((*shape, 3))
    arc_row_kernel(
        np.ascontiguousarray(np.broadcast_to(poses, (*shape, 3))).reshape(-1, 3),
        np.ascontiguousarray(np.broadcast_to(motions, (*shape, 2))).reshape(-1, 2),
        np.ascontiguousarray(np.broadcast_to(spans, shape)).reshape(-1),
        out.reshape(-1, 3),
    )
    return out


def to_wheels(motion: tuple[float, float], track_width: float) -> Wheels:
    """Return the wheel speeds of a motion.

    Parameters
    ----------
    motion : (float, float), m/s, rad/s
    track_width : float, m

    Returns
    -------
    Wheels, m/s

    Raises
    ------
    ValueError
        A track width that is not > 0.

    Examples
    --------
    >>> left, right = to_wheels((0.5, 2.0), track_width=0.4)
    >>> round(left, 9), round(right, 9)
    (0.1, 0.9)
    """
    width = check_above_zero("track_width", track_width, "m", "give the distance between the wheel contact points")
    return Wheels(*wheels_kernel(float(motion[0]), float(motion[1]), width))


def to_motion(wheels: tuple[float, float], track_width: float) -> Motion:
    """Return the motion of two wheel speeds (Dudek & Jenkin 2010, chapter 3, from memory).

    Parameters
    ----------
    wheels : (float, float), m/s
        Left, right.
    track_width : float, m

    Returns
    -------
    Motion, m/s, rad/s

    Raises
    ------
    ValueError
        A track width that is not > 0.
    """
    width = check_above_zero("track_width", track_width, "m", "give the distance between the wheel contact points")
    return Motion(*motion_kernel(float(wheels[0]), float(wheels[1]), width))


def to_world(pose: tuple[float, float, float], point: tuple[float, float]) -> tuple[float, float]:
    """Return in the world frame a point seen by the robot.

    Parameters
    ----------
    pose : (float, float, float), m, m, rad
        The robot's.
    point : (float, float), m, m
        Ahead and to the left of it.

    Returns
    -------
    (float, float), m, m
    """
    return to_world_kernel(float(pose[0]), float(pose[1]), float(pose[2]), float(point[0]), float(point[1]))


def to_robot(pose: tuple[float, float, float], point: tuple[float, float]) -> tuple[float, float]:
    """Return a point of the world frame as the robot sees it.

    Parameters
    ----------
    pose : (float, float, float), m, m, rad
        The robot's.
    point : (float, float), m, m

    Returns
    -------
    (float, float), m, m
        Ahead and to the left of it.
    """
    return to_robot_kernel(float(pose[0]), float(pose[1]), float(pose[2]), float(point[0]), float(point[1]))


def sighting(bearing: float, distance: float) -> tuple[float, float]:
    """Return what a camera sees at a bearing and a distance as a point of the robot's frame.

    Parameters
    ----------
    bearing : float, rad
        From straight ahead, left positive.
    distance : float, m

    Returns
    -------
    (float, float), m, m
        Ahead and to the left.
    """
    return distance * math.cos(bearing), distance * math.sin(bearing)


def count_step(now: int, before: int, counter: int) -> int:
    """Return how far a wheel counter went from `before` to `now`, roll-over included.

    Parameters
    ----------
    now, before : int, counts
    counter : int, counts
        How many values the counter has (65536 for 16 bits). A step of half of that or more cannot be told from a step back.

    Returns
    -------
    int, counts, in [-counter/2, counter/2)

    Examples
    --------
    >>> count_step(3, 65534, 65536)
    5
    """
    check_above_zero("counter", counter, "counts", "give the number of values of the counter, 65536 for 16 bits")
    return (int(now) - int(before) + counter // 2) % counter - counter // 2


def odometry(pose: tuple[float, float, float], left: float, right: float, track_width: float) -> Pose:
    """Return the pose after the wheels rolled `left` and `right` metres, as an exact arc.

    Parameters
    ----------
    pose : (float, float, float), m, m, rad
    left, right : float, m
        Counts since the last call (see `count_step`) times metres per count.
    track_width : float, m

    Returns
    -------
    Pose

    Examples
    --------
    >>> turned = odometry((0, 0, 0), -0.1, 0.1, track_width=0.4)
    >>> round(turned.heading, 9)
    0.5
    """
    path, turn = to_motion((left, right), track_width)
    return Pose(*arc_kernel(float(pose[0]), float(pose[1]), float(pose[2]), path, turn, 1.0))
