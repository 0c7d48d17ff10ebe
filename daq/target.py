"""The target: one spectral feature to be settled, its goal and its limits, read from a TOML file."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal

from pydantic import AfterValidator, Field

from drivers.settings import ListOf, Name, StrictModel, load_toml, parse, toml_table, worded
from drivers.slug import slug_of

SHORTEST_NM, LONGEST_NM = 10.0, 100_000.0


def _wavelength(value: float) -> float:
    if SHORTEST_NM <= value <= LONGEST_NM:
        return value
    hint = ""
    if LONGEST_NM < value <= 10.0 * LONGEST_NM:
        hint = f"; from angstrom divide by ten: {value / 10.0:g}"
    elif 0.1 <= value < SHORTEST_NM:
        hint = f"; from micrometres multiply by a thousand: {value * 1000.0:g}"
    raise worded(f"must be a number from {SHORTEST_NM:g} to {LONGEST_NM:g}, in nm{hint}")


Wavelength = Annotated[float, AfterValidator(_wavelength)]
Picometres = Annotated[float, Field(gt=0.0, le=1e6)]
Probability = Annotated[float, Field(gt=0.0, lt=0.5)]


class Window(StrictModel):
    """`[window]`: how far around the expected place the sweeps reach."""

    half_width_fwhm: Annotated[float, Field(ge=1.0, le=100.0)] | None = None
    below_pm: Picometres | None = None
    above_pm: Picometres | None = None

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        outright = [key for key in ("below_pm", "above_pm") if getattr(self, key) is not None]
        if self.half_width_fwhm is not None and outright:
            yield (
                "half_width_fwhm",
                f"give either half_width_fwhm or below_pm and above_pm, not {outright[0]} too",
            )
        elif len(outright) == 1:
            other = "above_pm" if outright == ["below_pm"] else "below_pm"
            yield other, f"missing; a window given by {outright[0]} needs both below_pm and above_pm"

    @property
    def half_width(self) -> float:
        """Half width in expected single-line FWHM; only where the window is not given outright."""
        return 4.0 if self.half_width_fwhm is None else self.half_width_fwhm

    @property
    def outright_pm(self) -> tuple[float, float] | None:
        """(below, above) the expected place in pm where the file gives them, else None."""
        if self.below_pm is None or self.above_pm is None:
            return None
        return self.below_pm, self.above_pm


class Model(StrictModel):
    """`[model]`: what the feature may be made of."""

    line_fwhm_pm: Picometres = 1.0
    shape: Literal["voigt", "gaussian"] = "voigt"
    widths: Literal["equal", "free"] = "equal"
    background: Literal["flat", "slope"] = "slope"
    known_lines_air_nm: ListOf[Wavelength] = ()
    known_lines_vacuum_nm: ListOf[Wavelength] = ()

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        for key in ("known_lines_air_nm", "known_lines_vacuum_nm"):
            lines = getattr(self, key)
            twice = sorted({line for line in lines if lines.count(line) > 1})
            if twice:
                yield key, f"names the line at {twice[0]:g} nm twice; each line once"


class Sweep(StrictModel):
    """`[sweep]`: one pass of points over the window."""

    dwell_s: Annotated[float, Field(gt=0.0, le=3600.0)]
    step_pm: Picometres | None = None


class Decide(StrictModel):
    """`[goal.decide]`: one line or two, and how sure. The probabilities hold for a whole run, all looks."""

    false_alarm: Probability = 1e-3
    smallest_separation_pm: Picometres | None = None
    smallest_ratio: Annotated[float, Field(gt=0.0, le=1.0)] = 0.1
    miss_probability: Probability = 0.05


class Goal(StrictModel):
    """`[goal]`: when the target is settled."""

    separation_uncertainty_pm: Picometres | None = None
    decide: Decide | None = None

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.separation_uncertainty_pm is None and self.decide is None:
            yield "", "needs at least one of separation_uncertainty_pm and the table [goal.decide]"

    @property
    def decision(self) -> Decide:
        """How one line or two is decided: as the file says, else the defaults."""
        return self.decide or Decide()


class Limits(StrictModel):
    """`[limits]`: when to stop without the goal."""

    time_s: Annotated[float, Field(gt=0.0, le=1e7)]
    light_s: Annotated[float, Field(gt=0.0, le=1e7)] | None = None

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.light_s is not None and self.light_s > self.time_s:
            yield "light_s", f"must be at most time_s = {self.time_s:g}, in s"


class Target(StrictModel):
    """A whole target file."""

    format: Literal[1]
    name: Name
    wavelength_air_nm: Wavelength | None = None
    wavelength_vacuum_nm: Wavelength | None = None
    window: Window = Window()
    model: Model = Model()
    sweep: Sweep
    goal: Goal
    limits: Limits

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if not slug_of(self.name):
            yield "name", "must hold a letter or a digit: files are named after it"
        if self.wavelength_air_nm is None and self.wavelength_vacuum_nm is None:
            yield "wavelength_air_nm", "missing; give wavelength_air_nm or wavelength_vacuum_nm"
            return
        if self.wavelength_air_nm is not None and self.wavelength_vacuum_nm is not None:
            yield "wavelength_vacuum_nm", "give either wavelength_air_nm or wavelength_vacuum_nm, not both"
            return
        other = "vacuum" if self.medium == "air" else "air"
        if getattr(self.model, f"known_lines_{other}_nm"):
            yield (
                f"model.known_lines_{other}_nm",
                f"must be known_lines_{self.medium}_nm: the target's own wavelength is in {self.medium}",
            )
        if self.wavelength_nm in self.known_lines_nm:
            yield (
                f"model.known_lines_{self.medium}_nm",
                "must not name the target's own line; only its neighbours",
            )
        if self.sweep.dwell_s > self.limits.time_s:
            yield "sweep.dwell_s", f"must be at most limits.time_s = {self.limits.time_s:g}, in s"
        outright = self.window.outright_pm
        if outright is not None and self.sweep.step_pm is not None and self.sweep.step_pm * 8 > sum(outright):
            yield "sweep.step_pm", f"must be at most an eighth of the window of {sum(outright):g} pm"

    @property
    def medium(self) -> Literal["air", "vacuum"]:
        return "vacuum" if self.wavelength_air_nm is None else "air"

    @property
    def wavelength_nm(self) -> float:
        """Expected place of the main line, in `medium`."""
        found = self.wavelength_air_nm or self.wavelength_vacuum_nm
        assert found is not None, "the model's own checks see to it"
        return found

    @property
    def known_lines_nm(self) -> tuple[float, ...]:
        """Known further lines, in `medium`."""
        return self.model.known_lines_air_nm or self.model.known_lines_vacuum_nm


@dataclass(frozen=True, slots=True)
class LoadedTarget:
    """A target with the file it came from; `sha256` is of the text in UTF-8."""

    target: Target
    path: Path
    text: str
    sha256: str
    folder: Path
    slug: str


def read_target(text: str, file: str) -> Target:
    """The target in a TOML text, as a run's file carries it. Raises SettingsError naming `file`."""
    return parse(Target, toml_table(text, file), file)


def load_target(path: str | Path) -> LoadedTarget:
    """Read and check a target file. Raises SettingsError."""
    data, text = load_toml(path)
    target = parse(Target, data, str(path))
    where = Path(path).absolute()
    return LoadedTarget(
        target=target,
        path=where,
        text=text,
        sha256=hashlib.sha256(text.encode()).hexdigest(),
        folder=where.parent,
        slug=slug_of(target.name),
    )
