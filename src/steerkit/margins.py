"""Margins: how far a heading loop is from swinging for ever, and how it answers a step. For any P, PI or PID gains.

The loop is an integrator (turn rate to heading) behind a dead time and a lag. Without a period the controller is
gain (1 + 1/(Ti s) + Td s), the plant e^(-tau s)/(s (1 + lag s)). With one the commands are held for it, and the loop is exact:
controller gain (1 + T/Ti 1/(z-1) + Td/T (z-1)/z), plant as in `gain_limits`. Seconds, radians, gains in 1/s.

Stability by Nyquist's count (Nyquist 1932): the open loop has no unstable pole, so that the closed one has as many as its locus
goes round -1. The locus is looked at in steps of a fifth of a radian of delay; what is found there is refined to rounding.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from steerkit.checks import check_above_zero, check_not_negative, shown
from steerkit.gain_limits import (
    SHORT_LAG,
    Settled,
    continuous_step,
    lagged_numerator,
    no_overshoot_gain,
    sampled_step,
    split_delay,
)
from steerkit.platforms import SHORTEST_PERIOD

__all__ = ["Margins", "margins", "prediction_margin"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]
Response = Callable[[Array], Complex]
Plant = Callable[[Array, Complex], Complex]  # of the angle of z, and z

STEP = 0.2  # rad; how far the delay turns the locus from one point to the next
PER_DECADE = 60
CHORDS = 14  # for a root between two points of the grid; a dozen give all digits
HALVINGS = 34  # of a step in which stability is lost
MOST_POINTS = 200_000
MOST_PERIODS = 100_000  # of dead time
GOLDEN = (math.sqrt(5.0) - 1.0) / 2.0


class Margins(NamedTuple):
    """How a heading loop stands. `print` shows it in trade terms.

    `gain_margin`: by how much the gain may grow (below 1 for an unstable loop: to what it must shrink; 0 if no gain is stable);
    `lower_gain_margin`: to what share it may fall (0: any). `phase_margin` rad; `delay_margin` s of dead time more;
    `sensitivity` Ms, the largest 1/|1 + L|; `crossover` rad/s. `overshoot` of a heading step as a share, `settling_time` s until
    it stays within 2 %, `overshoots` whether its error changes sign. An unstable loop has NaN where nothing can be told.
    """

    gain: float
    stable: bool
    gain_margin: float
    lower_gain_margin: float
    phase_margin: float
    delay_margin: float
    sensitivity: float
    crossover: float
    overshoot: float
    settling_time: float
    overshoots: bool

    def __str__(self) -> str:
        if not self.stable:
            if self.gain_margin == 0.0:
                return f"unstable: at gain {self.gain:.4g} 1/s, and at any lower one, it swings wider and wider"
            most = self.gain * self.gain_margin
            return f"unstable: at gain {self.gain:.4g} 1/s it swings wider and wider; below {most:.4g} 1/s it is stable"
        lower = f" ({self.lower_gain_margin:.3g} downwards)" if self.lower_gain_margin > 0.0 else ""
        how = f"overshoots a step by {100.0 * self.overshoot:.2g} %" if self.overshoots else "no overshoot"
        return (
            f"gain margin {self.gain_margin:.4g}{lower}, phase margin {math.degrees(self.phase_margin):.4g} deg, "
            f"delay margin {self.delay_margin:.4g} s\n"
            f"sensitivity {self.sensitivity:.4g}, crossover {self.crossover:.4g} rad/s; {how}, "
            + (f"within 2 % in {self.settling_time:.4g} s" if self.settling_time < math.inf else "too slow to tell when within 2 %")
        )


class Loop(NamedTuple):
    """An open loop: its response at angular frequencies, those to look at, and how it ends.

    `edge`: its real value at the last frequency, pi/T; 0 without a period. `rim`: the size that it tends to while the dead time
    turns it on and on (a derivative without lag).
    """

    response: Response
    grid: Array
    edge: float
    rim: float


def look_at(rates: list[float], delay: float, end: float) -> Array:
    """Return the angular frequencies (rad/s) to look at: evenly in each decade, and often enough for the delay (s)."""
    known = [rate for rate in rates if 0.0 < rate < math.inf]
    low, high = 1e-4 * min(known), min(end, 100.0 * max(known))
    points = np.geomspace(low, high, math.ceil(PER_DECADE * math.log10(high / low)))
    if delay > 0.0:
        reach = min(high, max(10.0 * math.pi / delay, 3.0 * max(known)))
        even = np.linspace(0.0, reach, min(MOST_POINTS, math.ceil(reach * delay / STEP) + 2))[1:]
        points = np.union1d(points[points <= reach], even)
    return points[points < end * (1.0 - 1e-9)]


def continuous_loop(gain: float, integral_time: float, derivative_time: float, dead_time: float, lag: float) -> Loop:
    """Return gain (1 + 1/(Ti s) + Td s) e^(-tau s) / (s (1 + lag s)) at s = i w."""

    def response(w: Array) -> Complex:
        s = 1j * w
        control = gain * (1.0 + 1.0 / integral_time / s + derivative_time * s)
        return np.asarray(control * np.exp(-dead_time * s) / (s * (1.0 + lag * s)))

    rates = [gain, math.sqrt(gain / integral_time), 1.0 / integral_time]
    rates += [1.0 / time for time in (derivative_time, dead_time, lag) if time > 0.0]
    rates += [gain * derivative_time / lag] if lag > 0.0 else []
    rim = gain * derivative_time if lag == 0.0 and dead_time > 0.0 else 0.0
    return Loop(response, look_at(rates, dead_time, math.inf), 0.0, rim)


def held_plant(period: float, dead_time: float, lag: float) -> Plant:
    """Return turn rate per period to heading, commands held: N(z) / (z^(d+1) (z-1)(z-p)), of z on the unit circle."""
    d, m = split_delay(dead_time, period)
    mu = lag / period if lag > SHORT_LAG * period else 0.0
    n2, n1, n0 = lagged_numerator(m, mu)
    p = math.exp(-1.0 / mu) if mu > 0.0 else 0.0
    return lambda angle, z: np.exp(-1j * (d + 1.0) * angle) * (((n2 * z + n1) * z + n0) / ((z - 1.0) * (z - p)))


def sampled_loop(
    gain: float, integral_time: float, derivative_time: float, period: float, plant: Plant, delay: float, lag: float
) -> Loop:
    """Return gain T (1 + T/Ti 1/(z-1) + Td/T (z-1)/z) plant(z) at z = e^(i w T)."""

    def at(angle: Array) -> Complex:
        z = np.exp(1j * angle)
        locus = gain * period * plant(angle, z)
        if integral_time < math.inf or derivative_time > 0.0:
            locus *= 1.0 + period / integral_time / (z - 1.0) + derivative_time / period * (z - 1.0) / z
        return locus

    rates = [gain, math.sqrt(gain / integral_time), 1.0 / integral_time, 1.0 / period, 1.0 / (delay + lag + period)]
    grid = look_at(rates, delay + 2.0 * period, math.pi / period)
    return Loop(lambda w: at(period * w), grid, float(at(np.array([math.pi]))[0].real), 0.0)


def roots_of(value: Callable[[Array], Array], grid: Array, values: Array, flips: NDArray[np.intp]) -> Array:
    """Return the roots of a function in the steps of the grid in which it changes its sign.

    The Illinois rule (Dowell & Jarratt 1971): the chord between both ends, the end that stays for a second time at half its value.
    """
    low, high, at_low, at_high = grid[flips], grid[flips + 1], values[flips], values[flips + 1]
    root = 0.5 * (low + high)
    for _ in range(CHORDS if len(flips) else 0):
        gap = at_high - at_low
        root = high - at_high * (high - low) / np.where(gap == 0.0, 1.0, gap)
        at_root = value(root)
        beyond = at_root * at_high <= 0.0  # the root is between `root` and `high`: `high` becomes `low`
        low, at_low = np.where(beyond, high, low), np.where(beyond, at_high, 0.5 * at_low)
        high, at_high = root, at_root
    return np.asarray(root)


def crossings(loop: Loop, near: float = math.nan) -> tuple[Array, Array]:
    """Return where the locus crosses the negative real axis, as sizes, and how many unstable roots each adds if it is above 1.

    Where only the side of `near` matters, a crossing between points that are both well on one side of it is taken as it lies.
    """
    locus = loop.response(loop.grid)
    side = locus.imag
    flips = np.flatnonzero(side[:-1] * side[1:] < 0.0)
    flips = flips[np.minimum(locus.real[flips], locus.real[flips + 1]) < 0.0]
    first, second = np.abs(locus[flips]), np.abs(locus[flips + 1])
    rough = (np.minimum(first, second) > 1.1 * near) | (np.maximum(first, second) < near / 1.1)
    sizes = -0.5 * (locus.real[flips] + locus.real[flips + 1])
    sizes[~rough] = -loop.response(roots_of(lambda w: loop.response(w).imag, loop.grid, side, flips[~rough])).real
    weights = np.where(side[flips] < 0.0, 2.0, -2.0)
    sizes, weights = sizes[sizes > 0.0], weights[sizes > 0.0]
    if locus[0].real < 0.0 < locus[0].imag:  # a double integrator that begins below -180 degrees
        sizes, weights = np.append(sizes, math.inf), np.append(weights, 2.0)
    if loop.edge < 0.0:
        sizes, weights = np.append(sizes, -loop.edge), np.append(weights, 1.0 if locus[-1].imag < 0.0 else -1.0)
    if loop.rim > 0.0:
        sizes, weights = np.append(sizes, loop.rim), np.append(weights, 2.0)
    return sizes, weights


def is_stable(loop: Loop) -> bool:
    sizes, weights = crossings(loop, near=1.0)
    return not float(np.sum(weights[sizes > 1.0])) > 0.0


def gain_margins(sizes: Array, weights: Array) -> tuple[bool, float, float]:
    """Return whether the loop is stable, and the factors up and down on its gain between which it stays (or becomes) so."""
    borders = np.unique(1.0 / sizes[sizes < math.inf])
    inside = np.concatenate([[0.0], borders, [math.inf]])
    tries = np.concatenate([0.5 * (inside[:-2] + inside[1:-1]), [2.0 * inside[-2] + 1.0]])
    works = [not float(np.sum(weights[sizes * share > 1.0])) > 0.0 for share in tries]
    here = int(np.searchsorted(borders, 1.0, side="left"))
    if not works[here]:
        below = [i for i in range(here) if works[i]]
        return False, float(inside[below[-1] + 1]) if below else 0.0, 0.0
    up, down = here, here
    while up + 1 < len(works) and works[up + 1]:
        up += 1
    while down > 0 and works[down - 1]:
        down -= 1
    return True, float(inside[up + 1]), float(inside[down])


def crossovers(loop: Loop) -> tuple[Array, Array]:
    """Return the frequencies (rad/s) at which the loop's size is 1, and how much phase (rad) is left at each."""
    above = np.abs(loop.response(loop.grid)) - 1.0
    flips = np.flatnonzero(above[:-1] * above[1:] < 0.0)
    at = roots_of(lambda w: np.abs(loop.response(w)) - 1.0, loop.grid, above, flips)
    return at, np.mod(np.angle(loop.response(at)) + math.pi, 2.0 * math.pi)


def largest_sensitivity(loop: Loop) -> float:
    """Return the largest 1/|1 + L|: golden section about each high point of the grid (Astrom & Hagglund 2006, section 4.6)."""

    def at(w: float) -> float:
        return float(1.0 / abs(1.0 + loop.response(np.array([w]))[0]))

    sizes = 1.0 / np.abs(1.0 + loop.response(loop.grid))
    peaks = np.flatnonzero((sizes[1:-1] >= sizes[:-2]) & (sizes[1:-1] >= sizes[2:]) & (sizes[1:-1] > 0.7 * np.max(sizes))) + 1
    best = max(1.0 / abs(1.0 + loop.edge), 1.0 / (1.0 - loop.rim), float(sizes[0]), float(sizes[-1]))
    for i in sorted(peaks, key=lambda j: -sizes[j])[:5]:
        low, high = loop.grid[i - 1], loop.grid[i + 1]
        for _ in range(60):
            left, right = high - GOLDEN * (high - low), low + GOLDEN * (high - low)
            low, high = (low, right) if at(left) > at(right) else (left, high)
        best = max(best, at(0.5 * (low + high)))
    return best


def first_failure(fails: Callable[[float], bool], step: float, growth: float, most: float) -> float:
    """Return the least value from which on a test fails, looked for in growing steps and then bisected; infinite for none."""
    low = 0.0
    while low < most:
        high = min(low + step, most)
        if fails(high):
            for _ in range(HALVINGS):
                middle = 0.5 * (low + high)
                low, high = (low, middle) if fails(middle) else (middle, high)
            return low
        low, step = high, step * growth
    return math.inf


def margins(
    gain: float,
    integral_time: float = math.inf,
    derivative_time: float = 0.0,
    period: float = 0.0,
    dead_time: float = 0.0,
    motor_lag: float = 0.0,
) -> Margins:
    """Return the margins of the heading loop with P, PI or PID gains.

    For a controller that predicts leave dead time and lag at 0: its loop does not see them (and see `prediction_margin`).

    Parameters
    ----------
    gain : float, 1/s
    integral_time : float, s
        Infinite for none.
    derivative_time : float, s
    period : float, s
        0 for a continuous controller; else commands are held for it.
    dead_time : float, s
    motor_lag : float, s

    Returns
    -------
    Margins
        `delay_margin`: with a period, the dead time that the sampled loop itself bears more, found with it; without, phase
        margin over crossover, the least of all crossovers. The step is one of the target; the derivative acts on the heading
        alone. With a period the answer is looked at once a period.

    Examples
    --------
    >>> print(margins(0.5, dead_time=1.0))
    gain margin 3.142, phase margin 61.35 deg, delay margin 2.142 s
    sensitivity 1.59, crossover 0.5 rad/s; overshoots a step by 4.1 %, within 2 % in 6.056 s
    """
    k, ti, td, period, tau, lag = checked(gain, integral_time, derivative_time, period, dead_time, motor_lag)
    loop = heading_loop(k, ti, td, period, tau, lag)
    stable, upper, lower = gain_margins(*crossings(loop))
    if not stable:
        nothing = (math.nan,) * 4
        return Margins(k, False, upper, lower, *nothing, math.inf, math.inf, True)
    at, left = crossovers(loop)
    delay = float(np.min(left / at, initial=math.inf))
    if period > 0.0 and delay < math.inf:

        def lost(more: float) -> bool:
            return not is_stable(heading_loop(k, ti, td, period, tau + more, lag))

        delay = first_failure(lost, max(period / 8.0, delay / 20.0), 1.0, 10.0 * (delay + period))
    elif td * k >= 1.0 and lag == 0.0:
        delay = 0.0  # without a lag a derivative this strong bears no dead time at all
    answer = step_answer(k, ti, td, period, tau, lag)
    overshoots = k > smooth_gain(period, tau, lag) if ti == math.inf and td == 0.0 else answer.overshoot > 1e-9
    phase, crossover = float(np.min(left, initial=math.inf)), float(np.max(at, initial=0.0))
    return Margins(
        k, True, upper, lower, phase, delay, largest_sensitivity(loop), crossover, answer.overshoot, answer.time, bool(overshoots)
    )


def checked(*numbers: float) -> tuple[float, float, float, float, float, float]:
    """Return the arguments of `margins` as floats, or refuse them with a sentence."""
    gain, integral_time, derivative_time, period, dead_time, motor_lag = numbers
    if not (isinstance(integral_time, (float, np.floating)) and integral_time == math.inf):
        check_above_zero("integral_time", integral_time, "s", "give the time in which the integral repeats the error; inf for none")
    shortest(period, dead_time)
    return (
        check_above_zero("gain", gain, "1/s", "give turn rate per heading error"),
        float(integral_time),
        check_not_negative(
            "derivative_time", derivative_time, "s", "give the time by which the derivative looks ahead; 0 for none"
        ),
        check_not_negative("period", period, "s", "give the control period, or 0 for a continuous controller"),
        check_not_negative("dead_time", dead_time, "s", "give the time before a command acts"),
        check_not_negative("motor_lag", motor_lag, "s", "give the time constant of the wheels, 0 for none"),
    )


def shortest(period: object, dead_time: object) -> None:
    """Refuse a period that is neither none nor one, and a dead time of more periods than can be looked at."""
    size = check_not_negative("period", period, "s", "give the control period, or 0 for a continuous controller")
    if 0.0 < size < SHORTEST_PERIOD:
        raise ValueError(
            f"period={shown(size, 's')} must be >= {shown(SHORTEST_PERIOD, 's')}, or 0 for a continuous controller; give seconds"
        )
    delay = check_not_negative("dead_time", dead_time, "s", "give the time before a command acts")
    if 0.0 < size * MOST_PERIODS < delay:
        raise ValueError(
            f"dead_time={shown(delay, 's')} must be <= {shown(size * MOST_PERIODS, 's')}, {MOST_PERIODS} periods; give seconds"
        )


def heading_loop(k: float, ti: float, td: float, period: float, tau: float, lag: float) -> Loop:
    if period == 0.0:
        return continuous_loop(k, ti, td, tau, lag)
    return sampled_loop(k, ti, td, period, held_plant(period, tau, lag), tau, lag)


def step_answer(k: float, ti: float, td: float, period: float, tau: float, lag: float) -> Settled:
    if period == 0.0:
        return continuous_step(k, ti, td, tau, lag)
    return sampled_step(k, period, tau, lag, integral_time=ti, derivative_time=td)


def smooth_gain(period: float, tau: float, lag: float) -> float:
    """Return the highest P gain that does not swing; without a period, s e^(-s tau)(1 - s lag) at its largest (derived)."""
    if period > 0.0:
        return no_overshoot_gain(period, tau, lag)
    if tau + lag == 0.0:
        return math.inf
    s = 2.0 / (tau + 2.0 * lag + math.sqrt(tau * tau + 4.0 * lag * lag))
    return s * math.exp(-s * tau) * (1.0 - s * lag)


def prediction_margin(gain: float, period: float, dead_time: float, motor_lag: float = 0.0) -> tuple[float, float]:
    """Return how much shorter and how much longer than declared the dead time may be before a predicting loop is unstable.

    The controller takes its error after all that it has sent: e - (T/(z-1) - M) u, M the plant as declared. With P the plant as it
    is, the loop is gain (T/(z-1) + P - M), which is gain T/(z-1) where P = M (derived; Smith 1957, from memory).

    Parameters
    ----------
    gain : float, 1/s
    period : float, s
    dead_time : float, s
        As declared.
    motor_lag : float, s

    Returns
    -------
    (float, float), s
        The first is infinite where even no dead time at all is borne.
    """
    k, _, _, period, tau, lag = checked(gain, math.inf, 0.0, period, dead_time, motor_lag)
    check_above_zero("period", period, "s", "give the control period")
    declared = held_plant(period, tau, lag)

    def unstable(true_dead_time: float) -> bool:
        true = held_plant(period, max(0.0, true_dead_time), lag)
        longest = max(tau, true_dead_time)
        plant = lambda angle, z: 1.0 / (z - 1.0) + true(angle, z) - declared(angle, z)  # noqa: E731
        return not is_stable(sampled_loop(k, math.inf, 0.0, period, plant, longest, lag))

    shorter = first_failure(lambda less: unstable(tau - less), period / 8.0, 1.1, tau)
    longer = first_failure(lambda more: unstable(tau + more), period / 8.0, 1.1, 100.0 * (tau + lag + period + 1.0 / k))
    return shorter, longer
