"""Currents instead of counts, and a reference detector beside: the same loop, file and verdict."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest
from cellar import QUICK_TARGET, Outcome, bench_file, run, target_file

from daq.analyse import Asked, analyse
from daq.records import Kind
from drivers.bench import LoadedBench

COUNTER = """[detector]
factory = "simulators.memory:counter"
dead_time_ns = 30.0
dead_time_uncertainty_ns = 2.0
highest_rate_per_s = 2e6
longest_gate_s = 1.0
"""

# One photoelectron brings 1.6e-13 C on average, and its own scatter adds a fifth: 1.6e-13 C x 1.2.
AMMETER = """[detector]
factory = "simulators.memory:analogue"
kind = "analogue"
charge_unit_c = 1e-14
highest_current_a = 1e-8
read_noise_a = 1e-12
shot_noise_c = 1.92e-13
"""

REFERENCE = """
[reference]
factory = "simulators.memory:reference"
dead_time_ns = 30.0
dark_rate_per_s = 5.0
"""

UNSTEADY = [
    ("drift_fraction = 0.003", "drift_fraction = 0.15"),
    ("drift_period_s = 1800.0", "drift_period_s = 11.0"),
    ("strength_per_s = 420.0", "strength_per_s = 8400.0"),
    ("strength_per_s = 294.0", "strength_per_s = 5880.0"),
]


def ammeter_bench(folder: Path, more: str = "") -> LoadedBench:
    folder.mkdir(parents=True, exist_ok=True)
    return bench_file(folder, faults=more, changes=[(COUNTER, AMMETER)])


def pull(outcome: Outcome, truth_pm: float = 29.0) -> float:
    return (outcome.summary["separation_pm"] - truth_pm) / outcome.summary["separation_u_pm"]


def test_a_photocurrent_gives_the_verdict_of_the_counter(tmp_path: Path) -> None:
    """Same lamp, same light; only what the amplifier adds in noise costs more of it."""
    outcome = run(tmp_path, bench=ammeter_bench(tmp_path), seed=5)
    assert outcome.summary["verdict"] == "pair"
    assert outcome.summary["stop_reason"] == "goal-reached"
    assert abs(pull(outcome)) < 3.5
    assert outcome.summary["separation_u_pm"] <= 0.6
    assert analyse(outcome.file, Asked())["reproduces"] == "bit-equal"


def test_the_file_holds_the_current_in_whole_units_of_charge(tmp_path: Path) -> None:
    """16 units an electron: model and rate are in the same units, and the residuals scatter as stated."""
    outcome = run(tmp_path, bench=ammeter_bench(tmp_path), seed=6)
    with h5py.File(outcome.file) as file:
        data = file["entry/data"]
        rate, errors, model = (data[name][:] for name in ("rate", "rate_errors", "model"))
        assert data["counts"].dtype == np.int64
        assert file["entry/instrument/detector/type"].asstr()[()] == "photocurrent"
    peak_electrons_per_s = rate.max() / 16.0
    assert 200.0 < peak_electrons_per_s < 600.0
    chi2 = float(np.sum(((rate - model) / errors) ** 2))
    # eleven or twelve parameters; four standard deviations of chi square, the errors being those of the data
    assert abs(chi2 - (rate.size - 11)) < 4.0 * np.sqrt(2.0 * rate.size)
    assert abs(excess(outcome)) < 3.5


def test_too_much_current_closes_the_shutter_between_two_gates(tmp_path: Path) -> None:
    bench = bench_file(
        tmp_path,
        changes=[
            (COUNTER, AMMETER.replace("highest_current_a = 1e-8", "highest_current_a = 2e-11")),
        ],
    )
    outcome = run(tmp_path, bench=bench)
    assert outcome.summary["stop_reason"] == "over-light"
    assert not outcome.world.shutter.is_open


def test_an_overloaded_reading_is_recorded_and_never_summed(tmp_path: Path) -> None:
    """The amplifier's range is too low: the top of the line is flagged, and a gap in it decides nothing."""
    options = "\n[world.options.analogue]\nrange_a = 2e-11\noverload_a = 1e-9\n"
    target = target_file(tmp_path, QUICK_TARGET.replace("time_s = 400.0", "time_s = 60.0"))
    outcome = run(tmp_path, bench=ammeter_bench(tmp_path, options), target=target)
    flagged = [body for body in outcome.of_kind(Kind.POINT) if body["flags"]]
    assert flagged
    assert {flag for body in flagged for flag in body["flags"]} == {"clipped"}
    summed = sum(row[3] for row in outcome.machine.tally.snapshot().rows)
    light = sum(body["gate_ns"] for body in outcome.of_kind(Kind.POINT) if body["light"])
    assert summed == light - sum(body["gate_ns"] for body in flagged)
    assert outcome.summary["verdict"] == "undecided"


@pytest.mark.parametrize("seed", [11, 12, 13])
def test_a_reference_detector_divides_an_unsteady_lamp_out(tmp_path: Path, seed: int) -> None:
    """The lamp wavers by 15 % within a sweep: without the reference the fit is poor, with it as ever."""
    plain = run(tmp_path / "plain", bench=bench_file(_made(tmp_path / "plain"), changes=UNSTEADY), seed=seed)
    with_it = run(
        tmp_path / "with",
        bench=bench_file(_made(tmp_path / "with"), changes=[*UNSTEADY, (COUNTER, COUNTER + REFERENCE)]),
        seed=seed,
    )
    assert all(body["reference_counts"] > 0 for body in with_it.of_kind(Kind.POINT))
    assert with_it.summary["verdict"] == "pair"
    assert abs(pull(with_it)) < 3.5
    assert excess(with_it) < 3.5
    assert excess(plain) > 6.0, "or the lamp was not unsteady enough to show anything"
    assert analyse(with_it.file, Asked())["reproduces"] == "bit-equal"


def _made(folder: Path) -> Path:
    folder.mkdir(parents=True)
    return folder


def excess(outcome: Outcome) -> float:
    """By how many standard deviations Pearson's chi square of the pair exceeds its degrees of freedom."""
    pair = outcome.machine.conclusion["look"]["pair"]
    return float((pair["pearson_chi2"] - pair["dof"]) / np.sqrt(2.0 * pair["dof"]))


def test_a_reference_that_sees_no_lamp_is_told(tmp_path: Path) -> None:
    """Its path is closed, say: the counts are in the file, the reason in the summary."""
    options = "\n[world.options.reference]\nrate_per_s = 0.0\ndark_rate_per_s = 0.0\n"
    bench = bench_file(tmp_path, faults=options, changes=[(COUNTER, COUNTER + REFERENCE)])
    outcome = run(tmp_path, bench=bench)
    assert outcome.summary["stop_reason"] == "fault"
    assert "reference" in outcome.summary["cause"]
