"""Print a hash of 10,000 closed-loop steps; run by `test_compiled.py` with and without the compiler."""

from __future__ import annotations

import dataclasses
import hashlib
import sys

if "without-numba" in sys.argv:
    sys.modules["numba"] = None  # type: ignore[assignment]

import numpy as np

from robots import draw, draw_start
from steerkit import Controller, Measurement, compiled
from steerkit.kinematics import arc


def digest(robots: int = 20, steps: int = 500) -> str:
    rng = np.random.default_rng(7)
    found = hashlib.sha256()
    for i in range(robots):
        robot = draw(rng)
        law = {"constant_speed": True, "predict": bool(i % 3)} if i % 2 else {}
        if i % 4 == 3:
            law |= {"integral_time": 3.0, "derivative_time": 0.01}
        platform = robot.platform
        if i % 5 == 2:
            platform = dataclasses.replace(platform, smallest_wheel_speed=0.02, wheel_speed_resolution=0.007)
        controller = Controller(platform, capture_radius=robot.capture_radius, **law)
        memory, pose, period = controller.start(0.0), draw_start(rng, robot), robot.platform.period
        for k in range(steps):
            goal = (0.0, 0.0) if k < steps // 2 else (1.0, -2.0)
            seen = tuple(pose) if rng.random() > 0.02 else (np.nan, 0.0, 0.0)
            then = (1.0, -2.0) if i % 3 == 0 and k < steps // 2 else None
            decision = controller.step(memory, Measurement(k * period, seen, goal, (k - 0.3) * period, next_goal=then))
            memory = decision.memory
            found.update(memory.to_bytes() + np.array([*decision.command, *decision.report[:2], decision.causes]).tobytes())
            pose = arc(pose, decision.command[2:], period)
    return found.hexdigest()


if __name__ == "__main__":
    print(compiled.ON, digest())
