"""Shortest drives without ramps: closed forms against tables and Dubins' words."""

from __future__ import annotations

import math

import numpy as np
import pytest

from steerkit.kinematics import arc
from steerkit.shortest import shortest_curve_to_point, steering_time, steering_time_kernel, straight_time, wheel_time

NEAR = 1e-9  # rounding of a few dozen operations
PI = math.pi


# closed forms: tables (derived elsewhere, by brute force over five free segments), half a unit of the last printed digit

CURVES = [((2, 1), 2.255649583), ((0, 2), PI), ((0, 1), 5.470429746), ((0, 0.5), 5.975790256), ((-3, 0), 6.785093762)]  # radius 1
TIMES = [  # speed and turn rate 1: forwards, with reverse; wheels together: forwards, with reverse
    ((2.0, 0.5), (2.06424, 2.06424, 2.30653, 2.30653)),
    ((0.0, 1.0), (2.09440, 1.82348, 2.57080, 2.57080)),
    ((0.3, 0.4), (1.17998, 1.02154, 1.42730, 1.42730)),
    ((-0.5, 0.2), (3.03371, 0.64796, 3.29960, 0.91902)),
    ((-2.0, 0.3), (4.26777, 2.02296, 5.01508, 2.17126)),
    ((0.2, 1.8), (2.55506, 2.48670, 3.27122, 3.27122)),
    ((-1.0, 0.0), (3.66519, 1.0, 4.14159, 1.0)),
    ((0.1, 0.1), (0.85617, 0.54317, 0.92682, 0.78692)),
]
FORMS = [(steering_time, False), (steering_time, True), (wheel_time, False), (wheel_time, True)]


@pytest.mark.parametrize(("point", "expected"), CURVES)
def test_shortest_curves_are_those_of_the_table(point, expected):
    for size, side in ((1.0, 1.0), (2.5, -1.0)):
        got = shortest_curve_to_point((size * point[0], side * size * point[1]), size) / size
        assert abs(got - expected) <= 0.5e-9 + NEAR * 0.01


@pytest.mark.parametrize(("point", "expected"), TIMES)
@pytest.mark.parametrize("form", range(4))
def test_times_are_those_of_the_table(point, expected, form):
    law, reverse = FORMS[form]
    assert abs(law(point, 1.0, 1.0, reverse) - expected[form]) <= 0.5e-5
    got = law((3.0 * point[0], -3.0 * point[1]), speed=1.5, turn_rate=0.5, reverse=reverse)  # radius 3; a time unit is 2 s
    assert abs(got / 2.0 - expected[form]) <= 0.5e-5


def test_straight_times_are_worked_examples():
    assert straight_time(2.0, 1.0, 0.8, 0.8) == pytest.approx(3.25, abs=NEAR)
    assert straight_time(0.5, 1.0, 0.8, 0.8) == pytest.approx(1.581139, abs=0.5e-6)
    # up in 1 s over 0.5 m, down in 0.5 s over 0.25 m, 1 m at top speed; and with the top speed just reached
    assert straight_time(1.75, 1.0, 1.0, 2.0) == pytest.approx(2.5, abs=NEAR)
    assert straight_time(0.75, 1.0, 1.0, 2.0) == pytest.approx(1.5, abs=NEAR)
    assert straight_time(0.0, 1.0, 1.0, 2.0) == 0.0


# Dubins 1957: six words; formulas of Shkel & Lumelsky 2001 (from memory), each kept only where it really ends at the pose

POSES = [  # radius 1
    ((0, 0, PI), 7.330382858),
    ((0, 0, PI / 2), 6.408513138),
    ((0, 2, PI), PI),
    ((0, 4, 0), 2 * PI),
    ((4, 0, 0), 4.0),
    ((0, 1, 0), 2 * PI + 1),
    ((-1, 0, 0), 2 * PI + 1),
    ((1, 1, PI / 2), PI / 2),
    ((4, 4, PI), 7.613728609),
    ((4, 0, PI), 7.652891820),
]
WORDS = [(1, 0, 1), (-1, 0, -1), (1, 0, -1), (-1, 0, 1), (-1, 1, -1), (1, -1, 1)]


def turn(angle):
    return (angle + 1e-7) % (2 * PI) - 1e-7


def root(square):
    return np.sqrt(np.where(np.abs(square) < 1e-12, 0.0, square))


def lengths(d, a, b):
    """Yield the three lengths of each word, NaN where it does not exist."""
    sa, sb, ca, cb, c = np.sin(a), np.sin(b), np.cos(a), np.cos(b), np.cos(a - b)
    with np.errstate(invalid="ignore"):
        to = np.arctan2(cb - ca, d + sa - sb)
        yield turn(to - a), root(2 + d * d - 2 * c + 2 * d * (sa - sb)), turn(b - to)
        to = np.arctan2(ca - cb, d - sa + sb)
        yield turn(a - to), root(2 + d * d - 2 * c + 2 * d * (sb - sa)), turn(to - b)
        p = root(-2 + d * d + 2 * c + 2 * d * (sa + sb))
        to = np.arctan2(-ca - cb, d + sa + sb) - np.arctan2(-2.0, p)
        yield turn(to - a), p, turn(to - b)
        p = root(-2 + d * d + 2 * c - 2 * d * (sa + sb))
        to = np.arctan2(ca + cb, d - sa - sb) - np.arctan2(2.0, p)
        yield turn(a - to), p, turn(b - to)
        p = turn(-np.arccos((6 - d * d + 2 * c + 2 * d * (sa - sb)) / 8))
        t = turn(a - np.arctan2(ca - cb, d - sa + sb) + p / 2)
        yield t, p, turn(a - b - t + p)
        p = turn(-np.arccos((6 - d * d + 2 * c + 2 * d * (sb - sa)) / 8))
        t = turn(-a - np.arctan2(ca - cb, d + sa - sb) + p / 2)
        yield t, p, turn(b - a - t + p)


def dubins(x, y, headings):
    """Return the length of the shortest curve of radius 1 to (x, y) for each end heading."""
    headings = np.atleast_1d(np.asarray(headings, dtype=float))
    toward = math.atan2(y, x)
    best = np.full(headings.shape, np.inf)
    for word, parts in zip(WORDS, lengths(math.hypot(x, y), turn(-toward), turn(headings - toward)), strict=True):
        parts = [part + 0.0 * headings for part in parts]
        good = np.isfinite(sum(parts))
        pose = np.zeros((*headings.shape, 3))
        for side, part in zip(word, parts, strict=True):
            part = np.where(good, part, 0.0)
            pose = np.atleast_2d(arc(pose, np.column_stack([np.ones_like(part), np.full_like(part, side)]), part))
        off = np.abs(pose[:, 0] - x) + np.abs(pose[:, 1] - y) + np.abs(np.exp(1j * pose[:, 2]) - np.exp(1j * headings))
        best = np.where(good & (off < 1e-6), np.minimum(best, sum(parts)), best)
    return best


@pytest.mark.parametrize(("pose", "expected"), POSES)
def test_the_words_of_this_file_give_the_published_lengths(pose, expected):
    assert abs(dubins(*pose)[0] - expected) <= 0.5e-8


def test_the_shortest_curve_to_a_point_is_the_least_over_all_headings():
    rng = np.random.default_rng(0)
    for size in (0.3, 1.0, 3.0, 6.0):
        for x, y in rng.normal(0.0, size, (15, 2)):
            expected = dubins(x, y, np.linspace(-PI, PI, 3601)).min()
            got = shortest_curve_to_point((x, y), 1.0)
            assert got <= expected + 1e-6  # of words that end within 1e-6
            assert got >= expected - 1e-5  # the best heading lies between two of the 3601: second order


def test_a_wider_choice_never_takes_longer():
    rng = np.random.default_rng(1)
    for x, y in rng.normal(0.0, 1.5, (2000, 2)):
        V, W = rng.uniform(0.3, 2.0, 2)
        both, wheels = steering_time((x, y), V, W), wheel_time((x, y), V, W)
        assert steering_time((x, y), V, W, reverse=True) <= min(both, steering_time((-x, y), V, W)) + NEAR
        assert wheel_time((x, y), V, W, reverse=True) <= min(wheels, wheel_time((-x, y), V, W)) + NEAR
        assert both <= min(wheels, shortest_curve_to_point((x, y), V / W) / V) + NEAR
        assert steering_time((x, y), V, W, reverse=True) <= wheel_time((x, y), V, W, reverse=True) + NEAR
        assert both >= math.hypot(x, y) / V - NEAR


def test_steering_time_grows_with_distance_and_with_angle():
    distances, angles = np.linspace(0.01, 4.0, 400), np.linspace(0.0, PI, 361)
    times = np.array([[steering_time_kernel(d, a, 1.0, 1.0) for a in angles] for d in distances.tolist()])
    assert np.diff(times, axis=0).min() >= -NEAR
    assert np.diff(times, axis=1).min() >= -NEAR


BAD_CALLS = [
    (lambda: shortest_curve_to_point((1, 0), 0), "turning_radius=0 m must be > 0; give the tightest radius that is driven"),
    (lambda: steering_time((1, math.nan), 1, 1), "point[1]=nan m must be finite; give how far to the left of the robot it lies"),
    (lambda: steering_time((1, 0), 0, 1), "speed=0 m/s must be > 0; give the fastest speed"),
    (lambda: wheel_time((1, 0), 1, -1), "turn_rate=-1 rad/s must be > 0; give the fastest turn rate"),
    (lambda: straight_time(-1, 1, 1, 1), "distance=-1 m must be >= 0; give its size"),
    (lambda: straight_time(1, 1, 1, 0), "braking=0 m/s^2 must be > 0; give the steepest loss of speed, as a positive number"),
]


@pytest.mark.parametrize(("call", "expected"), BAD_CALLS, ids=[text.split(" ")[0] for _, text in BAD_CALLS])
def test_a_wrong_argument_becomes_a_sentence(call, expected):
    with pytest.raises(ValueError) as caught:
        call()
    assert str(caught.value) == expected
