"""The recipes of docs/loops.md: every block runs, and each recipe does what its text says.

The blocks of one recipe share a namespace, which begins with the block of "The cart". Clocks and sleeps are injected wherever a
claim is about time, so that nothing here depends on how busy the machine is; the few real waits have lower bounds only.
Oracles: deadlines, delays and sums by construction; circles in closed form; astropy.units; pseudo-terminals of the system.
"""

from __future__ import annotations

import asyncio
import contextlib
import errno
import fcntl
import functools
import gc
import itertools
import math
import os
import random
import re
import select
import selectors
import signal
import struct
import subprocess
import sys
import tempfile
import termios
import threading
import time
import tty
from decimal import Decimal
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from steerkit import Causes, Frame, Measurement, Phase, Slowing

PAGE = Path(__file__).parents[1] / "docs" / "loops.md"
ROUNDING = 1e-9  # s, m: sums of a few hundred periods


def sections() -> dict[str, list[str]]:
    """Return the python blocks of each section, each behind as many empty lines as precede it in the page."""
    found: dict[str, list[str]] = {}
    lines = PAGE.read_text(encoding="utf-8").splitlines()
    begun = None
    for number, line in enumerate(lines):
        if line.startswith("## "):
            blocks = found.setdefault(line.removeprefix("## "), [])
        elif line == "```python":
            begun = number + 1
        elif line == "```" and begun is not None:
            blocks.append("\n" * begun + "\n".join(lines[begun:number]) + "\n")
            begun = None
    return found


def blocks_of(start: str) -> list[str]:
    return next(blocks for title, blocks in sections().items() if title.startswith(start))


@functools.cache
def recipe(number: int) -> dict:
    """Run a recipe in a folder of its own, and return its names."""
    names = {"__name__": f"recipe_{number}"}
    with tempfile.TemporaryDirectory() as folder, contextlib.chdir(folder):
        for block in blocks_of("The cart") + blocks_of(f"{number}. "):
            exec(compile(block, str(PAGE), "exec"), names)
    return names


def names_of(number: int) -> SimpleNamespace:
    return SimpleNamespace(**recipe(number))


def wait_for(condition, longest=20.0):
    """Return whether the condition came true, which on an idle machine takes no time."""
    start = time.monotonic()
    while not condition() and time.monotonic() - start < longest:
        time.sleep(0.002)
    return condition()


class Recorder:
    """A stand-in for the cart that keeps what it was told: (time, left, right)."""

    def __init__(self, names, clock, pose=(0.0, 0.0, 0.0)):
        self.robot, self.clock, self.told = names.StandIn(clock, pose), clock, []

    def wheels(self, left, right):
        self.told.append((self.clock(), left, right))
        self.robot.wheels(left, right)

    def pose(self):
        return self.robot.pose()


class Spy:
    """A controller that keeps its measurements; `work(k)` is done before step k."""

    def __init__(self, controller, work=lambda k: None):
        self.controller, self.work, self.seen = controller, work, []

    def start(self, *arguments):
        return self.controller.start(*arguments)

    def step(self, memory, measurement):
        self.work(len(self.seen))
        self.seen.append(measurement)
        return self.controller.step(memory, measurement)


# The page


def test_page_holds_eleven_recipes_each_with_code_that_the_contents_name():
    titles = [title for title in sections() if title != "The cart"]
    got = re.findall(r"^\d+\. \[(.+)\]\(#(.+)\)$", PAGE.read_text(encoding="utf-8"), flags=re.MULTILINE)
    expected = [(title.split(". ", 1)[1], re.sub(r"[^\w -]", "", title.lower()).replace(" ", "-")) for title in titles]
    assert len(titles) == 11
    assert got == expected
    assert all(sections().values())


def test_no_code_of_the_page_is_left_out():
    text = PAGE.read_text(encoding="utf-8")
    assert sum(len(blocks) for blocks in sections().values()) == text.count("```python")
    assert text.count("```") == 2 * text.count("```python")  # no block in another language that nobody runs


@pytest.mark.parametrize("number", range(1, 12))
def test_every_block_runs(number):
    assert recipe(number)


def test_stand_in_follows_after_the_dead_time():
    # Closed form: straight from the dead time on, then a circle of radius v/w. Commands reach the wheels dead_time late.
    names = names_of(1)
    clock = names.Clock()
    robot = names.StandIn(clock)
    robot.wheels(0.5, 0.5)
    clock.sleep(1.0)
    robot.wheels(0.5 - 0.29, 0.5 + 0.29)  # 1 rad/s at half a track width of 0.29 m
    clock.sleep(0.1 + math.pi)
    x, y, heading = robot.pose()
    assert x == pytest.approx(0.5 * 1.0, abs=ROUNDING)
    assert y == pytest.approx(2 * 0.5, abs=ROUNDING)
    assert abs(heading) == pytest.approx(math.pi, abs=ROUNDING)


# 1. Period


def starts_of(bodies, oversleeps, period=0.05):
    """Return when each step started (s) and the misses told; steps last `bodies`, wakings are late by `oversleeps`."""
    names = names_of(1)
    clock = names.Clock()
    clock.now = 1e5  # a machine that has run for a day: rounding is part of the game
    late = iter(oversleeps)

    def sleep(seconds):
        clock.now += seconds + next(late)

    got = []
    loop = names.deadlines(period, clock, sleep)
    for body in bodies:
        now, missed = next(loop)
        assert now == clock()
        got.append((now - 1e5, missed))
        clock.now += body
    return np.array(got).T


def test_period_does_not_drift():
    rng = np.random.default_rng(1)
    bodies, oversleeps = rng.uniform(0.0, 0.045, 101), rng.uniform(0.0, 0.002, 100)
    starts, missed = starts_of(bodies, oversleeps)
    got = starts - 0.05 * np.arange(101)
    expected = np.concatenate([[0.0], oversleeps])  # each start is late by its own waking, and by nothing before it
    np.testing.assert_allclose(got, expected, atol=ROUNDING)
    assert not missed.any()


def test_overrun_drops_deadlines_and_makes_no_burst():
    bodies = np.full(20, 0.01)
    bodies[5] = 3.4 * 0.05
    starts, missed = starts_of(bodies, np.zeros(20))
    expected = [0, 1, 2, 3, 4, 5, *range(9, 23)]  # 5 + 3.4 lies between 8 and 9: 6, 7 and 8 went by
    np.testing.assert_allclose(starts / 0.05, expected, atol=ROUNDING / 0.05)
    assert missed.tolist() == [0] * 6 + [3] + [0] * 13


def test_late_waking_is_counted_and_makes_no_burst():
    oversleeps = np.zeros(20)
    oversleeps[4] = 2.3 * 0.05  # the machine slept on: the step due at 5 starts at 7.3
    starts, missed = starts_of(np.full(20, 0.01), oversleeps)
    expected = [0, 1, 2, 3, 4, 7.3, *range(8, 22)]
    np.testing.assert_allclose(starts / 0.05, expected, atol=ROUNDING / 0.05)
    assert missed.tolist() == [0] * 6 + [2] + [0] * 13


def test_drive_arrives_and_ends_with_zero():
    names = names_of(1)
    clock = names.Clock()
    robot = Recorder(names, clock)
    decision = names.drive(robot, (4.0, 1.0), clock, clock.sleep)
    clock.sleep(1.0)
    assert decision.phase == Phase.ARRIVED
    assert math.dist(robot.pose()[:2], (4.0, 1.0)) <= names.controller.capture_radius
    assert robot.told[-1][1:] == (0.0, 0.0)
    np.testing.assert_allclose(np.diff([row[0] for row in robot.told[:-1]]), 0.05, atol=ROUNDING)


def test_drive_that_fails_ends_with_zero():
    names = names_of(1)
    clock = names.Clock()
    robot = Recorder(names, clock)
    poses = itertools.chain([(0.0, 0.0, 0.0)] * 20, [None])

    def pose():
        found = next(poses)
        if found is None:
            raise OSError("the locator is gone")
        return found

    robot.pose = pose
    with pytest.raises(OSError, match="the locator is gone"):
        names.drive(robot, (4.0, 1.0), clock, clock.sleep)
    assert robot.told[-2][1] > 0.1
    assert robot.told[-1][1:] == (0.0, 0.0)


@pytest.mark.parametrize(("gap", "bridged"), [(0.29, True), (0.31, False)])
def test_gap_is_bridged_up_to_the_age_told(gap, bridged):
    # The page: up to stale_after + period (0.30 s here) is bridged; after a longer gap that step holds, and the next one goes on.
    names = names_of(1)
    memory = names.controller.start(0.0)
    causes = []
    for now in (0.0, 0.05, 0.05 + gap, 0.10 + gap):
        decision = names.controller.step(memory, Measurement(now, (0.0, 0.0, 0.0), (4.0, 1.0)))
        memory = decision.memory
        causes.append(Causes.BAD_CLOCK in decision.causes)
    assert causes == [False, False, not bridged, False]


# 2. asyncio


class Jump(selectors.DefaultSelector):
    """Instead of waiting, move the clock on."""

    def __init__(self, clock):
        super().__init__()
        self.clock = clock

    def select(self, timeout=None):
        self.clock.now += timeout or 0.0
        return super().select(0)


def run_in_no_time(clock, coroutine):
    """Run a coroutine on an event loop whose time is that of `clock`."""
    loop = asyncio.SelectorEventLoop(Jump(clock))
    loop.time = clock
    try:
        return loop.run_until_complete(coroutine)
    finally:
        loop.close()


async def locate_often(latest, robot, clock, sleep=asyncio.sleep):
    while True:
        latest.seen = robot.pose(), clock()
        await sleep(0.011)


def test_asyncio_loop_keeps_the_period_and_takes_the_newest_pose(monkeypatch):
    names, clock = names_of(2), names_of(2).Clock()
    spy, robot = Spy(names.controller), Recorder(names, clock)
    monkeypatch.setitem(recipe(2), "controller", spy)
    decision = run_in_no_time(clock, names.run(robot, (4.0, 1.0), locate_often, clock=clock))
    times = np.array([seen.time for seen in spy.seen])
    ages = times - [seen.pose_time for seen in spy.seen]
    assert decision.phase == Phase.ARRIVED
    assert math.dist(robot.pose()[:2], (4.0, 1.0)) <= names.controller.capture_radius
    np.testing.assert_allclose(times, 0.05 * np.arange(len(times)), atol=1e-6)  # event loops wake up to a tick (1 ns) early
    assert (ages[1:] <= 0.011 + 1e-6).all()  # the locator's own period: never the pose before the newest
    assert robot.told[-1][1:] == (0.0, 0.0)


def test_asyncio_loop_makes_no_burst_after_a_hang(monkeypatch):
    names, clock = names_of(2), names_of(2).Clock()
    spy = Spy(names.controller, work=lambda k: clock.sleep(0.12 if k == 10 else 0.0))
    monkeypatch.setitem(recipe(2), "controller", spy)
    run_in_no_time(clock, names.run(Recorder(names, clock), (4.0, 1.0), clock=clock))
    got = [round(seen.time / 0.05, 4) for seen in spy.seen[8:14]]
    assert got == [8, 9, 10, 13, 14, 15]


def test_asyncio_loop_stops_when_the_locator_fails():
    names, clock = names_of(2), names_of(2).Clock()
    robot = Recorder(names, clock)

    async def locate_for_a_second(latest, robot, clock):
        for _ in range(20):
            latest.seen = robot.pose(), clock()
            await asyncio.sleep(0.05)
        raise OSError("the locator is gone")

    with pytest.raises(ExceptionGroup) as caught:
        run_in_no_time(clock, names.run(robot, (4.0, 1.0), locate_for_a_second, clock=clock))
    assert str(caught.value.exceptions[0]) == "the locator is gone"
    assert robot.told[-2][1] > 0.1
    assert robot.told[-1][1:] == (0.0, 0.0)
    assert robot.told[-1][0] == pytest.approx(1.0, abs=1e-6)


def test_asyncio_loop_without_a_pose_holds():
    names, clock = names_of(2), names_of(2).Clock()
    robot = Recorder(names, clock)

    async def run():
        with pytest.raises(TimeoutError):
            async with asyncio.timeout(1.0):
                await names.steer(names.Latest(), robot, (4.0, 1.0), clock=clock)

    run_in_no_time(clock, run())
    assert len(robot.told) >= 20
    assert all(row[1:] == (0.0, 0.0) for row in robot.told)


# 3. Serial line


class Board:
    """The other end of a line: a pseudo-terminal behind a name that stays."""

    def __init__(self, name: Path):
        self.name = name
        self.plug()

    def plug(self):
        self.fd, self.end = os.openpty()
        self.name.unlink(missing_ok=True)
        self.name.symlink_to(os.ttyname(self.end))

    def unplug(self):
        os.close(self.end)
        os.close(self.fd)

    def waiting(self) -> int:
        """Return how many bytes wait at the other end: the system hands them over in its own time."""
        return struct.unpack("i", fcntl.ioctl(self.end, termios.FIONREAD, bytes(4)))[0]

    def say(self, text: bytes):
        expected = self.waiting() + os.write(self.fd, text)
        assert wait_for(lambda: self.waiting() == expected)

    def heard(self, until: bytes = b"\n") -> bytes:
        """Return what came down the line, to the first `until` at least."""
        found = b""
        while until not in found and select.select([self.fd], [], [], 20.0)[0]:
            found += os.read(self.fd, 65536)
        return found


@pytest.fixture
def board(tmp_path):
    board = Board(tmp_path / "line")
    yield board
    board.unplug()


@pytest.fixture
def line(board):
    names = names_of(3)
    line = names.Line(str(board.name), clock=names.Clock())
    line.poll()
    yield line
    line.close()


def fresh_line():
    """Return a line that is connected to nothing, to be fed by `take`."""
    names = names_of(3)
    return names.Line("/nonexistent", clock=names.Clock())


def test_pose_and_counters_and_commands_make_the_round_trip(board, line):
    board.say(b"pose 12.345 1.000 -2.000 0.500\nticks 12.350 65530 17\n")
    line.poll()
    assert line.pose == (1.0, -2.0, 0.5)
    assert line.send(0.48, 0.52)
    assert board.heard() == b"wheels 0.480 0.520\n"  # and no echo of what the board said


def test_line_is_set_to_its_speed_and_hangs_nobody_up(board):
    names = names_of(3)
    settings = termios.tcgetattr(board.end)
    settings[2] = (settings[2] | termios.HUPCL) & ~termios.CLOCAL
    settings[4] = settings[5] = termios.B9600
    termios.tcsetattr(board.end, termios.TCSANOW, settings)
    line = names.Line(str(board.name), clock=names.Clock())
    line.poll()
    got = termios.tcgetattr(board.end)
    line.close()
    assert got[4:6] == [termios.B115200, termios.B115200]
    assert got[2] & termios.CLOCAL
    assert not got[2] & termios.HUPCL


def test_partial_lines_wait_for_their_end(board, line):
    for piece in (b"po", b"se 12.345 1.0", b"00 2.000 0.5", b"00"):
        board.say(piece)
        line.poll()
        assert math.isnan(line.pose_time)
    board.say(b"\r\n")
    line.poll()
    assert line.pose == (1.0, 2.0, 0.5)


GARBAGE = [
    b"45 1.000 2.000 0.500",
    b"pose 12.345 1.000 2.000",
    b"pose 12.345 1.000 2.000 0.50",
    b"pose 12.345 1.000 2.000 0.5000",
    b"pose 12.345 1.000 2.000 nan",
    b"pose 12.345 1.000 2.000 1e9",
    b"pose 12,345 1,000 2,000 0,500",
    b"pose 12.345 1.000 2.000 0.500 ",
    b"pose 12.345 1.000 2.000 0.500pose 12.395 1.000 2.000 0.500",
    b"pose 12.345 1.000 2.0\xb200 0.500",
    b"Pose 12.345 1.000 2.000 0.500",
    b"pose\t12.345 1.000 2.000 0.500",
    b"",
    b"\x00\xff\xfe",
    b"x" * 10_000,
    b"ticks 12.350 65536 17",
    b"ticks 12.350 -1 17",
    b"ticks 12.350 17",
]


@pytest.mark.parametrize("garbage", GARBAGE, ids=range(len(GARBAGE)))
def test_garbage_is_dropped_and_the_next_line_read(garbage):
    line = fresh_line()
    line.take(garbage + b"\n", 0.0)
    assert math.isnan(line.pose_time)
    assert line.before is None
    line.take(b"pose 12.345 1.000 2.000 0.500\nticks 12.350 5 17\n", 0.0)
    assert line.pose == (1.0, 2.0, 0.5)
    assert line.before == [5, 17]


def test_any_cutting_of_the_stream_gives_the_same_poses_in_bounded_memory():
    rng = random.Random(2)
    poses = [(round(rng.uniform(-99, 99), 3), round(rng.uniform(-9, 9), 3), round(rng.uniform(-3, 3), 3)) for _ in range(300)]
    parts = []
    for k, pose in enumerate(poses):
        parts.append(b"pose %.3f %.3f %.3f %.3f\n" % (12.0 + 0.05 * k, *pose))
        if rng.random() < 0.3:
            parts.append(rng.choice([rng.randbytes(rng.randrange(600)).replace(b"\n", b"") + b"\n", parts[-1][3:]]))
    stream, got, line = b"".join(parts), [], fresh_line()
    while stream:
        size = rng.randrange(1, 60)
        line.take(stream[:size], 0.0)
        stream = stream[size:]
        assert len(line.rest) <= 128
        if not math.isnan(line.pose[0]) and (not got or line.pose != got[-1]):
            got.append(line.pose)
    # A piece may bring two lines, of which the first is never the newest; most come singly.
    assert got[-1] == poses[-1]
    assert set(got) <= set(poses)
    assert len(got) > 200


def test_a_board_that_never_stops_talking_does_not_hold_the_loop(monkeypatch, line):
    calls = itertools.count()

    def read(fd, size):
        assert next(calls) < 1000
        return b"pose 12.345 1.000 2.000 0.500\n"

    monkeypatch.setattr(os, "read", read)
    monkeypatch.setattr(select, "select", lambda *arguments: ([1], [], []))
    line.poll()
    assert line.pose == (1.0, 2.0, 0.5)


def test_counters_roll_over_both_ways_and_add_up():
    rng = np.random.default_rng(3)
    steps = rng.integers(-3000, 20_000, (200, 2))
    totals = np.cumsum(steps, axis=0)
    line = fresh_line()
    line.take(b"ticks 10.000 65000 300\n", 0.0)
    for k, total in enumerate(totals):
        left, right = (total + [65000, 300]) % 65536
        line.take(b"ticks %.3f %d %d\n" % (10.05 + 0.05 * k, left, right), 0.0)
    assert totals[-1].min() > 10 * 65536
    assert line.counts == totals[-1].tolist()


@pytest.mark.parametrize("rate", [-1e-4, 0.0, 1e-4])
def test_time_stamps_hold_while_clocks_part_and_lines_come_late(rate):
    # Every tenth line is as fast as can be (12 ms), the others are up to 30 ms later. The board's clock runs off by `rate` and has
    # its own zero. By construction the stamp is never early, and late by what the clocks part in ten lines at most.
    rng = np.random.default_rng(4)
    line = fresh_line()
    line.delay = 0.012
    worst = 0.5 * (2e-4 + abs(rate)) + 1e-3  # CREEP and rate over ten lines; the roundings of two stamps, 0.5 ms each
    for k in range(20_000):  # 1000 s
        taken = 0.05 * k
        arrival = taken + 0.012 + (0.0 if k % 10 == 0 else rng.uniform(0.0, 0.030))
        line.take(b"pose %.3f 1.000 2.000 0.500\n" % (4321.0 + taken * (1.0 + rate)), arrival)
        assert -1e-3 <= line.pose_time - taken <= worst


def test_board_that_starts_again_is_believed_at_once():
    line = fresh_line()
    line.take(b"pose 900.000 1.000 2.000 0.500\nticks 900.010 60000 100\n", 50.0)
    line.take(b"ticks 900.060 60010 110\n", 50.05)
    line.take(b"pose 0.100 1.000 2.000 0.500\nticks 0.110 3 4\nticks 0.160 8 10\n", 53.0)
    assert line.pose_time == pytest.approx(53.0)
    assert line.counts == [10 + 5, 10 + 6]  # what the counters did at the restart is not known, and not made up


def test_replug_is_survived(board, line):
    board.say(b"pose 12.345 1.000 2.000 0.500\nticks 12.350 100 100\npose 12.3")
    line.poll()
    board.unplug()
    line.poll()
    assert line.fd is None
    assert not line.send(0.5, 0.5)
    line.poll()  # nothing there: no exception
    board.plug()
    line.clock.sleep(0.6)
    line.poll()
    board.say(b"95 9.000 9.000 0.500\n")
    line.poll()
    assert line.pose == (1.0, 2.0, 0.5)  # the rest of the old line was not joined to the new
    board.say(b"pose 13.000 1.500 2.500 0.750\nticks 13.010 7 9\nticks 13.060 9 12\n")
    line.clock.sleep(0.05)
    line.poll()
    assert line.pose == (1.5, 2.5, 0.75)
    assert line.pose_time == pytest.approx(line.clock())
    assert line.counts == [2, 3]  # no jump of the counters
    assert line.send(0.25, 0.5)
    assert board.heard() == b"wheels 0.250 0.500\n"


@pytest.mark.parametrize("call", ["read", "write"])
def test_adapter_that_fails_is_let_go(monkeypatch, board, line, call):
    def fail(*arguments):
        raise OSError(errno.ENODEV, "no such device")

    board.say(b"pose 12.345 1.000 2.000 0.500\n")
    monkeypatch.setattr(os, call, fail)
    line.poll()
    assert not line.send(0.5, 0.5)
    assert line.fd is None


def test_line_that_is_gone_is_not_tried_at_every_step(monkeypatch):
    line, tried = fresh_line(), []

    def no_such_line(*arguments):
        tried.append(arguments)
        raise FileNotFoundError

    monkeypatch.setattr(os, "open", no_such_line)
    for _ in range(20):
        line.poll()
        line.clock.sleep(0.05)
    assert len(tried) == 2  # in 1 s, each 0.5 s


def test_a_file_that_is_no_terminal_is_closed_again(tmp_path):
    path = tmp_path / "line"
    path.write_bytes(b"")
    names = names_of(3)
    before = set(os.listdir("/proc/self/fd")) if os.path.isdir("/proc/self/fd") else None
    line = names.Line(str(path), clock=names.Clock())
    line.poll()
    assert line.fd is None
    assert before is None or set(os.listdir("/proc/self/fd")) == before


def test_old_lines_from_before_are_not_taken_for_new(board):
    names = names_of(3)
    tty.setraw(board.end)
    board.say(b"pose 12.345 1.000 2.000 0.500\n")
    line = names.Line(str(board.name), clock=names.Clock())
    line.poll()
    assert math.isnan(line.pose_time)
    line.close()


def test_commands_that_do_not_fit_are_dropped_and_none_is_cut(board, line):
    def command(k):
        return b"wheels %.3f %.3f" % (0.001 * k, -0.001 * k)

    sent = [line.send(0.0, -0.0)]
    while any(sent[-100:]):  # nobody listens: the buffer of the system, tens of kilobytes, fills up
        assert len(sent) < 100_000
        sent.append(line.send(0.001 * len(sent), -0.001 * len(sent)))
    last = command(max(k for k, out in enumerate(sent) if out)) + b"\n"
    text = board.heard(last)
    assert last in text  # what was said to be out is out, with nothing sent after it
    while not sent[-1]:
        if select.select([board.fd], [], [], 0.05)[0]:
            text += os.read(board.fd, 4096)
        sent.append(line.send(0.001 * len(sent), -0.001 * len(sent)))
    newest = command(len(sent) - 1)
    got = (text + board.heard(newest + b"\n")).splitlines()
    known = {command(k): k for k in range(len(sent))}
    order = [known[one] for one in got]  # each is a command as it was given, whole
    assert order == sorted(set(order))
    assert {k for k, out in enumerate(sent) if out} <= set(order)
    assert order[-1] == len(sent) - 1
    assert len(order) < len(sent) - 50  # and the rest was dropped


def last_speed(text: bytes) -> float:
    left, right = map(float, text.decode().splitlines()[-1].split()[1:])
    return (left + right) / 2.0


def test_loop_over_the_line_drives_and_goes_on_from_rest_after_a_replug(monkeypatch, board, line):
    names = names_of(3)
    monkeypatch.setitem(recipe(3), "RETRY", 0.0)
    memory, period = names.controller.start(line.clock()), names.cart.period
    for k in range(40):
        board.say(b"pose %.3f 1.000 2.000 0.500\n" % (12.0 + 0.05 * k))
        decision = names.step(line, memory, (9.0, 6.0))
        memory = decision.memory
        line.clock.sleep(period)
    assert decision.causes & (Causes.BAD_POSE | Causes.STALE_POSE | Causes.APPLIED_BY_OTHERS) == 0
    assert last_speed(board.heard()) == pytest.approx(0.5)
    board.unplug()
    decision = names.step(line, memory, (9.0, 6.0))
    assert Causes.APPLIED_BY_OTHERS in decision.causes
    line.clock.sleep(period)
    board.plug()
    decision = names.step(line, decision.memory, (9.0, 6.0))
    # The board has stopped the wheels meanwhile: one period's acceleration from zero, 0.6 m/s^2 * 0.05 s, and not from 0.5 m/s.
    assert last_speed(board.heard()) == pytest.approx(0.03)


# 4. Watchdog


def relayed(limit):
    """Start a relay in a thread; return the pipe into it, what it sent, with times, and the thread."""
    names, sent = names_of(4), []
    source, sink = os.pipe()
    guard = threading.Thread(
        target=names.relay, args=(source, lambda left, right: sent.append((time.monotonic(), left, right)), limit), daemon=True
    )
    guard.start()
    return sink, sent, guard


def test_page_showed_the_watchdog_fire():
    names = names_of(4)
    assert names.sent[-1] == (0.0, 0.0)
    assert names.k < 19  # the loop was ended by BrokenPipeError
    assert not names.guard.is_alive()


def test_relay_passes_commands_on_and_stops_the_wheels_when_the_loop_has_ended():
    names = names_of(4)
    sink, sent, guard = relayed(limit=60.0)
    for k in range(1, 6):
        os.write(sink, names.PAIR.pack(0.1 * k, -0.1 * k))
        assert wait_for(lambda count=k: len(sent) == count)
    assert [row[1:] for row in sent] == [(0.1 * k, -0.1 * k) for k in range(1, 6)]
    os.close(sink)
    guard.join(20.0)
    assert sent[-1][1:] == (0.0, 0.0)
    assert len(sent) == 6


def test_relay_drops_all_but_the_newest_command():
    names = names_of(4)
    source, sink = os.pipe()
    sent = []
    os.write(sink, b"".join(names.PAIR.pack(0.001 * k, 0.0) for k in range(250)))
    os.close(sink)
    names.relay(source, lambda left, right: sent.append((left, right)), 60.0)
    assert sent == [(0.249, 0.0), (0.0, 0.0)]


def test_watchdog_fires_after_its_limit_and_for_good():
    names = names_of(4)
    sink, sent, guard = relayed(limit=0.1)
    before = time.monotonic()
    os.write(sink, names.PAIR.pack(0.5, 0.4))
    guard.join(20.0)
    assert not guard.is_alive()
    assert [row[1:] for row in sent] == [(0.5, 0.4), (0.0, 0.0)]
    assert sent[-1][0] - before >= 0.1
    with pytest.raises(BrokenPipeError):  # the loop wakes up: its old command goes nowhere
        os.write(sink, names.PAIR.pack(0.5, 0.4))
    os.close(sink)


@pytest.fixture
def relay_program(tmp_path, monkeypatch):
    (tmp_path / "relay.py").write_text(blocks_of("4. ")[0].lstrip("\n"), encoding="utf-8")
    monkeypatch.chdir(tmp_path)


@pytest.mark.parametrize(("ending", "limit"), [("hang", 0.2), ("death", 60.0)])
@pytest.mark.usefixtures("relay_program")
def test_relay_process_stops_the_wheels(board, ending, limit):
    names = names_of(4)
    tty.setraw(board.end)
    guard = names.guarded(str(board.name), limit)
    os.write(guard.stdin.fileno(), names.PAIR.pack(0.45, 0.43))
    if ending == "death":
        guard.stdin.close()
    got = board.heard(b"wheels 0.000 0.000\n")
    guard.wait(20.0)
    if ending == "hang":
        with contextlib.suppress(BrokenPipeError):
            guard.stdin.close()
    assert got == b"wheels 0.450 0.430\nwheels 0.000 0.000\n"
    assert guard.returncode == 0


STOPPED_LOOP = """
import os, signal, subprocess, sys
from relay import PAIR
guard = subprocess.Popen([sys.executable, "relay.py", sys.argv[1], "0.2"], stdin=subprocess.PIPE)
os.write(guard.stdin.fileno(), PAIR.pack(0.45, 0.43))
os.kill(os.getpid(), signal.SIGSTOP)
"""


@pytest.mark.usefixtures("relay_program")
def test_relay_process_stops_the_wheels_of_an_interpreter_that_stands_still(board):
    tty.setraw(board.end)
    loop = subprocess.Popen([sys.executable, "-c", STOPPED_LOOP, str(board.name)])
    try:
        got = board.heard(b"wheels 0.000 0.000\n")
        still_there = loop.poll() is None
    finally:
        loop.send_signal(signal.SIGKILL)
        loop.wait(20.0)
    assert got == b"wheels 0.450 0.430\nwheels 0.000 0.000\n"
    assert still_there


def test_page_says_how_far_the_cart_goes_once_the_loop_hangs():
    # v t + v^2 / (2 b) with v = 0.5 m/s, t = 0.2 + 0.1 s, b = 0.9 m/s^2
    got = names_of(4).stopping_distance(0.5, 0.9, reaction=0.3)
    assert got == pytest.approx(0.15 + 0.25 / 1.8)
    assert f"{got:.3f} m" in PAGE.read_text(encoding="utf-8")


# 5. Logging


def logged(path, rows=100, goal=(4.0, 1.0), robot=None):
    """Drive with a log; return the steps made and the saved rows."""
    names = names_of(5)
    clock = names.Clock()
    robot = robot or names.StandIn(clock)
    robot.clock = clock
    made = names.drive(robot, goal, clock, clock.sleep, path, rows)
    return made, np.load(path)


def test_ring_keeps_the_last_rows_in_order(tmp_path):
    made, got = logged(tmp_path / "all.npy", rows=1000)
    made_again, ring = logged(tmp_path / "ring.npy", rows=64)
    assert made == made_again == len(got) > 150
    assert np.isfinite(got[:, 0]).all()
    np.testing.assert_allclose(np.diff(got[:, 0]), 0.05, atol=ROUNDING)
    assert ring.tobytes() == got[-64:].tobytes()


def test_log_of_a_drive_that_fails_is_saved(tmp_path):
    names = names_of(5)

    class Failing(names.StandIn):
        def pose(self):
            if self.clock() > 1.0:
                raise OSError("the locator is gone")
            return super().pose()

    with pytest.raises(OSError, match="the locator is gone"):
        logged(tmp_path / "failed.npy", robot=Failing(names.Clock()))
    got = np.load(tmp_path / "failed.npy")
    assert len(got) in (20, 21)
    assert np.isfinite(got[:, 0]).all()


def test_log_of_a_drive_that_fails_at_once_is_empty(tmp_path):
    names = names_of(5)
    with pytest.raises(AttributeError):
        logged(tmp_path / "failed.npy", robot=SimpleNamespace(wheels=lambda left, right: None))
    assert len(np.load(tmp_path / "failed.npy")) == 0
    assert names.ROWS == 10 * 60 * 20


def test_replay_gives_the_same_bits_and_notices_one_wrong_bit(tmp_path):
    names = names_of(5)
    _, rows = logged(tmp_path / "drive.npy")
    size = len(names.controller.start(0.0).row)
    for before, row in itertools.pairwise(rows):
        decision = names.replay(before, row)
        results = [*decision.command, decision.phase, decision.causes]
        assert decision.memory.to_bytes() == row[:size].tobytes()
        assert np.array(results, dtype=float).tobytes() == row[size + 17 : size + 23].tobytes()
        wrong = row.copy()
        wrong[size + 1] = np.nextafter(row[size + 1], math.inf)  # x, by one unit in the last place
        assert names.replay(before, wrong).memory.to_bytes() != row[:size].tobytes()


def test_replay_takes_every_field_of_a_measurement(monkeypatch):
    names = names_of(5)
    door, spy = names.controller.in_place(0.0), Spy(names.controller)
    monkeypatch.setitem(recipe(5), "controller", spy)
    before = door.row.copy()
    door.measurement[:] = range(17)
    names.replay(before, door.row)
    place = {name: float(k) for k, name in enumerate(door.MEASURED)}
    expected = Measurement(
        place["time"],
        [place["x"], place["y"], place["heading"]],
        [place["goal_x"], place["goal_y"]],
        pose_time=place["pose_time"],
        goal_frame=place["goal_frame"],
        speed=place["speed"],
        turn_rate=place["turn_rate"],
        speed_limit=place["speed_limit"],
        hold=place["hold"],
        applied=[place["applied_speed"], place["applied_turn_rate"]],
        next_goal=[place["next_goal_x"], place["next_goal_y"]],
    )
    assert spy.seen == [expected]


def test_logged_drive_is_that_of_the_pure_step(tmp_path):
    names = names_of(5)
    _, rows = logged(tmp_path / "drive.npy", rows=1000)
    clock = names.Clock()
    robot, memory = names.StandIn(clock), names.controller.start(0.0)
    size, got = len(memory.row), []
    for _ in rows:
        decision = names.controller.step(memory, Measurement(clock(), robot.pose(), (4.0, 1.0), pose_time=clock()))
        robot.wheels(decision.command.left, decision.command.right)
        memory = decision.memory
        got.append(decision.command)
        clock.sleep(0.05)
    assert np.array(got).tobytes() == np.ascontiguousarray(rows[:, size + 17 : size + 21]).tobytes()


def test_places_named_in_the_page_are_those_of_a_measurement():
    names = names_of(5)
    door = names.controller.in_place(0.0)
    door.measurement[names.TIME], door.measurement[names.POSE] = 0.0, (1.0, 2.0, 0.5)
    door.measurement[names.POSE_TIME], door.measurement[names.GOAL] = -0.05, (5.0, 3.0)
    got = door.step()
    decision = names.controller.step(names.controller.start(0.0), Measurement(0.0, (1.0, 2.0, 0.5), (5.0, 3.0), pose_time=-0.05))
    assert (got[names.LEFT], got[names.RIGHT], got[names.PHASE]) == (*decision.command[:2], decision.phase)
    assert (got[names.SLOWED_BY], got[names.SLOWEST]) == (decision.report.slowed_by, decision.report.slowest)
    assert door.memory.tobytes() == decision.memory.to_bytes()


def grown(keep):
    """Return by how many objects the collector has more to walk, per step."""
    names = names_of(5)
    memory, steps = names.controller.start(0.0), 500
    log = np.full((steps, len(names.COLUMNS)), math.nan)
    kept = []
    gc.collect()
    before = len(gc.get_objects())
    for k in range(steps):
        seen = Measurement(0.05 * k, (0.0, 0.0, 0.0), (4.0, 1.0))
        decision = names.controller.step(memory, seen)
        memory = decision.memory
        if keep:
            kept.append(decision)
        else:
            log[k] = names.row_of(seen, decision)
    gc.collect()
    return (len(gc.get_objects()) - before) / steps


def test_kept_decisions_are_walked_by_the_collector_and_rows_are_not():
    assert grown(keep=True) > 3.0
    assert grown(keep=False) < 0.1


def test_row_of_the_pure_step_holds_what_its_columns_say():
    names = names_of(5)
    seen = Measurement(0.0, (1.0, 2.0, 0.5), (4.0, 6.0))
    decision = names.controller.step(names.controller.start(0.0), seen)
    got = dict(zip(names.COLUMNS, names.row_of(seen, decision), strict=True))
    assert (got["time"], got["x"], got["y"], got["heading"], got["phase"]) == (0.0, 1.0, 2.0, 0.5, Phase.DRIVING)
    assert got["distance"] == pytest.approx(5.0)  # 3, 4, 5
    assert (got["left"], got["right"]) == decision.command[:2]
    assert (got["slowed_by"], got["slowest"]) == (Slowing.ACCELERATION, 0.0)  # from rest the ramp binds; no smallest speed declared


# 6. Units

PI = Decimal("3.14159265358979323846")


def table() -> dict[str, list[str]]:
    """Return the worked example of the page: wheel to numbers, as printed."""
    rows = re.findall(r"^\| (left|right) \| (.+) \|$", PAGE.read_text(encoding="utf-8"), flags=re.MULTILINE)
    return {wheel: numbers.split(" | ") for wheel, numbers in rows}


@pytest.mark.parametrize(("wheel", "speed"), [("left", Decimal("0.455")), ("right", Decimal("0.745"))])
def test_worked_example_is_right_to_its_last_digit(wheel, speed):
    # 0.6 m/s -+ 0.5 rad/s * 0.29 m; by hand, in decimal numbers, from the diameter of 0.2 m, 20 motor turns and 512 counts.
    turns = speed / (PI * Decimal("0.2"))
    expected = [speed, speed / Decimal("0.1"), turns, turns * 60, turns * 60 * 20, turns * Decimal("0.05") * 20 * 512]
    got = [Decimal(text) for text in table()[wheel]]
    assert [one.quantize(Decimal("0.0001")) for one in expected] == got


@pytest.mark.parametrize("speed", [0.455, 0.745, -0.3])
def test_units_are_those_of_a_general_library(speed):
    units = pytest.importorskip("astropy.units")  # in the test extra; independent of this page's formulas
    turning = (speed / 0.1) * units.rad / units.s
    rpm = turning.to_value(units.cycle / units.min)
    per_period = (turning * 0.05 * units.s).to_value(units.cycle) * 10240
    expected = [turning.to_value(units.rad / units.s), rpm, 20 * rpm, per_period]
    np.testing.assert_allclose(names_of(6).units(speed), expected, rtol=1e-12)


def test_worked_step_of_the_counters_is_right():
    # 371 and 607 counts of pi * 200 mm / 10240; the middle goes half their sum, the heading turns by their difference over 580 mm.
    millimetres = PI * 200 / 10240
    left, right = 371 * millimetres, 607 * millimetres
    path, turn = float(left + right) / 2000.0, float((right - left) / 580)
    text = " ".join(PAGE.read_text(encoding="utf-8").split())
    for printed in (f"371 counts, {left:.3f} mm", f"607 counts, {right:.3f} mm", f"{1000 * path:.3f} mm", f"{turn:.5f} rad"):
        assert printed in text
    x, y, heading = names_of(6).rolled((0.0, 0.0, 0.0), now=(365, 571), before=(65530, 65500))
    assert heading == pytest.approx(turn, rel=1e-12)
    assert math.hypot(x, y) == pytest.approx(2.0 * path / turn * math.sin(turn / 2.0), rel=1e-12)  # chord of the arc
    assert math.atan2(y, x) == pytest.approx(turn / 2.0, rel=1e-9)


def test_limits_told_of_the_counter_are_right():
    # The page: 32768 counts are 2.01 m, 1.6 s at 1.2 m/s; one count in a period is 1.23 mm/s.
    metres = names_of(6).METRES
    assert round(32768 * metres, 2) == 2.01
    assert 32768 * metres / 1.2 > 1.6
    assert round(1000 * metres / 0.05, 2) == 1.23


def test_circle_is_driven_by_whole_counts_through_many_roll_overs():
    # Radius v/w = 1.2 m, closed form. Whole counts are off by one per wheel at most, so the heading by 2 counts over the track.
    names = names_of(6)
    wheels = names.to_wheels((0.6, 0.5), names.cart.track_width)
    whole = [names.WholeCounts(), names.WholeCounts()]
    pose, before = (0.0, 0.0, 0.0), [65530, 3]
    steps = 2000
    for k in range(1, steps + 1):
        counts = [take(names.units(speed)[3]) for take, speed in zip(whole, wheels, strict=True)]
        now = [(a + b) % 65536 for a, b in zip(before, counts, strict=True)]
        pose = names.rolled(pose, now, before)
        before = now
        angle = 0.5 * 0.05 * k
        off = 2.0 * names.METRES / names.cart.track_width
        assert abs(math.remainder(pose[2] - angle, 2.0 * math.pi)) <= off
        assert math.dist(pose[:2], (1.2 * math.sin(angle), 1.2 - 1.2 * math.cos(angle))) <= 2.4 * off * (1.0 + angle)
    assert steps * names.units(wheels[0])[3] > 10 * 65536


def test_whole_counts_lose_nothing():
    take = names_of(6).WholeCounts()
    got = np.cumsum([take(370.7674) for _ in range(1000)])
    np.testing.assert_allclose(got, 370.7674 * np.arange(1, 1001), atol=0.5 + ROUNDING)
    assert got.dtype.kind == "i"
    slow = names_of(6).WholeCounts()
    assert sum(slow(0.3) for _ in range(1000)) == 300  # rounding each by itself would make this 0


# 7. Overridden


def overridden():
    """Drive with a nurse at the stick from 2 to 4 s; return motions, decisions, sticks and true poses at each step."""
    names = names_of(7)
    clock = names.Clock()
    robot, memory, given = names.StandIn(clock), names.controller.start(0.0), None
    motions, decisions, sticks, poses = [], [], [], []
    while clock() < 40.0:
        stick = (0.25, -0.6) if 2.0 <= clock() < 4.0 else None
        poses.append(robot.pose())
        decision, given = names.step(memory, clock(), poses[-1], (4.0, 1.0), stick, given)
        motions.append(given or decision.command[2:])
        decisions.append(decision)
        sticks.append(stick)
        robot.wheels(*names.to_wheels(motions[-1], names.cart.track_width))
        memory = decision.memory
        clock.sleep(names.cart.period)
    return np.array(motions), decisions, sticks, poses


def test_nurse_takes_over_and_lets_go_without_a_jerk():
    names = names_of(7)
    motions, decisions, sticks, poses = overridden()
    steps = np.diff(motions, axis=0, prepend=[[0.0, 0.0]])
    period = names.cart.period
    assert (steps[:, 0] <= names.cart.acceleration * period + ROUNDING).all()
    assert (steps[:, 0] >= -names.cart.braking * period - ROUNDING).all()
    assert (abs(steps[:, 1]) <= names.cart.turn_acceleration * period + ROUNDING).all()
    held = [index for index, stick in enumerate(sticks) if stick]
    np.testing.assert_allclose(motions[held[-1]], (0.25, -0.6), atol=ROUNDING)  # the stick is obeyed
    for index in held:
        assert decisions[index].phase == Phase.HELD
        assert Causes.TOLD_TO_HOLD in decisions[index].causes
    assert Causes.APPLIED_BY_OTHERS in decisions[held[-1] + 1].causes  # still so in the first step after
    assert Causes.APPLIED_BY_OTHERS not in decisions[held[-1] + 2].causes
    assert decisions[-1].phase == Phase.ARRIVED
    assert math.dist(poses[-1][:2], (4.0, 1.0)) <= names.controller.capture_radius


def test_commands_under_way_are_those_that_the_wheels_got():
    motions, decisions, _, _ = overridden()
    for index in range(5, len(decisions)):
        got = decisions[index].memory.under_way[1:4, 1:]  # the newest, of this step, may still be overridden
        np.testing.assert_allclose(got, motions[index - 3 : index][::-1], atol=ROUNDING)


def test_hold_alone_brakes_along_the_curve():
    names = names_of(7)
    clock = names.Clock()
    robot, memory = names.StandIn(clock), names.controller.start(0.0, motion=(0.5, 0.4))
    robot.motion, got = (0.5, 0.4), []
    for _ in range(20):
        decision = names.controller.step(memory, Measurement(clock(), robot.pose(), (4.0, 1.0), hold=True))
        memory = decision.memory
        robot.wheels(*decision.command[:2])
        got.append(decision.command[2:])
        clock.sleep(names.cart.period)
    expected = np.maximum(0.5 - 0.9 * 0.05 * np.arange(1, 21), 0.0)
    np.testing.assert_allclose([speed for speed, _ in got], expected, atol=ROUNDING)
    np.testing.assert_allclose([turn for _, turn in got], 0.8 * expected, atol=ROUNDING)  # 0.4 / 0.5: the same curve


# 8. Slow poses

STARTS = [
    ((0.0, 0.0, 0.0), (4.0, 1.0)),
    ((0.0, 0.0, 3.0), (4.0, 1.0)),
    ((0.0, 0.0, -1.57), (0.0, 3.0)),
    ((1.0, 1.0, 0.5), (-6.0, -2.0)),
    ((2.0, -1.0, 1.0), (2.5, -0.2)),
]


def slow_drive(controller, pose, goal):
    """Return the decisions of the page's drive, the true pose at each step, and the pose a second after the end."""
    names = names_of(8)
    clock = names.Clock()
    robot, truth = names.StandIn(clock, pose), []

    def sleep(seconds):
        truth.append(robot.pose())
        clock.sleep(seconds)

    decisions = names.drive(controller, robot, goal, clock, sleep)
    truth.append(robot.pose())
    clock.sleep(1.0)
    return decisions, truth, robot.pose()


@pytest.mark.parametrize(("pose", "goal"), STARTS, ids=range(len(STARTS)))
def test_pose_five_times_a_second_and_late_still_arrives(pose, goal):
    names = names_of(8)
    decisions, truth, end = slow_drive(names.slow, pose, goal)
    assert decisions[-1].phase == Phase.ARRIVED
    assert math.dist(end[:2], goal) <= names.slow.capture_radius
    assert [decision.phase for decision in decisions[:3]] == [Phase.HELD] * 3  # no pose before 0.15 s
    assert all(decision.phase != Phase.HELD for decision in decisions[3:])
    ages = [decision.report.pose_age for decision in decisions[3:]]
    assert min(ages) == pytest.approx(0.15)
    assert max(ages) == pytest.approx(0.30)
    for decision, expected in zip(decisions[3:], truth[3:], strict=True):
        # The stand-in moves on exact arcs as the controller believes: the pose carried to now is the true one.
        np.testing.assert_allclose(decision.report.pose, expected, atol=1e-9)


def test_default_age_holds_before_every_new_pose():
    names = names_of(8)
    controller = names.Controller(names.cart, capture_radius=0.30)
    assert controller.settings.stale_after == pytest.approx(0.25)
    decisions, _, _ = slow_drive(controller, *STARTS[0])
    got = [Causes.STALE_POSE in decision.causes for decision in decisions[3:]]
    assert got == [k % 4 == 3 for k in range(len(got))]  # ages 0.15, 0.20, 0.25 and, too old, 0.30 s


def test_one_lost_pose_is_bridged():
    names = names_of(8)
    memory = names.slow.start(0.0)
    held = []
    for k in range(40):
        newest = 4 * ((k - 3) // 4)  # step at which the newest pose to have come was taken
        taken = newest - 4 if newest == 16 else newest  # that of step 16 is lost
        pose = (math.nan,) * 3 if taken < 0 else (0.0, 0.0, 0.0)
        decision = names.slow.step(memory, Measurement(0.05 * k, pose, (4.0, 1.0), pose_time=0.05 * taken))
        memory = decision.memory
        held.append(decision.phase == Phase.HELD)
    assert held == [True] * 3 + [False] * 37


# 9. Camera


def docked(pose, marker, picture=None):
    """Return the decisions of the page's drive, the times, and the pose a second after the end."""
    names = names_of(9)
    clock = names.Clock()
    robot, times = names.StandIn(clock, pose), []

    def sleep(seconds):
        times.append(clock())
        clock.sleep(seconds)

    decisions = names.dock(robot, marker, clock, sleep, **({"picture": picture(clock)} if picture else {}))
    clock.sleep(1.0)
    return decisions, np.array(times), robot.pose()


def test_goal_from_a_sighting_is_short_of_the_marker_on_the_line_to_it():
    # By complex numbers: camera 0.45 m ahead, marker 2 m off at 0.3 rad.
    seen = 0.45 + 2.0 * complex(math.cos(0.3), math.sin(0.3))
    expected = seen / abs(seen) * (abs(seen) - 1.2)
    got = names_of(9).goal_from(0.3, 2.0)
    assert complex(*got) == pytest.approx(expected, rel=1e-12)


def test_camera_may_stand_aside_and_look_aside(monkeypatch):
    monkeypatch.setitem(recipe(9), "CAMERA", (0.40, 0.15, 0.2))
    marker = complex(3.0, 1.0)
    seen = (marker - complex(0.40, 0.15)) * complex(math.cos(0.2), -math.sin(0.2))
    expected = marker / abs(marker) * (abs(marker) - 1.2)
    got = recipe(9)["goal_from"](math.atan2(seen.imag, seen.real), abs(seen))
    assert complex(*got) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(
    ("pose", "marker"),
    [((0.0, 0.0, 0.0), (5.0, 1.0)), ((0.0, 0.0, 0.2), (5.0, -1.0)), ((3.0, 2.0, 3.0), (-2.0, 2.0)), ((0.0, 0.0, 1.5), (0.4, 2.5))],
    ids=range(4),
)
def test_cart_docks_by_camera_alone(pose, marker):
    names = names_of(9)
    decisions, _, end = docked(pose, marker)
    assert decisions[-1].phase == Phase.ARRIVED
    assert abs(math.dist(end[:2], marker) - 1.2) <= names.docking.capture_radius
    assert all(decision.phase == Phase.DRIVING for decision in decisions[2:-1])  # the first picture comes after 0.1 s


@pytest.mark.parametrize(("hidden", "held"), [(0.35, False), (2.0, True)])
def test_marker_out_of_view_is_bridged_until_the_sighting_is_stale(hidden, held):
    names = names_of(9)

    def picture(clock):
        return lambda robot, marker: None if 1.95 <= clock() < 1.95 + hidden else names.picture(robot, marker)

    decisions, times, end = docked((0.0, 0.0, 0.0), (5.0, 1.0), picture)
    stale = times[[Causes.STALE_POSE in decision.causes for decision in decisions[: len(times)]]]
    assert decisions[-1].phase == Phase.ARRIVED
    assert abs(math.dist(end[:2], (5.0, 1.0)) - 1.2) <= names.docking.capture_radius
    assert bool(len(stale)) == held
    if held:  # the last sighting is of 1.9 s, the first after it of 4.0 s, here at 4.1 s
        assert stale[0] == pytest.approx(1.9 + 0.60 + 0.05)
        assert stale[-1] == pytest.approx(4.1 - 0.05)


def test_sighting_needs_no_correction_for_its_age():
    # At 0.4 m/s a marker 5 m ahead is 4.96 m away 0.1 s later: report.distance is to the goal, 1.2 m short of it.
    names = names_of(9)
    memory = names.docking.start(0.0, motion=(0.4, 0.0))
    goal = names.goal_from(0.0, 5.0 - 0.45)
    decision = names.docking.step(memory, Measurement(0.0, goal=goal, goal_frame=Frame.ROBOT, pose_time=-0.1))
    assert decision.report.distance == pytest.approx(5.0 - 1.2 - 0.04)


# 10. Way points

ROUND = [(3.0, 0.0), (4.5, 1.5), (4.5, 4.0), (0.0, 4.0)]
BACK = [(3.0, 0.0), (1.0, 0.1), (1.0, 3.0)]


def passing(goals):
    """Return the decisions of the page's drive, the true pose at each step, and the pose a second after the end."""
    names = names_of(10)
    clock = names.Clock()
    robot, truth = names.StandIn(clock), []

    def sleep(seconds):
        truth.append(robot.pose())
        clock.sleep(seconds)

    decisions = names.drive(robot, goals, clock, sleep)
    truth.append(robot.pose())
    clock.sleep(1.0)
    return decisions, truth, robot.pose()


@pytest.mark.parametrize("goals", [ROUND, BACK])
def test_way_points_are_passed_in_order_and_the_last_is_arrived_at(goals):
    radius = names_of(10).controller.capture_radius
    decisions, truth, end = passing(goals)
    passed = [k for k, decision in enumerate(decisions) if decision.phase == Phase.PASSED]
    assert len(passed) == len(goals) - 1
    assert [k for k, decision in enumerate(decisions) if decision.phase == Phase.ARRIVED] == [len(decisions) - 1]
    assert math.dist(end[:2], goals[-1]) <= radius
    for goal, k in zip(goals, passed, strict=False):
        # The command of step k rules from the dead time, two periods, to the end of a third: by then the disc is touched, and not
        # before (the step counts a touch from 2 % within the rim).
        away = [math.dist(pose[:2], goal) for pose in truth[k : k + 4]]
        assert min(away) <= radius
        assert min(away[:3]) > 0.97 * radius
    assert [decisions[k + 1].report.goal for k in passed] == goals[1:]


def test_way_points_on_a_straight_line_cost_no_time():
    row, _, _ = passing([(1.5, 0.0), (3.0, 0.0), (4.0, 0.0), (6.0, 0.0)])
    alone, _, _ = passing([(6.0, 0.0)])
    assert [decision.command for decision in row] == [decision.command for decision in alone]


def test_round_is_driven_without_a_stop():
    decisions, _, end = passing(ROUND)
    assert math.dist(end[:2], ROUND[-1]) <= names_of(10).controller.capture_radius
    speeds = np.array([decision.command.speed for decision in decisions])
    running = np.flatnonzero(speeds > 0.4)
    assert speeds[running[0] : running[-1]].min() > 0.4  # of 0.5 m/s: between start and end it never slows for a way point


def test_in_place_door_passes_way_points_as_the_pure_step_does():
    names = names_of(10)
    decisions, truth, _ = passing(ROUND)
    door, legs = names.controller.in_place(0.0), itertools.pairwise([*ROUND, names.NOWHERE])
    door.measurement[names.GOAL], door.measurement[names.NEXT_GOAL] = next(legs)
    for decision, pose, k in zip(decisions, truth, itertools.count()):
        door.measurement[:4] = decision.memory.time, *pose
        got = door.step()
        assert got[4] == decision.phase, k
        assert door.memory.tobytes() == decision.memory.to_bytes()
        if decision.phase == Phase.PASSED:
            door.measurement[names.GOAL], door.measurement[names.NEXT_GOAL] = next(legs)


# 11. No answer


def stiffly(goal, least):
    """Drive a robot whose wheels stand still below `least(time)`, m/s; return decisions, when it ended (s), and the robot."""
    names = names_of(11)
    clock, told, decisions = names.Clock(), [], []

    class Robot(names.Stiff):
        def wheels(self, left, right):
            self.least = least(clock())
            told.append((left, right))
            super().wheels(left, right)

    def step(memory, measurement):
        decisions.append(names.careful.step(memory, measurement))
        return decisions[-1]

    robot = Robot(clock)
    with pytest.MonkeyPatch.context() as patch:
        patch.setitem(recipe(11), "careful", SimpleNamespace(start=names.careful.start, step=step))
        names.drive(robot, goal, clock, clock.sleep)
    assert told[-1] == (0.0, 0.0)
    return decisions, clock(), robot


@pytest.mark.parametrize(("least", "goal"), [(0.05, (-0.6, 0.0)), (0.05, (4.0, 1.0)), (0.06, (0.4, 0.0)), (0.06, (0.0, 0.5))])
def test_smallest_speed_declared_too_low_is_found_and_the_drive_ends_at_the_goal(least, goal):
    decisions, _, robot = stiffly(goal, lambda time: least)
    robot.clock.sleep(1.0)
    assert decisions[-1].phase == Phase.ARRIVED
    assert math.dist(robot.pose()[:2], goal) <= 0.05
    # By construction: tenths are added until the wheels move, to three times 0.02 m/s at most.
    assert least <= decisions[-1].report.slowest <= min(1.1 * least, 0.06) + ROUNDING
    silent = [decision for decision in decisions if Causes.NO_ANSWER in decision.causes]
    assert len(silent) * 0.05 > 2.5  # one goal in six 2.75 s, the others longer than the patience: raising counts as going on


def test_robot_that_answers_is_not_taken_for_one_that_does_not():
    decisions, _, _ = stiffly((4.0, 1.0), lambda time: 0.02)
    assert decisions[-1].phase == Phase.ARRIVED
    assert not any(Causes.NO_ANSWER in decision.causes for decision in decisions)
    assert {decision.report.slowest for decision in decisions} == {0.02}


@pytest.mark.parametrize("off", [0.0, 2.0])
def test_drive_ends_some_seconds_after_the_motors_went_off(off):
    decisions, end, _ = stiffly((4.0, 1.0), lambda time: math.inf if time >= off else 0.0)
    assert decisions[-1].phase == Phase.DRIVING
    assert Causes.NO_ANSWER in decisions[-1].causes
    assert decisions[-1].report.slowest == 0.02  # told to run much faster than that: its smallest speed is not to blame
    # The last command obeyed is over a dead time after `off`, and a period for the pose to show it. Then half a second and the dead
    # time of silence, a period more as they must be exceeded, and 3 s of patience, likewise.
    assert off + 3.0 < end <= off + 0.10 + 0.05 + 0.50 + 0.10 + 0.05 + 3.0 + 0.05 + ROUNDING


def test_drive_goes_on_after_a_short_block():
    decisions, _, _ = stiffly((4.0, 1.0), lambda time: math.inf if 2.0 <= time < 4.0 else 0.0)
    silent = [decision.memory.time for decision in decisions if Causes.NO_ANSWER in decision.causes]
    assert 2.0 < min(silent) < max(silent) < 4.0 + 0.10 + 0.10  # until the pose shows the first command obeyed
    assert decisions[-1].phase == Phase.ARRIVED
