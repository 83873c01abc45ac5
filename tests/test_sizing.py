"""The heading loop against closed forms: the library's own compiled step in the loop, its gain limits against bisected ones."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import lambertw

from closed_loop import drive
from steerkit import Controller, Platform, sizing
from steerkit.kinematics import arc
from studies import gain_limits, heading_errors, linear_robot, orbit_errors

FINE = 1e-3  # s, a period short enough to stand for continuous time


# H1: e(t) = e0 exp(-K t), first-order response; any control text (derived).
@pytest.mark.parametrize(("share", "decades"), [(50.0, 3.9120), (20.0, 2.9957)])
def test_continuous_loop_settles_as_the_exponential(share, decades):
    gain = 2.0
    e = heading_errors(linear_robot(FINE), gain, 3.0, predict=True)
    settled = np.flatnonzero(e <= e[0] / share)[0] * FINE
    assert settled == pytest.approx(decades / gain, abs=5e-5 / gain + 1.5 * FINE)


# H1: with |turn rate| <= W: t = (|e0| - W/K)/W + ln((W/K)/eps)/K = 4.456012 s for K=2, W=1, e0=3, eps=.01 (derived, solve_ivp).
def test_saturated_loop_takes_the_closed_form_time():
    e = heading_errors(linear_robot(FINE), 2.0, 6.0, predict=True, ceiling=1.0, e0=3.0)
    assert np.flatnonzero(e <= 0.01)[0] * FINE == pytest.approx(4.456012, abs=1.5 * FINE)


# H2: e[k+1] = (1 - K T) e[k]: dead-beat at K T = 1 (Franklin, Powell & Workman, from memory; derived).
@pytest.mark.parametrize("share", [0.3, 1.0, 1.7])
def test_sampled_loop_with_prediction_is_geometric(share):
    robot = linear_robot(0.05, dead_time=0.173)
    e = heading_errors(robot, share / 0.05, 1.0, predict=True, e0=1e-3)
    expected = 1e-3 * (1.0 - share) ** np.arange(len(e))
    assert np.allclose(e, expected, rtol=0.0, atol=1e-15)


# H3: method of steps, e(t) = sum_j (-K)^j (t - (j-1) tau)^j / j!, K = .5, tau = 1 (derived; limits Hayes 1950).
@pytest.mark.parametrize(("t", "expected"), [(1.0, 0.5), (2.0, 0.125), (3.0, -0.0208333), (5.0, -0.02109375), (8.0, 0.00155949668)])
def test_continuous_dead_time_gives_the_method_of_steps(t, expected):
    # A held command is on average half a period old, which the dead time here makes up for. The first command acts at t = 0 there.
    e = heading_errors(linear_robot(0.01, dead_time=0.995), 0.5, 9.1, predict=False, e0=1e-3) / 1e-3
    assert np.interp(t + 0.995, 0.01 * np.arange(len(e)), e) == pytest.approx(expected, abs=2e-4)


# H3: overshoot after a step: K tau = 0.4: 0.0707 %, 0.5: 4.0520 %, 1: exactly 50 % (derived).
@pytest.mark.parametrize(("share", "overshoot"), [(0.4, 0.000707), (0.5, 0.040520), (1.0, 0.5)])
def test_continuous_dead_time_overshoots_as_derived(share, overshoot):
    e = heading_errors(linear_robot(0.01, dead_time=1.0 - 0.005), share, 12.0, predict=False, e0=1e-3) / 1e-3
    assert -e.min() == pytest.approx(overshoot, abs=2e-3 * max(overshoot, 0.05))


# H3: decay rate at K tau = 0.3 is the dominant root, lambertw(-K tau)/tau (Corless et al. 1996; scipy).
def test_dead_time_decays_at_the_lambert_rate():
    e = heading_errors(linear_robot(0.01, dead_time=1.0 - 0.005), 0.3, 12.0, predict=False, e0=1e-3)
    rate = math.log(e[1000] / e[900])
    assert rate == pytest.approx(lambertw(-0.3).real, rel=2e-4)


H4 = [  # d, stable below, no oscillation up to; Levin & May 1976, Erbe & Zhang 1989 (from memory); all by root finding too
    (0, 2.0, 1.0),
    (1, 1.0, 0.25),
    (2, 0.6180340, 0.1481481),
    (3, 0.4450419, 0.1054688),
    (4, 0.3472964, 0.08192),
    (5, 0.2846297, 0.0669796),
]


@pytest.mark.parametrize(("d", "stable", "smooth"), H4)
def test_whole_period_limits_are_the_published_ones(d, stable, smooth):
    assert sizing.stable_gain(1.0, float(d)) == pytest.approx(stable, abs=5.1e-8)
    assert sizing.no_overshoot_gain(1.0, float(d)) == pytest.approx(smooth, abs=5.1e-8)


# H4, fractional delay m: stable iff K T < min(1/m, 2/(1-2m)), smooth iff K T <= 1/(1+sqrt m)^2 (derived).
@pytest.mark.parametrize(
    ("m", "stable", "smooth"), [(0.1, 2.5, 0.57722), (0.25, 4.0, 0.44444), (0.5, 2.0, 0.34315), (0.75, 1.33333, 0.28719)]
)
def test_fractional_limits_are_the_derived_ones(m, stable, smooth):
    assert sizing.stable_gain(1.0, m) == pytest.approx(stable, abs=5e-6)
    assert sizing.no_overshoot_gain(1.0, m) == pytest.approx(smooth, abs=5e-6)


# The loop with dead time and lag (derived; checked against polynomial roots); stable and smooth gain, both times T.
@pytest.mark.parametrize(
    ("T", "tau", "lag", "stable", "smooth"),
    [
        (1.0, 1.5, 0.0, 0.828427, 0.180340),
        (1.0, 2.25, 0.0, 0.582168, 0.132775),
        (1.0, 10.5, 0.0, 0.143043, 0.033421),
        (0.05, 0.12, 0.05, 0.443964, 0.090717),
        (0.1, 0.0, 0.1, 2.392211, 0.196174),
    ],
)
def test_limits_agree_with_the_derived_values(T, tau, lag, stable, smooth):
    assert T * sizing.stable_gain(T, tau, lag) == pytest.approx(stable, abs=5e-7)
    assert T * sizing.no_overshoot_gain(T, tau, lag) == pytest.approx(smooth, abs=5e-7)


def test_limits_agree_with_polynomial_roots_of_the_loop():
    """numpy.roots on z^(d+2) - z^(d+1) + g((1-m) z + m): on the circle at the one limit, a double real root at the other."""
    rng = np.random.default_rng(3)
    for _ in range(60):
        d, m = int(rng.integers(1, 20)), rng.random()
        polynomial = np.zeros(d + 3)
        polynomial[:2] = 1.0, -1.0
        for gain, expected in ((sizing.stable_gain(1.0, d + m), 1.0), (sizing.no_overshoot_gain(1.0, d + m), None)):
            loop = polynomial.copy()
            loop[-2:] += gain * (1.0 - m), gain * m
            roots = np.roots(loop)
            if expected is not None:
                assert np.max(np.abs(roots)) == pytest.approx(1.0, abs=1e-9)
            else:
                slowest = roots[np.argmax(np.abs(roots))]
                assert abs(slowest.imag) < 1e-5
                assert slowest.real > 0.0


def test_a_short_lag_acts_as_dead_time():
    for tau in (0.0, 0.13, 0.31):
        assert sizing.stable_gain(0.1, tau, 2e-5) == pytest.approx(sizing.stable_gain(0.1, tau + 2e-5), rel=1e-3)
        assert sizing.no_overshoot_gain(0.1, tau, 2e-5) == pytest.approx(sizing.no_overshoot_gain(0.1, tau + 2e-5), rel=1e-3)


# T -> 0 with lag: K = s e^(-s tau)(1 - s tau_m), s = 2/(tau + 2 tau_m + sqrt(tau^2 + 4 tau_m^2)); tau = 0: 1/(4 tau_m) (derived).
@pytest.mark.parametrize(("tau", "lag"), [(0.0, 0.1), (0.2, 0.1), (0.3, 0.02)])
def test_lagged_limit_tends_to_the_continuous_one(tau, lag):
    s = 2.0 / (tau + 2.0 * lag + math.sqrt(tau * tau + 4.0 * lag * lag))
    expected = s * math.exp(-s * tau) * (1.0 - s * lag)
    assert sizing.no_overshoot_gain(2e-4, max(0.0, tau - 1e-4), lag) == pytest.approx(expected, rel=2e-3)


# H6: behind a lag alone, s(tau s + 1) + K: overshoot exp(-pi zeta/sqrt(1-zeta^2)), zeta = 1/(2 sqrt(K tau)):
# K tau = 1/2: 4.3214 %, 1: 16.3034 % (Ogata; Nise, from memory; scipy.signal.step).
@pytest.mark.parametrize(("share", "overshoot"), [(0.25, 0.0), (0.5, 0.043214), (1.0, 0.163034)])
def test_lag_alone_overshoots_as_a_second_order_loop(share, overshoot):
    e = heading_errors(linear_robot(FINE, motor_lag=0.4), share / 0.4, 6.0, predict=False, e0=1e-3) / 1e-3
    assert -min(0.0, e.min()) == pytest.approx(overshoot, abs=1e-3)


# Correction 18 of a derivative on a sampled integrator: stable iff |Kd| < 1, Kp T > 0, Kp T + 2 Kd < 2 (Jury; derived).
@pytest.mark.parametrize(
    ("kp", "kd", "stable"),
    [(0.5, 0.7, True), (0.5, 0.74, True), (0.5, 0.76, False), (1.9, 0.0, True), (0.2, -0.99, True), (0.2, -1.01, False)],
)
def test_slowest_root_knows_the_derivative_border(kp, kd, stable):
    size = sizing.slowest_root(kp, math.inf, kd / kp, 1.0)
    assert (size < 1.0) == stable


def test_slowest_root_agrees_with_the_stable_gain():
    for tau, lag in ((0.0, 0.0), (0.13, 0.0), (0.3, 0.07), (0.05, 0.1)):
        limit = sizing.stable_gain(0.1, tau, lag)
        assert sizing.slowest_root(0.99 * limit, math.inf, 0.0, 0.1, tau, lag) < 1.0
        assert sizing.slowest_root(1.01 * limit, math.inf, 0.0, 0.1, tau, lag) > 1.0


@pytest.mark.parametrize("predict", [True, False], ids=["predicted", "unpredicted"])
def test_gain_limits_are_those_of_the_library_s_own_loop(predict):
    worst = gain_limits(pairs=12, predict=predict, seed=1)
    assert worst.stable < 0.02
    assert worst.smooth < 0.02


def test_orbit_radius_is_that_of_the_library_s_own_loop():
    assert max(orbit_errors(robots=30, seed=2)) < 0.01


# O1: omega = K wrap(e) ends in the circle 2V/(pi K): V = 1, K = 2: 0.318309886 (derived; Bendixson-Dulac).
def test_constant_speed_orbit_is_the_derived_circle():
    robot = Controller(linear_robot(FINE), capture_radius=0.2).unchecked(
        cruise=1.0,
        gain=2.0,
        ceiling=50.0,
        top_turn_rate=50.0,
        capture_radius=1e-9,
        stop_radius=1e-9,
        aim_radius=1e-9,
        rest_radius=1e-9,
        braking=1e9,
    )
    for start in ((3.0, 0.0, 2.0), (0.35, 0.0, 1.4), (0.5, 0.5, -2.0)):
        log = drive(robot, start, motion=(1.0, 0.0), steps=20_000)
        assert math.hypot(*log[-1, :2]) == pytest.approx(0.318309886, abs=1e-6)


# O2: omega = K sin(e) conserves c = rho sin(e) exp(-K rho/V); the orbit lies between -V/K W(-K|c|/V) of both branches (derived).
# The law is not the library's: written here around its arcs.
@pytest.mark.parametrize(
    ("start", "low", "high"), [((3.0, 0.0, 2.0), 0.0068551, 3.056943), ((0.6, 0.0, math.pi / 2.0), 0.4117810, 0.6)]
)
def test_sine_law_circles_for_ever_between_the_lambert_radii(start, low, high):
    V, K, dt = 1.0, 2.0, 5e-4
    pose, radii = start, []
    for _ in range(40_000):
        x, y, heading = pose
        radii.append(math.hypot(x, y))
        # the midpoint rule keeps the conserved quantity to second order
        middle = arc(pose, (V, K * math.sin(math.atan2(-y, -x) - heading)), dt / 2.0)
        pose = arc(pose, (V, K * math.sin(math.atan2(-middle.y, -middle.x) - middle.heading)), dt)
    rho, e = radii[0], math.atan2(-start[1], -start[0]) - start[2]
    c = abs(rho * math.sin(e) * math.exp(-K * rho / V))
    assert [-V / K * lambertw(-K * c / V, branch).real for branch in (0, -1)] == pytest.approx([low, high], abs=6e-7)
    assert min(radii) == pytest.approx(low, abs=2e-4)
    assert max(radii) == pytest.approx(high, abs=2e-5)


# O3: v = kv rho, omega = K e: d ln(rho)/dt = -kv cos e*, sin e*/e* = K/kv; spirals outwards below 2/pi (derived).
@pytest.mark.parametrize(("ratio", "rate"), [(0.5, 0.319023), (0.65, -0.033176), (0.8, -0.425662)])
def test_speed_by_distance_spirals_at_the_derived_rate(ratio, rate):
    def motion(x, y, heading):
        return math.hypot(x, y), ratio * math.remainder(math.atan2(-y, -x) - heading, 2.0 * math.pi)

    dt, pose, distances = 1e-3, (1.0, 0.0, math.pi / 2.0), []
    for _ in range(30_000):
        distances.append(math.hypot(*pose[:2]))
        pose = arc(pose, motion(*arc(pose, motion(*pose), dt / 2.0)), dt)  # the midpoint rule
    got = math.log(distances[-1] / distances[-5_001]) / (5_000 * dt)
    assert got == pytest.approx(rate, abs=2e-4)


def test_a_low_ceiling_allows_a_higher_gain_and_speed():
    """A robot that turns fast but gathers turn rate slowly is driven fastest at a turn rate below its limit."""
    cart = Platform(
        radius=0.3,
        track_width=0.4,
        wheel_speed_limit=3.0,
        speed_limit=1.5,
        turn_rate_limit=6.0,
        acceleration=1.0,
        braking=1.0,
        turn_acceleration=1.0,
        period=0.02,
        dead_time=0.1,
    )
    found = sizing.window(cart, 0.2)
    assert found.bound == "turn_acceleration"
    # continuous limit, no wheel limit: ceiling^2 = pi al (derived)
    assert found.ceiling == pytest.approx(math.sqrt(math.pi), rel=0.02)
    at_the_limit = sizing.no_ringing_gain(cart, found.fastest, cart.turn_rate_limit)
    assert found.high > 2.0 * at_the_limit
