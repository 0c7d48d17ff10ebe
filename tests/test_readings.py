"""Currents and reference counts made ready for the fit: against simulated devices and exact likelihoods."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binom

from analysis.counting import FloatArray
from analysis.model import FeatureModel
from analysis.question import Feature
from analysis.readings import (
    AnalogueLaw,
    CounterLaw,
    ReferenceLaw,
    Sums,
    check_reading,
    recorded_counts,
    reduce,
    reference_level_per_s,
)
from analysis.starts import fit_single
from simulators.analogue import Ammeter, AnalogueOptions
from simulators.detector import registered
from simulators.draw import Draws
from simulators.reference import ReferenceCounter, ReferenceOptions

PULSES = CounterLaw(0.0)
GATE_S = 0.1


def sums_of(
    counts: FloatArray, reference: FloatArray | None, *, gate_s: float = GATE_S, **dark: float
) -> Sums:
    """One dither group on a comb of 1 pm."""
    return Sums(
        wavelength_nm=500.0 + 1e-3 * np.arange(counts.size),
        group=np.zeros(counts.size, dtype=np.int64),
        counts=counts.astype(np.int64),
        gate_s=np.full(counts.size, gate_s),
        reference_counts=None if reference is None else reference.astype(np.int64),
        **dark,  # type: ignore[arg-type]
    )


# ---- currents --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("rate_per_s", [0.0, 300.0, 2e5])
def test_events_have_their_mean_as_variance(rate_per_s: float) -> None:
    """A multiplier's current with excess noise and read noise becomes counts of variance = mean, pedestal and
    all, in the dark as in the light (Snyder, Helstrom, Lanterman, Faisal, White 1995, J. Opt. Soc. Am. A 12,
    272), and their rate less the pedestal is the current's."""
    seed, readings = 4, 20_000
    options = AnalogueOptions(charge_c=1.6e-13, excess_factor=1.25, read_noise_a=5e-12)
    law = AnalogueLaw(charge_unit_c=1e-16, read_noise_a=5e-12, shot_noise_c=1.25 * 1.6e-13)
    meter = Ammeter(options, Draws(seed, "ammeter"))
    currents = [meter.read(rate_per_s=rate_per_s, gate_s=GATE_S)[0] for _ in range(readings)]
    counts = np.array([recorded_counts(a, GATE_S, charge_unit_c=law.charge_unit_c) for a in currents])
    events = law.events(counts.astype(np.float64), np.full(readings, GATE_S))
    mean_u = float(events.std()) / math.sqrt(readings)
    current_a = (float(events.mean()) / GATE_S - law.pedestal_per_s) * law.shot_noise_c
    assert abs(current_a - rate_per_s * 1.6e-13) < 4.0 * mean_u * law.shot_noise_c / GATE_S, seed
    ratio_u = math.sqrt(2.0 / readings) * 1.1  # the kurtosis of a few dozen events adds to a Gaussian's
    assert float(events.var()) / float(events.mean()) == pytest.approx(1.0, abs=4.0 * ratio_u), seed
    # the same law in recorded counts: their standard deviation, and their rate back from that of events
    deviation = law.deviation(np.array([counts.mean()]), np.array([GATE_S]))[0]
    assert deviation == pytest.approx(counts.std(), rel=4.0 * 0.5 * ratio_u), seed
    recorded_per_s = law.recorded_per_s(np.array([events.mean() / GATE_S]))[0]
    assert recorded_per_s == pytest.approx(counts.mean() / GATE_S, rel=1e-9, abs=1e-6)


def test_no_current_through_a_noiseless_meter_is_still_not_known_better_than_one_event() -> None:
    """Without read noise the deviation is that of one event at least: no reading weighs infinitely much."""
    law = AnalogueLaw(charge_unit_c=1e-15, read_noise_a=0.0, shot_noise_c=2e-13)
    assert law.pedestal_per_s == 0.0
    made = law.deviation(np.array([-300.0, 0.0, 800.0]), np.full(3, GATE_S))
    assert made == pytest.approx([200.0, 200.0, 400.0])


def test_sums_of_events_are_events_of_the_sum() -> None:
    """Reducing a sum of readings is summing reduced readings: the tally may add integers."""
    law = AnalogueLaw(1e-16, 5e-12, 2e-13)
    parts, gates = np.array([1234.0, -17.0, 98765.0]), np.array([0.1, 0.2, 0.7])
    whole = law.events(np.array([parts.sum()]), np.array([gates.sum()]))[0]
    assert whole == pytest.approx(float(law.events(parts, gates).sum()), rel=1e-12)


def test_negative_sums_are_clipped_and_told() -> None:
    """An offset below what read noise explains gives no negative events, and a flag; so do faint sums."""
    law = AnalogueLaw(1e-15, 1e-13, 2e-13)
    made = reduce(sums_of(np.array([-500.0, 40000.0]), None), detector=law)
    assert made.counts.counts.tolist() == [0.0, pytest.approx(200.0 + 0.25 * GATE_S)]
    assert made.flags == ("clipped", "few-events")
    assert made.counts.pedestal_per_s == pytest.approx(0.25)
    bright = reduce(sums_of(np.array([40000.0, 40000.0]), None), detector=law)
    assert bright.flags == ()


def test_a_fit_of_currents_knows_its_own_uncertainty() -> None:
    """Lines read as currents, fitted as events: chi square and the scatter of areas are as the fit says."""
    seed, runs = 21, 40
    options = AnalogueOptions(charge_c=1.6e-13, excess_factor=1.2, read_noise_a=4e-12)
    law = AnalogueLaw(1e-16, 4e-12, 1.2 * 1.6e-13)
    meter = Ammeter(options, Draws(seed, "ammeter"))
    x = np.arange(-24.0, 24.5)
    true = 3000.0 * np.exp(-0.5 * (x / 6.0) ** 2) + 200.0
    off, chi2 = [], 0.0
    for _ in range(runs):
        read = [meter.read(rate_per_s=r, gate_s=GATE_S)[0] for r in true]
        dark = [meter.read(rate_per_s=0.0, gate_s=1.0)[0] for _ in range(4)]
        unit = law.charge_unit_c
        sums = sums_of(
            np.array([recorded_counts(a, GATE_S, charge_unit_c=unit) for a in read]),
            None,
            dark_counts=sum(recorded_counts(a, 1.0, charge_unit_c=unit) for a in dark),
            dark_gate_s=4.0,
        )
        model = FeatureModel(reduce(sums, detector=law).counts, gaussian_feature(), 1)
        made = fit_single(model)
        area = 3000.0 / 1.2 * 6e-3 * math.sqrt(2.0 * math.pi)  # events of 1.2 photoelectrons' charge each
        off.append((made.value("area") - area) / made.deviation("area"))
        chi2 += made.pearson_chi2 / made.dof / runs
    assert abs(float(np.mean(off))) < 4.0 / math.sqrt(runs), seed
    assert 0.6 < float(np.std(off)) < 1.45, seed  # 4 standard deviations of a deviation from 40
    assert chi2 == pytest.approx(1.0, abs=4.0 * math.sqrt(2.0 / 45 / runs)), seed


def gaussian_feature() -> Feature:
    """A line of 14 pm at 500.024 nm, in the middle of a comb of 49 pm, on a flat background."""
    return Feature(
        wavelength_nm=500.024,
        fwhm_nm=0.0141,
        box_widths_nm=(0.0, 0.0),
        line_fwhm_nm=0.0141,
        shape="gaussian",
        background="flat",
        shape_allowance=0.0,
    )


# ---- flags of a reading ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("mean_a", "flags"),
    [
        (3e-9, ()),
        (-3e-9, ()),
        (9.9e37, ("overload",)),
        (-9.9e37, ("overload",)),
        (9.91e37, ("overload",)),
        (9.9e36, ("overload",)),
        (math.inf, ("overload",)),
        (math.nan, ("overload",)),
        (1e-6, ("saturated",)),
        (0.999e-6, ()),
        (-1e-6, ("clipped",)),
    ],
)
def test_no_reading_of_nonsense_passes_as_light(mean_a: float, flags: tuple[str, ...]) -> None:
    """SCPI's 9.9E37 (infinity) and 9.91E37 (no number) pass isfinite, and are caught (SCPI-99, 7.2.1)."""
    assert check_reading(mean_a, highest_current_a=1e-6) == flags


def test_the_instruments_own_flags_are_kept() -> None:
    assert check_reading(2e-6, highest_current_a=1e-6, flags=("late",)) == ("late", "saturated")


NO_NUMBERS = (9.9e37, 9.9e36, math.nan, -math.inf)


def test_nonsense_is_recorded_as_no_charge() -> None:
    """A point's counts are whole numbers of 64 bits whatever the instrument says."""
    assert [recorded_counts(a, 1.0, charge_unit_c=1e-16) for a in NO_NUMBERS] == [0] * len(NO_NUMBERS)
    assert recorded_counts(-2.6e-15, 0.5, charge_unit_c=1e-16) == -13


# ---- reference detector ----------------------------------------------------------------------------------


def restless(
    rng: np.random.Generator, mean: FloatArray, reference_mean: float, rms: float
) -> tuple[FloatArray, FloatArray]:
    """Signal and reference counts of the same gates under a lamp that varies by rms from gate to gate."""
    strength = np.maximum(1.0 + rms * rng.standard_normal(mean.size), 0.05)
    return rng.poisson(mean * strength).astype(float), rng.poisson(reference_mean * strength).astype(float)


@pytest.mark.parametrize(("signal", "reference_mean", "dark"), [(400.0, 200.0, 0.0), (60.0, 600.0, 30.0)])
def test_dispersion_is_what_the_reference_adds(signal: float, reference_mean: float, dark: float) -> None:
    """Residuals against the exposure have the variance mean times phi, lamp noise of 20 % divided out."""
    seed, gates = 6, 40_000
    rng = np.random.Generator(np.random.Philox(key=seed))
    light, seen = restless(rng, np.full(gates, signal), reference_mean, 0.2)
    counts = light + rng.poisson(dark, gates)
    sums = sums_of(counts, seen, dark_counts=round(dark * 1000.0), dark_gate_s=1000.0 * GATE_S)
    level = reference_mean / GATE_S
    made = reduce(sums, detector=PULSES, reference=ReferenceLaw(0.0, 0.0), reference_level_per_s=level).counts
    assert made.exposure is not None
    assert made.dispersion is not None
    mean = made.exposure * signal + dark
    expected = float(np.mean(mean * made.dispersion))
    assert abs(float(np.mean(counts - mean))) < 4.0 * math.sqrt(expected / gates), seed
    ratio = float(np.mean((counts - mean) ** 2)) / expected
    # of 40 000 squares, with the kurtosis that a lamp of 20 % gives them
    assert ratio == pytest.approx(1.0, abs=4.0 * math.sqrt(2.5 / gates)), seed
    plain = counts.var() / counts.mean()
    assert plain > 3.0 if signal > 100.0 else plain > 1.5, "without a reference the lamp would show"


@pytest.mark.parametrize("gate_s", [0.1, 100.0])
def test_each_position_is_weighed_by_its_own_neighbours(gate_s: float) -> None:
    """Where neither sees a background phi is 1 + n/M, n and M those of the positions on both sides: by hand
    (Przyborowski and Wilenski 1940), for rates above and below one per s."""
    counts, seen = np.array([10.0, 40.0, 90.0, 160.0]), np.array([100.0, 250.0, 400.0, 850.0])
    made = reduce(sums_of(counts, seen, gate_s=gate_s), detector=PULSES, reference=ReferenceLaw(0.0, 0.0))
    by_hand = [1.0 + 40.0 / 250.0, 1.0 + 100.0 / 500.0, 1.0 + 200.0 / 1100.0, 1.0 + 90.0 / 400.0]
    assert made.counts.dispersion == pytest.approx(by_hand, rel=1e-12)


def test_the_dark_that_the_dispersion_knows_of_is_a_rate() -> None:
    """Half a second of dark tells as much of its rate as ten times the counts in ten times the gate."""
    counts, seen = np.array([60.0, 90.0, 80.0]), np.array([500.0, 600.0, 550.0])
    law = ReferenceLaw(0.0, 0.0)
    short, long = (
        reduce(
            sums_of(counts, seen, dark_counts=20 * k, dark_gate_s=0.5 * k), detector=PULSES, reference=law
        ).counts.dispersion
        for k in (1, 10)
    )
    assert short is not None
    assert short == pytest.approx(long, rel=1e-12)
    # 40 per s of dark are 4 of the 90 counts beside the first: phi = 1 + 86^2/(90 M)
    assert short[0] == pytest.approx(1.0 + 86.0**2 / (90.0 * 600.0), rel=1e-12)


def test_a_position_not_visited_yet_has_no_say() -> None:
    """Zero counts in zero time: exposure and dispersion 1, and the others as if it were not there."""
    counts, seen = np.array([50.0, 0.0, 70.0]), np.array([900.0, 0.0, 1100.0])
    sums = sums_of(counts, seen)
    sums.gate_s[1] = 0.0
    made = reduce(sums, detector=PULSES, reference=ReferenceLaw(0.0, 0.0))
    assert made.flags == ()
    assert made.counts.exposure == pytest.approx([0.9, 1.0, 1.1])
    assert made.counts.dispersion is not None
    assert made.counts.dispersion[1] == 1.0
    assert (made.counts.dispersion[[0, 2]] > 1.0).all()


def test_a_faint_reference_is_a_reference() -> None:
    """One that sees the lamp half a time a second serves, if the gates are long; one not yet asked does
    not."""
    law = ReferenceLaw(0.0, 0.0)
    sums = sums_of(np.array([50.0, 70.0]), np.array([40.0, 60.0]), gate_s=100.0)
    assert reference_level_per_s(sums, law) == pytest.approx(0.5)
    made = reduce(sums, detector=PULSES, reference=law)
    assert made.flags == ()
    assert made.counts.exposure == pytest.approx([0.8, 1.2])
    with pytest.raises(ValueError, match="saw no lamp"):
        reference_level_per_s(sums_of(np.zeros(2), np.zeros(2), gate_s=0.0), law)


def test_a_reference_near_its_limit_is_noisier_than_its_counts_look() -> None:
    """A reference dead for a quarter of the time: its counts are underdispersed, its exposure is not; the
    residuals have the variance that phi says."""
    seed, gates, signal, tau_s = 13, 12_000, 600.0, 1e-4
    rng = np.random.Generator(np.random.Philox(key=seed))
    rate = 0.25 / 0.75 / tau_s
    seen = np.array(
        [registered(rng, rate_per_s=rate, gate_s=GATE_S, dead_time_s=tau_s) for _ in range(gates)]
    )
    light = rng.poisson(signal, gates).astype(float)
    made = reduce(
        sums_of(light, seen),
        detector=PULSES,
        reference=ReferenceLaw(tau_s, 0.0),
        reference_level_per_s=rate,
    ).counts
    assert made.exposure is not None
    assert made.dispersion is not None
    residual = light - made.exposure * signal
    ratio = float(residual.var()) / float(np.mean(signal * made.dispersion))
    assert ratio == pytest.approx(1.0, abs=4.0 * math.sqrt(2.5 / gates)), seed


def test_dispersion_is_that_of_the_binomial() -> None:
    """Given the sum of both counts, the signal's are binomial: the exact Fisher information about log(odds)
    is that of quasi-Poisson counts with phi = 1 + odds (Przyborowski and Wilenski 1940, Biometrika 31, 313).
    """
    total, odds = 500, 0.7
    k = np.arange(total + 1)

    def log_p(log_odds: float) -> FloatArray:
        made: FloatArray = binom.logpmf(k, total, 1.0 / (1.0 + math.exp(-log_odds)))
        return made

    step, here = 1e-3, math.log(odds)
    score = (log_p(here + step) - log_p(here - step)) / (2.0 * step)
    exact = float(np.exp(log_p(here)) @ score**2)
    signal, reference = total * odds / (1.0 + odds), total / (1.0 + odds)
    made = reduce(
        sums_of(np.full(3, round(1e6 * signal)), np.full(3, round(1e6 * reference))),
        detector=PULSES,
        reference=ReferenceLaw(0.0, 0.0),
    ).counts
    assert made.dispersion is not None
    assert signal / made.dispersion[1] == pytest.approx(exact, rel=1e-5)


def test_neighbours_weights_leave_no_bias() -> None:
    """With 30 reference counts a gate the strength comes out right; weighing by a gate's own counts, as the
    obvious formula does, would lose 1/30 of it."""
    seed, gates, signal, reference_mean = 12, 200_000, 60.0, 30.0
    rng = np.random.Generator(np.random.Philox(key=seed))
    light, seen = restless(rng, np.full(gates, signal), reference_mean, 0.0)
    made = reduce(sums_of(light, seen), detector=PULSES, reference=ReferenceLaw(0.0, 0.0)).counts
    assert made.exposure is not None
    assert made.dispersion is not None

    def strength(phi: FloatArray) -> float:
        return float(np.sum(light / phi) / np.sum(made.exposure / phi))

    u = signal * math.sqrt((1.0 / signal + 1.0 / reference_mean) / gates)
    assert abs(strength(made.dispersion) - signal) < 4.0 * u, seed
    assert strength(1.0 + light / np.maximum(seen, 1.0)) < signal - 10.0 * u, seed


def test_a_drifting_lamp_is_divided_out_of_a_line() -> None:
    """A lamp that varies by 15 % while a line is swept: with the reference the line fits and its width is
    right, without it the fit fails."""
    seed, runs = 31, 25
    rng = np.random.Generator(np.random.Philox(key=seed))
    counter = ReferenceCounter(ReferenceOptions(rate_per_s=2e5, dead_time_ns=30.0), Draws(seed, "reference"))
    x = np.arange(-24.0, 24.5)
    true = 20_000.0 * np.exp(-0.5 * (x / 6.0) ** 2) + 500.0
    off, with_it, without = [], 0.0, 0.0
    for _ in range(runs):
        gain = 1.0 + 0.15 * np.sin(x / 2.5 + rng.uniform(0.0, 6.3))
        counts = np.array(
            [registered(rng, rate_per_s=r, gate_s=GATE_S, dead_time_s=30e-9) for r in true * gain],
            dtype=float,
        )
        seen = np.array([counter.count(gain=float(g), gate_s=GATE_S) for g in gain], dtype=float)
        for reference in (ReferenceLaw(30e-9, 5.0), None):
            sums = sums_of(counts, None if reference is None else seen)
            reduced = reduce(sums, detector=CounterLaw(30e-9), reference=reference).counts
            made = fit_single(FeatureModel(reduced, gaussian_feature(), 1))
            if reference is None:
                without += made.pearson_chi2 / made.dof / runs
            else:
                with_it += made.pearson_chi2 / made.dof / runs
                off.append((made.value("sigma_nm") - 6e-3) / made.deviation("sigma_nm"))
    assert with_it == pytest.approx(1.0, abs=4.0 * math.sqrt(2.0 / 45 / runs)), seed
    assert without > 3.0, seed
    assert abs(float(np.mean(off))) < 4.0 / math.sqrt(runs), seed
    assert float(np.std(off)) < 1.6, seed  # 4 standard deviations of a deviation from 25


def test_reference_dead_time_and_dark_are_taken_off() -> None:
    """Exposure follows the lamp's true strength, not what the reference registers of it."""
    law = ReferenceLaw(dead_time_s=1e-6, dark_rate_per_s=1000.0)
    lamp = np.array([50_000.0, 100_000.0, 200_000.0])
    true = lamp + 1000.0
    seen = np.round(true / (1.0 + true * 1e-6) * 10.0)
    made = reduce(sums_of(np.full(3, 10), seen, gate_s=10.0), detector=PULSES, reference=law).counts
    assert made.exposure == pytest.approx(lamp / lamp.mean(), rel=1e-5)


def test_exposures_of_one_level_add_up() -> None:
    """Two blocks and their sum on one level: exposure times gate is additive, as blocks of evidence need."""
    law = ReferenceLaw(0.0, 0.0)
    first, second = np.array([900.0, 1100.0, 1000.0]), np.array([1500.0, 1300.0, 1700.0])
    counts = np.array([10.0, 20.0, 15.0])
    whole = sums_of(2 * counts, first + second, gate_s=0.2)
    level = reference_level_per_s(whole, law)

    def exposure(sums: Sums) -> FloatArray:
        made = reduce(sums, detector=PULSES, reference=law, reference_level_per_s=level).counts.exposure
        assert made is not None
        return made * sums.gate_s

    parts = exposure(sums_of(counts, first)) + exposure(sums_of(counts, second))
    assert exposure(whole) == pytest.approx(parts, rel=1e-12)
    assert exposure(whole).sum() == pytest.approx(0.6)


def test_what_the_reference_cannot_vouch_for_is_left_out() -> None:
    """No lamp, a reference or a counter beyond its limit: left out as if not visited, and told."""
    counts = np.array([100.0, 4_000_000.0, 100.0, 100.0])
    seen = np.array([1000.0, 1000.0, 0.0, 400_000.0])
    made = reduce(sums_of(counts, seen), detector=CounterLaw(1e-8), reference=ReferenceLaw(1e-7, 50.0))
    assert made.flags == ("dead-time", "reference-dead-time", "no-reference")
    assert made.counts.gate_s.tolist() == [GATE_S, 0.0, 0.0, 0.0]
    assert made.counts.counts.tolist() == [100.0, 0.0, 0.0, 0.0]
    assert made.counts.exposure is not None
    assert made.counts.exposure[0] == pytest.approx(1.0)


def test_a_counter_at_its_limit_is_still_corrected() -> None:
    """The limit of the load itself, 0.3, is allowed: as everywhere else (`refuse_overload`)."""
    sums = sums_of(np.array([300.0, 301.0]), None, gate_s=1.0)
    made = reduce(sums, detector=CounterLaw(1e-3))
    assert made.counts.counts.tolist() == [300.0, 0.0]
    assert made.flags == ("dead-time",)


def test_what_is_not_stated_is_nothing() -> None:
    """No dark, no uncertainty of the dead time, unless somebody says so."""
    plain = sums_of(np.array([5.0, 7.0]), None)
    made = reduce(plain, detector=CounterLaw(30e-9)).counts
    assert (made.dark_counts, made.dark_gate_s, made.dead_time_u_s) == (0.0, 0.0, 0.0)


def test_a_bench_without_reference_reduces_to_plain_counts() -> None:
    sums = sums_of(np.array([5.0, 7.0]), None, dark_counts=3, dark_gate_s=2.0)
    made = reduce(sums, detector=CounterLaw(30e-9, 2e-9))
    assert made.flags == ()
    assert made.counts.counts.tolist() == [5.0, 7.0]
    assert made.counts.exposure is None
    assert made.counts.dispersion is None
    assert (made.counts.dead_time_s, made.counts.dead_time_u_s) == (30e-9, 2e-9)
    assert (made.counts.dark_counts, made.counts.dark_gate_s) == (3.0, 2.0)


def test_half_a_reference_is_refused() -> None:
    with pytest.raises(ValueError, match="both, or neither"):
        reduce(sums_of(np.ones(2), None), detector=PULSES, reference=ReferenceLaw(0.0, 0.0))
    with pytest.raises(ValueError, match="both, or neither"):
        reduce(sums_of(np.ones(2), np.ones(2)), detector=PULSES)
    with pytest.raises(ValueError, match="saw no lamp"):
        reference_level_per_s(sums_of(np.ones(2), np.zeros(2)), ReferenceLaw(0.0, 5.0))
    with pytest.raises(ValueError, match="no reference counts"):
        reference_level_per_s(sums_of(np.ones(2), None), ReferenceLaw(0.0, 5.0))
    with pytest.raises(ValueError, match="above 0"):
        AnalogueLaw(1e-16, 1e-12, 0.0)
