"""Every wrong call with the whole sentence that it gets: name=value, what is expected, how to repair."""

from __future__ import annotations

import math  # noqa: F401  the calls below are evaluated here

import pytest

from robots import CART
from robots import cart as platform
from steerkit import Controller, Platform, angles, kinematics, limits, sizing  # noqa: F401
from steerkit.following import following_distance  # noqa: F401
from steerkit.margins import margins, prediction_margin  # noqa: F401
from steerkit.sizing import size  # noqa: F401


def controller(**changes):
    return Controller(platform(), **({"capture_radius": 0.1, "constant_speed": True} | changes))


def scheduled(robot=None, **changes):
    return Controller(robot or platform(), **({"capture_radius": 0.1} | changes))


BAD_CALLS = [
    (
        "radius zero",
        "platform(radius=0.0)",
        ValueError,
        "radius=0 m must be > 0; give the circle about the middle of the axle that holds the robot",
    ),
    (
        "radius negative",
        "platform(radius=-0.3)",
        ValueError,
        "radius=-0.3 m must be > 0; give the circle about the middle of the axle that holds the robot",
    ),
    (
        "radius in millimetres",
        "platform(radius=300)",
        ValueError,
        "radius=300 m must be <= 20 m; is it in millimetres? give the circle about the middle of the axle that holds the robot",
    ),
    (
        "track width negative",
        "platform(track_width=-0.4)",
        ValueError,
        "track_width=-0.4 m must be > 0; give the distance between the wheel contact points",
    ),
    (
        "track width wider than the footprint",
        "platform(track_width=0.7)",
        ValueError,
        "track_width=0.7 m must be <= 0.6 m; the wheels stand inside the footprint, 2 * radius (the robot's, not the wheel's)",
    ),
    (
        "track width a string",
        "platform(track_width='0.42')",
        TypeError,
        "track_width='0.42' must be a number in m; give the distance between the wheel contact points",
    ),
    (
        "wheel speed NaN",
        "platform(wheel_speed_limit=math.nan)",
        ValueError,
        "wheel_speed_limit=nan m/s must be finite; give the fastest speed of a wheel over the floor",
    ),
    (
        "wheel speed zero",
        "platform(wheel_speed_limit=0)",
        ValueError,
        "wheel_speed_limit=0 m/s must be > 0; give the fastest speed of a wheel over the floor",
    ),
    (
        "speed limit infinite",
        "platform(speed_limit=math.inf)",
        ValueError,
        "speed_limit=inf m/s must be finite; give the fastest speed that the robot shall go",
    ),
    (
        "speed limit in mm/s",
        "platform(speed_limit=900.0)",
        ValueError,
        "speed_limit=900 m/s must be <= 100 m/s; is it in mm/s? give the fastest speed that the robot shall go",
    ),
    (
        "turn rate in degrees",
        "platform(turn_rate_limit=180.0)",
        ValueError,
        "turn_rate_limit=180 rad/s must be <= 30 rad/s; is it in degrees per second? give radians per second (180 deg/s is 3.14)",
    ),
    (
        "turn rate a bool",
        "platform(turn_rate_limit=True)",
        TypeError,
        "turn_rate_limit=True must be a number in rad/s; give radians per second (180 deg/s is 3.14)",
    ),
    (
        "acceleration zero",
        "platform(acceleration=0.0)",
        ValueError,
        "acceleration=0 m/s^2 must be > 0; give the steepest gain of speed without slip",
    ),
    (
        "braking negative",
        "platform(braking=-1.2)",
        ValueError,
        "braking=-1.2 m/s^2 must be > 0; give the steepest loss of speed without slip, as a positive number",
    ),
    (
        "turn acceleration in degrees",
        "platform(turn_acceleration=2000.0)",
        ValueError,
        "turn_acceleration=2000 rad/s^2 must be <= 1000 rad/s^2; is it in degrees per second squared? give the steepest change of turn rate",
    ),
    (
        "period zero",
        "platform(period=0.0)",
        ValueError,
        "period=0 s must be > 0; give the time between two control steps",
    ),
    (
        "period in milliseconds",
        "platform(period=50)",
        ValueError,
        "period=50 s must be <= 2 s; is it in milliseconds or Hz? give the time between two control steps",
    ),
    (
        "period none",
        "platform(period=None)",
        TypeError,
        "period=None must be a number in s; give the time between two control steps",
    ),
    (
        "dead time negative",
        "platform(dead_time=-0.1)",
        ValueError,
        "dead_time=-0.1 s must be >= 0; give the time from a true pose to the wheels' answer",
    ),
    (
        "dead time in milliseconds",
        "platform(dead_time=120)",
        ValueError,
        "dead_time=120 s must be <= 5 s; is it in milliseconds? give the time from a true pose to the wheels' answer",
    ),
    (
        "motor lag negative",
        "platform(motor_lag=-0.01)",
        ValueError,
        "motor_lag=-0.01 s must be >= 0; give the time constant of the wheels, 0 if not seen",
    ),
    (
        "position noise negative",
        "platform(position_noise=-0.01)",
        ValueError,
        "position_noise=-0.01 m must be >= 0; give the standard deviation of a coordinate at rest",
    ),
    (
        "heading noise in degrees",
        "platform(heading_noise=1.5)",
        ValueError,
        "heading_noise=1.5 rad must be <= 0.5 rad; is it in degrees? give the standard deviation of the heading at rest",
    ),
    (
        "reverse speed negative",
        "platform(reverse_speed_limit=-0.3)",
        ValueError,
        "reverse_speed_limit=-0.3 m/s must be >= 0; give the fastest speed backwards, 0 for none",
    ),
    (
        "platform a dictionary",
        "Controller({'radius': 0.3}, capture_radius=0.1)",
        TypeError,
        "platform={'radius': 0.3} must be a Platform; build one from the robot's measured numbers",
    ),
    (
        "capture radius zero",
        "controller(capture_radius=0.0)",
        ValueError,
        "capture_radius=0 m must be > 0; give the disc about the goal to come to rest in",
    ),
    (
        "capture radius a string",
        "controller(capture_radius='10 cm')",
        TypeError,
        "capture_radius='10 cm' must be a number in m; give the disc about the goal to come to rest in",
    ),
    (
        "capture radius below the noise",
        "Controller(platform(position_noise=0.02), capture_radius=0.1)",
        ValueError,
        "capture_radius=0.1 m must be >= 0.16 m, eight standard deviations of position_noise; widen the disc or measure the pose better",
    ),
    (
        "capture radius below a step",
        "Controller(platform(period=0.2, turn_rate_limit=10.0, turn_acceleration=100.0), capture_radius=0.05, constant_speed=True, speed=0.3)",
        ValueError,
        "capture_radius=0.05 m must be >= speed * period / 0.8 = 0.075 m, for a step must not pass over the disc; widen it, or drive at 0.2 m/s or less",
    ),
    (
        "constant speed above the speed limit",
        "controller(speed=1.0)",
        ValueError,
        "speed=1 m/s must be <= speed_limit=0.9 m/s; ask for less",
    ),
    (
        "constant speed above the wheels",
        "Controller(platform(wheel_speed_limit=0.5), capture_radius=0.3, constant_speed=True, speed=0.6)",
        ValueError,
        "speed=0.6 m/s must be <= wheel_speed_limit=0.5 m/s; ask for less",
    ),
    (
        "constant speed with no window",
        "controller(speed=0.5)",
        ValueError,
        "speed=0.5 m/s: no gain works, bound by turn_rate_limit; at 0.1818 m/s or less one does",
    ),
    (
        "constant speed with no window for the turn acceleration",
        "Controller(platform(turn_acceleration=0.5), capture_radius=0.1, constant_speed=True, speed=0.2)",
        ValueError,
        "speed=0.2 m/s: no gain works, bound by turn_acceleration; at 0.1128 m/s or less one does",
    ),
    (
        "constant speed with no window for the dead time",
        "Controller(platform(dead_time=0.5), capture_radius=0.1, constant_speed=True, speed=0.15, predict=False)",
        ValueError,
        "speed=0.15 m/s: no gain works, bound by dead_time and motor_lag; at 0.1001 m/s or less one does",
    ),
    (
        "constant speed negative",
        "controller(speed=-0.2)",
        ValueError,
        "speed=-0.2 m/s must be > 0; give the constant speed, or leave it out for the fastest workable",
    ),
    (
        "gain that circles",
        "controller(gain=0.5)",
        ValueError,
        "gain=0.5 1/s circles the goal; give 1.273 to 4.444 1/s, or leave it out",
    ),
    (
        "gain that swings",
        "controller(gain=50.0)",
        ValueError,
        "gain=50 1/s swings; give 1.273 to 4.444 1/s, or leave it out",
    ),
    (
        "gain zero",
        "controller(gain=0)",
        ValueError,
        "gain=0 1/s must be > 0; give turn rate per heading error, or leave it out",
    ),
    (
        "integral time zero",
        "controller(integral_time=0.0)",
        ValueError,
        "integral_time=0 s must be > 0; give the time in which the integral repeats the error; inf for none",
    ),
    (
        "integral time that swings",
        "controller(integral_time=0.01)",
        ValueError,
        "gain=4.44444 1/s with integral_time=0.01 s and derivative_time=0 s swings for ever; lengthen the first or shorten the second",
    ),
    (
        "derivative time negative",
        "controller(derivative_time=-0.1)",
        ValueError,
        "derivative_time=-0.1 s must be >= 0; give the time by which the derivative looks ahead; 0 for none",
    ),
    (
        "derivative time that swings",
        "controller(derivative_time=0.5)",
        ValueError,
        "gain=4.44444 1/s with integral_time=inf s and derivative_time=0.5 s swings for ever; lengthen the first or shorten the second",
    ),
    (
        "stale before a period",
        "controller(stale_after=0.01)",
        ValueError,
        "stale_after=0.01 s must be >= period=0.05 s; a fresh pose must count",
    ),
    (
        "stale after a minute",
        "controller(stale_after=60)",
        ValueError,
        "stale_after=60 s must be <= 20 s; a pose that old says nothing",
    ),
    (
        "start at no time",
        "controller().start(math.nan)",
        ValueError,
        "start(time=nan, motion=(0.0, 0.0)) must be finite; give seconds, m/s and rad/s",
    ),
    (
        "start in a wild motion",
        "controller().start(0.0, motion=(math.inf, 0.0))",
        ValueError,
        "start(time=0.0, motion=(inf, 0.0)) must be finite; give seconds, m/s and rad/s",
    ),
    (
        "start faster than the wheels can",
        "controller().start(0.0, motion=(5.0, 0.0))",
        ValueError,
        "motion=(5.0, 0.0) turns a wheel at 5 m/s; it must be <= 2.2 m/s, twice wheel_speed_limit; give m/s and rad/s",
    ),
    (
        "speed beyond all floats",
        "controller(speed=10**400)",
        ValueError,
        "speed=inf m/s must be finite; give the constant speed, or leave it out for the fastest workable",
    ),
    (
        "predict in words",
        "controller(predict='no')",
        TypeError,
        "predict='no' must be True or False; True takes the error where the command takes effect",
    ),
    (
        "period of nothing",
        "platform(period=1e-13)",
        ValueError,
        "period=1e-13 s must be >= 0.0001 s; give the time between two control steps",
    ),
    (
        "turn acceleration of nothing",
        "platform(turn_acceleration=1e-20)",
        ValueError,
        "turn_acceleration=1e-20 rad/s^2 must be >= 1e-06 rad/s^2; give the steepest change of turn rate",
    ),
    (
        "limit after no motion",
        "limits.limit(platform(), (math.nan, 0.0), (1.0, 0.0))",
        ValueError,
        "before[0]=nan m/s must be finite; give the speed of the command before",
    ),
    (
        "window of a negative disc",
        "sizing.window(platform(), -1.0)",
        ValueError,
        "capture_radius=-1 m must be > 0; give the disc about the goal to come to rest in",
    ),
    (
        "stable gain of no period",
        "sizing.stable_gain(0.0)",
        ValueError,
        "period=0 s must be > 0; give the control period",
    ),
    (
        "orbit of no gain",
        "sizing.orbit_radius(1.0, 0.0)",
        ValueError,
        "gain=0 1/s must be > 0; give turn rate per heading error",
    ),
    (
        "file truncated",
        "Platform.from_json(platform().to_json()[:-20])",
        ValueError,
        "the platform file is not whole JSON (Unterminated string starting at: line 18 column 3 (char 479)); write it again with Platform.to_json",
    ),
    (
        "file of a later version",
        "Platform.from_json(platform().to_json().replace('version\": 1', 'version\": 2'))",
        ValueError,
        "steerkit_platform_version=2 must be 1; read it with the steerkit that wrote it, or write it again",
    ),
    (
        "file with an unknown key",
        "Platform.from_json(platform().to_json().replace('radius_m', 'wheel_base_m'))",
        ValueError,
        "the platform file has unknown keys ['wheel_base_m']; known are ['acceleration_m_per_s2', 'braking_m_per_s2', 'dead_time_s', 'heading_noise_rad', 'motor_lag_s', 'period_s', 'position_noise_m', 'radius_m', 'reverse_speed_limit_m_per_s', 'smallest_wheel_speed_m_per_s', 'speed_limit_m_per_s', 'track_width_m', 'turn_acceleration_rad_per_s2', 'turn_rate_limit_rad_per_s', 'wheel_speed_limit_m_per_s', 'wheel_speed_resolution_m_per_s']",
    ),
    (
        "file that lacks a number",
        "Platform.from_json(platform().to_json().replace('  \"period_s\": 0.05,\\n', ''))",
        ValueError,
        "the platform file lacks ['period_s']; add them, each in the unit of its key",
    ),
    (
        "file of something else",
        "Platform.from_json('[1, 2]')",
        ValueError,
        "the platform file has no steerkit_platform_version; write it with Platform.to_json",
    ),
    (
        "file with a word for a number",
        "Platform.from_json(platform().to_json().replace('0.05', '\"fast\"'))",
        TypeError,
        "period='fast' must be a number in s; give the time between two control steps",
    ),
    (
        "arc of a pose without heading",
        "kinematics.arc((0.0, 0.0), (1.0, 0.0), 1.0)",
        ValueError,
        "pose of shape (2,) does not fit; give x, y, heading along the last axis",
    ),
    (
        "arc of three motions and two poses",
        "kinematics.arc([[0, 0, 0]] * 2, [[1, 0]] * 3, 1.0)",
        ValueError,
        "pose, motion, duration of shapes ((2,), (3,), ()) do not fit; give as many of each, or one for all",
    ),
    (
        "wheels of no track",
        "kinematics.to_wheels((1.0, 0.0), 0.0)",
        ValueError,
        "track_width=0 m must be > 0; give the distance between the wheel contact points",
    ),
    (
        "counter of no values",
        "kinematics.count_step(1, 2, 0)",
        ValueError,
        "counter=0 counts must be > 0; give the number of values of the counter, 65536 for 16 bits",
    ),
    (
        "stopping without brakes",
        "limits.stopping_distance(1.0, 0.0)",
        ValueError,
        "braking=0 m/s^2 must be > 0; give the steady deceleration of a full stop",
    ),
    (
        "stopping before now",
        "limits.stopping_distance(1.0, 1.0, reaction=-0.5)",
        ValueError,
        "reaction=-0.5 s must be >= 0; give the time before the brakes act",
    ),
    (
        "stopping from backwards",
        "limits.stopping_distance(-1.0, 1.0)",
        ValueError,
        "speed=-1 m/s must be >= 0; give its size",
    ),
    (
        "held stop backwards",
        "limits.held_stopping_distance(-1.0, 1.0, 0.1)",
        ValueError,
        "speed=-1 m/s must be >= 0; give its size",
    ),
    (
        "unwrap of a single float",
        "angles.unwrap(3.0)",
        ValueError,
        "angles of shape () does not fit; give an array with at least one axis; wrap takes single floats",
    ),
    (
        "mean with a negative weight",
        "angles.mean([0.1, 0.2, 0.3], weights=[1.0, -1.0, math.nan])",
        ValueError,
        "weights[1]=-1 must be finite and >= 0 (2 such); drop the sample or give it 0",
    ),
    (
        "mean with weights of another shape",
        "angles.mean([0.1, 0.2, 0.3], weights=[1.0, 2.0])",
        ValueError,
        "weights of shape (2,) does not fit; give one weight per angle, shape (3,)",
    ),
    (
        "smallest wheel speed negative",
        "platform(smallest_wheel_speed=-0.01)",
        ValueError,
        "smallest_wheel_speed=-0.01 m/s must be >= 0; give the speed below which a wheel stands still, 0 if not seen",
    ),
    (
        "smallest wheel speed in millimetres",
        "platform(smallest_wheel_speed=30)",
        ValueError,
        "smallest_wheel_speed=30 m/s must be <= 10 m/s; is it in mm/s? give the speed below which a wheel stands still, 0 if not seen",
    ),
    (
        "smallest wheel speed above the speed limit",
        "platform(smallest_wheel_speed=0.95)",
        ValueError,
        "smallest_wheel_speed=0.95 m/s must be <= speed_limit=0.9 m/s, else the wheels never move; measure them again",
    ),
    (
        "smallest wheel speed above the wheel-speed limit",
        "platform(smallest_wheel_speed=0.5, wheel_speed_limit=0.4)",
        ValueError,
        "smallest_wheel_speed=0.5 m/s must be <= wheel_speed_limit=0.4 m/s, else the wheels never move; measure them again",
    ),
    (
        "smallest wheel speed too high to turn",
        "platform(smallest_wheel_speed=0.5)",
        ValueError,
        "smallest_wheel_speed=0.5 m/s must be <= turn_rate_limit * track_width / 2 = 0.42 m/s, else it cannot turn on the spot; raise the turn-rate limit",
    ),
    (
        "smallest wheel speed too high to turn, on a grid",
        "platform(smallest_wheel_speed=0.4, wheel_speed_resolution=0.15)",
        ValueError,
        "smallest_wheel_speed=0.4 m/s in steps of wheel_speed_resolution=0.15 m/s (0.45 m/s) must be <= turn_rate_limit * track_width / 2 = 0.42 m/s, else it cannot turn on the spot; raise the turn-rate limit",
    ),
    (
        "resolution too fine to count",
        "platform(wheel_speed_resolution=1e-20)",
        ValueError,
        "wheel_speed_resolution=1e-20 m/s must be 0 or >= 1e-06 m/s; give the step of the wheel-speed command, 0 for any",
    ),
    (
        "resolution negative",
        "platform(wheel_speed_resolution=-0.01)",
        ValueError,
        "wheel_speed_resolution=-0.01 m/s must be >= 0; give the step of the wheel-speed command, 0 for any",
    ),
    (
        "resolution coarser than the speed limit",
        "platform(wheel_speed_resolution=1.0)",
        ValueError,
        "smallest_wheel_speed=0 m/s in steps of wheel_speed_resolution=1 m/s (1 m/s) must be <= speed_limit=0.9 m/s, else the wheels never move; measure them again",
    ),
    (
        "disc stepped over at the smallest speed",
        "scheduled(platform(smallest_wheel_speed=0.3, period=0.4, dead_time=0.0))",
        ValueError,
        "capture_radius=0.1 m must be >= 0.15 m, for in one period at its slowest wheel speed, 0.3 m/s, the robot passes over the disc; widen it, or shorten the period",
    ),
    (
        "schedule with a speed",
        "scheduled(speed=0.3)",
        ValueError,
        "speed=0.3 is for constant_speed=True; pass that too, or leave speed out",
    ),
    (
        "schedule with a gain",
        "scheduled(gain=2.0)",
        ValueError,
        "gain=2.0 is for constant_speed=True; pass that too, or leave gain out",
    ),
    (
        "schedule with an integral",
        "scheduled(integral_time=2.0)",
        ValueError,
        "integral_time=2.0 is for constant_speed=True; pass that too, or leave integral_time out",
    ),
    (
        "schedule with a derivative",
        "scheduled(derivative_time=0.1)",
        ValueError,
        "derivative_time=0.1 is for constant_speed=True; pass that too, or leave derivative_time out",
    ),
    (
        "schedule without prediction",
        "scheduled(predict=False)",
        ValueError,
        "predict=False is for constant_speed=True; pass that too, or leave predict out",
    ),
    (
        "constant speed no bool",
        "scheduled(constant_speed=0.3)",
        TypeError,
        "constant_speed=0.3 must be True or False; True drives at constant speed, False by the schedule",
    ),
    (
        "constant speed below the smallest",
        "Controller(platform(smallest_wheel_speed=0.1), capture_radius=0.1, constant_speed=True, speed=0.05)",
        ValueError,
        "speed=0.05 m/s must be >= 0.1 m/s, the slowest that the wheels can run; ask for more",
    ),
    (
        "no constant speed as slow as the wheels can run",
        "Controller(platform(smallest_wheel_speed=0.2), capture_radius=0.1, constant_speed=True)",
        ValueError,
        "constant_speed=True: the fastest that works is 0.1818 m/s, slower than the wheels can run (0.2 m/s); leave it out, for the schedule turns on the spot, or widen capture_radius",
    ),
    (
        "margins of a negative gain",
        "margins(-1.0)",
        ValueError,
        "gain=-1 1/s must be > 0; give turn rate per heading error",
    ),
    (
        "margins of no gain",
        "margins(0.0)",
        ValueError,
        "gain=0 1/s must be > 0; give turn rate per heading error",
    ),
    (
        "margins of NaN",
        "margins(math.nan)",
        ValueError,
        "gain=nan 1/s must be finite; give turn rate per heading error",
    ),
    (
        "margins of a string",
        "margins('2')",
        TypeError,
        "gain='2' must be a number in 1/s; give turn rate per heading error",
    ),
    (
        "margins, integral time zero",
        "margins(1.0, integral_time=0.0)",
        ValueError,
        "integral_time=0 s must be > 0; give the time in which the integral repeats the error; inf for none",
    ),
    (
        "margins, integral time minus infinity",
        "margins(1.0, integral_time=-math.inf)",
        ValueError,
        "integral_time=-inf s must be finite; give the time in which the integral repeats the error; inf for none",
    ),
    (
        "margins, derivative time negative",
        "margins(1.0, derivative_time=-0.1)",
        ValueError,
        "derivative_time=-0.1 s must be >= 0; give the time by which the derivative looks ahead; 0 for none",
    ),
    (
        "margins, derivative time infinite",
        "margins(1.0, derivative_time=math.inf)",
        ValueError,
        "derivative_time=inf s must be finite; give the time by which the derivative looks ahead; 0 for none",
    ),
    (
        "margins, period negative",
        "margins(1.0, period=-0.05)",
        ValueError,
        "period=-0.05 s must be >= 0; give the control period, or 0 for a continuous controller",
    ),
    (
        "margins, period too short",
        "margins(1.0, period=1e-6)",
        ValueError,
        "period=1e-06 s must be >= 0.0001 s, or 0 for a continuous controller; give seconds",
    ),
    (
        "margins, dead time of too many periods",
        "margins(1.0, period=1e-3, dead_time=200.0)",
        ValueError,
        "dead_time=200 s must be <= 100 s, 100000 periods; give seconds",
    ),
    (
        "margins, dead time negative",
        "margins(1.0, dead_time=-0.1)",
        ValueError,
        "dead_time=-0.1 s must be >= 0; give the time before a command acts",
    ),
    (
        "margins, lag negative",
        "margins(1.0, motor_lag=-0.1)",
        ValueError,
        "motor_lag=-0.1 s must be >= 0; give the time constant of the wheels, 0 for none",
    ),
    (
        "prediction margin without a period",
        "prediction_margin(1.0, 0.0, 0.1)",
        ValueError,
        "period=0 s must be > 0; give the control period",
    ),
    (
        "prediction margin of a negative gain",
        "prediction_margin(-1.0, 0.05, 0.1)",
        ValueError,
        "gain=-1 1/s must be > 0; give turn rate per heading error",
    ),
    (
        "sizing of a dict",
        "size({'radius': 0.3}, 0.1)",
        TypeError,
        "platform={'radius': 0.3} must be a Platform; build one from the robot's measured numbers",
    ),
    (
        "sizing for no disc",
        "size(platform(), 0.0)",
        ValueError,
        "capture_radius=0 m must be > 0; give the disc about the goal to come to rest in",
    ),
    (
        "sizing for a disc within the noise",
        "size(platform(position_noise=0.02), 0.1)",
        ValueError,
        "capture_radius=0.1 m must be >= 0.16 m, eight standard deviations of position_noise; widen the disc or measure the pose better",
    ),
    (
        "sizing at a negative speed",
        "size(platform(), 0.1, speed=-0.5)",
        ValueError,
        "speed=-0.5 m/s must be > 0; give the constant speed, or leave it out for the fastest workable",
    ),
    (
        "sizing at a word",
        "size(platform(), 0.1, speed='fast')",
        TypeError,
        "speed='fast' must be a number in m/s; give the constant speed, or leave it out for the fastest workable",
    ),
    (
        "sizing, predict a number",
        "size(platform(), 0.1, predict=2)",
        TypeError,
        "predict=2 must be True or False; True takes the error where the command takes effect",
    ),
    (
        "sizing with no gain",
        "size(platform(), 0.1, gain=0.0)",
        ValueError,
        "gain=0 1/s must be > 0; give turn rate per heading error, or leave it out",
    ),
    (
        "sizing with an infinite gain",
        "size(platform(), 0.1, gain=math.inf)",
        ValueError,
        "gain=inf 1/s must be finite; give turn rate per heading error, or leave it out",
    ),
]


@pytest.mark.parametrize(
    ("call", "kind", "text"), [row[1:] for row in BAD_CALLS], ids=[row[0].replace(" ", "-") for row in BAD_CALLS]
)
def test_a_wrong_call_gets_its_sentence(call, kind, text):
    with pytest.raises(kind) as refusal:
        eval(call)
    assert str(refusal.value) == text


@pytest.mark.parametrize(("call", "text"), [(row[1], row[3]) for row in BAD_CALLS if "; at " in row[3]])
def test_the_speed_a_refusal_proposes_works(call, text):
    proposal = text.split("; at ")[1].split(" ")[0]
    eval(call.split("speed=0.")[0] + f"speed={proposal}" + (", predict=False)" if "predict" in call else ")"))


def test_a_platform_survives_its_own_file():
    ours = platform(motor_lag=0.07, position_noise=0.012, reverse_speed_limit=0.25)
    assert Platform.from_json(ours.to_json()) == ours
    assert '"turn_rate_limit_rad_per_s": 2.0' in ours.to_json()


def test_numbers_of_other_kinds_become_floats():
    import numpy as np

    ours = platform(radius=np.float32(0.5), period=np.float64(0.05), wheel_speed_limit=1)
    assert all(type(getattr(ours, name)) is float for name in CART)


def test_idle_limits_are_told_not_refused():
    notes = platform(wheel_speed_limit=0.4).notes()
    assert notes == [
        "The wheels give 0.4 m/s; speed_limit=0.9 m/s is never reached.",
        "The wheels give 1.9 rad/s on the spot; turn_rate_limit=2 rad/s is never reached; is it in degrees per second?",
    ]
