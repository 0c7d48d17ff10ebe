"""What is asked, what is known, what is answered: the data types of the verdict, and their JSON.

All lengths are nanometres on the data's own scale (air or vacuum: the verdict does not care).
"""

from __future__ import annotations

import math
import types
from dataclasses import MISSING, dataclass, fields, is_dataclass
from typing import Any, TypeVar, Union, get_args, get_origin, get_type_hints

from analysis.counting import Counts

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Feature:
    """What is assumed about the feature and the instrument.

    wavelength_nm, fwhm_nm : expected place of the main line, expected FWHM of a single line as observed.
    box_widths_nm : full widths of the two slit images, or of a pixel and 0.0; 0.0 is absent.
    line_fwhm_nm : source line and diffraction together: the first guess of the Voigt part.
    shape : "voigt" or "gaussian". widths : "equal" or "free". background : "flat" or "slope".
    known_lines_nm : further lines of known place, strength free.
    shape_allowance : what may be left of the line-shape error, fraction of the peak.
    reach_nm : how far from the main line a second one is sought; None: as far as the data go.
    kind : "emission" or "absorption" (lines that take light out of a continuum).
    width_ratio : the second line's own width over the main one's where widths == "tied".
    line_fwhm_limit_nm : source line and diffraction together are known not to exceed this; None: not known.
    It bounds the Gaussian and the Lorentz part each: with both at their bounds a line is 1.64 times as broad.
    pattern : hyperfine or isotope components of every line, (offset nm, strength); () is one component. A
    line's place is the strength-weighted mean of its components, whatever the offsets count from.
    windows_nm : the stretches that are swept, ascending; each has a background of its own; () is one.
    self_reversal : "excluded", or "possible": then a self-reversed line is a rival of both claims.
    periodic_errors_nm : what is left of the drive's periodic errors, (amplitude nm, period nm) each.
    """

    wavelength_nm: float
    fwhm_nm: float
    box_widths_nm: tuple[float, float]
    line_fwhm_nm: float
    shape: str = "voigt"
    widths: str = "equal"
    background: str = "slope"
    known_lines_nm: tuple[float, ...] = ()
    shape_allowance: float = 0.01
    reach_nm: float | None = None
    kind: str = "emission"
    width_ratio: float = 1.0
    line_fwhm_limit_nm: float | None = None
    pattern: tuple[tuple[float, float], ...] = ()
    windows_nm: tuple[tuple[float, float], ...] = ()
    self_reversal: str = "excluded"
    periodic_errors_nm: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True, slots=True)
class Question:
    """One line or two, at what risks, and how well the numbers must be known (None: no such goal).

    resolving_power_at_least : wavelength over the observed FWHM of a line; a decision, yes or no.
    """

    feature: Feature
    false_alarm: float
    smallest_separation_nm: float
    smallest_ratio: float
    miss_probability: float
    separation_uncertainty_nm: float | None
    scale_relative_uncertainty: float
    ratio_uncertainty: float | None = None
    resolving_power_at_least: float | None = None


@dataclass(frozen=True, slots=True)
class Evidence:
    """What was counted so far.

    now : everything; estimates are made from it.
    swept : whole sweeps only, in which every position of a comb was counted for the same time (None: `now` is
    that). Claims are weighed on these: a comb's gain drops out of a block only if the block covers the comb.
    previous, first : `swept` at the previous look and at the first one (both None at look 1).

    All stand on the same N positions; a position not yet visited has gate_s 0.
    """

    now: Counts
    previous: Counts | None = None
    first: Counts | None = None
    swept: Counts | None = None


@dataclass(frozen=True, slots=True)
class FitSummary:
    """Best parameters of one model (P of them), their covariance (P, P) and how well it fits."""

    names: tuple[str, ...]
    values: tuple[float, ...]
    covariance: tuple[tuple[float, ...], ...]
    log_likelihood: float
    deviance: float
    pearson_chi2: float
    dof: int
    converged: bool
    iterations: int

    def value(self, name: str) -> float:
        """The parameter's value; ValueError if the model has none of that name."""
        return self.values[self.names.index(name)]


@dataclass(frozen=True, slots=True)
class Budget:
    """Standard uncertainties of the separation by cause, nm.

    drive_nm : what is left of the drive's periodic errors, rms over their phase.
    """

    statistics_nm: float
    shape_nm: float
    scale_nm: float
    drive_nm: float = 0.0

    @property
    def combined_nm(self) -> float:
        """Root sum of squares."""
        parts = (self.statistics_nm, self.shape_nm, self.scale_nm, self.drive_nm)
        return math.sqrt(sum(part**2 for part in parts))


@dataclass(frozen=True, slots=True)
class Exclusion:
    """No second line above `ratio_limit` (area, weaker over stronger; 95 %) at this signed separation.

    None: nothing below equal strength is excluded there.
    """

    separation_nm: float
    ratio_limit: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Claims:
    """Evidence for each claim, natural logs.

    log_e_* : now; bound_* : what it must reach; max_log_e_* : the most it reached, held against the bound.
    log_numerator_* : sums of predictive log densities (see `analysis.evidence`). bound_reversed None:
    self-reversal is excluded and nothing is claimed of it.
    """

    log_e_pair: float
    log_e_single: float
    bound_pair: float
    bound_single: float
    max_log_e_pair: float
    max_log_e_single: float
    log_numerator_pair: float
    log_numerator_single: float
    log_e_reversed: float = 0.0
    bound_reversed: float | None = None
    max_log_e_reversed: float = 0.0
    log_numerator_reversed: float = 0.0

    @property
    def said(self) -> tuple[str, ...]:
        """The claims that reached their bounds: of "pair", "single" and "self-reversed"."""
        made = {
            "pair": self.max_log_e_pair >= self.bound_pair,
            "single": self.max_log_e_single >= self.bound_single,
            "self-reversed": self.bound_reversed is not None
            and self.max_log_e_reversed >= self.bound_reversed,
        }
        return tuple(name for name, is_said in made.items() if is_said)


@dataclass(frozen=True, slots=True, kw_only=True)
class Look(Claims):
    """The answer of one evaluation of the evidence; everything the next look needs is in it.

    verdict : "single", "pair", "self-reversed" or "undecided". The pair's numbers are given whatever it is.
    separation_nm : >= 0. centre_nm is the stronger line, second_nm the weaker one, ratio = weaker/stronger
    in area. sigma_nm and gamma_nm are the Voigt part, fwhm_nm the whole observed width of one component of a
    single line (pattern and dip left out), resolving_power the wavelength over it, source width included.
    The next block is predicted by the values of single, pair and self_reversed (None: excluded), whose
    background is anchored at the two ends of window_nm.
    """

    number: int
    verdict: str
    goal_reached: bool
    separation_nm: float | None
    separation_u_nm: float | None
    budget: Budget | None
    ratio: float | None
    ratio_u: float | None
    centre_nm: float
    centre_u_nm: float | None
    second_nm: float | None
    sigma_nm: float
    gamma_nm: float
    fwhm_nm: float
    fwhm_u_nm: float | None
    background_per_s: float
    background_u_per_s: float | None
    dark_per_s: float | None
    dark_u_per_s: float | None
    single: FitSummary
    pair: FitSummary
    self_reversed: FitSummary | None = None
    resolving_power: float | None = None
    resolving_power_u: float | None = None
    window_nm: tuple[float, float]
    exclusion: tuple[Exclusion, ...]
    flags: tuple[str, ...]
    evidence: tuple[str, ...]


def to_json(value: Any) -> Any:
    """Plain JSON types of a Question, a Look or any part of them; a number that is not finite becomes null.

    Floats stay floats: Python's json writes their repr, which reads back to the same bits.
    """
    if isinstance(value, Counts):
        raise ValueError("counts belong in the journal, not in JSON")
    if is_dataclass(value) and not isinstance(value, type):
        return {field.name: to_json(getattr(value, field.name)) for field in fields(value)}
    if isinstance(value, (tuple, list)):
        return [to_json(item) for item in value]
    if value is None or isinstance(value, (str, bool, int)):
        return value
    number = float(value)
    return number if math.isfinite(number) else None


def from_json(kind: type[T], data: Any) -> T:
    """The inverse of `to_json`: `from_json(Look, json.loads(text))`. ValueError on odd keys."""
    made: T = _decode(kind, data)
    return made


def _decode(kind: Any, data: Any) -> Any:
    origin, args = get_origin(kind), get_args(kind)
    if origin in (Union, types.UnionType):
        inner = next(arg for arg in args if arg is not type(None))
        return None if data is None else _decode(inner, data)
    if origin is tuple:
        kinds = [args[0]] * len(data) if args[-1] is Ellipsis else list(args)
        return tuple(_decode(item_kind, item) for item_kind, item in zip(kinds, data, strict=True))
    if is_dataclass(kind):
        hints = get_type_hints(kind)
        given = set(data) if isinstance(data, dict) else set()
        # a record made before a field was there means its default
        needed = {f.name for f in fields(kind) if f.default is MISSING and f.default_factory is MISSING}
        odd = sorted((needed - given) | (given - set(hints)))
        if odd:
            raise ValueError(f"{getattr(kind, '__name__', kind)}: keys missing or unknown: {', '.join(odd)}")
        return kind(**{key: _decode(hints[key], data[key]) for key in data})  # type: ignore[operator]
    if kind is float:
        return float("nan") if data is None else float(data)
    if not isinstance(data, kind):
        raise ValueError(f"expected {kind.__name__}, got {data!r}")
    return data
