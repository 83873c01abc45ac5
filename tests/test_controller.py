"""The step: what it answers to good data, to bad data and to what others do."""

from __future__ import annotations

import math
import pickle

import numpy as np
import pytest

from closed_loop import drive
from robots import cart
from steerkit import Causes, Controller, Frame, Measurement, Memory, Phase, Platform, compiled
from steerkit.kinematics import arc, sighting, to_robot
from steerkit.signals import HEAD

NAN, INF = math.nan, math.inf
T = 0.05


def controller(capture_radius=0.2, platform=None, **changes):
    return Controller(platform or cart(), capture_radius=capture_radius, **changes)


class Robot:
    """A robot with dead time of whole periods, for tests of single events: `go` makes a step and moves it."""

    def __init__(self, steering, pose=(0.0, 0.0, 0.0), goal=(5.0, 0.0), motion=(0.0, 0.0), delay=2):
        self.steering, self.pose, self.goal, self.time = steering, pose, goal, 0.0
        self.memory = steering.start(0.0, motion)
        self.sent = [motion] * delay
        self.motion = motion

    def go(self, steps=1, **changes):
        """Return the last decision of `steps` steps; `changes` override fields of the measurement, functions get the robot."""
        for _ in range(steps):
            fields = {"time": self.time, "pose": self.pose, "goal": self.goal}
            fields |= {name: value(self) if callable(value) else value for name, value in changes.items()}
            decision = self.steering.step(self.memory, Measurement(**fields))
            self.memory = decision.memory
            self.sent.append((decision.command.speed, decision.command.turn_rate))
            self.motion = self.sent.pop(0)
            self.pose = tuple(arc(self.pose, self.motion, T))
            self.time += T
        return decision


def cruising(**changes):
    """Return a robot at full speed toward a goal straight ahead."""
    robot = Robot(controller(platform=cart(dead_time=0.1), **changes), goal=(50.0, 0.0))
    robot.go(60)
    assert robot.motion[0] == pytest.approx(robot.steering.speed)
    return robot


def test_the_same_inputs_give_the_same_bits_and_are_not_changed():
    robot = cruising()
    before = robot.memory.to_bytes()
    measurement = Measurement(robot.time, robot.pose, (40.0, 3.0))
    first, second = (robot.steering.step(robot.memory, measurement) for _ in range(2))
    assert first == second
    assert first.memory.to_bytes() == second.memory.to_bytes()
    assert robot.memory.to_bytes() == before
    assert measurement == Measurement(robot.time, robot.pose, (40.0, 3.0))


def test_memory_is_read_only_equal_by_bytes_and_survives_storage():
    robot = cruising()
    with pytest.raises(ValueError, match="read-only"):
        robot.memory.row[0] = 1.0
    stored = Memory.from_bytes(robot.memory.to_bytes())
    assert stored == robot.memory
    assert hash(stored) == hash(robot.memory)
    assert pickle.loads(pickle.dumps(robot.memory)) == robot.memory
    assert stored != robot.steering.start(0.0)
    measurement = Measurement(robot.time, robot.pose, robot.goal)
    assert robot.steering.step(stored, measurement) == robot.steering.step(robot.memory, measurement)
    assert robot.memory.command == robot.memory.under_way[0, 1:].tolist() or robot.memory.command == tuple(
        robot.memory.under_way[0, 1:]
    )
    assert robot.memory.time == pytest.approx(robot.time - T)


def test_a_decision_prints_readably():
    decision = cruising().go(goal=(0.0, 0.0))
    text = str(decision)
    assert text.startswith("driving: +0.")
    assert "goal" in text
    assert "turn acceleration limit" in text
    assert Causes.NONE.words() == "nothing to report"
    held = str(cruising().go(pose=(NAN, 0.0, 0.0), goal=None))
    assert held.startswith("held: +0.")
    assert "nan" not in held
    assert "Unguarded" in str(cruising().steering)


@pytest.mark.parametrize("goal", [(2.0, 0.0), (-2.0, 0.0), (0.1, 0.4), (-0.3, -0.3), (5.0, 5.0), (0.0, 0.5)])
def test_it_arrives_and_stays(goal):
    robot = Robot(controller(platform=cart(dead_time=0.1)), goal=goal)
    for _ in range(2000):
        if robot.go().phase == Phase.ARRIVED:
            break
    assert math.dist(robot.pose[:2], goal) <= 0.2
    stands = robot.pose
    decision = robot.go(100)
    assert decision.phase == Phase.ARRIVED
    assert decision.command == (0.0, 0.0, 0.0, 0.0)
    assert robot.pose == stands


def test_arrived_means_at_rest_not_passing():
    robot = Robot(controller(platform=cart(dead_time=0.1)), goal=(2.0, 0.0))
    while (decision := robot.go()).phase != Phase.ARRIVED:
        pass
    assert robot.motion == (0.0, 0.0)
    assert decision.report.distance <= 0.2
    log = drive(controller(platform=cart(motor_lag=0.3)), (-2.0, 0.0, 0.0), steps=2000, until=2)
    assert log[-1, 9] < 0.01


def test_a_goal_behind_is_turned_to_and_a_new_goal_is_taken_at_once():
    robot = cruising()
    ahead = robot.go()
    behind = robot.go(goal=(robot.pose[0] - 3.0, 0.5))
    assert ahead.command.turn_rate == 0.0
    assert behind.command.turn_rate == pytest.approx(5.0 * T)  # one period of the turn acceleration, to the left
    assert behind.report.heading_error > 2.5


def test_commands_keep_the_curve_and_the_wheels_their_limit():
    robot = Robot(controller(0.3, cart(wheel_speed_limit=0.9)), goal=(0.0, 4.0))
    sides = []
    for _ in range(80):
        c = robot.go().command
        sides.append(max(abs(c.left), abs(c.right)))
        assert (c.left, c.right) == pytest.approx((c.speed - 0.21 * c.turn_rate, c.speed + 0.21 * c.turn_rate))
    assert max(sides) <= 0.9 * (1.0 + 1e-12)
    assert max(sides) == pytest.approx(0.9)


# Bad data: a stop within the braking limit, the cause told, and recovery.

BAD = {
    "pose-nan": ({"pose": (NAN, NAN, NAN)}, Causes.BAD_POSE),
    "pose-none": ({"pose": None}, Causes.BAD_POSE),
    "pose-infinite": ({"pose": (INF, 0.0, 0.0)}, Causes.BAD_POSE),
    "pose-too-far": ({"pose": (1e300, 0.0, 0.0)}, Causes.BAD_POSE),
    "pose-of-two": ({"pose": (1.0, 2.0)}, Causes.BAD_POSE),
    "pose-text": ({"pose": ("1", "2", "3")}, Causes.BAD_POSE),
    "pose-string": ({"pose": "abc"}, Causes.BAD_POSE),
    "pose-from-the-future": ({"pose_time": lambda robot: robot.time + 1.0}, Causes.BAD_POSE),
    "pose-old": ({"pose_time": lambda robot: robot.time - 1.0}, Causes.STALE_POSE),
    "goal-nan": ({"goal": (NAN, 0.0)}, Causes.BAD_GOAL),
    "goal-none": ({"goal": None}, Causes.BAD_GOAL),
    "goal-infinite": ({"goal": (0.0, -INF)}, Causes.BAD_GOAL),
    "goal-in-no-frame": ({"goal_frame": 7}, Causes.BAD_GOAL),
    "goal-words": ({"goal": "here"}, Causes.BAD_GOAL),
    "time-nan": ({"time": NAN}, Causes.BAD_CLOCK),
    "time-none": ({"time": None}, Causes.BAD_CLOCK),
    "time-stands-still": ({"time": lambda robot: robot.memory.time}, Causes.BAD_CLOCK),
    "time-runs-back": ({"time": lambda robot: robot.memory.time - 3.0}, Causes.BAD_CLOCK),
    "time-leaps": ({"time": lambda robot: robot.memory.time + 100.0}, Causes.BAD_CLOCK),
    "limit-in-words": ({"speed_limit": "fast"}, Causes.BAD_FIELD),
    "limit-negative": ({"speed_limit": -1.0}, Causes.BAD_FIELD),
    "hold-in-words": ({"hold": "please"}, Causes.BAD_FIELD),
}


@pytest.mark.parametrize(("fields", "cause"), BAD.values(), ids=BAD.keys())
def test_bad_data_is_told_and_never_faster(fields, cause):
    robot = cruising()
    speed = robot.motion[0]
    decision = robot.go(**fields)
    assert cause in decision.causes
    assert decision.command.speed <= speed * (1.0 + 1e-12)
    assert decision.command.speed >= speed - 1.2 * T * (1.0 + 1e-9)


@pytest.mark.parametrize(("fields", "cause"), BAD.values(), ids=BAD.keys())
def test_bad_data_that_stays_stops_the_robot_and_good_data_sends_it_on(fields, cause):
    robot = cruising()
    braking_time = robot.motion[0] / 1.2
    patience = robot.steering.settings.stale_after  # a pose that fails to come is carried as long as it is fresh
    decision = robot.go(math.ceil((braking_time + patience) / T) + 2, **fields)
    assert decision.command.speed == 0.0
    assert decision.command.turn_rate == 0.0
    assert cause in decision.causes or Causes.STALE_POSE in decision.causes
    robot.go(200)
    assert robot.motion[0] > 0.3
    assert robot.go().causes == Causes.NONE


@pytest.mark.parametrize("name", ["goal-nan", "time-nan", "hold-in-words", "limit-in-words"])
def test_a_stop_for_bad_data_uses_the_whole_braking(name):
    robot = cruising()
    speed = robot.motion[0]
    decision = robot.go(**BAD[name][0])
    assert decision.command.speed == pytest.approx(speed - 1.2 * T)
    assert decision.phase == (Phase.DRIVING if "limit" in name else Phase.HELD)


def test_a_missing_pose_is_carried_until_it_is_stale():
    robot = cruising()
    decisions = [robot.go(pose=None) for _ in range(12)]
    fresh = [Causes.STALE_POSE not in one.causes for one in decisions]
    assert fresh.count(True) == round(robot.steering.settings.stale_after / T)  # dead time and three periods
    assert all(one.phase == (Phase.DRIVING if ok else Phase.HELD) for one, ok in zip(decisions, fresh, strict=True))
    assert decisions[2].report.pose[0] == pytest.approx(robot.pose[0] - 9 * T * robot.steering.speed, abs=0.05)


def test_numbers_of_all_kinds_are_taken():
    robot = cruising()
    expected = robot.steering.step(robot.memory, Measurement(robot.time, (1.0, 2.0, 0.5), (4.0, 3.0), hold=False))
    row = np.array([[1.0, 9.0], [2.0, 9.0], [0.5, 9.0]])
    row.setflags(write=False)
    kinds = [
        [1, 2, 0.5],
        np.array([1.0, 2.0, 0.5], np.float32),
        row[:, 0],
        (np.float64(1.0), np.float32(2.0), 0.5),
        np.array([[1.0], [2], [0.5]]),
    ]
    for pose in kinds:
        for goal in ([4, 3], np.array([4, 3]), np.array([4.0, 3.0], np.float32)):
            got = robot.steering.step(
                robot.memory, Measurement(np.float64(robot.time), pose, goal, hold=np.bool_(False), speed_limit=None)
            )
            assert got == expected


class Hostile:
    def __float__(self):
        raise RuntimeError("no")

    def __iter__(self):
        raise RuntimeError("no")

    __array__ = __len__ = __iter__


@pytest.mark.parametrize(
    "thing", [Hostile(), object(), {}, "x", b"1", 1j, 10**400, [], [[]], np.array(["a"]), lambda: 1, NAN, -INF]
)
def test_anything_at_all_may_stand_in_any_field(thing):
    robot = cruising()
    for name in Measurement._fields:
        for memory in (robot.memory, robot.steering.start(0.0)):
            fields = {"time": robot.time, "pose": robot.pose, "goal": robot.goal} | {name: thing}
            decision = robot.steering.step(memory, Measurement(**fields))
            assert all(map(math.isfinite, decision.command))
    decision = robot.steering.step(robot.memory, thing)
    assert decision.phase == Phase.HELD


@pytest.mark.parametrize(
    "memory", [None, 3, "x", controller(platform=cart(dead_time=0.3)).start(0.0), Memory(np.full(HEAD + 3 * 13, NAN))]
)
def test_a_memory_that_is_not_its_own_is_told_and_begun_anew(memory):
    steering = controller()
    decision = steering.step(memory, Measurement(1.0, (0.0, 0.0, 0.0), (2.0, 0.0)))
    assert decision.causes == Causes.BAD_MEMORY
    assert decision.phase == Phase.HELD
    assert decision.command == (0.0, 0.0, 0.0, 0.0)
    after = steering.step(decision.memory, Measurement(1.0 + T, (0.0, 0.0, 0.0), (2.0, 0.0)))
    assert after.phase == Phase.DRIVING
    assert after.command.speed > 0.0


def test_every_spoiled_number_of_a_memory_is_survived():
    robot = cruising()
    for place in range(len(robot.memory.row)):
        for value in (NAN, INF, -INF, 1e300, -1e300):
            row = robot.memory.row.copy()
            row[place] = value
            decision = robot.steering.step(Memory(row), Measurement(robot.time, robot.pose, robot.goal))
            assert all(map(math.isfinite, decision.command))
            assert np.isfinite(decision.memory.row[HEAD:]).all()


# Jumps


def test_a_pose_jump_is_told_and_answered_within_the_limits():
    robot = cruising()
    before = robot.motion
    x, y, heading = robot.pose
    decision = robot.go(pose=(x, y + 3.0, heading))
    assert Causes.POSE_JUMPED in decision.causes
    assert decision.phase == Phase.DRIVING
    assert abs(decision.command.turn_rate - before[1]) <= 5.0 * T * (1 + 1e-12)
    assert decision.report.heading_error < -0.05
    assert Causes.POSE_JUMPED in robot.go().causes  # and back again
    assert Causes.POSE_JUMPED not in robot.go().causes


def test_a_turned_pose_is_a_jump_and_ordinary_driving_is_none():
    robot = cruising()
    x, y, heading = robot.pose
    assert Causes.POSE_JUMPED in robot.go(pose=(x, y, heading + 1.0)).causes
    robot = Robot(controller(platform=cart(dead_time=0.1)), goal=(-3.0, 1.0))
    assert all(Causes.POSE_JUMPED not in robot.go().causes for _ in range(300))


def test_noise_that_is_declared_is_no_jump():
    rng = np.random.default_rng(1)
    noisy = cart(dead_time=0.1, position_noise=0.02, heading_noise=0.02)
    robot = Robot(Controller(noisy, capture_radius=0.3), goal=(6.0, 2.0))
    jumps = 0
    for _ in range(1000):
        decision = robot.go(pose=lambda r: tuple(np.array(r.pose) + rng.normal(0.0, 0.02, 3)))
        jumps += Causes.POSE_JUMPED in decision.causes
    assert jumps == 0
    assert decision.phase == Phase.ARRIVED


# Slow and late poses


def slow_poses(delay_steps=3, every=4):
    """Return a function giving each step the pose and time of a 5 Hz localiser, 150 ms old when it comes."""
    history = []

    def sample(robot):
        history.append((robot.time, robot.pose))
        taken = max(0, (len(history) - 1) // every * every - delay_steps)
        return history[taken]

    return sample


@pytest.mark.parametrize("goal", [(4.0, 0.0), (-3.0, 0.3), (2.0, 2.5)])
def test_a_pose_at_5_hz_150_ms_old_is_carried_from_its_own_time(goal):
    steering = controller(platform=cart(dead_time=0.1), stale_after=0.45)
    exact, slow = Robot(steering, goal=goal), Robot(steering, goal=goal)
    sample = slow_poses()
    for k in range(400):
        exact.go()
        taken, pose = sample(slow)
        decision = slow.go(pose=pose, pose_time=taken)
        assert Causes.BAD_CLOCK not in decision.causes
        # carried exactly, the old pose says the same as the new one
        assert slow.pose == pytest.approx(exact.pose, abs=1e-9), k
    assert decision.phase == Phase.ARRIVED


def test_an_old_pose_taken_for_a_new_one_would_swing():
    """The fault that the test above must catch: the same poses without their time."""
    steering = controller(platform=cart(dead_time=0.1), stale_after=0.45)
    exact, slow = Robot(steering, goal=(-3.0, 0.3)), Robot(steering, goal=(-3.0, 0.3))
    sample, apart = slow_poses(), 0.0
    for _ in range(200):
        exact.go()
        slow.go(pose=sample(slow)[1])
        apart = max(apart, math.dist(slow.pose[:2], exact.pose[:2]))
    assert apart > 0.05


# Others at the wheel


def test_start_accepts_a_robot_already_moving():
    robot = Robot(controller(platform=cart(dead_time=0.1)), goal=(5.0, 0.0), motion=(0.5, -0.4))
    decision = robot.go()
    assert decision.command.speed == pytest.approx(0.5 + 0.8 * T)
    assert abs(decision.command.turn_rate + 0.4) <= 5.0 * T * (1 + 1e-12)
    # the prediction knows of the motion: 0.1 s at 0.5 m/s and -0.4 rad/s
    assert decision.report.heading_error == pytest.approx(0.04 + math.atan2(0.001, 4.95), abs=1e-3)


def test_hold_brakes_to_rest_and_stays_until_it_ends():
    robot = cruising()
    steps = math.ceil(robot.motion[0] / (1.2 * T))
    held = [robot.go(hold=True) for _ in range(steps + 20)]
    assert all(one.phase == Phase.HELD and Causes.TOLD_TO_HOLD in one.causes for one in held)
    assert held[steps - 1].command == (0.0, 0.0, 0.0, 0.0)
    assert held[-1].command == (0.0, 0.0, 0.0, 0.0)
    assert robot.go().command.speed == pytest.approx(0.8 * T)


def test_a_stop_goes_along_the_curve():
    robot = Robot(controller(platform=cart(dead_time=0.1, braking=0.5)), goal=(0.0, 3.0))
    robot.go(12)
    v, w = robot.memory.command
    decision = robot.go(hold=True)
    assert w != 0.0
    assert decision.command.turn_rate / decision.command.speed == pytest.approx(w / v)


def test_a_limit_of_the_step_slows_along_the_curve():
    robot = cruising()
    decision = robot.go(40, speed_limit=0.1)
    assert decision.command.speed == pytest.approx(0.1)
    assert Causes.SPEED_LIMIT in decision.causes
    assert robot.go(40, speed_limit=0.0).command.speed == 0.0
    assert robot.go(40, speed_limit=NAN).command.speed == pytest.approx(robot.steering.speed)


def test_what_others_gave_the_wheels_replaces_what_we_sent():
    robot = cruising()
    decision = robot.go(applied=(0.1, 0.3))
    assert Causes.APPLIED_BY_OTHERS in decision.causes
    assert decision.command.speed == pytest.approx(0.1 + 0.8 * T)
    assert decision.memory.under_way[1, 1:].tolist() == [0.1, 0.3]


def test_a_motion_beyond_the_limits_comes_back_at_the_full_rate():
    robot = cruising()
    decision = robot.go(applied=(1.5, 2.8))
    assert decision.command.speed == pytest.approx(1.5 - 1.2 * T)
    assert decision.command.turn_rate == pytest.approx(2.8 - 5.0 * T)


@pytest.mark.parametrize(
    "applied", [(300.0, 0.0), (0.0, 90.0), (-5.0, 30.0), (2.3, 0.0), (math.inf, 0.0), (0.1, NAN), ("fast", 0.0)]
)
def test_a_motion_that_these_wheels_cannot_have_been_given_is_told_and_left_out(applied):
    robot = cruising()
    expected = robot.steering.step(robot.memory, Measurement(robot.time, robot.pose, robot.goal))
    decision = robot.go(applied=applied)
    assert Causes.BAD_FIELD in decision.causes
    assert Causes.APPLIED_BY_OTHERS not in decision.causes
    assert decision.command == expected.command


@pytest.mark.parametrize("applied", [(-0.3, 0.0), (-0.3, 0.5), (0.0, -1.0), (-1e-9, 0.0)])
@pytest.mark.parametrize("goal", [(-2.0, 0.1), (0.05, 0.0), (2.0, 0.0)])
def test_a_robot_that_was_driven_backwards_brakes_and_drives_on(applied, goal):
    robot = Robot(controller(platform=cart(dead_time=0.1)), goal=goal)
    decision = robot.go(applied=applied)
    assert 0.0 <= decision.command.speed - applied[0] <= max(1.2, 0.8) * T * (1.0 + 1e-9)
    assert robot.go(400).phase == Phase.ARRIVED


def test_a_robot_measured_rolling_has_not_arrived():
    robot = Robot(controller(platform=cart(dead_time=0.1)), goal=(0.1, 0.0))
    assert robot.go(3).phase == Phase.ARRIVED
    assert robot.go(speed=0.8).phase == Phase.DRIVING
    assert robot.go(turn_rate=0.1).phase == Phase.DRIVING
    decision = robot.go(speed=0.0, turn_rate=0.0)
    assert decision.phase == Phase.ARRIVED
    assert decision.command == (0.0, 0.0, 0.0, 0.0)


def test_noise_does_not_move_a_robot_that_has_arrived_and_a_nudged_goal_does():
    steering = Controller(cart(position_noise=0.0375, dead_time=0.0), capture_radius=0.3)
    robot = Robot(steering, goal=(0.2, 0.0), delay=0)
    assert robot.go(2).phase == Phase.ARRIVED
    assert robot.go(pose=(-0.2, 0.0, 0.0)).phase == Phase.ARRIVED  # four standard deviations more than the disc
    assert robot.go(goal=(0.29, 0.0)).phase == Phase.ARRIVED
    decision = robot.go(5, goal=(0.445, 0.0))
    assert decision.phase == Phase.DRIVING
    assert decision.command.speed > 0.0
    assert robot.go(80, goal=(0.445, 0.0)).phase == Phase.ARRIVED
    assert math.dist(robot.pose[:2], (0.445, 0.0)) <= 0.3


def test_a_hold_does_not_make_a_robot_forget_that_it_has_arrived():
    steering = Controller(cart(position_noise=0.0375), capture_radius=0.3)
    robot = Robot(steering, goal=(0.2, 0.0))
    assert robot.go(3).phase == Phase.ARRIVED
    assert robot.go(4, hold=True).phase == Phase.HELD
    decision = robot.go(pose=(-0.2, 0.0, 0.0))
    assert decision.phase == Phase.ARRIVED
    assert decision.command.speed == 0.0


def test_a_fast_robot_that_passes_its_goal_comes_back_and_does_not_circle():
    """Weak brakes: the goal is passed at speed. The robot must turn back, not circle at speed until a stop happens to fit."""
    platform = Platform(
        radius=0.1,
        track_width=0.12,
        wheel_speed_limit=1.86,
        speed_limit=1.5,
        turn_rate_limit=6.0,
        acceleration=3.0,
        braking=0.3,
        turn_acceleration=20.0,
        period=0.05,
        dead_time=0.0,
    )
    log = drive(Controller(platform, capture_radius=0.3, constant_speed=True), (-0.32, -0.71, -2.0), steps=1000, until=2)
    assert log[-1, 5] == Phase.ARRIVED
    touched = np.flatnonzero(log[:, 8] <= 0.3)[0]
    assert log[touched, 3] > 1.0
    assert np.all(np.diff(log[touched:, 3]) <= 1e-9)  # from then on it only brakes
    assert np.max(np.hypot(log[touched:, 0], log[touched:, 1])) < 0.7


def test_an_old_pose_does_not_replace_a_newer_one():
    robot = cruising()
    decision = robot.go(pose=(0.0, 0.0, 2.0), pose_time=0.0)
    assert Causes.STALE_POSE in decision.causes
    assert decision.phase == Phase.DRIVING
    assert decision.report.pose[0] == pytest.approx(robot.pose[0] - T * robot.steering.speed)
    assert robot.go(pose=None).phase == Phase.DRIVING


def test_a_pose_time_that_is_no_number_does_not_make_a_pose_fresh():
    steering = controller()
    memory = steering.start(0.0)
    for k in range(20):
        decision = steering.step(memory, Measurement(k * T, (0.0, 0.0, 0.0), (5.0, 0.0), pose_time="-9.0 s"))
        memory = decision.memory
    assert decision.phase == Phase.HELD
    assert Causes.BAD_POSE | Causes.BAD_FIELD in decision.causes


def test_two_steps_within_the_least_time_there_is_are_finite():
    steering = controller()
    decision = steering.step(steering.start(0.0), Measurement(0.0, (0.0, 0.0, 0.0), (2.0, 1.0)))
    decision = steering.step(decision.memory, Measurement(5e-324, (0.0, 0.0, 0.1), (2.0, 1.0)))
    assert all(map(math.isfinite, decision.command))


def test_a_memory_is_its_own_copy_whatever_the_row_looks_like():
    steering = controller()
    start = steering.start(0.0)
    log = np.repeat(start.row, 2)
    memory = Memory(log[::2])
    assert memory == start
    log[:] = 0.0  # still writable, and not shared
    assert memory == start
    assert steering.step(memory, Measurement(0.0, (0.0, 0.0, 0.0), (1.0, 1.0))).phase == Phase.DRIVING


@pytest.mark.parametrize(
    "pose", [b"abc", bytearray(b"abc"), {1.0, 2.0, 3.0}, {1: 0, 2: 0, 3: 0}, (1j, 0, 0), np.zeros(300_000), range(3)]
)
def test_what_only_looks_like_three_numbers_is_no_pose(pose):
    robot = cruising()
    decision = robot.go(pose=pose)
    assert Causes.BAD_POSE | Causes.BAD_FIELD in decision.causes


# Goals seen from the robot


def test_a_goal_in_the_robot_s_frame_is_the_same_goal():
    robot = cruising()
    goal = (robot.pose[0] + 2.0, 1.0)
    expected = robot.steering.step(robot.memory, Measurement(robot.time, robot.pose, goal))
    seen = Measurement(robot.time, robot.pose, to_robot(robot.pose, goal), goal_frame=Frame.ROBOT)
    got = robot.steering.step(robot.memory, seen)
    assert got.command == pytest.approx(expected.command, abs=1e-12)
    assert got.report.goal == pytest.approx(goal)


@pytest.mark.parametrize("goal", [(3.0, 1.0), (-2.0, 0.1), (0.2, -0.6)])
def test_a_camera_alone_is_enough(goal):
    robot = Robot(controller(platform=cart(dead_time=0.1)))

    def seen(robot):
        ahead, left = to_robot(robot.pose, goal)
        return sighting(math.atan2(left, ahead), math.hypot(ahead, left))

    for _ in range(1000):
        decision = robot.go(pose=None, goal=seen, goal_frame=Frame.ROBOT)
        assert not decision.causes & (Causes.BAD_POSE | Causes.STALE_POSE | Causes.POSE_JUMPED)
    assert decision.phase == Phase.ARRIVED
    assert math.dist(robot.pose[:2], goal) <= 0.2


def test_a_stale_sighting_holds():
    robot = cruising()
    decision = robot.go(pose=None, goal=(2.0, 0.0), goal_frame=Frame.ROBOT, pose_time=robot.time - 2.0)
    assert Causes.STALE_POSE in decision.causes
    assert decision.phase == Phase.HELD


# Irregular periods


@pytest.mark.parametrize("kind", ["early", "late", "doubled"])
def test_irregular_periods_change_no_more_than_their_time_allows(kind):
    robot = cruising()
    before = robot.motion
    step = {"early": 0.4 * T, "late": 1.8 * T, "doubled": 1e-6}[kind]
    decision = robot.go(time=lambda r: r.memory.time + step, goal=(0.0, 0.0))
    assert Causes.BAD_CLOCK not in decision.causes
    assert abs(decision.command.turn_rate - before[1]) == pytest.approx(5.0 * min(step, T), rel=1e-6)


def test_a_jittering_loop_arrives():
    rng = np.random.default_rng(5)
    steering = controller()
    memory, pose, time, queue = steering.start(0.0), (0.0, 0.0, 0.0), 0.0, [(-9.0, 0.0, 0.0)]
    for _ in range(600):
        decision = steering.step(memory, Measurement(time, pose, (-2.0, 1.0)))
        memory = decision.memory
        queue.append((time + 0.12, *decision.command[2:]))
        until = time + T * rng.uniform(0.5, 1.5)
        while time < until:  # the motion that acts changes in mid-period
            acting = [one for one in queue if one[0] <= time + 1e-12][-1]
            ends = min([until, *(one[0] for one in queue if one[0] > time + 1e-12)])
            pose, time = tuple(arc(pose, acting[1:], ends - time)), ends
    assert decision.phase == Phase.ARRIVED
    assert math.dist(pose[:2], (-2.0, 1.0)) <= 0.2


# PI and PID


def test_the_integral_takes_out_a_pull_to_one_side_and_does_not_wind_up():
    """Wheels of unequal size: the robot turns 0.05 rad/s too much. P leaves an error, PI takes it out."""
    left = {}
    for name, integral_time in (("P", INF), ("PI", 2.0)):
        steering = controller(0.3, cart(dead_time=0.1), constant_speed=True, speed=0.3, gain=1.0, integral_time=integral_time)
        robot = Robot(steering, goal=(80.0, 0.0))
        for _ in range(700):
            decision = robot.go()
            x, y, heading = robot.pose
            robot.pose = (x, y, heading + 0.05 * T)
        left[name] = decision.report.heading_error
    assert abs(left["P"]) > 0.03
    assert abs(left["PI"]) < 0.003


def test_the_integral_recovers_from_saturation_and_is_reset_by_a_new_goal():
    steering = controller(0.3, cart(dead_time=0.1), constant_speed=True, speed=0.3, gain=1.0, integral_time=1.0)
    robot = Robot(steering, goal=(-40.0, 0.5))
    least = min(robot.go().report.heading_error for _ in range(400))
    # leaving saturation at e = ceiling/gain, nothing wound up, the loop is e'' + e' + e = 0 with e' = -e (derived)
    t = np.linspace(0.0, 10.0, 1001)
    a = math.sqrt(0.75)
    expected = steering.settings.ceiling * np.min(np.exp(-t / 2.0) * (np.cos(a * t) - np.sin(a * t) / (2.0 * a)))
    assert least > expected - 0.05
    assert least < -0.1
    assert abs(robot.memory.row[12]) > 0.0
    decision = robot.go(goal=(0.0, 30.0))
    assert abs(robot.memory.row[12]) <= abs(decision.report.heading_error) * T


def test_the_derivative_gives_no_kick_at_a_new_goal():
    platform = cart(dead_time=0.1, turn_acceleration=900.0, turn_rate_limit=20.0)
    with_d = Controller(platform, capture_radius=0.3, constant_speed=True, speed=0.3, gain=2.0, derivative_time=0.2)
    without = Controller(platform, capture_radius=0.3, constant_speed=True, speed=0.3, gain=2.0)
    wanted = []
    for steering in (with_d, without):
        robot = Robot(steering, goal=(50.0, 0.0))
        robot.go(30)
        wanted.append(robot.go(goal=(40.0, 30.0)).report.wanted.turn_rate)
    assert wanted[0] == pytest.approx(wanted[1], rel=1e-9)


def test_the_derivative_damps():
    platform = cart(dead_time=0.1, turn_acceleration=900.0, turn_rate_limit=20.0)
    rates = []
    for derivative_time in (0.0, 0.2):
        law = {"speed": 0.3, "gain": 2.0, "derivative_time": derivative_time}
        robot = Robot(Controller(platform, capture_radius=0.3, constant_speed=True, **law), goal=(0.0, 50.0))
        rates.append(max(robot.go().command.turn_rate for _ in range(10)))
        robot.go(5)
    assert rates[1] <= rates[0]


# The in-place door


def test_the_in_place_door_gives_the_same_bits():
    robot = cruising()
    steering = robot.steering
    memory, door = steering.start(0.0), steering.in_place(0.0)
    for k in range(200):
        pose, goal = (0.01 * k, 0.02 * math.sin(k), 0.3), (5.0, 1.0 if k < 100 else -1.0)
        decision = steering.step(memory, Measurement(k * T, pose, goal))
        memory = decision.memory
        door.measurement[:7] = k * T, *pose, NAN, *goal
        result = door.step()
        named = dict(zip(door.RESULT, result.tolist(), strict=True))
        assert (named["left"], named["turn_rate"]) == (decision.command.left, decision.command.turn_rate)
        assert named["wanted_turn_rate"] == decision.report.wanted.turn_rate
        assert dict(zip(door.MEASURED, door.measurement.tolist(), strict=True))["goal_y"] == goal[1]
        assert result[:4].tobytes() == np.array(decision.command).tobytes()
        assert (int(result[4]), int(result[5])) == (decision.phase, decision.causes)
        assert np.array_equal(door.memory, memory.row, equal_nan=True)
        assert np.array_equal(result[6:12], [*decision.report[:2], *decision.report.pose, decision.report.pose_age], equal_nan=True)


def test_steps_leave_no_memory_behind():
    import gc
    import tracemalloc

    steering = controller()
    memory = steering.start(0.0)
    measurement = Measurement(0.0, (0.0, 0.0, 0.0), (2.0, 1.0))
    for _ in range(100):
        steering.step(memory, measurement)
    gc.collect()
    tracemalloc.start()
    before = tracemalloc.get_traced_memory()[0]
    for _ in range(100_000 if compiled.ON else 300):
        steering.step(memory, measurement)
    gc.collect()
    grown = tracemalloc.get_traced_memory()[0] - before
    tracemalloc.stop()
    assert grown < 20_000


def test_a_memory_with_a_pose_that_is_no_number_is_begun_anew():
    steering = controller(constant_speed=True)
    row = steering.step(steering.start(0.0), Measurement(0.0, (0, 0, 0), (2, 0))).memory.row.copy()
    row[3] = NAN
    decision = steering.step(Memory(row), Measurement(0.05, None, (2, 0), next_goal=(3, 0)))
    assert Causes.BAD_MEMORY in decision.causes
    assert decision.command == (0.0, 0.0, 0.0, 0.0)
