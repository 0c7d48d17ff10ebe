"""The night: an ordered list of targets, read from a TOML file together with all of them."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field

from daq.target import LoadedTarget, load_target
from drivers.bench import ByHand
from drivers.bench_optics import SlitUm
from drivers.errors import SettingsError
from drivers.settings import ListOf, Name, StrictModel, load_toml, parse
from drivers.slug import slug_of


class Run(StrictModel):
    """One `[[runs]]` entry; the target's path is relative to the night file."""

    target: Annotated[str, Field(min_length=1, max_length=1000)]


class NightLimits(StrictModel):
    """`[limits]` of the whole night."""

    time_s: Annotated[float, Field(gt=0.0, le=1e7)] | None = None


class Confirmed(ByHand):
    """`[confirmed]`: who has looked at the bench, and what stands there; keys as in `[by_hand]`."""

    operator: Name
    entrance_slit_um: SlitUm | None = None
    exit_slit_um: SlitUm | None = None


class Night(StrictModel):
    """A whole night file."""

    format: Literal[1]
    name: Name
    runs: Annotated[ListOf[Run], Field(min_length=1, max_length=1000)]
    limits: NightLimits = NightLimits()
    confirmed: Confirmed | None = None

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if not slug_of(self.name):
            yield "name", "must hold a letter or a digit: files are named after it"


@dataclass(frozen=True, slots=True)
class PlannedRun:
    """A target and its place in the night. The ordinal, from 1, keeps equal targets apart."""

    ordinal: int
    target: LoadedTarget


@dataclass(frozen=True, slots=True)
class LoadedNight:
    """A night with the file it came from and its targets; `sha256` is of the text in UTF-8."""

    night: Night
    path: Path
    text: str
    sha256: str
    folder: Path
    slug: str
    runs: tuple[PlannedRun, ...]


def load_night(path: str | Path) -> LoadedNight:
    """Read and check a night file and every target it names. Raises one SettingsError for all their problems;
    a target file named twice is told once."""
    data, text = load_toml(path)
    night = parse(Night, data, str(path))
    where = Path(path).absolute()
    runs: list[PlannedRun] = []
    problems: dict[str, list[str]] = {}
    for index, run in enumerate(night.runs):
        if run.target in problems:
            continue
        try:
            runs.append(PlannedRun(index + 1, load_target(where.parent / run.target)))
        except SettingsError as error:
            key = f"runs[{index}].target = {run.target!r}"
            problems[run.target] = [f"{key}: {problem}" for problem in error.problems]
    if problems:
        raise SettingsError(str(path), [line for lines in problems.values() for line in lines])
    return LoadedNight(
        night=night,
        path=where,
        text=text,
        sha256=hashlib.sha256(text.encode()).hexdigest(),
        folder=where.parent,
        slug=slug_of(night.name),
        runs=tuple(runs),
    )
