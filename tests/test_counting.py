"""The counting likelihood against textbook numbers and pulses drawn one by one."""

from __future__ import annotations

import numpy as np
import pytest

from analysis.counting import (
    LOAD_LIMIT,
    FloatArray,
    deviance,
    live_time_s,
    load,
    paralysable_rate_per_s,
    refuse_overload,
    registered_rate_per_s,
    true_rate_per_s,
)
from simulators.detector import registered


def pulse_by_pulse(rate: float, dead_time: float, gate: float, gates: int, seed: int) -> FloatArray:
    """Registered pulses of `gates` gates: every gap is the dead time and an exponential wait. The counter is
    long in its stride when a gate opens, so the first gap begins before it."""
    rng = np.random.Generator(np.random.Philox(key=seed))
    wait = 1.0 / rate
    lead = 20.0 * (dead_time + wait)
    most = int(1.5 * rate * (gate + lead) / (1.0 + rate * dead_time) + 80)
    arrivals = np.cumsum(dead_time + rng.exponential(wait, (gates, most)), axis=1)
    assert arrivals[:, -1].min() > lead + gate
    made: FloatArray = np.sum((arrivals > lead) & (arrivals <= lead + gate), axis=1).astype(np.float64)
    return made


def test_textbook_rate() -> None:
    """1 us and a true rate of 1e5 /s: 90 909.09 /s registered by a non-paralysable counter, 90 483.74 /s by a
    paralysable one (textbook)."""
    true = np.array([1e5])
    assert registered_rate_per_s(true, dead_time_s=1e-6)[0] == pytest.approx(90909.09, abs=5e-3)
    assert paralysable_rate_per_s(true, dead_time_s=1e-6)[0] == pytest.approx(90483.74, abs=5e-3)
    assert true_rate_per_s(np.array([90909.0909090909]), dead_time_s=1e-6)[0] == pytest.approx(1e5)
    with pytest.raises(ValueError, match="below 1"):
        true_rate_per_s(np.array([2e6]), dead_time_s=1e-6)


@pytest.mark.parametrize("load", [0.02, 0.1, 0.3, 3.0 / 7.0])
def test_counts_are_underdispersed(load: float) -> None:
    """Variance over mean is 1/(1 + r tau)^2 (Mueller 1974, NIM 117, 401; memory)."""
    seed, gate, rate = 11, 1.0, 400.0
    counts = pulse_by_pulse(rate, load / rate, gate, 6000, seed)
    assert counts.mean() == pytest.approx(rate / (1.0 + load), rel=2e-3), seed
    # a variance from 6000 gates is known to 1.8 %; 1 % more for the gate's two ends
    assert counts.var() / counts.mean() == pytest.approx(1.0 / (1.0 + load) ** 2, rel=0.07), seed


@pytest.mark.parametrize("load", [0.05, 0.25])
def test_the_likelihood_knows_how_sure_it_is(load: float) -> None:
    """The estimate n/(T - n tau) scatters as the likelihood's information T/(r (1 + r tau)) says."""
    seed, gate, rate = 5, 1.0, 400.0
    dead_time = load / rate
    counts = pulse_by_pulse(rate, dead_time, gate, 6000, seed)
    estimate = counts / live_time_s(counts, np.full(counts.size, gate), dead_time_s=dead_time)
    assert estimate.mean() == pytest.approx(rate, rel=3e-3), seed
    assert estimate.var() == pytest.approx(rate * (1.0 + load) / gate, rel=0.07), seed


def test_deviance_is_the_likelihood_ratio() -> None:
    """Against sums of scipy's log densities."""
    from scipy.stats import norm, poisson

    data, mean, sigma = np.array([0.0, 3.0, 17.0]), np.array([0.7, 4.2, 15.0]), np.array([1.0, 2.0, 4.0])
    saturated = np.sum(poisson.logpmf(data, np.maximum(data, 1e-300)))
    assert deviance(data, mean, None) == pytest.approx(2.0 * (saturated - np.sum(poisson.logpmf(data, mean))))
    gauss = np.sum(norm.logpdf(data, data, sigma)) - np.sum(norm.logpdf(data, mean, sigma))
    assert deviance(data, mean, sigma) == pytest.approx(2.0 * gauss)


def test_live_time_never_vanishes() -> None:
    assert live_time_s(np.array([5.0, 2e9]), np.ones(2), dead_time_s=1e-8).tolist() == [1.0 - 5e-8, 1e-3]


def test_paralysable_pulses() -> None:
    """Pulses drawn one by one, each of them prolonging the dead time, register at r exp(-r tau)."""
    seed, rate, dead_time = 3, 1e5, 1e-6
    gaps = np.random.Generator(np.random.Philox(key=seed)).exponential(1.0 / rate, 2_000_000)
    share = float(np.mean(gaps > dead_time))
    expected = paralysable_rate_per_s(np.array([rate]), dead_time_s=dead_time)[0] / rate
    assert abs(share - expected) < 4.0 * np.sqrt(share * (1.0 - share) / gaps.size), seed


@pytest.mark.parametrize("true_load", [0.1, 3.0 / 7.0])
def test_the_gates_first_pulse_is_never_lost(true_load: float) -> None:
    """A counter that is ready when the gate opens registers x^2/(2 (1 + x)^2) pulses more a gate, x = r tau,
    and no more: the edge effect that the likelihood leaves out (renewal theory: Cox 1962, section 4.2)."""
    seed, mean, gates = 8, 40.0, 60_000
    rng = np.random.Generator(np.random.Philox(key=seed))
    dead_time = true_load / mean
    counts = [registered(rng, rate_per_s=mean, gate_s=1.0, dead_time_s=dead_time) for _ in range(gates)]
    extra = float(np.mean(counts)) - mean / (1.0 + true_load)
    expected = true_load**2 / (2.0 * (1.0 + true_load) ** 2)
    assert abs(extra - expected) < 4.0 * float(np.std(counts)) / np.sqrt(gates), seed
    assert expected < 0.046


def test_load_and_its_limit() -> None:
    """A counter dead for more than three tenths of a gate is refused, one that just keeps to it is not."""
    counts, gate = np.array([3.0e6, 0.0, 1.0e6]), np.array([0.3, 0.0, 1.0])
    assert load(counts, gate, dead_time_s=30e-9) == pytest.approx([LOAD_LIMIT, 0.0, 0.03])
    refuse_overload(counts, np.array([0.3001, 0.0, 1.0]), dead_time_s=30e-9)
    with pytest.raises(ValueError, match=r"dead for 30% of a gate.*less light"):
        refuse_overload(counts, np.array([0.2999, 0.0, 1.0]), dead_time_s=30e-9)
