"""The commands as users meet them: what they print, what they leave, how they end."""

from __future__ import annotations

import json
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import click
import h5py
import pytest
from cellar import QUICK_TARGET, bench_file, fault, target_file
from cellar import run as run_once
from click.testing import CliRunner
from commandline import ROOT, complaint, gratingd, start, surroundings
from demo_truth import ALLOWED, TRUTH, faults_of

from daq.cli import Exit
from daq.cli import gratingd as commands
from daq.records import Kind, StopReason
from daq.runfile import read_run

KEYS = {
    *("target", "verdict", "separation_pm", "separation_u_pm", "ratio", "ratio_u", "stop_reason"),
    *("bench_time_s", "points", "file"),
}
REFERENCE = Path(__file__).parent / "reference"
SHORT_TARGET = QUICK_TARGET.replace("time_s = 400.0", "time_s = 400.0\nlight_s = 12.5")


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Any:
    """`gratingd demo --json`, run once: what it printed, as JSON, and its folder."""
    folder = tmp_path_factory.mktemp("demo")
    done = gratingd("demo", "--json", "--out", "here", cwd=folder)
    assert done.returncode == 0, done.stderr
    assert done.stderr == "", "--json is for scripts"
    return json.loads(done.stdout)["runs"], folder / "here"


def night_file(folder: Path, targets: int = 1, text: str = SHORT_TARGET) -> Path:
    """A short night on a copy of the demo bench, with its files, in `folder`."""
    bench_file(folder)
    runs = ""
    for number in range(1, targets + 1):
        target_file(folder, text.replace("Quick pair", f"Quick {number}"), f"target-{number}.toml")
        runs += f'[[runs]]\ntarget = "target-{number}.toml"\n'
    path = folder / "night.toml"
    path.write_text(f'format = 1\nname = "Short night"\n{runs}', encoding="utf-8")
    return path


# ---- demo -----------------------------------------------------------------------------------------------


def test_the_demo_answers_what_its_world_holds(demo: Any) -> None:
    """Verdicts, separations and ratios of all nine against the truth of the shipped bench file."""
    runs, _ = demo
    assert list(faults_of(runs)) == []
    for run in runs:
        if run["target"] in TRUTH:
            assert run["stop_reason"] == "goal-reached"


def test_every_key_is_there_and_null_where_it_does_not_apply(demo: Any) -> None:
    runs, _ = demo
    for run in runs:
        assert set(run) >= KEYS
        assert run["stop_reason"] in set(StopReason)
        numbers = [run[key] for key in ("separation_pm", "separation_u_pm", "ratio", "ratio_u")]
        assert all(isinstance(n, float) for n in numbers) == (run["verdict"] == "pair")
        assert all(n is None for n in numbers) == (run["verdict"] != "pair")
        assert isinstance(run["points"], int)
        assert run["bench_time_s"] > 0


def test_the_files_of_the_demo_open_with_any_reader_and_with_ours(demo: Any) -> None:
    runs, folder = demo
    assert sorted(Path(run["file"]) for run in runs) == sorted(folder.glob("*.h5"))
    for run in runs:
        read = read_run(Path(run["file"]))
        assert read.complete
        assert len(read.points["counts"]) == run["points"]
        with h5py.File(run["file"]) as file:
            assert file.attrs["default"] == "entry"
            assert file["entry/title"].asstr()[()]
            assert file["entry/data/rate"].shape == file["entry/data/wavelength"].shape


def test_the_files_of_the_demo_have_no_complaint_from_the_nexus_checker(demo: Any) -> None:
    """nxcheck of nexusformat with the definitions of NIAC, the NeXus committee."""
    tool = shutil.which("nxcheck", path=str(Path(sys.executable).parent)) or shutil.which("nxcheck")
    assert tool is not None, "nexusformat is installed with the test extra"
    runs, _ = demo
    for run in runs:
        ran = subprocess.run([tool, run["file"]], capture_output=True, text=True, check=True)
        text = re.sub(r"\x1b\[[0-9;]*m", "", ran.stdout + ran.stderr)
        assert re.findall(r"Total number of (?:warnings|errors): (\d+)", text) == ["0", "0"], text


def test_analyse_makes_the_same_of_the_files_bit_for_bit(demo: Any, tmp_path: Path) -> None:
    runs, _ = demo
    done = gratingd("analyse", "--json", *(run["file"] for run in runs), cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    again = json.loads(done.stdout)["runs"]
    assert [run["reproduces"] for run in again] == ["bit-equal"] * 9
    for was, now in zip(runs, again, strict=True):
        assert {k: now[k] for k in KEYS} == {k: was[k] for k in KEYS}
    assert list(tmp_path.iterdir()) == []


def test_a_file_that_says_something_else_does_not_count_as_reproduced(demo: Any, tmp_path: Path) -> None:
    runs, _ = demo
    copy = tmp_path / "run.h5"
    shutil.copy(runs[0]["file"], copy)
    with h5py.File(copy, "r+") as file:
        counts = file["entry/scan/counts"]
        counts[...] = counts[...] + 1
    done = gratingd("analyse", "--json", copy, cwd=tmp_path)
    (run,) = json.loads(done.stdout)["runs"]
    assert run["reproduces"] != "bit-equal"
    assert run["reproduces"].startswith(("within", "different"))


def test_analyse_says_in_words_how_a_run_reproduces(demo: Any, tmp_path: Path) -> None:
    runs, _ = demo
    changed = tmp_path / "run.h5"
    shutil.copy(runs[0]["file"], changed)
    with h5py.File(changed, "r+") as file:
        counts = file["entry/scan/counts"]
        counts[...] = counts[...] + 1
    done = gratingd(
        "analyse", runs[1]["file"], changed, REFERENCE / "measured_pairs" / "ar_750.csv", cwd=tmp_path
    )
    assert done.returncode == 0, done.stderr
    first, second = done.stdout.splitlines()[-2:]
    assert first == f"{runs[1]['target']}: re-analysis: bit-equal to the recorded conclusion"
    assert re.fullmatch(
        rf"{runs[0]['target']}: re-analysis: (different from|within \S+ relative of) the recorded conclusion",
        second,
    )


def test_a_run_is_known_by_what_it_holds_and_takes_no_options(demo: Any, tmp_path: Path) -> None:
    runs, _ = demo
    spectrum = REFERENCE / "measured_pairs" / "ar_750.csv"
    renamed = tmp_path / "run.dat"
    shutil.copy(runs[0]["file"], renamed)
    done = gratingd("analyse", "--json", "run.dat", cwd=tmp_path)
    assert [run["reproduces"] for run in json.loads(done.stdout)["runs"]] == ["bit-equal"]
    for options, named in [
        (["--line", "313.155"], "--line"),
        (["--line", "313.155", "--known-line", "313.2"], "--line, --known-line"),
        (["--target", "hg-313-pair"], "--target"),
        (["--false-alarm", "0.001"], "--false-alarm"),  # also when it is the default that was typed
    ]:
        for files in ([runs[0]["file"]], ["run.dat"], [spectrum, "run.dat"]):
            told = complaint(gratingd("analyse", *files, *options, cwd=tmp_path), Exit.MISTAKE)
            assert "a run file (HDF5) is weighed again by the target in its own records" in told
            assert f"without {named};" in " ".join(told.split())
    assert list(tmp_path.iterdir()) == [renamed]


def test_a_journal_given_to_analyse_is_sent_to_recover(demo: Any, tmp_path: Path) -> None:
    runs, folder = demo
    journal = folder / f"{runs[0]['run_id']}.journal"
    shutil.copy(journal, tmp_path / "renamed.csv")
    (tmp_path / "empty.journal").touch()
    for file, where in [(journal, folder), ("renamed.csv", "."), ("empty.journal", ".")]:
        told = complaint(gratingd("analyse", file, cwd=tmp_path), Exit.MISTAKE)
        assert told.startswith(f"gratingd: {file}: is a journal, not a spectrum")
        assert told.endswith(f"gratingd recover {where}\n")


def test_the_demo_ends_with_its_table(tmp_path: Path) -> None:
    done = gratingd("demo", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    table = done.stdout.splitlines()
    assert table[0].split()[:2] == ["target", "verdict"]
    assert [line.split("  ")[0] for line in table[1:10]] == list(ALLOWED)
    assert table[-1] == f"Files in {tmp_path / 'gratingd-demo'}"
    assert "\x1b" not in done.stdout + done.stderr
    assert len(list((tmp_path / "gratingd-demo").glob("*.h5"))) == 9


# ---- night ----------------------------------------------------------------------------------------------


def test_a_night_again_in_the_same_folder_overwrites_nothing(tmp_path: Path) -> None:
    night = night_file(tmp_path)
    command = ("night", tmp_path / "bench.toml", night, "--confirm", "--out", "runs", "--json")
    first = json.loads(gratingd(*command, cwd=tmp_path).stdout)["runs"]
    before = {path: path.read_bytes() for path in (tmp_path / "runs").iterdir()}
    second = json.loads(gratingd(*command, cwd=tmp_path).stdout)["runs"]
    assert [run["run_id"][-2:] for run in first + second] == ["-1", "-2"]
    after = {path: path.read_bytes() for path in (tmp_path / "runs").iterdir()}
    assert {path: after[path] for path in before} == before
    assert len(after) == len(before) + 2


def test_two_nights_in_one_folder_at_once_the_second_is_refused(tmp_path: Path) -> None:
    night = night_file(tmp_path, text=QUICK_TARGET)
    command = ("night", tmp_path / "bench.toml", night, "--confirm", "--out", "runs", "--json")
    first = start(*command, "--real-time", cwd=tmp_path)
    try:
        lock = tmp_path / "runs" / ".gratingd.lock"
        while not (lock.exists() and lock.read_text()):
            assert first.poll() is None, first.communicate()
        told = complaint(gratingd(*command, cwd=tmp_path), Exit.BROKE_OFF)
        assert f"another gratingd (process {first.pid}) works in this folder" in told
    finally:
        first.terminate()
        out, _ = first.communicate(timeout=60)
    assert first.returncode == Exit.STOPPED
    assert [run["stop_reason"] for run in json.loads(out)["runs"]] == ["stopped-by-user"]


def test_a_fault_of_the_bench_ends_its_run_not_the_night(tmp_path: Path) -> None:
    night = night_file(tmp_path, targets=2)
    bench_file(tmp_path, faults=fault("detector", "gate", 5, "hardware"))
    done = gratingd("night", "bench.toml", night, "--confirm", "--out", "runs", "--json", cwd=tmp_path)
    assert done.returncode == Exit.BENCH_FAULT
    runs = json.loads(done.stdout)["runs"]
    assert [run["stop_reason"] for run in runs] == ["fault", "light-limit"]
    assert all(read_run(Path(run["file"])).complete for run in runs)


def test_an_internal_error_ends_the_night_with_its_own_code(tmp_path: Path) -> None:
    night = night_file(tmp_path, targets=2)
    bench_file(tmp_path, faults=fault("detector", "gate", 5, "crash"))
    done = gratingd("night", "bench.toml", night, "--confirm", "--out", "runs", "--json", cwd=tmp_path)
    assert done.returncode == Exit.BROKE_OFF
    assert [run["stop_reason"] for run in json.loads(done.stdout)["runs"]] == ["internal-error"]


def test_the_operator_and_the_seed_are_recorded(tmp_path: Path) -> None:
    night = night_file(tmp_path)
    options = ("--operator", "Ada Wick", "--seed", "42")
    done = gratingd("night", "bench.toml", night, "--confirm", *options, "--json", cwd=tmp_path)
    (run,) = json.loads(done.stdout)["runs"]
    assert Path(run["file"]).parent == tmp_path / "runs"
    head = read_run(Path(run["file"])).head
    assert (head["operator"], head["seed"]) == ("Ada Wick", 42)


# ---- analyse, recover -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "separation_pm", "tolerance_pm"),
    # Separations in vacuum from NIST ASD air wavelengths (memory). Tolerances: 2 %, for 2 to 3 pixels a width
    # and a dispersion nobody vouches for; for cadmium three times the 7 pm of a fit with all three lines.
    [
        (["hg_577_579.csv", "--line", "577.1198"], 2106.6, 42.0),
        (["ar_750.csv", "--line", "750.5935"], 1078.6, 22.0),
        (["ar_801.csv", "--line", "800.8359"], 863.1, 18.0),
        (["cd_361.csv", "--line", "361.1537", "--known-line", "361.548"], 236.6, 21.0),
    ],
)
def test_analyse_of_measured_pairs(
    arguments: list[str], separation_pm: float, tolerance_pm: float, tmp_path: Path
) -> None:
    file = REFERENCE / "measured_pairs" / arguments[0]
    done = gratingd("analyse", "--json", file, *arguments[1:], cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    (run,) = json.loads(done.stdout)["runs"]
    assert (run["verdict"], run["medium"], run["stop_reason"]) == ("pair", "vacuum", None)
    assert run["separation_pm"] == pytest.approx(separation_pm, abs=tolerance_pm)


def test_one_bad_file_among_good_ones_costs_only_itself(tmp_path: Path) -> None:
    good = REFERENCE / "measured_pairs" / "ar_750.csv"
    done = gratingd("analyse", "--json", "none.csv", good, cwd=tmp_path)
    assert done.returncode == Exit.MISTAKE
    assert [run["target"] for run in json.loads(done.stdout)["runs"]] == ["ar_750"]
    assert done.stderr == "gratingd: none.csv: there is no such file\n"


def test_recover_makes_the_file_of_a_journal_and_then_has_nothing_to_do(tmp_path: Path) -> None:
    night = night_file(tmp_path)
    command = ("night", "bench.toml", night, "--confirm", "--json")
    (run,) = json.loads(gratingd(*command, cwd=tmp_path).stdout)["runs"]
    file = Path(run["file"])
    whole = file.read_bytes()
    file.unlink()
    (recovered,) = json.loads(gratingd("recover", "runs", "--json", cwd=tmp_path).stdout)["runs"]
    assert recovered == run
    assert file.read_bytes() == whole
    done = gratingd("recover", "runs", cwd=tmp_path)
    assert (done.returncode, done.stdout) == (0, "nothing to recover in runs\n")
    printed = gratingd("recover", "runs", "--json", cwd=tmp_path).stdout
    assert json.loads(printed) == {"runs": [], "not_started": [], "problems": []}


def test_a_journal_that_is_none_costs_recover_only_itself(tmp_path: Path) -> None:
    night = night_file(tmp_path)
    done = gratingd("night", "bench.toml", night, "--confirm", "--json", cwd=tmp_path)
    (run,) = json.loads(done.stdout)["runs"]
    Path(run["file"]).unlink()
    (tmp_path / "runs" / "0-empty.journal").touch()
    (tmp_path / "runs" / "0-garbage.journal").write_bytes(b"\x00\xff" * 3000)
    done = gratingd("recover", "runs", "--json", cwd=tmp_path)
    assert done.returncode == Exit.BROKE_OFF
    assert json.loads(done.stdout)["runs"] == [run]
    assert "0-empty.journal: is empty: gratingd was killed before its first record" in done.stderr
    assert "0-garbage.journal: damaged" in done.stderr
    assert "Traceback" not in done.stderr


# ---- mistakes -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["night", "emberlite-3", "acceptance"], "benches/emberlight-3.toml"),
        (["night", "emberlight-3", "aceptance"], "nights/acceptance.toml"),
        (["measure", "emberlight-3", "hg-313"], "targets/hg-313-pair.toml"),
        (["measure", "emberlight-33", "hg-313-pair"], "benches/emberlight-3.toml"),
        (["analyse", "x.csv", "--target", "hg-31"], "targets/hg-313-pair.toml"),
        (["measure", "recorded-ar-750", "hg-313-pair"], "cannot reach it"),
        (["measure", "acceptance", "hg-313-pair"], "is a night (nights/acceptance.toml); a bench is wanted"),
        (["night", "emberlight-3", "/"], "/"),
        (["analyse", "x.csv", "--known-line", "361.5"], "--known-line needs --line"),
        (["analyse", "x.csv", "--line", "361", "--target", "cd-361-pair"], "not both"),
        (["analyse", "x.csv", "--false-alarm", "0"], "--false-alarm"),
        (["analyse"], "FILE"),
        (["demo", "--seed", "-1"], "--seed"),
        (["demo", "--out", "taken"], "taken: cannot be the folder of the files: File exists"),
        (
            ["demo", "--out", "taken/deeper"],
            "taken/deeper: cannot be the folder of the files: Not a directory",
        ),
        (["demo", "--out", "/proc/nowhere"], "/proc/nowhere: cannot be the folder of the files"),
        (["recover", "nowhere"], "nowhere: is no folder"),
        (["recover", "taken"], "taken: is no folder"),
        (["dmeo"], "No such command 'dmeo'"),
        (["demo", "--josn"], "No such option"),
    ],
    ids=lambda value: " ".join(value) if isinstance(value, list) else "",
)
def test_a_mistake_is_explained_and_leaves_nothing(arguments: list[str], said: str, tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("a file of somebody's\n")
    assert said in complaint(gratingd(*arguments, cwd=tmp_path), Exit.MISTAKE)
    assert [path.name for path in tmp_path.iterdir()] == ["taken"]
    assert (tmp_path / "taken").read_text() == "a file of somebody's\n"


def test_mistakes_in_settings_are_told_all_at_once(tmp_path: Path) -> None:
    text = QUICK_TARGET.replace("dwell_s = 0.25", "dwell_s = -1.0").replace("[goal]", "[gaol]")
    (tmp_path / "target.toml").write_text(text)
    told = complaint(gratingd("measure", "emberlight-3", "target.toml", cwd=tmp_path), Exit.MISTAKE)
    assert "target.toml: sweep.dwell_s = -1.0" in told
    assert "target.toml: gaol" in told
    assert not (tmp_path / "runs").exists()


def test_standard_output_on_a_full_disk(tmp_path: Path) -> None:
    with Path("/dev/full").open("w") as full:
        done = gratingd("analyse", REFERENCE / "measured_pairs" / "ar_750.csv", cwd=tmp_path, stdout=full)
    assert done.returncode == Exit.BROKE_OFF
    assert "No space left on device" in done.stderr
    assert "Traceback" not in done.stderr


def test_a_night_goes_on_when_nobody_reads_its_progress_any_more(tmp_path: Path) -> None:
    night = night_file(tmp_path)
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "w") as dead:
        done = gratingd("night", "bench.toml", night, "--confirm", cwd=tmp_path, stderr=dead)
    assert done.returncode == 0
    assert "light-limit" in done.stdout


def test_a_display_that_fails_at_every_record_is_asked_once(tmp_path: Path) -> None:
    """Each failure is a record, and a record is shown: asked again it would fail for ever."""

    def broken(notice: object) -> None:
        raise ValueError("no room on the screen")

    outcome = run_once(tmp_path, observe=broken)
    (told,) = outcome.of_kind(Kind.FAULT)
    assert "no room on the screen" in told["text"]
    assert outcome.summary["stop_reason"] == "internal-error"
    assert not outcome.world.shutter.is_open


# ---- Ctrl-C before and after ----------------------------------------------------------------------------

INTERRUPTED = """
import os, signal, sys
from daq import __main__ as program
import daq.cli
moment = sys.argv.pop(1)
class Interrupter:
    def find_spec(self, name, path=None, target=None):
        if name == moment:
            sys.meta_path.remove(self)
            os.kill(os.getpid(), signal.SIGINT)
sys.meta_path.insert(0, Interrupter())
program.main()
"""


def interrupted(moment: str, *arguments: str | Path, cwd: Path) -> subprocess.CompletedProcess[str]:
    """The program with a SIGINT at the moment it begins to import a module."""
    return subprocess.run(
        [sys.executable, "-P", "-c", INTERRUPTED, moment, *map(str, arguments)],
        cwd=cwd,
        env=surroundings(),
        capture_output=True,
        text=True,
        check=False,
    )


@pytest.mark.parametrize(
    ("moment", "command"),
    [
        *((moment, "measure emberlight-3 hg-313-pair") for moment in ("daq.files", "pydantic", "daq.carry")),
        *((moment, "recover .") for moment in ("numpy", "numpy.linalg", "h5py", "daq.progress", "asyncio")),
        ("numpy", "analyse none.csv"),
    ],
)
def test_ctrl_c_before_a_run_has_begun_is_one_line(moment: str, command: str, tmp_path: Path) -> None:
    """A KeyboardInterrupt amid the import of a compiled module could come out as an error of that module."""
    done = interrupted(moment, *command.split(), cwd=tmp_path)
    assert done.stderr == "gratingd: stopped by Ctrl-C; no run was under way\n"
    assert (done.returncode, done.stdout) == (Exit.STOPPED, "")
    assert list(tmp_path.iterdir()) == []


def test_ctrl_c_where_it_is_ignored_on_purpose_is_ignored(tmp_path: Path) -> None:
    """As in a shell's background job: the handler found at the start is left alone."""
    code = INTERRUPTED.replace("program.main()", "signal.signal(2, signal.SIG_IGN)\nprogram.main()")
    file = REFERENCE / "measured_pairs" / "ar_750.csv"
    done = subprocess.run(
        [sys.executable, "-P", "-c", code, "numpy", "analyse", file],
        cwd=tmp_path,
        env=surroundings(),
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert "ar_750" in done.stdout


def test_ctrl_c_after_the_last_run_does_not_cost_the_table(tmp_path: Path) -> None:
    night = night_file(tmp_path)
    done = interrupted("daq.table", "night", "bench.toml", night, "--confirm", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert done.stdout.splitlines()[-1] == f"Files in {tmp_path / 'runs'}"


# ---- help -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", sorted(commands.commands))
def test_help_names_every_option_and_argument(name: str) -> None:
    command = commands.commands[name]
    shown = CliRunner().invoke(commands, [name, "--help"])
    assert shown.exit_code == 0
    assert command.help is not None
    assert command.help.split()[0] in shown.output
    for parameter in command.params:
        if isinstance(parameter, click.Option):
            assert all(spelling in shown.output for spelling in parameter.opts)
            assert parameter.help, f"{name} {parameter.opts} is not explained"
        else:
            assert parameter.make_metavar(click.Context(command)) in shown.output


def test_help_lists_every_command_and_every_exit_code() -> None:
    shown = CliRunner().invoke(commands, ["--help"])
    assert shown.exit_code == 0
    assert all(re.search(rf"^  {name} ", shown.output, re.MULTILINE) for name in commands.commands)
    codes = {int(code) for code in re.findall(r"^ +(\d)  \S", shown.output, re.MULTILINE)}
    assert codes == set(Exit)


def test_the_version_is_that_of_the_package() -> None:
    shown = CliRunner().invoke(commands, ["--version"])
    declared = re.search(r'^version = "(.+)"', (ROOT / "pyproject.toml").read_text(), re.MULTILINE)
    assert declared is not None
    assert shown.output == f"gratingd, version {declared[1]}\n"


def test_help_and_mistakes_in_options_import_nothing_heavy(tmp_path: Path) -> None:
    """Not how long it takes, which is the machine's affair, but what it is spent on."""
    code = (
        "import sys; from daq import __main__ as program; sys.argv = ['gratingd', *sys.argv[1:]]\n"
        "try: program.main()\n"
        "except SystemExit: pass\n"
        "heavy = {'numpy', 'scipy', 'h5py', 'pydantic', 'rich', 'sqlite3', 'asyncio'}\n"
        "print(sorted(heavy & set(sys.modules)), file=sys.stderr)"
    )
    for arguments in (["--help"], ["measure", "--help"], ["demo", "--seed", "x"]):
        done = subprocess.run(
            [sys.executable, "-P", "-c", code, *arguments],
            cwd=tmp_path,
            env=surroundings(),
            capture_output=True,
            text=True,
            check=True,
        )
        assert done.stderr.splitlines()[-1] == "[]", arguments
