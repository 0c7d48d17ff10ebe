"""What is wrong with a settings table, in the words of the person who typed it."""

from __future__ import annotations

import datetime
import difflib
import re
import types
from collections.abc import Iterator, Mapping, Sequence
from typing import Annotated, Any, Literal, Union, get_args, get_origin

import annotated_types as bounds
from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

Models = list[type[BaseModel]]

MARKS = {"bench": "optics", "target": "goal", "night": "runs"}
"""A table by which each kind of settings file is known, whatever else is wrong with it."""

UNITS = {
    "per_s": "1/s",
    "per_mm": "1/mm",
    "per_radian": "steps per radian",
    "per_unit_sine": "steps per unit of the sine",
    "charge_unit_c": "C",
    "shot_noise_c": "C",
    "s": "s",
    "ns": "ns",
    "nm": "nm",
    "pm": "pm",
    "um": "um",
    "mm": "mm",
    "deg": "degrees",
    "steps": "steps",
    "fwhm": "FWHM",
    "percent": "percent",
    "pa": "Pa",
    "c": "degrees Celsius",
    "k": "K",
    "m": "m",
    "a": "A",
    "v": "V",
}


def complaints(model: type[BaseModel], data: Mapping[str, Any], error: ValidationError) -> list[str]:
    """One line per problem, in the order of the file's keys as the models list them.

    A missing key whose misspelt form stands in the same table is not told twice. Of a file of another kind
    only that is told.
    """
    mixed_up = _mixed_up(model, data)
    if mixed_up:
        return [mixed_up]
    lines: list[str] = []
    explained: set[str] = set()
    missing: list[tuple[str, str]] = []
    for entry in error.errors(include_url=False):
        kind, value = entry["type"], entry.get("input")
        place = _Place.find(model, data, entry["loc"], keep_last=kind == "missing")
        if kind == "cross_checks":
            for key, text in entry["ctx"]["problems"]:
                path = ".".join(part for part in (place.path, key) if part)
                lines.append(_join(path, _looked_up(value, key), text))
        elif kind == "missing":
            missing.append((place.path, f"{place.path}: missing; must be {place.allowed()}"))
        elif kind == "extra_forbidden":
            line, meant = _unknown_key(model, place)
            lines.append(line)
            explained.add(meant)
        elif kind in ("union_tag_not_found", "union_tag_invalid"):
            tag = str(entry["ctx"]["discriminator"]).strip("'")
            path = f"{place.path}.{tag}"
            allowed = f"must be one of {_tags(place.models, tag)}"
            given = value.get(tag) if isinstance(value, Mapping) else None
            lines.append(f"{path}: missing; {allowed}" if given is None else _join(path, given, allowed))
        elif kind == "worded":
            allowed = entry["msg"].partition(";")[0] if _comma(place.items) else entry["msg"]
            lines.append(_join(place.path, value, allowed + _comma(place.items)))
        else:
            lines.append(_join(place.path, value, f"must be {place.allowed()}{_hint(value, place)}"))
    lines += [line for path, line in missing if path not in explained]
    return list(dict.fromkeys(lines))  # each branch of a union tells its own


def _mixed_up(model: type[BaseModel], data: Mapping[str, Any]) -> str:
    """ "is a bench file; a target file is wanted here", or ""."""
    wanted = [kind for kind, table in MARKS.items() if table in model.model_fields]
    given = [kind for kind, table in MARKS.items() if table in data]
    if len(wanted) != 1 or len(given) != 1 or wanted == given:
        return ""
    return f"is a {given[0]} file; a {wanted[0]} file is wanted here"


class _Place:
    """Where in the table a problem sits: the path as typed, what it takes, the models at that level."""

    def __init__(self, models: Models) -> None:
        self.path = ""
        self.models = models
        self.table: Models = models
        self.key = ""
        self.annotation: Any = dict
        self.metadata: Sequence[Any] = ()
        self.items: Sequence[Any] = ()

    @classmethod
    def find(cls, model: type[BaseModel], data: Any, loc: Sequence[int | str], *, keep_last: bool) -> _Place:
        """Walk the model beside the data; names that pydantic adds for unions are not part of the path."""
        place = cls([model])
        for index, part in enumerate(loc):
            last = index == len(loc) - 1
            if isinstance(part, int):
                place.path += f"[{part}]"
                place._enter(_items_of(place.annotation), ())
                place.items = data if isinstance(data, Sequence) and not isinstance(data, str) else ()
                data = place.items[part] if part < len(place.items) else None
            elif isinstance(data, Mapping) and (part in data or (last and keep_last)):
                shown = part if re.fullmatch(r"[A-Za-z0-9_-]+", part) else repr(part)
                place.path += f".{shown}" if place.path else shown
                place.table, place.key = place.models, part
                fields = [m.model_fields[part] for m in place.models if part in m.model_fields]
                if fields:
                    place._enter(fields[0].annotation, fields[0].metadata)
                else:
                    place._enter(_items_of(place.annotation), ())
                data = data.get(part)
            else:
                place.models = [m for m in place.models if part in _literals(m)] or place.models
        return place

    def _enter(self, annotation: Any, metadata: Sequence[Any]) -> None:
        self.annotation, self.metadata = annotation, metadata
        self.models = models_in(annotation)

    def allowed(self) -> str:
        text = _describe(self.annotation, self.metadata)
        unit = unit_of(self.key) if "number" in text else ""
        return f"{text}, in {unit}" if unit else text


def models_in(annotation: Any) -> Models:
    """The table models that a field's annotation holds, directly or as items."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for part in get_args(annotation) for model in models_in(part)]


def _items_of(annotation: Any) -> Any:
    """What a list's items or a free table's values are."""
    origin, parts = get_origin(annotation), get_args(annotation)
    if origin in (Annotated, Union, types.UnionType):
        return _items_of(parts[0])
    if origin in (tuple, list):
        return parts[0]
    return parts[1] if origin is dict else Any


def _literals(model: type[BaseModel]) -> set[Any]:
    found: set[Any] = set()
    for field in model.model_fields.values():
        if get_origin(field.annotation) is Literal:
            found |= set(get_args(field.annotation))
    return found


def _tags(models: Models, tag: str) -> str:
    return _options([v for m in models for v in get_args(m.model_fields[tag].annotation)])


def _options(values: Sequence[Any]) -> str:
    return ", ".join(as_typed(value) for value in values)


def _describe(annotation: Any, metadata: Sequence[Any]) -> str:
    """What a field takes, in plain words."""
    origin, parts = get_origin(annotation), get_args(annotation)
    if origin is Annotated:
        return _describe(parts[0], [*metadata, *parts[1:]])
    if origin in (Union, types.UnionType):
        told = [_describe(p, metadata) for p in parts if p is not type(None)]
        return " or ".join(dict.fromkeys(told))
    if origin is Literal:
        return f"one of {_options(parts)}" if len(parts) > 1 else as_typed(parts[0])
    limits = list(_flat(metadata))
    if origin in (tuple, list):
        least = next((x.min_length for x in limits if isinstance(x, bounds.MinLen)), 0)
        return (
            f"a list{f' of at least {least}' if least else ''}, each of its items {_describe(parts[0], [])}"
        )
    if annotation is float or annotation is int:
        noun = "a number" if annotation is float else "a whole number"
        return " ".join([noun, *_range(limits)])
    if annotation is str:
        longest = next((x.max_length for x in limits if isinstance(x, bounds.MaxLen)), None)
        return 'text in quotes "..."' + (f" of 1 to {longest} characters" if longest else "")
    if annotation is bool:
        return "true or false"
    if annotation is datetime.datetime:
        return "a date and time with its offset from UTC, such as 2031-02-11T18:00:00Z"
    if (
        annotation is dict
        or origin is dict
        or (isinstance(annotation, type) and issubclass(annotation, BaseModel))
    ):
        return "a table"
    return f"of the kind {annotation}"


def _flat(metadata: Sequence[Any]) -> Iterator[Any]:
    for item in metadata:
        if isinstance(item, FieldInfo):
            yield from item.metadata
        else:
            yield item


def _range(limits: Sequence[Any]) -> list[str]:
    low = next((x.ge for x in limits if isinstance(x, bounds.Ge)), None)
    high = next((x.le for x in limits if isinstance(x, bounds.Le)), None)
    if low is not None and high is not None:
        return [f"from {_number(low)} to {_number(high)}"]
    words = []
    for limit in limits:
        if isinstance(limit, bounds.Gt):
            words.append(f"above {_number(limit.gt)}")
        elif isinstance(limit, bounds.Ge):
            words.append(f"not below {_number(limit.ge)}")
        elif isinstance(limit, bounds.Lt):
            words.append(f"below {_number(limit.lt)}")
        elif isinstance(limit, bounds.Le):
            words.append(f"at most {_number(limit.le)}")
    return [" and ".join(words)] if words else []


def _number(value: Any) -> str:
    return str(value) if isinstance(value, int) else f"{value:g}"


def unit_of(key: str) -> str:
    """The unit that a key's ending names; "" if it names none."""
    if "_" not in key:
        return ""
    return next((unit for end, unit in UNITS.items() if f"_{key}".endswith(f"_{end}")), "")


def _unknown_key(model: type[BaseModel], place: _Place) -> tuple[str, str]:
    """The complaint about an unknown key, and the path of the key that was probably meant."""
    known = [name for table in place.table for name in table.model_fields]
    parent = place.path[: -len(place.key)] if place.path.endswith(place.key) else ""
    text = f"{place.path}: unknown key {place.key!r}"
    homes = [path for path in _paths(model, "") if path.split(".")[-1] == place.key]
    elsewhere = [path for path in homes if path != place.path]
    if place.path in homes:  # another form of the same table has it
        return f"{text} in this form of the table; allowed: {', '.join(known)}", ""
    if elsewhere:
        table = elsewhere[0].rpartition(".")[0]
        home = f"in [{table}]" if table else "at the top of the file, before the first [table]"
        return f"{text} here; it belongs {home}", elsewhere[0]
    near = difflib.get_close_matches(place.key, known, n=1, cutoff=0.6)
    if near:
        return f"{text}; did you mean {near[0]!r}?", parent + near[0]
    return f"{text}; allowed: {', '.join(known)}", ""


def _paths(model: type[BaseModel], prefix: str) -> Iterator[str]:
    for name, field in model.model_fields.items():
        yield prefix + name
        if get_origin(field.annotation) is not tuple:
            for inner in models_in(field.annotation):
                yield from _paths(inner, f"{prefix}{name}.")


def _hint(value: Any, place: _Place) -> str:
    """What was probably meant, where that is plain."""
    wanted = place.allowed()
    if isinstance(value, str) and "number" in wanted:
        try:
            float(value.replace(",", "."))
        except ValueError:
            return ""
        return f"; {value!r}: use a point, no quotes" if "," in value else f"; {value!r}: no quotes"
    if isinstance(value, list) and "number" in wanted:
        return _comma(value)
    return ""


def _comma(items: Sequence[Any]) -> str:
    """A decimal comma makes a list of two whole numbers."""
    if len(items) != 2 or any(type(item) is not int for item in items):
        return ""
    return f"; for a decimal number use a point: {items[0]}.{items[1]}"


def _looked_up(value: Any, key: str) -> Any:
    """What stands at a dotted key, in which lists have their places ("windows[1].below_pm"); None for tables,
    which are too long to be shown."""
    for part in re.findall(r"[^.\[\]]+", key):
        if isinstance(value, Mapping):
            value = value.get(part)
        elif isinstance(value, Sequence) and part.isdigit() and int(part) < len(value):
            value = value[int(part)]
        else:
            return None
    is_tables = isinstance(value, list) and any(isinstance(item, Mapping) for item in value)
    return None if is_tables else value


def _join(path: str, value: Any, text: str) -> str:
    if isinstance(value, Mapping) or value is None:
        return f"{path}: {text}" if path else text
    return f"{path} = {as_typed(value)}: {text}"


def as_typed(value: Any) -> str:
    """A value as it may have stood in the file, cut to a readable length."""
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, datetime.datetime | datetime.date | datetime.time):
        text = value.isoformat()
    elif isinstance(value, int) and value.bit_length() > 1000:  # repr refuses thousands of digits
        text = f"a number of {value.bit_length()} bits"
    else:
        text = repr(value)
    return text if len(text) <= 80 else f"{text[:77]}..."
