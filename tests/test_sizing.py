"""The heading loop against closed forms: the library's own compiled step in the loop, its gain limits against bisected ones."""

from __future__ import annotations

import contextlib
import io
import math
import re
import sys
from pathlib import Path

import numpy as np
import pytest
from matplotlib.text import Annotation
from scipy.special import lambertw

from closed_loop import drive
from robots import cart, draw
from sizing_studies import captures, changed, changes, constant_speed, settling
from steerkit import Platform, compiled, sizing
from steerkit.kinematics import arc
from studies import gain_limits, heading_errors, linear_robot, orbit_errors

SHARES = np.linspace(0.0, 1.0, 1000)
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
    robot = constant_speed(linear_robot(FINE), 0.2).unchecked(
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


# The report.

REFUSED = {  # one for each number that binds: the robot, its demand, what must be among the changes
    "turn_rate_limit": (cart(), (0.1, 0.5, True), {"speed", "capture_radius"}),
    "turn_acceleration": (
        cart(turn_acceleration=1.0, turn_rate_limit=6.0),
        (0.2, 0.8, True),
        {"speed", "capture_radius", "turn_acceleration"},
    ),
    "speed_limit": (cart(), (0.6, 1.0, True), {"speed", "speed_limit"}),
    "period": (
        cart(period=0.2, turn_acceleration=100.0, turn_rate_limit=12.0),
        (0.1, 0.6, True),
        {"speed", "capture_radius", "period"},
    ),
    "dead_time and motor_lag": (
        cart(dead_time=0.3, motor_lag=0.08, turn_acceleration=20.0),
        (0.2, 0.3, False),
        {"speed", "capture_radius", "dead_time", "motor_lag", "predict"},
    ),
}


@pytest.mark.parametrize("reason", REFUSED)
def test_a_refused_demand_names_what_binds_and_the_changes_that_would_do(reason):
    platform, demand, names = REFUSED[reason]
    found = sizing.size(platform, *demand)
    assert (found.works, found.reason, found.margins) == (False, reason, None)
    assert math.isnan(found.gain)
    assert math.isnan(found.overshoot)
    assert {change.name for change in found.changes} >= names
    assert f"NO GAIN WORKS at {demand[1]:g} m/s: bound by {reason}" in str(found)


def test_a_proposed_change_is_the_nearest():
    """A thousandth less of it is refused."""
    for platform, demand, _ in REFUSED.values():
        found = sizing.size(platform, *demand)
        for change in found.changes:
            if change.name == "predict":
                continue
            before = {"speed": found.speed, "capture_radius": found.capture_radius}.get(change.name) or getattr(
                platform, change.name
            )
            nearer = change.value + math.copysign(2e-3 * change.value, before - change.value)
            assert sizing.size(*changed(found, change)).works
            assert not sizing.size(*changed(found, change._replace(value=nearer))).works, change


def test_the_report_says_what_the_loop_does():
    """The cart: predicted, so that e[k+1] = (1-g) e[k], g = K T: gain margin 2/g, Ms 2/(2-g), nothing overshoots (derived)."""
    found = sizing.size(cart(), 0.1)
    g = found.gain * 0.05
    assert found.works
    assert found.margins.gain_margin == pytest.approx(2.0 / g, rel=1e-9)
    assert found.margins.sensitivity == pytest.approx(2.0 / (2.0 - g), rel=1e-6)
    assert found.overshoot == 0.0
    assert found.orbit_radius == pytest.approx(0.1 / 1.1, rel=1e-9)
    periods = math.ceil(math.log(0.02) / math.log(1.0 - g))
    assert found.settling_time == pytest.approx((periods + 2) * 0.05 + 0.0, abs=0.051)  # and dead time of 2.4 periods


def test_a_large_error_settles_as_the_closed_form():
    """t = (e0 - W/K)/W + ln((W/K)/(.02 e0))/K and the ramp's W/(2 al), within two periods (H1; derived)."""
    robot = cart(period=0.005, dead_time=0.0, turn_acceleration=60.0, turn_rate_limit=1.0, wheel_speed_limit=10.0)
    found = sizing.size(robot, 0.3, speed=0.1, gain=3.0)
    K, W, e0 = 3.0, found.window.ceiling, math.pi
    expected = (e0 - W / K) / W + math.log(W / K / (0.02 * e0)) / K + W / 120.0
    assert found.longest_settling_time == pytest.approx(expected, abs=0.0125)


def test_the_gain_of_a_noisy_robot_is_lower_and_the_report_says_why():
    found = sizing.size(cart(heading_noise=0.05, speed_limit=0.5, turn_acceleration=20.0), 0.3)
    assert found.gain == pytest.approx(0.1 * 2.0 / 0.05)
    assert found.gain < 0.5 * found.window.high
    assert any("heading noise of 2.86 deg" in sentence for sentence in found.why)


@pytest.mark.parametrize(("gain", "fault", "near"), [(9.0, "swings", 4.444), (0.2, "circles the goal", 0.7003)])
def test_a_gain_outside_the_window_is_told_with_the_nearest_inside(gain, fault, near):
    found = sizing.size(cart(), 0.1, speed=0.1, gain=gain)
    assert (found.works, found.reason) == (False, "gain")
    assert found.changes == (sizing.Change("gain", near, "1/s"),)
    assert sizing.size(cart(), 0.1, speed=0.1, gain=near).works
    assert f"gain {gain:g} 1/s {fault}" in str(found)


def test_motor_lag_costs_speed_without_prediction_and_none_with_it():
    plain = cart(turn_acceleration=20.0, turn_rate_limit=4.0)
    lagged = cart(turn_acceleration=20.0, turn_rate_limit=4.0, motor_lag=0.1)
    assert sizing.size(lagged, 0.1).speed == sizing.size(plain, 0.1).speed
    slower, faster = sizing.size(lagged, 0.1, predict=False), sizing.size(plain, 0.1, predict=False)
    assert slower.speed < 0.9 * faster.speed
    assert f"motor_lag 0.1 s costs {faster.speed - slower.speed:.3g} m/s" in slower.why[-1]


@pytest.mark.parametrize("platform", [cart(), cart(dead_time=0.3, motor_lag=0.1), cart(heading_noise=0.05, position_noise=0.01)])
@pytest.mark.parametrize("predict", [True, False])
@pytest.mark.parametrize("speed", [None, 0.9])
def test_the_printed_report_fits_a_screen_and_each_sentence_has_a_number_and_a_source(platform, predict, speed):
    found = sizing.size(platform, 0.1, speed, predict)
    lines = str(found).splitlines()
    assert len(lines) <= 25
    assert max(len(line) for line in lines) <= 120
    for sentence in found.why:
        assert any(letter.isdigit() for letter in sentence)
        assert sentence.endswith(
            ("(derived).", "(chosen).", "(measured).", "(derived; Erbe & Zhang 1989 for whole periods, from memory).")
        )
    assert "nan" not in str(found)


def test_the_page_shows_what_is_printed():
    page = (Path(__file__).parent.parent / "docs" / "sizing.md").read_text()
    code, printed = re.findall(r"```python\n(.*?)```", page, re.S), re.findall(r"```text\n(.*?)```", page, re.S)
    assert len(code) == len(printed) >= 3
    names: dict[str, object] = {}
    for block, expected in zip(code, printed, strict=True):
        with contextlib.redirect_stdout(io.StringIO()) as out:
            exec(compile(block, "sizing.md", "exec"), names)
        assert out.getvalue() == expected


@pytest.mark.parametrize("ending", ["png", "svg"])
def test_the_picture_is_saved_without_a_display(tmp_path, ending):
    for i, (platform, demand, _) in enumerate(REFUSED.values()):
        for j, found in enumerate((sizing.size(platform, *demand), sizing.size(platform, demand[0], None, demand[2]))):
            found.save_picture(tmp_path / f"{i}{j}.{ending}")
            assert (tmp_path / f"{i}{j}.{ending}").stat().st_size > 10_000


@pytest.fixture
def drawn(monkeypatch):
    """The figures that would have been saved."""
    figures = []
    monkeypatch.setattr("matplotlib.figure.Figure.savefig", lambda figure, path: figures.append(figure))
    return figures


def test_the_picture_names_its_edges(drawn):
    for speed, words in ((None, "chosen: 4.44 1/s at 0.182 m/s"), (0.2, "asked: 0.2 m/s\nno gain works")):
        sizing.size(cart(), 0.1, speed).save_picture("window.png")
        got = {text.get_text() for text in drawn.pop().axes[0].texts}
        edges = {"circles the goal below", "swings above", "fastest workable: 0.182 m/s\nbound by turn_rate_limit"}
        assert got == {*edges, words}


def test_no_words_of_a_picture_overlap_or_are_cut_off(drawn):
    rng = np.random.default_rng(5)
    robots = [draw(rng) for _ in range(30)]
    demands = [(robot.platform, robot.capture_radius, speed) for robot in robots for speed in (None, robot.platform.top_speed)]
    for i, demand in enumerate(demands):
        sizing.size(*demand, predict=i % 4 < 2).save_picture("window.png")
        figure = drawn.pop()
        figure.draw_without_rendering()
        axes = figure.axes[0]
        boxes = [super(Annotation, text).get_window_extent() for text in axes.texts]
        drawn_lines = [line.get_transform().transform(line.get_xydata()) for line in axes.lines if len(line.get_xydata()) > 1]
        lines = np.concatenate(
            [np.stack([np.interp(SHARES, np.linspace(0.0, 1.0, len(xy)), c) for c in xy.T], 1) for xy in drawn_lines]
        )
        for j, box in enumerate(boxes):
            assert (
                axes.texts[j].get_rotation() != 0.0 or "swings above" in axes.texts[j].get_text() or not box.count_contains(lines)
            )
            assert box.x0 >= 0.0
            assert box.y0 >= 0.0
            assert box.x1 <= figure.bbox.x1
            assert box.y1 <= figure.bbox.y1
            assert not any(box.padded(-1.0).overlaps(other) for other in boxes[:j]), (demand, j)


def test_without_matplotlib_the_picture_says_what_to_install(monkeypatch, tmp_path):
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    with pytest.raises(ImportError, match=r"^the picture needs Matplotlib; install it with: pip install matplotlib$"):
        sizing.size(cart(), 0.1).save_picture(tmp_path / "window.png")


studied = pytest.mark.skipif(not compiled.ON, reason="closed loops over many robots want the compiler")


@studied
def test_the_chosen_gain_captures_every_start():
    got = captures(robots=20, starts=20, seed=301)
    assert (got.drives, got.missed) == (400, 0)


@studied
def test_the_library_s_own_loop_settles_as_predicted():
    got = settling(robots=40, seed=302)
    assert got.differ == 0
    assert got.overshoot < 0.02


@studied
def test_every_proposed_change_works_when_sized_and_driven_again():
    got = changes(robots=40, driven=4, seed=303)
    assert got.refused > 20
    assert set(got.proposed) >= {"speed", "capture_radius", "turn_rate_limit"}
    assert got.drives > 50
    assert (got.again, got.missed) == (0, 0)
