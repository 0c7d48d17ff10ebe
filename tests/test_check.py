"""What `gratingd check` finds: mistakes that one file alone does not show, and numbers that are those of
theory."""

from __future__ import annotations

import json
import math
import tomllib
from dataclasses import asdict
from pathlib import Path
from random import Random
from typing import Any

import commandline
import pytest
from check_samples import SAMPLES
from click.testing import CliRunner
from settings_samples import changed

from daq.check import checked, findings_of
from daq.check_bench import bench_findings, bench_numbers
from daq.check_numbers import target_numbers
from daq.check_optics import reach_nm
from daq.check_orders import elements_named
from daq.check_text import check_text
from daq.cli import gratingd
from daq.files import resolve
from daq.finding import Finding, worst_first
from daq.target import Target, load_target, read_target
from drivers.bench import Bench, load_bench, read_bench
from drivers.errors import SettingsError
from drivers.settings import parse

MISTAKES = [
    pytest.param(name, row, id=f"{name}: {row['what']}")
    for name, rows in tomllib.loads(
        (Path(__file__).parent / "check_mistakes.toml").read_text("utf-8")
    ).items()
    for row in rows
]


def pair(name: str, bench: Any = (), target: Any = ()) -> tuple[Bench, Target]:
    bench_text, target_text = SAMPLES[name]
    for old, new in bench:
        bench_text = changed(bench_text, old, new)
    for old, new in target:
        target_text = changed(target_text, old, new)
    return read_bench(bench_text, "b.toml"), read_target(target_text, "t.toml")


def found(bench: Bench, target: Target) -> list[Finding]:
    """Everything told about both, once, without the notes."""
    every = dict.fromkeys([*findings_of(bench, target, None)[0], *bench_findings(bench, None)])
    return [finding for finding in every if finding.severity != "note"]


def check(*names: str) -> dict[str, Any]:
    """The JSON that the command prints about shipped files."""
    done = CliRunner().invoke(gratingd, ["check", *names, "--json"])
    report: dict[str, Any] = json.loads(done.output)
    assert done.exit_code == (2 if report["problems"] else 0)
    return report


@pytest.mark.parametrize("name", SAMPLES)
def test_a_bench_and_a_target_that_fit_have_nothing_against_them(name: str) -> None:
    assert found(*pair(name)) == []


@pytest.mark.parametrize(("name", "row"), MISTAKES)
def test_a_mistake_between_bench_and_target_is_told_with_its_numbers(name: str, row: dict[str, Any]) -> None:
    findings = found(*pair(name, row.get("bench", ()), row.get("target", ())))
    assert (row["severity"], row["says"]) in [(finding.severity, str(finding)) for finding in findings]
    if row["severity"] == "caution":
        assert not any(finding.severity == "problem" for finding in findings if finding.key in row["says"])


def test_sweeps_that_drift_through_a_period_average_it_and_are_not_refused() -> None:
    """65 steps, dithered by 16, 32 and 48: of 16 phases each point of a sweep meets the next one."""
    told = check("emberlight-7", "hg-577-579")["targets"][0]["findings"]
    assert told
    assert not [row for row in told if "at the same phase" in row["text"]]


def test_a_filter_that_is_not_there_is_told_once() -> None:
    bench, target = pair("equipped", target=[('filter = "ultraviolet"', 'filter = "violet"')])
    assert [finding.key for finding in found(bench, target)] == ["setup.filter"]


def test_there_are_as_many_mistakes_as_a_lab_would_make() -> None:
    assert len(MISTAKES) >= 30


def test_findings_come_worst_first() -> None:
    kinds = ("note", "problem", "caution", "note", "problem")
    findings = [Finding(kind, "bench", str(n), "") for n, kind in enumerate(kinds)]  # type: ignore[arg-type]
    assert [finding.key for finding in worst_first(findings)] == ["1", "4", "2", "0", "3"]


def test_a_rowland_mount_resolves_twice_as_much_in_order_2_focused_for_each() -> None:
    """Slit images are w d/(|m| R) wide on the circle, r = R cos (Rowland 1883, Phil. Mag. 16, 197), so the
    ratio of the slit-limited resolving powers is that of the orders."""
    one, two = (check(f"concave-order-{order}", "na-589-pair") for order in (1, 2))
    assert (one["problems"], two["problems"]) == (0, 0)
    first, second = (report["targets"][0]["numbers"] for report in (one, two))
    # at 588.995 nm, 0.3 nm from the focus, the arms are those of the circle to 1e-4 only
    assert second["slit_resolving_power"] / first["slit_resolving_power"] == pytest.approx(2.0, rel=1e-3)
    at_focus = [report["bench"]["numbers"]["places"][0]["slit_resolving_power"] for report in (one, two)]
    assert at_focus[1] / at_focus[0] == pytest.approx(2.0, rel=1e-12)
    assert first["exit_bandpass_pm"] == pytest.approx(1e3 * 60e-3 * (1e6 / 568.4) / 1000.0, rel=1e-3)


def test_the_bench_focused_for_the_other_order_is_refused() -> None:
    report = check("concave-order-1", "na-589-order-2")
    (problem,) = [row for row in report["targets"][0]["findings"] if row["severity"] == "problem"]
    assert problem["key"] == "optics.focused_nm"
    assert "focused for 589.3 nm in order 1; at 588.998 nm in order 2 it blurs a line by" in problem["text"]
    assert "focused_order = 2" in problem["text"]
    # over 3 nm by ray tracing of a 1 m, 50 mm wide grating focused for 589 nm in order 1 and turned to 2
    assert 3000.0 < report["targets"][0]["numbers"]["blur_pm"] < 5000.0
    assert check("concave-order-2", "na-589-order-2")["problems"] == 0


def test_the_numbers_of_a_plane_mount_are_those_of_the_textbook() -> None:
    """m lambda = 2 d cos K sin phi; d cos beta/(m f); w d cos alpha/(m f) (e.g. Hutley 1982, Diffraction
    Gratings)."""
    report = check("emberlight-3", "hg-313-pair")
    numbers = report["targets"][0]["numbers"]
    spacing_nm, half = 1e6 / 1200.0, math.radians(11.0)
    wavelength_nm = numbers["wavelength_nm"]
    assert wavelength_nm == pytest.approx(313.155, abs=0.003)  # the bench's air is warmer than standard air
    phi = math.asin(wavelength_nm / (2.0 * spacing_nm * math.cos(half)))
    alpha, beta = phi + half, phi - half
    assert numbers["rotation_deg"] == pytest.approx(math.degrees(phi))
    assert numbers["dispersion_nm_per_mm"] == pytest.approx(spacing_nm * math.cos(beta) / 870.0)
    assert numbers["entrance_bandpass_pm"] == pytest.approx(1e3 * 0.02 * spacing_nm * math.cos(alpha) / 870.0)
    assert numbers["anamorphism"] == pytest.approx(math.cos(alpha) / math.cos(beta))
    assert numbers["theoretical_resolving_power"] == pytest.approx(1200.0 * 96.0)
    assert numbers["drive_step_pm"] == pytest.approx(
        1e3 * 2.0 * spacing_nm * math.cos(half) * math.cos(phi) / 2291831.1805
    )
    assert numbers["fwhm_pm"] / numbers["step_pm"] == pytest.approx(numbers["points_per_fwhm"])
    reach_nm = 2.0 * spacing_nm * math.cos(half) * math.sin(1100000 / 2291831.1805)
    for order, (lowest_nm, highest_nm) in report["bench"]["numbers"]["reach_nm"].items():
        assert (lowest_nm, highest_nm) == (0.0, pytest.approx(reach_nm / int(order)))


def test_the_microstep_error_is_the_measured_one() -> None:
    """5 % of a full step of sixteen at 4.3 pm a microstep is +-3.4 pm, a local slope of 7.9 %; of a
    separation s the rms over the phase is a sqrt(2) |sin(pi s/P)|: elementary."""
    edits = [("period_steps = 80000.0\namplitude_steps = 1.5", "period_steps = 64.0\namplitude_steps = 0.8")]
    bench, target = pair("by_hand", edits)
    _, view, stretches = findings_of(bench, target, None)
    assert view is not None
    numbers = target_numbers(bench, view, target, stretches)
    (error,) = numbers["periodic_errors"]
    step_pm = numbers["drive_step_pm"]
    assert error["slope"] == pytest.approx(0.0785, abs=1e-4)
    assert error["amplitude_pm"] == pytest.approx(0.8 * step_pm)
    phases = [2.0 * math.pi * k / 360 for k in range(360)]
    turn = 2.0 * math.pi * 25.0 / (64.0 * step_pm)
    moved = [0.8 * step_pm * (math.sin(phase + turn) - math.sin(phase)) for phase in phases]
    rms_pm = math.sqrt(sum(pm * pm for pm in moved) / len(moved))
    assert error["separation_error_pm"] == pytest.approx(rms_pm)
    assert numbers["separation_floor_drive_pm"] == pytest.approx(rms_pm)


def test_overlaps_and_what_the_filter_does_to_them() -> None:
    """m1 lambda1 = m2 lambda2 (textbook)."""
    numbers = check("concave-order-2", "na-589-pair")["targets"][0]["numbers"]
    product_nm = 2 * numbers["wavelength_nm"]
    assert [(row["order"], row["is_stopped"]) for row in numbers["overlaps"]] == [
        (3, True),
        (4, True),
        (5, True),
        (6, True),
    ]
    for row in numbers["overlaps"]:
        assert row["order"] * row["wavelength_nm"] == pytest.approx(product_nm)
    assert numbers["free_spectral_range_nm"] == pytest.approx(numbers["wavelength_nm"] / 2)


def test_expected_counts_and_the_rough_time_to_the_goal() -> None:
    """A Gaussian's area is 1.0645 of height times width; twice the goal's precision takes four times the
    light where no floor is near (Poisson)."""
    numbers = check("concave-order-1", "na-589-pair")["targets"][0]["numbers"]
    assert numbers["counts_at_peak_per_point"] == pytest.approx(400.0 * 0.2)
    assert numbers["counts_of_line_per_sweep"] == pytest.approx(
        80.0 * 1.0645 * numbers["points_per_fwhm"], rel=1e-4
    )
    assert numbers["dead_time_load"] == pytest.approx(400.0 * 30e-9)
    times = []
    for goal in ("0.25", "0.125"):  # each more than one sweep
        bench, target = pair("by_hand", (), [("uncertainty_pm = 0.5", f"uncertainty_pm = {goal}")])
        _, view, stretches = findings_of(bench, target, None)
        assert view is not None
        times.append(target_numbers(bench, view, target, stretches)["time_to_goal_s"])
    assert times[1] / times[0] == pytest.approx(4.0, rel=0.01)


def test_the_forecast_of_a_wide_pair_is_the_root_of_its_counts() -> None:
    """Far apart, each centre is known to sigma/sqrt(N) (Cramer-Rao), and the separation to the root of their
    sum."""
    edits = [
        ("smallest_separation_pm = 25.0", "smallest_separation_pm = 150.0"),
        ("half_width_fwhm = 5.0", "half_width_fwhm = 13.0"),
    ]
    bench, target = pair("by_hand", (), edits)
    _, view, stretches = findings_of(bench, target, None)
    assert view is not None
    numbers = target_numbers(bench, view, target, stretches)
    sigma_pm = numbers["fwhm_pm"] / math.sqrt(8.0 * math.log(2.0))
    counts = numbers["counts_of_line_per_sweep"]
    ideal_pm = sigma_pm * math.sqrt(1.0 / counts + 1.0 / (0.5 * counts))
    # a background of a thousandth of the peak costs a little
    assert ideal_pm < numbers["separation_u_one_sweep_pm"] < 1.03 * ideal_pm


SPREAD = {
    "groove_density_per_mm": (10.0, 6500.0),
    "ruled_width_mm": (1.0, 900.0),
    "focal_length_mm": (5.0, 9e4),
    "radius_mm": (10.0, 1e5),
    "focused_nm": (10.0, 1e4),
    "entrance_slit_um": (1e-3, 2e4),
    "exit_slit_um": (1e-3, 2e4),
    "steps_per_radian": (6e5, 1e11),
    "steps_per_unit_sine": (1e6, 1e11),
    "longest_nm": (300.0, 1e5),
    "wavelength_air_nm": (10.0, 1e5),
    "line_fwhm_pm": (1e-6, 1e6),
    "expected_peak_rate_per_s": (1e-9, 1e12),
    "step_pm": (1e-6, 1e5),
    "smallest_separation_pm": (1e-6, 1e6),
}


def scattered(table: dict[str, Any], random: Random) -> dict[str, Any]:
    """The table with some of its numbers anywhere in the range that their key allows."""
    changed_table: dict[str, Any] = {}
    for key, value in table.items():
        low, high = SPREAD.get(key, (1.0, 1.0))
        if isinstance(value, dict):
            changed_table[key] = scattered(value, random)
        elif low < high and random.random() < 0.3:
            changed_table[key] = low * (high / low) ** random.random()
        elif key == "order" and random.random() < 0.3:
            changed_table[key] = random.randint(1, 100)
        else:
            changed_table[key] = value
    return changed_table


@pytest.mark.parametrize("seed", [20310211, 20310212])
def test_whatever_numbers_stand_in_the_files_there_is_a_report(seed: int) -> None:
    """Numbers that no lab has must end in findings, not in an exception; the seed replays them."""
    print(f"seed {seed}")
    random = Random(seed)
    reported = 0
    for _ in range(150):
        bench_text, target_text = SAMPLES[random.choice(list(SAMPLES))]
        try:
            bench = parse(Bench, scattered(tomllib.loads(bench_text), random), "b.toml")
            target = parse(Target, scattered(tomllib.loads(target_text), random), "t.toml")
        except SettingsError:
            continue
        findings, view, stretches = findings_of(bench, target, None)
        numbers = {} if view is None else target_numbers(bench, view, target, stretches)
        tables = [
            {"name": bench.name, "numbers": bench_numbers(bench, None), "findings": []},
            {"name": target.name, "numbers": numbers, "findings": [asdict(each) for each in findings]},
        ]
        report = {"bench": tables[0], "targets": tables[1:], "problems": 0}
        assert json.loads(json.dumps(report, allow_nan=False)) == report
        assert max(len(line) for line in check_text(report).splitlines()) <= 100
        assert view is not None or any(finding.severity == "problem" for finding in findings)
        reported += 1
    assert reported > 75


def numbers_of(bench_edits: Any = (), target_edits: Any = ()) -> dict[str, Any]:
    bench, target = pair("by_hand", bench_edits, target_edits)
    _, view, stretches = findings_of(bench, target, None)
    assert view is not None
    return target_numbers(bench, view, target, stretches)


@pytest.mark.parametrize("window", ["below_pm = 20.0\nabove_pm = 120.0", "below_pm = 120.0\nabove_pm = 20.0"])
def test_the_companion_is_looked_for_where_the_window_has_room(window: str) -> None:
    """On its longer side: the forecast is that of a window wide on both, but for the foot of one line."""
    both = numbers_of((), [("half_width_fwhm = 5.0", "below_pm = 120.0\nabove_pm = 120.0")])
    one = numbers_of((), [("half_width_fwhm = 5.0", window)])
    wanted_pm = both["separation_u_one_sweep_pm"]
    assert one["separation_u_one_sweep_pm"] == pytest.approx(wanted_pm, rel=0.01)


def test_nothing_is_forecast_of_a_companion_outside_the_window() -> None:
    """No time of ages is told: the companion looked for stands 60 pm outside of a window of 50 pm."""
    away = numbers_of(
        (),
        [
            ("half_width_fwhm = 5.0", "below_pm = 20.0\nabove_pm = 30.0"),
            ("smallest_separation_pm = 25.0", "smallest_separation_pm = 90.0"),
        ],
    )
    assert away.get("time_to_goal_s") is None
    assert away.get("separation_u_one_sweep_pm") is None


def test_one_sweep_is_forecast_without_a_goal_and_with_one_that_no_light_reaches() -> None:
    """What a sweep is worth is the light's affair; the time to a goal needs one that can be reached."""
    plain = numbers_of()
    assert plain["time_to_goal_s"] > 0.0
    for edits in (
        ((), [("separation_uncertainty_pm = 0.5\n", "")]),
        ([("relative_uncertainty = 2e-5", "relative_uncertainty = 0.03")], ()),
    ):
        numbers = numbers_of(*edits)
        assert numbers["separation_u_one_sweep_pm"] == plain["separation_u_one_sweep_pm"]
        assert numbers["time_to_goal_s"] is None


@pytest.mark.parametrize(("time_s", "is_told"), [(102.0, True), (112.0, False)])
def test_three_sweeps_are_enough_to_see_drift(time_s: float, is_told: bool) -> None:
    """A sweep takes 35.5 s: 139 points of 0.25 s, and 4 dwells of 0.2 s for the dark."""
    limits = ("time_s = 1800.0\nlight_s = 1500.0", f"time_s = {time_s}")
    findings = found(*pair("by_hand", target=[limits]))
    assert ("limits.time_s" in [finding.key for finding in findings]) is is_told


def test_a_drive_that_turns_further_than_light_can_follow_reaches_what_the_grating_does() -> None:
    """The included angle of 22 degrees leaves 79 of rotation, 2 d cos^2 11 degrees (grating equation)."""
    bench, target = pair("by_hand", [("highest_steps = 900000", "highest_steps = 1700000")])
    _, view, _ = findings_of(bench, target, None)
    assert view is not None
    longest_nm = 2e6 / 1200.0 * math.cos(math.radians(11.0)) ** 2
    assert reach_nm(bench, view.mount) == (0.0, pytest.approx(longest_nm, rel=1e-6))


@pytest.mark.parametrize(
    ("new", "said"),
    [
        (
            "line_fwhm_pm = 1.5\nline_fwhm_at_most_pm = 25.0",
            "model.line_fwhm_at_most_pm: 25 pm is wider than a line as recorded (20 pm) and tells nothing",
        ),
        ("line_fwhm_pm = 1.5\nline_fwhm_at_most_pm = 15.0", None),
        (
            "line_fwhm_pm = 25.0",
            "model.line_fwhm_pm: the source line (25 pm) is wider than the slits' bandpass (19.2 pm): wider"
            " slits would cost little and give more light",
        ),
    ],
)
def test_what_is_no_mistake_but_worth_knowing_is_a_note(new: str, said: str | None) -> None:
    findings, _, _ = findings_of(*pair("by_hand", target=[("line_fwhm_pm = 1.5", new)]), None)
    assert [str(finding) for finding in findings if finding.severity == "note"] == ([said] if said else [])


@pytest.mark.parametrize(("grooves_per_period", "told"), [(4000.0, ["-1", "+1"]), (1500.0, [])])
def test_a_ghost_is_told_once_and_only_inside_the_window(grooves_per_period: float, told: list[str]) -> None:
    """lambda/p from the line (Rowland 1893): 78 pm at 4000 grooves a period, 209 pm at 1500; the window ends
    100 pm from it. The lamp's own entry of the line is no second parent."""
    ghosts = f"[optics.ghosts]\ngrooves_per_period = {grooves_per_period}\nfirst_order_fraction = 0.02\n"
    findings, _, _ = findings_of(*pair("by_hand", [("[scale]", ghosts + "[scale]")]), None)
    texts = [finding.text for finding in findings if "ghost number" in finding.text]
    assert [text.split("ghost number ")[1][:2] for text in texts] == told


def test_elements_are_known_by_symbol_and_by_name() -> None:
    assert elements_named("Hg 313 nm pair") == ("Hg",)
    assert elements_named("mercury and Cadmium") == ("Cd", "Hg")
    assert elements_named("Emberlight arc") == ()  # no letters out of the middle of words


def test_a_recorded_spectrum_is_checked_too() -> None:
    report = check("recorded-ar-750", "ar-750")
    assert report["problems"] == 0
    assert report["targets"][0]["numbers"]["medium"] == "vacuum"
    assert report["bench"]["numbers"]["confirmed_by_hand"] == []
    refused = check("recorded-ar-750", "hg-313-pair")
    assert "its recording holds 749.772 to 752.492 nm" in refused["targets"][0]["findings"][0]["text"]


@pytest.mark.parametrize(
    ("bench", "target"),
    [
        ("emberlight-3", "hg-313-pair"),
        ("concave-order-1", "na-589-pair"),
        ("concave-order-1", "na-589-order-2"),
        ("littrow-analogue", "ar-696-single"),
        ("goods-in", "hg-436-goods-in"),
        ("recorded-cd-361", "cd-361-recorded"),
    ],
)
def test_the_text_holds_every_finding_and_no_line_is_too_long(bench: str, target: str) -> None:
    report = checked(load_bench(resolve(bench, "benches")), [load_target(resolve(target, "targets"))])
    text = check_text(report)
    assert max(len(line) for line in text.splitlines()) <= 100
    flat = " ".join(text.split())
    for table in (report["bench"], *report["targets"]):
        for finding in table["findings"]:
            assert " ".join(f"{finding['key']}: {finding['text']}".split()) in flat
    assert ("PROBLEM" in text) == (report["problems"] > 0)


def test_the_command_ends_with_2_when_a_run_would_be_refused_and_opens_no_device(tmp_path: Path) -> None:
    """The skeleton's drivers do not exist yet: to open a device would fail."""
    good = commandline.gratingd("check", "lab-skeleton", "ar-696-single", cwd=tmp_path)
    assert (good.returncode, good.stderr) == (0, "")
    assert good.stdout.rstrip().endswith("No problem found.")
    assert "there is no module 'lab_drive'" in " ".join(good.stdout.split())
    bad = commandline.gratingd("check", "lab-skeleton", "hg-313-pair", cwd=tmp_path)
    assert bad.returncode == 2
    assert "blocks the target (313.0" in " ".join(bad.stdout.split())
    assert bad.stdout.rstrip().endswith("1 problem found.")
    missing = commandline.complaint(commandline.gratingd("check", "no-such-bench", cwd=tmp_path), 2)
    assert "no such file" in missing
