"""A small closed loop for tests only: the controller's compiled step against wheels with dead time and lag, exact in time."""

from __future__ import annotations

import math

import numpy as np

from steerkit.compiled import kernel
from steerkit.controller import Controller
from steerkit.kinematics import arc_kernel
from steerkit.step import HEAD, step_kernel

COLUMNS = ("x", "y", "heading", "speed", "turn_rate", "phase", "causes", "heading_error", "nearest", "wheels", "wanted")
CAPTURED, ARRIVED = 1, 2  # when to end early


@kernel
def plant_kernel(x, y, heading, v, w, command_v, command_w, span, lag, goal_x, goal_y, nearest):
    """Move the robot for `span` under a held command; the nearest distance to the goal counts all arcs in between."""
    pieces = max(1, math.ceil(span / (0.05 * lag))) if lag > 0.0 and (v != command_v or w != command_w) else 1
    step = span / pieces
    left = math.exp(-step / lag) if lag > 0.0 else 0.0
    for _ in range(pieces):
        v1, w1 = command_v + (v - command_v) * left, command_w + (w - command_w) * left
        path, turn = command_v * step + lag * (v - v1), command_w * step + lag * (w - w1)
        for j in range(8):
            px, py, _h = arc_kernel(x, y, heading, path * (j + 1) / 8.0, turn * (j + 1) / 8.0, 1.0)
            nearest = min(nearest, math.sqrt((px - goal_x) ** 2 + (py - goal_y) ** 2))
        x, y, heading = arc_kernel(x, y, heading, path, turn, 1.0)
        v, w = v1, w1
    return x, y, heading, v, w, nearest


@kernel
def drive_kernel(settings, memory, dead_time, lag, start, motion, goal, steps, until, log):
    """Run the loop; `motion` is what the wheels have been doing. Return the number of steps made; `log` has a row for each."""
    period, half_track, radius = settings[0], settings[7], settings[13]
    d = math.floor(dead_time / period + 1e-12)
    m = max(0.0, dead_time / period - d)
    sent = np.zeros((steps + d + 2, 2))
    sent[:, 0], sent[:, 1] = motion[0], motion[1]
    x, y, heading, v, w = start[0], start[1], start[2], motion[0], motion[1]
    nan = math.nan
    for k in range(steps):
        time = k * period
        measured = (time, x, y, heading, nan, goal[0], goal[1], 0.0, nan, nan, nan, 0.0, nan, nan, nan, nan, 0.0)
        r = step_kernel(settings, memory, measured, memory)
        sent[k + d + 1, 0], sent[k + d + 1, 1] = r[2], r[3]
        log[k, 0], log[k, 1], log[k, 2], log[k, 3], log[k, 4] = x, y, heading, r[2], r[3]
        log[k, 5], log[k, 6], log[k, 7] = r[4], r[5], r[6]
        near = math.inf
        x, y, heading, v, w, near = plant_kernel(
            x, y, heading, v, w, sent[k, 0], sent[k, 1], m * period, lag, goal[0], goal[1], near
        )
        x, y, heading, v, w, near = plant_kernel(
            x, y, heading, v, w, sent[k + 1, 0], sent[k + 1, 1], (1.0 - m) * period, lag, goal[0], goal[1], near
        )
        log[k, 8], log[k, 9] = near, abs(v) + abs(w) * half_track
        log[k, 10] = r[14]
        if (until == 1 and near <= radius) or (until == 2 and r[4] == 1.0):
            return k + 1
    return steps


def drive(controller: Controller, start, goal=(0.0, 0.0), motion=(0.0, 0.0), steps=1000, until=0, dead_time=None, lag=None):
    """Return the log of a drive, one row of COLUMNS a step."""
    s = controller.settings
    log = np.empty((steps, len(COLUMNS)))
    row = controller.start(0.0, motion).row.copy()
    assert len(row) > HEAD
    tau, tau_m = s.dead_time if dead_time is None else dead_time, s.motor_lag if lag is None else lag
    places = (np.array(start, float), np.array(motion, float), np.array(goal, float))
    made = drive_kernel(np.array(s), row, tau, tau_m, *places, steps, until, log)
    return log[:made]
