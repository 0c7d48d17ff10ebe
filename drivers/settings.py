"""Settings files: strict models, TOML reading, and mistakes told in plain words, all of them at once.

A settings mistake costs a night, so nothing is guessed: unknown keys, numbers in quotes, nan and values out
of range are refused, and every problem names the key as it was typed, its value and what is allowed.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Annotated, Any, TypeVar

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Field,
    ValidationError,
    WithJsonSchema,
    model_validator,
)
from pydantic_core import PydanticCustomError

from drivers.complaints import complaints
from drivers.errors import SettingsError

FORMAT = 1
LARGEST_FILE_BYTES = 1 << 20


class StrictModel(BaseModel):
    """Base of every table in a settings file: strict types, no unknown keys, no nan, frozen.

    Whole numbers are accepted where a number with a fraction is meant; nothing else is converted.
    """

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        """Yield (key, what is wrong) for rules between keys; the key may be dotted, "" means the table."""
        yield from ()

    @model_validator(mode="after")
    def _run_cross_checks(self) -> StrictModel:
        problems = list(self.cross_checks())
        if problems:
            raise PydanticCustomError("cross_checks", "cross checks", {"problems": problems})
        return self


def worded(text: str) -> PydanticCustomError:
    """What a field's validator raises: `text` says what is allowed and is shown as it stands."""
    return PydanticCustomError("worded", "{text}", {"text": text})


def _one_line(text: str) -> str:
    if not text.isprintable() or text != text.strip():
        raise worded("must be one line of text without blanks at its ends")
    return text


FACTORY = r"[A-Za-z_]\w*(\.[A-Za-z_]\w*)*:[A-Za-z_]\w*"


def _factory(text: str) -> str:
    if not re.fullmatch(FACTORY, text):
        raise worded("must be 'module:factory', such as 'simulators.memory:counter'")
    return text


Steps = Annotated[int, Field(ge=-2_000_000_000, le=2_000_000_000)]
Name = Annotated[str, Field(min_length=1, max_length=80), AfterValidator(_one_line)]
Factory = Annotated[
    str, AfterValidator(_factory), WithJsonSchema({"type": "string", "pattern": f"^{FACTORY}$"})
]
Item = TypeVar("Item")
ListOf = Annotated[tuple[Item, ...], Field(strict=False)]
"""A TOML list, kept as a tuple; its items stay strict."""

Model = TypeVar("Model", bound=BaseModel)


def load_toml(path: str | Path) -> tuple[dict[str, Any], str]:
    """Read a TOML file; the table and the text as it stands. Raises SettingsError with line and column."""
    file = str(path)
    where = Path(path)
    try:
        if where.is_dir():
            raise SettingsError(file, ["is a directory; give the TOML file inside it"])
        if not where.exists():
            raise SettingsError(file, ["no such file"])
        if not where.is_file():
            raise SettingsError(file, ["is not a regular file"])
        with where.open("rb") as stream:
            raw = stream.read(LARGEST_FILE_BYTES + 1)
    except OSError as error:
        raise SettingsError(file, [f"cannot be read: {error.strerror or error}"]) from error
    if len(raw) > LARGEST_FILE_BYTES:
        raise SettingsError(file, [f"is larger than {LARGEST_FILE_BYTES} bytes; this is no settings file"])
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise SettingsError(
            file, [f"line {line}: byte 0x{raw[error.start]:02x} is not UTF-8; save the file as UTF-8"]
        ) from error
    return toml_table(text, file), text


def toml_table(text: str, file: str) -> dict[str, Any]:
    """The table in a TOML text; `file` names it in errors. Raises SettingsError with line and column."""
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(file, [_syntax_problem(str(error), text)]) from error
    except (ValueError, RecursionError, OverflowError) as error:
        # tomllib lets these through: a whole number of thousands of digits, brackets nested without end
        raise SettingsError(file, [f"is not usable TOML: {error}"]) from error
    if not data:
        raise SettingsError(file, [f"is empty; a settings file begins with 'format = {FORMAT}'"])
    return data


_PLACE = re.compile(r" \(at (?:line (\d+), column (\d+)|end of document)\)$")
_COMMA = re.compile(r"=\s*([+-]?\d+),(\d+)")
_BARE_TEXT = re.compile(r"^\s*([A-Za-z0-9_-]+)\s*=\s*([A-Za-z][^\"'#]*)")


def _syntax_problem(message: str, text: str) -> str:
    """tomllib's complaint with its place, the line itself, and what most likely was meant."""
    found = _PLACE.search(message)
    lines = text.splitlines() or [""]
    if found is None or found.group(1) is None:
        place, line = "end of file", lines[-1]
    else:
        number = int(found.group(1))
        place = f"line {number}, column {found.group(2)}"
        line = lines[number - 1] if number <= len(lines) else ""
    said = message[: found.start()] if found else message
    shown = line.strip()[:80]
    hint = ""
    comma, bare = _COMMA.search(line), _BARE_TEXT.match(line)
    if comma:
        hint = f"; use a decimal point: {comma.group(1)}.{comma.group(2)}"
    elif said.startswith("Cannot overwrite"):
        hint = f"; the key {line.split('=')[0].strip()!r} is given twice"
    elif said.startswith("Cannot declare"):
        hint = f"; the table {shown} is given twice"
    elif said.startswith("Illegal character '\\n'"):
        hint = "; a closing quote is missing"
    elif bare and said.startswith("Invalid value"):
        hint = f'; text stands in quotes: {bare.group(1)} = "{bare.group(2).strip()}"'
    return f"{place}: {said[:1].lower()}{said[1:]} in {shown!r}{hint}"


def parse(model: type[Model], data: Mapping[str, Any], file: str) -> Model:
    """Check a table against its model; raises SettingsError holding every problem found."""
    if "format" in model.model_fields:
        problem = _format_problem(data.get("format"))
        if problem:
            raise SettingsError(file, [problem])
    try:
        return model.model_validate(dict(data))
    except ValidationError as error:
        raise SettingsError(file, complaints(model, data, error)) from None


def _format_problem(value: object) -> str:
    if value is None:
        return f"format: missing; must be {FORMAT}"
    if type(value) is not int or value < 1:
        return f"format = {value!r}: must be {FORMAT}, a whole number without quotes"
    if value > FORMAT:
        return (
            f"format = {value}: written for a newer gratingd (format {value}); this one reads format {FORMAT}"
        )
    return ""


def parse_options(model: type[Model], options: Mapping[str, Any], where: str) -> Model:
    """Check a driver's own options; `where` stands for the file in the error ("drive.options")."""
    return parse(model, options, where)
