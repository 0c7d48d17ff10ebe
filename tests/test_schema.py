"""The JSON Schemas of the settings files: valid by the metaschema, true to the files that are shipped."""

from __future__ import annotations

import copy
import datetime
import functools
import json
import tomllib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from jsonschema import Draft202012Validator
from settings_samples import BY_HAND, CONCAVE, EQUIPPED, LITTROW, TABLE, TARGET

from daq.cli import gratingd
from daq.files import shipped_folder
from daq.schema import DIALECT, KINDS, schema_of

FOLDERS = {"bench": "benches", "target": "targets", "night": "nights"}
SHIPPED = [
    pytest.param(kind, path, id=f"{kind} {path.stem}")
    for kind, folder in FOLDERS.items()
    for path in sorted((shipped_folder() / folder).glob("*.toml"))
]


def as_json(value: Any) -> Any:
    """A TOML table in JSON's types: dates and times as text (RFC 3339), lists and tables as they are."""
    if isinstance(value, dict):
        return {key: as_json(item) for key, item in value.items()}
    if isinstance(value, list):
        return [as_json(item) for item in value]
    return (
        value.isoformat() if isinstance(value, datetime.datetime | datetime.date | datetime.time) else value
    )


@functools.cache
def validator_of(kind: str) -> Draft202012Validator:
    return Draft202012Validator(schema_of(kind), format_checker=Draft202012Validator.FORMAT_CHECKER)


def errors(kind: str, table: dict[str, Any]) -> list[str]:
    return [error.message for error in validator_of(kind).iter_errors(as_json(table))]


@pytest.mark.parametrize("kind", KINDS)
def test_a_schema_is_valid_by_the_metaschema(kind: str) -> None:
    schema = schema_of(kind)
    assert schema["$schema"] == DIALECT == Draft202012Validator.META_SCHEMA["$id"]
    Draft202012Validator.check_schema(schema)


@pytest.mark.parametrize(("kind", "path"), SHIPPED)
def test_every_shipped_file_is_valid_by_its_schema(kind: str, path: Path) -> None:
    assert errors(kind, tomllib.loads(path.read_text("utf-8"))) == []


@pytest.mark.parametrize("text", [BY_HAND, CONCAVE, EQUIPPED, LITTROW, TABLE], ids=len)
def test_every_kind_of_bench_is_valid_by_the_schema(text: str) -> None:
    assert errors("bench", tomllib.loads(text)) == []


MISTAKES: list[tuple[str, str, str, Callable[[dict[str, Any]], Any]]] = [
    ("unknown key", "target", TARGET, lambda t: t["sweep"].update(dwel_s=0.2)),
    ("unknown table", "target", TARGET, lambda t: t.update(windw={})),
    ("missing table", "target", TARGET, lambda t: t.pop("limits")),
    ("missing key", "target", TARGET, lambda t: t["sweep"].pop("dwell_s")),
    ("number in quotes", "target", TARGET, lambda t: t["sweep"].update(dwell_s="0.2")),
    ("number out of range", "target", TARGET, lambda t: t["sweep"].update(dwell_s=-1.0)),
    ("wavelength in angstrom", "target", TARGET, lambda t: t.update(wavelength_air_nm=313155.0)),
    ("another format", "target", TARGET, lambda t: t.update(format=2)),
    ("a word that is not on the list", "target", TARGET, lambda t: t["model"].update(widths="same")),
    ("null", "target", TARGET, lambda t: t["sweep"].update(step_pm=None)),
    ("unknown mount", "bench", EQUIPPED, lambda t: t["optics"].update(mount="echelle")),
    ("a key of another mount", "bench", EQUIPPED, lambda t: t["optics"].update(radius_mm=1000.0)),
    ("a factory without a colon", "bench", EQUIPPED, lambda t: t["drive"].update(factory="stepper")),
    ("grooves per inch", "bench", EQUIPPED, lambda t: t["optics"].update(groove_density_per_mm=14438.0)),
    ("a filter without a band", "bench", EQUIPPED, lambda t: t["filters"][0].pop("longest_nm")),
    ("no limits of travel", "bench", EQUIPPED, lambda t: t["drive"].pop("lowest_steps")),
    ("steps with a fraction", "bench", EQUIPPED, lambda t: t["drive"].update(lowest_steps=0.5)),
    ("no runs", "night", "", lambda t: t.update(runs=[])),
    ("confirmed by nobody", "night", "", lambda t: t.update(confirmed={"gain": 1.0})),
]
NIGHT = {"format": 1, "name": "Night", "runs": [{"target": "a.toml"}], "confirmed": {"operator": "I. Thorne"}}


@pytest.mark.parametrize(("what", "kind", "text", "spoil"), MISTAKES, ids=[row[0] for row in MISTAKES])
def test_a_mistake_is_invalid(
    what: str, kind: str, text: str, spoil: Callable[[dict[str, Any]], Any]
) -> None:
    table = tomllib.loads(text) if text else copy.deepcopy(NIGHT)
    assert errors(kind, table) == []
    spoil(table)
    assert errors(kind, table), what


def properties(schema: dict[str, Any]) -> Iterator[tuple[str, str, dict[str, Any]]]:
    for name, table in [("", schema), *schema["$defs"].items()]:
        for key, field in table.get("properties", {}).items():
            yield name, key, field


@pytest.mark.parametrize("kind", KINDS)
def test_every_table_is_described_and_every_number_with_a_unit_names_it(kind: str) -> None:
    schema = schema_of(kind)
    for name, table in schema["$defs"].items():
        assert table.get("description", "").strip(), name
    endings = {"_nm": "In nm.", "_pm": "In pm.", "_s": "In s.", "_um": "In um.", "_deg": "In degrees."}
    for name, key, field in properties(schema):
        assert "null" not in json.dumps(field), (name, key)
        unit = next((unit for end, unit in endings.items() if key.endswith(end)), None)
        if unit is not None and not key.endswith(("per_s", "lines_air_nm", "lines_vacuum_nm")):
            assert field["description"].endswith(unit), (name, key)


def test_the_units_of_charge_and_angle_are_those_of_the_key() -> None:
    tables = schema_of("bench")["$defs"]
    assert tables["Detector"]["properties"]["charge_unit_c"]["description"].endswith("In C.")
    assert tables["Drive"]["properties"]["steps_per_radian"]["description"].endswith("In steps per radian.")
    assert tables["PlaneOptics"]["properties"]["groove_density_per_mm"]["description"].endswith("In 1/mm.")


def test_another_kind_is_refused() -> None:
    with pytest.raises(ValueError, match="kind = 'lamp'; allowed: bench, target, night"):
        schema_of("lamp")


def test_the_command_prints_one_or_all() -> None:
    one = CliRunner().invoke(gratingd, ["schema", "target"])
    assert json.loads(one.output) == schema_of("target")
    every = CliRunner().invoke(gratingd, ["schema"])
    assert json.loads(every.output) == {kind: schema_of(kind) for kind in KINDS}
