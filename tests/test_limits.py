"""Limits against braking tables, closed forms, exact sums, and what a period allows, worked out again from the rates."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from robots import draw as drawn_robot
from steerkit import Causes, Motion, Platform, compiled
from steerkit.kinematics import arc
from steerkit.limits import (
    held_speed_kernel,
    held_speed_to_stop_within,
    held_stop_kernel,
    held_stopping_distance,
    limit,
    limit_kernel,
    speed_to_stop_within,
    stopping_distance,
)

MPH, KMH, FOOT = 1609.344 / 3600.0, 1.0 / 3.6, 0.3048
NEAR = 1e-12  # rounding of a few operations on numbers of the order of 1
SLACK = 1e-9  # m/s, rad/s, or of a wheel's limit: less does not count as bound
PATIENT = settings(deadline=None)  # the first call of a kernel compiles it
NEEDS_COMPILER = pytest.mark.skipif(not compiled.ON, reason="without the compiler the kernels are plain Python already")


# braking tables

# AASHTO, A Policy on Geometric Design of Highways and Streets, 2011, table 3-1, metric (from memory): reaction 2.5 s (published),
# deceleration 3.4 m/s^2 (published); km/h, computed m (1 decimal), design m (rounded up to 5)
AASHTO_METRIC = [
    *[(20, 18.5, 20), (30, 31.2, 35), (40, 46.2, 50), (50, 63.5, 65), (60, 83.0, 85), (70, 104.9, 105), (80, 129.0, 130)],
    *[(90, 155.5, 160), (100, 184.2, 185), (110, 215.3, 220), (120, 248.6, 250), (130, 284.2, 285)],
]


@pytest.mark.parametrize(("kmh", "computed", "design"), AASHTO_METRIC)
def test_stopping_distance_gives_the_aashto_metric_table_with_its_rounded_coefficients(kmh, computed, design):
    # d = 0.278 V t + 0.039 V^2/a: 0.278 for 1/3.6, 0.039 for 1/25.92
    got = stopping_distance(kmh * KMH, braking=3.4 / (25.92 * 0.039), reaction=2.5 * 0.278 * 3.6)
    assert abs(got - computed) <= 0.1 + NEAR  # printed as the sum of two columns of one decimal: at 50 km/h 34.8 + 28.7
    assert 5 * math.ceil(got / 5) == design


@pytest.mark.parametrize(("kmh", "computed", "design"), AASHTO_METRIC)
def test_stopping_distance_is_within_the_rounding_of_the_aashto_coefficients(kmh, computed, design):
    got = stopping_distance(kmh * KMH, braking=3.4, reaction=2.5)
    # both coefficients of the table are rounded up, the second by 1.08 %
    assert (computed - 0.1) / (25.92 * 0.039) <= got <= computed + 0.1
    # so that two rows, 90 and 110 km/h, would be designed 5 m shorter
    assert 5 * math.ceil(got / 5) == design - (5 if kmh in (90, 110) else 0)


# the same in US units, reaction 2.5 s, 11.2 ft/s^2: d = 1.47 V t + 1.075 V^2/a (published), rounded up to 5 ft.
# Highway Engineering Handbook, table 2.2, rows 20 to 39 and 46 to 65 mph (published)
HANDBOOK_FEET = [
    *[115, 120, 130, 140, 145, 155, 165, 170, 180, 190, 200, 210, 220, 230, 240, 250, 260, 270, 280, 290],
    *[375, 385, 400, 415, 425, 440, 455, 465, 480, 495, 510, 525, 540, 555, 570, 585, 600, 615, 630, 645],
]


@pytest.mark.parametrize(("mph", "feet"), list(zip([*range(20, 40), *range(46, 66)], HANDBOOK_FEET, strict=True)))
def test_stopping_distance_gives_the_us_customary_table(mph, feet):
    exact = stopping_distance(mph * MPH, braking=11.2 * FOOT, reaction=2.5) / FOOT
    fps = 5280.0 / 3600.0
    rounded = stopping_distance(mph * fps, braking=11.2 * fps * fps / (2 * 1.075), reaction=2.5 * 1.47 / fps)
    assert 5 * math.ceil(exact / 5) == feet
    assert 5 * math.ceil(rounded / 5) == feet


@pytest.mark.parametrize(
    ("mph", "thinking", "braking", "total"),
    # UK Highway Code, rule 126 (published), metres
    [(20, 6, 6, 12), (30, 9, 14, 23), (40, 12, 24, 36), (50, 15, 38, 53), (60, 18, 55, 73), (70, 21, 75, 96)],
)
def test_stopping_distance_gives_the_highway_code(mph, thinking, braking, total):
    # its rule in feet (published): thinking V, total V (2, 2.5, 3 ...), so braking V^2/20; as time and deceleration (derived):
    reaction, deceleration = FOOT / MPH, 10.0 * MPH**2 / FOOT
    assert abs(reaction - 0.68182) <= 5e-6
    assert abs(deceleration - 6.5566) <= 5e-5
    got, got_braking = stopping_distance(mph * MPH, deceleration, reaction), stopping_distance(mph * MPH, deceleration)
    assert abs(got - got_braking - thinking) <= 0.5
    assert abs(got_braking - braking) <= 0.5
    # the printed total is the sum of two rounded numbers; at 40 mph 36 for 36.58
    assert abs(got - total) <= (0.6 if mph == 40 else 0.5)


# stopping distance and its inverse


def test_stopping_distance_by_hand():
    assert stopping_distance(2.0, braking=1.0) == 2.0  # 2 s at 1 m/s on average
    assert stopping_distance(2.0, braking=1.0, reaction=0.5) == 3.0
    assert stopping_distance(0.0, braking=1.0, reaction=0.5) == 0.0
    assert speed_to_stop_within(2.0, braking=1.0) == 2.0
    assert speed_to_stop_within(3.0, braking=1.0, reaction=0.5) == 2.0


def test_speed_to_stop_within_gives_the_worked_value():
    # 100 km/h at 2.5 s and 3.4 m/s^2 (derived): 182.9158 m, 4 decimals; d d/d v = t + v/a = 10.7 s
    assert abs(speed_to_stop_within(182.9158, braking=3.4, reaction=2.5) - 100 * KMH) <= 0.5e-4 / 10.0
    assert abs(stopping_distance(100 * KMH, braking=3.4, reaction=2.5) - 182.9158) <= 0.5e-4


@PATIENT
@given(st.floats(1e-6, 100.0), st.floats(0.01, 20.0), st.floats(0.0, 5.0))
def test_speed_to_stop_within_is_the_exact_inverse(speed, braking, reaction):
    assert math.isclose(speed_to_stop_within(stopping_distance(speed, braking, reaction), braking, reaction), speed, rel_tol=NEAR)
    assert math.isclose(stopping_distance(speed_to_stop_within(speed, braking, reaction), braking, reaction), speed, rel_tol=NEAR)


@PATIENT
@given(st.floats(1e-3, 100.0), st.floats(0.01, 20.0), st.floats(1e-3, 5.0))
def test_speed_to_stop_within_agrees_with_the_published_form(distance, braking, reaction):
    # v = -a T + sqrt(a^2 T^2 + 2 a d) (derived); it cancels: one rounding of a T counts
    a, t, d = braking, reaction, distance
    expected = -a * t + math.sqrt(a * a * t * t + 2.0 * a * d)
    assert abs(speed_to_stop_within(d, a, t) - expected) <= 4 * math.ulp(a * t) + 4 * math.ulp(expected)


def test_no_distance_allows_no_speed():
    for distance in (0.0, -0.0, -1.0):
        assert speed_to_stop_within(distance, braking=1.0, reaction=0.2) == 0.0
        assert held_speed_to_stop_within(distance, braking=1.0, period=0.2) == 0.0


# the held stop: a command for a period, then steps down


def summed_stop(speed, braking, period):
    """Return the path of the steps down, added up in exact fractions."""
    v, b, t = Fraction(speed), Fraction(braking), Fraction(period)
    path = Fraction(0)
    while v > 0:
        path += v * t
        v -= b * t
    return path


def test_held_stopping_distance_gives_the_worked_value():
    # v^2/(2a) + v T/2 where v is a whole number of steps (derived; measured 0.55 by running the staircase)
    assert abs(held_stopping_distance(1.0, braking=1.0, period=0.1) - 0.55) <= NEAR
    assert abs(held_stopping_distance(0.25, braking=1.0, period=0.1) - (0.25 + 0.15 + 0.05) * 0.1) <= NEAR
    assert held_stopping_distance(0.0, braking=1.0, period=0.1) == 0.0


@PATIENT
@given(st.floats(0.0, 2.0), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_stopping_distance_is_the_exact_sum(speed, braking, period):
    got, expected = held_stopping_distance(speed, braking, period), float(summed_stop(speed, braking, period))
    assert abs(got - expected) <= NEAR * expected + 1e-300


@PATIENT
@given(st.floats(1e-3, 2.0), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_stopping_distance_exceeds_steady_braking_by_half_a_period_to_an_eighth_of_a_step(speed, braking, period):
    # with v = (n + f) b T the sum is v^2/(2b) + v T/2 + b T^2 f (1 - f)/2 (derived), f (1 - f) <= 1/4
    over = held_stopping_distance(speed, braking, period) - stopping_distance(speed, braking) - speed * period / 2.0
    assert -NEAR <= over <= braking * period**2 / 8.0 + NEAR


@PATIENT
@given(st.floats(1e-6, 20.0), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_speed_to_stop_within_is_the_exact_inverse(number, braking, period):
    there = held_speed_to_stop_within(number, braking, period)
    assert math.isclose(held_stopping_distance(there, braking, period), number, rel_tol=NEAR)
    back = held_stopping_distance(number, braking, period)
    assert math.isclose(held_speed_to_stop_within(back, braking, period), number, rel_tol=NEAR)


@PATIENT
@given(st.integers(1, 400), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_speed_at_a_whole_number_of_steps_joins_both_branches(n, braking, period):
    step = braking * period
    for off in (-1e-3, -1e-13, 0.0, 1e-13, 1e-3):
        distance = step * period * n * (n + 1) / 2.0 * (1.0 + off)
        got = held_speed_to_stop_within(distance, braking, period)
        assert math.isclose(held_stopping_distance(got, braking, period), distance, rel_tol=NEAR)
        assert math.isclose(got, n * step, rel_tol=NEAR + abs(off))


@PATIENT
@given(st.floats(1e-6, 20.0), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_speed_is_the_largest_that_stops_within(distance, braking, period):
    speed = held_speed_to_stop_within(distance, braking, period)
    assert summed_stop(speed * (1.0 - 1e-9), braking, period) < Fraction(distance)
    assert summed_stop(speed * (1.0 + 1e-9), braking, period) > Fraction(distance)


# platforms and motions for `limit`

CART = Platform(
    radius=0.3,
    track_width=0.4,
    wheel_speed_limit=1.0,
    speed_limit=0.8,
    turn_rate_limit=2.0,
    acceleration=1.0,
    braking=2.0,
    turn_acceleration=10.0,
    period=0.1,
    dead_time=0.0,
    reverse_speed_limit=0.3,
)  # in a period: 0.1 m/s faster, 0.2 m/s slower, 1 rad/s

SHARES = st.one_of(st.floats(-3.0, 3.0), st.sampled_from([-1.0, 0.0, 1.0]))
INSIDE = st.one_of(st.floats(-1.0, 1.0), st.sampled_from([-1.0, 0.0, 1.0]))


@st.composite
def platforms(draw, ample=False):
    """Draw a robot of tests/robots.py, with or without a reverse gear; `ample`: any motion within a period."""
    platform = drawn_robot(np.random.default_rng(draw(st.integers(0, 2**32 - 1)))).platform
    platform = replace(platform, reverse_speed_limit=platform.speed_limit * draw(st.sampled_from([0.0, 0.4, 1.0])))
    slow_wheels = draw(st.sampled_from([1.0, 1.0, 0.6]))
    platform = replace(platform, wheel_speed_limit=platform.wheel_speed_limit * slow_wheels)
    return replace(platform, acceleration=100.0, braking=100.0, turn_acceleration=1000.0, period=0.2) if ample else platform


def wheel_speed(p, motion):
    """Return the speed of the faster wheel (m/s)."""
    return abs(motion[0]) + abs(motion[1]) * p.track_width / 2.0


def motion_of(p, shares):
    v, w = shares
    return v * p.speed_limit, w * p.turn_rate_limit


def inside_of(p, shares):
    """Return a motion that keeps the static limits."""
    v, w = shares
    motion = v * (p.speed_limit if v > 0.0 else p.reverse_speed_limit), w * p.turn_rate_limit
    shrunk = min(1.0, p.wheel_speed_limit / max(wheel_speed(p, motion), 1e-300))
    return shrunk * motion[0], shrunk * motion[1]


def share_within(p, wanted):
    """Return the largest share of a motion that keeps the static limits."""
    v, w = wanted
    top = p.speed_limit if v > 0.0 else p.reverse_speed_limit
    shares = [1.0]
    shares += [top / abs(v)] if v else []
    shares += [p.turn_rate_limit / abs(w)] if w else []
    shares += [p.wheel_speed_limit / wheel_speed(p, wanted)] if wheel_speed(p, wanted) else []
    return min(shares)


def keeps_static_limits(p, motion):
    v, w = motion
    return (
        -p.reverse_speed_limit - NEAR <= v <= p.speed_limit + NEAR
        and abs(w) <= p.turn_rate_limit + NEAR
        and wheel_speed(p, motion) <= p.wheel_speed_limit * (1.0 + SLACK) + NEAR
    )


def time_between(p, before, after):
    """Return how long the drive takes from one speed to another: braking down to zero, accelerating from there."""
    if before * after >= 0.0:
        more = np.abs(after) - np.abs(before)
        return np.where(more > 0.0, more / p.acceleration, -more / p.braking)
    return np.abs(before) / p.braking + np.abs(after) / p.acceleration


# limit: by hand, from |v| + 0.2 |w| <= 1 and what CART can do in a period


@pytest.mark.parametrize(
    ("before", "wanted", "expected", "causes"),
    [
        pytest.param((0, 0), (0.05, 0.5), (0.05, 0.5), Causes.NONE, id="within all limits"),
        pytest.param((0.8, 1), (0.8, 1), (0.8, 1), Causes.NONE, id="at the limits of speed and wheels"),
        pytest.param((0.8, 0), (0.8 + 5e-10, 0), (0.8, 0), Causes.NONE, id="too fast by too little to count"),
        pytest.param((0.8, 0), (0.8 + 5e-9, 0), (0.8, 0), Causes.SPEED_LIMIT, id="too fast by just enough to count"),
        pytest.param((-0.3, 0), (-0.3 - 5e-10, 0), (-0.3, 0), Causes.NONE, id="too fast backwards by too little to count"),
        pytest.param((0, 0), (0.5, 0), (0.1, 0), Causes.ACCELERATION_LIMIT, id="a start"),
        pytest.param((0, 0), (-0.25, 0), (-0.1, 0), Causes.ACCELERATION_LIMIT, id="a start backwards"),
        pytest.param((0.5, 0), (0.1, 0), (0.3, 0), Causes.BRAKING_LIMIT, id="braking"),
        pytest.param((-0.3, 0), (0, 0), (-0.1, 0), Causes.BRAKING_LIMIT, id="braking from backwards"),
        pytest.param((0.1, 0), (0, 0), (0, 0), Causes.NONE, id="the last of a stop"),
        pytest.param((-0.3, 0), (0.05, 0), (-0.1, 0), Causes.BRAKING_LIMIT, id="a slow reversal"),
        pytest.param((0, 0), (0, 1.5), (0, 1), Causes.TURN_ACCELERATION_LIMIT, id="a turn"),
        pytest.param((0, 0.5), (0, -1.5), (0, -0.5), Causes.TURN_ACCELERATION_LIMIT, id="the other turn"),
        pytest.param((0.75, 0), (1.2, 0), (0.8, 0), Causes.SPEED_LIMIT, id="too fast"),
        pytest.param((-0.25, 0), (-0.6, 0), (-0.3, 0), Causes.SPEED_LIMIT, id="too fast backwards"),
        pytest.param((0, 2), (0, 3), (0, 2), Causes.TURN_RATE_LIMIT, id="turns too fast"),
        pytest.param((0.75, 1.2), (0.8, 1.5), (0.8 / 1.1, 1.5 / 1.1), Causes.WHEEL_SPEED_LIMIT, id="0.8 + 0.2 * 1.5 = 1.1 m/s"),
        pytest.param((0.8, 0.5), (1.6, 1), (0.8, 0.5), Causes.SPEED_LIMIT, id="too fast on a curve"),
        pytest.param((0.2, 1.5), (0.4, 4), (0.2, 2), Causes.TURN_RATE_LIMIT, id="turns too fast on a curve"),
        pytest.param((0.7, 0), (3.2, 0.4), (0.8, 0.1), Causes.SPEED_LIMIT, id="a quarter of the wish"),
        pytest.param((0.8, 1), (0, 0), (0.6, 0.75), Causes.BRAKING_LIMIT, id="stop along the curve"),
        pytest.param((0.2, 2), (0, 0), (0, 1), Causes.TURN_ACCELERATION_LIMIT, id="the last of a stop, the turn cannot follow"),
        pytest.param(
            (0, 0), (0.2, 4), (0.1, 1), Causes.TURN_RATE_LIMIT | Causes.TURN_ACCELERATION_LIMIT, id="half the wish, then the turn"
        ),
        pytest.param(
            (0, 0), (0.15, 2), (0.1, 1), Causes.ACCELERATION_LIMIT | Causes.TURN_ACCELERATION_LIMIT, id="a start on a curve"
        ),
        pytest.param((0.8, 0), (0.2, 0.4), (0.6, 0.4), Causes.BRAKING_LIMIT, id="still too fast, the turn not beyond the wish"),
        # limits broken already
        pytest.param((1.2, 0), (0.8, 0), (1, 0), Causes.BRAKING_LIMIT, id="was too fast"),
        pytest.param((-0.9, 0), (0.1, 0), (-0.7, 0), Causes.BRAKING_LIMIT, id="was too fast backwards"),
        pytest.param((0, 4), (0, 2), (0, 3), Causes.TURN_ACCELERATION_LIMIT, id="turned too fast"),
        pytest.param((1, 2), (0.8, 0.5), (0.8, 1), Causes.TURN_ACCELERATION_LIMIT, id="wheel too fast, just not any more"),
    ],
)
def test_limit_by_hand(before, wanted, expected, causes):
    got, got_causes = limit(CART, before, wanted)
    assert isinstance(got, Motion)
    assert np.allclose(got, expected, rtol=0.0, atol=NEAR)
    assert got_causes == causes
    assert isinstance(got_causes, Causes)


def test_limit_shrinks_the_turn_where_the_wheels_cannot_brake_and_turn():
    # by hand: 0.2 m/s cannot be reached, 0.6 can; at 0.6 the wheels, 0.9 m/s, leave (0.9 - 0.6)/0.2 = 1.5 rad/s of 2
    cart = replace(CART, wheel_speed_limit=0.9, turn_acceleration=20.0)
    got, causes = limit(cart, (0.8, 0.5), (0.2, 2.0))
    assert np.allclose(got, (0.6, 1.5), rtol=0.0, atol=NEAR)
    assert causes == Causes.BRAKING_LIMIT | Causes.WHEEL_SPEED_LIMIT


def test_limit_shrinks_the_speed_where_the_wheels_cannot_turn_back_in_time():
    # by hand: the turn rate comes down to 0.9 rad/s only; there the wheels, 0.9 m/s, leave 0.9 - 0.2 * 0.9 = 0.72 m/s of 0.8
    cart = replace(CART, wheel_speed_limit=0.9, turn_acceleration=1.0)
    got, causes = limit(cart, (0.7, 1.0), (0.8, 0.0))
    assert np.allclose(got, (0.72, 0.9), rtol=0.0, atol=NEAR)
    assert causes == Causes.TURN_ACCELERATION_LIMIT | Causes.WHEEL_SPEED_LIMIT


def test_limit_names_braking_where_the_wheels_ask_for_a_slower_speed_than_a_period_reaches():
    # by hand: 0.8 + 0.2 * 2 = 1.2 m/s, so 5/6 of the wish, 0.667 m/s; 0.75 can be reached; there the wheels leave 1.25 rad/s
    cart = replace(CART, braking=0.5)
    got, causes = limit(cart, (0.8, 1.0), (0.8, 2.0))
    assert np.allclose(got, (0.75, 1.25), rtol=0.0, atol=NEAR)
    assert causes == Causes.BRAKING_LIMIT | Causes.WHEEL_SPEED_LIMIT


def test_limit_keeps_the_curve_while_it_brakes_to_a_lowered_limit():
    # by hand: half of the wish keeps 0.4 m/s; 0.6 can be reached, and 0.6/0.8 of the turn goes with it
    cart = replace(CART, speed_limit=0.4)
    got, causes = limit(cart, (0.8, 0.4), (0.8, 0.4))
    assert np.allclose(got, (0.6, 0.3), rtol=0.0, atol=NEAR)
    assert causes == Causes.SPEED_LIMIT | Causes.BRAKING_LIMIT


def test_a_stop_on_a_curve_that_turns_too_fast_comes_back_to_the_turn_rate_limit():
    # by hand: along the curve 3 * 0.6/0.8 = 2.25 rad/s would follow; 2 is the limit and within reach
    got, causes = limit(replace(CART, wheel_speed_limit=3.0), (0.8, 3.0), (0.0, 0.0))
    assert np.allclose(got, (0.6, 2.0), rtol=0.0, atol=NEAR)
    assert causes == Causes.BRAKING_LIMIT


def test_a_period_that_crosses_zero_brakes_first_and_accelerates_with_what_is_left():
    # by hand: 0.1 m/s is braked in half a period; the other half gains 0.05 m/s the other way
    assert np.allclose(limit(CART, (0.1, 0), (-0.3, 0))[0], (-0.05, 0), rtol=0.0, atol=NEAR)
    assert np.allclose(limit(CART, (-0.1, 0), (0.8, 0))[0], (0.05, 0), rtol=0.0, atol=NEAR)


@pytest.mark.parametrize("wanted", [0.3, 0.35, 0.8])
def test_a_reversal_too_long_for_a_period_is_put_down_to_braking(wanted):
    # by hand: at the end of the period the robot still rolls back, at 0.5 - 0.2 m/s
    cart = replace(CART, reverse_speed_limit=0.5)
    assert limit(cart, (-0.5, 0), (wanted, 0)) == (Motion(-0.3, 0.0), Causes.BRAKING_LIMIT)


# limit: promises


@PATIENT
@given(platforms(), INSIDE, INSIDE, SHARES, SHARES)
def test_limit_keeps_the_static_limits_where_the_motion_before_did(p, v0, w0, v, w):
    got, _ = limit(p, inside_of(p, (v0, w0)), motion_of(p, (v, w)))
    assert keeps_static_limits(p, got)


@PATIENT
@given(platforms(), SHARES, SHARES, SHARES, SHARES)
def test_limit_changes_each_component_by_a_periods_worth_at_most(p, v0, w0, v, w):
    before = motion_of(p, (v0, w0))
    got, _ = limit(p, before, motion_of(p, (v, w)))
    assert time_between(p, before[0], got.speed) <= p.period * (1.0 + 1e-9)
    assert abs(got.turn_rate - before[1]) <= p.turn_acceleration * p.period + NEAR


@PATIENT
@given(platforms(), SHARES, SHARES, SHARES, SHARES)
def test_limit_approaches_a_broken_limit_at_full_rate(p, v0, w0, v, w):
    before = motion_of(p, (v0, w0))
    got, _ = limit(p, before, motion_of(p, (v, w)))
    least_v = max(0.0, abs(before[0]) - p.braking * p.period)
    least_w = max(0.0, abs(before[1]) - p.turn_acceleration * p.period)
    top = p.speed_limit if before[0] > 0.0 else p.reverse_speed_limit
    if abs(before[0]) > top and got.speed * before[0] > 0.0:
        assert abs(got.speed) <= max(top, least_v) + NEAR
    assert abs(got.turn_rate) <= max(p.turn_rate_limit, least_w) + NEAR
    assert wheel_speed(p, got) <= max(p.wheel_speed_limit * (1.0 + SLACK), least_v + least_w * p.track_width / 2.0) + NEAR


@PATIENT
@given(platforms(ample=True), INSIDE, INSIDE, SHARES, SHARES)
def test_limit_keeps_the_curve_where_only_static_limits_bind(p, v0, w0, v, w):
    wanted = motion_of(p, (v, w))
    if p.reverse_speed_limit == 0.0 and wanted[0] < 0.0:
        wanted = (0.0, wanted[1])  # forward only: what is left of a curve backwards is the turn
    got, _ = limit(p, inside_of(p, (v0, w0)), wanted)
    # nearest to the wish on its curve: by the ratios, and by trying shares of it
    assert np.allclose(got, np.multiply(share_within(p, wanted), wanted), rtol=2 * SLACK, atol=NEAR)
    tried = [s for s in np.linspace(0.0, 1.0, 401).tolist() if keeps_static_limits(p, np.multiply(s, wanted))]
    nearest = min(math.dist(np.multiply(s, wanted), wanted) for s in tried)
    assert nearest - math.hypot(*wanted) / 400.0 - NEAR <= math.dist(got, wanted) <= nearest * (1.0 + SLACK) + NEAR


def test_limit_keeps_a_turn_on_the_spot_whose_speed_is_rounding():
    # 1 cos(pi/2 + 1e-16) is -6e-17: nearest to it is the turn on the spot
    got, _ = limit(replace(CART, reverse_speed_limit=0.0), (0.0, 0.0), (-6e-17, 0.5))
    assert np.allclose(got, (0.0, 0.5), rtol=0.0, atol=NEAR)


@PATIENT
@given(platforms(), INSIDE, INSIDE)
def test_limit_brakes_along_the_curve(p, v0, w0):
    before = inside_of(p, (v0, w0))
    got, _ = limit(p, before, (0.0, 0.0))
    left = max(0.0, abs(before[0]) - p.braking * p.period)
    assert math.isclose(got.speed, math.copysign(left, before[0]), abs_tol=NEAR)
    share = left / abs(before[0]) if before[0] else 0.0
    if abs(before[1]) * (1.0 - share) <= p.turn_acceleration * p.period:
        assert abs(got.turn_rate - share * before[1]) <= NEAR
    else:
        expected = abs(before[1]) - p.turn_acceleration * p.period
        assert math.isclose(got.turn_rate, math.copysign(expected, before[1]), abs_tol=NEAR)


@PATIENT
@given(platforms(), st.floats(0.01, 1.0), st.floats(-0.8, 0.8))
def test_a_stop_along_the_curve_stays_on_its_circle_and_takes_the_held_stopping_distance(p, v0, w0):
    p = replace(p, turn_acceleration=1000.0)  # ample: 5 rad/s within the shortest period, 0.8 of 6 rad/s asked at most
    before = inside_of(p, (v0, w0))
    curvature = before[1] / before[0]
    motion, pose, path = Motion(*before), (0.0, 0.0, 0.0), 0.0
    for _ in range(math.ceil(before[0] / (p.braking * p.period)) + 1):
        pose, path = arc(pose, motion, p.period), path + motion.speed * p.period
        motion, _ = limit(p, motion, (0.0, 0.0))
    assert motion == (0.0, 0.0)
    assert math.isclose(path, held_stopping_distance(before[0], p.braking, p.period), rel_tol=1e-9)
    # one arc of the same length and curvature ends there too
    assert np.allclose(arc((0, 0, 0), (path, path * curvature), 1.0)[:2], pose[:2], rtol=0.0, atol=1e-9)


@PATIENT
@given(platforms(), SHARES, SHARES, SHARES, SHARES)
def test_limit_of_the_mirrored_wish_is_mirrored(p, v0, w0, v, w):
    before, wanted = motion_of(p, (v0, w0)), motion_of(p, (v, w))
    got, causes = limit(p, (before[0], -before[1]), (wanted[0], -wanted[1]))
    expected, expected_causes = limit(p, before, wanted)
    assert got == (expected.speed, -expected.turn_rate)
    assert causes == expected_causes


@PATIENT
@given(platforms(), SHARES, SHARES, SHARES, SHARES)
def test_limit_treats_backwards_as_forwards_where_the_limits_are_the_same(p, v0, w0, v, w):
    p = replace(p, reverse_speed_limit=p.speed_limit)
    before, wanted = motion_of(p, (v0, w0)), motion_of(p, (v, w))
    got, causes = limit(p, (-before[0], before[1]), (-wanted[0], wanted[1]))
    expected, expected_causes = limit(p, before, wanted)
    assert got == (-expected.speed, expected.turn_rate)
    assert causes == expected_causes


@PATIENT
@given(platforms(), INSIDE, INSIDE, INSIDE, INSIDE)
def test_a_motion_within_all_limits_is_left_alone(p, v0, w0, v, w):
    before = inside_of(p, (v0, w0))
    least, most = (limit(p, before, (wish, 0.0))[0].speed for wish in (-100.0, 100.0))
    room = p.turn_acceleration * p.period
    wanted = least + (v + 1.0) / 2.0 * (most - least), before[1] + w * room
    assume(wanted != (0.0, 0.0) and share_within(p, wanted) == 1.0)
    got, causes = limit(p, before, wanted)
    assert np.allclose(got, wanted, rtol=0.0, atol=NEAR)
    assert causes == Causes.NONE


# limit: causes


@PATIENT
@given(platforms(), INSIDE, INSIDE, SHARES, SHARES)
def test_nothing_is_changed_without_a_cause(p, v0, w0, v, w):
    wanted = motion_of(p, (v, w))
    got, causes = limit(p, inside_of(p, (v0, w0)), wanted)
    assert causes != Causes.NONE or np.allclose(got, wanted, rtol=0.0, atol=2 * SLACK)
    assert causes & ~Causes(63) == Causes.NONE  # only limits


@PATIENT
@given(platforms(ample=True), INSIDE, INSIDE, SHARES, SHARES)
def test_static_causes_name_the_limits_that_are_broken(p, v0, w0, v, w):
    wanted = motion_of(p, (v, w))
    _, causes = limit(p, inside_of(p, (v0, w0)), wanted)
    top = p.speed_limit if wanted[0] > 0.0 else p.reverse_speed_limit
    ratios = {
        Causes.SPEED_LIMIT: abs(wanted[0]) / top if top else (math.inf if abs(wanted[0]) > SLACK else 0.0),
        Causes.TURN_RATE_LIMIT: abs(wanted[1]) / p.turn_rate_limit,
        Causes.WHEEL_SPEED_LIMIT: wheel_speed(p, wanted) / p.wheel_speed_limit,
    }
    worst = max(ratios.values())
    for cause, ratio in ratios.items():
        if ratio <= 1.0 - NEAR:
            assert cause not in causes
        if ratio == worst > 1.0 + 2 * SLACK and sorted(ratios.values())[-2] < worst * (1.0 - 2 * SLACK):
            assert cause in causes  # the one that binds in the end
    assert causes & ~Causes(7) == Causes.NONE


@PATIENT
@given(platforms(), st.booleans(), st.floats(0.0, 1.0), st.floats(0.0, 1.0))
def test_rate_causes_name_the_rate_that_is_too_low(p, backwards, v0, v):
    p = replace(p, reverse_speed_limit=p.speed_limit, wheel_speed_limit=10.0)
    sign = -1.0 if backwards else 1.0
    _, causes = limit(p, (sign * v0 * p.speed_limit, 0.0), (sign * v * p.speed_limit, 0.0))
    more = (v - v0) * p.speed_limit
    if abs(more - p.acceleration * p.period) > 2 * SLACK and abs(more + p.braking * p.period) > 2 * SLACK:
        assert (Causes.ACCELERATION_LIMIT in causes) == (more > p.acceleration * p.period)
        assert (Causes.BRAKING_LIMIT in causes) == (more < -p.braking * p.period)
        assert causes & ~(Causes.ACCELERATION_LIMIT | Causes.BRAKING_LIMIT) == Causes.NONE


@PATIENT
@given(platforms(), INSIDE, INSIDE)
def test_the_turn_acceleration_is_named_where_it_is_too_low(p, w0, w):
    p = replace(p, wheel_speed_limit=20.0)
    before, wanted = w0 * p.turn_rate_limit, w * p.turn_rate_limit
    got, causes = limit(p, (0.0, before), (0.0, wanted))
    room = p.turn_acceleration * p.period
    assert abs(got.turn_rate - min(max(wanted, before - room), before + room)) <= NEAR
    if abs(abs(wanted - before) - room) > 2 * SLACK:
        assert causes == (Causes.TURN_ACCELERATION_LIMIT if abs(wanted - before) > room else Causes.NONE)


# limit: nearest, by trying


@given(platforms(), INSIDE, SHARES)
@settings(PATIENT, max_examples=60)
def test_no_speed_that_a_period_reaches_is_nearer_on_a_straight(p, v0, v):
    before, wanted = inside_of(p, (v0, 0.0))[0], v * p.speed_limit
    got = limit(p, (before, 0.0), (wanted, 0.0))[0].speed
    tried = np.linspace(-p.reverse_speed_limit, p.speed_limit, 2001)
    tried = np.append(tried[np.abs(tried) <= p.wheel_speed_limit], before)
    reached = tried[[time_between(p, before, one) <= p.period for one in tried.tolist()]]
    assert time_between(p, before, got) <= p.period * (1.0 + 1e-9)
    assert abs(got - wanted) <= np.min(np.abs(reached - wanted)) + NEAR


@given(platforms(), INSIDE, INSIDE, INSIDE, INSIDE)
@settings(PATIENT, max_examples=200)
def test_no_motion_that_may_follow_is_nearer_to_a_wish_inside_the_static_limits(p, v0, w0, v, w):
    before, wanted = inside_of(p, (v0, w0)), inside_of(p, (v, w))
    assume(wanted != (0.0, 0.0))  # a stop keeps to the curve instead
    got, _ = limit(p, before, wanted)
    speeds = np.append(np.linspace(-p.reverse_speed_limit, p.speed_limit, 161), [got.speed, wanted[0]])
    speeds = speeds[[time_between(p, before[0], one) <= p.period for one in speeds.tolist()]]
    rates = np.append(before[1] + np.linspace(-1.0, 1.0, 161) * p.turn_acceleration * p.period, wanted[1])
    rates = rates[(np.abs(rates) <= p.turn_rate_limit) & (np.abs(rates - before[1]) <= p.turn_acceleration * p.period)]
    grid_v, grid_w = np.meshgrid(speeds, rates)
    may = np.abs(grid_v) + np.abs(grid_w) * p.track_width / 2.0 <= p.wheel_speed_limit
    far_v, far_w = abs(got.speed - wanted[0]), abs(got.turn_rate - wanted[1])
    # nothing is nearer in both; where the wished speed is reached, no turn rate is nearer with it
    assert not np.any(may & (np.abs(grid_v - wanted[0]) < far_v - NEAR) & (np.abs(grid_w - wanted[1]) < far_w - NEAR))
    assert far_v > NEAR or not np.any(may & (grid_v == wanted[0]) & (np.abs(grid_w - wanted[1]) < far_w - NEAR))


@PATIENT
@given(platforms(), INSIDE, INSIDE, SHARES, SHARES)
def test_wheels_that_bind_alone_run_at_their_limit(p, v0, w0, v, w):
    got, causes = limit(p, inside_of(p, (v0, w0)), motion_of(p, (v, w)))
    assert causes != Causes.WHEEL_SPEED_LIMIT or math.isclose(wheel_speed(p, got), p.wheel_speed_limit, rel_tol=1e-9)


# limit in use: a straight run, and a wall


def straight_run(p, distance, motion=(0.0, 0.0), speed_within=held_speed_to_stop_within):
    """Return the time and the end of a straight run under the limits, at the speed that can still be stopped within `distance`."""
    pose = (0.0, 0.0, 0.0)
    for periods in range(20_000):
        allowed = speed_within(max(0.0, distance - pose[0]), p.braking, p.period)
        motion, _ = limit(p, motion, (allowed, 0.0))
        if motion.speed * p.period < 1e-12:
            return periods * p.period, pose[0]
        pose = arc(pose, motion, p.period)
    raise AssertionError(f"not at rest after {periods + 1} periods: at {pose[0]} m of {distance} m with {motion.speed} m/s")


def trapezoid_time(distance, top, acceleration, braking):
    """Return the least time from rest to rest: trapezoid of speed over time, or triangle where `top` is not reached (derived)."""
    peak = min(top, math.sqrt(2.0 * distance / (1.0 / acceleration + 1.0 / braking)))
    ramps = peak / acceleration + peak / braking
    return ramps + (distance - peak * ramps / 2.0) / peak


@pytest.mark.parametrize(
    ("distance", "top", "acceleration", "braking", "expected"),
    [
        # D/v + v/a, else 2 sqrt(D/a) (derived)
        (2.0, 1.0, 0.8, 0.8, 3.25),
        (0.5, 1.0, 0.8, 0.8, 1.581139),
        # unequal rates, by hand: peak 1, ramps 1 and 0.5 s over 0.75 m, then 1.25 m at 1 m/s
        (2.0, 1.0, 1.0, 2.0, 2.75),
        (0.75, 1.0, 1.0, 2.0, 1.5),
    ],
)
@pytest.mark.parametrize("period", [0.02, 0.005, 0.001])
def test_a_straight_run_takes_the_time_of_the_trapezoid(distance, top, acceleration, braking, expected, period):
    assert abs(trapezoid_time(distance, top, acceleration, braking) - expected) <= 0.5e-6
    p = replace(CART, speed_limit=top, wheel_speed_limit=top, acceleration=acceleration, braking=braking, period=period)
    time, end = straight_run(p, distance)
    assert abs(end - distance) <= 1e-9
    # a held start is half a period ahead of a ramp, a held stop half a period behind it; the last step is a part of one
    assert abs(time - expected) <= 2.0 * period


@given(platforms(), st.floats(0.01, 5.0))
@settings(PATIENT, max_examples=40)
def test_a_straight_run_of_any_robot_ends_where_it_should(p, distance):
    time, end = straight_run(p, distance)
    assert abs(end - distance) <= 1e-9
    assert time >= trapezoid_time(distance, p.top_speed, p.acceleration, p.braking) - 2.0 * p.period


@pytest.mark.parametrize(("period", "expected"), [(0.05, 0.025), (0.1, 0.05), (0.2, 0.1)])
def test_the_square_root_overruns_by_half_a_period_and_ours_does_not(period, expected):
    # v <= sqrt(2 d a): Fox, Burgard & Thrun 1997 (from memory). In sampled time it overruns by v T/2 (derived; measured 0.025,
    # 0.05, 0.1 m at 1 m/s and 1 m/s^2), where the robot reads exactly its braking distance, 0.5 m
    p = replace(CART, speed_limit=1.0, braking=1.0, acceleration=1.0, period=period, reverse_speed_limit=0.0)
    _, end = straight_run(p, 0.5, (1.0, 0.0), lambda d, a, _: math.sqrt(2.0 * d * a))
    assert abs(end - 0.5 - expected) <= 1e-9
    for distance in np.linspace(1.0, 2.0, 41).tolist():
        _, end = straight_run(p, distance, (1.0, 0.0))
        assert abs(end - distance) <= 1e-9
        _, end = straight_run(p, distance, (1.0, 0.0), speed_to_stop_within)
        assert -period <= end - distance <= 1e-9


# bad calls

BRAKING, PERIOD = "give the steady deceleration of a full stop", "give the control period"


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: limit(CART, (math.nan, 0), (1, 0)), "before[0]=nan m/s must be finite; give the speed of the command before"),
        (
            lambda: limit(CART, (0, math.inf), (1, 0)),
            "before[1]=inf rad/s must be finite; give the turn rate of the command before",
        ),
        (lambda: limit(CART, (0, 0), (math.inf, 0)), "wanted[0]=inf m/s must be finite; give the speed that is wanted"),
        (lambda: limit(CART, (0, 0), (1, math.nan)), "wanted[1]=nan rad/s must be finite; give the turn rate that is wanted"),
        (lambda: stopping_distance(1.0, 0.0), f"braking=0 m/s^2 must be > 0; {BRAKING}"),
        (lambda: stopping_distance(1.0, 1.0, -0.1), "reaction=-0.1 s must be >= 0; give the time before the brakes act"),
        (lambda: speed_to_stop_within(1.0, -2.0), f"braking=-2 m/s^2 must be > 0; {BRAKING}"),
        (lambda: speed_to_stop_within(1.0, 1.0, math.nan), "reaction=nan s must be finite; give the time before the brakes act"),
        (lambda: held_stopping_distance(1.0, math.inf, 0.1), f"braking=inf m/s^2 must be finite; {BRAKING}"),
        (lambda: held_stopping_distance(1.0, 1.0, 0.0), f"period=0 s must be > 0; {PERIOD}"),
        (lambda: held_stopping_distance(-1.0, 1.0, 0.1), "speed=-1 m/s must be >= 0; give its size"),
        (lambda: held_speed_to_stop_within(1.0, 0.0, 0.1), f"braking=0 m/s^2 must be > 0; {BRAKING}"),
        (lambda: held_speed_to_stop_within(1.0, 1.0, -0.1), f"period=-0.1 s must be > 0; {PERIOD}"),
    ],
)
def test_bad_calls_are_refused_in_words(call, text):
    with pytest.raises(ValueError, match="^" + re.escape(text) + "$"):
        call()


# kernels against the same function in plain Python


@NEEDS_COMPILER
@PATIENT
@given(platforms(), SHARES, SHARES, SHARES, SHARES)
def test_limit_kernel_gives_the_bits_of_plain_python(p, v0, w0, v, w):
    arguments = (
        *motion_of(p, (v0, w0)),
        *motion_of(p, (v, w)),
        *(p.speed_limit, p.reverse_speed_limit, p.turn_rate_limit, p.wheel_speed_limit, p.track_width / 2.0),
        *(p.acceleration * p.period, p.braking * p.period, p.turn_acceleration * p.period),
    )
    got = limit_kernel(*arguments)
    assert got == limit_kernel.py_func(*arguments)
    assert limit(p, arguments[:2], arguments[2:4]) == (got[:2], got[2])


@NEEDS_COMPILER
@PATIENT
@given(st.floats(0.0, 20.0), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_kernels_give_the_bits_of_plain_python(number, braking, period):
    assert held_stop_kernel(number, braking, period) == held_stop_kernel.py_func(number, braking, period)
    assert held_speed_kernel(number, braking, period, 2.0) == held_speed_kernel.py_func(number, braking, period, 2.0)


def test_without_an_end_to_the_way_there_is_none_to_the_speed():
    assert speed_to_stop_within(math.inf, 1.0) == math.inf
    assert held_speed_to_stop_within(math.inf, 1.0, 0.1) == math.inf
