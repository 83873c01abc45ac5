"""Heading law, prediction and approach, each alone, against closed forms and general integrators."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from steerkit import Platform
from steerkit.approach import CAPTURED, ON_THE_WAY, STOPPING, bearing_kernel, constant_speed_kernel, way_ahead_kernel
from steerkit.heading import HeadingLaw, HeadingMemory, heading_rate_kernel, steer
from steerkit.limits import held_stop_kernel, limit
from steerkit.prediction import carry_kernel, coast_kernel, motion_then_kernel, stop_end_kernel

PI = math.pi
FEW = settings(max_examples=150, deadline=None, derandomize=True)


# The law


def test_the_law_is_gain_times_the_short_way_round():
    law = HeadingLaw(gain=2.0, ceiling=10.0)
    assert steer(law, HeadingMemory(), 3.0, -3.0, 0.1)[0] == pytest.approx(2.0 * (6.0 - 2.0 * PI))
    assert steer(law, HeadingMemory(), -3.0, 3.0, 0.1)[0] == pytest.approx(2.0 * (2.0 * PI - 6.0))
    assert steer(law, HeadingMemory(), 1.0, 0.25, 0.1)[0] == 1.5


def test_a_law_is_proportional_unless_told_otherwise():
    assert HeadingLaw(1.0, 2.0) == (1.0, 2.0, math.inf, 0.0)
    turning = HeadingMemory(integral=9.0, heading=-1.0)
    assert steer(HeadingLaw(1.0, 2.0), turning, 1.0, 0.0, 0.1)[0] == 1.0


def test_the_ceiling_holds_both_ways():
    law = HeadingLaw(gain=2.0, ceiling=0.7)
    assert steer(law, HeadingMemory(), 1.0, 0.0, 0.1)[0] == 0.7
    assert steer(law, HeadingMemory(), -1.0, 0.0, 0.1)[0] == -0.7


def test_the_integral_adds_its_share_from_the_next_step_on():
    law = HeadingLaw(gain=2.0, ceiling=10.0, integral_time=4.0)
    first, memory = steer(law, HeadingMemory(), 0.5, 0.0, 0.1)
    assert (first, memory.integral) == (1.0, 0.05)
    second, memory = steer(law, memory, 0.5, 0.0, 0.1)
    assert second == pytest.approx(2.0 * (0.5 + 0.05 / 4.0))
    assert memory.integral == pytest.approx(0.1)


def test_the_integral_stands_still_in_saturation_and_goes_back_at_once():
    law = HeadingLaw(gain=2.0, ceiling=0.7, integral_time=4.0)
    memory = HeadingMemory(integral=0.3)
    assert steer(law, memory, 1.0, 0.0, 0.1)[1].integral == 0.3  # more is asked than the ceiling gives
    assert steer(law, memory, -1.0, 0.0, 0.1)[1].integral == 0.3
    assert steer(law, HeadingMemory(integral=5.0), -0.1, 0.0, 0.1)[1].integral == pytest.approx(
        4.99
    )  # saturated, error the other way
    assert steer(law, memory, 0.1, 0.0, 0.1, given=0.05)[1].integral == 0.3  # another limit left less
    assert steer(law, memory, 0.1, 0.0, 0.1, given=0.35)[1].integral == pytest.approx(0.31)


def test_the_derivative_acts_on_the_measured_heading_only():
    law = HeadingLaw(gain=2.0, ceiling=10.0, derivative_time=0.5)
    turning = HeadingMemory(heading=0.9)
    assert steer(law, turning, 2.0, 1.0, 0.1)[0] == pytest.approx(2.0 * (1.0 - 0.5 * 1.0))
    still = HeadingMemory(heading=1.0)
    assert steer(law, still, 2.0, 1.0, 0.1)[0] == 2.0  # whatever the target was before
    assert steer(law, HeadingMemory(), 2.0, 1.0, 0.1)[0] == 2.0  # none before: no rate
    across = HeadingMemory(heading=3.1)
    rate = (2.0 * PI - 6.2) / 0.1  # over the cut, the short way
    assert steer(law, across, -3.1, -3.1, 0.1)[0] == pytest.approx(-2.0 * 0.5 * rate)


@pytest.mark.parametrize(("before", "duration"), [(math.nan, 0.1), (math.inf, 0.1), (0.2, 0.0), (0.2, -1.0), (0.2, math.nan)])
def test_a_rate_that_cannot_be_told_is_none(before, duration):
    assert heading_rate_kernel(0.5, before, duration) == 0.0


# Prediction


def rows(times, motions):
    """Return commands under way as the memory holds them: newest first, ages as of the last step."""
    return np.array([number for age, (v, w) in zip(times, motions, strict=True) for number in (age, v, w)])


@pytest.mark.parametrize("lag", [0.0, 0.02, 0.15, 0.7])
def test_carrying_agrees_with_a_general_integrator(lag):
    """scipy solve_ivp over random held commands, dead time and lag."""
    rng = np.random.default_rng(4)
    for _ in range(25):
        count, dead_time, since = 6, rng.uniform(0.0, 0.3), rng.uniform(0.01, 0.1)
        ages = np.concatenate([[0.0], np.cumsum(rng.uniform(0.02, 0.15, count - 1))])
        motions = [tuple(one) for one in rng.uniform((-0.5, -3.0), (1.5, 3.0), (count, 2))]
        start, end = sorted(rng.uniform(-0.3, dead_time, 2))
        pose, motion = rng.uniform(-3.0, 3.0, 3), rng.uniform((-0.5, -3.0), (1.5, 3.0))
        begins = [dead_time - (age + since) for age in ages]  # newest first

        def acting(t, begins=begins, motions=motions):
            return next((m for b, m in zip(begins, motions, strict=True) if t >= b), motions[-1])

        def flow(t, s, acting=acting):
            v, w = s[3:]
            command = acting(t)
            return [v * math.cos(s[2]), v * math.sin(s[2]), w, (command[0] - v) / lag, (command[1] - w) / lag]

        state, cuts = np.array([*pose, *motion]), sorted({start, end, *(b for b in begins if start < b < end)})
        for a, b in itertools.pairwise(cuts):
            if lag == 0.0:
                v, w = acting(0.5 * (a + b))
                state[3:] = v, w
                run = solve_ivp(
                    lambda t, s, v=v, w=w: [v * math.cos(s[2]), v * math.sin(s[2]), w, 0, 0], (a, b), state, rtol=1e-11, atol=1e-12
                )
            else:
                middle = 0.5 * (a + b)
                run = solve_ivp(lambda t, s, m=middle: flow(m, s), (a, b), state, rtol=1e-11, atol=1e-12)
            state = run.y[:, -1]
        memory = np.array([9.0, *rows(ages, motions)])
        got = carry_kernel(memory, 1, count, since, *motions[0], dead_time, lag, start, end, *pose, *motion)
        # four Gauss points over a response: the worst is a third of a millimetre where a command lasts many lags
        assert got[:2] == pytest.approx(state[:2], abs=3e-4 if lag else 1e-9)
        assert math.remainder(got[2] - state[2], 2.0 * PI) == pytest.approx(0.0, abs=1e-8)
        assert motion_then_kernel(memory, 1, count, since, *motions[0], dead_time, lag, start, end, *motion) == got[3:]
        if lag:
            assert got[3:] == pytest.approx(state[3:], abs=1e-8)


def test_the_last_command_counts_as_given_not_as_remembered():
    memory = rows([0.0, 0.1], [(1.0, 0.0), (0.5, 0.0)])
    x = carry_kernel(memory, 0, 2, 0.1, 0.2, 0.0, 0.0, 0.0, -0.1, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0)[0]
    assert x == pytest.approx(0.1 * 0.2)


@FEW
@given(
    st.lists(st.tuples(st.floats(0.0, 1.5), st.floats(-3.0, 3.0)), min_size=1, max_size=5),
    st.floats(0.0, 1.0),
    st.floats(-3.0, 3.0),
    st.floats(0.01, 0.3),
)
def test_the_coasted_heading_is_moved_by_commands_alone(commands, v, w, lag):
    """Turn = sum of command times time + lag (rate before - rate after): the coasted heading integrates the commands exactly."""
    step, heading = 0.1, 0.0
    coasted = coast_kernel(0.0, 0.0, 0.0, v, w, lag)[2]
    for command in commands:
        *_, heading, v, w = carry_kernel(np.zeros(3), 0, 1, 0.0, *command, 0.0, lag, 0.0, step, 0.0, 0.0, heading, v, w)
    expected = coasted + step * sum(turn for _, turn in commands)
    assert math.remainder(coast_kernel(0.0, 0.0, heading, v, w, lag)[2] - expected, 2.0 * PI) == pytest.approx(0.0, abs=1e-9)


# Stops


def robot(braking, turn_acceleration, period):
    return Platform(
        radius=0.3,
        track_width=0.4,
        wheel_speed_limit=50.0,
        speed_limit=20.0,
        turn_rate_limit=30.0,
        acceleration=1.0,
        braking=braking,
        turn_acceleration=turn_acceleration,
        period=period,
        dead_time=0.0,
    )


@FEW
@given(st.floats(0.05, 1.5), st.floats(-6.0, 6.0), st.floats(0.3, 3.0), st.floats(1.0, 20.0), st.sampled_from([0.005, 0.05, 0.2]))
def test_a_stop_ends_where_it_is_said_to(v, w, braking, turn_acceleration, period):
    """Against the stop step by step through `limits.limit`, on the same held motions."""
    platform = robot(braking, turn_acceleration, period)
    path = held_stop_kernel(max(0.0, v - braking * period), braking, period)
    end = stop_end_kernel(0.0, 0.0, 0.0, v, w, braking, turn_acceleration, path)
    pose, motion = np.zeros(3), (v, w)
    while motion[0] > 0.0:
        motion, _ = limit(platform, motion, (0.0, 0.0))
        middle = pose[2] + motion[1] * period / 2.0
        half = motion[1] * period / 2.0
        chord = motion[0] * period * (math.sin(half) / half if half else 1.0)
        pose += [chord * math.cos(middle), chord * math.sin(middle), motion[1] * period]
    kept = braking * abs(w) <= turn_acceleration * v
    # on the arc exactly; where the curve tightens, within a fraction of the step and of the path
    assert math.dist(end, pose[:2]) <= (1e-9 if kept else 0.02 * path + v * period)


@FEW
@given(st.floats(0.05, 1.5), st.floats(0.1, 6.0), st.floats(0.3, 3.0), st.floats(1.0, 20.0))
def test_a_stop_never_leaves_its_circle_of_curvature(v, w, braking, turn_acceleration):
    path = held_stop_kernel(v, braking, 0.02)
    x, y = stop_end_kernel(0.0, 0.0, 0.0, v, w, braking, turn_acceleration, path)
    assert math.hypot(x, y - v / w) <= v / w * (1.0 + 1e-9)


# Approach


@FEW
@given(st.floats(0.01, 20.0), st.floats(-PI, PI), st.floats(0.01, 0.5))
def test_the_way_ahead_ends_at_the_near_edge_of_the_disc(distance, error, radius):
    way = way_ahead_kernel(distance, error, radius)
    x, y = distance * math.cos(error), distance * math.sin(error)
    aside = x <= 0.0 or (abs(error) > 0.5 and abs(y) > radius)
    assert (way == math.inf) == (aside and distance > radius)
    if way == math.inf:
        pass
    elif way > 0.0 and abs(y) <= radius:
        assert math.hypot(x - way, y) == pytest.approx(radius, abs=1e-9 * (1.0 + distance))
        assert math.hypot(x - way * 0.999, y) > radius - 1e-9
    elif way > 0.0:
        assert way == pytest.approx(x)  # passes the disc: up to the nearest point
        assert abs(error) <= 0.5
    else:
        assert distance <= radius * (1.0 + 1e-9)


def approach(x=0.0, y=0.0, heading=0.0, v0=0.5, w0=0.0, goal=(5.0, 0.0), progress=ON_THE_WAY):
    return constant_speed_kernel(x, y, heading, v0, w0, *goal, progress, 0.5, 0.16, 0.19, 0.2, 0.18, 1.0, 5.0, 0.05)


def test_far_from_the_goal_it_cruises():
    assert approach() == (0.0, 5.0, 0.5, ON_THE_WAY)
    assert approach(goal=(-5.0, 0.1))[2:] == (0.5, ON_THE_WAY)
    assert approach(goal=(0.0, 0.3))[2:] == (0.5, ON_THE_WAY)  # off to the side nothing brakes


def test_it_brakes_just_in_time_to_end_at_the_near_edge():
    """v T + v^2/2b + ... : the held stop from 0.5 m/s at 1 m/s^2 and 0.05 s takes 0.5 * 0.05 * 11 - 0.05 * 0.05 * 55 = 0.1375 m."""
    assert held_stop_kernel(0.5, 1.0, 0.05) == pytest.approx(0.1375)
    assert approach(goal=(0.16 + 0.1376, 0.0))[2] == 0.5
    assert approach(goal=(0.16 + 0.1374, 0.0))[2] < 0.5


def test_a_stop_along_the_curve_begins_inside_one_radius_and_goes_on_inside_the_other():
    side = 0.195
    # circling the goal at 0.195 m: the stop along the circle stays there
    around = {"x": side, "heading": PI / 2.0, "w0": 0.5 / side, "goal": (0.0, 0.0)}
    assert approach(**around)[3] == CAPTURED
    assert approach(**around, progress=STOPPING)[2:] == (0.0, STOPPING)
    inside = {"x": 0.18, "heading": PI / 2.0, "w0": 0.5 / 0.18, "goal": (0.0, 0.0)}
    assert approach(**inside)[2:] == (0.0, STOPPING)
    for turns in (1.0, -1.0):  # from a speed whose stop goes round more than half a turn, the whole circle must lie inside
        circle = {"x": turns * 0.10, "heading": PI / 2.0, "v0": 1.5, "w0": turns * 1.5 / 0.10}
        assert approach(**circle, goal=(0.0, 0.0))[2:] == (0.0, STOPPING)
        assert approach(**circle, goal=(0.0, 0.085))[2:] == (0.0, STOPPING)
        assert approach(**circle, goal=(0.0, 0.095))[3] == CAPTURED
    for heading in (0.3, 1.1, 2.5, -0.7):  # the same circle from other places on it
        place = {"x": 0.10 * math.sin(heading), "y": -0.10 * math.cos(heading), "heading": heading, "v0": 1.5, "w0": 15.0}
        assert approach(**place, goal=(0.0, 0.085))[2:] == (0.0, STOPPING)
        assert approach(**place, goal=(0.0, 0.095))[3] == CAPTURED


def test_a_disc_that_was_passed_through_is_come_back_to_slowly():
    """Having touched the disc it never goes faster than it can stop from at that distance."""
    assert approach(goal=(-0.5, 0.0))[2:] == (0.5, ON_THE_WAY)
    speed, progress = approach(goal=(-0.2, 0.2), progress=CAPTURED)[2:]
    assert progress == CAPTURED
    assert held_stop_kernel(speed, 1.0, 0.05) == pytest.approx(math.hypot(0.2, 0.2) - 0.16)
    assert approach(goal=(-0.10, 0.15))[3] == CAPTURED  # inside 0.2 m
    assert approach(goal=(-0.10, 0.05))[2:] == (0.0, CAPTURED)  # too deep inside to go anywhere


def test_a_stop_along_the_curve_begins_before_the_disc_is_reached():
    """From 0.45 m/s it takes 0.1125 m: along a circle of 0.2 m that ends at (0.107, 0.031), inside a disc entered nowhere yet."""
    assert held_stop_kernel(0.45, 1.0, 0.05) == pytest.approx(0.1125)
    around = {"w0": 0.5 / 0.2, "goal": (0.05, 0.194)}
    assert approach(**around)[2:] == (0.0, STOPPING)
    assert approach(w0=0.5 / 0.2, goal=(0.0, 0.3))[2:] == (0.5, ON_THE_WAY)  # there it would end 0.29 m off


def test_with_the_goal_ahead_it_steers_on_while_braking_even_if_it_comes_to_rest_beyond_the_near_edge():
    speed, progress = approach(goal=(0.16 + 0.10, 0.0))[2:]
    assert progress == ON_THE_WAY
    assert held_stop_kernel(speed, 1.0, 0.05) == pytest.approx(0.10)


def test_at_rest_in_the_disc_it_stays_and_outside_it_goes():
    assert approach(v0=0.0, goal=(0.179, 0.0))[2:] == (0.0, STOPPING)
    assert approach(v0=0.0, goal=(0.181, 0.0))[2] > 0.0  # inside the disc, but not deep enough for the noise
    assert approach(v0=0.0, goal=(-0.1, 0.1))[2:] == (0.0, STOPPING)
    assert approach(v0=0.0, goal=(0.201, 0.0))[2] > 0.0
    assert approach(v0=0.0, goal=(-0.201, 0.0))[2] == 0.5


@pytest.mark.parametrize(
    ("place", "expected"), [((3.0, 4.0), (5.0, math.atan2(4.0, 3.0))), ((-1.0, 0.0), (1.0, PI)), ((0.0, -2.0), (2.0, -PI / 2.0))]
)
def test_bearing_and_distance(place, expected):
    assert bearing_kernel(0.0, 0.0, *place) == pytest.approx(expected)
    assert bearing_kernel(10.0, -7.0, 10.0 + place[0], -7.0 + place[1]) == pytest.approx(expected)
