"""The proof that step.c does the work of the compiled step: the same numbers on random drives with faults in them.

Random robots of the tests, three in four with a dead band or a grid of wheel speeds, some of their settings drawn anew, are driven
to goals and through way points by the compiled kernel, by either law, under dead time, lag and noise, with everything that a
measurement or a stored memory can have wrong with it; some do not answer. At each step C starts from the same memory. What was
met is counted, the branches of step.c too: an equality says nothing of a branch that was never entered.
"""

from __future__ import annotations

import ctypes
import dataclasses
import math
import shutil
import subprocess
import sys
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from steerkit import (
    Causes,
    Controller,
    Phase,
    Slowing,
    angles,
    answering,
    approach,
    heading,
    intake,
    limits,
    memory_row,
    prediction,
    schedule,
    step,
    wheel_grid,
)
from steerkit.answering import watch_kernel
from steerkit.controller import InPlace
from steerkit.intake import BELIEVED, MEASURED
from steerkit.kinematics import arc_kernel, to_robot_kernel
from steerkit.limits import limit_kernel, turn_first_kernel
from steerkit.memory_row import HEAD, PROGRESS, SILENT, SLOWEST, TIME, WATCH_HEADING, WATCH_PATH, WATCH_TIME, WATCH_TURN, WATCH_X
from steerkit.prediction import stop_end_kernel
from steerkit.schedule import cut_stop_kernel, schedule_kernel, stops_kernel
from steerkit.settings import Settings
from steerkit.step import PASSED, RESULT, passed_within_kernel, step_kernel, touched_kernel
from steerkit.wheel_grid import on_grid_kernel

sys.path.insert(0, str(Path(__file__).resolve().parent.parent / "tests"))
import robots

FLAGS = ("-O3", "-march=native", "-ffp-contract=off", "-fno-math-errno")  # no reassociation, no contraction: the bits stay
SAME = 1e-9  # C and kernel agree to this, absolute or relative
SEED = 20240611

Array = np.ndarray[Any, np.dtype[np.float64]]


MODULES = (angles, answering, approach, heading, intake, limits, prediction, schedule, step, wheel_grid)


def constants() -> dict[str, float]:
    """Return what step.c takes from Python: the places in its rows, the codes, and the constants of each module."""
    found: dict[str, float] = {"MEASURED": MEASURED, "RESULT": RESULT} | plain_constants(memory_row, "")
    for module in MODULES:
        found |= plain_constants(module, module.__name__.rpartition(".")[2].upper() + "_")
    for prefix, names in (("S_", Settings._fields), ("M_", InPlace.MEASURED)):
        found |= {prefix + name.upper(): place for place, name in enumerate(names)}
    for prefix, codes in (("PHASE_", Phase), ("SLOWING_", Slowing), ("", Causes)):
        found |= {prefix + code.name: int(code) for code in codes}
    return found


def plain_constants(module: Any, prefix: str) -> dict[str, float]:
    numbers = {name: value for name, value in vars(module).items() if name.isupper() and isinstance(value, (int, float))}
    return {prefix + name: value for name, value in numbers.items() if not isinstance(value, bool) and math.isfinite(value)}


def in_c(number: float) -> str:
    """Return a number as C reads it, to the bit."""
    return str(number) if isinstance(number, int) else f"({number.hex()})"


def build(folder: Path) -> tuple[Path | None, str]:
    """Compile step.c into `folder`; return the library and the compiler, or None and why there is none.

    Beside it one that counts the branches that it enters, `counting.so`: for the proof, not for timing.
    """
    found = next((path for path in map(shutil.which, ("cc", "gcc", "clang")) if path), None)
    if found is None:
        return None, "no C compiler (cc, gcc, clang) on this machine"
    (folder / "numbers.h").write_text("".join(f"#define {name} {in_c(value)}\n" for name, value in constants().items()))
    command = [found, *FLAGS, "-shared", "-fPIC", f"-I{folder}", str(Path(__file__).with_name("step.c")), "-lm", "-o"]
    for more in ([str(folder / "counting.so"), "-DCOUNTING"], [str(folder / "step.so")]):
        done = subprocess.run(command + more, capture_output=True, text=True)
        if done.returncode:
            return None, "the C compiler failed: " + (done.stderr.strip().splitlines() or ["no reason given"])[0]
    return folder / "step.so", subprocess.run([found, "--version"], capture_output=True, text=True).stdout.splitlines()[0]


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
    """Return the numbers of a measurement of pose and goal, and of nothing else."""
    return [at, *pose, math.nan, *goal, 0.0, math.nan, math.nan, math.nan, 0.0, math.nan, math.nan, math.nan, math.nan, 0.0]


def random_robot(rng: np.random.Generator) -> robots.Robot:
    """Return a random robot of the tests, three in four with a dead band, a grid of wheel speeds or both, from faint to coarse."""
    robot = robots.draw(rng)
    p = robot.platform
    most = 0.9 * min(p.top_speed, p.top_turn_rate * p.track_width / 2.0, 0.8 * robot.capture_radius / p.period)
    smallest, step = rng.choice((0.0, 0.0, 1.0, 1.0), 2) * 10.0 ** rng.uniform(-3.0, 0.0, 2) * most
    step = min(step, most - smallest)
    platform = dataclasses.replace(p, smallest_wheel_speed=smallest, wheel_speed_resolution=step)
    return robot._replace(platform=platform)


def random_controller(rng: np.random.Generator) -> tuple[Controller, tuple[float, float, float]]:
    """Return a controller of a random robot, by either law, some of its settings drawn anew and unchecked, and a start pose."""
    try:
        robot = random_robot(rng)
        constant = bool(rng.random() < 0.4)
        controller = Controller(robot.platform, capture_radius=robot.capture_radius, constant_speed=constant)
    except ValueError:  # one in thirty, mostly a constant speed within the dead band; drawn again
        return random_controller(rng)
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
        "aim_radius": rng.uniform(0.1, 1.0) * robot.capture_radius,
        "ceiling": rng.uniform(0.5, 10.0),
        "gain": rng.uniform(0.5, 20.0),
        "integral_time": 10.0 ** rng.uniform(-0.5, 1.0),
        "derivative_time": rng.uniform(0.0, 0.1),
        "predict": 0.0,
        "settling": rng.uniform(1.0, 5.0) * robot.platform.period,
        "most_raised": rng.uniform(0.0, 0.5),
    }
    share = rng.choice((0.0, 0.25))
    drawn = {name: value for name, value in changes.items() if rng.random() < share}
    return controller.unchecked(**drawn), robots.draw_start(rng, robot)


class World:
    """What a controller is told during a random drive: its cart, a goal that moves now and then, faults, rarely or often.

    Some tour through way points. Some carts do not answer: their wheels stand still below a speed that nobody declared, or at any.
    """

    def __init__(self, rng: np.random.Generator, controller: Controller, pose: tuple[float, float, float]) -> None:
        self.rng, self.settings = rng, controller.settings
        self.faults = rng.choice((0.0, 0.3, 1.0))
        self.camera, self.blind = rng.random() < 0.3, rng.random() < 0.2  # the goal seen from the robot; no pose at the start
        self.restless = rng.choice((0.03, 0.3))  # how often the goal moves
        self.tick = rng.choice((1.0, 1.0, 0.3))  # how fast the clock goes
        self.spread = rng.choice((3.0, 0.3, self.settings.capture_radius, 0.0))  # from robot to goal; 0: goal at the origin
        self.touring = rng.random() < 0.4  # through way points
        self.deaf = rng.choice((0.0, 0.0, rng.uniform(0.0, 0.2), math.inf))  # m/s; wheels slower than this stand still
        motion = self.any_motion() if rng.random() < 0.5 else (0.0, 0.0)
        self.cart, self.time, self.goal = Cart(controller, pose, motion), 0.0, (0.0, 0.0)
        self.memory, self.next_goal = controller.start(0.0, motion).row, (0.0, 0.0)
        self.move_goal()
        self.move_next_goal()

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

    def move_next_goal(self) -> None:
        self.next_goal = tuple(self.rng.normal(self.goal, 2.0 * self.spread + self.settings.capture_radius))

    def answer(self, phase: float, command: tuple[float, float]) -> None:
        """Drive the cart as commanded, if it answers; give the next goal where the way point is passed, sooner or later."""
        v, w = command
        wheel = abs(v) + abs(w) * self.settings.half_track
        self.cart.drive(command if wheel >= self.deaf else (0.0, 0.0))
        if phase == Phase.PASSED and self.rng.random() < 0.5:
            self.goal = self.next_goal
            self.move_next_goal()

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
            self.memory[place] = rng.choice((math.nan, math.inf, 1e13, 2e4, 5.0, -3.0, 3.0, 2.0, 1.0, 0.0))
        return tuple(map(float, self.spoiled(plain_row(self.time, self.cart.pose, self.goal))))

    def spoiled(self, row: list[float]) -> list[float]:
        """Return a measurement as the world gives it: late, noisy, seen by a camera, sometimes missing or plainly wrong."""
        rng, s = self.rng, self.settings
        if self.touring and rng.random() < 0.95:
            row[14:16] = self.next_goal
            if self.camera:
                row[14:16] = to_robot_kernel(row[1], row[2], row[3], *self.next_goal)
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
            row[10] = rng.uniform(-0.1, 0.5) * rng.choice((1.0, 0.1))
        if self.rarely(0.05):
            row[12], row[13] = rng.normal(0.0, 0.5, 2) if rng.random() < 0.8 else (0.1, math.nan)
        often = 10.0 if self.memory[PROGRESS] == PASSED else 1.0  # what follows a way point passed
        for share, place, values in (
            (0.05, 1, (math.nan, 1e13, row[1] + 3.0)),
            (0.05, 3, (math.nan, row[3] + 2.0, row[3] + 1e3, math.pi, -math.pi)),
            (0.05 * often, 5, (math.nan, -math.inf, row[5] + rng.normal())),
            (0.01, 7, (2.0, math.nan)),
            (0.03, 0, (math.nan, row[0] - 1.0, row[0] + 0.4 * s.period, self.memory[TIME] + 5e-7, row[0] + 100.0)),
            (0.04, 11, (1.0, math.nan)),
            (0.02 * often, 15, (math.nan, 1e13, row[15] + rng.normal())),
            (0.02, 16, (1.0,)),
        ):
            if self.rarely(share):
                row[place] = rng.choice(values)
        return row


class Proof(NamedTuple):
    """What the proof saw: steps, the share of them with all bits equal, the largest difference, how often it met each thing."""

    steps: int
    equal: float
    largest: float
    met: dict[str, Counter[str]]  # phases, causes, what slowed, branches


def parts(rng: np.random.Generator) -> Iterator[tuple[str, Any, Array]]:
    """Yield parts to compare alone, their kernels, and numbers for them that a step seldom gives.

    Of the end of a stop, a step sees only on which side of a circle it is; it never wants to go back, and seldom raises a speed.
    """
    yield "stop_end_alone", stop_end_kernel, np.concatenate([rng.normal(0.0, 2.0, 5), rng.uniform(0.1, 2.0, 3)])
    motions = np.concatenate([rng.normal(0.0, 1.0, 4), rng.uniform(0.1, 2.0, 5), rng.uniform(0.05, 0.5, 3)])
    motions[[0, 2, 3, 5]] *= rng.random(4) < 0.7  # at rest, a stop, straight on, forward only
    yield "limit_alone", limit_kernel, motions
    yield "turn_first_alone", turn_first_kernel, np.delete(motions, 5)
    radius = 10.0 ** rng.uniform(-2.0, 1.0)
    task = [rng.uniform(0.1, 5.0) * radius, rng.uniform(-4.0, 4.0), *rng.normal(0.0, 1.0, 2), rng.uniform(-0.5, 0.5), radius]
    robot = [rng.uniform(0.1, 1.0) * radius, *rng.uniform(0.1, 2.0, 5), *rng.uniform(0.01, 0.5, 4)]
    drive = np.array(task + robot)
    drive[0] *= rng.choice((0.0, 1e-13, 1.0), p=(0.05, 0.05, 0.9))  # at the goal, or all but
    drive[7] *= rng.random() < 0.9  # told to stand
    yield "schedule_alone", scheduled, np.append(drive, rng.random() < 0.2)
    stop = np.concatenate([rng.uniform(0.0, 2.0, 1), rng.normal(0.0, 1.0, 3), rng.uniform(0.1, 1.0, 4), rng.uniform(0.01, 0.5, 2)])
    yield "stops_alone", stops_kernel, stop
    yield "cut_stop_alone", cut_stop_kernel, stop[[0, 6, 8, 9]]
    wheels = np.concatenate([rng.normal(0.0, 0.4, 4), rng.uniform(0.01, 0.5, 2), rng.uniform(0.05, 1.0, 4)])
    wheels[[0, 2, 3, 5]] *= rng.random(4) < 0.7  # at rest, a turn on the spot, straight on, any speed
    if rng.random() < 0.3:  # on the grid already
        left, right = wheels[5] * rng.integers(-5, 6, 2)
        wheels[:2] = 0.5 * (left + right), (right - left) / (2.0 * wheels[9])
    yield "on_grid_alone", on_grid_kernel, wheels
    memory = rng.normal(0.0, 0.3, HEAD)
    memory[[SLOWEST, WATCH_TIME, SILENT]] = rng.uniform(0.0, 0.2), rng.uniform(0.0, 2.0), rng.integers(2)
    pose = memory[WATCH_X : WATCH_HEADING + 1] + rng.normal(0.0, rng.choice((0.02, 0.3)), 3)
    memory[[WATCH_PATH, WATCH_TURN]] *= rng.choice((1.0, 0.05))  # little due
    seen = [
        *rng.normal(0.0, 0.3, 2),
        rng.uniform(0.0, 0.05),
        rng.uniform(0.0, 0.05) * rng.integers(2),
        *rng.uniform(0.1, 1.0, 3),
        rng.uniform(0.0, 0.3),
    ]
    yield "passed_within_alone", passed_within, np.append(rng.uniform(0.0, 1.0, len(Settings._fields)), rng.normal())
    path = [*rng.normal(0.0, 1.0, 7), *rng.uniform(0.02, 0.5, 2), *rng.normal(0.0, 0.3, 2), rng.uniform(0.0, 0.5)]
    path[8] *= rng.integers(2)  # no lag
    yield "touched_alone", touched_kernel, np.array(path)
    yield "watch_alone", watched, np.concatenate([memory, [float(rng.random() < 0.9)], pose, seen])


def scheduled(*numbers: float) -> tuple[float, float, float]:
    """Return the motion of the schedule and what slows; the last number says whether to turn on the spot."""
    return schedule_kernel(*numbers[:-1], bool(numbers[-1]))


def passed_within(*numbers: float) -> float:
    """Return how far away a way point just passed can be, squared; the last number is the speed."""
    return passed_within_kernel(np.array(numbers[:-1]), numbers[-1])


def watched(*numbers: float) -> list[float]:
    """Return the memory after a watch."""
    memory, fresh, *seen = np.array(numbers[:HEAD]), bool(numbers[HEAD]), *numbers[HEAD + 1 :]
    out = memory.copy()
    memory.setflags(write=False)
    watch_kernel(memory, out, fresh, *seen)
    return out.tolist()


def prove_part(libraries: list[ctypes.CDLL], name: str, part: Any, numbers: Array) -> None:
    expected = np.array(part(*numbers.tolist()), dtype=np.float64, ndmin=1)
    for library in libraries:
        c_part = library[name]
        c_part.restype = None
        got = np.empty(len(expected))
        c_part(address(numbers), address(got))
        if not differences(got, expected).max() <= SAME:
            raise SystemExit(f"step.c is not the step: {name} gives {got}, the kernel {expected}; nothing was timed")


def step_in_c(library: ctypes.CDLL, settings: Array, memory: Array, measured: tuple[float, ...]) -> Array:
    """Return the new memory and the result."""
    library.step_row.restype = None
    row = np.concatenate([memory, measured, np.full(RESULT, 7.0)])
    library.step_row(address(settings), address(row), ctypes.c_long(len(memory)))
    return np.delete(row, np.s_[len(memory) : -RESULT])


def prove(library: ctypes.CDLL, counting: ctypes.CDLL, steps: int) -> Proof:
    """Compare C and kernel step for step, from the same memory, on drives that the kernel steers; stop where they differ."""
    rng = np.random.default_rng(SEED)
    for _ in range(steps // 20):
        for part in parts(rng):
            prove_part([library, counting], *part)
    met = {kind: Counter(dict.fromkeys(names, 0)) for kind, names in KINDS.items()}
    equal, largest, made = 0, 0.0, 0
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
            got, expected = step_in_c(library, settings, memory, measured), np.concatenate([out, result])
            step_in_c(counting, settings, memory, measured)
            gaps = differences(got, expected)
            if not gaps.max() <= SAME:
                place = int(gaps.argmax())
                name = f"memory[{place}]" if place < len(out) else f"result[{place - len(out)}]"
                pair = f"C gives {got[place]:.17g}, the kernel {expected[place]:.17g}"
                raise SystemExit(f"step.c is not the step: at random step {made}, {name}: {pair}; nothing was timed")
            largest = max(largest, float(gaps.max()))
            numbers = ~np.isnan(expected)
            equal += got[numbers].tobytes() == expected[numbers].tobytes()
            count(met, result)
            made += 1
            world.memory = out
            world.answer(result[4], (result[2], result[3]))
    met["branches"] = branches(counting)
    never = [f"{kind}: {name}" for kind, counted in met.items() for name, often in counted.items() if not often]
    if never:
        raise SystemExit(f"the proof never met {', '.join(never)}: it says nothing of them; nothing was timed")
    return Proof(made, equal / made, largest, met)


KINDS: dict[str, list[str]] = {
    "phases": [one.name for one in Phase],
    "causes": [str(one.name) for one in Causes],
    "slowed by": [one.name for one in Slowing],
}


def count(met: dict[str, Counter[str]], result: tuple[float, ...]) -> None:
    met["phases"][Phase(int(result[4])).name] += 1
    met["slowed by"][Slowing(int(result[16])).name] += 1
    for cause in Causes(int(result[5])):
        met["causes"][str(cause.name)] += 1


def branches(counting: ctypes.CDLL) -> Counter[str]:
    """Return how often each branch of step.c was entered."""
    names = ctypes.string_at(ctypes.addressof(ctypes.c_char.in_dll(counting, "names"))).decode().split()
    return Counter(dict(zip(names, (ctypes.c_long * len(names)).in_dll(counting, "entered"), strict=True)))


def differences(got: Array, expected: Array) -> Array:
    """Return the differences, absolute or relative, whichever is smaller; NaN equals NaN, and infinity itself."""
    same = (got == expected) | (np.isnan(got) & np.isnan(expected))
    with np.errstate(invalid="ignore"):
        gaps = np.abs(got - expected) / np.maximum(1.0, np.abs(expected))
    return np.where(same, 0.0, np.where(np.isnan(gaps), math.inf, gaps))
