"""Angles against general libraries, 60-digit arithmetic, published circular means and a recorded ride."""

from __future__ import annotations

import math
import re
from pathlib import Path

import mpmath
import numpy as np
import pytest
from astropy import units
from astropy.coordinates import Angle
from astropy.stats import circmean as astropy_circmean
from astropy.stats import circvar as astropy_circvar
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import array_shapes, arrays
from scipy import stats
from scipy.spatial.transform import Rotation

from steerkit import compiled
from steerkit.angles import CircularMean, difference, difference_kernel, mean, mean_kernel, unwrap, wrap, wrap_kernel

PI, TURN = math.pi, 2.0 * math.pi
ULP = math.ulp(PI)  # 4.4e-16: what one rounding of an angle near pi costs
TURN_ERROR = 2.45e-16  # 2 pi minus its nearest float, to 3 digits
DOWN, UP = math.nextafter(PI, 0.0), math.nextafter(PI, 4.0)
FINITE = st.floats(allow_nan=False, allow_infinity=False)
DRIVEN = st.floats(-1e4, 1e4)  # headings that a robot may have counted up
PATIENT = settings(deadline=None)  # the first call of a kernel compiles it
NEEDS_COMPILER = pytest.mark.skipif(not compiled.ON, reason="without the compiler the kernels are plain Python already")


def apart(one, other):
    """Return the size of `one - other` modulo a turn; both in [-pi, pi]."""
    size = np.abs(np.subtract(one, other))
    return np.minimum(size, np.abs(TURN - size))


def same_bits(one, other):
    return np.asarray(one, np.float64).tobytes() == np.asarray(other, np.float64).tobytes()


def exact_wrap(angle, digits=60):
    """Return `angle` less the nearest whole number of true turns, in mpmath arithmetic."""
    with mpmath.workdps(digits):
        return mpmath.mpf(angle) - 2 * mpmath.pi * mpmath.nint(mpmath.mpf(angle) / (2 * mpmath.pi))


# wrap: oracles


def remainder_of(angles):
    return np.array([math.remainder(x, TURN) for x in angles])


ORACLES = {
    # IEEE 754-2019, operation remainder, as Python's math.remainder (published): by the float turn, exactly
    "math.remainder": (remainder_of, TURN_ERROR),
    # numpy.angle (published, general library): by the true turn
    "numpy.angle": (lambda angles: np.angle(np.exp(1j * angles)), 0.0),
    # scipy.spatial.transform.Rotation (published, general library): by the true turn, through the half angle
    "scipy Rotation": (lambda angles: Rotation.from_rotvec(np.outer(angles, [0.0, 0.0, 1.0])).as_rotvec()[:, 2], 0.0),
    # astropy.coordinates.Angle.wrap_at (published, general library): by the float turn
    "astropy wrap_at": (lambda angles: Angle(angles, "rad").wrap_at(180 * units.deg).rad, TURN_ERROR),
}


@pytest.mark.parametrize("name", ORACLES)
def test_wrap_agrees_with_general_libraries(name):
    oracle, per_turn = ORACLES[name]
    angles = np.random.default_rng(1).uniform(-50.0, 50.0, 100_000)
    got, expected = wrap(angles), oracle(angles)
    # two roundings on either side, and what a float turn is short of a turn
    assert np.all(apart(got, expected) <= 4 * ULP + per_turn * np.abs(angles) / TURN)


@pytest.mark.parametrize("name", ORACLES)
def test_wrap_agrees_with_general_libraries_at_the_cut_modulo_a_turn(name):
    oracle, per_turn = ORACLES[name]
    # the libraries differ in the sign that they give to half a turn (-pi, +pi or either)
    odd = np.array([PI, DOWN, UP, 3 * PI, math.nextafter(3 * PI, 0.0), math.nextafter(3 * PI, 99.0), 5 * PI, 7 * PI])
    angles = np.concatenate([odd, -odd])
    got, expected = wrap(angles), oracle(angles)
    assert np.all(apart(got, expected) <= 4 * ULP + per_turn * np.abs(angles) / TURN)
    assert np.all((got > -PI) & (got <= PI))


@pytest.mark.parametrize(
    ("angle", "expected"),
    [
        # computed with mpmath 1.3, 60 digits (derived); the float turn of math.remainder is 3.9e-11 and 3.9e-5 off
        (1e6, -0.35756416708573504402),
        (1e12, -0.65762475913678646748),
    ],
)
def test_wrap_counts_true_turns(angle, expected):
    assert abs(wrap(angle) - expected) <= math.ulp(expected)
    assert abs(float(exact_wrap(angle)) - expected) <= math.ulp(expected)


def test_wrap_of_large_arguments_is_right_to_the_last_bits():
    rng = np.random.default_rng(2)
    angles = 10.0 ** rng.uniform(1.0, 15.0, 2000) * rng.choice([-1.0, 1.0], 2000)
    for angle, got in zip(angles.tolist(), wrap(angles).tolist(), strict=True):
        expected = exact_wrap(angle)
        # sine, cosine and arc tangent, each within one unit of its last place: three of the result's
        assert apart(got, float(expected)) <= 3 * math.ulp(float(expected))


@pytest.mark.parametrize("angle", [1e22, 2.0**1000, 1.7e308])
def test_wrap_of_huge_arguments_is_right_to_the_last_bits(angle):
    expected = float(exact_wrap(angle, digits=360))
    assert abs(wrap(angle) - expected) <= 3 * math.ulp(expected)


# wrap: the cut, small angles, what is not a number


@pytest.mark.parametrize(
    ("angle", "expected"),
    [
        (PI, PI),
        (-PI, PI),  # the interval is (-pi, pi]
        (DOWN, DOWN),
        (-DOWN, -DOWN),
        # this float lies 3.2e-16 past the true pi: nearest to it, from the other end, is -pi, which is not in the interval
        (UP, PI),
        (-UP, PI),
        # this float lies 3.7e-16 short of three true pi: the last float but one of the interval is nearer than the last
        (3 * PI, DOWN),
        (-3 * PI, -DOWN),
        (0.0, 0.0),
        (-0.0, -0.0),
        (1e-20, 1e-20),
        (-1e-20, -1e-20),
        (5e-324, 5e-324),
        (-5e-324, -5e-324),
    ],
)
def test_wrap_is_exact_at_the_cut_and_keeps_tiny_angles(angle, expected):
    assert same_bits(wrap(angle), expected)
    assert same_bits(wrap([angle]), [expected])


@PATIENT
@given(st.floats(-DOWN, PI))
def test_wrap_leaves_an_angle_inside_the_interval_alone(angle):
    assert same_bits(wrap(angle), angle)


@pytest.mark.parametrize("angle", [math.nan, math.inf, -math.inf])
def test_wrap_of_no_number_is_nan(angle):
    assert math.isnan(wrap(angle))
    got = wrap([1.0, angle, 7.0])
    assert math.isnan(got[1])
    assert got[0] == 1.0
    assert abs(got[2] - (7.0 - TURN)) <= 2 * ULP


@PATIENT
@given(FINITE)
def test_wrap_stays_in_its_interval_and_is_idempotent(angle):
    got = wrap(angle)
    assert -PI < got <= PI
    assert same_bits(wrap(got), got)


@PATIENT
@given(FINITE)
def test_wrap_is_odd_off_the_cut(angle):
    got = wrap(angle)
    assert same_bits(wrap(-angle), -got if got != PI else PI)


@PATIENT
@given(FINITE)
def test_wrap_keeps_the_direction(angle):
    got = wrap(angle)
    # sine and cosine within one unit of their last place, the result rounded to half of one of its own
    assert abs(math.sin(got) - math.sin(angle)) <= 2 * ULP
    assert abs(math.cos(got) - math.cos(angle)) <= 2 * ULP


# wrap: forms of input

SERIES = np.linspace(-20.0, 20.0, 24)


@pytest.mark.parametrize(
    "angles",
    [
        pytest.param(SERIES.reshape(2, 3, 4), id="three axes"),
        pytest.param(SERIES[::-3], id="negative stride"),
        pytest.param(SERIES.reshape(4, 6).T, id="columns first"),
        pytest.param(SERIES.reshape(4, 6)[1:, ::2], id="a window"),
        pytest.param(np.broadcast_to(SERIES, (3, 24)), id="read-only"),
        pytest.param(SERIES.astype(np.float32), id="float32"),
        pytest.param(np.arange(-10, 10), id="integers"),
        pytest.param(np.arange(0, 250, 10, dtype=np.uint8), id="bytes"),
        pytest.param(SERIES.astype(">f8"), id="big-endian"),
        pytest.param(SERIES.tolist(), id="list"),
        pytest.param([[1, 2.5], [-9, 1e6]], id="list of lists"),
        pytest.param(np.empty(0), id="empty"),
        pytest.param(np.empty((0, 3)), id="no rows"),
        pytest.param([], id="empty list"),
    ],
)
def test_wrap_takes_any_array_and_treats_each_angle_alone(angles):
    before = np.array(angles, copy=True)
    got = wrap(angles)
    expected = np.array([wrap(float(x)) for x in np.ravel(angles)]).reshape(np.shape(angles))
    assert got.dtype == np.float64
    assert got.shape == np.shape(angles)
    assert same_bits(got, expected)
    assert np.array_equal(np.asarray(angles), before)
    assert not np.shares_memory(got, np.asarray(angles))
    assert got.flags.writeable


@pytest.mark.parametrize(
    "angle", [7, 7.0, np.float32(7), np.int16(7), np.array(7.0), np.float64(7)], ids=lambda a: type(a).__name__
)
def test_wrap_of_a_single_number_is_a_float(angle):
    got = wrap(angle)
    assert type(got) is float
    assert abs(got - (7.0 - TURN)) <= 2 * ULP


@PATIENT
@given(arrays(np.float64, array_shapes(min_dims=1, max_dims=4, min_side=0, max_side=4), elements=st.floats(-1e9, 1e9)))
def test_wrap_of_an_array_is_the_wrap_of_each(angles):
    assert same_bits(wrap(angles), np.array([wrap(x) for x in angles.ravel().tolist()]))


# difference


@pytest.mark.parametrize(
    ("target", "origin", "expected"),
    [
        # by hand, degrees: target - origin, less or more a whole turn
        (10.0, 350.0, 20.0),
        (350.0, 10.0, -20.0),
        (-170.0, 170.0, 20.0),
        (90.0, -90.0, 180.0),
        (-90.0, 90.0, 180.0),
        (45.0, 45.0, 0.0),
        (725.0, 0.0, 5.0),
    ],
)
def test_difference_takes_the_short_way_round(target, origin, expected):
    got = difference(math.radians(target), math.radians(origin))
    assert abs(got - math.radians(expected)) <= 8 * ULP  # radians of 725 degrees are rounded to 4 of these


@PATIENT
@given(DRIVEN, DRIVEN)
def test_difference_carries_the_origin_to_the_target(target, origin):
    got = difference(target, origin)
    assert -PI < got <= PI
    lands = complex(math.cos(origin + got), math.sin(origin + got))
    expected = complex(math.cos(target), math.sin(target))
    assert abs(lands - expected) <= 2 * math.ulp(2e4) + 4 * ULP  # the subtraction and the addition, each rounded once


@PATIENT
@given(DRIVEN, DRIVEN)
def test_difference_changes_sign_with_its_arguments_off_the_cut(target, origin):
    got = difference(target, origin)
    assert difference(origin, target) == (-got if got != PI else PI)


def test_difference_broadcasts():
    targets, origins = SERIES.reshape(2, 3, 4), np.array([0.5, -3.0, 1.0, 2.0])
    got = difference(targets, origins)
    expected = [difference(t, o) for t, o in zip(targets.ravel().tolist(), np.tile(origins, 6).tolist(), strict=True)]
    assert got.shape == (2, 3, 4)
    assert same_bits(got.ravel(), expected)
    assert difference(1.0, [0.5, 2.0]).tolist() == [0.5, -1.0]
    assert type(difference(1, 2)) is float


@pytest.mark.parametrize(("target", "origin"), [(math.nan, 0.0), (0.0, math.nan), (math.inf, 0.0), (0.0, -math.inf)])
def test_difference_of_no_number_is_nan(target, origin):
    assert math.isnan(difference(target, origin))


@pytest.mark.parametrize(("target", "origin"), [(math.inf, math.inf), (1.7e308, -1.7e308)])
def test_difference_of_no_number_is_nan_without_a_warning(target, origin):
    assert math.isnan(difference(target, origin))


# unwrap

# examples of the numpy.unwrap documentation (published), in units of the period named there
DOCUMENTED = {
    "period 4": (4, [0, 1, 2, -1, 0], [0, 1, 2, 3, 4]),
    "period 6": (6, [1, 2, 3, 4, 5, 6, 1, 2, 3], [1, 2, 3, 4, 5, 6, 7, 8, 9]),
    "period 4, downwards": (4, [2, 3, 4, 5, 2, 3, 4, 5], [2, 3, 4, 5, 6, 7, 8, 9]),
    "degrees": (360, [(40 * i) % 360 - 180 for i in range(19)], [40 * i - 180 for i in range(19)]),
    "degrees, once across": (360, [170, -170], [170, 190]),
    "phase": (TURN, [0.0, PI / 4, PI / 2, 7 * PI / 4, 2 * PI], [0.0, PI / 4, PI / 2, -PI / 4, 0.0]),
}


@pytest.mark.parametrize("name", DOCUMENTED)
def test_unwrap_gives_the_documented_examples(name):
    period, given_, expected = DOCUMENTED[name]
    got = unwrap(np.array(given_) * TURN / period) * period / TURN
    assert np.allclose(got, expected, rtol=0.0, atol=1e-15 * period * 4)  # two scalings and up to two added turns


def test_unwrap_by_hand():
    got = unwrap([3.0, -3.0, 3.0, 0.0, -3.0, -6.5, 9.0])
    # 2 pi - 6 on; back; 3 down; 3 down; 3.5 down is 2 pi - 3.5 up; 15.5 up is 15.5 - 4 pi up
    steps = [TURN - 6.0, 6.0 - TURN, -3.0, -3.0, TURN - 3.5, 15.5 - 2 * TURN]
    assert np.allclose(got, 3.0 + np.cumsum([0.0, *steps]), rtol=0.0, atol=1e-14)


@pytest.mark.parametrize("shape", [(200,), (1,), (0,), (40, 5), (3, 50, 2)])
def test_unwrap_agrees_with_numpy_along_each_axis(shape):
    rng = np.random.default_rng(3)
    for axis in range(-len(shape), len(shape)):
        angles = np.asarray(wrap(np.cumsum(rng.uniform(-3.1, 3.1, shape), axis=axis))) + rng.integers(-3, 4, shape) * TURN
        got, expected = unwrap(angles, axis=axis), np.unwrap(angles, axis=axis)
        assert got.shape == shape
        # numpy adds up its corrections, at most 7 turns each, with one rounding a sample
        assert np.all(np.abs(got - expected) <= 200 * math.ulp(7 * TURN))


def test_unwrap_uses_the_last_axis_unless_told():
    angles = np.array([[3.0, -3.0], [3.0, 3.0]])
    assert np.allclose(unwrap(angles), [[3.0, TURN - 3.0], [3.0, 3.0]], rtol=0.0, atol=ULP)
    assert np.allclose(unwrap(angles, axis=0), [[3.0, -3.0], [3.0, 3.0 - TURN]], rtol=0.0, atol=ULP)


@pytest.mark.parametrize("angles", [[0.0, PI], [0.0, -PI], [PI, 0.0, PI], [1.0, 1.0]])
def test_unwrap_leaves_a_step_of_exactly_half_a_turn(angles):
    assert unwrap(angles).tolist() == angles == np.unwrap(angles).tolist()


@PATIENT
@given(st.lists(st.floats(-100.0, 100.0), min_size=1, max_size=30))
def test_unwrap_makes_no_step_over_half_a_turn_and_keeps_every_direction(angles):
    got = unwrap(angles)
    rounding = 16 * math.ulp(30 * 200.0)
    assert np.all(np.abs(np.diff(got)) <= PI + rounding)
    turns = (got - angles) / TURN
    assert np.all(np.abs(turns - np.round(turns)) <= rounding)
    assert np.all(apart(wrap(got), wrap(angles)) <= rounding)
    assert got[0] == angles[0]


@PATIENT
@given(st.lists(st.floats(-3.14, 3.14), min_size=1, max_size=30), DRIVEN)
def test_unwrap_gives_back_the_steps_of_a_drive(steps, start):
    driven = start + np.cumsum(steps)
    seen = np.asarray(wrap(driven))
    got = unwrap(seen)
    assert np.allclose(np.diff(got), np.diff(driven), rtol=0.0, atol=8 * math.ulp(2e4))
    summed = np.cumsum(np.asarray(difference(seen[1:], seen[:-1])))
    assert np.allclose(summed, got[1:] - got[0], rtol=0.0, atol=30 * math.ulp(100.0))


def test_unwrap_of_a_nan_spoils_only_that_sample():
    nan = math.nan
    got = unwrap([[3.0, nan, -3.0, 3.0], [nan, nan, 3.0, -3.0], [3.0, -3.0, nan, nan]])
    on = TURN - 3.0
    expected = [[3.0, nan, on, 3.0], [nan, nan, 3.0, on], [3.0, on, nan, nan]]
    assert np.allclose(got, expected, rtol=0.0, atol=ULP, equal_nan=True)


@pytest.mark.parametrize("bad", [math.inf, -math.inf])
def test_unwrap_of_an_infinite_sample_spoils_only_that_sample(bad):
    got = unwrap([3.0, bad, -3.0])
    assert not math.isfinite(got[1])
    assert [got[0], got[2]] == [3.0, TURN - 3.0]


@pytest.mark.parametrize(
    "angles",
    [
        pytest.param(SERIES.reshape(4, 6).T, id="columns first"),
        pytest.param(np.broadcast_to(SERIES, (3, 24)), id="read-only"),
        pytest.param(SERIES.astype(np.float32), id="float32"),
        pytest.param([1, 5, 9], id="integers"),
    ],
)
def test_unwrap_takes_any_array(angles):
    before = np.array(angles, copy=True)
    got = unwrap(angles)
    assert got.dtype == np.float64
    assert np.allclose(got, np.unwrap(np.asarray(angles, np.float64)), rtol=0.0, atol=1e-13)
    assert np.array_equal(np.asarray(angles), before)


def test_unwrap_of_a_recorded_ride_agrees_with_numpy():
    # data/README.md: 72 crossings of the cut
    x, y = np.genfromtxt(Path(__file__).parent / "data" / "ride.csv", delimiter=",", skip_header=4, usecols=(1, 2)).T
    dx, dy = np.diff(x), np.diff(y)
    headings = np.arctan2(dy, dx)[np.hypot(dx, dy) > 0.0]
    got, expected = unwrap(headings), np.unwrap(headings)
    assert np.sum(np.abs(np.diff(headings)) > PI) == 72
    assert np.max(np.abs(got - expected)) <= len(headings) * math.ulp(TURN) * 4
    net = np.sum(np.asarray(difference(headings[1:], headings[:-1])))
    assert abs(got[-1] - got[0] - net) <= len(headings) * math.ulp(TURN) * 4


# mean

# degrees: samples, (mean, half unit of its last printed digit), (resultant length, the same)
PUBLISHED = {
    # worked example of directional statistics texts (published); length recomputed
    "three headings": ([355, 5, 15], (5.0, 0.5), (0.98987, 5e-6)),
    # SciPy documentation, example of scipy.stats.circmean (published); length recomputed
    "scipy documentation": ([20, 30, 330], (7.294976657784, 5e-13), (0.89785, 5e-6)),
    # docstring of astropy.stats.circmean, after Jammalamadaka & SenGupta 2001 (published); length recomputed
    "astropy documentation": ([51, 67, 40, 109, 31, 358], (48.62718088722989, 5e-14), (0.83643647, 5e-9)),
    # Mardia 1972, roulette spins; Mardia & Jupp 2000, section 2.2 (from memory): published 51 and 0.711
    "roulette": ([43, 45, 52, 61, 75, 88, 88, 279, 357], (51.0, 0.5), (0.711, 5e-4)),
    # Zar, Biostatistical Analysis, example 26.4 (from memory): published 99 and 0.82522
    "trees": ([45, 55, 81, 96, 110, 117, 132, 154], (99.0, 0.5), (0.82522, 5e-6)),
}
# Davis 1986, p. 316: glacial striations in Finland, 51 directions in degrees, as printed in the documentation of the R package
# tectonicr (published): mean 129.190, length 0.800
STRIATIONS = [
    *(23, 27, 53, 58, 64, 83, 85, 88, 93, 99, 100, 105, 113, 113, 114, 117, 121, 123, 125, 126, 126, 126, 127, 127, 128, 128),
    *(129, 132, 132, 132, 134, 135, 137, 144, 145, 145, 146, 153, 155, 155, 155, 157, 163, 165, 171, 172, 179, 181, 186, 190, 212),
]
PUBLISHED["striations"] = (STRIATIONS, (129.190, 5e-4), (0.800, 5e-4))


@pytest.mark.parametrize("name", PUBLISHED)
def test_mean_gives_the_published_values(name):
    samples, (expected, half), (length, half_length) = PUBLISHED[name]
    got = mean(np.radians(samples))
    assert isinstance(got, CircularMean)
    assert abs(math.degrees(got.direction) - expected) <= half
    assert abs(got.resultant - length) <= half_length


@pytest.mark.parametrize(
    ("name", "expected", "length"),
    [
        # more digits, recomputed with scipy.stats.circmean and circvar 1.17 (derived)
        ("roulette", (51.05, 5e-3), (0.7110, 5e-5)),
        ("trees", (98.988, 5e-4), (0.8252, 5e-5)),
        ("striations", (129.190, 5e-4), (0.80037, 5e-6)),
    ],
)
def test_mean_gives_the_recomputed_digits(name, expected, length):
    got = mean(np.radians(PUBLISHED[name][0]))
    assert abs(math.degrees(got.direction) - expected[0]) <= expected[1]
    assert abs(got.resultant - length[0]) <= length[1]


def test_mean_agrees_with_scipy_on_random_samples():
    rng = np.random.default_rng(4)
    for axis in (None, 0, 1, 2, -1):
        angles = rng.normal(rng.uniform(-9.0, 9.0), rng.uniform(0.1, 2.0), (7, 5, 6))
        got = mean(angles, axis=axis)
        expected = stats.circmean(angles, high=PI, low=-PI, axis=axis)
        length = 1.0 - stats.circvar(angles, high=PI, low=-PI, axis=axis)
        assert np.shape(got.direction) == np.shape(expected)
        # 210 terms of size 1 at most: 210 roundings, against a sum of size n R
        assert np.all(apart(got.direction, expected) * got.resultant <= 210 * 2.3e-16)
        assert np.all(np.abs(got.resultant - length) <= 210 * 2.3e-16)


def test_weighted_mean_agrees_with_astropy_on_random_samples():
    rng = np.random.default_rng(5)
    for _ in range(50):
        angles, weights = rng.uniform(-9.0, 9.0, (8, 5)), rng.uniform(0.0, 4.0, (8, 5))
        for axis in (None, 0, 1):
            got = mean(angles, weights, axis=axis)
            expected = astropy_circmean(angles, axis=axis, weights=weights)
            length = 1.0 - astropy_circvar(angles, axis=axis, weights=weights)
            assert np.all(apart(got.direction, expected) * got.resultant <= 40 * 2.3e-16)
            assert np.all(np.abs(got.resultant - length) <= 40 * 2.3e-16)


def test_whole_weights_count_a_sample_that_often():
    rng = np.random.default_rng(6)
    angles, weights = rng.uniform(-3.0, 3.0, 12), rng.integers(0, 5, 12)
    got, expected = mean(angles, weights), stats.circmean(np.repeat(angles, weights), high=PI, low=-PI)
    assert apart(got.direction, expected) * got.resultant <= 30 * 2.3e-16


@PATIENT
@given(st.floats(-PI, PI), st.floats(-1.5, 1.5))
def test_mean_of_two_is_their_middle_and_the_cosine_of_half_their_angle(middle, half):
    got = mean([middle - half, middle + half])
    assert apart(wrap(middle), got.direction) * math.cos(half) <= 4 * ULP
    assert abs(got.resultant - math.cos(half)) <= 4 * ULP


@PATIENT
@given(st.lists(st.floats(-PI, PI), min_size=1, max_size=10), st.floats(-10.0, 10.0))
def test_mean_turns_with_the_frame(angles, by):
    here, turned = mean(angles), mean(np.add(angles, by))
    assert abs(here.resultant - turned.resultant) <= 20 * ULP
    if here.resultant > 1e-6:
        assert apart(wrap(here.direction + by), turned.direction) <= 20 * ULP / here.resultant


@pytest.mark.parametrize("angles", [[0, 180], [90, -90], [0, 120, 240], [0, 90, 180, 270], [30, 210, 75, 255]])
def test_directions_that_cancel_have_no_mean(angles):
    got = mean(np.radians(angles))
    assert math.isnan(got.direction)
    assert got.resultant <= ULP


def test_directions_that_nearly_cancel_still_have_a_mean():
    got = mean([0.0, PI - 2e-9])
    # of two: the middle, and the cosine of half the angle between them
    assert abs(got.direction - (PI / 2 - 1e-9)) <= 4 * ULP / 1e-9
    assert abs(got.resultant - 1e-9) <= 2 * ULP


def test_mean_of_half_a_turn_is_plus_pi():
    assert mean([PI, -PI]).direction == PI
    assert mean([-PI]).direction == PI


def test_resultant_of_one_direction_is_one_and_never_more():
    for angle in np.random.default_rng(7).uniform(-PI, PI, 200):
        got = mean(np.full(7, angle), np.full(7, 0.1)).resultant
        assert 1.0 - 8 * ULP <= got <= 1.0


def test_a_weight_of_zero_drops_the_sample():
    assert mean([0.3, 2.0, 1.0], [1.0, 0.0, 2.0]) == mean([0.3, 1.0], [1.0, 2.0])


@pytest.mark.parametrize(
    ("angles", "weights"),
    [
        pytest.param([0.3, 1.0], [0.0, 0.0], id="all weights 0"),
        pytest.param([], None, id="no samples"),
        pytest.param([0.0, math.nan], None, id="a NaN"),
        pytest.param([0.0, math.inf], None, id="an infinity"),
        pytest.param([0.0, -math.inf], None, id="a negative infinity"),
        pytest.param([0.0, math.nan], [1.0, 0.0], id="a NaN of weight 0"),
    ],
)
def test_mean_of_nothing_or_of_no_number_is_nan(angles, weights):
    got = mean(angles, weights)
    assert math.isnan(got.direction)
    assert math.isnan(got.resultant)


def test_a_bad_row_spoils_only_its_own_mean():
    got = mean([[0.0, math.nan], [0.0, 1.0]], axis=1)
    assert np.isnan(got.direction[0])
    assert abs(got.direction[1] - 0.5) <= ULP


def test_weights_broadcast():
    angles = np.random.default_rng(8).uniform(-3.0, 3.0, (4, 3))
    got, expected = mean(angles, [1.0, 2.0, 3.0], axis=1), mean(angles, np.tile([1.0, 2.0, 3.0], (4, 1)), axis=1)
    assert got.direction.shape == (4,)
    assert same_bits(got.direction, expected.direction)
    assert same_bits(mean(angles, 5.0).direction, mean(angles, np.full((4, 3), 5.0)).direction)
    assert same_bits(
        mean(angles, [[1.0], [2.0], [0.0], [4.0]], axis=0).direction, mean(angles[[0, 1, 3]], [[1], [2], [4]], axis=0).direction
    )


# bad calls


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: mean([0.0, 1.0], [1.0, -2.0]), "weights[1]=-2 must be finite and >= 0 (1 such); drop the sample or give it 0"),
        (
            lambda: mean([0.0, 1.0], [math.nan, -2.0]),
            "weights[0]=nan must be finite and >= 0 (2 such); drop the sample or give it 0",
        ),
        (lambda: mean([0.0, 1.0], math.inf), "weights[0]=inf must be finite and >= 0 (2 such); drop the sample or give it 0"),
        (
            lambda: mean([[0.0, 1.0], [2.0, 3.0]], [[1.0, 1.0], [-1.5, 1.0]]),
            "weights[1, 0]=-1.5 must be finite and >= 0 (1 such); drop the sample or give it 0",
        ),
        (lambda: mean([0.0, 1.0, 2.0], [1.0, 1.0]), "weights of shape (2,) does not fit; give one weight per angle, shape (3,)"),
        (lambda: unwrap(1.0), "angles of shape () does not fit; give an array with at least one axis; wrap takes single floats"),
    ],
    ids=["negative", "NaN", "infinite", "second row", "too few", "unwrap a float"],
)
def test_bad_calls_are_refused_in_words(call, text):
    with pytest.raises(ValueError, match="^" + re.escape(text) + "$"):
        call()


# kernels against the public functions, and against themselves in plain Python


@PATIENT
@given(FINITE, st.floats(-1e6, 1e6), st.floats(-1e6, 1e6))
def test_kernels_give_what_the_public_functions_give(angle, target, origin):
    assert same_bits(wrap_kernel(angle), wrap(angle))
    assert same_bits(difference_kernel(target, origin), difference(target, origin))
    assert mean_kernel(np.array([target, origin]), np.ones(2)) == mean([target, origin]) or mean([target, origin]).resultant < 1e-9


@NEEDS_COMPILER
@given(st.floats())
@settings(PATIENT, max_examples=500)
def test_wrap_kernel_gives_the_bits_of_plain_python(angle):
    assert same_bits(wrap_kernel(angle), wrap_kernel.py_func(angle)) or math.isnan(angle)


@NEEDS_COMPILER
@PATIENT
@given(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6))
def test_difference_kernel_gives_the_bits_of_plain_python(target, origin):
    assert same_bits(difference_kernel(target, origin), difference_kernel.py_func(target, origin))


@NEEDS_COMPILER
@PATIENT
@given(st.lists(st.tuples(st.floats(-1e3, 1e3), st.floats(0.0, 1e3)), max_size=8))
def test_mean_kernel_gives_the_bits_of_plain_python(samples):
    angles, weights = (np.array([sample[i] for sample in samples], dtype=np.float64) for i in (0, 1))
    assert np.array_equal(mean_kernel(angles, weights), mean_kernel.py_func(angles, weights), equal_nan=True)
