"""Calls of the public names that must type-check under strict rules; nothing here is run by pytest."""

from __future__ import annotations

import numpy as np

from steerkit import (
    Causes,
    Controller,
    Decision,
    Frame,
    Measurement,
    Memory,
    Phase,
    Platform,
    angles,
    heading,
    kinematics,
    limits,
    sizing,
)

cart = Platform(
    radius=0.3,
    track_width=0.4,
    wheel_speed_limit=1.0,
    speed_limit=1.0,
    turn_rate_limit=2.0,
    acceleration=1.0,
    braking=1.0,
    turn_acceleration=5.0,
    period=0.05,
    dead_time=0.1,
)
controller = Controller(cart, capture_radius=0.2, speed=0.3)
memory: Memory = controller.start(time=0.0, motion=(0.0, 0.0))
measurement = Measurement(time=0.0, pose=(0.0, 0.0, 0.0), goal=(1.0, 2.0), goal_frame=Frame.WORLD, hold=False)
decision: Decision = controller.step(memory, measurement)
left: float = decision.command.left
arrived: bool = decision.phase == Phase.ARRIVED
jumped: bool = Causes.POSE_JUMPED in decision.causes
door = controller.in_place(0.0)
result: np.ndarray[tuple[int, ...], np.dtype[np.float64]] = door.step()
wrapped: float = angles.wrap(4.0)
turned: float = angles.difference(3.0, -3.0)
mean = angles.mean([0.1, 0.2], weights=[1.0, 2.0])
wheels = kinematics.to_wheels((0.5, 0.1), track_width=0.4)
motion, causes = limits.limit(cart, (0.0, 0.0), (1.0, 1.0))
found: sizing.Window = sizing.window(cart, 0.2)
rate, kept = heading.steer(heading.HeadingLaw(1.0, 2.0), heading.HeadingMemory(), 1.0, 0.5, 0.05)
