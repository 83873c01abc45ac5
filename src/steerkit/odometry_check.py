"""Odometry check: wheels and track width from squares driven both ways, from turns on the spot, from a straight line with a tape.

Borenstein & Feng 1996, IEEE Trans. Robotics and Automation 12(6), 869-880 (formulas from memory, and derived again): a square
driven by odometry ends off its start. A wrong track width opens or closes each corner by alpha, unequal wheels bend each side by
beta; driven both ways the two separate. The paper's formulas, good for small angles, are the start; Gauss's and Newton's steps on
the exact square finish. Left and right, as everywhere: y left, counter-clockwise positive.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from steerkit.checks import check_above_zero, check_number
from steerkit.kinematics import odometry
from steerkit.measured import Array, Measured, told
from steerkit.signals import Pose

__all__ = ["SquareCheck", "square", "straight_line", "turns_on_the_spot"]

LEAST_RUNS = 3  # each way; the paper takes 5


class SquareCheck(NamedTuple):
    """What squares driven both ways tell.

    `track_width` in m. Multiply the metres per count of each wheel by `left_wheel`, `right_wheel`. `largest_error` (m) is the
    paper's measure: the farther of the two centres of gravity from the start.
    """

    track_width: Measured
    left_wheel: Measured
    right_wheel: Measured
    largest_error: float

    def __str__(self) -> str:
        return "\n".join(one.sentence for one in self[:3])


def runs(name: str, ends: ArrayLike, side: float) -> Array:
    """Return the end errors of the runs one way, shape (n, 2)."""
    try:
        one = np.asarray(ends, dtype=np.float64)
    except (TypeError, ValueError):
        raise TypeError(f"{name} must be numbers; give x, y of each run's end: true minus odometry, in m") from None
    if one.ndim != 2 or one.shape[1] != 2:
        raise ValueError(f"{name} of shape {one.shape} does not fit; give x, y of each run's end: true minus odometry, in m")
    if len(one) < LEAST_RUNS:
        raise ValueError(f"{name} of {len(one)} runs must be >= {LEAST_RUNS} runs; drive the square five times each way")
    bad = np.flatnonzero(~np.all(np.isfinite(one), axis=1))
    if len(bad):
        raise ValueError(f"{name}[{bad[0]}]={one[bad[0]].tolist()} m must be finite ({len(bad)} such); leave that run out")
    if np.max(np.abs(one)) > side:
        raise ValueError(
            f"{name} has an end {np.max(np.abs(one)):.3g} m off, must be <= side={side:.3g} m; "
            "give true minus odometry in metres, x along the first side"
        )
    return one


def student(freedom: float) -> float:
    """Return the 97.5 % quantile of Student's t by Cornish and Fisher's expansion (1937, from memory)."""
    z = 1.96
    return z + (z**3 + z) / (4.0 * freedom) + (5.0 * z**5 + 16.0 * z**3 + 3.0 * z) / (96.0 * freedom**2)


def square(side: float, clockwise: ArrayLike, counter_clockwise: ArrayLike, track_width: float) -> SquareCheck:
    """Return track width and wheel corrections from a square driven both ways.

    Parameters
    ----------
    side : float, m
    clockwise, counter_clockwise : array, shape (n, 2), m
        For each run true end minus odometry's end, x along the first side, y left of it. Every run starts at the same spot, four
        sides and four turns on the spot.
    track_width : float, m
        That odometry reckoned with.

    Returns
    -------
    SquareCheck

    Raises
    ------
    ValueError
        Too few runs, or numbers that are no end errors.
    """
    L = check_above_zero("side", side, "m", "give the side of the square")
    b = check_above_zero("track_width", track_width, "m", "give the track width that odometry reckoned with")
    cw, ccw = runs("clockwise", clockwise, L), runs("counter_clockwise", counter_clockwise, L)
    x_cw, y_cw = np.mean(cw, axis=0)
    x_ccw, y_ccw = np.mean(ccw, axis=0)
    start = paper_ratios(L, b, x_cw, y_cw, x_ccw, y_ccw)
    ratios, J, left = refined(start, L, b, np.array([x_cw, y_cw, x_ccw, y_ccw]))
    V = np.zeros((4, 4))  # of the two centres of gravity
    V[:2, :2], V[2:, 2:] = np.cov(cw.T) / len(cw), np.cov(ccw.T) / len(ccw)
    V *= max(1.0, float(left @ left) / 2.0 / max(float(np.trace(V)) / 4.0, 1e-30))  # more, if two ratios leave more
    A = np.linalg.pinv(J)
    u_b, u_d = student(len(cw) + len(ccw) - 2.0) * np.sqrt(np.diag(A @ V @ A.T))
    E_b, E_d = ratios.tolist()
    return SquareCheck(
        told("track_width", b * E_b, b * float(u_b), "m", f"{E_b:.5g} times what odometry reckoned with"),
        told("left_wheel", 2.0 / (E_d + 1.0), 0.5 * float(u_d), "", "times its metres per count"),
        told("right_wheel", 2.0 / (1.0 / E_d + 1.0), 0.5 * float(u_d), "", "times its metres per count"),
        max(math.hypot(x_cw, y_cw), math.hypot(x_ccw, y_ccw)),
    )


def paper_ratios(L: float, b: float, x_cw: float, y_cw: float, x_ccw: float, y_ccw: float) -> tuple[float, float]:
    """Return E_b and E_d by the paper's formulas for small angles, the mean of those in x and in y."""
    alpha = (x_cw + x_ccw + y_cw - y_ccw) / (-8.0 * L)
    beta = (x_cw - x_ccw + y_cw + y_ccw) / (-8.0 * L)
    E_b = (math.pi / 2.0) / (math.pi / 2.0 - alpha)
    return E_b, 1.0 if beta == 0.0 else wheel_ratio(0.5 * L / math.sin(0.5 * beta), b)


def end_errors(ratios: Array, L: float, b: float) -> Array:
    """Return the end errors (x, y clockwise, x, y counter-clockwise) of squares with E_b and E_d, exactly."""
    E_b, E_d = ratios.tolist()
    left, right = 2.0 / (E_d + 1.0), 2.0 / (1.0 / E_d + 1.0)
    found: list[float] = []
    for way in (-1.0, 1.0):
        corner = way * math.pi / 4.0 * b  # m that each wheel rolls for a quarter turn
        pose = Pose(0.0, 0.0, 0.0)
        for a, c in ((L, L), (-corner, corner)) * 4:
            pose = odometry(pose, a * left, c * right, b * E_b)
        found += [pose.x, pose.y]  # odometry's square ends where it began
    return np.array(found)


def refined(ratios: tuple[float, float], L: float, b: float, seen: Array) -> tuple[Array, Array, Array]:
    """Return E_b and E_d of which the exact square ends nearest to what was seen, the derivative there, and what is left."""
    r = np.array(ratios)
    for _ in range(4):  # Gauss-Newton; the paper's formulas are near
        J = np.column_stack([(end_errors(r + d, L, b) - end_errors(r - d, L, b)) / 2e-6 for d in 1e-6 * np.eye(2)])
        left = seen - end_errors(r, L, b)
        r = r + np.linalg.lstsq(J, left, rcond=None)[0]
    return r, J, seen - end_errors(r, L, b)


def wheel_ratio(R: float, b: float) -> float:
    """Return E_d, right over left wheel, of wheels of track width b that roll round a circle of radius R (> 0 to the left)."""
    return (R + 0.5 * b) / (R - 0.5 * b)


def turns_on_the_spot(track_width: float, odometry_turn: float, true_turn: float, reading_error: float) -> Measured:
    """Return the track width from turns on the spot: ten turns and a mark on the floor.

    Parameters
    ----------
    track_width : float, m
        That odometry reckoned with.
    odometry_turn : float, rad
        What odometry says, unwrapped (ten turns are 62.8).
    true_turn : float, rad
        What the marks say.
    reading_error : float, rad
        How well start and end are read together; 0.02 is about one degree.

    Returns
    -------
    Measured

    Raises
    ------
    TypeError, ValueError
        Turns of different sign, or no turn.
    """
    b = check_above_zero("track_width", track_width, "m", "give the track width that odometry reckoned with")
    error = check_above_zero("reading_error", reading_error, "rad", "give how well the marks are read, 0.02 for a degree")
    true = checked_pair("odometry_turn", odometry_turn, "true_turn", true_turn, "rad", "clockwise is negative in both")
    value = b * float(odometry_turn) / float(true_turn)
    return told("track_width", value, value * error / true, "m", f"{value / b:.5g} times what odometry reckoned with")


def straight_line(odometry_distance: float, tape_distance: float, reading_error: float) -> Measured:
    """Return the correction of both wheels from a straight line and a tape.

    Parameters
    ----------
    odometry_distance, tape_distance : float, m
    reading_error : float, m
        How well start and end are read together.

    Returns
    -------
    Measured
        Multiply the metres per count of both wheels by it.

    Raises
    ------
    TypeError, ValueError
        Distances of different sign, or none.
    """
    error = check_above_zero("reading_error", reading_error, "m", "give how well the tape is read, 0.005 for 5 mm")
    tape = checked_pair(
        "odometry_distance", odometry_distance, "tape_distance", tape_distance, "m", "backwards is negative in both"
    )
    value = tape / abs(float(odometry_distance))
    return told("both_wheels", value, value * error / tape, "", "times their metres per count")


def checked_pair(one: str, value: float, other: str, truth: float, unit: str, repair: str) -> float:
    """Return the size of the truth; the two must be near one another."""
    size = abs(check_number(other, truth, unit, f"give what was seen; {repair}"))
    check_above_zero(other, size, unit, f"give what was seen; {repair}")
    ratio = check_number(one, value, unit, f"give what odometry says; {repair}") / float(truth)
    if not 0.5 <= ratio <= 2.0:
        raise ValueError(
            f"{one}={float(value):.6g} {unit} must be 0.5 to 2 times {other}={float(truth):.6g} {unit}; "
            f"check units, whole turns and signs ({repair})"
        )
    return size
