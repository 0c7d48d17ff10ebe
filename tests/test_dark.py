"""Whether a dark is stable: tails against exact distributions, error rates and a decaying multiplier."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.stats import binom, chi2, multinomial

from analysis.counting import FloatArray
from analysis.dark import (
    FEWEST_DWELLS,
    RISK,
    chi2_moments,
    drift,
    is_stable,
    scatter_tail,
    trend_tails,
)
from simulators.detector import Counter, DetectorOptions
from simulators.draw import Draws

Readings = list[tuple[float, float]]


def middles(share: FloatArray) -> FloatArray:
    """Middles of dwells one after another, about their weighted mean."""
    made = np.cumsum(share) - 0.5 * share
    return made - float(share @ made)


@pytest.mark.parametrize(("first", "total"), [(0, 3), (3, 3), (2, 3), (9, 30), (15, 30), (700, 1300)])
def test_two_dwells_are_a_binomial_test(first: int, total: int) -> None:
    """Two equal dwells: the tail of the trend is the binomial one, half of what was seen counted in."""
    share = np.array([0.5, 0.5])
    fall, rise = trend_tails(np.array([first, total - first], dtype=float), share, middles(share))
    seen = binom.pmf(first, total, 0.5)
    above = binom.sf(first, total, 0.5)  # a fall is many counts in the first dwell
    if first in (0, total):  # all at one end: an exact chance, not halved
        assert (rise, fall) == pytest.approx((seen, 1.0) if first == 0 else (1.0, seen), rel=1e-9)
    else:
        # relative error of the formula: a fraction of one over the counts, and it grows far out
        assert fall == pytest.approx(above + 0.5 * seen, rel=0.01 if total > 10 else 0.06)
        assert fall + rise == pytest.approx(1.0)


def test_trend_tail_over_all_outcomes() -> None:
    """Four unequal dwells, fifteen counts: every outcome's tail against the sum over all 816 of them."""
    gates = np.array([1.0, 2.0, 1.5, 3.0])
    share = gates / gates.sum()
    x = middles(share)
    outcomes = np.array([k for k in itertools.product(range(16), repeat=4) if sum(k) == 15], dtype=float)
    chance = multinomial.pmf(outcomes, 15, share)
    scores = outcomes @ x
    for outcome, score in zip(outcomes, scores, strict=True):
        exact = float(chance[scores < score - 1e-9].sum() + 0.5 * chance[np.abs(scores - score) < 1e-9].sum())
        if exact > 1e-3:
            assert trend_tails(outcome, share, x)[0] == pytest.approx(exact, rel=0.12), outcome


def test_a_trend_of_nothing_in_skewed_counts() -> None:
    """Counts exactly as expected, where the saddlepoint formula is 0/0: the binomial tail, not one half."""
    share = np.array([0.2, 0.8])
    fall, _ = trend_tails(np.array([2.0, 8.0]), share, middles(share))
    exact = binom.sf(2, 10, 0.2) + 0.5 * binom.pmf(2, 10, 0.2)
    assert exact < 0.48
    assert fall == pytest.approx(exact, rel=0.015)


def test_no_count_and_a_single_one_prove_nothing() -> None:
    """Where nothing was counted every outcome is certain, and one count has nothing to scatter against."""
    share = np.full(4, 0.25)
    assert trend_tails(np.zeros(4), share, middles(share)) == (1.0, 1.0)
    assert scatter_tail(np.zeros(4), share) == 1.0
    assert scatter_tail(np.array([0.0, 1.0, 0.0, 0.0]), share) == 1.0


def test_what_skewness_leaves_of_one_half() -> None:
    """A thousand counts exactly as expected: what the binomial tail lacks of one half, to a few per cent."""
    share = np.array([0.2, 0.8])
    fall, _ = trend_tails(np.array([200.0, 800.0]), share, middles(share))
    exact = binom.sf(200, 1000, 0.2) + 0.5 * binom.pmf(200, 1000, 0.2)
    assert 0.5 - fall == pytest.approx(0.5 - exact, rel=0.03)


@pytest.mark.parametrize("per_dwell", [0.5, 0.9, 1.3, 1.6])
def test_scatter_of_many_counts_is_that_of_chi_square(per_dwell: float) -> None:
    """Ten dwells of a million counts, up and down by as many standard deviations: the tail of chi square on
    nine degrees of freedom, which its cube root meets to some per cent (Wilson and Hilferty 1931)."""
    mean = 1e6
    counts = mean + per_dwell * math.sqrt(mean) * np.array([1.0, -1.0] * 5)
    tail = scatter_tail(counts, np.full(10, 0.1))
    assert tail == pytest.approx(chi2.sf(10.0 * per_dwell**2, 9), rel=0.05)


def test_moments_of_chi_square_over_all_outcomes() -> None:
    """Four unequal dwells, fifteen counts: mean and variance of chi square, summed over all outcomes."""
    share = np.array([1.0, 2.0, 1.5, 3.0]) / 7.5
    outcomes = np.array([k for k in itertools.product(range(16), repeat=4) if sum(k) == 15], dtype=float)
    chance = multinomial.pmf(outcomes, 15, share)
    chi2 = np.sum((outcomes - 15.0 * share) ** 2 / (15.0 * share), axis=1)
    mean = float(chance @ chi2)
    assert chi2_moments(15.0, share) == pytest.approx((mean, float(chance @ (chi2 - mean) ** 2)), rel=1e-9)


@pytest.mark.parametrize(("dwells", "mean"), [(4, 2.0), (4, 20.0), (12, 5.0), (40, 1.0)])
def test_error_rates_of_all_three_tests(dwells: int, mean: float) -> None:
    """A constant dark: falls, rises and scatter are called no more often than their level allows."""
    seed, runs = 3, 6000
    rng = np.random.Generator(np.random.Philox(key=seed))
    share = np.full(dwells, 1.0 / dwells)
    x = middles(share)
    drawn = rng.poisson(mean, (runs, dwells)).astype(float)
    tails = np.array([(*trend_tails(row, share, x), scatter_tail(row, share)) for row in drawn])
    for level in (0.05, 0.01):
        rates = np.mean(tails < level, axis=0)
        most = level + 4.0 * math.sqrt(level * (1.0 - level) / runs)
        least = 0.7 * level - 4.0 * math.sqrt(level * (1.0 - level) / runs)
        # chi square of a few counts has a lumpy tail: half as much again is allowed
        assert (rates[:2] < most).all(), (seed, level, rates)
        assert rates[2] < 1.5 * most, (seed, level, rates)
        if mean >= 5.0:
            assert (rates > least).all(), (seed, level, rates)


def constant(rng: np.random.Generator, *, rate_per_s: float, gate_s: float, dwells: int) -> Readings:
    return [(float(n), gate_s) for n in rng.poisson(rate_per_s * gate_s, dwells)]


def test_a_constant_dark_is_used_whole() -> None:
    """Enough of a constant dark is refused no more often than the stated risk."""
    seed, runs = 4, 1500
    rng = np.random.Generator(np.random.Philox(key=seed))
    kept = [is_stable(constant(rng, rate_per_s=8.0, gate_s=20.0, dwells=20)) for _ in range(runs)]
    shortened = np.mean([dwells != 20 for dwells in kept])
    assert shortened < RISK + 4.0 * math.sqrt(RISK / runs), seed


def test_too_little_dark_proves_nothing() -> None:
    """Four dwells of 2 s agree with a constant dark of 8 /s, and with one that falls to nothing."""
    assert is_stable([(16.0, 2.0)] * 4) is None
    assert is_stable([(16.0, 2.0)] * 60, horizon_s=0.0) == 60
    assert is_stable([(160.0, 2.0)] * 3, horizon_s=0.0) is None
    assert is_stable([(1e5, 2.0)] * FEWEST_DWELLS, horizon_s=0.0) == FEWEST_DWELLS


@pytest.mark.parametrize(
    ("counts", "gate_s", "horizon_s", "kept"),
    [
        (39.0, 2.0, 0.0, 4),
        (38.0, 2.0, 0.0, None),
        (39.0, 2.0, 8.0, 4),
        (156.0, 2.0, 16.0, 4),
        (155.0, 2.0, 16.0, None),
        (4.0, 6.25, 0.0, 4),
        (4.0, 6.2, 0.0, None),
    ],
)
def test_how_much_dark_proves_how_much(
    counts: float, gate_s: float, horizon_s: float, kept: int | None
) -> None:
    """Four equal dwells of n counts in t s know the change to sqrt(4 n/(5/36))/(4 t) per s, 5/36 being the
    variance of four even places over their span, and may hide 2.326 of that (normal deviate of 0.01).

    By hand: half the rate from n = 38.97 on, four times as many for twice as far ahead; and 1 per s, which
    is harmless at any rate, for n = 4 from 6.242 s on.
    """
    assert is_stable([(counts, gate_s)] * 4, horizon_s=horizon_s) == kept


def test_hardly_any_dark_is_soon_good_enough() -> None:
    """No count at all in two minutes: whatever this dark does, it is harmless."""
    assert is_stable([(0.0, 10.0)] * 12, horizon_s=0.0) == 12
    assert is_stable([(0.0, 1.0)] * 4) is None


def afterglow(seed: int, *, dwells: int, gate_s: float = 10.0) -> tuple[Readings, FloatArray]:
    """Dwells of a multiplier that has just seen too much light (six times its dark, falling with a time
    constant of one minute), and the true rates."""
    options = DetectorOptions(dark_rate_per_s=20.0, afterglow_factor=5.0, afterglow_s=60.0)
    counter = Counter(options, Draws(seed, "counter"))
    counter.trip(0)
    readings, rates = [], []
    for k in range(dwells):
        rate = counter.dark_rate_per_s(round((k + 0.5) * gate_s * 1e9), 0.0)
        readings.append((float(counter.count(rate_per_s=rate, gate_s=gate_s)[0]), gate_s))
        rates.append(rate)
    return readings, np.array(rates)


def test_a_decaying_dark_is_waited_for() -> None:
    """After over-light, asked after every dwell: the first dark that is called stable is within a few per
    cent of the true one as a rule, a third above it at worst, and its raised beginning is discarded."""
    found = []
    for seed in range(60):
        readings, _ = afterglow(seed, dwells=150)
        for taken in range(1, 151):
            kept = is_stable(readings[:taken])
            if kept is not None:
                found.append(sum(n for n, _ in readings[taken - kept : taken]) / (10.0 * kept) / 20.0)
                assert kept < taken, seed
                break
        else:
            raise AssertionError(f"seed {seed}: never stable in 25 minutes")
    assert 0.98 < float(np.median(found)) < 1.06, found
    assert max(found) < 1.35, found


def test_the_raised_beginning_is_discarded() -> None:
    """A quarter of an hour after over-light the last dwells are used, those of the first minutes are not."""
    for seed in range(20):
        readings, rates = afterglow(seed, dwells=90)
        kept = is_stable(readings)
        assert kept is not None, seed
        assert rates[90 - kept] < 1.5 * 20.0, seed


def test_scatter_beyond_counting_is_no_stable_dark() -> None:
    """Dwells that jump about by far more than counts do (a light leak, a loose contact) never pass."""
    assert is_stable([(400.0, 2.0), (900.0, 2.0)] * 10) is None


def test_a_drift_over_a_night_is_told() -> None:
    """A dark that rises by half over thirty sweeps: clear, with its size; one that does not is not."""
    seed = 9
    rng = np.random.Generator(np.random.Philox(key=seed))
    at_s = [100.0 * k for k in range(30)]
    rising = [(float(rng.poisson(8.0 * (1.0 + 0.5 * k / 29.0) * 10.0)), 10.0) for k in range(30)]
    found = drift(rising, at_s=at_s)
    assert found.is_clear, seed
    assert found.p_rise < 1e-4 < found.p_fall, seed
    assert abs(found.change_per_s - 4.0) < 4.0 * found.change_u_per_s, seed
    assert found.change_u_per_s < 1.2
    steady = drift(constant(rng, rate_per_s=8.0, gate_s=10.0, dwells=30), at_s=at_s)
    assert not steady.is_clear, seed
    assert abs(steady.rate_per_s - 8.0) < 4.0 * math.sqrt(8.0 / 300.0), seed


def test_the_change_is_that_of_a_straight_line() -> None:
    """Without noise the change from the first dwell's middle to the last one's is read off exactly."""
    found = drift([(10.0, 1.0), (20.0, 1.0), (30.0, 1.0), (40.0, 1.0)])
    assert found.change_per_s == pytest.approx(30.0)
    assert found.rate_per_s == pytest.approx(25.0)


def test_dwells_of_unequal_length_stand_at_their_middles() -> None:
    """A rate of 10 + 3 t over dwells of 1, 4, 2 and 3 s: the mean of each is the rate at its middle, and from
    the first middle to the last, 8 s, the change is 24."""
    found = drift([(11.5, 1.0), (76.0, 4.0), (56.0, 2.0), (106.5, 3.0)])
    assert found.change_per_s == pytest.approx(24.0)


def test_nonsense_is_refused() -> None:
    with pytest.raises(ValueError, match="at least two"):
        drift([(3.0, 1.0)])
    with pytest.raises(ValueError, match="above 0"):
        drift([(3.0, 1.0), (3.0, 0.0)])
    with pytest.raises(ValueError, match="not below"):
        is_stable([(3.0, 1.0), (-1.0, 1.0), (3.0, 1.0), (3.0, 1.0)])
    with pytest.raises(ValueError, match="2 dark readings, but 3 times"):
        drift([(3.0, 1.0), (3.0, 1.0)], at_s=[0.0, 1.0, 2.0])
