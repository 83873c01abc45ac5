"""The promises of a single step, for every robot, measurement and state that Hypothesis finds. One sentence, one test.

Tolerances: a command follows from the heading error by the gain, and from distances by at most (braking * way)^-1/2; numbers of
size s carry a rounding of s * 2^-52, and a few hundred of those are allowed. The law's switching surfaces are where the goal is
exactly behind (either side is right) and where braking begins; the tests of frames stay away from them by their inputs: goals
farther than any braking needs, and headings away from half a turn.
"""

from __future__ import annotations

import dataclasses
import math

import numpy as np
from hypothesis import assume, example, given, settings
from hypothesis import strategies as st

from robots import draw
from steerkit import Causes, Controller, Measurement, Phase, compiled
from steerkit.approach import AHEAD
from steerkit.controller import numbers

FEW = settings(max_examples=300 if compiled.ON else 60, deadline=None, derandomize=True)
PI = math.pi


def pool(count: int):
    rng = np.random.default_rng(2026)
    made = []
    for i in range(count):
        robot = draw(rng)
        platform = robot.platform
        if i % 6 > 3:
            band = min(0.03, 0.1 * platform.top_speed, 0.1 * platform.top_turn_rate * platform.track_width)
            platform = dataclasses.replace(platform, smallest_wheel_speed=band, wheel_speed_resolution=0.3 * band)
        made.append(Controller(platform, capture_radius=robot.capture_radius, constant_speed=bool(i % 2)))
    return made


POOL = pool(24)
controllers = st.sampled_from(POOL)
anything = st.one_of(st.floats(), st.sampled_from([math.nan, math.inf, -math.inf, 1e308, -1e308, 5e-324, -0.0, PI, -PI]))
shares = st.floats(-1.0, 1.0)
lengths = st.floats(-50.0, 50.0)
angles = st.floats(-PI, PI)


def motion_of(controller, forward, turning):
    """Return a motion within the limits, shrunk along its curve into what the wheels can do."""
    p = controller.platform
    v, w = abs(forward) * p.top_speed, turning * p.turn_rate_limit
    share = min(1.0, p.wheel_speed_limit / max(1e-9, v + abs(w) * p.track_width / 2.0))
    return share * v, share * w


def jump(p):
    """Return how much a wheel may be off the ramps, m/s: the dead band and a step of the grid (`wheel_grid`)."""
    return max(p.slowest_wheel_speed, p.wheel_speed_resolution) + p.wheel_speed_resolution


def far_goal(controller, bearing, extra):
    """Return a goal too far away for braking to have begun, whatever the motion."""
    p, s = controller.platform, controller.settings
    least = 2.0 * (p.top_speed**2 / p.braking + p.top_speed * (p.dead_time + p.motor_lag + 2.0 * p.period)) + 3.0 * s.capture_radius
    return (least + extra) * math.cos(bearing), (least + extra) * math.sin(bearing)


def step_once(controller, pose, goal, motion=(0.0, 0.0), time=0.0, **fields):
    return controller.step(controller.start(time, motion), Measurement(time, pose, goal, **fields))


def close(got, expected, tolerance):
    return all(abs(a - b) <= tolerance for a, b in zip(got, expected, strict=True))


@FEW
@given(
    controllers,
    st.floats(-1e9, 1e9),
    st.floats(-1e9, 1e9),
    st.floats(-1e6 * 2 * PI, 1e6 * 2 * PI),
    st.floats(-1e9, 1e9),
    st.floats(-1e9, 1e9),
    st.floats(-1e9, 1e9),
    shares,
    shares,
)
def test_every_finite_measurement_gives_a_finite_command(controller, x, y, heading, goal_x, goal_y, time, forward, turning):
    decision = step_once(controller, (x, y, heading), (goal_x, goal_y), motion_of(controller, forward, turning), time)
    assert all(map(math.isfinite, decision.command))
    assert decision.phase in (Phase.DRIVING, Phase.ARRIVED)


@FEW
@given(controllers, st.lists(anything, min_size=16, max_size=16), shares, shares, st.integers(0, 3))
def test_any_floats_at_all_give_a_command_within_the_limits(controller, fields, forward, turning, steps):
    motion = motion_of(controller, forward, turning)
    memory = controller.start(0.0, motion)
    p = controller.platform
    for k in range(steps):
        memory = controller.step(memory, Measurement(k * p.period, (0.0, 0.0, 0.0), (3.0, 1.0))).memory
    time, x, y, heading, pose_time, goal_x, goal_y, frame, speed, turn_rate, limit, hold, applied_v, applied_w, *then = fields
    measurement = Measurement(
        time, (x, y, heading), (goal_x, goal_y), pose_time, frame, speed, turn_rate, limit, hold, (applied_v, applied_w), then
    )
    before = memory.command
    decision = controller.step(memory, measurement)
    v, w = decision.command.speed, decision.command.turn_rate
    assert math.isfinite(v)
    assert math.isfinite(w)
    if Causes.APPLIED_BY_OTHERS not in decision.causes:
        slack = 1e-9
        assert -slack <= v <= max(p.top_speed, abs(before.speed)) + slack
        assert abs(w) <= p.turn_rate_limit + slack
        assert abs(v) + abs(w) * p.track_width / 2.0 <= p.wheel_speed_limit + slack
        off = slack + 2.0 * jump(p)
        assert -p.braking * p.period - off <= v - before.speed <= p.acceleration * p.period + off
        assert abs(w - before.turn_rate) <= p.turn_acceleration * p.period + 2.0 * off / p.track_width


@FEW
@given(controllers, lengths, lengths, angles, st.integers(-1000, 1000), angles, st.floats(0.0, 20.0), shares, shares)
@example(POOL[0], 0.0, 0.0, 3.0, 1, 0.0, 0.0, 0.5, 0.5)
def test_whole_turns_change_nothing(controller, x, y, heading, turns, bearing, extra, forward, turning):
    goal = far_goal(controller, bearing, extra)
    motion = motion_of(controller, forward, turning)
    expected = step_once(controller, (x, y, heading), (x + goal[0], y + goal[1]), motion)
    error = expected.report.heading_error
    assume(abs(error) < PI - 1e-6)
    assume(abs(abs(error) - AHEAD) > 1e-6)
    got = step_once(controller, (x, y, heading + turns * 2.0 * PI), (x + goal[0], y + goal[1]), motion)
    assert close(got.command, expected.command, 1e-9)
    assert got.phase == expected.phase


@FEW
@given(controllers, angles, angles, lengths, lengths, angles, st.floats(0.0, 20.0), shares, shares)
def test_turning_and_shifting_the_world_changes_nothing(
    controller, heading, turn, shift_x, shift_y, bearing, extra, forward, turning
):
    goal = far_goal(controller, bearing, extra)
    motion = motion_of(controller, forward, turning)
    expected = step_once(controller, (0.0, 0.0, heading), goal, motion)
    error = expected.report.heading_error
    assume(abs(error) < PI - 1e-6)
    assume(abs(abs(error) - AHEAD) > 1e-6)
    c, s = math.cos(turn), math.sin(turn)
    there = (shift_x + c * goal[0] - s * goal[1], shift_y + s * goal[0] + c * goal[1])
    got = step_once(controller, (shift_x, shift_y, heading + turn), there, motion)
    assert close(got.command, expected.command, 1e-9)
    assert close([got.report.heading_error, got.report.distance], [error, expected.report.distance], 1e-9)


def scaled(controller, c):
    """Return the same robot and task, every length `c` times as long."""
    p = controller.platform
    longer = {
        name: c * getattr(p, name)
        for name in (
            *("radius", "track_width", "wheel_speed_limit", "speed_limit", "acceleration", "braking", "position_noise"),
            *("smallest_wheel_speed", "wheel_speed_resolution"),
        )
    }
    law = {"constant_speed": controller.window is not None}
    return Controller(dataclasses.replace(p, **longer), capture_radius=c * controller.capture_radius, **law)


SCALED = [(one, scaled(one, 2.0)) for one in POOL]


@FEW
@given(st.sampled_from(SCALED), lengths, lengths, angles, lengths, lengths, shares, shares)
def test_all_lengths_doubled_double_the_speed_and_keep_the_turn_rate(pair, x, y, heading, goal_x, goal_y, forward, turning):
    """Dimensional analysis (Buckingham 1914, from memory): no length is hidden in the laws. Powers of two scale exactly."""
    small, large = pair
    assert large.speed == 2.0 * small.speed
    assert large.gain == small.gain
    v, w = motion_of(small, forward, turning)
    here = step_once(small, (x, y, heading), (goal_x, goal_y), (v, w))
    there = step_once(large, (2.0 * x, 2.0 * y, heading), (2.0 * goal_x, 2.0 * goal_y), (2.0 * v, w))
    assert close(there.command, [2.0 * one for one in here.command[:3]] + [here.command.turn_rate], 1e-12)
    assert there.phase == here.phase


@FEW
@given(controllers, lengths, lengths, angles, lengths, lengths, shares, shares)
def test_the_mirrored_world_gives_the_mirrored_command(controller, x, y, heading, goal_x, goal_y, forward, turning):
    v, w = motion_of(controller, forward, turning)
    here = step_once(controller, (x, y, heading), (goal_x, goal_y), (v, w))
    assume(not (here.report.heading_error == here.report.heading_error and abs(here.report.heading_error) > PI - 1e-9))
    there = step_once(controller, (x, -y, -heading), (goal_x, -goal_y), (v, -w))
    expected = (here.command.right, here.command.left, here.command.speed, -here.command.turn_rate)
    assert close(there.command, expected, 1e-12)
    assert (there.phase, there.causes) == (here.phase, here.causes)


@FEW
@given(controllers, lengths, lengths, angles, st.floats(1e-6, PI - 1e-6), st.sampled_from([-1.0, 1.0]), st.floats(0.0, 20.0))
@example(POOL[0], 0.0, 0.0, PI, 3.0, 1.0, 1.0)
@example(POOL[0], 0.0, 0.0, -3.0, 3.0, -1.0, 1.0)
def test_the_turn_goes_the_short_way_round(controller, x, y, heading, off, side, extra):
    distance = math.hypot(*far_goal(controller, 0.0, extra))
    p, s = controller.platform, controller.settings
    deadband = math.asin(s.capture_radius / distance) + 4.0 * s.settling * p.slowest_wheel_speed / p.track_width
    off = deadband + (PI - deadband) * off / PI
    bearing = heading + side * off
    pose, goal = (x, y, heading), (x + distance * math.cos(bearing), y + distance * math.sin(bearing))
    memory = controller.start(0.0)
    for k in range(1 + 2 * math.ceil(jump(p) / (p.acceleration * p.period))):  # wheels leave their dead band before they turn
        decision = controller.step(memory, Measurement(k * p.period, pose, goal))
        memory = decision.memory
        if decision.command.turn_rate != 0.0:
            break
    assert decision.command.turn_rate * side > 0.0


@FEW
@given(controllers, lengths, lengths, angles, lengths, lengths, shares, shares)
def test_the_same_inputs_give_the_same_bits(controller, x, y, heading, goal_x, goal_y, forward, turning):
    motion = motion_of(controller, forward, turning)
    pose, goal = np.array([x, y, heading]), np.array([goal_x, goal_y])
    kept = pose.copy(), goal.copy()
    twin = Controller(controller.platform, capture_radius=controller.capture_radius, constant_speed=controller.window is not None)
    first = step_once(controller, pose, goal, motion)
    second = step_once(twin, pose, goal, motion)
    assert first.memory.to_bytes() == second.memory.to_bytes()
    assert np.array(first.command).tobytes() == np.array(second.command).tobytes()
    assert np.array_equal(pose, kept[0])
    assert np.array_equal(goal, kept[1])


@FEW
@given(controllers, lengths, lengths, angles, lengths, lengths, shares, shares)
def test_told_to_hold_it_brakes_to_rest_within_the_braking_time_and_stays(
    controller, x, y, heading, goal_x, goal_y, forward, turning
):
    v, w = motion_of(controller, forward, turning)
    p = controller.platform
    memory = controller.start(0.0, (v, w))
    steps = max(math.ceil(v / (p.braking * p.period) - 1e-9), math.ceil(abs(w) / (p.turn_acceleration * p.period) - 1e-9))
    for k in range(steps + 3):
        decision = controller.step(memory, Measurement(k * p.period, (x, y, heading), (goal_x, goal_y), hold=True))
        memory = decision.memory
        assert decision.phase == Phase.HELD
        if k >= steps:
            assert decision.command[2:] == (0.0, 0.0)


SPOILED = st.sampled_from(["pose", "goal", "time", "pose_time", "speed_limit", "hold"])


@FEW
@given(controllers, SPOILED, anything, anything, angles, st.floats(0.1, 20.0), shares, shares)
def test_bad_data_is_never_faster_than_good_data(controller, name, first, second, bearing, distance, forward, turning):
    p = controller.platform
    memory = controller.start(0.0, motion_of(controller, forward, turning))
    pose, goal = (0.0, 0.0, 0.3), (distance * math.cos(bearing), distance * math.sin(bearing))
    memory = controller.step(memory, Measurement(0.0, pose, goal)).memory
    good = Measurement(p.period, pose, goal)
    value = {"pose": (first, second, 0.3), "goal": (first, second)}.get(name, first)
    bad = controller.step(memory, good._replace(**{name: value}))
    trouble = Causes.BAD_POSE | Causes.STALE_POSE | Causes.BAD_GOAL | Causes.BAD_CLOCK | Causes.BAD_FIELD
    if bad.causes & trouble:
        assert bad.command.speed <= max(memory.command.speed, controller.step(memory, good).command.speed) + 1e-12
        assert bad.command.speed <= memory.command.speed + 1e-12 or Causes.BAD_FIELD in bad.causes


@FEW
@given(
    controllers,
    lengths,
    lengths,
    angles,
    angles,
    st.floats(0.0, 20.0),
    shares,
    shares,
    st.floats(-1e-6, 1e-6),
    st.floats(-1e-6, 1e-6),
)
def test_a_small_change_of_the_measurement_makes_a_small_change_of_the_command(
    controller, x, y, heading, bearing, extra, forward, turning, moved, turned
):
    goal = far_goal(controller, bearing, extra)
    motion = motion_of(controller, forward, turning)
    here = step_once(controller, (x, y, heading), (x + goal[0], y + goal[1]), motion)
    error = here.report.heading_error
    assume(abs(error) < PI - 1e-5)
    assume(abs(abs(error) - AHEAD) > 1e-5)
    there = step_once(controller, (x + moved, y, heading + turned), (x + goal[0], y + goal[1]), motion)
    p = controller.platform
    gain = controller.gain + 2.0 * p.top_speed / math.hypot(*goal)  # the turn that keeps a moving robot's bearing is fed forward
    change = gain * (abs(turned) + abs(moved) / math.hypot(*goal) * 2.0) + 4.0 * jump(p) / p.track_width
    # the wheel limit turns a change of turn rate into one of speed, by half the track width
    assert abs(there.command.turn_rate - here.command.turn_rate) <= 1.01 * change + 1e-9
    assert abs(there.command.speed - here.command.speed) <= 1.01 * change * (p.track_width / 2.0 + p.top_speed) + 1e-9


@FEW
@given(controllers, st.lists(st.one_of(st.floats(-0.5, 3.0), anything), min_size=1, max_size=12), angles, shares, shares)
def test_odd_time_stamps_neither_raise_nor_wind_anything_up(controller, gaps, bearing, forward, turning):
    p = controller.platform
    integrating = controller.unchecked(integral_time=1.0)
    memory, time = integrating.start(0.0, motion_of(controller, forward, turning)), 0.0
    goal = (20.0 * math.cos(bearing), 20.0 * math.sin(bearing))
    for gap in gaps:
        time += gap * p.period
        decision = integrating.step(memory, Measurement(time, (0.0, 0.0, 0.0), goal))
        before, memory = memory, decision.memory
        assert all(map(math.isfinite, decision.command))
        assert abs(memory.row[12] - before.row[12]) <= PI * p.period * (1.0 + 1e-9) or memory.row[12] == 0.0
        most = p.turn_acceleration * p.period * (1.0 + 1e-9) + 4.0 * jump(p) / p.track_width
        assert abs(decision.command.turn_rate - before.command.turn_rate) <= most


@FEW
@given(
    st.recursive(st.one_of(st.none(), st.booleans(), st.floats(), st.text(), st.binary(), st.integers()), st.lists, max_leaves=6)
)
def test_anything_becomes_seventeen_numbers(thing):
    for name in Measurement._fields:
        found = numbers(Measurement(0.0)._replace(**{name: thing}))
        assert len(found) == 17
        assert all(type(one) is float for one in found)
    assert numbers(thing)[-1] == 1.0
