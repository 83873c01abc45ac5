"""The window of gains over random robots, a few here; `python tests/studies.py --robots 2000` draws many."""

from __future__ import annotations

import pytest

from steerkit import compiled
from studies import above_the_stability, below_the_window, faster_than_workable, limit_storm, proposed_speeds, window_drives

pytestmark = pytest.mark.skipif(not compiled.ON, reason="closed loops over many robots want the compiler")


def test_in_the_window_every_start_is_captured_arrives_and_does_not_ring():
    got = window_drives(robots=24, starts=10, seed=101)
    assert got.refused == 0
    assert got.missed == 0
    assert got.not_arrived == 0
    assert got.rings == 0, got


def test_a_gain_a_fifth_below_the_window_never_captures_from_its_orbit():
    assert below_the_window(robots=60, seed=102) == (60, 0)


def test_a_gain_a_tenth_above_stability_never_calms():
    assert above_the_stability(robots=30, seed=103) == (30, 0)


def test_above_the_fastest_speed_no_gain_both_captures_and_is_calm():
    """A speed bound by the rule that no step may pass over the disc is left out: there gains exist, steps are too long."""
    got = faster_than_workable(robots=20, seed=104)
    assert got.works["turn_rate_limit"] == got.works["turn_acceleration"] == 0
    assert got.bound["turn_acceleration"] > 0
    assert got.nearest > 0.02


def test_no_robot_is_refused_and_every_proposed_speed_works():
    refused, again = proposed_speeds(robots=150, seed=105)
    assert refused > 50
    assert again == 0


def test_no_command_is_outside_any_limit():
    got = limit_storm(steps=200_000, seed=106)
    assert got.steps >= 200_000
    assert got.worst < 1e-9, got
