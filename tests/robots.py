"""The robots of the tests: one cart, and the one distribution from which random robots are drawn.

The distribution, here and in later work, was committed before any tuning.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from steerkit import Platform

CORNERS = 0.2  # share of the draws in which each number lies at an end of its range

LOGARITHMIC = {  # log-uniform
    "radius": (0.1, 0.4),
    "track_per_radius": (1.2, 1.9),
    "speed_limit": (0.2, 1.5),
    "turn_rate_limit": (0.5, 6.0),
    "acceleration": (0.3, 3.0),
    "braking": (0.3, 3.0),
    "turn_acceleration": (1.0, 20.0),
    "period": (0.005, 0.2),
    "capture_radius": (0.03, 0.3),
    "goal_distance": (0.1, 20.0),
}
EVEN = {  # uniform, for zero is in range
    "dead_time": (0.0, 0.3),
    "motor_lag": (0.0, 0.15),
    "wheel_share": (0.0, 1.0),  # wheel-speed limit from "either alone" (0) to "speed and turn rate together" (1)
}

CART = {
    "radius": 0.30,
    "track_width": 0.42,
    "wheel_speed_limit": 1.1,
    "speed_limit": 0.9,
    "turn_rate_limit": 2.0,
    "acceleration": 0.8,
    "braking": 1.2,
    "turn_acceleration": 5.0,
    "period": 0.05,
    "dead_time": 0.12,
}


def cart(**changes: float) -> Platform:
    """Return the cart of the single tests, some of its numbers changed."""
    return Platform(**(CART | changes))


class Robot(NamedTuple):
    """A drawn platform and its task."""

    platform: Platform
    capture_radius: float
    goal_distance: float


def draw(rng: np.random.Generator) -> Robot:
    """Return a random robot: each number log-uniform (or uniform) in its range, a fifth of the robots at corners throughout."""
    corner = rng.random() < CORNERS
    n = {}
    for name, (low, high) in LOGARITHMIC.items():
        share = float(rng.integers(2)) if corner else rng.random()
        n[name] = low * (high / low) ** share
    for name, (low, high) in EVEN.items():
        share = float(rng.integers(2)) if corner else rng.random()
        n[name] = low + (high - low) * share
    track_width = n.pop("track_per_radius") * n["radius"]
    turning = n["turn_rate_limit"] * track_width / 2.0
    alone, together = max(n["speed_limit"], turning), n["speed_limit"] + turning
    wheel_speed_limit = alone + (together - alone) * n.pop("wheel_share")
    capture_radius, goal_distance = n.pop("capture_radius"), n.pop("goal_distance")
    return Robot(Platform(track_width=track_width, wheel_speed_limit=wheel_speed_limit, **n), capture_radius, goal_distance)


def draw_start(rng: np.random.Generator, robot: Robot) -> tuple[float, float, float]:
    """Return a start pose (m, m, rad) for a goal at the origin, any heading, log-uniform distance, outside the capture disc."""
    low, high = LOGARITHMIC["goal_distance"]
    distance = max(low * (high / low) ** rng.random(), 1.05 * robot.capture_radius)
    place = rng.uniform(-math.pi, math.pi)
    return distance * math.cos(place), distance * math.sin(place), rng.uniform(-math.pi, math.pi)
