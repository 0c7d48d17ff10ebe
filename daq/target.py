"""The target: one spectral feature to be settled, its goal and its limits, read from a TOML file."""

from __future__ import annotations

import datetime
import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal, Protocol

from pydantic import Field

from drivers.bench_optics import SlitUm, Wavelength
from drivers.settings import ListOf, Name, StrictModel, load_toml, parse, toml_table
from drivers.slug import slug_of

Picometres = Annotated[float, Field(gt=0.0, le=1e6)]
Probability = Annotated[float, Field(gt=0.0, lt=0.5)]


class _Placed(Protocol):
    @property
    def wavelength_air_nm(self) -> float | None: ...
    @property
    def wavelength_vacuum_nm(self) -> float | None: ...


def _one_wavelength(table: _Placed) -> Iterator[tuple[str, str]]:
    if table.wavelength_air_nm is None and table.wavelength_vacuum_nm is None:
        yield "wavelength_air_nm", "missing; give wavelength_air_nm or wavelength_vacuum_nm"
    elif table.wavelength_air_nm is not None and table.wavelength_vacuum_nm is not None:
        yield "wavelength_vacuum_nm", "give either wavelength_air_nm or wavelength_vacuum_nm, not both"


def _medium(table: _Placed) -> Literal["air", "vacuum"]:
    return "vacuum" if table.wavelength_air_nm is None else "air"


def _wavelength_nm(table: _Placed) -> float:
    found = table.wavelength_air_nm or table.wavelength_vacuum_nm
    assert found is not None, "the model's own checks see to it"
    return found


class Window(StrictModel):
    """`[window]`: how far around the expected place the sweeps reach."""

    half_width_fwhm: Annotated[float, Field(ge=1.0, le=100.0)] | None = None
    """Each side of the expected place, in widths of one line as the bench shows it; 4 if nothing is given."""
    below_pm: Picometres | None = None
    """Outright, below the expected place."""
    above_pm: Picometres | None = None
    """Outright, above the expected place."""

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


class PlacedWindow(Window):
    """One of `[[windows]]`: a stretch around a line of its own, where no single sweep spans the feature."""

    wavelength_air_nm: Wavelength | None = None
    """Centre of the stretch, in standard air."""
    wavelength_vacuum_nm: Wavelength | None = None
    """Centre of the stretch, in vacuum."""

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        yield from super().cross_checks()
        yield from _one_wavelength(self)

    @property
    def medium(self) -> Literal["air", "vacuum"]:
        return _medium(self)

    @property
    def wavelength_nm(self) -> float:
        """Where the stretch is centred, in `medium`."""
        return _wavelength_nm(self)


class Component(StrictModel):
    """One of `[[model.pattern]]`: a hyperfine or isotope component of every line of the feature."""

    offset_pm: Annotated[float, Field(ge=-1e6, le=1e6)]
    """From the place that stands for the whole line."""
    strength: Annotated[float, Field(gt=0.0, le=1e6)]
    """By area, on any scale."""


class Model(StrictModel):
    """`[model]`: what the feature may be made of."""

    kind: Literal["emission", "absorption"] = "emission"
    """Lines that give light, or lines that take it out of a continuum."""
    line_fwhm_pm: Picometres = 1.0
    """The source line's own width, as far as it is known: a first guess."""
    line_fwhm_at_most_pm: Picometres | None = None
    """The source line is known not to be wider."""
    shape: Literal["voigt", "gaussian"] = "voigt"
    widths: Literal["equal", "tied", "free"] = "equal"
    """How the second line's width goes with the main one's."""
    width_ratio: Annotated[float, Field(ge=0.1, le=10.0)] | None = None
    """The second line's own width over the main one's; only with widths = 'tied'."""
    background: Literal["flat", "slope"] = "slope"
    """Below the lines, in each window."""
    self_reversal: Literal["excluded", "possible"] = "excluded"
    """Whether a dip may be a cooler layer of the lamp."""
    expected_peak_rate_per_s: Annotated[float, Field(gt=0.0, le=1e12)] | None = None
    """Counts expected at the line's top, if known: then times and dead-time load are told."""
    pattern: ListOf[Component] = ()
    """Hyperfine or isotope components of every line; all of them, or none."""
    known_lines_air_nm: ListOf[Wavelength] = ()
    """Further lines of known place, their strengths free."""
    known_lines_vacuum_nm: ListOf[Wavelength] = ()
    """Further lines of known place, their strengths free."""

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.widths == "tied" and self.width_ratio is None:
            yield "width_ratio", "missing; widths = 'tied' needs the second line's width over the main line's"
        if self.widths != "tied" and self.width_ratio is not None:
            yield "width_ratio", f"only with widths = 'tied', not with {self.widths!r}"
        if self.line_fwhm_at_most_pm is not None and self.line_fwhm_at_most_pm < self.line_fwhm_pm:
            yield "line_fwhm_at_most_pm", f"must not be below line_fwhm_pm = {self.line_fwhm_pm:g}, in pm"
        if self.kind == "absorption" and self.self_reversal == "possible":
            yield (
                "self_reversal",
                "must be 'excluded' with kind = 'absorption': only an emission line reverses",
            )
        offsets = [component.offset_pm for component in self.pattern]
        if len(set(offsets)) < len(offsets):
            yield "pattern", "holds one offset_pm twice; each component once"
        if len(offsets) == 1:
            yield "pattern", "one component is no pattern; leave it out, or give all of them"
        for key in ("known_lines_air_nm", "known_lines_vacuum_nm"):
            lines = getattr(self, key)
            twice = sorted({line for line in lines if lines.count(line) > 1})
            if twice:
                yield key, f"names the line at {twice[0]:g} nm twice; each line once"


class Sweep(StrictModel):
    """`[sweep]`: one pass of points over the window."""

    dwell_s: Annotated[float, Field(gt=0.0, le=3600.0)]
    """At each point of a sweep."""
    step_pm: Picometres | None = None
    """From point to point; an eighth of a line's width if nothing is given, and at most that."""


class Setup(StrictModel):
    """`[setup]`: how the bench stands for this target, where that differs from the bench file."""

    order: Annotated[int, Field(ge=1, le=100)] | None = None
    """Order of the grating."""
    entrance_slit_um: SlitUm | None = None
    """Only with motorised slits."""
    exit_slit_um: SlitUm | None = None
    """Only with motorised slits."""
    filter: Name | None = None
    """A name of the bench's [[filters]], or none."""
    lamp: Name | None = None
    """A position of the bench's lamp turret."""


class Decide(StrictModel):
    """`[goal.decide]`: one line or two, and how sure. The probabilities hold for a whole run, all looks."""

    false_alarm: Probability = 1e-3
    """A single line called a pair, over a whole run."""
    smallest_separation_pm: Picometres | None = None
    """'single' excludes a companion from here on outwards; the width of one line if nothing is given."""
    smallest_ratio: Annotated[float, Field(gt=0.0, le=1.0)] = 0.1
    """And down to this share of the main line, by area."""
    miss_probability: Probability = 0.05
    """Such a companion overlooked."""


class Goal(StrictModel):
    """`[goal]`: when the target is settled."""

    separation_uncertainty_pm: Picometres | None = None
    """Standard uncertainty of a separation: statistics, line shape, scale and drive together."""
    ratio_uncertainty: Annotated[float, Field(gt=0.0, lt=1.0)] | None = None
    """Standard uncertainty of the ratio, weaker over stronger line by area."""
    resolving_power_at_least: Annotated[float, Field(gt=1.0, le=1e8)] | None = None
    """Wavelength over the width of a line as recorded; a decision, yes or no."""
    decide: Decide | None = None

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if all(getattr(self, key) is None for key in type(self).model_fields):
            numbers = "separation_uncertainty_pm, ratio_uncertainty, resolving_power_at_least"
            yield "", f"needs at least one of {numbers} and the table [goal.decide]"

    @property
    def decision(self) -> Decide:
        """How one line or two is decided: as the file says, else the defaults."""
        return self.decide or Decide()


class Limits(StrictModel):
    """`[limits]`: when to stop without the goal."""

    time_s: Annotated[float, Field(gt=0.0, le=1e7)]
    """Time at the bench."""
    light_s: Annotated[float, Field(gt=0.0, le=1e7)] | None = None
    """Time counted with the shutter open."""
    deadline_utc: datetime.datetime | None = None
    """No point is begun after it."""
    when_out_of_reach: Literal["refuse", "measure"] = "refuse"
    """What to do about a goal that no light can reach."""

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.light_s is not None and self.light_s > self.time_s:
            yield "light_s", f"must be at most time_s = {self.time_s:g}, in s"
        if self.deadline_utc is not None and self.deadline_utc.utcoffset() != datetime.timedelta(0):
            yield "deadline_utc", "must be in UTC, with a Z at its end, such as 2031-02-12T05:00:00Z"


class Target(StrictModel):
    """A whole target file."""

    format: Literal[1]
    name: Name
    """Files are named after it."""
    wavelength_air_nm: Wavelength | None = None
    """Expected place of the main line, in standard air."""
    wavelength_vacuum_nm: Wavelength | None = None
    """Expected place of the main line, in vacuum."""
    specimen_serial: Name | None = None
    """Of the lamp or cell that is judged; files are named after it too."""
    setup: Setup = Setup()
    window: Window | None = None
    windows: ListOf[PlacedWindow] = ()
    model: Model = Model()
    sweep: Sweep
    goal: Goal
    limits: Limits

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if not slug_of(self.name):
            yield "name", "must hold a letter or a digit: files are named after it"
        if self.specimen_serial is not None and not slug_of(self.specimen_serial):
            yield "specimen_serial", "must hold a letter or a digit: files are named after it"
        unsure = list(_one_wavelength(self))
        if unsure:
            yield from unsure
            return
        yield from self._window_checks()
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
        for window in self.windows or ((self.window,) if self.window is not None else ()):
            outright, step_pm = window.outright_pm, self.sweep.step_pm
            if outright is not None and step_pm is not None and step_pm * 8 > sum(outright):
                yield "sweep.step_pm", f"must be at most an eighth of the window of {sum(outright):g} pm"

    def _window_checks(self) -> Iterator[tuple[str, str]]:
        if self.window is not None and self.windows:
            yield "windows", "give either [window] or [[windows]], not both"
        if len(self.windows) == 1:
            yield "windows", "holds one window only; give it as [window], around the target's own line"
        for number, window in enumerate(self.windows):
            if (window.wavelength_air_nm is None) != (self.medium == "vacuum"):
                yield (
                    f"windows[{number}].wavelength_{window.medium}_nm",
                    f"must be wavelength_{self.medium}_nm: the target's own wavelength is in {self.medium}",
                )

    @property
    def stretches(self) -> tuple[tuple[float, Window], ...]:
        """(wavelength nm in `medium`, window) of every stretch to be swept, as the file has them."""
        if self.windows:
            return tuple((window.wavelength_nm, window) for window in self.windows)
        return ((self.wavelength_nm, self.window or Window()),)

    @property
    def medium(self) -> Literal["air", "vacuum"]:
        return _medium(self)

    @property
    def wavelength_nm(self) -> float:
        """Expected place of the main line, in `medium`."""
        return _wavelength_nm(self)

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

    @property
    def serial_slug(self) -> str:
        """The specimen's serial as file names carry it; "" without one."""
        serial = self.target.specimen_serial
        return "" if serial is None else slug_of(serial)


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
