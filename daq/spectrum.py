"""A measured spectrum from a CSV file: read strictly, or refused with the file, the line and what is allowed.

The first line names the columns: `wavelength_air_nm` or `wavelength_vacuum_nm`, `counts`, optionally `sigma`
and `pixel`. One row a position, wavelengths ascending, decimal points, commas between columns, UTF-8.
"""

from __future__ import annotations

import csv
import hashlib
import io
import math
import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from drivers.errors import DataError

__all__ = ["FEWEST_ROWS", "LARGEST_BYTES", "Spectrum", "parse_spectrum", "read_spectrum"]

FloatArray = npt.NDArray[np.float64]

FEWEST_ROWS = 8
LARGEST_BYTES = 64 * 1024 * 1024
SHORTEST_NM = 10.0
LONGEST_NM = 100_000.0

_MEDIA = {"wavelength_air_nm": "air", "wavelength_vacuum_nm": "vacuum"}
_COLUMNS = (*_MEDIA, "counts", "sigma", "pixel")
# float() also takes 1_000, other scripts' digits, nan and inf, none of which belongs in a measurement.
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)
_NOT_FINITE = re.compile(r"[+-]?(nan|inf|infinity)", re.IGNORECASE)


@dataclass(frozen=True, slots=True, eq=False)
class Spectrum:
    """What a CSV file says: N positions, read-only arrays.

    `counts` (N,) are as recorded (a subtracted bias may leave slightly negative ones); `sigma` (N,) are their
    standard deviations, None when the file has none (then counts are taken as Poisson). `raw` are the file's
    bytes and `sha256` their hash in hex.
    """

    wavelength_nm: FloatArray
    medium: str
    counts: FloatArray
    sigma: FloatArray | None
    path: str
    sha256: str
    raw: bytes

    @property
    def text(self) -> str:
        """The file's text; encoding it as UTF-8 gives `raw` again."""
        return self.raw.decode("utf-8")


def read_spectrum(path: str | Path) -> Spectrum:
    """Read a spectrum file. Raises DataError: none there, a folder, over 64 MiB, or see `parse_spectrum`."""
    file = Path(path)
    try:
        if file.is_dir():
            raise DataError(f"{path}: is a folder; give a CSV file")
        if not file.exists():
            raise DataError(f"{path}: there is no such file")
        if not file.is_file():
            raise DataError(f"{path}: is not a regular file; give a CSV file")
        with file.open("rb") as stream:
            raw = stream.read(LARGEST_BYTES + 1)
    except OSError as error:
        raise DataError(f"{path}: cannot be read: {error}") from error
    if len(raw) > LARGEST_BYTES:
        raise DataError(
            f"{path}: is larger than {LARGEST_BYTES // 2**20} MiB; keep the rows around the feature"
        )
    return parse_spectrum(raw, str(path))


def parse_spectrum(raw: bytes, path: str) -> Spectrum:
    """A spectrum from a file's bytes; `path` is what errors call it. Raises DataError."""
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise DataError(
            f"{path}: line {line}: byte 0x{raw[error.start]:02x} is not UTF-8 text; "
            f"save the file as CSV in UTF-8"
        ) from error
    lines, rows = _rows(text, path)
    if not rows:
        raise DataError(f"{path}: is empty; the first line must name the columns {_named(_COLUMNS)}")
    names = _header(rows[0], lines[0], path)
    columns = _numbers(rows[1:], lines[1:], names, path)
    lines = lines[1:]
    if len(lines) < FEWEST_ROWS:
        raise DataError(
            f"{path}: has {len(lines)} rows of data; allowed: {FEWEST_ROWS} or more, to tell one from two"
        )
    wavelength_name = next(name for name in names if name in _MEDIA)
    wavelength_nm, counts = columns[wavelength_name], columns["counts"]
    sigma = columns.get("sigma")
    _check_wavelengths(wavelength_nm, lines, wavelength_name, path)
    _check_sigma(sigma, lines, path)
    _check_negative(counts, sigma, lines, path)
    for array in columns.values():
        array.flags.writeable = False
    return Spectrum(
        wavelength_nm=wavelength_nm,
        medium=_MEDIA[wavelength_name],
        counts=counts,
        sigma=sigma,
        path=path,
        sha256=hashlib.sha256(raw).hexdigest(),
        raw=raw,
    )


def _named(names: tuple[str, ...]) -> str:
    return ", ".join(names)


def _rows(text: str, path: str) -> tuple[list[int], list[list[str]]]:
    """Rows that hold anything, stripped cell by cell, and the line of the file each ends on."""
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    lines: list[int] = []
    rows: list[list[str]] = []
    try:
        for row in reader:
            cells = [cell.strip() for cell in row]
            if any(cells):
                lines.append(reader.line_num)
                rows.append(cells)
    except csv.Error as error:
        raise DataError(f"{path}: line {reader.line_num}: is not CSV: {error}") from error
    return lines, rows


def _header(names: list[str], line: int, path: str) -> list[str]:
    where = f"{path}: line {line}: "
    if len(names) == 1:
        for separator, called in ((";", "semicolons"), ("\t", "tabs")):
            if separator in names[0]:
                raise DataError(
                    f"{where}{called} between the columns; allowed: commas between columns, points in numbers"
                )
    if all(_NUMBER.fullmatch(name) for name in names):
        raise DataError(
            f"{where}starts with numbers; the first line must name the columns, e.g. "
            f"wavelength_air_nm,counts (allowed: {_named(_COLUMNS)})"
        )
    for name in names:
        if name not in _COLUMNS:
            raise DataError(f"{where}unknown column {name!r}; allowed: {_named(_COLUMNS)}")
        if names.count(name) > 1:
            raise DataError(f"{where}column {name!r} stands there {names.count(name)} times; allowed: once")
    found = [name for name in names if name in _MEDIA]
    if len(found) > 1:
        raise DataError(f"{where}both {' and '.join(found)}; allowed: one of the two")
    if not found:
        raise DataError(f"{where}no column of wavelengths; one is needed: {' or '.join(_MEDIA)}")
    if "counts" not in names:
        raise DataError(f"{where}column 'counts' is missing; found: {', '.join(names)}")
    return names


def _numbers(rows: list[list[str]], lines: list[int], names: list[str], path: str) -> dict[str, FloatArray]:
    columns: list[list[float]] = [[] for _ in names]
    for line, cells in zip(lines, rows, strict=True):
        if len(cells) != len(names):
            hint = "; are there decimal commas? numbers need points" if len(cells) > len(names) else ""
            raise DataError(
                f"{path}: line {line}: {len(cells)} fields; allowed: {len(names)}, as the header says{hint}"
            )
        for name, cell, values in zip(names, cells, columns, strict=True):
            values.append(_number(cell, f"{path}: line {line}: {name} = "))
    return {name: np.array(values, dtype=np.float64) for name, values in zip(names, columns, strict=True)}


def _number(cell: str, where: str) -> float:
    value = float(cell) if _NUMBER.fullmatch(cell) else None
    if value is not None and math.isfinite(value):
        return value
    if value is not None or _NOT_FINITE.fullmatch(cell):
        raise DataError(f"{where}{cell} is not a finite number; leave out positions that were not measured")
    if not cell:
        raise DataError(f"{where}nothing; every column needs a number in every row")
    hint = " (decimal comma? numbers need points)" if "," in cell else ""
    hint = hint or (" (semicolons? columns need commas between them)" if ";" in cell else "")
    raise DataError(f"{where}{cell!r} is not a number{hint}; allowed: e.g. 313.155, 42, 1.5e3")


def _check_wavelengths(wavelength_nm: FloatArray, lines: list[int], name: str, path: str) -> None:
    outside = np.flatnonzero((wavelength_nm < SHORTEST_NM) | (wavelength_nm > LONGEST_NM))
    if outside.size:
        k = int(outside[0])
        value = float(wavelength_nm[k])
        hint = "are these micrometres?" if 0.0 < value < SHORTEST_NM else "are these angstrom or picometres?"
        hint = hint if value > 0.0 else "a wavelength is positive"
        raise DataError(
            f"{path}: line {lines[k]}: {name} = {value!r}; allowed: {SHORTEST_NM:g} to "
            f"{LONGEST_NM:g} nm ({hint})"
        )
    falling = np.flatnonzero(np.diff(wavelength_nm) <= 0.0)
    if falling.size:
        k = int(falling[0]) + 1
        before, value = float(wavelength_nm[k - 1]), float(wavelength_nm[k])
        if value == before:
            raise DataError(
                f"{path}: line {lines[k]}: {name} = {value!r} comes twice; allowed: each wavelength once"
            )
        raise DataError(
            f"{path}: line {lines[k]}: {name} = {value!r} after {before!r}; allowed: rows sorted, ascending"
        )


def _check_sigma(sigma: FloatArray | None, lines: list[int], path: str) -> None:
    if sigma is None:
        return
    wrong = np.flatnonzero(sigma <= 0.0)
    if wrong.size:
        k = int(wrong[0])
        raise DataError(
            f"{path}: line {lines[k]}: sigma = {float(sigma[k])!r}; allowed: positive (leave out positions "
            f"that were not measured)"
        )


def _check_negative(counts: FloatArray, sigma: FloatArray | None, lines: list[int], path: str) -> None:
    """A subtracted bias leaves slightly negative counts; more than that is damage or another quantity."""
    if sigma is not None:
        lowest = -10.0 * sigma
        rule = "ten sigma below zero"
    else:
        lowest = np.full_like(counts, -5.0 * math.sqrt(max(float(np.median(np.abs(counts))), 1.0)))
        rule = "five times the root of the median count below zero"
    wrong = np.flatnonzero(counts < lowest)
    if wrong.size:
        k = int(wrong[0])
        raise DataError(
            f"{path}: line {lines[k]}: counts = {float(counts[k])!r}; allowed: no less than "
            f"{float(lowest[k]):.4g} ({rule}); counts cannot be negative beyond noise"
        )
