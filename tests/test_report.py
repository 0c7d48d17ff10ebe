"""Reports: pages that need nothing but themselves, and tables for a spreadsheet."""

from __future__ import annotations

import csv
import json
import math
import re
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import cellar
import h5py
import numpy as np
import pytest
from commandline import complaint, gratingd, surroundings
from webpage import Page, check

from analysis.digits import with_uncertainty
from daq import report_csv, report_plots, report_tables, report_words
from daq.export import export
from daq.journal import Journal
from daq.notes import add_note
from daq.report import report
from daq.report_data import gather
from daq.runfile import read_run
from drivers.clock import RealClock
from drivers.errors import DataError

HOSTILE = """<script>alert("1")</script> & 'x' $5^2$ é"""

SINGLE_TARGET = """
format = 1
name = "Ar single"
wavelength_air_nm = 696.543
[model]
line_fwhm_pm = 1.6
[sweep]
dwell_s = 0.2
[goal.decide]
smallest_separation_pm = 18.0
smallest_ratio = 0.1
[limits]
time_s = 1200.0
"""

HOSTILE_TARGET = f"""
format = 1
name = '''{HOSTILE}'''
wavelength_air_nm = 361.051
[window]
below_pm = 110.0
above_pm = 470.0
[model]
known_lines_air_nm = [361.445]
[sweep]
dwell_s = 0.2
step_pm = 2.4
[goal]
separation_uncertainty_pm = 0.8
[limits]
time_s = 1200.0
"""


@dataclass(frozen=True)
class Night:
    """Three runs, the folder their report is in, and its pages."""

    pair: cellar.Outcome
    single: cellar.Outcome
    hostile: cellar.Outcome
    out: Path

    def page(self, run: cellar.Outcome) -> Page:
        return Page(self.out / f"{run.summary['run_id']}.html")

    @property
    def files(self) -> list[Path]:
        return [run.file for run in (self.pair, self.single, self.hostile)]


@pytest.fixture(scope="module")
def night(tmp_path_factory: pytest.TempPathFactory) -> Night:
    folder = tmp_path_factory.mktemp("night")
    faults = cellar.fault("drive", "move_to", 30, "link")
    pair = cellar.run(folder, bench=cellar.bench_file(folder, faults=faults))
    plain = cellar.bench_file(folder)
    single = cellar.run(folder, bench=plain, target=cellar.target_file(folder, SINGLE_TARGET))
    hostile = cellar.run(folder, bench=plain, target=cellar.target_file(folder, HOSTILE_TARGET))
    made = Night(pair, single, hostile, folder / "report")
    assert report(made.files, made.out, with_csv=True).problems == []
    return made


def part_of(run: cellar.Outcome, folder: Path, kept: int) -> Path:
    """The file of a run that broke off after so many records, under an identity of its own."""
    head = run.records[0].body | {"run_id": f"20310211T180000Z-part-{kept}"}
    path = folder / f"part-{kept}.journal"
    with Journal.create(path, head, threaded=False) as journal:
        for record in run.records[1:kept]:
            journal.append(record.kind, record.body)
    return export(path, path.with_suffix(".h5")).file


# ---- pages ----------------------------------------------------------------------------------------------


def test_every_page_is_well_formed_and_asks_nobody_for_anything(night: Night) -> None:
    pages = sorted(night.out.glob("*.html"))
    assert len(pages) == 4
    for path in pages:
        check(Page(path))


def test_the_numbers_on_a_page_are_those_of_the_run(night: Night) -> None:
    """Rounded to the last digit shown, which the uncertainty chooses."""
    summary = night.pair.summary
    shown = night.page(night.pair).classed("number")[0].text
    value, u = re.fullmatch(r"\s*(\S+) ± (\S+) pm\s*", shown).groups()  # type: ignore[union-attr]
    half = 0.5 * 10.0 ** -len(u.partition(".")[2])
    assert abs(float(value) - summary["separation_pm"]) <= half * (1 + 1e-9)
    assert abs(float(u) - summary["separation_u_pm"]) <= half * (1 + 1e-9)
    text = night.page(night.pair).text
    units = summary["separation"]
    for key in ("air_pm", "vacuum_pm", "per_cm", "mev", "ghz"):
        assert with_uncertainty(units[f"separation_{key}"], units[f"separation_u_{key}"]) in text
    assert with_uncertainty(summary["ratio"], summary["ratio_u"]) in text
    assert f"points {summary['points']} " in text
    for sentence in summary["evidence"]:
        assert sentence[1:] in text
    assert night.pair.records[0].body["bench"]["sha256"] in text


def test_a_night_names_every_run_with_its_verdict(night: Night) -> None:
    page = Page(next(night.out.glob("night-*.html")))
    rows = [element.text.split() for element in page.of("tr")[1:]]
    assert len(rows) == 3
    linked = [element.attributes["href"] for element in page.of("a")]
    for run in (night.pair, night.single, night.hostile):
        assert f"{run.summary['run_id']}.html" in linked
        words = report_words.verdict_in_words(run.summary["verdict"])
        assert any(words in " ".join(row) for row in rows)


def test_a_hostile_name_stays_text(night: Night) -> None:
    for page in (night.page(night.hostile), Page(next(night.out.glob("night-*.html")))):
        assert HOSTILE in page.of("body")[0].text
        assert not page.of("script")


def test_every_axis_says_what_it_shows_in_which_unit(night: Night) -> None:
    for run, wanted in (
        (night.pair, ["rate, counts per s", "residual, σ", "separation, pm", "light, s per pm"]),
        (night.single, ["rate, counts per s", "ratio to the line", "ratio excluded above", "air, hPa"]),
    ):
        words = night.page(run).plot_words()
        assert all(label in words for label in wanted), words
        assert "wavelength in air, pm from" in words
        assert "bench time, " in words
        assert not re.search(r"[+−]\d+(\.\d+)?e|1e[+−-]?\d", words), "no axis counts from a hidden offset"


def test_a_fault_is_told_in_words_at_its_time(night: Night) -> None:
    text = night.page(night.pair).text
    assert "Fault of drive: the link went down in move_to (call 30); the bench was prepared anew" in text
    assert "faults of the bench 1, see what happened" in text


def test_a_single_line_shows_what_it_excludes(night: Night) -> None:
    assert night.single.summary["verdict"] == "single"
    page = night.page(night.single)
    assert "What a second line is excluded to" in page.text
    assert "What a second line is excluded to" not in night.page(night.pair).text


def test_nothing_is_excluded_beside_one_line_that_does_not_hold(night: Night) -> None:
    """The curve would exclude what is seen."""
    for run, has_curve in ((night.pair, False), (night.single, True)):
        look = gather(run.file).look
        assert look is not None
        assert bool(look["exclusion"]) is has_curve
        assert report_tables.excludes(look) is has_curve


def test_cautions_and_the_way_back_stand_on_every_run(night: Night) -> None:
    for run in (night.pair, night.single):
        text = night.page(run).text
        assert f"gratingd analyse {run.file.name}" in text
        for word in ("Ultraviolet", "mercury", "kill", "Local codes"):
            assert word in text


def test_the_same_file_gives_the_same_bytes(night: Night, tmp_path: Path) -> None:
    report([night.single.file], tmp_path, with_csv=True)
    for ending in (".html", ".csv"):
        name = f"{night.single.summary['run_id']}{ending}"
        assert (tmp_path / name).read_bytes() == (night.out / name).read_bytes()


@pytest.mark.parametrize("kept", [1, 2, 3, 4, 70, -1])
def test_a_run_that_broke_off_has_a_page_that_says_so(night: Night, tmp_path: Path, kept: int) -> None:
    kept = len(night.pair.records) - 1 if kept < 0 else kept
    file = part_of(night.pair, tmp_path, kept)
    done = report([file], tmp_path / "out", with_csv=True)
    assert done.problems == []
    page = Page(tmp_path / "out" / f"20310211T180000Z-part-{kept}.html")
    check(page)
    assert "This run is not over, or broke off" in page.text


def test_a_run_without_a_look_has_a_page(tmp_path: Path) -> None:
    stop = [(30.0, lambda runner: runner.wish("stop", reason="stopped-by-user", source="terminal"))]
    run = cellar.run(tmp_path, wishes=stop)
    assert run.summary["flags"] == ["too-few-points"]
    report([run.file], tmp_path / "out", with_csv=True)
    page = Page(tmp_path / "out" / f"{run.summary['run_id']}.html")
    check(page)
    assert "Too few points were counted" in page.text
    assert "Wish from terminal: stop" in page.text
    assert "somebody stopped it" in page.text


def test_notes_are_shown_as_they_were_written(night: Night, tmp_path: Path) -> None:
    file = Path(shutil.copy(night.pair.file, tmp_path))
    said = "Seen <b>twice</b>.\nSlits were re-set & cleaned."
    add_note(file, said, author="<i>M.</i> Quillfeather", clock=RealClock())
    report([file], tmp_path / "out", with_csv=False)
    page = Page(tmp_path / "out" / f"{night.pair.summary['run_id']}.html")
    check(page)
    quote = page.of("blockquote")[0]
    assert said in quote.text
    assert "<i>M.</i> Quillfeather" in quote.text
    assert not page.of("b")


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours (W3C 2023, Web Content Accessibility Guidelines 2.2)."""

    def luminance(colour: str) -> float:
        parts = [int(colour[place : place + 2], 16) / 255.0 for place in (1, 3, 5)]
        linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    bright, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (bright + 0.05) / (dark + 0.05)


def test_text_can_be_read_on_its_ground(night: Night) -> None:
    """At least 4.5 to 1 (W3C 2023, WCAG 2.2, success criterion 1.4.3)."""
    style = night.page(night.pair).of("style")[0].text
    colour = dict(re.findall(r"--(\w+): (#[0-9a-f]{6})", style))
    grounds = [colour["paper"], colour["wash"], *re.findall(r"background: (#[0-9a-f]{6})", style)]
    light = [ground for ground in grounds if contrast(ground, "#000000") > 10.0]
    assert len(light) >= 6
    assert all(contrast(colour["ink"], ground) >= 4.5 for ground in light)
    assert all(contrast(colour["quiet"], colour[ground]) >= 4.5 for ground in ("paper", "wash"))
    assert contrast("#d3e2ec", colour["deep"]) >= 4.5
    assert contrast(report_plots.INK, "#ffffff") >= 4.5


# ---- what is drawn --------------------------------------------------------------------------------------


def test_the_fit_on_the_page_is_the_one_in_the_file(night: Night) -> None:
    for run in (night.pair, night.single, night.hostile):
        view = gather(run.file)
        assert view.points is not None
        with h5py.File(run.file) as file:
            data = file["entry/data"]
            assert np.array_equal(view.points.wavelength_nm, data["wavelength"][:])
            assert np.array_equal(view.points.rate_per_s, data["rate"][:])
            assert np.allclose(view.points.model_per_s, data["model"][:], rtol=1e-12)


def test_the_parts_of_a_fit_add_up_to_it(night: Night) -> None:
    curves = gather(night.hostile.file).curves
    assert curves is not None
    assert [part.label for part in curves.components] == ["line 1", "line 2", "known line, 361.447 nm"]
    total = curves.base + sum(part.rate_per_s - curves.base for part in curves.components)
    assert np.allclose(total, curves.whole, rtol=1e-9)
    assert all((part.rate_per_s - curves.base).max() > 10.0 for part in curves.components)


def test_residuals_scatter_as_the_fit_expects(night: Night) -> None:
    """Their mean square is chi square over the number of points, near 1 for Poisson counts."""
    view = gather(night.hostile.file)
    assert view.curves is not None
    residual = view.curves.residual_sigma
    # Wilson and Hilferty 1931: chi square of n has the standard deviation sqrt(2 n)
    assert abs(float(np.sum(residual**2)) - residual.size) < 5.0 * math.sqrt(2.0 * residual.size)


def test_time_on_a_page_is_the_run_s_own(night: Night) -> None:
    view = gather(night.pair.file)
    assert view.looks[-1].bench_s == pytest.approx(night.pair.summary["bench_time_s"], abs=1e-9)
    recorded = [body["horizon"] for body in night.pair.of_kind("look")]
    assert [look.points for look in view.looks] == [*recorded, night.pair.summary["points"]]
    assert all(a.bench_s <= b.bench_s for a, b in zip(view.events, view.events[1:], strict=False))


def test_the_strength_of_a_steady_lamp_is_one(night: Night) -> None:
    """The lamp of the cellar drifts by 0.3 %: every sweep is within its own uncertainty of the first."""
    for run in (night.single, night.hostile):
        strength = gather(run.file).drift.strength
        assert strength.value.size >= 2
        assert np.all(np.abs(strength.value - 1.0) < 5.0 * strength.u)


def test_light_by_wavelength_is_all_the_light() -> None:
    rng = np.random.default_rng(20310211)
    for size in (1, 2, 7, 60, 61, 997):
        wavelength_nm = 500.0 + np.cumsum(rng.uniform(1e-4, 3e-3, size))
        dwell_s = rng.uniform(0.1, 2.0, size)
        edges_nm, density = report_plots.light_density(wavelength_nm, dwell_s)
        assert len(density) <= report_plots.BARS
        assert np.sum(density * np.diff(edges_nm) * 1e3) == pytest.approx(dwell_s.sum(), rel=1e-6), size


def test_a_limit_between_two_places_lies_on_the_straight_line_of_its_logarithm() -> None:
    """0.1 at 10 pm and 0.001 at 40 pm: at 25 pm their geometric mean, 0.01."""
    curve = [
        {"separation_nm": 0.040, "ratio_limit": 0.001}, {"separation_nm": 0.010, "ratio_limit": 0.1},
        {"separation_nm": -0.020, "ratio_limit": 0.5}, {"separation_nm": -0.010, "ratio_limit": None},
    ]  # fmt: skip
    assert report_tables.limit_at(curve, 0.025) == pytest.approx(0.01)
    assert report_tables.limit_at(curve, 0.010) == pytest.approx(0.1)
    assert report_tables.limit_at(curve, -0.015) == math.inf
    assert report_tables.limit_at(curve, 0.050) is None
    assert report_tables.limit_at(curve, 0.0) is None


def test_no_window_system_is_asked_for(night: Night, tmp_path: Path) -> None:
    code = (
        "import sys; from pathlib import Path; from daq.report import report; "
        "report([Path(sys.argv[1])], Path(sys.argv[2]), with_csv=False); "
        "print('matplotlib.pyplot' in sys.modules, 'tkinter' in sys.modules)"
    )
    command = [sys.executable, "-W", "error", "-c", code, str(night.pair.file), str(tmp_path)]
    environment = {k: v for k, v in surroundings().items() if k != "DISPLAY"}
    done = subprocess.run(command, env=environment, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout, done.stderr) == (0, "False False\n", "")


# ---- tables for a spreadsheet ---------------------------------------------------------------------------


def read_csv(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8-sig", newline="") as stream:
        return list(csv.DictReader(stream))


def test_points_come_back_from_the_table_to_the_last_bit(night: Night) -> None:
    rows = read_csv(night.out / f"{night.pair.summary['run_id']}.csv")
    with h5py.File(night.pair.file) as file:
        data = file["entry/data"]
        for column, name in (
            ("wavelength_nm", "wavelength"), ("counts", "counts"), ("rate_per_s", "rate"),
            ("rate_u_per_s", "rate_errors"),
        ):  # fmt: skip
            assert [float(row[column]) for row in rows] == data[name][:].tolist()
        model = np.array([float(row["model_per_s"]) for row in rows])
        assert np.allclose(model, data["model"][:], rtol=1e-12)
        residual = np.array([float(row["residual_per_s"]) for row in rows])
        assert np.allclose(residual, data["rate"][:] - model, atol=1e-9)
    assert {row["medium"] for row in rows} == {"air"}


def test_answers_come_back_from_the_table(night: Night) -> None:
    rows = {row["run_id"]: row for row in read_csv(next(night.out.glob("night-*.csv")))}
    for run in (night.pair, night.single):
        row, summary = rows[run.summary["run_id"]], run.summary
        assert (row["target"], row["verdict"]) == (summary["target"], summary["verdict"])
        for key in ("separation_pm", "separation_u_pm", "ratio", "ratio_u"):
            assert row[key] == ("" if summary[key] is None else repr(summary[key]))
        if summary["separation"] is not None:
            assert float(row["separation_ghz"]) == summary["separation"]["separation_ghz"]
    assert rows[night.hostile.summary["run_id"]]["target"] == HOSTILE


@pytest.mark.parametrize("text", ["=1+1", "+cmd", "-2", "@SUM(A1)", "\t=1"])
def test_no_text_becomes_a_formula(text: str) -> None:
    """A leading apostrophe keeps a spreadsheet from carrying a text out (common practice)."""
    written = report_csv._written(("a", "b"), [[text, -2.5]])
    assert written.decode("utf-8-sig") == f"a,b\r\n'{text},-2.5\r\n"


# ---- files ----------------------------------------------------------------------------------------------


@pytest.fixture
def brief(night: Night, tmp_path: Path) -> Path:
    """A run that hardly began: its page is made quickly."""
    return part_of(night.pair, tmp_path, 3)


@pytest.mark.parametrize("name", ["20310211T180000Z-part-3.html", "20310211T180000Z-part-3.csv"])
def test_somebody_else_s_file_is_left_alone(brief: Path, tmp_path: Path, name: str) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / name).write_text("a letter to the customer")
    with pytest.raises(DataError, match=r"no report of gratingd; move it away"):
        report([brief], out, with_csv=True)
    assert (out / name).read_text() == "a letter to the customer"


def test_a_report_is_replaced_by_a_newer_one(brief: Path, tmp_path: Path) -> None:
    page = tmp_path / "out" / "20310211T180000Z-part-3.html"
    report([brief], page.parent, with_csv=True)
    whole = page.read_bytes()
    page.write_bytes(whole[: len(whole) // 2])
    report([brief], page.parent, with_csv=True)
    assert page.read_bytes() == whole
    assert not list(page.parent.glob("*.tmp-*"))


def test_one_bad_file_costs_none_of_the_others(brief: Path, tmp_path: Path) -> None:
    shutil.copy(brief, tmp_path / "copy.h5")
    (tmp_path / "bad.h5").write_text("no")
    done = gratingd("report", brief, "bad.h5", "copy.h5", "none.h5", brief, "-o", "out", cwd=tmp_path)
    assert done.returncode == 2
    assert "Traceback" not in done.stderr
    for words in ("bad.h5: is not an HDF5 file", "copy.h5: holds the same run as", "none.h5: no such file"):
        assert words in done.stderr
    assert len(done.stderr.splitlines()) == 3
    written = [Path(line).name for line in done.stdout.splitlines()]
    assert sorted(written) == sorted(path.name for path in (tmp_path / "out").iterdir())
    assert len(written) == 2


def test_a_run_identity_that_is_a_path_goes_nowhere(night: Night, tmp_path: Path) -> None:
    head = night.pair.records[0].body | {"run_id": "../../escaped"}
    with Journal.create(tmp_path / "run.journal", head, threaded=False):
        pass
    export(tmp_path / "run.journal", tmp_path / "run.h5")
    done = report([tmp_path / "run.h5"], tmp_path / "a" / "b" / "out", with_csv=True)
    assert [("cannot be part of a file name" in problem) for problem in done.problems] == [True]
    assert done.written == []


def test_a_file_is_no_folder(brief: Path, tmp_path: Path) -> None:
    with pytest.raises(DataError, match="is a file; give the name of a folder"):
        report([brief], brief, with_csv=False)


def test_a_folder_that_cannot_be_made_is_named(brief: Path, tmp_path: Path) -> None:
    (tmp_path / "out").write_text("a file")
    done = gratingd("report", brief, "-o", "out", cwd=tmp_path)
    assert "out" in complaint(done, 2)


# ---- words ----------------------------------------------------------------------------------------------


def test_every_stop_reason_has_words() -> None:
    from daq.records import StopReason

    assert set(report_words.STOPS) == {str(reason) for reason in StopReason}


def test_an_unknown_code_is_still_readable() -> None:
    assert report_words.flag_in_words("odd-thing") == "Odd thing."
    assert report_words.verdict_in_words("odd-thing") == "Odd thing"
    assert report_words.point_flag_in_words("odd-thing") == "odd thing"


def test_the_records_of_a_run_are_not_changed_by_a_report(night: Night) -> None:
    view = gather(night.pair.file)
    run = read_run(night.pair.file)
    assert json.dumps(view.summary) == json.dumps(run.conclusion["summary"])  # type: ignore[index]
