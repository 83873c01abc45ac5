"""Reading: whatever stands in a measurement becomes seventeen floats. Never raises; what is no number is told.

Plain tuples, lists and arrays of numbers are packed at once; all else goes through `numbers`, field by field.
"""

from __future__ import annotations

import math
import numbers as kinds
from struct import Struct
from typing import Any

import numpy as np

from steerkit.signals import Measurement, Motion, Pose

NAN = math.nan
SEVENTEEN = Struct("17d")  # turns ints, float32 and bools into floats, and refuses strings, in a third of the time of float()
PLAIN = frozenset({tuple, list, np.ndarray, Pose, Motion})  # kinds of rows that are read at once
ROWS = (tuple, list, np.ndarray)
NUMBERS = (kinds.Real, np.bool_, np.ndarray, list, tuple)


def numbers(measurement: Any) -> tuple[float, ...]:
    """Return the seventeen numbers of any measurement: missing becomes NaN, what is no number the safer, and is told."""
    wrong = False

    def one(value: Any, otherwise: float = NAN) -> float:
        nonlocal wrong
        if value is None:
            return NAN
        try:
            if not isinstance(value, NUMBERS):
                raise TypeError
            found: Any = np.asarray(value)
            if found.size != 1 or np.iscomplexobj(found):
                raise TypeError
            return float(found.astype(np.float64).item())
        except Exception:
            wrong = True
            return otherwise

    def several(values: Any, count: int) -> list[float]:
        nonlocal wrong
        if values is None:
            return [NAN] * count
        try:
            if not isinstance(values, ROWS) or len(values) != count:
                raise TypeError
            found = [one(value) for value in values]
        except Exception:
            found = []
        if len(found) != count:
            wrong = True
            return [NAN] * count
        return found

    try:
        fields = [getattr(measurement, name) for name in Measurement._fields]
    except Exception:
        wrong = True
        fields = [None] * len(Measurement._fields)
    time, pose, goal, pose_time, frame, speed, turn_rate, limit, hold, applied, next_goal = fields
    return (
        one(time),
        *several(pose, 3),
        one(pose_time, otherwise=math.inf),
        *several(goal, 2),
        one(frame),
        one(speed),
        one(turn_rate),
        one(limit, otherwise=0.0),
        one(hold, otherwise=1.0),
        *several(applied, 2),
        *several(next_goal, 2),
        float(wrong),
    )
