"""What is set by hand is confirmed before a run, by the night file, the command line or at the terminal."""

from __future__ import annotations

import contextlib
import os
import pty
from collections.abc import Sequence
from pathlib import Path

import pytest
from settings_samples import BY_HAND, EQUIPPED, TABLE, TARGET, changed

from daq.confirm import ByHandItem, ask_on_terminal, confirm, login_name, required
from daq.nightfile import LoadedNight, load_night
from drivers.bench import LoadedBench, load_bench, read_bench
from drivers.errors import SettingsError

NIGHT = 'format = 1\nname = "Night"\n[[runs]]\ntarget = "t.toml"\n'
CONFIRMED = """\
[confirmed]
operator = "I. Thorne"
entrance_slit_um = 20.0
exit_slit_um = 20.0
filter = "ultraviolet"
lamp = "mercury"
lamp_current_a = 0.4
lamp_serial = "EL-4471"
"""
EVERYTHING = [
    "entrance_slit_um",
    "exit_slit_um",
    "filter",
    "lamp",
    "lamp_current_a",
    "lamp_serial",
]


def bench(folder: Path, text: str = BY_HAND) -> LoadedBench:
    (folder / "b.toml").write_text(text)
    return load_bench(folder / "b.toml")


def night(folder: Path, confirmed: str) -> LoadedNight:
    (folder / "t.toml").write_text(TARGET)
    (folder / "n.toml").write_text(NIGHT + confirmed)
    return load_night(folder / "n.toml")


def test_all_that_no_device_sets_is_required() -> None:
    items = required(read_bench(BY_HAND, "b"))
    assert [item.key for item in items] == EVERYTHING
    assert [item.words for item in items[:3]] == [
        "entrance slit at 20 um",
        "exit slit at 20 um",
        "filter in the beam: ultraviolet",
    ]
    assert items[4] == ByHandItem("lamp_current_a", 0.4, "lamp current: 0.4 A")


def test_what_a_device_sets_is_not_required() -> None:
    assert [item.key for item in required(read_bench(EQUIPPED, "b"))] == ["high_voltage_v", "gain"]


def test_no_filter_by_hand_is_something_to_look_at_too() -> None:
    items = required(read_bench(changed(BY_HAND, 'filter = "ultraviolet"\n', ""), "b"))
    assert ByHandItem("filter", "none", "no filter in the beam") in items


def test_a_recorded_spectrum_requires_nothing(tmp_path: Path) -> None:
    (tmp_path / "s.csv").write_text("wavelength_air_nm,counts\n")
    loaded = bench(tmp_path, TABLE)
    assert required(loaded.bench) == ()
    assert confirm(loaded, None, by=None, ask=None) == {"how": "nothing to confirm", "who": None, "items": []}


def test_the_night_file_confirms_with_its_operator(tmp_path: Path) -> None:
    record = confirm(bench(tmp_path), night(tmp_path, CONFIRMED), by=None, ask=None)
    assert (record["how"], record["who"]) == ("night file", "I. Thorne")
    assert [item["key"] for item in record["items"]] == EVERYTHING
    assert record["items"][0] == {
        "key": "entrance_slit_um",
        "value": 20.0,
        "words": "entrance slit at 20 um",
    }


@pytest.mark.parametrize(
    ("old", "new", "wanted"),
    [
        (
            "entrance_slit_um = 20.0",
            "entrance_slit_um = 50.0",
            "confirmed.entrance_slit_um = 50.0: the bench file b.toml says 20; set the bench and mend the"
            " file that is wrong",
        ),
        (
            "exit_slit_um = 20.0\n",
            "",
            "confirmed.exit_slit_um: missing; exit slit at 20 um is set by hand and must be confirmed as"
            " exit_slit_um = 20",
        ),
        (
            'filter = "ultraviolet"',
            'filter = "long-pass 450"',
            "confirmed.filter = 'long-pass 450': the bench file b.toml says \"ultraviolet\"; set the bench"
            " and mend the file that is wrong",
        ),
        (
            'lamp_serial = "EL-4471"',
            'lamp_serial = "EL-4471"\ngain = 10.0',
            "confirmed.gain = 10.0: not set by hand at the bench 'Test bench'; leave it out, or state it in"
            " [by_hand] of the bench file",
        ),
    ],
    ids=["differs", "missing", "another filter", "too much"],
)
@pytest.mark.parametrize("asked", [False, True])
def test_a_night_file_that_does_not_fit_the_bench_is_refused(
    old: str, new: str, wanted: str, asked: bool, tmp_path: Path
) -> None:
    loaded = night(tmp_path, changed(CONFIRMED, old, new))
    with pytest.raises(SettingsError) as caught:
        confirm(bench(tmp_path), loaded, by=None, ask=(lambda items: "I. Thorne") if asked else None)
    assert caught.value.file == str(loaded.path)
    assert caught.value.problems == [wanted]


@pytest.mark.parametrize(
    ("old", "new", "wanted"),
    [
        ('operator = "I. Thorne"\n', "", "confirmed.operator: missing; must be text in quotes"),
        (
            "lamp_current_a = 0.4",
            "lamp_curent_a = 0.4",
            "confirmed.lamp_curent_a: unknown key 'lamp_curent_a'",
        ),
        (
            "exit_slit_um = 20.0",
            "exit_slit_um = -20.0",
            "confirmed.exit_slit_um = -20.0: must be a number above 0",
        ),
    ],
)
def test_a_mistake_in_the_table_confirmed(old: str, new: str, wanted: str, tmp_path: Path) -> None:
    with pytest.raises(SettingsError) as caught:
        night(tmp_path, changed(CONFIRMED, old, new))
    (problem,) = caught.value.problems
    assert problem.startswith(wanted)


def test_the_command_line_confirms_everything(tmp_path: Path) -> None:
    record = confirm(bench(tmp_path), None, by="W. Ashdown", ask=None)
    assert (record["how"], record["who"]) == ("command line", "W. Ashdown")
    assert [item["key"] for item in record["items"]] == EVERYTHING


def test_the_command_line_fills_what_the_night_file_leaves_out_but_does_not_overrule_it(
    tmp_path: Path,
) -> None:
    part = '[confirmed]\noperator = "I. Thorne"\nlamp = "mercury"\n'
    assert confirm(bench(tmp_path), night(tmp_path, part), by="W. Ashdown", ask=None)["who"] == "W. Ashdown"
    other = part.replace("mercury", "cadmium")
    with pytest.raises(SettingsError, match=r"confirmed\.lamp = 'cadmium': the bench file b\.toml says"):
        confirm(bench(tmp_path), night(tmp_path, other), by="W. Ashdown", ask=None)


def test_who_is_asked_sees_the_list_and_may_say_no(tmp_path: Path) -> None:
    shown: list[str] = []

    def yes(items: Sequence[ByHandItem]) -> str | None:
        shown.extend(item.key for item in items)
        return "W. Ashdown"

    record = confirm(bench(tmp_path), None, by=None, ask=yes)
    assert (record["how"], record["who"], shown) == ("asked", "W. Ashdown", EVERYTHING)
    with pytest.raises(SettingsError, match="not confirmed; set the bench, or mend its file") as caught:
        confirm(bench(tmp_path), None, by=None, ask=lambda items: None)
    assert caught.value.file == str(tmp_path / "b.toml")


def test_unattended_and_unconfirmed_nothing_begins(tmp_path: Path) -> None:
    for loaded in (None, night(tmp_path, "")):
        with pytest.raises(SettingsError) as caught:
            confirm(bench(tmp_path), loaded, by=None, ask=None)
        (problem,) = caught.value.problems
        assert problem.startswith(
            "a person must confirm what is set by hand (entrance slit at 20 um; exit slit"
        )
        assert "give --confirm" in problem
        assert "[confirmed]" in problem


@pytest.mark.parametrize(
    ("who", "typed", "confirmed_by"),
    [
        ("W. Ashdown", "yes", "W. Ashdown"),
        ("W. Ashdown", " YES ", "W. Ashdown"),
        (None, "yes", "unnamed"),
        ("W. Ashdown", "no", None),
        ("W. Ashdown", "", None),
        ("W. Ashdown", "y", None),
        ("W. Ashdown", "\x04", None),  # Ctrl-D
    ],
)
def test_on_a_terminal_only_a_yes_confirms(
    who: str | None,
    typed: str,
    confirmed_by: str | None,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """The list and the question go to standard error, so that what is printed can be piped on."""
    items = required(read_bench(BY_HAND, "b"))
    ours, theirs = pty.openpty()
    with open(ours, "r+b", buffering=0) as user:
        with open(theirs) as stdin, open(os.dup(theirs), "w") as stderr:
            monkeypatch.setattr("sys.stdin", stdin)
            monkeypatch.setattr("sys.stderr", stderr)
            user.write(f"{typed}\n".encode())
            ask = ask_on_terminal(who)
            assert ask is not None
            assert ask(items) == confirmed_by
        shown = ""
        with contextlib.suppress(OSError):  # Linux: the other side is closed, and all of it is read
            while True:
                shown += user.read(4096).decode()
    assert "Set by hand at this bench:" in shown
    assert "all of it is so" in shown
    assert all(f"- {item.words}" in shown for item in items)
    assert capsys.readouterr().out == ""


def test_who_has_logged_in_is_who_confirms_unless_told_otherwise(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("LOGNAME", "w.ashdown")
    assert login_name() == "w.ashdown"


def test_without_a_terminal_nobody_is_asked() -> None:
    assert ask_on_terminal("W. Ashdown") is None  # the tests' own standard input is none
