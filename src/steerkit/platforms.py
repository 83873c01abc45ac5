"""Platform: the dozen measured numbers of the robot, declared once, checked once.

SI units. Each field says what it is and how to measure it with a tape, a stopwatch and a log. Every wrong number is refused at
construction with a sentence, because a wrong unit here is a wrong gain later. To and from JSON with the unit in each key.
"""

from __future__ import annotations

import json
import math
from dataclasses import Field, dataclass, field, fields
from typing import Any

from steerkit.checks import check_above_zero, check_at_most, check_not_negative, rounded_down, shown

__all__ = ["Platform"]

VERSION = 1
SHORTEST_PERIOD = 1e-4  # s
ON_STEP = 1e-10  # of a step of the wheel speed; nearer is on it
SMALLEST = 1e-6  # of any other number that may not be 0
VERSION_KEY = "steerkit_platform_version"


def number(unit: str, measure: str, most: float, mistake: str, default: float | None = None) -> Any:
    """Declare one number: its unit, how it is measured, the most that is believed, and what a larger one usually is."""
    told = {"unit": unit, "measure": measure, "most": most, "mistake": mistake}
    return field(metadata=told) if default is None else field(default=default, metadata=told)


def unit_suffix(unit: str) -> str:
    return unit.replace("/", "_per_").replace("^", "")


@dataclass(frozen=True, slots=True)
class Platform:
    """What is known of the robot before it drives.

    Parameters
    ----------
    radius : float, m
        Footprint: the smallest circle about the middle of the axle that holds the whole robot. Tape.
    track_width : float, m
        Distance between the wheel contact points. Tape; better, ten turns on the spot.
    wheel_speed_limit : float, m/s
        Fastest that either wheel runs over the floor with load. Log of a straight run, wheels told more than they can.
    speed_limit : float, m/s
        Fastest that the robot shall go.
    turn_rate_limit : float, rad/s
        Fastest that it shall turn.
    acceleration : float, m/s^2
        Steepest gain of speed that the drive follows without slip, loaded. Log of a start.
    braking : float, m/s^2
        Steepest loss of speed that it follows without slip, loaded, downhill where it must. Log of a stop.
    turn_acceleration : float, rad/s^2
        Steepest change of turn rate that it follows. Log of a start on the spot.
    period : float, s
        Time between two control steps.
    dead_time : float, s
        From the instant that a pose is true (with `pose_time` told: from the step) to the instant that a command made from it
        moves the wheels. Log of a step.
    motor_lag : float, s
        Time constant of the wheels behind their command, after the dead time: 63 % of a step. 0 if not seen.
    position_noise : float, m
        Standard deviation of each position coordinate at rest. Log of a minute standing still.
    heading_noise : float, rad
        Standard deviation of the heading at rest. The same log.
    reverse_speed_limit : float, m/s
        Fastest backwards; 0: forward only.
    smallest_wheel_speed : float, m/s
        Below it a wheel that is told to move stands still; 0 if not seen. Log of a command that grows slowly from 0.
    wheel_speed_resolution : float, m/s
        The drive takes wheel speeds in multiples of this; 0: any. Data sheet of the drive, or the same log.

    Raises
    ------
    TypeError, ValueError
        `name=value unit must be ...; how to repair`.

    Examples
    --------
    >>> cart = Platform(radius=0.30, track_width=0.42, wheel_speed_limit=1.1, speed_limit=0.9, turn_rate_limit=2.0,
    ...                 acceleration=0.8, braking=1.2, turn_acceleration=5.0, period=0.05, dead_time=0.12)
    >>> Platform.from_json(cart.to_json()) == cart
    True
    """

    radius: float = number("m", "give the circle about the middle of the axle that holds the robot", 20.0, "millimetres")
    track_width: float = number("m", "give the distance between the wheel contact points", 20.0, "millimetres")
    wheel_speed_limit: float = number("m/s", "give the fastest speed of a wheel over the floor", 100.0, "mm/s or rpm")
    speed_limit: float = number("m/s", "give the fastest speed that the robot shall go", 100.0, "mm/s")
    turn_rate_limit: float = number("rad/s", "give radians per second (180 deg/s is 3.14)", 30.0, "degrees per second")
    acceleration: float = number("m/s^2", "give the steepest gain of speed without slip", 100.0, "mm/s^2")
    braking: float = number("m/s^2", "give the steepest loss of speed without slip, as a positive number", 100.0, "mm/s^2")
    turn_acceleration: float = number("rad/s^2", "give the steepest change of turn rate", 1000.0, "degrees per second squared")
    period: float = number("s", "give the time between two control steps", 2.0, "milliseconds or Hz")
    dead_time: float = number("s", "give the time from a true pose to the wheels' answer", 5.0, "milliseconds")
    motor_lag: float = number("s", "give the time constant of the wheels, 0 if not seen", 5.0, "milliseconds", 0.0)
    position_noise: float = number("m", "give the standard deviation of a coordinate at rest", 10.0, "millimetres", 0.0)
    heading_noise: float = number("rad", "give the standard deviation of the heading at rest", 0.5, "degrees", 0.0)
    reverse_speed_limit: float = number("m/s", "give the fastest speed backwards, 0 for none", 100.0, "mm/s", 0.0)
    smallest_wheel_speed: float = number("m/s", "give the speed below which a wheel stands still, 0 if not seen", 10.0, "mm/s", 0.0)
    wheel_speed_resolution: float = number("m/s", "give the step of the wheel-speed command, 0 for any", 10.0, "mm/s", 0.0)

    def __post_init__(self) -> None:
        for one in fields(self):
            object.__setattr__(self, one.name, checked(one, getattr(self, one.name)))
        check_at_most(
            "track_width",
            self.track_width,
            "m",
            2.0 * self.radius,
            "the wheels stand inside the footprint, 2 * radius (the robot's, not the wheel's)",
        )
        check_slowest(self)

    @property
    def slowest_wheel_speed(self) -> float:
        """Slowest that a wheel can be told to run: the least step of the resolution that moves it (m/s); 0 where any will do."""
        return slowest_speed(self.smallest_wheel_speed, self.wheel_speed_resolution)

    @property
    def top_speed(self) -> float:
        """Fastest straight speed: the smaller of speed limit and wheel-speed limit (m/s)."""
        return min(self.speed_limit, self.wheel_speed_limit)

    @property
    def top_turn_rate(self) -> float:
        """Fastest turn on the spot: the smaller of turn-rate limit and what the wheels give (rad/s)."""
        return min(self.turn_rate_limit, 2.0 * self.wheel_speed_limit / self.track_width)

    def notes(self) -> list[str]:
        """Return a sentence for each declared number that another one makes idle."""
        found = []
        if self.speed_limit > self.wheel_speed_limit:
            found.append(
                f"The wheels give {self.wheel_speed_limit:.3g} m/s; speed_limit={self.speed_limit:.3g} m/s is never reached."
            )
        spot = 2.0 * self.wheel_speed_limit / self.track_width
        if self.turn_rate_limit > spot:
            found.append(
                f"The wheels give {spot:.3g} rad/s on the spot; turn_rate_limit={self.turn_rate_limit:.3g} rad/s is never reached; "
                "is it in degrees per second?"
            )
        return found

    def to_json(self) -> str:
        """Return the numbers as JSON text, the version first, the unit in each key (`radius_m`)."""
        rows: dict[str, float] = {VERSION_KEY: VERSION}
        rows |= {f"{one.name}_{unit_suffix(one.metadata['unit'])}": getattr(self, one.name) for one in fields(self)}
        return json.dumps(rows, indent=2) + "\n"

    @classmethod
    def from_json(cls, text: str) -> Platform:
        """Return the platform written by `to_json`; anything missing, unknown or of a later version is refused."""
        try:
            rows = json.loads(text)
        except json.JSONDecodeError as trouble:
            raise ValueError(f"the platform file is not whole JSON ({trouble}); write it again with Platform.to_json") from None
        if not isinstance(rows, dict) or VERSION_KEY not in rows:
            raise ValueError(f"the platform file has no {VERSION_KEY}; write it with Platform.to_json")
        version = rows.pop(VERSION_KEY)
        if version != VERSION:
            raise ValueError(
                f"{VERSION_KEY}={version!r} must be {VERSION}; read it with the steerkit that wrote it, or write it again"
            )
        keys = {f"{one.name}_{unit_suffix(one.metadata['unit'])}": one for one in fields(cls)}
        unknown = sorted(set(rows) - set(keys))
        if unknown:
            raise ValueError(f"the platform file has unknown keys {unknown}; known are {sorted(keys)}")
        missing = sorted(key for key, one in keys.items() if key not in rows and needed(one))
        if missing:
            raise ValueError(f"the platform file lacks {missing}; add them, each in the unit of its key")
        return cls(**{keys[key].name: value for key, value in rows.items()})


def slowest_speed(smallest: float, step: float) -> float:
    """Return the slowest speed but 0 that a wheel can be told; 0 where any will do. Compiled in `wheel_grid`, too."""
    if not step > 0.0:
        return smallest
    return step * max(1.0, math.ceil(smallest / step - ON_STEP))


def check_slowest(platform: Platform) -> None:
    """Refuse a robot whose slowest wheel speed leaves it no straight drive or no turn on the spot."""
    slowest = platform.slowest_wheel_speed
    told = f"smallest_wheel_speed={shown(platform.smallest_wheel_speed, 'm/s')}"
    if platform.wheel_speed_resolution > 0.0:
        told += f" in steps of wheel_speed_resolution={shown(platform.wheel_speed_resolution, 'm/s')} ({shown(slowest, 'm/s')})"
    for name in ("speed_limit", "wheel_speed_limit"):
        most = getattr(platform, name)
        if slowest > most:
            raise ValueError(f"{told} must be <= {name}={shown(most, 'm/s')}, else the wheels never move; measure them again")
    most = platform.turn_rate_limit * platform.track_width / 2.0
    if slowest > most:
        raise ValueError(
            f"{told} must be <= turn_rate_limit * track_width / 2 = {shown(rounded_down(most), 'm/s')}, "
            "else it cannot turn on the spot; raise the turn-rate limit"
        )


def needed(one: Field[Any]) -> bool:
    """Say whether a number has no default."""
    return not isinstance(one.default, float)


def checked(one: Field[Any], value: object) -> float:
    """Return one number checked: finite, of the right sign, and not a wrong unit."""
    told = one.metadata
    may_be_zero = one.name == "dead_time" or not needed(one)
    size = (check_not_negative if may_be_zero else check_above_zero)(one.name, value, told["unit"], told["measure"])
    least = SHORTEST_PERIOD if one.name == "period" else SMALLEST
    if size < least and not may_be_zero:
        raise ValueError(f"{one.name}={shown(size, told['unit'])} must be >= {shown(least, told['unit'])}; {told['measure']}")
    if one.name == "wheel_speed_resolution" and 0.0 < size < least:
        raise ValueError(f"{one.name}={shown(size, told['unit'])} must be 0 or >= {shown(least, told['unit'])}; {told['measure']}")
    if size > told["most"]:
        raise ValueError(
            f"{one.name}={shown(size, told['unit'])} must be <= {shown(told['most'], told['unit'])}; "
            f"is it in {told['mistake']}? {told['measure']}"
        )
    return size + 0.0
