"""How fast one step is: beside C, beside plain Python, beside its own imports. Run `python benchmarks/step.py [--quick]`.

`step.c` is the same work in C. It is compiled here, proved to give the numbers of the compiled kernel (`same_work.py`), and only
then timed. All is timed in one process, in turn, on recorded drives to a goal: what carries over to another machine is the ratios.
README.md beside this file says what each of them means.
"""

from __future__ import annotations

import argparse
import ctypes
import gc
import json
import math
import os
import platform
import statistics
import subprocess
import sys
import tempfile
import textwrap
import timeit
from pathlib import Path
from struct import Struct
from typing import Any, NamedTuple

import numpy as np

import steerkit
from same_work import SAME, Array, Cart, Proof, address, build, differences, plain_row, prove
from steerkit import Command, Controller, Decision, Measurement, Memory, Motion, Phase, Platform, Pose, Report, compiled
from steerkit.compiled import kernel
from steerkit.controller import PHASES, SLOWING, causes_of, record
from steerkit.intake import MEASURED
from steerkit.reading import PLAIN, numbers
from steerkit.step import RESULT, step_kernel

CASES = ("easy", "heavy", "grid", "constant")
QUICK, FULL = 9, 25  # repeats
RAREST = 8  # branches printed
SPAN = 0.004  # s; the least length of a sample
GOALS = {  # what the design asks for: the most, or (negative) the least
    "pure step / REF": 1.5,
    "pure step / C giving the same objects": 0.7,
    "in-place step / REF": 0.7,
    "plain Python / pure step": -2.0,
    "cached start / numpy and numba": 3.5,
    "import steerkit / import numpy": 0.2,
}

Samples = dict[str, list[float]]  # seconds, in the order in which they were taken
Pair = tuple[float, float] | None


# --- what is timed ----------------------------------------------------------------------------------------------------------------


def case_controller(case: str) -> Controller:
    """Return the controller of a case.

    By the schedule: a cart seen through a plain delay (easy); one at 100 Hz with a long delay and a lag (heavy); the first with a
    dead band and steps of wheel speed (grid). At constant speed: the first.
    """
    period, dead_time, lag = (0.01, 0.3, 0.1) if case == "heavy" else (0.05, 0.12, 0.0)
    smallest, step = (0.03, 0.008) if case == "grid" else (0.0, 0.0)
    cart = Platform(
        radius=0.30,
        track_width=0.42,
        wheel_speed_limit=1.1,
        speed_limit=0.9,
        turn_rate_limit=2.0,
        acceleration=0.8,
        braking=1.2,
        turn_acceleration=5.0,
        period=period,
        dead_time=dead_time,
        motor_lag=lag,
        smallest_wheel_speed=smallest,
        wheel_speed_resolution=step,
    )
    return Controller(cart, capture_radius=0.10, constant_speed=case == "constant")


def recorded_drive(controller: Controller, goal: tuple[float, float], rest: int = 10) -> Array:
    """Return the measurements of a whole drive, from a start at the origin until the robot has been at rest for some steps."""
    cart, memory = Cart(controller, (0.0, 0.0, 0.0)), controller.start(0.0)
    rows: list[list[float]] = []
    while rest > 0 and len(rows) < 5000:
        rows.append(plain_row(len(rows) * cart.period, cart.pose, goal))
        decision = controller.step(memory, as_measurement(rows[-1]))
        memory = decision.memory
        cart.drive((decision.command.speed, decision.command.turn_rate))
        rest -= decision.phase == Phase.ARRIVED
    if rest:
        raise SystemExit("the recorded drive did not arrive: a timing of it would say nothing")
    return np.array(rows)


def as_measurement(row: Any) -> Measurement:
    """Return a measurement of pose and goal as a control loop makes it."""
    at, x, y, heading, _, goal_x, goal_y = (float(value) for value in row[:7])
    return Measurement(time=at, pose=(x, y, heading), goal=(goal_x, goal_y))


class Robot(ctypes.Structure):
    """The fixed buffers of `step_in_place`."""

    _fields_ = (("settings", ctypes.c_void_p), ("row", ctypes.c_void_p), ("size", ctypes.c_long))


class ThroughC:
    """The step in C behind the same door as the controller: memory and measurement in, decision out, nothing shared.

    The leanest that was found: the memory rows are C arrays that NumPy looks at, so that no address has to be asked for.
    """

    __slots__ = ("c_step", "first", "fixed", "measured", "pack", "result", "row_type", "settings", "shape", "unpack")

    def __init__(self, library: ctypes.CDLL, controller: Controller) -> None:
        self.settings = np.array(controller.settings)
        start = controller.start(0.0).row
        self.first, self.shape = start.tolist(), start.shape
        self.row_type = ctypes.c_double * len(self.first)
        self.measured = bytearray(8 * MEASURED)
        self.result = bytearray(8 * RESULT)
        self.pack = Struct(f"{MEASURED}d").pack_into
        self.unpack = Struct(f"{RESULT}d").unpack_from
        self.c_step = library.step_apart
        self.c_step.restype = None
        self.fixed = (
            address(self.settings),
            ctypes.c_long(len(self.first)),
            (ctypes.c_double * MEASURED).from_buffer(self.measured),
            (ctypes.c_double * RESULT).from_buffer(self.result),
        )

    def start(self) -> Memory:
        return Memory.of(np.frombuffer(self.row_type(*self.first)))

    def step(self, memory: Memory, measurement: Measurement) -> Decision:
        try:
            at, pose, goal, pose_time, frame, speed, turn_rate, limit, hold, applied, next_goal = measurement
            x, y, heading = pose
            goal_x, goal_y = goal
            applied_v, applied_w = applied
            next_x, next_y = next_goal
            if not (
                pose.__class__ in PLAIN and goal.__class__ in PLAIN and applied.__class__ in PLAIN and next_goal.__class__ in PLAIN
            ):
                raise TypeError
            first = (at, x, y, heading, pose_time, goal_x, goal_y, frame, speed, turn_rate, limit, hold)
            self.pack(self.measured, 0, *first, applied_v, applied_w, next_x, next_y, 0.0)
        except Exception:
            self.pack(self.measured, 0, *numbers(measurement))
        row = memory.row if isinstance(memory, Memory) else None
        if row is None or row.shape != self.shape:
            row = np.frombuffer(self.row_type(*[math.nan] * len(self.first)))
        settings, size, measured, result = self.fixed
        out = self.row_type()
        self.c_step(settings, row.base, size, measured, out, result)
        r = self.unpack(self.result)
        wanted, slowed_by = record(Motion, r[14:16]), SLOWING[int(r[16])]
        report = record(Report, (r[6], r[7], record(Pose, r[8:11]), r[11], r[12:14], wanted, slowed_by, r[17]))
        kept = Memory.of(np.frombuffer(out))
        return record(Decision, (record(Command, r[:4]), PHASES[int(r[4])], causes_of(int(r[5])), report, kept))


# --- timing -----------------------------------------------------------------------------------------------------------------------


@kernel
def kernel_loop(settings: Array, memory: Array, start: Array, rows: Array) -> None:
    """Run the recorded drive inside compiled code, on one memory in place."""
    memory[:] = start
    for k in range(len(rows)):
        m = rows[k]
        first = (m[0], m[1], m[2], m[3], m[4], m[5], m[6], m[7], m[8])
        measured = (*first, m[9], m[10], m[11], m[12], m[13], m[14], m[15], m[16])
        step_kernel(settings, memory, measured, memory)


# Statements to time: each runs the recorded drive once and leaves the memory at its end in `end`.
PURE = """
memory = first
for measurement in measurements:
    memory = step(memory, measurement).memory
end[:] = memory.row
"""
IN_PLACE = """
memory[:] = start
for numbers in feed:
    measured[:] = numbers
    {call}
end[:] = memory
"""
KERNEL = "kernel_loop(settings, end, start, rows)"
C_LOOP = "end[:] = start; many(settings, end_address, size, rows, steps, result)"
FEED = "writing the measurement"
REF, CHECKED, OBJECTS = "REF: C, fixed buffers", "C, arrays checked at each call", "C giving the same objects"


class Timed(NamedTuple):
    """A statement to time, and the memory that it leaves."""

    timer: timeit.Timer
    end: Array


def timed(statement: str, start: Array, **names: Any) -> Timed:
    end = np.full(len(start), math.nan)
    return Timed(timeit.Timer(statement, globals=names | {"start": start, "end": end, "end_address": address(end)}), end)


def in_place(call: str, row: Array, start: Array, rows: Array, **names: Any) -> Timed:
    """Return the timing of a call on a row [memory | measurement | result] that each measurement is written into."""
    memory, measured = row[: len(start)], row[len(start) : len(start) + MEASURED]
    return timed(IN_PLACE.format(call=call), start, row=row, memory=memory, measured=measured, feed=list(rows), **names)


def contenders(controller: Controller, rows: Array, path: Path | None) -> dict[str, Timed]:
    """Return what is timed: the doors of the package, the kernel alone, and the same through C; without the compiler, less."""
    first, measurements = controller.start(0.0), [as_measurement(row) for row in rows]
    start, settings = first.row, np.array(controller.settings)
    settings.setflags(write=False)
    pure = timed(PURE, start, first=first, measurements=measurements, step=controller.step)
    found = {"pure step" if compiled.ON else "plain Python": pure}
    if compiled.ON:
        door = controller.in_place(0.0)
        found["in-place step"] = in_place("step()", door.row, start, rows, step=door.step)
        found["kernel alone"] = timed(KERNEL, start, kernel_loop=kernel_loop, settings=settings, rows=rows)
    found[FEED] = in_place("pass", np.zeros(len(start) + MEASURED + RESULT), start, rows)
    return found | (c_contenders(controller, settings, measurements, rows, path) if path else {})


def c_contenders(
    controller: Controller, settings: Array, measurements: list[Measurement], rows: Array, path: Path
) -> dict[str, Timed]:
    """Return what is timed of C: the leanest call, the same objects, the call as it is usually written, a loop in C."""
    library, checked = ctypes.CDLL(str(path)), ctypes.CDLL(str(path)).step_row
    numbers = np.ctypeslib.ndpointer(np.float64, ndim=1, flags="C_CONTIGUOUS")
    checked.restype, checked.argtypes = None, [numbers, numbers, ctypes.c_long]
    library.step_in_place.restype = library.step_many.restype = None
    start, through = controller.start(0.0).row, ThroughC(library, controller)
    size, (row, other), result = len(start), np.zeros((2, len(start) + MEASURED + RESULT)), np.zeros(RESULT)
    robot = ctypes.pointer(Robot(address(settings), address(row), size))
    loop = {"settings": address(settings), "rows": address(rows), "result": address(result), "many": library.step_many}
    counts = {"size": ctypes.c_long(size), "steps": ctypes.c_long(len(rows))}
    kept = (settings, rows, result)  # what only an address is known of must live as long as the statement
    return {
        REF: in_place("step(robot)", row, start, rows, step=library.step_in_place, robot=robot, kept=kept),
        OBJECTS: timed(PURE, start, first=through.start(), measurements=measurements, step=through.step),
        CHECKED: in_place("step(settings, row, size)", other, start, rows, step=checked, settings=settings, size=size),
        "C alone": timed(C_LOOP, start, **loop, **counts, kept=kept),
    }


def measure(rivals: dict[str, Timed], steps: int, repeats: int, span: float) -> Samples:
    """Return seconds per step, `repeats` of each, taken in turn, each sample about `span` seconds long, no garbage collection.

    First every one drives once, and all must end with the same memory.
    """
    passes = {}
    for name, one in rivals.items():
        one.timer.timeit(1)
        passes[name] = max(1, math.ceil(span / one.timer.timeit(1)))
        expected = next(iter(rivals.values())).end
        if name != FEED and not differences(one.end, expected).max() <= SAME:
            raise SystemExit(f"{name!r} does not end the recorded drive with the memory of the others; nothing timed")
    samples: Samples = {name: [] for name in rivals}
    gc.collect()
    for _ in range(repeats):
        for name, one in rivals.items():
            samples[name].append(one.timer.timeit(passes[name]) / (passes[name] * steps))
    return samples


def case_samples(case: str, rows: Array, path: Path | None, quick: bool) -> Samples:
    """Return the samples of a case; the writing of the measurement is taken off where the statement does it too."""
    controller = case_controller(case)
    found = measure(contenders(controller, rows, path), len(rows), QUICK if quick else FULL, SPAN)
    for name in {"in-place step", REF, CHECKED} & set(found):
        found[name] = [both - feed for both, feed in zip(found[name], found[FEED], strict=True)]
    return found


def plain_samples(folder: Path, quick: bool) -> dict[str, Samples]:
    """Return the times of the plain Python step and of the reference beside it, from a process without the compiler."""
    command = [sys.executable, __file__, "--plain", str(folder)] + (["--quick"] if quick else [])
    done = subprocess.run(command, capture_output=True, text=True, env=os.environ | {"NUMBA_DISABLE_JIT": "1"})
    if done.returncode:
        raise SystemExit(done.stderr)
    found: dict[str, Samples] = json.loads(done.stdout)
    return found


def plain_main(folder: Path, quick: bool) -> None:
    path = folder / "step.so" if (folder / "step.so").exists() else None
    print(json.dumps({case: case_samples(case, np.load(folder / f"{case}.npy"), path, quick) for case in CASES}))


# --- start-up and size ------------------------------------------------------------------------------------------------------------

FIRST_COMMAND = """
from steerkit import Controller, Measurement, Platform
cart = Platform(radius=0.30, track_width=0.42, wheel_speed_limit=1.1, speed_limit=0.9, turn_rate_limit=2.0,
                acceleration=0.8, braking=1.2, turn_acceleration=5.0, period=0.05, dead_time=0.12)
controller = Controller(cart, capture_radius=0.10)
controller.step(controller.start(0.0), Measurement(time=0.0, pose=(0.0, 0.0, 0.0), goal=(2.0, 1.0)))
"""
BOTH, CACHED, UNCACHED = "import numpy and numba", "cached start to first command", "uncached start to first command"
STARTS = {
    "import steerkit": "import steerkit",
    "import numpy": "import numpy",
    BOTH: "import numpy, numba",
    CACHED: FIRST_COMMAND,
}


def seconds(code: str, cache: Path, alone: bool) -> float:
    """Return how long `code` takes in a fresh process; `alone`: as where SciPy is not installed (numba imports it if it is)."""
    hide = "import sys; sys.modules['scipy'] = None\n" if alone else ""
    timed = f"{hide}import time; begin = time.perf_counter()\n{code}\nprint(time.perf_counter() - begin)"
    environment = os.environ | {"STEERKIT_CACHE": str(cache)}
    return float(subprocess.run([sys.executable, "-c", timed], capture_output=True, text=True, env=environment, check=True).stdout)


def start_times(folder: Path, quick: bool) -> dict[bool, Samples]:
    """Return the start-up times with SciPy hidden (True) and as installed (False), taken in turn.

    The first uncached start fills the cache for the cached ones.
    """
    samples: dict[bool, Samples] = {alone: {name: [] for name in (*STARTS, UNCACHED)} for alone in (True, False)}
    for i in range(1 if quick else 3):
        for alone, found in samples.items():
            found[UNCACHED].append(seconds(FIRST_COMMAND, folder / f"cache-{alone}-{i}", alone))
    for _ in range(7 if quick else 15):
        for alone, found in samples.items():
            for name, code in STARTS.items():
                found[name].append(seconds(code, folder / f"cache-{alone}-0", alone))
    return samples


def size_of(*folders: Path, suffixes: tuple[str, ...] = ()) -> int:
    """Return the bytes of all files below some folders."""
    files = (path for folder in folders if folder.is_dir() for path in folder.rglob("*") if path.is_file())
    return sum(path.stat().st_size for path in files if not suffixes or path.suffix in suffixes)


def sizes(cache: Path) -> dict[str, int]:
    """Return installed sizes: the package's own sources, its compiled kernels, and each dependency."""
    import llvmlite
    import numba

    sources = size_of(Path(str(steerkit.__file__)).parent, suffixes=(".py", ".typed"))
    found = {"steerkit, sources": sources, "steerkit, compiled kernels": size_of(cache)}
    for module in (np, numba, llvmlite):
        home = Path(str(module.__file__)).parent
        found[module.__name__] = size_of(home, home.with_name(home.name + ".libs"))
    return found


# --- the table --------------------------------------------------------------------------------------------------------------------

RATIO = "ratio of the least (median ratio)"


def machine(compiler: str) -> str:
    """Return what kind of machine this is."""
    import numba

    info = Path("/proc/cpuinfo")
    lines = info.read_text().splitlines() if info.exists() else []
    processor = next((line.split(":")[1].strip() for line in lines if line.startswith("model name")), platform.processor() or "?")
    tools = f"Python {platform.python_version()}, NumPy {np.__version__}, numba {numba.__version__}"
    return f"{processor}, {os.cpu_count()} cores, {platform.system()} {platform.machine()}; {tools}; {compiler}"


def spread(values: list[float]) -> Pair:
    return min(values), statistics.median(values)


def ratio(samples: Samples, over: str, under: str) -> Pair:
    """Return the ratio of the least times, and the median of the ratios of neighbours in time."""
    if over not in samples or under not in samples:
        return None
    pairs = [a / b for a, b in zip(samples[over], samples[under], strict=True)]
    return min(samples[over]) / min(samples[under]), statistics.median(pairs)


def case_ratios(now: Samples, plain: Samples) -> dict[str, Pair]:
    slow, fast = ratio(plain, "plain Python", REF), ratio(now, "pure step", REF)
    return {
        "pure step / REF": fast,
        "pure step / C giving the same objects": ratio(now, "pure step", OBJECTS),
        "pure step / C, arrays checked": ratio(now, "pure step", CHECKED),
        "in-place step / REF": ratio(now, "in-place step", REF),
        "in-place step / C, arrays checked": ratio(now, "in-place step", CHECKED),
        "kernel alone / C alone": ratio(now, "kernel alone", "C alone"),
        "plain Python / REF": slow,
        "plain Python / pure step": (slow[0] / fast[0], slow[1] / fast[1]) if slow and fast else None,
    }


def cell(pair: Pair, scale: float = 1.0, digits: int = 2) -> str:
    return f"{'skipped':>18}" if pair is None else f"{pair[0] * scale:8.{digits}f} ({pair[1] * scale:7.{digits}f})"


def verdict(name: str, pairs: list[Pair]) -> str:
    """Return the goal of a ratio, and whether the medians all meet it."""
    goal = GOALS.get(name)
    if goal is None:
        return ""
    text = f"  <= {goal:<6g}" if goal > 0.0 else f"  >= {-goal:<6g}"
    if None in pairs:
        return text.rstrip()
    return text + ("met" if all(pair[1] <= goal if goal > 0.0 else pair[1] >= -goal for pair in pairs if pair) else "MISSED")


def print_rows(title: str, heads: tuple[str, ...], rows: dict[str, list[Pair]], scale: float = 1.0, digits: int = 2) -> None:
    """Print a table: name, least (median) for each column, goal."""
    print(f"\n{title:40}" + "".join(f"{head:>18}" for head in heads))
    for name, pairs in rows.items():
        print(f"{name:40}" + "".join(cell(pair, scale, digits) for pair in pairs) + verdict(name, pairs))


def print_proof(proof: Proof) -> None:
    print(
        f"C does the same work: {proof.steps} random closed-loop steps, {proof.equal:.2%} of them equal to the bit, largest "
        f"difference {proof.largest:.1e}; met:"
    )
    for kind, counted in proof.met.items():
        every, some = counted.most_common(), f"all {len(counted)} of step.c; the rarest: " if kind == "branches" else ""
        told = [f"{name.lower().replace('_', ' ')} {often}" for name, often in (every[-RAREST:] if some else every)]
        print(textwrap.fill(f"{kind}: {some}{', '.join(told)}", 120))


def print_steps(times: dict[str, Samples], plain: dict[str, Samples], why: str) -> None:
    rows = {name: [spread(times[case][name]) for case in CASES] for name in times["easy"]}
    rows["plain Python, in its own process"] = [spread(plain[case]["plain Python"]) for case in CASES]
    print_rows("microseconds a step: least (median)", CASES, rows, 1e6)
    found = [case_ratios(times[case], plain[case]) for case in CASES]
    print_rows(RATIO, (*CASES, "goal"), {name: [one[name] for one in found] for name in found[0]})
    if why:
        print(f"What needs C is skipped: {why}.")


def print_starts(found: dict[bool, Samples]) -> None:
    heads = ("without SciPy", "as installed")
    print_rows(
        "milliseconds in a fresh process", heads, {n: [spread(times[n]) for times in found.values()] for n in found[True]}, 1e3, 1
    )
    pairs = {
        "cached start / numpy and numba": (CACHED, BOTH),
        "import steerkit / import numpy": ("import steerkit", "import numpy"),
    }
    print_rows(
        RATIO,
        (*heads, "goal"),
        {name: [ratio(times, *pair) for times in found.values()] for name, pair in pairs.items()},
    )


def main() -> None:
    parser = argparse.ArgumentParser(description="Time one step of steerkit beside C and plain Python.")
    parser.add_argument("--quick", action="store_true", help="fewer and shorter samples")
    parser.add_argument("--plain", type=Path, help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.plain:
        plain_main(asked.plain, asked.quick)
    elif not compiled.ON:
        raise SystemExit("numba is missing or switched off: there is no compiled step to time")
    else:
        with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as name:
            compare(Path(name), asked.quick)


def compare(folder: Path, quick: bool) -> None:
    """Prove, time and print everything."""
    path, compiler = build(folder)
    print(machine(compiler if path else "no C"))
    if hasattr(os, "getloadavg") and os.getloadavg()[0] > 0.5:
        print(f"The machine is busy (load {os.getloadavg()[0]:.1f}): trust the medians of the ratios, not the least times.")
    if path:
        libraries = [ctypes.CDLL(str(one)) for one in (path, path.with_name("counting.so"))]
        print_proof(prove(*libraries, 60000 if quick else 200000))
    times = {}
    for case in CASES:
        controller = case_controller(case)
        rows = recorded_drive(controller, (2.0, 1.5))
        np.save(folder / f"{case}.npy", rows)
        size, period = len(controller.start(0.0).row), controller.settings.period
        print(f"{case}: a drive of {len(rows)} steps of {period:g} s; a memory of {size} floats")
        times[case] = case_samples(case, rows, path, quick)
    print_steps(times, plain_samples(folder, quick), "" if path else compiler)
    print_starts(start_times(folder, quick))
    print("\ninstalled size, MB")
    for name, size in sizes(folder / "cache-True-0").items():
        print(f"{name:40}{size / 1e6:8.2f}")


if __name__ == "__main__":
    main()
