"""What a target file can ask for beyond the plain pair, through the whole loop, against the world's truth."""

from __future__ import annotations

from pathlib import Path

import h5py
import pytest
from cellar import Outcome, bench_file, run, target_file

LAMP = "[world.options.lamp]\ncontinuum_per_s_per_nm = 120.0"


def target(wavelength_air_nm: float, *, model: str = "", window: str = "", goal: str, time_s: float) -> str:
    return f"""
format = 1
name = "Asked for"
wavelength_air_nm = {wavelength_air_nm}
{window}
[model]
{model}
[sweep]
dwell_s = 0.25
[goal]
{goal}
[limits]
time_s = {time_s}
"""


def line(wavelength_air_nm: float, strength_per_s: float, width_pm: float = 1.0) -> str:
    return (
        f"\n[[world.options.lamp.lines]]\nwavelength_air_nm = {wavelength_air_nm}\n"
        f"strength_per_s = {strength_per_s}\ndoppler_fwhm_pm = {width_pm}\n"
    )


def carried_out(folder: Path, text: str, more: str = "", **options: object) -> Outcome:
    folder.mkdir(parents=True, exist_ok=True)
    changes = options.pop("changes", ())
    bench = bench_file(folder, faults=more, changes=changes)  # type: ignore[arg-type]
    return run(folder, bench=bench, target=target_file(folder, text), **options)  # type: ignore[arg-type]


def test_a_doublet_no_sweep_spans_is_measured_in_two_windows(tmp_path: Path) -> None:
    """Sodium D, 588.9951 and 589.5924 nm in air (NIST ASD): 597.3 pm, thirty line widths, apart."""
    windows = "".join(
        f"[[windows]]\nwavelength_air_nm = {nm}\nhalf_width_fwhm = 3.0\n" for nm in (588.9951, 589.5924)
    )
    text = target(
        588.9951,
        model='widths = "equal"',
        goal="separation_uncertainty_pm = 0.8",
        time_s=1500.0,
    ).replace("[model]", f"{windows}[model]")
    outcome = carried_out(tmp_path, text, line(588.9951, 600.0) + line(589.5924, 300.0), seed=3)
    summary = outcome.summary
    assert (summary["verdict"], summary["stop_reason"]) == ("pair", "goal-reached")
    assert summary["separation_pm"] == pytest.approx(597.3, abs=4.0 * summary["separation_u_pm"])
    assert summary["ratio"] == pytest.approx(0.5, abs=4.0 * summary["ratio_u"])
    with h5py.File(outcome.file) as file:
        wavelength_nm = file["entry/data/wavelength"][:]
    assert not ((wavelength_nm > 589.1) & (wavelength_nm < 589.5)).any(), "no light is spent between them"


def test_absorption_lines_in_a_continuum_are_told_apart(tmp_path: Path) -> None:
    """Two lines of a cell before a lamp without lines: taken out of the light, not added to it."""
    cell = "".join(
        f"\n[[world.options.lamp.cell]]\nwavelength_air_nm = {nm}\n"
        f"optical_depth = {depth}\ndoppler_fwhm_pm = 8.0\n"
        for nm, depth in ((500.000, 2.0), (500.040, 1.2))
    )
    text = target(
        500.0,
        model='kind = "absorption"\nline_fwhm_pm = 10.0',
        window="[window]\nbelow_pm = 90.0\nabove_pm = 130.0",
        goal="separation_uncertainty_pm = 1.0",
        time_s=3600.0,
    )
    bright = [(LAMP, LAMP.replace("120.0", "40000.0"))]
    outcome = carried_out(tmp_path, text, cell, seed=4, changes=bright)
    summary = outcome.summary
    assert (summary["verdict"], summary["stop_reason"]) == ("pair", "goal-reached"), summary["evidence"]
    assert summary["separation_pm"] == pytest.approx(40.0, abs=4.0 * summary["separation_u_pm"] + 0.5)


def test_a_resolving_power_is_decided_not_waited_for(tmp_path: Path) -> None:
    """546 nm through 20 um slits: some 2.8e4. Asked for a little less the answer is yes; both end at once."""
    asked = (
        "resolving_power_at_least = {0}\ndecide = {{ smallest_separation_pm = 20.0, smallest_ratio = 0.2 }}"
    )
    text = target(546.074, model="line_fwhm_pm = 0.8", goal=asked.format(25000), time_s=3600.0)
    outcome = carried_out(tmp_path, text, seed=5)
    assert (outcome.summary["verdict"], outcome.summary["stop_reason"]) == ("single", "goal-reached")
    look = outcome.machine.conclusion["look"]
    (truth,) = [
        one for one in outcome.world.truth()["lines"] if one["wavelength_air_nm"] == pytest.approx(546.074)
    ]
    power = 1e3 * 546.074 / truth["recorded_fwhm_pm"]
    assert look["resolving_power"] == pytest.approx(power, abs=4.0 * look["resolving_power_u"])
    assert any("resolving power" in sentence for sentence in outcome.summary["evidence"])


def test_the_weaker_of_a_pair_is_weighed_to_the_ratio_asked_for(tmp_path: Path) -> None:
    text = target(313.155, goal="ratio_uncertainty = 0.03", time_s=3600.0)
    outcome = carried_out(tmp_path, text, seed=6)
    summary = outcome.summary
    assert (summary["verdict"], summary["stop_reason"]) == ("pair", "goal-reached")
    assert summary["ratio_u"] <= 0.03
    assert summary["ratio"] == pytest.approx(0.7, abs=4.0 * summary["ratio_u"])


def test_a_goal_out_of_reach_is_measured_all_the_same_where_the_target_says_so(tmp_path: Path) -> None:
    """0.0003 pm is below what the scale leaves; with "measure" the limits decide."""
    text = target(313.155, goal="separation_uncertainty_pm = 0.0003", time_s=60.0)
    text = text.replace("time_s = 60.0", 'time_s = 60.0\nwhen_out_of_reach = "measure"')
    outcome = carried_out(tmp_path, text, seed=7)
    assert outcome.summary["stop_reason"] == "time-limit"
    assert outcome.summary["points"] > 50
