"""Answering: whether the robot moves when it is told to.

Wheels told to run below their smallest speed stand still, and a smallest speed that was declared too low leaves the robot standing.
From the pose at which the wheels were last seen to answer, the path and the turn that the robot should have made since are added
up. Where there is much of them and the pose has stayed within its noise, the smallest speed in use is raised by a tenth, at least
to what was told, and so on until the robot moves. A robot that stands for another reason (blocked, motors off) is told of in the
same way; its smallest speed is not raised beyond `most`. Metres, seconds, radians. Derived; periods and tenth were chosen.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from steerkit.angles import difference_kernel
from steerkit.compiled import kernel
from steerkit.memory_row import SILENT, SLOWEST, WATCH_HEADING, WATCH_PATH, WATCH_TIME, WATCH_TURN, WATCH_X, WATCH_Y

SILENT_PERIODS, SILENT_TIME = 7.0, 0.5  # without an answer: the longer of periods and s, besides dead time and lag
LEAST_DUE = 0.02  # m of the wheels: less is not waited for
RAISE = 1.1
FIRST = 0.01  # of the top speed: the first smallest speed of a robot that declared none
LEAST = 1e-3  # of the smallest speed; below it a lag dies away
SEEN = 0.25  # of the path that should have been run counts as an answer
BLUR = 4.0 * math.sqrt(2.0)  # standard deviations of a pose


@kernel
def watch_kernel(
    memory: Sequence[float],
    out: list[float],
    fresh: bool,
    x: float,
    y: float,
    heading: float,
    v: float,
    w: float,
    since: float,
    blur: float,
    half_track: float,
    patience: float,
    top: float,
    most: float,
) -> bool:
    """Write the watch to the memory, the smallest speed raised where it is due; say whether the robot does not answer.

    `fresh`: the pose is a new one; one that is repeated or carried answers nothing.

    (v, w): the motion that the model expects now; `blur`: noise of a pose as a path of the wheels (m).
    """
    slowest, silent = memory[SLOWEST], memory[SILENT]
    path, turn, time = memory[WATCH_PATH], memory[WATCH_TURN], memory[WATCH_TIME]
    at_x, at_y, at_heading = memory[WATCH_X], memory[WATCH_Y], memory[WATCH_HEADING]
    if fresh and at_x != at_x:
        at_x, at_y, at_heading = x, y, heading
    told = abs(v) + abs(w) * half_track
    if told > LEAST * max(slowest, FIRST * top):
        path, turn, time = path + v * since, turn + w * since, time + since
    if fresh:
        dx, dy = x - at_x, y - at_y
        seen = math.sqrt(dx * dx + dy * dy) + abs(difference_kernel(heading, at_heading)) * half_track
        due = abs(path) + abs(turn) * half_track
        if seen > max(BLUR * blur, SEEN * due):
            at_x, at_y, at_heading, path, turn, time, silent = x, y, heading, 0.0, 0.0, 0.0, 0.0
        elif time > patience and due > max(2.0 * BLUR * blur, 0.5 * patience * slowest, LEAST_DUE):
            path, turn, time, silent = 0.0, 0.0, 0.0, 1.0
            if told <= max(most, slowest):  # else no dead band is as wide
                slowest = min(max(RAISE * slowest, FIRST * top, told), max(most, slowest))
    out[SLOWEST], out[SILENT], out[WATCH_PATH], out[WATCH_TURN], out[WATCH_TIME] = slowest, silent, path, turn, time
    out[WATCH_X], out[WATCH_Y], out[WATCH_HEADING] = at_x, at_y, at_heading
    return silent != 0.0
