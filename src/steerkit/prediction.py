"""Prediction: from the pose that was measured to the pose at which a new command will take effect.

A command sent at time t acts from t + dead time until the next one acts. Behind it the wheels follow with a first-order lag.
Moving the pose through the commands under way takes dead time and lag out of the heading loop (Smith 1957; Manitius & Olbrot
1979, both from memory); what is left is the roll-out of the lag, taken out by coasting: path = sum of command times time +
lag * (speed before - speed after), so the pose that counts lies lag * speed further on (derived).

The commands under way are rows (age s, speed m/s, turn rate rad/s) of the memory, newest first, ages as of the last step.
Times below are seconds from now, negative in the past.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from steerkit.compiled import kernel
from steerkit.kinematics import arc_kernel

# Gauss-Legendre nodes and weights on [0, 1], 4 points (Abramowitz & Stegun, table 25.4)
G1, G2 = 0.5 - 0.5 * 0.861136311594053, 0.5 - 0.5 * 0.339981043584856
H1, H2 = 0.5 * 0.347854845137454, 0.5 * 0.652145154862546
TRANSIENT = 3.0  # lags; the fast part of a response is integrated apart from the rest


@kernel
def respond_kernel(value: float, command: float, duration: float, lag: float) -> float:
    """Return a wheel-driven value after `duration` of a held command."""
    if not lag > 0.0:
        return command
    return command + (value - command) * math.exp(-duration / lag)


@kernel
def lagged_arc_kernel(
    x: float, y: float, heading: float, v: float, w: float, command_v: float, command_w: float, duration: float, lag: float
) -> tuple[float, float, float]:
    """Return the pose after a held command behind a lag: heading exact, position by 4-point Gauss-Legendre."""
    dv = v - command_v
    dw = w - command_w
    moved_x = 0.0
    moved_y = 0.0
    for i in range(4):
        share = G1 if i == 0 else (G2 if i == 1 else (1.0 - G2 if i == 2 else 1.0 - G1))
        weight = H1 if i == 0 or i == 3 else H2
        t = share * duration
        left = math.exp(-t / lag)
        angle = heading + command_w * t + dw * lag * (1.0 - left)
        path = weight * duration * (command_v + dv * left)
        moved_x += path * math.cos(angle)
        moved_y += path * math.sin(angle)
    return x + moved_x, y + moved_y, heading + command_w * duration + dw * lag * (1.0 - math.exp(-duration / lag))


@kernel
def hold_kernel(
    x: float, y: float, heading: float, v: float, w: float, command_v: float, command_w: float, duration: float, lag: float
) -> tuple[float, float, float, float, float]:
    """Return pose and motion after a command held for `duration`."""
    if not lag > 0.0 or (v == command_v and w == command_w):
        x, y, heading = arc_kernel(x, y, heading, command_v, command_w, duration)
        return x, y, heading, command_v, command_w
    first = min(duration, TRANSIENT * lag)
    x, y, heading = lagged_arc_kernel(x, y, heading, v, w, command_v, command_w, first, lag)
    if duration > first:
        v1 = respond_kernel(v, command_v, first, lag)
        w1 = respond_kernel(w, command_w, first, lag)
        x, y, heading = lagged_arc_kernel(x, y, heading, v1, w1, command_v, command_w, duration - first, lag)
    return x, y, heading, respond_kernel(v, command_v, duration, lag), respond_kernel(w, command_w, duration, lag)


@kernel
def acting_kernel(
    memory: Sequence[float], first: int, rows: int, since: float, dead_time: float, start: float, end: float, i: int
) -> tuple[float, float]:
    """Return when, within start..end, the i-th command under way acts; the oldest has acted before, the newest acts on."""
    begin = start if i == rows - 1 else max(start, dead_time - (memory[first + 3 * i] + since))
    until = end if i == 0 else min(end, dead_time - (memory[first + 3 * i - 3] + since))
    return begin, until


@kernel
def carry_kernel(
    memory: Sequence[float],
    first: int,
    rows: int,
    since: float,
    last_v: float,
    last_w: float,
    dead_time: float,
    lag: float,
    start: float,
    end: float,
    x: float,
    y: float,
    heading: float,
    v: float,
    w: float,
) -> tuple[float, float, float, float, float]:
    """Return pose and motion at `end`, from those at `start`, through the commands that act in between.

    `memory[first:]` holds `rows` commands under way, `since` the time since the last step; the newest of them is
    (last_v, last_w), whatever the row says.
    """
    for i in range(rows - 1, -1, -1):
        begin, until = acting_kernel(memory, first, rows, since, dead_time, start, end, i)
        if until > begin:
            command_v = memory[first + 3 * i + 1] if i > 0 else last_v
            command_w = memory[first + 3 * i + 2] if i > 0 else last_w
            x, y, heading, v, w = hold_kernel(x, y, heading, v, w, command_v, command_w, until - begin, lag)
    return x, y, heading, v, w


@kernel
def motion_then_kernel(
    memory: Sequence[float],
    first: int,
    rows: int,
    since: float,
    last_v: float,
    last_w: float,
    dead_time: float,
    lag: float,
    start: float,
    end: float,
    v: float,
    w: float,
) -> tuple[float, float]:
    """Return the motion at `end`, from that at `start`: `carry_kernel` without the pose."""
    for i in range(rows - 1, -1, -1):
        begin, until = acting_kernel(memory, first, rows, since, dead_time, start, end, i)
        if until > begin:
            v = respond_kernel(v, memory[first + 3 * i + 1] if i > 0 else last_v, until - begin, lag)
            w = respond_kernel(w, memory[first + 3 * i + 2] if i > 0 else last_w, until - begin, lag)
    return v, w


@kernel
def coast_kernel(x: float, y: float, heading: float, v: float, w: float, lag: float) -> tuple[float, float, float]:
    """Return the pose that counts behind a lag: further on by the roll-out of the present motion."""
    return arc_kernel(x, y, heading, v, w, lag)


@kernel
def stop_end_kernel(
    x: float, y: float, heading: float, v: float, w: float, braking: float, turn_acceleration: float, path: float
) -> tuple[float, float]:
    """Return where a stop from the motion (v, w) ends, `path` metres on: along the curve, which tightens where w falls too slowly.

    A turn rate that can fall with the speed keeps to the arc, exactly; else the path lies inside that arc (Kneser 1912, from
    memory: nested circles of curvature), and is followed in at most 32 pieces.
    """
    if v <= 0.0:
        return x, y
    if braking * abs(w) <= turn_acceleration * v:
        x, y, heading = arc_kernel(x, y, heading, path, w / v * path, 1.0)
        return x, y
    span = 2.0 * path / v
    pieces = 32
    for i in range(pieces):
        left = 1.0 - (i + 0.5) / pieces
        turning = max(abs(w) * left, abs(w) - turn_acceleration * span * (1.0 - left))
        step = path * 2.0 * left / pieces
        x, y, heading = arc_kernel(x, y, heading, step, math.copysign(turning, w) * span / pieces, 1.0)
    return x, y
