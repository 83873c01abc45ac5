"""The speed schedule: near the quickest drive, at rest in the disc, within the limits; wheels of real drives; way points.

Few draws here; `python tests/schedule_studies.py` draws many.
"""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from robots import cart
from rough_loop import COLUMNS, Truth, rough_drive, true_of
from schedule_studies import Row, changing, common_draw, many, noise_of, noisy, wrong
from steerkit import Causes, Controller, Frame, Measurement, Phase, Platform, Slowing, compiled
from steerkit.kinematics import arc, to_robot
from steerkit.schedule import cut_stop_kernel, passing_kernel, schedule_kernel, stops_kernel, turn_time_kernel
from steerkit.shortest import straight_time
from steerkit.wheel_grid import on_grid_kernel, slowest_kernel
from test_ride import Robot as Carriage

loops = pytest.mark.skipif(not compiled.ON, reason="closed loops over many robots want the compiler")
T = 0.05


# Against closed forms


@pytest.mark.parametrize(("angle", "most"), [(2.0, 1.0), (0.5, 1.0), (3.0, 0.7)])
def test_a_turn_from_rest_takes_the_time_of_the_trapezoid(angle, most):
    """A turn is a straight drive in angle: accelerate, hold, decelerate (trapezoid; D=2, v=1, a=0.8: 3.25 s by hand)."""
    got = turn_time_kernel(angle, 0.0, 0.8, most)
    assert got == pytest.approx(straight_time(angle, most, 0.8, 0.8), rel=1e-12)
    assert turn_time_kernel(2.0, 0.0, 0.8, 1.0) == pytest.approx(3.25)


@pytest.mark.parametrize("rate", [-1.2, -0.3, 0.0, 0.4, 0.9])
def test_a_turn_under_way_takes_the_time_of_its_three_ramps(rate):
    """Independent: the time of full ramps whose peak is found by bisection on the angle that they turn."""
    angle, al, most = 1.0, 2.0, 1.5

    def turned(peak):  # up from the rate to the peak, down to rest
        return (peak * peak - rate * rate) / (2.0 * al) + peak * peak / (2.0 * al)

    low, high = max(rate, 0.0), 10.0
    for _ in range(100):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if turned(middle) > angle else (middle, high)
    peak = min(high, most)
    expected = (peak - rate) / al + peak / al + (angle - turned(peak)) / peak
    assert turn_time_kernel(angle, rate, al, most) == pytest.approx(expected, rel=1e-9)


QUICK = {  # speed 1 m/s, turn rate 1 rad/s, ramps that hardly count
    "radius": 4.0,
    "speed_limit": 1.0,
    "turn_rate_limit": 1.0,
    "acceleration": 50.0,
    "braking": 50.0,
    "turn_acceleration": 100.0,
    "period": 0.01,
    "dead_time": 0.0,
}
GOALS = [(2.0, 0.5), (0.0, 1.0), (0.3, 0.4), (-0.5, 0.2), (-2.0, 0.3), (0.2, 1.8), (-1.0, 0.0)]
BOX = [2.06424, 2.09440, 1.17998, 3.03371, 4.26777, 2.55506, 3.66519]
DIAMOND = [2.30653, 2.57080, 1.42730, 3.29960, 5.01508, 3.27122, 4.14159]


@loops
@pytest.mark.parametrize(
    ("wheel", "track", "times", "most"), [(2.0, 2.0, BOX, 1.2), (1.0, 2.0, DIAMOND, 1.005)], ids=["box", "diamond"]
)
def test_without_ramps_it_takes_hardly_longer_than_the_shortest_time(wheel, track, times, most):
    """Shortest times to a point, speed and turn rate at most 1, each alone or both at the wheels.

    Derived, and verified by optimisation over free segments: forward only, box and diamond. A disc of 1 cm saves up to 1 cm of way
    and its angle, 0.03 s together at most here. At a box, goals within a turning radius or two cost up to a fifth: the robot drives
    off earlier than the quickest would, for with ramps that is the quicker.
    """
    platform = Platform(**QUICK, wheel_speed_limit=wheel, track_width=track)
    controller = Controller(platform, capture_radius=0.01)
    for goal, least in zip(GOALS, times, strict=True):
        got, _ = rough_drive(controller, true_of(platform), (-goal[0], -goal[1], 0.0), steps=2000)
        assert least - 0.03 < got.rest < most * least, goal


@loops
def test_straight_ahead_it_takes_the_time_of_the_trapezoid():
    """L7: way/v + v/a for a = b (here with a and b apart), and nothing for the disc: braking ends 5 % of its radius inside."""
    platform = cart(dead_time=0.0, period=0.01, speed_limit=1.0, acceleration=0.8, braking=0.8)
    got, _ = rough_drive(Controller(platform, capture_radius=0.1), true_of(platform), (-2.1, 0.0, 0.0), steps=2000)
    assert got.rest == pytest.approx(3.25, abs=0.06)


# Over random robots


def figures(rows):
    return Row(*rows.T)


@loops
@pytest.mark.parametrize(("lag", "band"), [(False, False), (True, False), (True, True)], ids=["plain", "lag", "lag and dead band"])
def test_every_drive_ends_at_rest_in_the_disc_within_the_limits_and_near_the_bound(lag, band):
    got = figures(many(400, 31, lambda rng: common_draw(rng, 10.0, lag, band)))
    assert np.all(got.arrived == 1)
    assert np.all(got.left == 0)
    assert np.all(got.excess <= 1e-9)
    assert np.all(got.stalls == 0)
    assert np.all(got.starts == 0)
    judged = (got.bound > 0) & (got.distance > 1.5 * got.radius)
    assert np.median(got.time[judged] / got.bound[judged]) < (1.04 if lag else 1.015)


@loops
def test_near_goals_and_goals_within_the_disc_too():
    got = figures(many(400, 32, lambda rng: common_draw(rng, 0.3)))
    assert np.any(got.distance < got.radius)
    assert np.all(got.arrived == 1)
    assert np.all(got.left + got.starts == 0)


@loops
def test_goals_that_change_on_the_way_are_reached():
    rows = many(300, 33, lambda rng: common_draw(rng, 5.0, True, True), goals=changing)
    got = figures(rows)
    assert np.all(got.arrived == 1)
    assert np.all(got.excess <= 1e-9)
    assert np.all(got.stalls + got.left == 0)


@loops
def test_numbers_declared_wrong_by_a_fifth_cost_time_and_no_goal():
    got = figures(many(300, 34, lambda rng: wrong(rng), jitter=0.2))
    assert np.all(got.arrived == 1)
    assert np.max(got.left / got.radius) < 0.1


@loops
def test_noise_makes_no_robot_miss_or_start_again():
    got = figures(many(200, 35, lambda rng: noisy(rng, 0.125, math.radians(1.0)), noise=noise_of))
    assert np.all(got.arrived == 1)
    assert np.all(got.starts == 0)


@loops
def test_it_does_not_circle_the_goal_with_the_turn_too_slow_and_the_speed_too_high():
    """What would circle: speed a fifth up and turn rate a fifth down, a goal abreast at every distance near the disc."""
    platform = cart(turn_rate_limit=1.0)
    truth = true_of(platform)._replace(speed_scale=1.2, turn_scale=0.8)
    controller = Controller(platform, capture_radius=0.1)
    for distance in np.geomspace(0.101, 2.0, 40):
        got, _ = rough_drive(controller, truth, (distance, 0.0, 0.5 * math.pi), (0.5, 0.5), steps=1000)
        assert got.rest > 0.0, distance


# Wheels that stand still below a speed, and take steps


speeds = st.floats(-2.0, 2.0)
small = st.floats(0.0, 0.2)


@settings(max_examples=500 if compiled.ON else 100, deadline=None, derandomize=True)
@given(speeds, speeds, speeds, speeds, small, small, st.floats(0.05, 0.5))
def test_each_wheel_is_given_nothing_or_a_speed_that_it_can_run(left, right, want_left, want_right, smallest, step, half):
    slowest = slowest_kernel(smallest, step)
    v1, w1 = abs(left + right) / 2.0, (right - left) / (2.0 * half)
    v, w = abs(want_left + want_right) / 2.0, (want_right - want_left) / (2.0 * half)
    got_v, got_w, ramp_v, ramp_w = on_grid_kernel(v1, w1, v, w, slowest, step, 2.0, 4.0 / half, 4.0, half)
    assert got_v >= -1e-12
    for sent, ramp in ((got_v - got_w * half, v1 - w1 * half), (got_v + got_w * half, v1 + w1 * half)):
        assert abs(sent) < 1e-12 or abs(sent) >= slowest * (1.0 - 1e-6)
        if step > 1e-6:
            assert abs(sent / step - round(sent / step)) < 1e-6
        if slowest == 0.0:
            assert sent == pytest.approx(ramp, abs=1e-12)
    assert on_grid_kernel(v1, -w1, v, -w, slowest, step, 2.0, 4.0 / half, 4.0, half) == (got_v, -got_w, ramp_v, -ramp_w)


def test_at_least_the_smallest_and_on_the_grid():
    assert slowest_kernel(0.03, 0.0) == 0.03
    assert slowest_kernel(0.0, 0.02) == 0.02
    assert slowest_kernel(0.03, 0.02) == pytest.approx(0.04)
    assert slowest_kernel(0.04, 0.02) == pytest.approx(0.04)


def test_a_stop_is_shorter_where_the_wheels_stand_still_below_a_speed():
    """By hand: 1 m/s, 0.3 m/s a period of 1 s: 1 + 0.7 + 0.4 + 0.1 m; below 0.2 m/s the last does not count."""
    assert cut_stop_kernel(1.0, 0.3, 1.0, 0.0) == pytest.approx(2.2)
    assert cut_stop_kernel(1.0, 0.3, 1.0, 0.2) == pytest.approx(2.1)
    assert cut_stop_kernel(0.1, 0.3, 1.0, 0.2) == 0.0


@pytest.mark.parametrize("v0", [0.3, 0.6, 1.0])
@pytest.mark.parametrize("error", [0.0, 0.4, -1.2, 2.5])
def test_it_stops_exactly_where_the_hardest_straight_stop_ends_inside(v0, error):
    """By hand: commands v0 - b T, v0 - 2 b T, ... each held for T, along the heading; the goal at a distance and an error."""
    b, radius, distance = 1.2, 0.1, 0.2
    path = sum(max(0.0, v0 - k * b * T) * T for k in range(1, 40))
    end = math.dist((path, 0.0), (distance * math.cos(error), distance * math.sin(error)))
    for stop_radius in (0.999 * end, 1.001 * end):
        got = stops_kernel(distance, error, v0, 0.0, stop_radius, radius, b, 5.0, T, 0.0)
        assert got == (end <= stop_radius)


@pytest.mark.parametrize(("w0", "turned"), [(0.9, 0.05 * (0.65 + 0.4 + 0.15)), (-0.9, -0.05 * (0.65 + 0.4 + 0.15))])
def test_a_stop_that_still_turns_counts_from_both_ends_of_its_turn(w0, turned):
    """By hand: turn rates 0.65, 0.4, 0.15 rad/s held for T after 0.9; the end lies between straight on and turned all the way."""
    b, v0, distance, error = 1.2, 0.6, 0.2, 0.3
    path = sum(max(0.0, v0 - k * b * T) * T for k in range(1, 20))
    goal = (distance * math.cos(error), distance * math.sin(error))
    ends = [math.dist((path * math.cos(a), path * math.sin(a)), goal) for a in (0.0, turned)]
    for stop_radius in (0.999 * max(ends), 1.001 * max(ends)):
        got = stops_kernel(distance, error, v0, w0, stop_radius, 0.05, b, 5.0, T, 0.0)
        assert got == (max(ends) <= stop_radius)


def test_a_stop_that_turns_by_more_than_a_radian_must_end_inside_whichever_way_it_goes():
    path = sum(max(0.0, 0.6 - k * 1.2 * T) * T for k in range(1, 20))
    for stop_radius in (0.999 * (0.03 + path), 1.001 * (0.03 + path)):
        assert stops_kernel(0.03, 0.2, 0.6, 4.0, stop_radius, 0.05, 1.2, 5.0, T, 0.0) == (0.03 + path <= stop_radius)


BANDED = {"smallest_wheel_speed": 0.05, "wheel_speed_resolution": 0.0, "dead_time": 0.1}


@loops
@pytest.mark.parametrize("true_smallest", [0.05, 0.06, 0.09])
def test_a_smallest_speed_declared_too_low_is_noticed_and_raised(true_smallest):
    platform = cart(**BANDED)
    truth = true_of(platform)._replace(smallest=true_smallest)
    controller = Controller(platform, capture_radius=0.05)
    raised = []
    for heading in np.linspace(-3.0, 3.0, 30):
        got, log = rough_drive(controller, truth, (-0.4, 0.0, heading), steps=1500, log=True)
        assert got.rest > 0.0
        raised.append(got.raised)
        silent = (log[:, COLUMNS.index("causes")].astype(int) & Causes.NO_ANSWER) != 0
        assert np.any(silent) == (got.raised > 0.05)
    assert max(raised) < 1.1 * true_smallest + 1e-9
    assert (max(raised) > 0.05) == (true_smallest > 0.05)


@loops
def test_a_smallest_speed_that_was_not_declared_is_found():
    platform = cart()
    truth = true_of(platform)._replace(smallest=0.04)
    ends = [rough_drive(Controller(platform, capture_radius=0.05), truth, (-0.3, 0.0, h), steps=3000)[0] for h in (0.0, 1.0, 2.5)]
    assert all(one.rest > 0.0 for one in ends)
    assert max(one.raised for one in ends) < 1.1 * 0.04 + 1e-9


def test_a_robot_that_is_blocked_is_told_of_and_its_smallest_speed_stays_within_reason():
    platform = cart(smallest_wheel_speed=0.03)
    controller = Controller(platform, capture_radius=0.1)
    memory = controller.start(0.0)
    for k in range(2000):
        decision = controller.step(memory, Measurement(k * T, (0.0, 0.0, 0.0), (3.0, 1.0)))
        memory = decision.memory
    assert Causes.NO_ANSWER in decision.causes
    assert decision.phase == Phase.DRIVING
    assert decision.report.slowest <= controller.settings.most_raised
    for k in range(2000, 2020):
        decision = controller.step(memory, Measurement(k * T, ((k - 1999) * 0.04, 0.0, 0.0), (3.0, 1.0)))
        memory = decision.memory
    assert Causes.NO_ANSWER not in decision.causes


def test_a_robot_at_rest_or_held_is_not_taken_for_silent():
    controller = Controller(cart(smallest_wheel_speed=0.03, position_noise=0.005), capture_radius=0.1)
    rng, memory = np.random.default_rng(3), controller.start(0.0)
    for k in range(500):
        pose = (*rng.normal(0.0, 0.005, 2), 0.0)
        decision = controller.step(memory, Measurement(k * T, pose, (0.02, 0.0) if k < 250 else (9.0, 0.0), hold=k >= 250))
        memory = decision.memory
        assert Causes.NO_ANSWER not in decision.causes


# Way points


def drive_through(controller, points, start=(0.0, 0.0, 0.0), steps=3000, stop=False):
    """Drive through points with dead time, or stop at each; return the log of (pose, decision, index of the goal)."""
    p = controller.platform
    memory, pose, log = controller.start(0.0), start, []
    under_way = [(0.0, 0.0)] * round(p.dead_time / p.period)
    i = 0
    for k in range(steps):
        then = points[i + 1] if i + 1 < len(points) and not stop else None
        decision = controller.step(memory, Measurement(k * p.period, pose, points[i], next_goal=then))
        memory = decision.memory
        log.append((pose, decision, i))
        under_way.append((decision.command.speed, decision.command.turn_rate))
        pose = tuple(arc(pose, under_way.pop(0), p.period))
        if decision.phase == Phase.ARRIVED and i == len(points) - 1:
            break
        if decision.phase in (Phase.PASSED, Phase.ARRIVED):
            i += 1
    return log


POINTS = [(2.0, 0.0), (4.0, 0.3), (5.0, 2.0), (5.0, 5.0), (2.0, 5.0), (0.0, 2.0)]


def test_way_points_are_touched_in_order_without_a_stop_and_the_last_is_arrived_at():
    controller = Controller(cart(dead_time=0.1), capture_radius=0.2)
    log = drive_through(controller, POINTS)
    assert log[-1][1].phase == Phase.ARRIVED
    assert log[-1][2] == len(POINTS) - 1
    path = np.array([pose[:2] for pose, _, _ in log])
    touched = [int(np.argmax(np.hypot(*(path - point).T) <= 0.2)) for point in POINTS]
    assert touched == sorted(touched)
    assert all(np.min(np.hypot(*(path - point).T)) <= 0.2 for point in POINTS)
    speeds_there = [log[k][1].command.speed for k in touched[:-1]]
    assert min(speeds_there) > 0.2
    assert len(log) < 0.85 * len(drive_through(controller, POINTS, stop=True))


def test_a_way_point_is_told_as_passed_before_it_is_touched_and_never_without():
    controller = Controller(cart(dead_time=0.1), capture_radius=0.2)
    log = drive_through(controller, POINTS)
    for i, point in enumerate(POINTS[:-1]):
        told = max(k for k, (_, decision, j) in enumerate(log) if j == i and decision.phase == Phase.PASSED)
        away = [math.dist(pose[:2], point) for pose, _, _ in log]
        touch = next(k for k, one in enumerate(away) if one <= 0.2)
        assert told <= touch <= told + 2 + 1 + 1  # two periods of dead time, the one that is held, one of the sampling


def test_after_a_passed_way_point_it_goes_on_to_the_next_goal_though_it_was_not_given_yet():
    controller = Controller(cart(dead_time=0.1), capture_radius=0.2)
    memory, pose, phases = controller.start(0.0), (0.0, 0.0, 0.0), []
    under_way = [(0.0, 0.0)] * 2
    for k in range(600):
        decision = controller.step(memory, Measurement(k * T, pose, (1.5, 0.0), next_goal=(3.0, 0.5)))
        memory = decision.memory
        phases.append(decision.phase)
        under_way.append((decision.command.speed, decision.command.turn_rate))
        pose = tuple(arc(pose, under_way.pop(0), T))
    assert phases[-1] == Phase.PASSED  # as long as the goal given is the one that was passed
    assert decision.command.speed == 0.0
    assert Phase.DRIVING not in phases[phases.index(Phase.PASSED) :]
    assert math.dist(pose[:2], (3.0, 0.5)) <= 0.2


def test_the_speed_at_a_way_point_is_what_the_next_goal_allows():
    limits = (0.2, 0.19, 1.0, 2.0, 0.8, 1.2, 5.0, T)
    straight_on = passing_kernel(0.0, 5.0, *limits)
    assert straight_on == 1.0
    near = passing_kernel(0.0, 0.5, *limits)
    way = math.dist((-0.2 * math.cos(1.13), 0.2 * math.sin(1.13)), (0.5, 0.0)) - 0.19  # from where the disc is touched 65 deg aside
    assert near == pytest.approx(math.sqrt(2.0 * 0.95 * 1.2 * way), abs=0.95 * 1.2 * T)  # v^2/2b, less the held period
    assert passing_kernel(1.0, 1.0, *limits) < straight_on
    assert passing_kernel(1.6, 5.0, *limits) == 0.0
    turned = [passing_kernel(angle, 2.0, *limits) for angle in np.linspace(0.0, 1.6, 60)]
    assert np.all(np.diff(turned) <= 1e-12)
    assert passing_kernel(-1.0, 1.0, *limits) == passing_kernel(1.0, 1.0, *limits)


@pytest.mark.parametrize(("then", "bad"), [((math.inf, 0.0), True), ((math.nan, 1.0), True), (("a", 1), True), (None, False)])
def test_a_bad_next_goal_is_left_out_and_told(then, bad):
    controller = Controller(cart(), capture_radius=0.2)
    decision = controller.step(controller.start(0.0), Measurement(0.0, (0.0, 0.0, 0.0), (2.0, 0.0), next_goal=then))
    assert (Causes.BAD_FIELD in decision.causes) == bad
    assert decision.report.goal == (2.0, 0.0)


def test_constant_speed_passes_way_points_too():
    controller = Controller(cart(dead_time=0.1), capture_radius=0.3, constant_speed=True)
    log = drive_through(controller, POINTS, steps=4000)
    assert log[-1][1].phase == Phase.ARRIVED
    path = np.array([pose[:2] for pose, _, _ in log])
    assert all(np.min(np.hypot(*(path - point).T)) <= 0.3 for point in POINTS)
    assert all(decision.command.speed == pytest.approx(controller.speed) for _, decision, i in log[20:] if i < len(POINTS) - 1)


# What holds the speed down


def told(platform, goal, steps, capture_radius=0.1, then=None, **fields):
    """Return what slowed each step of a drive, to a goal that may change after 40 steps."""
    controller = Controller(platform, capture_radius=capture_radius)
    memory, pose, found = controller.start(0.0), (0.0, 0.0, 0.0), []
    for k in range(steps):
        decision = controller.step(memory, Measurement(k * T, pose, then if then and k >= 40 else goal, **fields))
        memory = decision.memory
        pose = tuple(arc(pose, (decision.command.speed, decision.command.turn_rate), T))
        found.append(decision.report.slowed_by)
    return found


def in_order(found):
    return [one for k, one in enumerate(found) if k == 0 or one != found[k - 1]]


def test_a_straight_drive_gains_speed_runs_brakes_and_stops():
    got = in_order(told(cart(dead_time=0.0), (5.0, 0.0), 200))
    assert got == [Slowing.ACCELERATION, Slowing.NONE, Slowing.BRAKING, Slowing.STOPPING]


def test_a_goal_behind_is_turned_to_first():
    assert in_order(told(cart(dead_time=0.0), (-5.0, 0.1), 300))[:2] == [Slowing.TURNING, Slowing.ACCELERATION]


def test_the_limit_of_a_step_is_told():
    got = told(cart(dead_time=0.0), (5.0, 0.0), 100, speed_limit=0.3)
    assert got[-1] == Slowing.STEP_LIMIT


def test_wheels_that_cannot_do_both_are_told():
    got = told(cart(dead_time=0.0, wheel_speed_limit=0.9, turn_rate_limit=4.0), (9.0, 0.0), 100, then=(3.0, 9.0))
    assert Slowing.WHEEL_LIMIT in got


def test_the_schedule_never_divides_by_zero():
    """Plain Python raises where compiled code gives NaN: the edges of every branch, without the compiler."""
    plain = getattr(schedule_kernel, "py_func", schedule_kernel)
    for distance in (0.0, 5e-324, 1e-12, 0.095, 0.1, 0.3, 1e12):
        for error in (0.0, 5e-324, 1e-12, 0.5 * math.pi, math.pi, 3.6):
            for v0, w0 in ((0.0, 0.0), (1.0, 2.0), (1.0, -2.0), (5e-324, 5e-324)):
                for top in (0.0, 5e-324, 1.0):
                    limits = (0.0, 0.1, 0.095, top, 2.0, 0.8, 1.2, 5.0, T, T, 0.0, 0.2, False)
                    got = plain(distance, error, v0, w0, *limits)
                    assert all(math.isfinite(one) for one in got)
                    assert 0.0 <= got[0] <= max(top, 0.0)
                    assert abs(got[1]) <= 2.0


def test_the_truth_of_a_platform_is_what_it_declares():
    assert true_of(cart(**BANDED)) == Truth(0.1, 0.0, 0.05)
    assert dataclasses.replace(cart(**BANDED), wheel_speed_resolution=0.02).slowest_wheel_speed == pytest.approx(0.06)


@loops
@pytest.mark.parametrize("scale", [1.2, 1.5, 2.0])
def test_whatever_is_wrong_with_the_numbers_it_does_not_circle_for_ever(scale):
    """Speed too high and turn too slow by as much: past the law's own reserve the robot notices and turns first."""
    platform = cart(turn_rate_limit=1.0, dead_time=0.3)
    truth = true_of(platform)._replace(speed_scale=scale, turn_scale=1.0 / scale)
    controller = Controller(platform, capture_radius=0.1)
    for distance in np.geomspace(0.101, 1.0, 25):
        got, _ = rough_drive(controller, truth, (distance, 0.0, 0.5 * math.pi), (0.4, 0.5), steps=2500)
        assert got.rest > 0.0, distance


# What a reviewer broke


@loops
def test_a_dead_band_and_a_short_period_do_not_make_it_waver_between_spot_and_curve():
    """Ramps of a turn are begun anew within the dead band: the choice between spot and curve must not depend on a single period."""
    platform = Platform(
        radius=0.1745,
        track_width=0.1745,
        wheel_speed_limit=1.93,
        speed_limit=1.53,
        turn_rate_limit=4.68,
        acceleration=0.698,
        braking=5.62,
        turn_acceleration=1.067,
        period=0.0054,
        dead_time=0.0,
        smallest_wheel_speed=0.0499,
    )
    controller, rng = Controller(platform, capture_radius=0.172), np.random.default_rng(1)
    for place, heading in rng.uniform(-math.pi, math.pi, (100, 2)):
        start = (1.55 * math.cos(place), 1.55 * math.sin(place), heading)
        assert rough_drive(controller, true_of(platform), start, steps=6000)[0].rest > 0.0


def test_a_smallest_speed_that_was_raised_is_never_above_the_limit_of_the_step():
    controller = Controller(cart(dead_time=0.1), capture_radius=0.1)
    memory, pose, under_way = controller.start(0.0), (0.0, 0.0, 0.0), [(0.0, 0.0)] * 2
    for k in range(1200):
        decision = controller.step(memory, Measurement(k * T, pose, (2.0, 0.0), speed_limit=0.05))
        memory = decision.memory
        under_way.append((decision.command.speed, decision.command.turn_rate))
        motion = under_way.pop(0)
        if not 3.0 < k * T < 8.0:  # blocked for a while
            pose = tuple(arc(pose, motion, T))
        assert decision.command.speed <= 0.05 * (1.0 + 1e-12)
        if decision.phase == Phase.ARRIVED:
            break
    assert decision.phase == Phase.ARRIVED


def test_a_wheel_at_the_limits_is_told_nothing_rather_than_too_little():
    controller = Controller(cart(smallest_wheel_speed=0.12), capture_radius=0.1)
    decision = controller.step(controller.start(0.0, (0.103439969, 0.916060468)), Measurement(0.0, (0, 0, 0), (2, 0), hold=True))
    for wheel in decision.command[:2]:
        assert wheel == 0.0 or abs(wheel) >= 0.12 * (1.0 - 1e-9)


def test_where_discs_overlap_a_way_point_is_passed_and_not_arrived_at():
    controller = Controller(cart(), capture_radius=0.1)
    decision = controller.step(controller.start(0.0), Measurement(0.0, (0.05, 0, 0), (0, 0), next_goal=(0.1, 0)))
    assert decision.phase == Phase.PASSED


def test_a_pose_that_is_told_once_a_second_is_no_silence():
    controller = Controller(cart(), capture_radius=0.1, stale_after=2.0)
    memory, pose, seen, taken, log = controller.start(0.0), (0.0, 0.0, 0.0), (0.0, 0.0, 0.0), 0.0, []
    for k in range(200):
        if k % 20 == 0:
            seen, taken = pose, k * T
        decision = controller.step(memory, Measurement(k * T, seen, (4.0, 1.0), taken))
        memory = decision.memory
        pose = tuple(arc(pose, (decision.command.speed, decision.command.turn_rate), T))
        log.append(decision)
    assert not any(Causes.NO_ANSWER in one.causes for one in log)


def test_a_silent_robot_that_is_told_to_stand_has_nothing_to_answer():
    controller = Controller(cart(smallest_wheel_speed=0.03), capture_radius=0.1)
    memory, told = controller.start(0.0), []
    for k in range(200):
        decision = controller.step(memory, Measurement(k * T, (0.0, 0.0, 0.0), (3.0, 1.0), hold=k >= 100))
        memory = decision.memory
        told.append(Causes.NO_ANSWER in decision.causes)
    assert told[99]
    assert not any(told[-50:])


def test_sighted_way_points_are_each_driven_to():
    """Without a pose the robot sees the points from where it is: (ahead, left)."""
    controller = Controller(cart(dead_time=0.1), capture_radius=0.1)
    points, pose, i = [(2.0, 0.0), (2.0, 2.0), (0.0, 2.0), (0.0, 0.0)], (0.0, 0.0, 0.0), 0
    memory, under_way, nearest = controller.start(0.0), [(0.0, 0.0)] * 2, [math.inf] * 4
    for k in range(1500):
        then = to_robot(pose, points[i + 1]) if i < 3 else None
        seen = Measurement(k * T, None, to_robot(pose, points[i]), goal_frame=Frame.ROBOT, next_goal=then)
        decision = controller.step(memory, seen)
        memory = decision.memory
        under_way.append((decision.command.speed, decision.command.turn_rate))
        pose = tuple(arc(pose, under_way.pop(0), T))
        nearest = [min(near, math.dist(pose[:2], point)) for near, point in zip(nearest, points, strict=True)]
        i += decision.phase == Phase.PASSED
        if decision.phase == Phase.ARRIVED:
            break
    assert decision.phase == Phase.ARRIVED
    assert max(nearest[:3]) <= 0.1 + 0.5 * T  # looked at once a period


@loops
def test_behind_a_long_lag_way_points_are_touched_too():
    platform = cart(dead_time=0.1, motor_lag=0.5)
    controller, rng = Controller(platform, capture_radius=0.2), np.random.default_rng(3)
    for _ in range(10):
        points = [tuple(one) for one in rng.uniform(-3.0, 3.0, (5, 2))]
        robot, memory, i, near = Carriage(platform, (0.0, 0.0, 0.0)), controller.start(0.0), 0, [math.inf] * 5
        for k in range(3000):
            then = points[i + 1] if i < 4 else None
            decision = controller.step(memory, Measurement(k * T, robot.state[:3], points[i], next_goal=then))
            memory = decision.memory
            acting, touch = robot.hold(decision.command[2:], points[i])
            near[i] = min(near[i], touch)
            for j in range(i):
                near[j] = min(near[j], math.dist(acting[:2], points[j]), math.dist(robot.state[:2], points[j]))
            i += decision.phase == Phase.PASSED
            if decision.phase == Phase.ARRIVED:
                break
        assert decision.phase == Phase.ARRIVED
        assert max(near) <= 0.2 + 0.01  # between the places looked at, which lie a few centimetres apart
