"""A rough closed loop for tests only: the compiled step against wheels with dead time, lag, dead band and ramps of their own.

Noise of the pose and jitter of the periods come in as arrays, so that everything is a function of its seeds. Exact in time but for
ramps of the robot's own, which are followed in short steps.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from steerkit import Platform
from steerkit.compiled import kernel
from steerkit.controller import Controller
from steerkit.kinematics import arc_kernel
from steerkit.step import step_kernel

REST = 0.01  # m/s of a wheel
BAND = 1e-6  # m/s; a wheel speed this much below the smallest still moves: a rounding's


class Truth(NamedTuple):
    """What the robot really is; it may differ from what was declared."""

    dead_time: float
    motor_lag: float
    smallest: float = 0.0
    speed_scale: float = 1.0  # true over told
    turn_scale: float = 1.0
    acceleration: float = math.inf
    braking: float = math.inf
    turn_acceleration: float = math.inf
    top_speed: float = math.inf
    top_turn_rate: float = math.inf


class Outcome(NamedTuple):
    """How a drive went. Times in s from its start, -1: never; rest is command 0 and wheels below 1 cm/s, within the disc."""

    rest: float
    stopped: float  # when the last command became 0: the end of the drive without dead time
    left: float  # how far outside the disc it was after rest, m
    excess: float  # largest relative excess over a limit
    stalls: float  # steps in which a wheel was told less than the smallest speed, but not 0
    sign_changes: float  # of the turn rate sent
    raised: float  # smallest wheel speed in use at the end, m/s
    distance: float  # at the end, m
    starts: float  # steps that drove on after ARRIVED
    tries: float  # times it drove on from rest in the disc before it had told ARRIVED
    steps: float


@kernel
def follow_kernel(value: float, told: float, span: float, up: float, down: float) -> float:
    """Return a set-point after `span` of ramping toward `told`."""
    rate = up if abs(told) > abs(value) and told * value >= 0.0 else down
    step = rate * span
    return told if abs(told - value) <= step else value + math.copysign(step, told - value)


@kernel
def move_kernel(state, told_v, told_w, span, truth, half_track):
    """Move (x, y, heading, v, w, set v, set w) for `span` under a told motion."""
    x, y, heading, v, w, sv, sw = state
    lag, smallest = truth[1], truth[2]
    if smallest > 0.0:
        left, right = told_v - told_w * half_track, told_v + told_w * half_track
        left = left if abs(left) >= smallest - BAND else 0.0
        right = right if abs(right) >= smallest - BAND else 0.0
        told_v, told_w = 0.5 * (left + right), 0.5 * (right - left) / half_track
    told_v, told_w = told_v * truth[3], told_w * truth[4]
    told_v = min(max(told_v, -truth[8]), truth[8])
    told_w = min(max(told_w, -truth[9]), truth[9])
    own = truth[5] < math.inf or truth[6] < math.inf or truth[7] < math.inf
    pieces = 1
    if own:
        pieces = max(4, math.ceil(span / 0.01))
    if lag > 0.0 and (v != told_v or w != told_w or own):
        pieces = max(pieces, math.ceil(span / (0.1 * lag)))
    step = span / pieces
    fade = math.exp(-step / lag) if lag > 0.0 else 0.0
    for _ in range(pieces):
        if own:
            sv = follow_kernel(sv, told_v, step, truth[5], truth[6])
            sw = follow_kernel(sw, told_w, step, truth[7], truth[7])
        else:
            sv, sw = told_v, told_w
        v1, w1 = sv + (v - sv) * fade, sw + (w - sw) * fade
        path, turn = sv * step + lag * (v - v1), sw * step + lag * (w - w1)
        x, y, heading = arc_kernel(x, y, heading, path, turn, 1.0)
        v, w = v1, w1
    return x, y, heading, v, w, sv, sw


@kernel
def excess_kernel(s, v0, w0, v, w, slack):
    """Return the largest relative excess of a motion over the limits of the settings `s`; `slack` (m/s): a step of the wheels."""
    half = s[7]
    worst = max((v - v0 - slack) / (s[8] * s[0]), (v0 - v - slack) / (s[9] * s[0])) - 1.0
    worst = max(worst, (abs(w - w0) - slack / half) / (s[10] * s[0]) - 1.0)
    worst = max(worst, v / s[3] - 1.0, abs(w) / s[5] - 1.0, (abs(v) + abs(w) * half) / s[6] - 1.0)
    return max(worst, -v)


@kernel
def rough_kernel(settings, memory, truth, start, motion, goals, spans, noise, more, measured_motion, log):
    """Drive through `goals`, rows (step from which it holds, x, y); end `more` steps after rest within the last one's disc."""
    half_track, radius, dead_time = settings[7], settings[13], truth[0]
    slack = 0.0
    if settings[27] > 0.0 or settings[28] > 0.0:
        slack = 3.0 * max(settings[27], settings[28]) + 2.0 * settings[28]
    steps = len(spans)
    sent = np.zeros((steps, 3))  # when it acts, v, w
    state = (start[0], start[1], start[2], motion[0], motion[1], motion[0], motion[1])
    told_v, told_w, v0, w0 = motion[0], motion[1], motion[0], motion[1]
    zero_from = 0.0  # since when the wheels have been told to stand
    acting, aim, now, nan = 0, 0, 0.0, math.nan
    rest, stopped, left, excess, stalls, changes, starts, last_sign, rested = -1.0, -1.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, -1
    slowest, distance, made, moved, settled, tries = settings[27], 0.0, 0, True, False, 0.0
    for k in range(steps):
        if aim + 1 < len(goals) and k >= goals[aim + 1, 0]:
            aim += 1
            rest, stopped, rested, settled = -1.0, -1.0, -1, False
        goal_x, goal_y = goals[aim, 1], goals[aim, 2]
        x, y, heading = state[0] + noise[k, 0], state[1] + noise[k, 1], state[2] + noise[k, 2]
        seen_v, seen_w = (state[3], state[4]) if measured_motion else (nan, nan)
        first = (now, x, y, heading, nan, goal_x, goal_y, 0.0, seen_v)
        r = step_kernel(settings, memory, (*first, seen_w, nan, 0.0, nan, nan, nan, nan, 0.0), memory)
        v, w = r[2], r[3]
        excess = max(excess, excess_kernel(settings, v0, w0, v, w, slack))
        for side in (v - w * half_track, v + w * half_track):
            stalls += 1e-9 < abs(side) < r[17] * (1.0 - 1e-9)
        if w != 0.0:
            changes += w * last_sign < 0.0
            last_sign = w
        v0, w0, slowest = v, w, r[17]
        sent[k, 0], sent[k, 1], sent[k, 2] = now + dead_time, v, w
        if k < len(log):
            log[k, 0], log[k, 1], log[k, 2], log[k, 3], log[k, 4] = state[0], state[1], state[2], state[3], state[4]
            log[k, 5], log[k, 6], log[k, 7], log[k, 8], log[k, 9] = v, w, r[6], r[4], r[16]
            log[k, 10], log[k, 11], log[k, 12], log[k, 13] = now, r[14], r[15], r[5]
        end = now + spans[k]
        while acting <= k and sent[acting, 0] <= end:
            when = max(now, sent[acting, 0])
            if when > now:
                state = move_kernel(state, told_v, told_w, when - now, truth, half_track)
            if told_v != 0.0 or told_w != 0.0:
                zero_from = when
            told_v, told_w, now = sent[acting, 1], sent[acting, 2], when
            acting += 1
        if end > now:
            state = move_kernel(state, told_v, told_w, end - now, truth, half_track)
        now = end
        distance = math.sqrt((state[0] - goal_x) * (state[0] - goal_x) + (state[1] - goal_y) * (state[1] - goal_y))
        still = v == 0.0 and w == 0.0 and told_v == 0.0 and told_w == 0.0
        wheel = abs(state[3]) + abs(state[4]) * half_track
        still = still and wheel < REST
        if v != 0.0 or w != 0.0:
            stopped = -1.0
        elif stopped < 0.0:
            stopped = now - spans[k]
        if rest < 0.0 and still and distance <= radius:
            rest, rested = now, k
            since = truth[1] * math.log(REST / wheel) if wheel > 0.0 and truth[1] > 0.0 else math.inf
            rest = max(zero_from, now - since)
        moves = v != 0.0 or w != 0.0
        if rest >= 0.0:
            left = max(left, distance - radius)
            tries += moves and not moved
        starts += moves and settled
        moved, settled = moves, settled or r[4] == 1.0
        made = k + 1
        if rest >= 0.0 and aim == len(goals) - 1 and k >= rested + more:
            break
    return rest, stopped, left, excess, stalls, changes, slowest, distance, starts, tries, float(made)


COLUMNS = (
    *("x", "y", "heading", "v", "w", "sent_v", "sent_w", "error", "phase", "slowed_by", "time", "wanted_v", "wanted_w", "causes"),
)


def rough_drive(
    controller: Controller,
    truth: Truth,
    start,
    motion=(0.0, 0.0),
    goals=((0, 0.0, 0.0),),
    steps: int = 1000,
    more: int = 20,
    rng: np.random.Generator | None = None,
    noise: tuple[float, float] = (0.0, 0.0),
    jitter: float = 0.0,
    measured_motion: bool = False,
    log: bool = False,
) -> tuple[Outcome, np.ndarray]:
    """Drive; return how it went, and a log with a row of COLUMNS a step (empty if not asked for)."""
    period = controller.settings.period
    spans = np.full(steps, period)
    errors = np.zeros((steps, 3))
    if rng is not None and jitter > 0.0:
        spans *= 1.0 + rng.uniform(-jitter, jitter, steps)
    if rng is not None and max(noise) > 0.0:
        errors = rng.normal(0.0, 1.0, (steps, 3)) * np.array([noise[0], noise[0], noise[1]])
    rows = np.full((steps if log else 1, len(COLUMNS)), np.nan)
    memory = controller.start(0.0, motion).row.copy()
    truth_row = np.array(truth)
    places = (np.array(start, float), np.array(motion, float), np.array(goals, float).reshape(-1, 3))
    got = Outcome(
        *rough_kernel(np.array(controller.settings), memory, truth_row, *places, spans, errors, more, measured_motion, rows)
    )
    return got, rows[: int(got.steps)] if log else rows[:0]


def true_of(platform: Platform) -> Truth:
    """Return the robot as it was declared."""
    return Truth(platform.dead_time, platform.motor_lag, platform.smallest_wheel_speed)
