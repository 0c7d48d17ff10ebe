"""Measured spectra: real files are read to the last digit, bad ones are refused with the place."""

from __future__ import annotations

import csv
import hashlib
import os
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq.spectrum import LARGEST_BYTES, parse_spectrum, read_spectrum
from drivers.errors import DataError

REFERENCE = Path(__file__).parent / "reference"
PAIRS = ["ar_750.csv", "ar_801.csv", "cd_361.csv", "hg_577_579.csv"]
GOOD = "wavelength_air_nm,counts\n" + "".join(f"{313 + k / 100},{k * k % 17}\n" for k in range(10))


def with_line(number: int, line: str, text: str = GOOD) -> str:
    """The text with its line `number` (from 1) replaced."""
    lines = text.splitlines(keepends=True)
    lines[number - 1] = line + "\n"
    return "".join(lines)


def refusal(text: str | bytes) -> str:
    raw = text if isinstance(text, bytes) else text.encode()
    with pytest.raises(DataError) as caught:
        parse_spectrum(raw, "bench/lamp.csv")
    message = str(caught.value)
    assert message.startswith("bench/lamp.csv: ")
    return message


@pytest.mark.parametrize("name", PAIRS)
def test_measured_pairs_are_read_whole(name: str) -> None:
    """Real files (pypeit 2.0.1, see SOURCES.md), bias subtracted: two of them dip below zero."""
    path = REFERENCE / "measured_pairs" / name
    spectrum = read_spectrum(path)
    with path.open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert spectrum.medium == "vacuum"
    assert spectrum.sigma is None
    assert spectrum.path == str(path)
    assert spectrum.wavelength_nm.tolist() == [float(row["wavelength_vacuum_nm"]) for row in rows]
    assert spectrum.counts.tolist() == [float(row["counts"]) for row in rows]
    assert spectrum.raw == path.read_bytes()
    assert spectrum.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


def test_two_of_the_measured_pairs_hold_negative_counts() -> None:
    for name, lowest in (("cd_361.csv", -0.393), ("hg_577_579.csv", -8.438)):
        assert read_spectrum(REFERENCE / "measured_pairs" / name).counts.min() == lowest


@pytest.mark.parametrize("name", ["lamp01.csv", "lamp60.csv"])
def test_lamp_lines_with_sigma(name: str) -> None:
    """Real windows of a thorium-argon lamp (Murphy et al. 2007), counts with sigma; lamp60 dips to -2.9."""
    path = REFERENCE / "lamp_lines" / name
    spectrum = read_spectrum(path)
    expected = np.loadtxt(path, delimiter=",", skiprows=1)
    assert spectrum.medium == "air"
    assert spectrum.sigma is not None
    table = np.column_stack([spectrum.wavelength_nm, spectrum.counts, spectrum.sigma])
    np.testing.assert_array_equal(table, expected)


def test_read_and_parse_agree_and_arrays_are_read_only(tmp_path: Path) -> None:
    path = tmp_path / "lamp.csv"
    path.write_text(GOOD)
    spectrum = read_spectrum(str(path))
    assert spectrum.counts.tolist() == parse_spectrum(GOOD.encode(), "x").counts.tolist()
    with pytest.raises(ValueError, match="read-only"):
        spectrum.counts[0] = 1.0
    with pytest.raises(ValueError, match="read-only"):
        spectrum.wavelength_nm[0] = 1.0


@pytest.mark.parametrize(
    "text",
    [
        GOOD.replace("\n", "\r\n"),
        "\ufeff" + GOOD,  # as spreadsheets save it
        GOOD + "\n\n",
        GOOD.replace(",", " , "),
        GOOD.replace("wavelength_air_nm", '"wavelength_air_nm"'),
        GOOD.rstrip("\n"),
    ],
)
def test_harmless_differences(text: str) -> None:
    spectrum = parse_spectrum(text.encode(), "x")
    assert spectrum.counts.tolist() == [k * k % 17 for k in range(10)]
    assert spectrum.text.encode() == text.encode()


def test_columns_in_any_order() -> None:
    text = "sigma,counts,pixel,wavelength_vacuum_nm\n" + "".join(
        f"{k + 1},{k + 2},{k},{500 + k}\n" for k in range(8)
    )
    spectrum = parse_spectrum(text.encode(), "x")
    assert spectrum.medium == "vacuum"
    assert spectrum.counts.tolist() == [float(k + 2) for k in range(8)]
    assert spectrum.sigma is not None
    assert spectrum.sigma.tolist() == [float(k + 1) for k in range(8)]
    assert spectrum.wavelength_nm.tolist() == [float(500 + k) for k in range(8)]


@pytest.mark.parametrize(
    ("text", "fragments"),
    [
        ("", ["is empty", "wavelength_air_nm"]),
        ("\n \n", ["is empty"]),
        (GOOD.replace("counts", "flux"), ["line 1", "unknown column 'flux'", "allowed: wavelength_air_nm"]),
        (GOOD.replace("counts", ""), ["line 1", "unknown column ''"]),
        (GOOD.replace("counts", "pixel"), ["line 1", "column 'counts' is missing"]),
        (GOOD.replace("wavelength_air_nm", "pixel"), ["line 1", "no column of wavelengths"]),
        (GOOD.replace("counts", "counts,counts"), ["line 1", "'counts' stands there 2 times"]),
        (
            GOOD.replace("counts", "wavelength_vacuum_nm"),
            ["line 1", "both wavelength_air_nm and wavelength_vacuum_nm", "one of the two"],
        ),
        (GOOD.partition("\n")[2], ["line 1", "starts with numbers", "name the columns"]),
        (GOOD.replace(",", ";"), ["line 1", "semicolons", "commas"]),
        (GOOD.replace(",", "\t"), ["line 1", "tabs", "commas"]),
        (with_line(4, "313.02,nan"), ["line 4", "counts = nan", "not a finite number"]),
        (with_line(4, "inf,3"), ["line 4", "wavelength_air_nm = inf", "not a finite number"]),
        (with_line(4, "313.02,1e999"), ["line 4", "counts = 1e999", "not a finite number"]),
        (with_line(4, "313.02,"), ["line 4", "counts = nothing"]),
        (with_line(4, "313.02,dark"), ["line 4", "counts = 'dark' is not a number", "allowed"]),
        (with_line(4, '"313,02",3'), ["line 4", "'313,02' is not a number", "decimal comma"]),
        (with_line(4, "313,02,3"), ["line 4", "3 fields", "allowed: 2", "decimal commas"]),
        (with_line(4, "313.02,3;4"), ["line 4", "'3;4'", "semicolons"]),
        (with_line(4, "313.02,1_000"), ["line 4", "'1_000' is not a number"]),
        (with_line(4, "313.02,٣"), ["line 4", "is not a number"]),
        (with_line(4, "313.02,3\0"), ["line 4", "is not a number"]),
        (with_line(4, "313.02"), ["line 4", "1 fields", "allowed: 2"]),
        (with_line(4, '313.02,"3"4'), ["line 4", "is not CSV"]),
        (GOOD + '313.5,"' + "x" * 200_000, ["line 12", "is not CSV"]),
        (with_line(4, "313.015,3", with_line(5, "313.01,3")), ["line 5", "after 313.015", "ascending"]),
        (with_line(4, "313.01,3"), ["line 4", "313.01 comes twice", "once"]),
        ("\n".join(GOOD.splitlines()[:4]), ["3 rows", "8 or more"]),
        ("\n".join(GOOD.splitlines()[:8]), ["7 rows", "8 or more"]),
        (GOOD.splitlines()[0], ["0 rows"]),
        (with_line(2, "3.13,1"), ["line 2", "3.13", "10 to 100000 nm", "micrometres"]),
        (with_line(2, "-313,1"), ["line 2", "-313.0", "positive"]),
        (with_line(11, "313090.0,1"), ["line 11", "313090.0", "angstrom or picometres"]),
    ],
)
def test_bad_files_are_refused(text: str, fragments: list[str]) -> None:
    message = refusal(text)
    for fragment in fragments:
        assert fragment in message


def test_blank_lines_do_not_shift_line_numbers() -> None:
    assert "line 6" in refusal(GOOD.splitlines()[0] + "\n\n\n313,1\n\n313.1,x\n")


def test_text_that_is_not_utf8() -> None:
    message = refusal(GOOD.encode() + "313.5,3 µ".encode("latin-1"))
    assert "line 12: byte 0xb5 is not UTF-8" in message
    assert "not UTF-8" in refusal(GOOD.encode("utf-16"))


@pytest.mark.parametrize("sigma", ["0", "-0.5"])
def test_sigma_must_be_positive(sigma: str) -> None:
    text = "wavelength_air_nm,counts,sigma\n" + "".join(f"{313 + k},5,1\n" for k in range(9))
    message = refusal(with_line(6, f"317,5,{sigma}", text))
    assert f"line 6: sigma = {float(sigma)!r}; allowed: positive" in message
    small = parse_spectrum(with_line(6, "317,5,1e-9", text).encode(), "x")
    assert small.sigma is not None
    assert small.sigma.min() == 1e-9


def test_the_borders_of_the_wavelengths_are_allowed() -> None:
    borders = parse_spectrum(with_line(2, "10,1", with_line(11, "100000,1")).encode(), "x")
    assert borders.wavelength_nm[[0, -1]].tolist() == [10.0, 100_000.0]


def test_negative_counts_without_sigma() -> None:
    """Allowed down to five roots of the median count (at least of one): the median here is 100."""
    flat = "wavelength_air_nm,counts\n" + "".join(f"{313 + k},100\n" for k in range(11))
    assert parse_spectrum(with_line(5, "316,-49.9", flat).encode(), "x").counts.min() == -49.9
    message = refusal(with_line(5, "316,-50.1", flat))
    assert "line 5: counts = -50.1; allowed: no less than -50 (" in message
    dark = flat.replace(",100", ",0")
    assert parse_spectrum(with_line(5, "316,-4.9", dark).encode(), "x").counts.min() == -4.9
    assert "no less than -5 (" in refusal(with_line(5, "316,-5.1", dark))


def test_negative_counts_with_sigma() -> None:
    flat = "wavelength_air_nm,counts,sigma\n" + "".join(f"{313 + k},100,2\n" for k in range(11))
    assert parse_spectrum(with_line(5, "316,-19.9,2", flat).encode(), "x").counts.min() == -19.9
    message = refusal(with_line(5, "316,-20.1,2", flat))
    assert "line 5: counts = -20.1; allowed: no less than -20 (ten sigma" in message


def test_files_that_are_not_there(tmp_path: Path) -> None:
    with pytest.raises(DataError, match="there is no such file"):
        read_spectrum(tmp_path / "none.csv")
    with pytest.raises(DataError, match="is a folder"):
        read_spectrum(tmp_path)
    with pytest.raises(DataError, match="there is no such file"):
        read_spectrum("lamp\0.csv")
    with pytest.raises(DataError, match=r"cannot be read|there is no such file"):
        read_spectrum("x" * 5000)


def test_a_pipe_is_not_waited_for(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.csv")
    with pytest.raises(DataError, match="not a regular file"):
        read_spectrum(tmp_path / "pipe.csv")


def test_a_file_too_large(tmp_path: Path) -> None:
    path = tmp_path / "all-night.csv"
    with path.open("wb") as stream:
        stream.truncate(LARGEST_BYTES + 1)  # a sparse file
    with pytest.raises(DataError, match="larger than 64 MiB"):
        read_spectrum(path)


@given(
    raw=st.one_of(st.binary(max_size=300), st.text(max_size=300).map(lambda t: t.encode("utf-8", "replace")))
)
def test_any_bytes_are_read_or_refused(raw: bytes) -> None:
    """It parses, or it raises DataError: nothing else."""
    try:
        spectrum = parse_spectrum(raw, "x")
    except DataError:
        return
    assert spectrum.wavelength_nm.size >= 8


@given(
    line=st.integers(1, 11),
    cells=st.lists(st.text(alphabet="0123456789.,;e+-naif_ \"'\t", max_size=8), min_size=1, max_size=4),
)
def test_one_damaged_line_is_read_or_refused(line: int, cells: list[str]) -> None:
    raw = with_line(line, ",".join(cells)).encode()
    try:
        spectrum = parse_spectrum(raw, "x")
    except DataError as error:
        message = str(error)
        if not message.startswith("x: "):
            pytest.fail(message)
        return
    assert np.isfinite(spectrum.counts).all()
    assert (np.diff(spectrum.wavelength_nm) > 0.0).all()
