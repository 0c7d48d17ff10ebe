"""JSON Schemas of the settings files, for editors that complete and check while one types.

They are made from the models that read the files, so they cannot lag behind. Rules between keys are not in
them: `gratingd check` tells those.
"""

from __future__ import annotations

import ast
import inspect
import textwrap
from collections.abc import Iterator
from typing import Any

from pydantic import BaseModel

from drivers.complaints import models_in, unit_of

KINDS = ("bench", "target", "night")
DIALECT = "https://json-schema.org/draft/2020-12/schema"


def schema_of(kind: str) -> dict[str, Any]:
    """The schema of one kind of settings file (draft 2020-12), as JSON types. ValueError for another kind."""
    model = _model(kind)
    made: dict[str, Any] = model.model_json_schema(mode="validation")
    docs = {found.__name__: _field_docs(found) for found in _models(model)}
    for name, table in [(model.__name__, made), *made.get("$defs", {}).items()]:
        _describe(table, docs.get(name, {}))
    return {"$schema": DIALECT} | made


def _model(kind: str) -> type[BaseModel]:
    from daq.nightfile import Night
    from daq.target import Target
    from drivers.bench import Bench

    models: dict[str, type[BaseModel]] = {"bench": Bench, "target": Target, "night": Night}
    if kind not in models:
        raise ValueError(f"kind = {kind!r}; allowed: {', '.join(models)}")
    return models[kind]


def _models(model: type[BaseModel]) -> Iterator[type[BaseModel]]:
    """The model and every model inside it."""
    yield model
    for field in model.model_fields.values():
        for inner in models_in(field.annotation):
            yield from _models(inner)


def _field_docs(model: type[BaseModel]) -> dict[str, str]:
    """The text below each field in the model's source, those of the models it builds on included."""
    docs: dict[str, str] = {}
    for kind in reversed(model.__mro__):
        if not issubclass(kind, BaseModel) or not kind.__module__.startswith(("daq.", "drivers.")):
            continue
        (body,) = ast.parse(textwrap.dedent(inspect.getsource(kind))).body
        assert isinstance(body, ast.ClassDef)
        for field, text in zip(body.body, body.body[1:], strict=False):
            if (
                isinstance(field, ast.AnnAssign)
                and isinstance(field.target, ast.Name)
                and isinstance(text, ast.Expr)
                and isinstance(text.value, ast.Constant)
            ):
                docs[field.target.id] = " ".join(str(text.value.value).split())
    return docs


def _describe(table: dict[str, Any], docs: dict[str, str]) -> None:
    """Say in a table's schema what its keys mean and which unit they are in; TOML has no null, so none
    here."""
    if "description" in table:
        table["description"] = table["description"].replace("`", "")
    for key, field in table.get("properties", {}).items():
        _without_null(field)
        field.pop("title", None)
        field.pop("discriminator", None)
        unit = unit_of(key) if _holds_numbers(field) else ""
        said = [docs.get(key, "").replace("`", ""), f"In {unit}." if unit else ""]
        text = " ".join(part for part in said if part)
        if text:
            field["description"] = text


def _without_null(field: dict[str, Any]) -> None:
    if "default" in field and (field["default"] is None or isinstance(field["default"], dict)):
        del field["default"]  # a table's own keys tell their defaults
    kept = [branch for branch in field.get("anyOf", ()) if branch != {"type": "null"}]
    if len(kept) == 1 and "anyOf" in field:
        del field["anyOf"]
        field.update(kept[0])
    elif kept:
        field["anyOf"] = kept


def _holds_numbers(field: dict[str, Any]) -> bool:
    branches = [field, *field.get("anyOf", ())]
    kinds = {part.get("type") for part in branches} | {part.get("items", {}).get("type") for part in branches}
    return bool(kinds & {"number", "integer"})
