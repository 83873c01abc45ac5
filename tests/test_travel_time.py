"""The lower bound of travel time against plans and drives that really end at rest, and against closed forms."""

from __future__ import annotations

import math
import os
import subprocess
import sys

import numpy as np
import pytest

from robots import cart, draw, draw_start
from steerkit import compiled, way_ahead
from steerkit.kinematics import arc
from steerkit.limits import held_stopping_distance
from steerkit.shortest import steering_time, straight_time, wheel_time
from steerkit.travel_time import DIRECTIONS, least_travel_time, travel_time_kernel
from travel_plans import (
    Limits,
    draw_limits,
    draw_motion,
    draw_spin,
    draw_wanted,
    drawn,
    drive_kernel,
    plan_kernel,
    ratios_of_drives,
    ratios_of_plans,
)

NEEDS_COMPILER = pytest.mark.skipif(not compiled.ON, reason="tens of thousands of plans")
NEAR = 1e-9  # rounding of a few dozen operations
PI = math.pi


# plans and drives


@NEEDS_COMPILER
@pytest.mark.parametrize("tight", [False, True])
def test_no_plan_beats_the_bound_and_some_reach_it(tight):
    got = ratios_of_plans(20_000, seed=4, tight=tight)
    assert got.min() >= 1.0 - NEAR
    assert np.mean(got < 1.0 + NEAR) > 0.05  # straight drives, and stops


@NEEDS_COMPILER
def test_no_plan_of_a_robot_that_turns_fast_beats_the_bound():
    got = ratios_of_plans(20_000, seed=14, spinning=True)
    assert got.min() >= 1.0 - NEAR
    assert np.mean(got < 1.0 + NEAR) > 0.05


@NEEDS_COMPILER
def test_no_plan_gets_farther_ahead_than_its_number_of_periods_allows():
    # along every direction, for a robot that turns fast: first the hardest turn against it, or with it, then anything
    rng, reached = np.random.default_rng(15), 0
    for _ in range(10_000):
        limits, (v0, w0) = draw_spin(rng)
        first = rng.integers(2) * limits.top, rng.integers(-1, 2) * limits.turn, rng.integers(1, 100)
        x, y, n, _ = plan_kernel(v0, w0, limits, np.vstack([np.array(first, float), draw_wanted(rng, limits)[: rng.integers(3)]]))
        top, turn, wheel, half, a, b, al, T = limits
        row = (v0 * T, a * T * T, top * T, b * T * T, abs(w0) * T, al * T * T, turn * T, wheel * T)
        angle = rng.uniform(-PI, 3.0 * PI)
        ahead = x * math.cos(angle) + math.copysign(y, y * w0) * math.sin(angle)
        assert not way_ahead.swing_forbids_kernel(ahead - NEAR * (1.0 + abs(ahead)), angle, float(n), row, half)
        reached += way_ahead.swing_forbids_kernel(ahead + 0.01 * top * T * n + NEAR, angle, float(n), row, half)
    assert reached > 300  # ways within a hundredth of the path


@NEEDS_COMPILER
def test_no_good_drive_from_a_fast_turn_beats_the_bound():
    got = ratios_of_drives(3000, seed=16)
    assert got.min() >= 1.0 - NEAR
    assert np.median(got) < 1.25
    assert np.percentile(got, 95) < 2.0


# the bound


def bound(limits, distance, error, motion=(0.0, 0.0), radius=0.1, tight=True):
    return travel_time_kernel(float(distance), float(error), *motion, radius, *limits, DIRECTIONS, tight)


QUICK = Limits(1.0, 2.0, 1.0, 0.5, 1e4, 1e4, 1e4, 1e-3)  # wheels: v + |w|/2 <= 1; hardly any ramp
PLAIN = Limits(0.9, 2.0, 1.1, 0.21, 0.8, 1.2, 5.0, 0.05)


@pytest.mark.parametrize("angle", [0.0, 0.3, 1.0, 1.6])
@pytest.mark.parametrize("distance", [1.0, 4.0])
def test_without_ramps_the_bound_is_the_closed_form_of_the_wheels(distance, angle):
    # turn, then drive (Balkcom & Mason 2002): rest within 1e-4 m of the goal
    expected = wheel_time((distance * math.cos(angle), distance * math.sin(angle)), 1.0, 2.0)
    got = bound(QUICK, distance, angle, radius=1e-4)
    assert got <= expected + 2.0 * QUICK.period
    assert got >= expected - 1e-3


@pytest.mark.parametrize("angle", [0.0, 0.3, 1.0, 2.0, 3.0])
def test_without_ramps_and_with_strong_wheels_the_bound_is_steering_time(angle):
    got = bound(QUICK._replace(wheel=2.0), 3.0, angle, radius=1e-4)
    assert got == pytest.approx(steering_time((3.0 * math.cos(angle), 3.0 * math.sin(angle)), 1.0, 2.0), rel=1e-3)


@pytest.mark.parametrize(("periods", "path"), [(1, 1), (2, 2), (3, 4), (4, 6), (5, 9)])
def test_a_straight_way_takes_the_periods_counted_by_hand(periods, path):
    # steps of 0.1 m/s held for 0.1 s: 1; 1+1; 1+2+1; 1+2+2+1; 1+2+3+2+1 hundredths of a metre
    limits = Limits(1.0, 1.0, 2.0, 0.2, 1.0, 1.0, 10.0, 0.1)
    for way, expected in ((path - 0.01, periods), (path + 0.01, periods + 1)):
        for tight in (False, True):
            assert bound(limits, 0.1 + 0.01 * way, 0.0, tight=tight) == pytest.approx(expected * 0.1)


@pytest.mark.parametrize(("v0", "w0", "periods"), [(0.0, 0.0, 0), (0.06, 0.0, 0), (0.5, 0.0, 8), (0.0, -1.0, 3), (0.5, 1.9, 8)])
def test_a_motion_in_the_disc_takes_its_stop(v0, w0, periods):
    # 0.06 m/s and 0.25 rad/s less each period, the first at once: 0.5/0.06 = 8.33, 1/0.25 = 4
    assert bound(PLAIN, 0.1, 0.0, (v0, w0), radius=1.0) == pytest.approx(periods * PLAIN.period)


def test_a_stop_that_ends_beyond_the_disc_has_to_come_back():
    v0, limits = 0.9, PLAIN._replace(turn=0.5)  # turns at most 0.35 rad on the way: at least 94 % of the path is ahead
    path = held_stopping_distance(v0, limits.braking, limits.period) - v0 * limits.period
    stop = bound(limits, path, 0.0, (v0, 0.0), radius=0.05)
    assert stop == pytest.approx(14 * limits.period)
    for goal in (0.94 * path - 0.051, 0.0):
        for tight in (False, True):
            assert bound(limits, goal, 0.0, (v0, 0.0), radius=0.05, tight=tight) > stop + 0.5 * limits.period


SPINS = [
    (Limits(0.86, 2.65, 2.0, 0.2, 1.0, 2.9, 1.87, 0.02), 0.91, 1.7, (0.55, 2.24)),
    (Limits(1.16, 4.0, 2.0, 0.2, 1.0, 2.39, 2.88, 0.11), 0.69, 3.8, (0.95, -2.57)),
]


@pytest.mark.parametrize(("limits", "distance", "error", "motion"), SPINS)
def test_who_cannot_stop_turning_in_time_swings_past(limits, distance, error, motion):
    error = math.radians(error)
    good = drive_kernel(distance, error, *motion, 0.12, limits, 0.2, 1000) * limits.period
    got = bound(limits, distance, error, motion, radius=0.12)
    able = bound(limits._replace(turn_acceleration=200.0), distance, error, motion, radius=0.12)  # the same, but stops at once
    assert 0.7 * good <= got <= good
    assert able < 0.5 * good


def test_turning_away_costs_time_only_where_the_sign_counts():
    for error in (1.5, 2.0):  # at 3 rad the long way round is the shorter
        away, still, toward = (bound(PLAIN, 2.0, error, (0.0, w)) for w in (-1.5, 0.0, 1.5))
        assert away >= still + 0.1
        assert still >= toward
        assert bound(PLAIN, 2.0, error, (0.0, -1.5), tight=False) == bound(PLAIN, 2.0, error, (0.0, 1.5), tight=False)
    assert bound(PLAIN, 2.0, 3.1, (0.0, -1.5)) < bound(PLAIN, 2.0, 3.1)


def draw_case(rng):
    limits = draw_limits(rng)
    return limits, drawn(rng, 0.05, 10.0), rng.uniform(-PI, PI), draw_motion(rng, limits), drawn(rng, 0.03, 0.3)


def cases(count, seed):
    rng = np.random.default_rng(seed)
    return [draw_case(rng) for _ in range(count if compiled.ON else count // 50)]


def test_the_mirrored_case_takes_the_same():
    for limits, distance, error, (v0, w0), radius in cases(1000, 5):
        assert bound(limits, distance, error, (v0, w0), radius) == bound(limits, distance, -error, (v0, -w0), radius)


def test_lengths_and_times_scale():
    for limits, distance, error, (v0, w0), radius in cases(1000, 6):
        c, s = 4.0, 0.5  # of a length and of a time, powers of two: nothing is rounded
        top, turn, wheel, half, a, b, al, T = limits
        scaled = Limits(top * c / s, turn / s, wheel * c / s, half * c, a * c / s**2, b * c / s**2, al / s**2, T * s)
        got = bound(scaled, distance * c, error, (v0 * c / s, w0 / s), radius * c)
        assert abs(got / s - bound(limits, distance, error, (v0, w0), radius)) <= NEAR


def test_farther_takes_no_less():
    for limits, _, error, motion, radius in cases(100, 7):
        times = [bound(limits, d, error, (0.0, motion[1]), radius) for d in np.linspace(radius, 5.0, 40)]
        assert np.diff(times).min() >= -1.001 * limits.period  # pieces and directions depend on the distance
        assert np.mean(np.diff(times) < -NEAR) < 0.05
        assert times[-1] > times[0] or times[0] > 1.0


def test_the_bound_is_at_least_each_of_its_parts():
    for limits, distance, error, motion, radius in cases(1000, 8):
        got = bound(limits, distance, error, motion, radius)
        assert got >= bound(limits, distance, error, motion, radius, tight=False) - NEAR
        way = distance - radius
        if way > 0.0:
            top, turn = min(limits.top, limits.wheel), min(limits.turn, limits.wheel / limits.half_track)
            aside = max(0.0, abs(error) - math.asin(radius / distance))
            assert got >= steering_time((way * math.cos(aside), way * math.sin(aside)), top, turn) - NEAR
            assert got >= (way + limits.half_track * aside) / limits.wheel - NEAR
            if motion[0] == 0.0:  # held commands lead a ramp by half a period at either end
                assert got >= straight_time(way, top, limits.acceleration, limits.braking) - limits.period - NEAR


def test_long_turns_in_pieces_lose_little():
    # the same robot with a period 32 times as short: ramps and turns are cut into pieces, and the held commands gain less
    for limits, distance, error, motion, radius in cases(200, 9):
        got = bound(limits._replace(period=limits.period / 32.0), distance, error, motion, radius)
        expected = bound(limits, distance, error, motion, radius)
        assert got >= expected - 1.5 * limits.period - 0.02 * expected


def test_limits_that_are_broken_already_are_come_back_to_at_full_rate():
    assert bound(PLAIN._replace(top=0.3), 1.0, 0.0, (0.9, 0.0)) > bound(PLAIN, 1.0, 0.0, (0.9, 0.0))
    assert math.isfinite(bound(PLAIN._replace(turn=0.5, wheel=0.2), 1.0, 2.0, (0.9, -3.0)))


def test_the_door_adds_the_dead_time_in_which_the_motion_goes_on():
    p = cart(dead_time=0.5)
    assert least_travel_time(p, (0, 0, 0), (0.05, 0), 0.1) == 0.0
    expected = least_travel_time(cart(dead_time=0.0), (0.2, 0.0, 0.1), (3.0, 1.0), 0.1, motion=(0.4, 0.2))
    assert least_travel_time(p, (0, 0, 0), (3.0, 1.0), 0.1, motion=(0.4, 0.2)) == pytest.approx(expected + 0.5, abs=0.051)
    moved = arc((1.0, 2.0, 3.0), (0.4, 0.2), 0.5)
    expected = 0.5 + least_travel_time(cart(dead_time=0.0), moved, (3.0, 1.0), 0.1, motion=(0.4, 0.2))
    assert least_travel_time(p, (1.0, 2.0, 3.0), (3.0, 1.0), 0.1, motion=(0.4, 0.2)) == expected


def test_the_door_passes_every_number_on_in_its_place():
    rng = np.random.default_rng(11)
    for _ in range(50):
        robot = draw(rng)
        p, (x, y, heading) = robot.platform, draw_start(rng, robot)
        limits = Limits(
            p.speed_limit,
            p.turn_rate_limit,
            p.wheel_speed_limit,
            p.track_width / 2.0,
            p.acceleration,
            p.braking,
            p.turn_acceleration,
            p.period,
        )
        error = math.remainder(math.atan2(-y, -x) - heading, 2.0 * PI)
        expected = p.dead_time + bound(limits, math.hypot(x, y), error, radius=robot.capture_radius)
        assert least_travel_time(p, (x, y, heading), (0, 0), robot.capture_radius) == pytest.approx(expected, abs=1.001 * p.period)


BAD_CALLS = [
    (
        lambda: least_travel_time(cart(), (0, 0, 0), (1, 0), 0),
        "capture_radius=0 m must be > 0; give the radius of the disc in which to stop",
    ),
    (
        lambda: least_travel_time(cart(), (0, 0, 0), (1, 0), 0.1, motion=(-0.1, 0)),
        "motion[0]=-0.1 m/s must be >= 0; the bound is for drives forwards; ask again once it stands",
    ),
    (lambda: least_travel_time(cart(), (0, 0, math.inf), (1, 0), 0.1), "pose[2]=inf rad must be finite; give x, y and heading"),
    (lambda: least_travel_time(cart(), (0, 0, 0), (math.inf, 0), 0.1), "goal[0]=inf m must be finite; give x and y"),
]


@pytest.mark.parametrize(("call", "expected"), BAD_CALLS, ids=[text.split(" ")[0] for _, text in BAD_CALLS])
def test_a_wrong_argument_becomes_a_sentence(call, expected):
    with pytest.raises(ValueError) as caught:
        call()
    assert str(caught.value) == expected


@pytest.mark.skipif(not compiled.ON, reason="without the compiler the kernels are plain Python already")
def test_compiled_and_plain_python_give_the_same_bits():
    code = (
        "import sys; sys.path.insert(0, sys.argv[1]); from test_travel_time import bound, cases; "
        "print([bound(l, d, e, m, r, t).hex() for l, d, e, m, r in cases(count, 12)[:12] for t in (False, True)])"
    )

    def said(count, **extra):
        command = [sys.executable, "-c", code.replace("count", str(count)), os.path.dirname(__file__)]
        run = subprocess.run(command, env=os.environ | extra, capture_output=True, text=True, timeout=120, check=True)
        return run.stdout

    assert said(12) == said(600, NUMBA_DISABLE_JIT="1")
