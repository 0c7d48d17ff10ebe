"""Linearity: dead time and curvature from two runs whose pulses and currents are drawn by other means."""

from __future__ import annotations

import json
import math
from pathlib import Path

import cellar
import numpy as np
import pytest

from analysis.counting import FloatArray, paralysable_rate_per_s
from analysis.linearity import Arm, Linearity, compare, in_words
from analysis.readings import AnalogueLaw, CounterLaw
from analysis.variance import variance_law
from daq.linearity import linearity, text_lines
from drivers.errors import DataError
from simulators.analogue import Ammeter, AnalogueOptions
from simulators.detector import registered
from simulators.draw import Draws

POSITION = np.arange(-40.0, 41.0)
GROUP = np.arange(POSITION.size) % 4
STATED = CounterLaw(30e-9, 2e-9)
TRUE_TAU_S = 31e-9


def feature(peak_per_s: float, shift: float = 0.0) -> FloatArray:
    """A Gaussian line of FWHM 23.5 positions on a thousandth of its height."""
    made: FloatArray = peak_per_s * (np.exp(-0.5 * ((POSITION - shift) / 10.0) ** 2) + 1e-3)
    return made


def pulses(rng: np.random.Generator, true: FloatArray, gate_s: float) -> Arm:
    """Counts of a non-paralysable counter, drawn as it registers them."""
    counts = [registered(rng, rate_per_s=r, gate_s=gate_s, dead_time_s=TRUE_TAU_S) for r in true]
    return Arm(np.array(counts, dtype=float), np.full(true.size, gate_s), float(rng.poisson(16.0)), 2.0)


def two_runs(
    rng: np.random.Generator,
    *,
    peak_per_s: float,
    transmission: float,
    shift: float,
    drift_rms: float = 0.003,
) -> Linearity:
    """Plain and attenuated, the lamp a third of a per cent different in every dither group of every run."""
    drift, other = (1.0 + drift_rms * rng.standard_normal(4)[GROUP] for _ in range(2))
    return compare(
        POSITION,
        GROUP,
        plain=pulses(rng, feature(peak_per_s) * drift + 8.0, 0.05),
        attenuated=pulses(rng, transmission * feature(peak_per_s, shift) * other + 8.0, 0.05),
        law=STATED,
    )


@pytest.mark.parametrize(
    ("peak_per_s", "transmission", "shift"),
    [(3e6, 0.1, 0.7), (8e6, 0.1, 0.0), (8e6, 0.01, -0.7), (8e6, 0.5, 2.0)],
)
def test_dead_time_without_knowing_the_attenuator(
    peak_per_s: float, transmission: float, shift: float
) -> None:
    """31 ns is found where the file says 30 +- 2, without bias and as surely as claimed, whatever the
    attenuator and however far the two runs are apart."""
    seed, runs = 5, 60
    rng = np.random.Generator(np.random.Philox(key=seed))
    found = [
        two_runs(rng, peak_per_s=peak_per_s, transmission=transmission, shift=shift) for _ in range(runs)
    ]
    off = np.array([(f.dead_time_s - TRUE_TAU_S) / f.dead_time_u_s for f in found])  # type: ignore[operator]
    assert abs(float(off.mean())) < 4.0 / math.sqrt(runs), seed
    assert 0.63 < float(off.std()) < 1.37, seed  # 4 standard deviations of a deviation from 60
    moved = np.array([(f.shift - shift) / f.shift_u for f in found])
    assert abs(float(moved.mean())) < 4.0 / math.sqrt(runs), seed
    chi2, dof = sum(f.chi2 for f in found), sum(f.dof for f in found)
    assert chi2 / dof == pytest.approx(1.0, abs=4.0 * math.sqrt(2.0 / dof)), seed
    assert np.mean([f.is_whole for f in found]) > 0.9, seed
    assert found[0].transmission == pytest.approx(transmission, rel=0.01)


def test_a_lamp_that_warms_up_between_the_groups() -> None:
    """Dither groups that differ by 5 %, runs that are half a position apart: still no more scatter than
    counting has, for each group has its own brightness in both runs."""
    seed, runs = 14, 20
    rng = np.random.Generator(np.random.Philox(key=seed))
    found = [two_runs(rng, peak_per_s=8e6, transmission=0.5, shift=0.5, drift_rms=0.05) for _ in range(runs)]
    chi2, dof = sum(f.chi2 for f in found), sum(f.dof for f in found)
    assert chi2 / dof == pytest.approx(1.0, abs=4.0 * math.sqrt(2.0 / dof)), seed


def test_a_paralysable_counter_is_found_out() -> None:
    """A counter that every pulse paralyses, far up: no one dead time fits, so the brightest positions are
    given up, and what is said of the rest is not what the file says."""
    seed, gate_s = 6, 0.5
    rng = np.random.Generator(np.random.Philox(key=seed))

    def arm(true: FloatArray) -> Arm:
        mean = paralysable_rate_per_s(true, dead_time_s=TRUE_TAU_S) * gate_s
        return Arm(rng.poisson(mean).astype(float), np.full(true.size, gate_s), 16.0, 2.0)

    found = compare(
        POSITION, GROUP, plain=arm(feature(1.2e7)), attenuated=arm(0.1 * feature(1.2e7)), law=STATED
    )
    assert not found.is_whole, seed
    assert 2e6 < found.highest_per_s < 7e6, seed
    assert found.scatter < 1.5, seed
    said = " ".join(in_words(found, law=STATED))
    assert "does NOT hold" in said
    assert "brighter positions disagree" in said


def test_positions_beyond_the_limit_are_left_out() -> None:
    """Dead for more than 30 % of the gate: not compared, and said so."""
    seed = 7
    rng = np.random.Generator(np.random.Philox(key=seed))
    found = two_runs(rng, peak_per_s=2.5e7, transmission=0.1, shift=0.5)
    assert not found.is_whole, seed
    assert found.positions < POSITION.size - 4, seed
    assert found.highest_per_s <= 0.3 / STATED.dead_time_s
    assert abs(found.dead_time_s - TRUE_TAU_S) < 4.0 * found.dead_time_u_s, seed  # type: ignore[operator]


def test_words_say_what_to_write() -> None:
    """A file that is wrong is told what to say instead; one that knows better than the runs is left alone."""
    seed = 8
    rng = np.random.Generator(np.random.Philox(key=seed))
    found = two_runs(rng, peak_per_s=8e6, transmission=0.1, shift=0.3)
    assert "30 ± 2 ns, holds" in in_words(found, law=STATED)[0]
    wrong = in_words(found, law=CounterLaw(20e-9, 1e-9))[0]
    assert "does NOT hold" in wrong
    assert "dead_time_ns = 3" in wrong
    assert "knows it no better" in in_words(found, law=CounterLaw(31e-9, 1e-11))[0]


def test_a_restless_lamp_is_told() -> None:
    """A lamp that flickers by 1 % between points: the scatter shows it and widens the uncertainty."""
    seed = 9
    rng = np.random.Generator(np.random.Philox(key=seed))
    plain, grey = (
        pulses(rng, share * feature(8e6) * (1.0 + 0.01 * rng.standard_normal(POSITION.size)) + 8.0, 1.0)
        for share in (1.0, 0.1)
    )
    found = compare(POSITION, GROUP, plain=plain, attenuated=grey, law=STATED)
    assert found.scatter > 3.0, seed
    assert "scatter" in in_words(found, law=STATED)[-1]
    assert abs(found.dead_time_s - TRUE_TAU_S) < 4.0 * found.dead_time_u_s, seed  # type: ignore[operator]


LAW = AnalogueLaw(charge_unit_c=1e-15, read_noise_a=2e-13, shot_noise_c=3e-13)


def currents(rng: np.random.Generator, true_a: FloatArray, curvature_per_a: float) -> Arm:
    """Charges of readings of 0.1 s through an amplifier whose truth is I (1 + kappa I), offset 0.5 pA."""
    gate_s = 0.1
    read = (np.sqrt(1.0 + 4.0 * curvature_per_a * true_a) - 1.0) / (2.0 * curvature_per_a) + 5e-13
    noise = np.sqrt((LAW.read_noise_a**2 + LAW.shot_noise_c * true_a) / gate_s)
    counts = np.round((read + noise * rng.standard_normal(read.size)) * gate_s / LAW.charge_unit_c)
    dark = 5e-13 + LAW.read_noise_a / math.sqrt(2.0) * float(rng.standard_normal())
    return Arm(counts, np.full(read.size, gate_s), dark * 2.0 / LAW.charge_unit_c, 2.0)


@pytest.mark.parametrize("curvature_per_a", [1e5, 2e6, -8e5])
def test_curvature_of_a_current(curvature_per_a: float) -> None:
    """A current that is read 1 % to 20 % wrong at 0.1 uA: the curvature is found without bias."""
    seed, runs = 10, 60
    rng = np.random.Generator(np.random.Philox(key=seed))
    found = [
        compare(
            POSITION,
            GROUP,
            plain=currents(rng, feature(1e-7), curvature_per_a),
            attenuated=currents(rng, 0.1 * feature(1e-7, 0.5), curvature_per_a),
            law=LAW,
        )
        for _ in range(runs)
    ]
    off = np.array([(f.curvature_per_a - curvature_per_a) / f.curvature_u_per_a for f in found])  # type: ignore[operator]
    assert abs(float(off.mean())) < 4.0 / math.sqrt(runs), seed
    assert 0.63 < float(off.std()) < 1.37, seed
    assert found[0].dead_time_s is None
    words = in_words(found[0], law=LAW)[0]
    assert ("NOT linear" in words) == (abs(curvature_per_a) > 5e5)


def test_variance_law_from_repeats() -> None:
    """Repeats of a multiplier's current under a lamp that flickers by 1 %: read noise, shot noise (charge
    times excess factor) and flicker come out, each within its uncertainty."""
    seed, repeats = 11, 30
    options = AnalogueOptions(charge_c=1.6e-13, excess_factor=1.25, read_noise_a=3e-12)
    meter = Ammeter(options, Draws(seed, "ammeter"))
    rng = np.random.Generator(np.random.Philox(key=seed))
    rates = np.concatenate([np.zeros(8), np.geomspace(20.0, 1e6, 60)])
    cell = np.repeat(np.arange(rates.size), repeats)
    flicker = 1.0 + 0.01 * rng.standard_normal(cell.size)
    read = np.array(
        [meter.read(rate_per_s=rates[c] * f, gate_s=0.1)[0] for c, f in zip(cell, flicker, strict=True)]
    )
    found = variance_law(cell, read, np.full(cell.size, 0.1))
    assert abs(found.read_noise_a - 3e-12) < 4.0 * found.read_noise_u_a, seed
    assert abs(found.shot_noise_c - 2e-13) < 4.0 * found.shot_noise_u_c, seed
    assert abs(found.flicker - 0.01) < 4.0 * found.flicker_u, seed
    assert found.read_noise_u_a < 0.2 * found.read_noise_a
    assert found.shot_noise_u_c < 0.1 * found.shot_noise_c
    assert found.flicker_u < 0.1 * found.flicker
    assert found.reduced_chi2 == pytest.approx(1.0, abs=4.0 * math.sqrt(2.0 / rates.size)), seed


def test_too_few_repeats_are_refused() -> None:
    with pytest.raises(ValueError, match="3 repeats"):
        variance_law(np.zeros(4, dtype=np.int64), np.arange(4.0), np.ones(4))


def test_nonsense_is_refused() -> None:
    ones = Arm(np.full(81, 100.0), np.ones(81), 0.0, 0.0)
    with pytest.raises(ValueError, match="holds no light"):
        compare(POSITION, GROUP, plain=ones, attenuated=Arm(np.zeros(81), np.ones(81), 5.0, 1.0), law=STATED)
    with pytest.raises(ValueError, match="must ascend"):
        compare(np.zeros(81), GROUP, plain=ones, attenuated=ones, law=STATED)
    few = Arm(np.full(5, 100.0), np.ones(5), 0.0, 0.0)
    with pytest.raises(ValueError, match="only 5 positions"):
        compare(POSITION[:5], GROUP[:5], plain=few, attenuated=few, law=STATED)


# ---- from run files --------------------------------------------------------------------------------------

TARGET = """
format = 1
name = "Linearity"
wavelength_air_nm = 313.155
[window]
half_width_fwhm = 2.5
[sweep]
dwell_s = 0.05
[goal]
separation_uncertainty_pm = 0.002
[limits]
time_s = 60.0
"""

BRIGHT = [
    ("highest_rate_per_s = 2e6", "highest_rate_per_s = 9.9e6"),
    ("trip_rate_per_s = 8e6", "trip_rate_per_s = 1e8\nsaturation_rate_per_s = 9e7"),
    ("strength_per_s = 420.0", "strength_per_s = 1.1e7"),
    ("strength_per_s = 294.0", "strength_per_s = 7.7e6"),
]
"""The demo bench before a lamp that keeps its counter dead for a quarter of the time at the line's top."""

WORLD = 'factory = "simulators.world:build"\n'
ATTENUATOR = (
    WORLD,
    WORLD + '[world.options]\nattenuator_at_start = "grey"\n'
    '[[world.options.attenuators]]\nname = "grey"\ntransmission = 0.1\n',
)
"""What a person puts in between two runs."""

ANALOGUE = [
    ('factory = "simulators.memory:counter"', 'kind = "analogue"\nfactory = "simulators.memory:analogue"'),
    ("dead_time_ns = 30.0\ndead_time_uncertainty_ns = 2.0\n", ""),
    (
        "highest_rate_per_s = 2e6",
        "charge_unit_c = 1e-15\nread_noise_a = 1e-12\nshot_noise_c = 1.92e-13\nhighest_current_a = 1e-5",
    ),
    (
        "[world.options.air]",
        "[world.options.analogue]\nrange_a = 2e-5\noverload_a = 3e-5\n[world.options.air]",
    ),
]


def run(folder: Path, *, changes: list[tuple[str, str]], seed: int) -> Path:
    folder.mkdir(parents=True)
    bench = cellar.bench_file(folder, changes=changes)
    made = cellar.run(folder, bench=bench, target=cellar.target_file(folder, TARGET), seed=seed)
    assert made.summary["stop_reason"] == "time-limit", made.summary
    return made.file


def test_dead_time_from_two_run_files(tmp_path: Path) -> None:
    """A person runs the bright line plain and through an attenuator, drive homed in between: 31 ns come out,
    where the bench file says 30 +- 2, to a fraction of a nanosecond, in spite of the drive's microsteps."""
    plain = run(tmp_path / "plain", changes=BRIGHT, seed=1)
    grey = run(tmp_path / "grey", changes=[*BRIGHT, ATTENUATOR], seed=101)
    made = linearity(plain, grey)
    assert abs(made["dead_time_ns"] - 31.0) < 3.0 * made["dead_time_u_ns"]
    assert made["dead_time_u_ns"] < 0.5
    assert made["stated_dead_time_ns"] == pytest.approx(30.0)
    assert made["transmission"] == pytest.approx(0.1, rel=0.01)
    assert made["highest_rate_per_s"] > 6e6
    assert made["chi2"] < 2.0 * made["dof"]
    assert json.loads(json.dumps(made)) == made
    text = "\n".join(text_lines(made))
    assert "30 ± 2 ns, holds" in text
    assert "The correction is supported up to" in text
    with pytest.raises(DataError, match="name the run without the attenuator first"):
        linearity(grey, plain)


def test_currents_from_two_run_files(tmp_path: Path) -> None:
    """The same procedure with the tube read as a current: linear, as it is in the cellar, and the repeats
    give the shot noise that the bench file states."""
    changes = [*BRIGHT[1:], *ANALOGUE]
    plain = run(tmp_path / "plain", changes=changes, seed=2)
    grey = run(tmp_path / "grey", changes=[*changes, ATTENUATOR], seed=102)
    made = linearity(plain, grey)
    assert made["kind"] == "analogue"
    assert abs(made["curvature_per_a"]) < 3.0 * made["curvature_u_per_a"]
    assert abs(made["curvature_u_per_a"]) * made["highest_current_a"] < 0.02
    assert made["variance_law"]["shot_noise_c"] == pytest.approx(1.92e-13, rel=0.3)
    assert "linear" in made["sentences"][0]
    assert "shot_noise_c = " in made["sentences"][-1]


def test_runs_too_faint_to_be_compared_are_told_so_and_one_run_twice_is_refused(tmp_path: Path) -> None:
    """The demo's own faint lines say nothing of a dead time."""
    quick = TARGET.replace("time_s = 60.0", "time_s = 40.0").replace("dwell_s = 0.05", "dwell_s = 0.2")
    files = [
        cellar.run(
            tmp_path / name,
            bench=cellar.bench_file(tmp_path, changes=changes),
            target=cellar.target_file(tmp_path, quick),
            seed=seed,
        ).file
        for name, changes, seed in (("plain", [], 1), ("grey", [ATTENUATOR], 2))
    ]
    with pytest.raises(DataError, match="too faint or too short"):
        linearity(*files)
    with pytest.raises(DataError, match="are the same run"):
        linearity(files[0], files[0])


def test_runs_that_do_not_belong_together_are_refused(tmp_path: Path) -> None:
    """Another dead time in the bench file, or another line: no comparison, and the message says which."""
    quick = TARGET.replace("time_s = 60.0", "time_s = 15.0")
    (tmp_path / "else").mkdir()
    changed = [*BRIGHT, ("dead_time_ns = 30.0", "dead_time_ns = 25.0")]
    benches = {
        "one": cellar.bench_file(tmp_path, changes=BRIGHT),
        "other": cellar.bench_file(tmp_path / "else", changes=changed),
    }
    files = {
        name: cellar.run(tmp_path / name, bench=bench, target=cellar.target_file(tmp_path, quick)).file
        for name, bench in benches.items()
    }
    with pytest.raises(DataError, match="only the attenuator may differ"):
        linearity(files["one"], files["other"])
    elsewhere = cellar.target_file(tmp_path, quick.replace("313.155", "361.051"), "elsewhere.toml")
    away = cellar.run(tmp_path / "away", bench=benches["one"], target=elsewhere).file
    with pytest.raises(DataError, match="0 positions of the drive in common"):
        linearity(files["one"], away)
    raised = cellar.run(
        tmp_path / "raised",
        bench=benches["one"],
        target=cellar.target_file(tmp_path, quick),
        confirmed={"items": [{"key": "high_voltage_v", "value": 950.0, "words": "high voltage"}]},
    ).file
    with pytest.raises(DataError, match=r"different high_voltage_v \(None and 950\.0\)"):
        linearity(files["one"], raised)
