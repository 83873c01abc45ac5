"""Kinematics against an integrator, a matrix exponential, rigid transforms, 60-digit arithmetic and points worked by hand."""

from __future__ import annotations

import math
import re
from itertools import pairwise

import mpmath
import numpy as np
import pytest
import scipy
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.linalg import expm
from scipy.spatial import transform

from steerkit import Motion, Pose, Wheels, compiled
from steerkit.angles import difference, wrap
from steerkit.kinematics import (
    arc,
    arc_kernel,
    count_step,
    odometry,
    sighting,
    to_motion,
    to_robot,
    to_wheels,
    to_world,
)

PI, TURN = math.pi, 2.0 * math.pi
ROUNDING = 2.0**-53  # of one operation, relative
TINY = 1e-300  # below it floats lose digits, and relative bounds with them
PLACES = st.floats(-50.0, 50.0)
HEADINGS = st.floats(-PI, PI)
SPEEDS = st.floats(-2.0, 2.0)
RATES = st.floats(-6.0, 6.0)
SPANS = st.floats(0.0, 5.0)
PATIENT = settings(deadline=None)  # the first call of a kernel compiles it
NEEDS_COMPILER = pytest.mark.skipif(not compiled.ON, reason="without the compiler the kernels are plain Python already")


def close(got, expected, within):
    """Say whether two poses agree, the headings modulo a turn."""
    far = max(abs(got[0] - expected[0]), abs(got[1] - expected[1]), abs(difference(got[2], expected[2])))
    return far <= within


def drawn_motions(seed, n):
    rng = np.random.default_rng(seed)
    return rng.uniform(-5.0, 5.0, (n, 3)), rng.uniform([-2.0, -4.0], [2.0, 4.0], (n, 2)), rng.uniform(0.1, 3.0, n)


# arc: worked values and general libraries


@pytest.mark.parametrize(
    ("pose", "motion", "duration", "expected"),
    [
        # Thrun, Burgard & Fox 2005, eq. 5.9 (equation number from memory; values derived), 10 decimals
        ((0, 0, 0), (1, PI / 2), 1, (0.6366197724, 0.6366197724, 1.5707963268)),
        ((1, 2, 0.3), (0.7, -1.3), 2, (1.5606598409, 1.1268240329, -2.3)),
    ],
)
def test_arc_gives_the_worked_values(pose, motion, duration, expected):
    got = arc(pose, motion, duration)
    assert isinstance(got, Pose)
    assert np.allclose(got, expected, rtol=0.0, atol=0.5e-10)


@pytest.mark.parametrize(
    ("pose", "motion", "duration", "expected"),
    [
        # by hand, x forward, y left, counter-clockwise positive (ISO 8855)
        pytest.param((0, 0, 0), (1, 0), 2, (2, 0, 0), id="straight ahead"),
        pytest.param((0, 0, PI / 2), (1, 0), 2, (0, 2, PI / 2), id="a heading of a quarter turn points along +y"),
        pytest.param((1, 1, 0), (0, 1), 1, (1, 1, 1), id="on the spot"),
        pytest.param((0, 0, 0), (1, 1), PI, (0, 2, PI), id="half circle to the left"),
        pytest.param((0, 0, 0), (1, -1), PI, (0, -2, PI), id="half circle to the right"),
        pytest.param((0, 0, 0), (2, 1), PI / 2, (2, 2, PI / 2), id="quarter circle of radius 2"),
        pytest.param((0, 0, 0), (-1, 1), PI / 2, (-1, -1, PI / 2), id="backwards"),
        pytest.param((3, 4, 0), (1, 1), 2 * PI, (3, 4, 0), id="full circle"),
        pytest.param((0, 0, 3), (0, 1), 1, (0, 0, 4 - 2 * PI), id="across the cut"),
        pytest.param((3, 4, 1), (1, 1), 0, (3, 4, 1), id="no time"),
    ],
)
def test_arc_by_hand(pose, motion, duration, expected):
    got = arc(pose, motion, duration)
    assert close(got, expected, 16 * ROUNDING)
    assert -PI < got.heading <= PI


def test_arc_agrees_with_an_integrator():
    # scipy.integrate.solve_ivp (general library), Dormand & Prince order 8, of x' = v cos, y' = v sin, heading' = w
    for pose, (v, w), duration in zip(*drawn_motions(1, 25), strict=True):

        def flow(_, state, v=v, w=w):
            return v * math.cos(state[2]), v * math.sin(state[2]), w

        run = solve_ivp(flow, (0.0, duration), pose, method="DOP853", rtol=1e-13, atol=1e-13)
        assert close(arc(pose, (v, w), duration), run.y[:, -1], 1e-11)


def test_arc_agrees_with_the_matrix_exponential():
    # scipy.linalg.expm (general library) of the twist of the plane
    for (x, y, heading), (v, w), duration in zip(*drawn_motions(2, 100), strict=True):
        c, s = math.cos(heading), math.sin(heading)
        start = np.array([[c, -s, x], [s, c, y], [0, 0, 1]])
        end = start @ expm(np.array([[0, -w, v], [w, 0, 0], [0, 0, 0]]) * duration)
        expected = end[0, 2], end[1, 2], math.atan2(end[1, 0], end[0, 0])
        assert close(arc((x, y, heading), (v, w), duration), expected, 1e-12)


@pytest.mark.skipif(
    not hasattr(transform, "RigidTransform"), reason=f"scipy {scipy.__version__} has no RigidTransform; it came with 1.16"
)
def test_arc_agrees_with_rigid_transforms():
    # scipy.spatial.transform.RigidTransform (general library), exponential coordinates: turn, then path
    rigid = transform.RigidTransform.from_exp_coords
    assert np.allclose(arc((0, 0, 0), (0.7, -1.3), 2)[:2], (0.27757766, -0.99986317), rtol=0.0, atol=5e-9)  # derived, 8 decimals
    for (x, y, heading), (v, w), duration in zip(*drawn_motions(3, 200), strict=True):
        place = transform.RigidTransform.from_components([x, y, 0], transform.Rotation.from_rotvec([0, 0, heading]))
        end = place * rigid([0, 0, w * duration, v * duration, 0, 0])
        expected = (*end.translation[:2], end.rotation.as_rotvec()[2])
        assert close(arc((x, y, heading), (v, w), duration), expected, 1e-12)


# arc: small turn rates


def exact_arc(heading, speed, turn_rate, duration):
    """Return x and y after an arc from the origin, by the formula that divides by the turn rate, to 60 digits."""
    with mpmath.workdps(60):
        th, v, w, t = (mpmath.mpf(value) for value in (heading, speed, turn_rate, duration))
        return v / w * (mpmath.sin(th + w * t) - mpmath.sin(th)), v / w * (mpmath.cos(th) - mpmath.cos(th + w * t))


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("power", range(-15, 1))
def test_arc_has_no_cliff_at_small_turn_rates(power, sign):
    rng = np.random.default_rng(abs(power))
    for turn_rate in sign * 10.0 ** (power + rng.uniform(-0.5, 0.0, 20)):
        got = arc((0.0, 0.0, 0.0), (0.7, turn_rate), 1.3)
        expected = exact_arc(0.0, 0.7, turn_rate, 1.3)
        # path 1, half turn 1, sine 1 + 1 (a unit of its last place), quotient 1, product 1; across: once more sine 2, half
        # turn 1, product 1; cosine 2. Together at most 10 roundings of 1.1e-16. The formula that divides by the turn rate
        # loses every digit of y from 1e-8 on.
        assert abs(got.x / expected[0] - 1) <= 10 * ROUNDING
        assert abs(got.y / expected[1] - 1) <= 10 * ROUNDING
        assert got.heading == 1.3 * turn_rate


@pytest.mark.parametrize("power", range(-15, 1))
def test_arc_keeps_its_digits_at_any_heading(power):
    rng = np.random.default_rng(-power)
    for heading, share in rng.uniform([-PI, 0.3], [PI, 1.0], (20, 2)):
        turn_rate = share * 10.0**power
        got = arc((0.0, 0.0, heading), (0.7, turn_rate), 1.3)
        expected = exact_arc(heading, 0.7, turn_rate, 1.3)
        off = math.hypot(float(got.x - expected[0]), float(got.y - expected[1]))
        # the 10 roundings of above along the path, and half a unit of the last place of a sum of angles below 4 across it
        assert off <= 0.91 * (10 * ROUNDING + math.ulp(3.9) / 2)


@pytest.mark.parametrize("turn_rate", [0.0, -0.0, 1e-300, -1e-300, 1e-20])
def test_arc_without_a_turn_worth_the_name_is_straight(turn_rate):
    assert arc((0.0, 0.0, 0.0), (0.5, turn_rate), 2.0) == (1.0, 0.5 * (turn_rate * 2.0), turn_rate * 2.0)


@pytest.mark.parametrize("turns", [0.25, 1.0, 3.0, 8.0, 50.0])
def test_arc_keeps_its_digits_over_many_turns(turns):
    rng = np.random.default_rng(4)
    for heading, speed in rng.uniform([-PI, -2.0], [PI, 2.0], (20, 2)):
        got = arc((0.0, 0.0, heading), (speed, turns * TURN), 1.0)
        expected = exact_arc(heading, speed, turns * TURN, 1.0)
        off = math.hypot(float(got.x - expected[0]), float(got.y - expected[1]))
        # the half turn is rounded once: relative to the path, its chord is wrong by that much and no more
        assert off <= 12 * ROUNDING * abs(speed)


# arc as the exact reference of two integrators


def quarter_circle(turned, n):
    """Return how far n steps of a published integrator end from `arc`; `turned` 0: Euler, 0.5: midpoint rule."""
    x = y = heading = 0.0
    dt = PI / 2 / n
    for _ in range(n):
        x += dt * math.cos(heading + turned * dt)
        y += dt * math.sin(heading + turned * dt)
        heading += dt
    end = arc((0, 0, 0), (1, 1), PI / 2)
    return math.hypot(x - end.x, y - end.y)


@pytest.mark.parametrize(
    ("n", "euler", "midpoint"),
    # derived: chords of dt instead of arcs, sqrt(2) |dt/(exp(i dt) - 1) + i|; measured once with numpy, digits as shown
    [(10, 0.1111, 1.455e-3), (20, 0.0555, 3.635e-4), (40, 0.0278, 9.087e-5), (80, 0.0139, None)],
)
def test_integrators_end_off_the_arc_by_what_their_order_says(n, euler, midpoint):
    assert abs(quarter_circle(0.0, n) - euler) <= 0.5e-4
    if midpoint:
        assert abs(quarter_circle(0.5, n) - midpoint) <= 0.5 * 10.0 ** (math.floor(math.log10(midpoint)) - 3)
    assert abs(quarter_circle(0.5, n) / (math.sqrt(2.0) * (PI / 2 / n) ** 2 / 24.0) - 1.0) <= 1e-2


def test_euler_is_of_order_one_and_the_midpoint_rule_of_order_two():
    assert abs(math.log2(quarter_circle(0.0, 1000) / quarter_circle(0.0, 2000)) - 1.0) <= 1e-3
    assert abs(math.log2(quarter_circle(0.5, 1000) / quarter_circle(0.5, 2000)) - 2.0) <= 1e-3


# arc: symmetries


@PATIENT
@given(PLACES, PLACES, HEADINGS, SPEEDS, RATES, SPANS, st.floats(0.0, 1.0))
def test_two_arcs_of_the_same_motion_are_one(x, y, heading, v, w, duration, share):
    halfway = arc((x, y, heading), (v, w), share * duration)
    assert close(arc(halfway, (v, w), duration - share * duration), arc((x, y, heading), (v, w), duration), 1e-12)


@PATIENT
@given(PLACES, PLACES, HEADINGS, SPEEDS, RATES, SPANS)
def test_the_arc_of_the_opposite_motion_leads_back(x, y, heading, v, w, duration):
    there = arc((x, y, heading), (v, w), duration)
    assert close(arc(there, (-v, -w), duration), (x, y, heading), 1e-12)


@PATIENT
@given(PLACES, PLACES, HEADINGS, SPEEDS, RATES, SPANS, HEADINGS)
def test_arc_does_not_depend_on_the_frame(x, y, heading, v, w, duration, by):
    def turned(pose):
        place = complex(pose[0], pose[1]) * complex(math.cos(by), math.sin(by))
        return place.real, place.imag, wrap(pose[2] + by)

    expected = turned(arc((x, y, heading), (v, w), duration))
    assert close(arc(turned((x, y, heading)), (v, w), duration), expected, 1e-12)


@PATIENT
@given(PLACES, PLACES, HEADINGS, SPEEDS, RATES, SPANS)
def test_the_mirrored_motion_makes_the_mirrored_arc(x, y, heading, v, w, duration):
    got, expected = arc((x, -y, -heading), (v, -w), duration), arc((x, y, heading), (v, w), duration)
    assert (got.x, got.y) == (expected.x, -expected.y)
    assert abs(difference(got.heading, -expected.heading)) <= 4 * ROUNDING  # half a turn is +pi on either side


@PATIENT
@given(HEADINGS, SPEEDS, RATES, SPANS)
def test_arc_scales_with_the_unit_of_length(heading, v, w, duration):
    got, expected = arc((0, 0, heading), (8 * v, w), duration), arc((0, 0, heading), (v, w), duration)
    assert close(got, (8 * expected.x, 8 * expected.y, expected.heading), TINY)


# arc: shapes


@pytest.mark.parametrize(
    ("poses", "motions", "durations", "shape"),
    [
        ((3,), (2,), (4,), (4,)),
        ((3,), (5, 2), (), (5,)),
        ((6, 3), (2,), (), (6,)),
        ((4, 1, 3), (5, 2), (), (4, 5)),
        ((4, 1, 3), (1, 5, 2), (2, 1, 1), (2, 4, 5)),
        ((1, 3), (2,), (), (1,)),
        ((0, 3), (2,), (), (0,)),
        ((2, 0, 3), (1, 2), (), (2, 0)),
    ],
)
def test_arc_broadcasts(poses, motions, durations, shape):
    rng = np.random.default_rng(5)
    p, m, t = rng.uniform(-3.0, 3.0, poses), rng.uniform(-2.0, 2.0, motions), rng.uniform(0.0, 2.0, durations)
    got = arc(p, m, t)
    assert got.shape == (*shape, 3)
    wide_p, wide_m, wide_t = (np.broadcast_to(p, (*shape, 3)), np.broadcast_to(m, (*shape, 2)), np.broadcast_to(t, shape))
    for index in np.ndindex(shape):
        expected = arc(tuple(wide_p[index]), tuple(wide_m[index]), float(wide_t[index]))
        assert tuple(got[index]) == expected


def test_arc_takes_strided_read_only_and_integer_arrays():
    p, m, t = drawn_motions(6, 12)
    expected = arc(p, m, t)
    for made in (lambda a: np.asfortranarray(a), lambda a: np.repeat(a, 2, axis=0)[::2], lambda a: np.broadcast_to(a, a.shape)):
        assert np.array_equal(arc(made(p), made(m), made(t)), expected)
    assert arc([0, 0, 0], [1, 0], 2) == arc(np.zeros(3, np.int8), np.array([1.0, 0.0], np.float32), np.array(2)) == (2.0, 0.0, 0.0)


# wheels


def test_wheels_give_the_worked_motion():
    # Dudek & Jenkin 2010, chapter 3 (from memory); wheels of radius 0.05 m at 8 and 12 rad/s, 0.3 m apart (values derived)
    got = to_motion((0.05 * 8, 0.05 * 12), 0.3)
    assert isinstance(got, Motion)
    assert abs(got.speed - 0.5) <= 4 * ROUNDING
    assert abs(got.turn_rate - 0.6666667) <= 0.5e-7
    assert abs(got.speed / got.turn_rate - 0.75) <= 8 * ROUNDING  # radius to the centre of the turn, (b/2)(wr + wl)/(wr - wl)
    assert np.allclose(arc((0, 0, 0), got, 1.0), (0.46377735, 0.16058455, 0.66666667), rtol=0.0, atol=0.5e-8)


def test_wheels_by_hand():
    assert to_wheels((0.5, 2.0), 0.5) == (0.0, 1.0)  # about the left wheel
    assert to_wheels((0.0, 2.0), 0.5) == (-0.5, 0.5)  # on the spot, to the left: the right wheel runs forwards
    assert to_motion((1.0, 1.0), 0.5) == (1.0, 0.0)
    assert to_motion((0.0, 1.0), 0.5) == (0.5, 2.0)
    assert to_motion((0.25, -0.25), 0.5) == (0.0, -1.0)
    assert isinstance(to_wheels((1, 0), 1), Wheels)


@PATIENT
@given(SPEEDS, RATES, st.floats(0.05, 2.0))
def test_wheels_and_motion_are_inverse_both_ways(v, w, track_width):
    back = to_motion(to_wheels((v, w), track_width), track_width)
    assert abs(back.speed - v) <= 4 * ROUNDING * (abs(v) + abs(w) * track_width) + TINY
    assert abs(back.turn_rate - w) <= 8 * ROUNDING * (abs(v) / track_width + abs(w)) + TINY
    wheels = to_wheels(to_motion((v, w), track_width), track_width)
    assert np.allclose(wheels, (v, w), rtol=0.0, atol=8 * ROUNDING * 8.0)


@PATIENT
@given(PLACES, PLACES, HEADINGS, SPEEDS, RATES, st.floats(0.05, 2.0))
def test_each_wheel_rolls_at_its_own_speed(x, y, heading, v, w, track_width):
    # each contact point, half a track to its side, moves along its own arc: numerically, path over time
    h = 1e-4
    now, then = arc((x, y, heading), (v, w), -h), arc((x, y, heading), (v, w), h)
    for side, speed in zip((0.5, -0.5), to_wheels((v, w), track_width), strict=True):
        a, b = to_world(now, (0.0, side * track_width)), to_world(then, (0.0, side * track_width))
        along = (b[0] - a[0]) * math.cos(heading) + (b[1] - a[1]) * math.sin(heading)
        # central difference: off by |speed| (w h)^2 / 6, and by the rounding of a place below 60 m
        assert abs(along / (2 * h) - speed) <= 10.0 * (6.0 * h) ** 2 / 6.0 + 8 * math.ulp(60.0) / (2 * h)


# odometry and counters


@PATIENT
@given(PLACES, PLACES, HEADINGS, SPEEDS, SPEEDS, st.floats(0.1, 1.0), st.floats(0.01, 1.0))
def test_odometry_is_the_arc_of_the_wheels(x, y, heading, left, right, track_width, duration):
    expected = arc((x, y, heading), to_motion((left, right), track_width), duration)
    got = odometry((x, y, heading), left * duration, right * duration, track_width)
    assert isinstance(got, Pose)
    assert close(got, expected, 1e-13)


@pytest.mark.parametrize(
    ("left", "right", "expected"),
    [
        # by hand, wheels 0.5 m apart
        (2.0, 2.0, (2.0, 0.0, 0.0)),
        (0.0, PI / 4, (0.25, 0.25, PI / 2)),  # about the left wheel, at (0, 0.25)
        (-PI / 8, PI / 8, (0.0, 0.0, PI / 2)),
        (-PI / 4, -3 * PI / 4, (0.0, 1.0, PI)),  # backwards, clockwise, about (0, 0.5)
    ],
)
def test_odometry_by_hand(left, right, expected):
    assert close(odometry((0.0, 0.0, 0.0), left, right, 0.5), expected, 8 * ROUNDING)


def test_count_step_agrees_with_16_bit_arithmetic():
    # numpy (general library): unsigned 16-bit subtraction, read as signed
    before = np.array([0, 1, 100, 32767, 32768, 32769, 65534, 65535], np.uint16)
    now = np.concatenate([np.arange(0, 65536, 37), [32766, 32767, 32768, 32769, 65534, 65535]]).astype(np.uint16)
    expected = (now[:, None] - before).view(np.int16)
    got = [[count_step(a, b, 65536) for b in before.tolist()] for a in now.tolist()]
    assert np.array_equal(got, expected)


@pytest.mark.parametrize(
    ("now", "before", "counter", "expected"),
    [
        (3, 65534, 65536, 5),
        (65534, 3, 65536, -5),
        (0, 65535, 65536, 1),
        (65535, 0, 65536, -1),
        (7, 7, 65536, 0),
        (32767, 0, 65536, 32767),
        (32768, 0, 65536, -32768),
        (-32768, 32767, 65536, 1),  # a signed counter rolls over in the middle
        (1, 4095, 4096, 2),
        (np.uint8(2), np.uint8(254), 256, 4),
        (0, 2**32 - 1, 2**32, 1),
        (4, 0, 5, -1),
        (2, 0, 5, 2),
    ],
)
def test_count_step_takes_the_roll_over(now, before, counter, expected):
    got = count_step(now, before, counter)
    assert got == expected
    assert type(got) is int


@pytest.mark.parametrize("way", [1, -1])
@pytest.mark.parametrize("start", [0, 12345, 65535])
def test_odometry_from_counts_through_a_full_turn_of_the_counter(way, start):
    # 16 bits, 8192 counts a metre: 9 m are more than the counter holds; the right wheel rolls 8/9 of the left
    metres, track_width = 1.0 / 8192.0, 0.5
    counts = [(start + way * 9 * 128 * k, start + way * 8 * 128 * k) for k in range(65)]
    pose = (0.0, 0.0, 0.0)
    for (left0, right0), (left1, right1) in pairwise(counts):
        steps = (count_step(a % 65536, b % 65536, 65536) for a, b in ((left1, left0), (right1, right0)))
        pose = odometry(pose, *(metres * step for step in steps), track_width)
    # by hand: paths 9 and 8 m, mean 8.5 m, turn -1/0.5 = -2 rad, radius 8.5/2 m
    expected = arc((0, 0, 0), (way * 8.5, way * -2.0), 1.0)
    assert close(pose, expected, 1e-13)
    assert close(pose, (way * 4.25 * math.sin(2.0), -4.25 * (1.0 - math.cos(2.0)), way * -2.0), 1e-13)


# frames and sightings


@pytest.mark.parametrize(
    ("pose", "seen", "place"),
    [
        # by hand: ahead along the heading, left a quarter turn counter-clockwise of it (ISO 8855)
        ((0, 0, 0), (3, 1), (3, 1)),
        ((1, 2, PI / 2), (3, 1), (0, 5)),
        ((1, 2, PI), (3, 1), (-2, 1)),
        ((1, 2, -PI / 2), (3, 1), (2, -1)),
        ((-1, 0, PI / 4), (math.sqrt(2.0), 0), (0, 1)),
        ((2, 1, PI / 6), (2, 2), (1 + math.sqrt(3.0), 2 + math.sqrt(3.0))),
    ],
)
def test_frames_by_hand(pose, seen, place):
    assert np.allclose(to_world(pose, seen), place, rtol=0.0, atol=16 * ROUNDING)
    assert np.allclose(to_robot(pose, place), seen, rtol=0.0, atol=16 * ROUNDING)


@PATIENT
@given(PLACES, PLACES, HEADINGS, PLACES, PLACES)
def test_frames_are_inverse_both_ways(x, y, heading, a, b):
    pose = (x, y, heading)
    assert np.allclose(to_robot(pose, to_world(pose, (a, b))), (a, b), rtol=0.0, atol=8 * math.ulp(200.0))
    assert np.allclose(to_world(pose, to_robot(pose, (a, b))), (a, b), rtol=0.0, atol=8 * math.ulp(200.0))


def test_frames_agree_with_rotations():
    # scipy.spatial.transform.Rotation (general library)
    for (x, y, heading), point, _ in zip(*drawn_motions(7, 200), strict=True):
        turn = transform.Rotation.from_rotvec([0, 0, heading])
        expected = turn.apply([*point, 0.0])[:2] + (x, y)
        assert np.allclose(to_world((x, y, heading), point), expected, rtol=0.0, atol=1e-14)
        expected = turn.inv().apply([*(point - (x, y)), 0.0])[:2]
        assert np.allclose(to_robot((x, y, heading), point), expected, rtol=0.0, atol=1e-14)


@PATIENT
@given(PLACES, PLACES, HEADINGS, SPEEDS, RATES, SPANS)
def test_an_arc_in_the_robots_frame_starts_at_zero(x, y, heading, v, w, duration):
    end, local = arc((x, y, heading), (v, w), duration), arc((0, 0, 0), (v, w), duration)
    assert np.allclose(to_robot((x, y, heading), end[:2]), local[:2], rtol=0.0, atol=8 * math.ulp(200.0))


@pytest.mark.parametrize(
    ("bearing", "distance", "expected"),
    [
        # by hand
        (0.0, 2.0, (2.0, 0.0)),
        (PI / 2, 2.0, (0.0, 2.0)),  # left is positive
        (-PI / 2, 2.0, (0.0, -2.0)),
        (PI / 6, 2.0, (math.sqrt(3.0), 1.0)),
        (PI, 1.5, (-1.5, 0.0)),
        (1.0, 0.0, (0.0, 0.0)),
    ],
)
def test_sighting_by_hand(bearing, distance, expected):
    assert np.allclose(sighting(bearing, distance), expected, rtol=0.0, atol=4 * ROUNDING)


@PATIENT
@given(PLACES, PLACES, HEADINGS, HEADINGS, st.floats(0.01, 20.0))
def test_a_sighting_lies_at_its_bearing_from_the_heading(x, y, heading, bearing, distance):
    place = to_world((x, y, heading), sighting(bearing, distance))
    expected = complex(x, y) + distance * complex(math.cos(heading + bearing), math.sin(heading + bearing))
    assert abs(complex(*place) - expected) <= 8 * math.ulp(100.0)


# bad calls

WIDTH = "give the distance between the wheel contact points"
POSE, MOTION = "give x, y, heading along the last axis", "give speed, turn rate along the last axis"


@pytest.mark.parametrize(
    ("call", "text"),
    [
        pytest.param(lambda: arc((0, 0), (1, 0), 1), f"pose of shape (2,) does not fit; {POSE}", id="two numbers of a pose"),
        pytest.param(lambda: arc(1.0, (1, 0), 1), f"pose of shape () does not fit; {POSE}", id="a float for a pose"),
        pytest.param(lambda: arc(np.zeros((3, 4)), (1, 0), 1), f"pose of shape (3, 4) does not fit; {POSE}", id="poses in columns"),
        pytest.param(
            lambda: arc((0, 0, 0), (1, 0, 0), 1), f"motion of shape (3,) does not fit; {MOTION}", id="three numbers of a motion"
        ),
        pytest.param(lambda: arc((0, 0, 0), 1.0, 1), f"motion of shape () does not fit; {MOTION}", id="a float for a motion"),
        pytest.param(
            lambda: arc(np.zeros((4, 3)), np.zeros((5, 2)), 1),
            "pose, motion, duration of shapes ((4,), (5,), ()) do not fit; give as many of each, or one for all",
            id="4 poses, 5 motions",
        ),
        pytest.param(lambda: to_wheels((1, 0), 0), f"track_width=0 m must be > 0; {WIDTH}", id="to_wheels, no width"),
        pytest.param(lambda: to_motion((1, 0), -0.4), f"track_width=-0.4 m must be > 0; {WIDTH}", id="to_motion, negative width"),
        pytest.param(
            lambda: odometry((0, 0, 0), 1, 1, math.nan), f"track_width=nan m must be finite; {WIDTH}", id="odometry, NaN width"
        ),
        pytest.param(
            lambda: count_step(1, 0, 0),
            "counter=0 counts must be > 0; give the number of values of the counter, 65536 for 16 bits",
            id="count_step, no counter",
        ),
    ],
)
def test_bad_calls_are_refused_in_words(call, text):
    with pytest.raises(ValueError, match="^" + re.escape(text) + "$"):
        call()


# kernels against the same function in plain Python


@NEEDS_COMPILER
@PATIENT
@given(PLACES, PLACES, HEADINGS, SPEEDS, RATES, SPANS)
def test_arc_kernel_gives_the_bits_of_plain_python(x, y, heading, v, w, duration):
    got = arc_kernel(x, y, heading, v, w, duration)
    assert got == arc_kernel.py_func(x, y, heading, v, w, duration)
    assert got == arc((x, y, heading), (v, w), duration)
    assert got == tuple(arc([(x, y, heading)], [(v, w)], duration)[0])
