"""The way ahead: upper bounds against the same sums made period by period, Fresnel's integrals, and drives that end at rest."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import fresnel

from steerkit import compiled, way_ahead

NEAR = 1e-9  # rounding of a few dozen operations
PI = math.pi


def way_period_by_period(angle, periods, v0, up, top, down, w, step, turn):
    """Return the way along a direction, one period after the other, each speed and turn rate the most (the least, backwards)."""
    i = np.arange(periods)
    most = np.minimum(np.minimum(top, v0 + (i + 1) * up), (periods - i) * down)
    least = np.maximum(0.0, v0 - (i + 1) * down)
    turned = np.cumsum(np.minimum(np.minimum(turn, w + (i + 1) * step), (periods - i) * step))
    ends = np.maximum(0.0, angle - np.concatenate([[0.0], turned]))
    nodes, weights = np.polynomial.legendre.leggauss(5)
    cosines = np.cos(ends[:-1, None] + (ends[1:] - ends[:-1])[:, None] * (nodes + 1.0) / 2.0) @ weights / 2.0
    return float(np.sum(cosines * np.where(cosines > 0.0, most, least)))


@pytest.mark.parametrize(("finest", "above"), [(0.02, 2e-3), (0.0005, 2e-3)])
def test_the_way_ahead_is_never_less_than_period_by_period(finest, above):
    rng = np.random.default_rng(13)
    for _ in range(500):
        T, v0, w = finest * rng.uniform(1.0, 2.0), rng.choice([0.0, 0.3]), rng.choice([0.0, 0.4])
        up, down, step = rng.uniform(0.3, 3.0, 2).tolist() + [float(rng.uniform(1.0, 20.0))]
        stop = max(v0 / down, w / step)
        periods = int((stop + rng.uniform(0.1, 2.0)) / T) + 1
        row = (v0 * T, up * T * T, T, down * T * T, w * T, step * T * T, 2.0 * T)
        angle = rng.uniform(0.0, PI)
        expected = way_period_by_period(angle, periods, *row)
        got = way_ahead.most_ahead_kernel(angle, float(periods), (*row, 2.0 * T))
        assert got >= expected - NEAR
        assert got <= expected + above  # a turn that ends within a period, or pieces


@pytest.mark.parametrize("angle", [0.4, 1.2, 2.5])
@pytest.mark.parametrize("wheel", [1.2, 1.6])
def test_the_wheels_share_speed_and_turn_rate_in_the_best_way(wheel, angle):
    # without ramps: on the spot to 90 degrees, full turn rate until cos = V/wheel, then full speed (derived); h = 1/2, V = 1, W = 2
    square, last = min(angle, PI / 2), math.acos(1.0 / wheel)
    free = (wheel - 1.0) / 0.5  # turn rate that full speed leaves
    expected = (1.0 / free) * math.sin(min(last, angle)) + 4.0 - min(last, angle) / free
    if angle > last:
        expected += (wheel - 1.0) / 2.0 * (math.sin(square) - math.sin(last)) - (angle - last) / 2.0
    row = (0.0, 0.1, 1e-3, 0.1, 0.0, 0.1, 2e-3, wheel * 1e-3)  # a period of 1 ms, ramps of 100 m/s^2 and rad/s^2
    for need, forbidden in ((expected + 0.002, True), (expected - 0.01, False)):
        assert way_ahead.wheels_forbid_kernel(need, angle, 4000.0, row, 0.5) == forbidden
    rng = np.random.default_rng(2)
    for _ in range(300):  # other ways to share, 40 rates in a row
        rates = np.sort(rng.uniform(0.0, 2.0, 40))[:: rng.choice([-1, 1])] * rng.integers(0, 2, 40)
        left = np.maximum(0.0, angle - np.concatenate([[0.0], np.cumsum(np.repeat(rates, 10) * 0.01)]))
        middle = 0.5 * (left[1:] + left[:-1])
        speed = np.minimum(1.0, wheel - 0.5 * np.repeat(rates, 10)) * (middle < PI / 2)
        assert np.sum(speed * np.cos(middle) * 0.01) <= expected + 1e-3


# a robot that turns and cannot stop at once


def swing_way(angle, periods, row, half_track):
    """Return the largest way that is not forbidden, bisected."""
    low, high = -1000.0, 1000.0
    while high - low > 1e-11:
        middle = 0.5 * (low + high)
        if way_ahead.swing_forbids_kernel(middle, angle, float(periods), row, half_track):
            high = middle
        else:
            low = middle
    return high


def swing_period_by_period(angle, periods, row, half_track, nodes=400):
    """Return the way along a direction, in each moment the best cosine between the least and the most that is turned."""
    v0, up, top, down, w, step, turn, wheel = row
    i = np.arange(periods)
    lowest = np.maximum(-turn, np.maximum(w - (i + 1) * step, -(periods - i) * step))
    highest = np.minimum(turn, np.minimum(w + (i + 1) * step, (periods - i) * step))
    share = (np.arange(nodes) + 0.5) / nodes
    least = (np.cumsum(lowest) - lowest)[:, None] + lowest[:, None] * share - angle
    most = (np.cumsum(highest) - highest)[:, None] + highest[:, None] * share - angle
    held = np.floor(most / (2.0 * PI)) >= np.ceil(least / (2.0 * PI))  # a whole turn from the direction lies between the two
    cosines = np.where(held, 1.0, np.maximum(np.cos(least), np.cos(most))).mean(axis=1)
    speed = np.minimum(np.minimum(top, v0 + (i + 1) * up), (periods - i) * down)
    speed = np.minimum(speed, wheel - half_track * np.maximum(0.0, lowest))
    return float(np.sum(cosines * np.where(cosines > 0.0, speed, np.maximum(0.0, v0 - (i + 1) * down))))


def draw_spin(rng, finest):
    """Return a robot that turns, one row of limits a period, half its track and periods enough to come to rest."""
    T = finest * rng.uniform(1.0, 2.0)
    top, turn, half = rng.uniform(0.2, 2.0), rng.uniform(0.5, 6.0), rng.uniform(0.1, 0.4)
    w, al = turn * rng.uniform(0.3, 1.0), rng.uniform(1.0, 8.0)
    wheel = max(top, half * turn) + min(top, half * turn) * rng.choice([0.0, 1.0, rng.random()])
    v0, (up, down) = min(top, wheel - half * w) * rng.choice([0.0, 1.0, rng.random()]), rng.uniform(0.3, 3.0, 2)
    periods = int((max(v0 / down, w / al) + rng.choice([0.0, rng.uniform(0.0, 2.0)])) / T) + 2
    row = (v0 * T, up * T * T, top * T, down * T * T, w * T, al * T * T, turn * T, wheel * T)
    return tuple(map(float, row)), float(half), periods


@pytest.mark.parametrize(("finest", "count"), [(0.05, 300), (0.005, 100), (0.0005, 30)])
def test_the_way_of_a_spin_is_never_less_than_period_by_period(finest, count):
    # 4 to 8000 periods: whole ones, then up to some 50 pieces
    rng, exact, tried = np.random.default_rng(21), 0, count if compiled.ON else count // 10
    for _ in range(tried):
        row, half, periods = draw_spin(rng, finest)
        angle = rng.choice([rng.uniform(-PI, 2.0 * PI), rng.normal(0.0, 0.2)])
        expected = swing_period_by_period(angle, periods, row, half)
        got = swing_way(angle, periods, row, half)
        assert got >= expected - 2e-6 * periods * row[2]  # 400 midpoints
        assert got <= expected + 1e-6 + periods * row[2] / way_ahead.PIECES  # one piece at top speed
        exact += got <= expected + 1e-6
    assert exact >= 0.1 * tried  # whole periods, or behind the robot


@pytest.mark.parametrize("angle", [-1.0, 0.0, 0.5, 2.0, 3.0, 6.0, 7.0, 7.5])
def test_with_no_time_to_spare_the_turn_is_known(angle):
    # the turn rate falls evenly over all of the time: angle t*(w - al t/2), way the integral of its cosine above zero (Fresnel)
    periods, al, T = 2000, 3.0, 1e-3
    w = (periods + 0.5) * al * T  # of the parabola through the angles at the ends of the periods
    t = np.linspace(0.0, periods * T, 400_001)
    scale, last = math.sqrt(al / PI), w * w / (2.0 * al) - angle  # the angle left is last - pi/2 u^2
    u = scale * (w / al - t)
    sine, cosine = fresnel(u)
    primitive = -(math.cos(last) * cosine + math.sin(last) * sine) / scale
    ahead = np.cos(last - 0.5 * PI * u * u)
    expected = np.sum(np.diff(primitive)[(ahead[1:] > 0.0) & (ahead[:-1] > 0.0)])  # speed 1, none while it points away
    row = (0.0, 1e3 * T, T, 1e3 * T, (periods + 1.0) * al * T * T, al * T * T, 10.0 * T, 10.0 * T)
    got = swing_way(angle, periods, row, 0.1)
    assert got >= expected - 1e-6
    assert got <= 1.003 * expected + 1e-3  # pieces of 42 periods


def test_a_piece_counts_no_less_than_its_periods():
    rng, nodes = np.random.default_rng(23), 200
    for _ in range(3000 if compiled.ON else 100):
        row, half, periods = draw_spin(rng, 0.01)
        k = int(rng.integers(1, min(periods, 30)))
        i = int(rng.integers(0, periods - k + 1))
        v0, up, top, down, w, step, _, wheel = row
        at = np.arange(i, i + k)
        most = np.minimum(np.minimum(top, v0 + (at + 1) * up), (periods - at) * down)
        leaves = wheel - half * np.maximum(0.0, w - (at + 1) * step)
        start, end = rng.uniform(0.0, PI, 2)  # the angle moves evenly
        cosines = np.cos(start + (end - start) * (np.arange(k * nodes) + 0.5) / (k * nodes)).reshape(k, nodes)
        ahead, behind = np.maximum(0.0, cosines).mean(axis=1), np.maximum(0.0, -cosines).mean(axis=1)
        speed, least = np.minimum(most, leaves), np.maximum(0.0, v0 - (at + 1) * down)
        expected = np.sum((ahead - behind) * np.where(ahead > behind, speed, least))
        means = ahead.mean(), behind.mean(), math.cos(max(start, end))
        got = way_ahead.piece_way_kernel(float(i), float(k), most.sum(), *means, float(periods), row, half)
        assert got >= expected - NEAR


def test_a_spin_comes_round():
    # half a turn from the start to the direction on either side: what lies at angle and at angle - 2 pi is one direction
    rng = np.random.default_rng(22)
    for _ in range(200 if compiled.ON else 10):
        row, half, periods = draw_spin(rng, 0.02)
        angle = rng.uniform(-PI, PI)
        got, expected = (swing_way(angle + 2.0 * PI * turns, periods, row, half) for turns in (-1, 1))
        assert got == pytest.approx(expected, abs=1e-7)
