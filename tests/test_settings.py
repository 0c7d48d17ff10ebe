"""Settings: every mistake is told with its key, its value and what is allowed, all of them at once.

What counts as a good message is the project's own rule (file, key, value, what is allowed); TOML's syntax and
types are those of the TOML 1.0 specification.
"""

from __future__ import annotations

import datetime
import math
import string
import sys
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import Field
from settings_samples import BENCH, BY_HAND, CONCAVE, EQUIPPED, LITTROW, TABLE, TARGET, changed

from daq.nightfile import load_night
from daq.target import Target, load_target, read_target
from drivers.bench import load_bench, read_bench
from drivers.clock import RealClock
from drivers.errors import SettingsError
from drivers.factory import load_factories, load_object, make
from drivers.protocols import DriverContext
from drivers.settings import LARGEST_FILE_BYTES, ListOf, StrictModel, parse, parse_options
from drivers.slug import slug_of

MISTAKES = [
    pytest.param(kind, row, id=f"{kind}: {row['what']}")
    for kind, rows in tomllib.loads(
        (Path(__file__).parent / "settings_mistakes.toml").read_text("utf-8")
    ).items()
    for row in rows
]
SAMPLES = {
    "target": (read_target, TARGET),
    "bench": (read_bench, BENCH),
    "table_bench": (read_bench, TABLE),
    "equipped_bench": (read_bench, EQUIPPED),
    "bench_by_hand": (read_bench, BY_HAND),
    "concave_bench": (read_bench, CONCAVE),
    "littrow_bench": (read_bench, LITTROW),
}

SYNTAX_MISTAKES: list[tuple[str, bytes, list[str]]] = [
    (
        "decimal comma",
        b"format = 1\ndwell_s = 0,5\n",
        ["line 2, column 12: ", "'dwell_s = 0,5'", "use a decimal point: 0.5"],
    ),
    ("key twice", b"a = 1\nb = 2\na = 3\n", ["line 3, column 6: ", "the key 'a' is given twice"]),
    ("table twice", b"[a]\nx = 1\n[a]\ny = 2\n", ["line 3, column 3: ", "the table [a] is given twice"]),
    (
        "text without quotes",
        b"name = Hg pair\n",
        ["line 1, column 8: ", 'text stands in quotes: name = "Hg pair"'],
    ),
    ("no value", b"name =\n", ["line 1, column 7: ", "invalid value"]),
    ("open quote", b'name = "Hg\n', ["line 1, column 11: ", "a closing quote is missing"]),
    ("open list at the end", b"a = [1,", ["end of file: "]),
    ("empty", b"", ["is empty; a settings file begins with 'format = 1'"]),
    ("comments only", b"# nothing yet\n", ["is empty"]),
    ("not UTF-8", b'# ok\nname = "\xb5m"\n', ["line 2: byte 0xb5 is not UTF-8; save the file as UTF-8"]),
    ("number of 5000 digits", b"a = " + b"9" * 5000, ["is not usable TOML"]),
    ("nested without end", b"a = " + b"[" * 100_000, ["is not usable TOML"]),
    ("too large", b"#" * (LARGEST_FILE_BYTES + 1), ["is larger than 1048576 bytes"]),
]


def problems_of(reader: Any, text: str) -> list[str]:
    with pytest.raises(SettingsError) as caught:
        reader(text, "sample.toml")
    assert caught.value.file == "sample.toml"
    assert str(caught.value).startswith("sample.toml: ")
    return caught.value.problems


def ids(rows: list[Any]) -> list[str]:
    return [row[0] for row in rows]


def test_the_samples_themselves_are_right() -> None:
    assert read_bench(BENCH, "b").drive.highest_steps == 900_000
    mounts = {read_bench(text, "b").optics.mount for text in (TABLE, EQUIPPED, CONCAVE, LITTROW)}
    assert mounts == {"table", "plane", "concave", "littrow"}
    assert read_bench(BY_HAND, "b").by_hand.lamp == "mercury"
    assert read_target(TARGET, "t").wavelength_nm == 313.155


def test_a_file_of_another_kind_is_told_as_that_alone() -> None:
    night = 'format = 1\nname = "N"\n[[runs]]\ntarget = "t.toml"\n'
    for reader, text, wanted in (
        (read_target, BENCH, "is a bench file; a target file is wanted here"),
        (read_bench, TARGET, "is a target file; a bench file is wanted here"),
        (read_bench, night, "is a night file; a bench file is wanted here"),
    ):
        assert problems_of(reader, text) == [wanted]


@pytest.mark.parametrize(("kind", "row"), MISTAKES)
def test_one_mistake_is_told_once_with_key_value_and_what_is_allowed(kind: str, row: dict[str, str]) -> None:
    reader, sample = SAMPLES[kind]
    (problem,) = problems_of(reader, changed(sample, row["old"], row["new"]))
    assert problem.startswith(row["says"])


@pytest.mark.parametrize(
    ("kind", "old", "new"),
    [
        ("target", "= 313.155", "= 10"),
        ("target", "= 313.155", "= 100000"),
        ("target", "light_s = 900.0", "light_s = 1800.0"),
        ("target", "half_width_fwhm = 4.0", "below_pm = 8.0\nabove_pm = 8.0"),
        ("bench", "highest_rate_per_s = 2e6", "highest_rate_per_s = 1e7"),
        ("bench", "dead_time_ns = 30.0\ndead_time_uncertainty_ns = 2.0", "dead_time_ns = 0"),
        ("bench", "dead_time_uncertainty_ns = 2.0", "dead_time_uncertainty_ns = 30"),
        ("bench", "zero_order_steps = 0", "zero_order_steps = -1000"),
        ("bench", "included_angle_deg = 22.0", "included_angle_deg = 0"),
    ],
)
def test_the_edge_of_what_is_allowed_is_allowed(kind: str, old: str, new: str) -> None:
    reader, sample = SAMPLES[kind]
    reader(changed(sample, old, new), "sample.toml")


@pytest.mark.parametrize(("what", "raw", "wanted"), SYNTAX_MISTAKES, ids=ids(SYNTAX_MISTAKES))
def test_syntax_mistake(what: str, raw: bytes, wanted: list[str], tmp_path: Path) -> None:
    file = tmp_path / "t.toml"
    file.write_bytes(raw)
    with pytest.raises(SettingsError) as caught:
        load_target(file)
    (problem,) = caught.value.problems
    assert str(caught.value).startswith(f"{file}: ")
    for text in wanted:
        assert text in problem


def test_a_file_that_is_no_file(tmp_path: Path) -> None:
    with pytest.raises(SettingsError, match=r"absent\.toml: no such file"):
        load_bench(tmp_path / "absent.toml")
    with pytest.raises(SettingsError, match="is a directory; give the TOML file inside it"):
        load_bench(tmp_path)
    with pytest.raises(SettingsError, match="is not a regular file"):
        load_bench("/dev/null")
    with pytest.raises(SettingsError, match="cannot be read"):
        load_bench(tmp_path / ("x" * 300))


def test_a_byte_order_mark_is_no_mistake(tmp_path: Path) -> None:
    file = tmp_path / "t.toml"
    file.write_bytes(b"\xef\xbb\xbf" + TARGET.encode())
    assert load_target(file).text == TARGET


def test_all_mistakes_are_told_at_once() -> None:
    text = TARGET
    for old, new in [
        ("dwell_s = 0.2", "dwel_s = 0.2"),
        ("line_fwhm_pm = 1.5", "line_fwhm_pm = -1.5"),
        ("half_width_fwhm = 4.0", 'half_width_fwhm = "4,0"'),
        ("light_s = 900.0", "light_s = 9000.0"),
        ("[goal.decide]\nfalse_alarm = 1e-3", "[goal.decided]\nfalse_alarm = 1e-3"),
    ]:
        text = changed(text, old, new)
    problems = problems_of(read_target, text)
    assert [p.split(":")[0].split(" = ")[0] for p in problems] == [
        "window.half_width_fwhm",
        "model.line_fwhm_pm",
        "sweep.dwel_s",
        "goal.decided",
        "limits.light_s",
    ]
    assert "did you mean 'decide'?" in problems[3]


def test_a_huge_hexadecimal_number_is_told_not_a_crash() -> None:
    # Python refuses to print whole numbers of more than 4300 digits, but reads hexadecimal ones
    text = changed(TARGET, "dwell_s = 0.2", "dwell_s = 0x" + "f" * 6000)
    assert problems_of(read_target, text) == [
        "sweep.dwell_s = a number of 24000 bits: must be a number above 0 and at most 3600, in s"
    ]


def test_a_spectrum_or_driver_folder_that_is_not_there(tmp_path: Path) -> None:
    file = tmp_path / "b.toml"
    file.write_text(TABLE + '[paths]\ndrivers = ["mine"]\n')
    with pytest.raises(SettingsError) as caught:
        load_bench(file)
    assert caught.value.problems == [
        f"optics.spectrum = 's.csv': no such file, looked for {tmp_path / 's.csv'}",
        f"paths.drivers[0] = 'mine': no such folder, looked for {tmp_path / 'mine'}",
    ]


@pytest.mark.parametrize(
    ("text", "wanted"),
    [
        ("nowhere_at_all:counter", "there is no module 'nowhere_at_all'"),
        ("json.nowhere:counter", "there is no module 'json.nowhere'"),
        ("collections:Countr", "module 'collections' has no 'Countr'; did you mean 'collections:Counter'?"),
        ("math:pi", "'pi' is not a factory: it cannot be called"),
        ("needy:counter", "module 'needy' needs 'no_such_wire', which is not installed"),
        ("broken:counter", "importing 'broken' failed: ZeroDivisionError: division by zero"),
    ],
)
def test_a_factory_that_cannot_be_loaded(
    text: str, wanted: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "needy.py").write_text("import no_such_wire\n")
    (tmp_path / "broken.py").write_text("1 / 0\n")
    monkeypatch.syspath_prepend(str(tmp_path))
    with pytest.raises(SettingsError) as caught:
        load_object(text, "b.toml", "drive.factory")
    assert str(caught.value).startswith(f"b.toml: drive.factory = {text!r}: {wanted}")


def test_a_lab_brings_its_own_driver(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "lab_turret.py").write_text("def turret(options, context):\n    return options\n")
    file = tmp_path / "b.toml"
    file.write_text(
        changed(BENCH, "collections:OrderedDict", "lab_turret:turret") + '[paths]\ndrivers = ["mine"]\n'
    )
    monkeypatch.setattr(sys, "path", list(sys.path))
    factories = load_factories(load_bench(file))
    assert set(factories) == {"drive", "detector", "shutter"}
    assert factories["drive"]({"a": 1}, None) == {"a": 1}
    assert sys.path[-1] == str(tmp_path / "mine")


def test_all_bad_factories_are_told_at_once(tmp_path: Path) -> None:
    file = tmp_path / "b.toml"
    text = changed(BENCH, "collections:Counter", "collections:Countr")
    file.write_text(changed(text, "collections:deque", "no_shutter:any"))
    with pytest.raises(SettingsError) as caught:
        load_factories(load_bench(file))
    assert [p.split(" = ")[0] for p in caught.value.problems] == ["detector.factory", "shutter.factory"]


class Turret(StrictModel):
    speed_per_s: float
    label: str = ""


def turret(options: dict[str, Any], context: DriverContext) -> Turret:
    return parse_options(Turret, options, f"{context.role}.options")


def test_a_drivers_own_options_are_told_with_the_bench_file_and_the_whole_key() -> None:
    context = DriverContext(clock=RealClock(), role="world", seed=1, folder=".")
    assert make(turret, {"speed_per_s": 3}, context, "b.toml", None).speed_per_s == 3.0
    with pytest.raises(SettingsError) as caught:
        make(turret, {"sped_per_s": 3, "label": 4}, context, "b.toml", None)
    assert str(caught.value).splitlines() == [
        'b.toml: world.options.label = 4: must be text in quotes "..."',
        "b.toml: world.options.sped_per_s: unknown key 'sped_per_s'; did you mean 'speed_per_s'?",
    ]


class Gauge(StrictModel):
    inverted: bool = False
    port: int | str = 1
    kind: complex = 0j
    tags: dict[str, int] = Field(default_factory=dict)
    zones: ListOf[Turret] = ()


def test_other_kinds_of_option_are_told_in_plain_words_too() -> None:
    options = {"inverted": 1, "port": 1.5, "kind": "x", "tags": {"a": "x"}, "zones": [{"speed_per_s": {}}]}
    with pytest.raises(SettingsError) as caught:
        parse_options(Gauge, options, "ambient.options")
    assert caught.value.problems == [
        "inverted = 1: must be true or false",
        'port = 1.5: must be a whole number or text in quotes "..."',
        "kind = 'x': must be of the kind <class 'complex'>",
        "tags.a = 'x': must be a whole number",
        "zones[0].speed_per_s: must be a number, in 1/s",
    ]


NIGHT = 'format = 1\nname = "Night"\n[[runs]]\ntarget = "a.toml"\n[[runs]]\ntarget = "b.toml"\n'


def test_a_night_tells_the_mistakes_of_all_its_targets_once(tmp_path: Path) -> None:
    (tmp_path / "a.toml").write_text(changed(TARGET, "dwell_s = 0.2", "dwell_s = 0"))
    night = tmp_path / "night.toml"
    night.write_text(NIGHT + '[[runs]]\ntarget = "a.toml"\n')
    with pytest.raises(SettingsError) as caught:
        load_night(night)
    assert caught.value.problems == [
        "runs[0].target = 'a.toml': sweep.dwell_s = 0: must be a number above 0 and at most 3600, in s",
        "runs[1].target = 'b.toml': no such file",
    ]


def test_a_night_keeps_equal_targets_apart_by_their_ordinals(tmp_path: Path) -> None:
    (tmp_path / "a.toml").write_text(TARGET)
    (tmp_path / "b.toml").write_text(TARGET)
    (tmp_path / "night.toml").write_text(NIGHT)
    loaded = load_night(tmp_path / "night.toml")
    assert [(run.ordinal, run.target.slug) for run in loaded.runs] == [
        (1, "hg-313-nm-pair"),
        (2, "hg-313-nm-pair"),
    ]


@pytest.mark.parametrize(
    ("old", "new", "wanted"),
    [
        ('target = "b.toml"', 'target = ""', "runs[1].target = '': must be text in quotes"),
        ('target = "b.toml"', "target = 3", "runs[1].target = 3: must be text in quotes"),
        (
            'target = "b.toml"',
            'targt = "b.toml"',
            "runs[1].targt: unknown key 'targt'; did you mean 'target'?",
        ),
        ('"Night"', '"-"', "name = '-': must hold a letter or a digit: files are named after it"),
        (NIGHT[NIGHT.index("[[") :], "", "runs: missing; must be a list of at least 1"),
        (NIGHT[NIGHT.index("[[") :], "runs = []", "runs = []: must be a list of at least 1"),
        (NIGHT[NIGHT.index("[[") :], "runs = 4", "runs = 4: must be a list of at least 1"),
    ],
)
def test_night_mistake(old: str, new: str, wanted: str, tmp_path: Path) -> None:
    night = tmp_path / "night.toml"
    night.write_text(changed(NIGHT, old, new))
    with pytest.raises(SettingsError) as caught:
        load_night(night)
    (problem,) = caught.value.problems
    assert problem.startswith(wanted)


def test_defaults_are_the_documented_ones() -> None:
    target = parse(
        Target,
        {
            "format": 1,
            "name": "x",
            "wavelength_vacuum_nm": 500,
            "sweep": {"dwell_s": 1},
            "goal": {"separation_uncertainty_pm": 1},
            "limits": {"time_s": 10},
        },
        "t",
    )
    assert target.medium == "vacuum"
    assert target.wavelength_nm == 500.0
    assert isinstance(target.wavelength_nm, float)
    ((centre_nm, window),) = target.stretches
    assert (centre_nm, window.half_width, window.outright_pm) == (500.0, 4.0, None)
    model = target.model
    assert (model.line_fwhm_pm, model.shape, model.widths, model.background) == (
        1.0,
        "voigt",
        "equal",
        "slope",
    )
    assert target.goal.decide is None
    decision = target.goal.decision
    assert (decision.false_alarm, decision.smallest_ratio, decision.miss_probability) == (1e-3, 0.1, 0.05)
    text = changed(BENCH, "[scale]\nrelative_uncertainty = 2e-5\n", "")
    bench = read_bench(changed(text, "[shape]\nallowance = 0.01\n", ""), "b")
    assert (bench.scale.relative_uncertainty, bench.shape.allowance) == (1e-4, 0.01)


def test_virtual_start_in_nanoseconds_is_exact() -> None:
    # 2031-02-11T18:00:00Z is 1928599200 s after the epoch (GNU date -u -d '2031-02-11 18:00' +%s)
    assert read_bench(BENCH, "b").time.start_utc_ns == 1_928_599_200_000_000_000
    real = changed(changed(BENCH, "start_utc = 2031-02-11T18:00:00Z\n", ""), '"virtual"', '"real"')
    assert read_bench(real, "b").time.start_utc_ns is None
    text = changed(BENCH, "18:00:00Z", "18:00:00.123457Z")
    assert read_bench(text, "b").time.start_utc_ns == 1_928_599_200_123_457_000


def test_slugs_are_plain() -> None:
    assert slug_of("Hg 313 nm pair") == "hg-313-nm-pair"
    assert slug_of("  Ångström: δ-Line / No. 5 ") == "angstrom-line-no-5"
    assert slug_of("../../etc") == "etc"
    assert slug_of("日本") == ""
    assert len(slug_of("x" * 500)) <= 60


@given(st.text(max_size=80))
def test_a_slug_is_safe_in_a_file_name(name: str) -> None:
    slug = slug_of(name)
    assert set(slug) <= set(string.ascii_lowercase + string.digits + "-")
    assert not slug.startswith("-")
    assert not slug.endswith("-")


Toml = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text(max_size=8)
    | st.datetimes(timezones=st.sampled_from([None, datetime.UTC])),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
    max_leaves=8,
)
KEYS = [
    "format",
    "name",
    "wavelength_air_nm",
    "window",
    "model",
    "sweep",
    "goal",
    "limits",
    "decide",
    "time_s",
]


@settings(max_examples=200, deadline=None)
@given(
    st.dictionaries(st.sampled_from(KEYS), st.dictionaries(st.sampled_from(KEYS), Toml, max_size=3) | Toml)
)
def test_any_table_is_a_target_or_a_settings_error(table: dict[str, Any]) -> None:
    """Whatever stands in a file, the answer is a target or a SettingsError whose problems can be printed."""
    problems: list[str] | None = None
    try:
        target = parse(Target, {"format": 1} | table, "t.toml")
    except SettingsError as error:
        problems = error.problems
    if problems is None:
        assert math.isfinite(target.wavelength_nm)
    else:
        assert problems
        assert all(problem.strip() and problem.isprintable() for problem in problems)
