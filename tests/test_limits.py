"""Limits against braking tables, closed forms, exact sums, and what a period allows, worked out again from the rates."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
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
    assert abs(got - computed) <= 0.05 + NEAR
    assert 5 * math.ceil(got / 5) == design


@pytest.mark.parametrize(("kmh", "computed", "design"), AASHTO_METRIC)
def test_stopping_distance_is_within_the_rounding_of_the_aashto_coefficients(kmh, computed, design):
    got = stopping_distance(kmh * KMH, braking=3.4, reaction=2.5)
    # both coefficients of the table are rounded up, the second by 1.08 %
    assert (computed - 0.05) / (25.92 * 0.039) <= got <= computed + 0.05
    # so that two rows, 90 and 110 km/h, would be designed 5 m shorter
    assert 5 * math.ceil(got / 5) == design - (5 if kmh in (90, 110) else 0)


# the same in US units, reaction 2.5 s, 11.2 ft/s^2: d = 1.47 V t + 1.075 V^2/a (published), rounded up to 5 ft.
# Highway Engineering Handbook, table 2.2, rows 20 to 39 and 46 to 65 mph (published)
HANDBOOK_FEET = [
    *[115, 120, 130, 140, 145, 155, 165, 170, 180, 190, 200, 210, 220, 230, 240, 250, 260, 270, 280, 290],
    *[375, 385, 400, 415, 425, 440, 455, 465, 480, 495, 510, 525, 540, 555, 570, 585, 600, 615, 630, 645],
]


@pytest.mark.parametrize(("mph", "feet"), zip([*range(20, 40), *range(46, 66)], HANDBOOK_FEET, strict=True))
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


def test_speed_to_stop_within_gives_the_worked_value():
    # 100 km/h at 2.5 s and 3.4 m/s^2 (derived): 182.9158 m, 4 decimals; d d/d v = t + v/a = 10.7 s
    assert abs(speed_to_stop_within(182.9158, braking=3.4, reaction=2.5) - 100 * KMH) <= 0.5e-4 / 10.0
    assert abs(stopping_distance(100 * KMH, braking=3.4, reaction=2.5) - 182.9158) <= 0.5e-4


@given(st.floats(1e-6, 100.0), st.floats(0.01, 20.0), st.floats(0.0, 5.0))
def test_speed_to_stop_within_is_the_exact_inverse(speed, braking, reaction):
    assert math.isclose(speed_to_stop_within(stopping_distance(speed, braking, reaction), braking, reaction), speed, rel_tol=NEAR)
    assert math.isclose(stopping_distance(speed_to_stop_within(speed, braking, reaction), braking, reaction), speed, rel_tol=NEAR)


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


@given(st.floats(0.0, 2.0), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_stopping_distance_is_the_exact_sum(speed, braking, period):
    got, expected = held_stopping_distance(speed, braking, period), float(summed_stop(speed, braking, period))
    assert abs(got - expected) <= NEAR * expected + 1e-300


@given(st.floats(1e-3, 2.0), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_stopping_distance_exceeds_steady_braking_by_half_a_period_to_an_eighth_of_a_step(speed, braking, period):
    # with v = (n + f) b T the sum is v^2/(2b) + v T/2 + b T^2 f (1 - f)/2 (derived), f (1 - f) <= 1/4
    over = held_stopping_distance(speed, braking, period) - stopping_distance(speed, braking) - speed * period / 2.0
    assert -NEAR <= over <= braking * period**2 / 8.0 + NEAR


@given(st.floats(1e-6, 20.0), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_speed_to_stop_within_is_the_exact_inverse(number, braking, period):
    there = held_speed_to_stop_within(number, braking, period)
    assert math.isclose(held_stopping_distance(there, braking, period), number, rel_tol=NEAR)
    back = held_stopping_distance(number, braking, period)
    assert math.isclose(held_speed_to_stop_within(back, braking, period), number, rel_tol=NEAR)


@given(st.integers(1, 400), st.floats(0.3, 3.0), st.floats(0.005, 0.2))
def test_held_speed_at_a_whole_number_of_steps_joins_both_branches(n, braking, period):
    step = braking * period
    for share in (1.0 - 1e-13, 1.0, 1.0 + 1e-13):
        got = held_speed_to_stop_within(step * period * n * (n + 1) / 2.0 * share, braking, period)
        assert math.isclose(got, n * step, rel_tol=NEAR)


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
    shares += [p.wheel_speed_limit / wheel_speed(p, wanted)] if v or w else []
    return min(shares)


def keeps_static_limits(p, motion, slack=NEAR):
    v, w = motion
    return (
        -p.reverse_speed_limit - slack <= v <= p.speed_limit + slack
        and abs(w) <= p.turn_rate_limit + slack
        and wheel_speed(p, motion) <= p.wheel_speed_limit * (1.0 + slack) + slack
    )


def time_between(p, before, after):
    """Return how long the drive takes from one speed to another: braking down to zero, accelerating from there."""
    if before * after >= 0.0:
        more = np.abs(after) - np.abs(before)
        return np.where(more > 0.0, more / p.acceleration, -more / p.braking)
    return np.abs(before) / p.braking + np.abs(after) / p.acceleration


# limit: by hand


@pytest.mark.parametrize(
    ("before", "wanted", "expected", "causes"),
    [
        pytest.param((0, 0), (0.05, 0.5), (0.05, 0.5), Causes.NONE, id="within all limits"),
        pytest.param((0, 0), (0.5, 0), (0.1, 0), Causes.ACCELERATION_LIMIT, id="a start"),
        pytest.param((0, 0), (-0.25, 0), (-0.1, 0), Causes.ACCELERATION_LIMIT, id="a start backwards"),
        pytest.param((0.5, 0), (0.1, 0), (0.3, 0), Causes.BRAKING_LIMIT, id="braking"),
        pytest.param((-0.3, 0), (0, 0), (-0.1, 0), Causes.BRAKING_LIMIT, id="braking from backwards"),
        pytest.param((0.1, 0), (0, 0), (0, 0), Causes.NONE, id="the last of a stop"),
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
        pytest.param(
            (0.2, 2), (0, 0), (0, 1), Causes.TURN_ACCELERATION_LIMIT, id="the last of a stop, the turn cannot follow"
        ),
        pytest.param(
            (0.8, 0), (0.8, 2), (0.8, 1), Causes.WHEEL_SPEED_LIMIT | Causes.TURN_ACCELERATION_LIMIT,
            id="a share of 5/6, then the turn: see below", marks=pytest.mark.skip(reason="placeholder"),
        ),
        pytest.param(
            (0, 0), (0.8, 2), (0.1, 1),
            Causes.WHEEL_SPEED_LIMIT | Causes.ACCELERATION_LIMIT | Causes.TURN_ACCELERATION_LIMIT, id="all at once from rest",
        ),
    ],
)
def test_limit_by_hand(before, wanted, expected, causes):
    got, got_causes = limit(CART, before, wanted)
    assert isinstance(got, Motion)
    assert np.allclose(got, expected, rtol=0.0, atol=NEAR)
    assert got_causes == causes
    assert isinstance(got_causes, Causes)
