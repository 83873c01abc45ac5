"""Print a hash of 10,000 closed-loop steps; run by `test_compiled.py` with and without the compiler."""

from __future__ import annotations

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
        extra = {"integral_time": 3.0, "derivative_time": 0.01} if i % 4 == 3 else {}
        controller = Controller(robot.platform, capture_radius=robot.capture_radius, predict=bool(i % 3), **extra)
        memory, pose, period = controller.start(0.0), draw_start(rng, robot), robot.platform.period
        for k in range(steps):
            goal = (0.0, 0.0) if k < steps // 2 else (1.0, -2.0)
            seen = tuple(pose) if rng.random() > 0.02 else (np.nan, 0.0, 0.0)
            decision = controller.step(memory, Measurement(k * period, seen, goal, pose_time=(k - 0.3) * period))
            memory = decision.memory
            found.update(memory.to_bytes() + np.array([*decision.command, *decision.report[:2], decision.causes]).tobytes())
            pose = arc(pose, decision.command[2:], period)
    return found.hexdigest()


if __name__ == "__main__":
    print(compiled.ON, digest())
