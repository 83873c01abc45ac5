"""The proof that step.c does the work of the compiled step: the same numbers on random drives with faults in them.

Random robots of the tests, some of their settings drawn anew, are driven to goals by the compiled kernel under dead time, lag and
noise, with everything that a measurement or a stored memory can have wrong with it. At each step C starts from the same memory.
"""

from __future__ import annotations

import ctypes
import math
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from steerkit import Controller
from steerkit.kinematics import arc_kernel, to_robot_kernel
from steerkit.limits import limit_kernel
from steerkit.prediction import stop_end_kernel
from steerkit.step import BELIEVED, HEAD, RESULT, TIME, step_kernel

sys.path.insert(0, str(Path(__file__).resolve().parent.parent / "tests"))
import robots

FLAGS = ("-O3", "-march=native", "-ffp-contract=off", "-fno-math-errno")  # no reassociation, no contraction: the bits stay
SAME = 1e-9  # C and kernel agree to this, absolute or relative
SEED = 20240611

Array = np.ndarray[Any, np.dtype[np.float64]]


def build(folder: Path) -> tuple[Path | None, str]:
    """Compile step.c into `folder`; return the library and the compiler, or None and why there is none."""
    found = next((path for path in map(shutil.which, ("cc", "gcc", "clang")) if path), None)
    if found is None:
        return None, "no C compiler (cc, gcc, clang) on this machine"
    target = folder / "step.so"
    command = [found, *FLAGS, "-shared", "-fPIC", "-o", str(target), str(Path(__file__).with_name("step.c")), "-lm"]
    done = subprocess.run(command, capture_output=True, text=True)
    if done.returncode:
        return None, "the C compiler failed: " + (done.stderr.strip().splitlines() or ["no reason given"])[0]
    return target, subprocess.run([found, "--version"], capture_output=True, text=True).stdout.splitlines()[0]


def address(array: Array) -> ctypes.c_void_p:
    return ctypes.c_void_p(array.ctypes.data)


class Cart:
    """A robot to drive: commands act after the dead time, wheels follow with the lag (one arc for each part of a period)."""

    def __init__(self, controller: Controller, pose: tuple[float, float, float], motion: tuple[float, float] = (0.0, 0.0)) -> None:
        s = controller.settings
        self.period, self.lag = s.period, s.motor_lag
        self.late = s.dead_time / s.period - math.floor(s.dead_time / s.period)
        self.sent = [motion] * (math.floor(s.dead_time / s.period) + 1)
        self.pose, self.motion = pose, motion

    def drive(self, command: tuple[float, float]) -> None:
        self.sent.append(command)
        for (c_v, c_w), share in ((self.sent.pop(0), self.late), (self.sent[0], 1.0 - self.late)):
            span = share * self.period
            left = math.exp(-span / self.lag) if self.lag > 0.0 else 0.0
            v, w = self.motion
            self.motion = c_v + (v - c_v) * left, c_w + (w - c_w) * left
            path, turn = c_v * span + self.lag * (v - self.motion[0]), c_w * span + self.lag * (w - self.motion[1])
            self.pose = arc_kernel(*self.pose, path, turn, 1.0)


def plain_row(at: float, pose: tuple[float, float, float], goal: tuple[float, float]) -> list[float]:
    """Return the fifteen numbers of a measurement of pose and goal, and of nothing else."""
    return [at, *pose, math.nan, *goal, 0.0, math.nan, math.nan, math.nan, 0.0, math.nan, math.nan, 0.0]


def random_robot(rng: np.random.Generator) -> robots.Robot:
    """Return a random robot of the tests; one in a hundred thousand has a lag too short for a platform, and is drawn again."""
    try:
        return robots.draw(rng)
    except ValueError:
        return robots.draw(rng)


def random_controller(rng: np.random.Generator) -> tuple[Controller, tuple[float, float, float]]:
    """Return a controller of a random robot of the tests, some of its settings drawn anew and unchecked, and a start pose."""
    robot = random_robot(rng)
    controller = Controller(robot.platform, capture_radius=robot.capture_radius)
    changes = {
        "reverse_speed": rng.uniform(0.0, 0.5),
        "top_turn_rate": rng.uniform(0.2, 2.0),
        "wheel_speed": rng.uniform(0.1, 0.5),
        "turn_acceleration": rng.uniform(0.2, 2.0),
        "position_noise": rng.uniform(0.0, 0.02),
        "heading_noise": rng.uniform(0.0, 0.05),
        "cruise": rng.uniform(0.05, 2.0),
        "stay_radius": rng.uniform(1.0, 1.5) * robot.capture_radius,
        "rest_radius": rng.uniform(0.5, 1.0) * robot.capture_radius,
        "stop_radius": rng.uniform(0.0, robot.capture_radius),
        "ceiling": rng.uniform(0.5, 10.0),
        "gain": rng.uniform(0.5, 20.0),
        "integral_time": 10.0 ** rng.uniform(-0.5, 1.0),
        "derivative_time": rng.uniform(0.0, 0.1),
        "predict": 0.0,
    }
    drawn = {name: value for name, value in changes.items() if rng.random() < 0.25}
    return controller.unchecked(**drawn), robots.draw_start(rng, robot)


class World:
    """What a controller is told during a random drive: its cart, a goal that moves now and then, and faults, rarely or often."""

    def __init__(self, rng: np.random.Generator, controller: Controller, pose: tuple[float, float, float]) -> None:
        self.rng, self.settings = rng, controller.settings
        self.faults = rng.choice((0.0, 0.3, 1.0))
        self.camera, self.blind = rng.random() < 0.3, rng.random() < 0.2  # the goal seen from the robot; no pose at the start
        self.restless = rng.choice((0.03, 0.3))  # how often the goal moves
        self.tick = rng.choice((1.0, 1.0, 0.3))  # how fast the clock goes
        self.spread = rng.choice((3.0, 0.3, self.settings.capture_radius, 0.0))  # from robot to goal; 0: goal at the origin
        motion = self.any_motion() if rng.random() < 0.5 else (0.0, 0.0)
        self.cart, self.time, self.goal = Cart(controller, pose, motion), 0.0, (0.0, 0.0)
        self.memory = controller.start(0.0, motion).row
        self.move_goal()

    def any_motion(self) -> tuple[float, float]:
        """Return a motion to begin with, slowed to one that the wheels are believed to have."""
        s = self.settings
        v, w = self.rng.uniform(-0.1, 1.0) * s.cruise, self.rng.normal(0.0, 2.0)
        share = min(1.0, 0.99 * BELIEVED * s.wheel_speed / (abs(v) + abs(w) * s.half_track))
        return share * v, share * w

    def move_goal(self) -> None:
        x, y, _ = self.cart.pose
        if self.rng.random() < 0.3:  # a nudge
            self.goal = tuple(self.rng.normal(self.goal, 0.4 * self.settings.capture_radius))
        elif self.spread:
            self.goal = x + self.rng.normal(0.0, self.spread), y + self.rng.normal(0.0, self.spread)

    def rarely(self, share: float) -> bool:
        return bool(self.rng.random() < share * self.faults)

    def tell(self) -> tuple[float, ...]:
        """Return the next measurement, and meddle with the memory."""
        rng, s = self.rng, self.settings
        self.time += s.period * self.tick + (rng.uniform(0.0, 1.3) * s.stale_after if self.rarely(0.05) else 0.0)
        if rng.random() < self.restless:
            self.move_goal()
        if self.rarely(0.02):
            self.memory = self.memory.copy()
            place = rng.integers(HEAD if rng.random() < 0.8 else len(self.memory))
            self.memory[place] = rng.choice((math.nan, math.inf, 1e13, 2e4, 5.0, -3.0, 1.0, 0.0))
        return tuple(map(float, self.spoiled(plain_row(self.time, self.cart.pose, self.goal))))

    def spoiled(self, row: list[float]) -> list[float]:
        """Return a measurement as the world gives it: late, noisy, seen by a camera, sometimes missing or plainly wrong."""
        rng, s = self.rng, self.settings
        if self.camera:
            row[5:8] = *to_robot_kernel(row[1], row[2], row[3], row[5], row[6]), 1.0
        row[1:3] = np.add(row[1:3], rng.normal(0.0, 3.0 * s.position_noise, 2))
        row[3] += rng.normal(0.0, 3.0 * s.heading_noise)
        if self.blind and rng.random() < 0.9:
            row[1] = math.nan
        if self.rarely(0.3):
            row[4] = row[0] - rng.uniform(-0.1, 1.3) * s.stale_after
        if self.rarely(0.2):
            row[8], row[9] = rng.normal(0.0, rng.choice((0.3, 0.01)), 2) if rng.random() < 0.9 else (1e5, math.inf)
        if self.rarely(0.2):
            row[10] = rng.uniform(-0.1, 0.5)
        if self.rarely(0.05):
            row[12], row[13] = rng.normal(0.0, 0.5, 2) if rng.random() < 0.8 else (0.1, math.nan)
        for share, place, values in (
            (0.05, 1, (math.nan, 1e13, row[1] + 3.0)),
            (0.05, 3, (math.nan, row[3] + 2.0, row[3] + 1e3, math.pi, -math.pi)),
            (0.05, 5, (math.nan, -math.inf, row[5] + rng.normal())),
            (0.01, 7, (2.0, math.nan)),
            (0.03, 0, (math.nan, row[0] - 1.0, row[0] + 0.4 * s.period, self.memory[TIME] + 5e-7, row[0] + 100.0)),
            (0.04, 11, (1.0, math.nan)),
            (0.02, 14, (1.0,)),
        ):
            if self.rarely(share):
                row[place] = rng.choice(values)
        return row


class Proof(NamedTuple):
    """What the proof saw: steps, the share of them with all bits equal, the largest difference, phases and causes met."""

    steps: int
    equal: float
    largest: float
    phases: int
    causes: int


def prove_parts(library: ctypes.CDLL, rng: np.random.Generator) -> None:
    """Compare two parts alone: of where a stop ends, a step sees only on which side of a circle; and it never wants to go back."""
    for _ in range(1000):
        stop = np.concatenate([rng.normal(0.0, 2.0, 5), rng.uniform(0.1, 2.0, 3)])
        x, y, heading, v, w, braking, turn_acceleration, path = stop.tolist()
        end = stop_end_kernel(x, y, heading, v, w, braking, turn_acceleration, path)
        prove_part(library.stop_end_alone, stop, end)
        motions = np.concatenate([rng.normal(0.0, 1.0, 4), rng.uniform(0.1, 2.0, 5), rng.uniform(0.05, 0.5, 3)])
        motions[[0, 2, 3, 5]] *= rng.random(4) < 0.7  # at rest, a stop, straight on, forward only
        prove_part(library.limit_alone, motions, limit_kernel(*motions.tolist()))


def prove_part(c_part: Any, numbers: Array, expected: tuple[float, ...]) -> None:
    c_part.restype = None
    got = np.empty(len(expected))
    c_part(address(numbers), address(got))
    if not differences(got, np.array(expected)).max() <= SAME:
        raise SystemExit(f"step.c is not the step: {c_part.__name__} gives {got}, the kernel {expected}; nothing was timed")


def prove(library: ctypes.CDLL, steps: int) -> Proof:
    """Compare C and kernel step for step, from the same memory, on drives that the kernel steers; stop where they differ."""
    library.step_row.restype = None
    rng = np.random.default_rng(SEED)
    prove_parts(library, rng)
    met, equal, largest, made = 0, 0, 0.0, 0
    phases = set()
    while made < steps:
        controller, pose = random_controller(rng)
        world = World(rng, controller, pose)
        settings = np.array(controller.settings)
        settings.setflags(write=False)
        for _ in range(int(rng.integers(10, 80))):
            measured, memory = world.tell(), world.memory
            memory.setflags(write=False)
            out = np.empty(len(memory))
            result = step_kernel(settings, memory, measured, out)
            row = np.concatenate([memory, measured, np.full(RESULT, 7.0)])
            library.step_row(address(settings), address(row), ctypes.c_long(len(memory)))
            got, expected = np.delete(row, np.s_[len(memory) : -RESULT]), np.concatenate([out, result])
            gaps = differences(got, expected)
            if not gaps.max() <= SAME:
                place = int(gaps.argmax())
                name = f"memory[{place}]" if place < len(out) else f"result[{place - len(out)}]"
                pair = f"C gives {got[place]:.17g}, the kernel {expected[place]:.17g}"
                raise SystemExit(f"step.c is not the step: at random step {made}, {name}: {pair}; nothing was timed")
            largest = max(largest, float(gaps.max()))
            numbers = ~np.isnan(expected)
            equal += got[numbers].tobytes() == expected[numbers].tobytes()
            phases.add(result[4])
            met |= int(result[5])
            made += 1
            world.memory = out
            world.cart.drive((result[2], result[3]))
    return Proof(made, equal / made, largest, len(phases), met.bit_count())


def differences(got: Array, expected: Array) -> Array:
    """Return the differences, absolute or relative, whichever is smaller; NaN equals NaN, and infinity itself."""
    same = (got == expected) | (np.isnan(got) & np.isnan(expected))
    with np.errstate(invalid="ignore"):
        gaps = np.abs(got - expected) / np.maximum(1.0, np.abs(expected))
    return np.where(same, 0.0, np.where(np.isnan(gaps), math.inf, gaps))
