"""What is asked, what is known, what is answered: the data types of the verdict, and their JSON.

All lengths are nanometres on the data's own scale (air or vacuum: the verdict does not care).
"""

from __future__ import annotations

import math
import types
from dataclasses import dataclass, fields, is_dataclass
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


@dataclass(frozen=True, slots=True)
class Question:
    """One line or two, at what risks, and how well the separation must be known (None: no such goal)."""

    feature: Feature
    false_alarm: float
    smallest_separation_nm: float
    smallest_ratio: float
    miss_probability: float
    separation_uncertainty_nm: float | None
    scale_relative_uncertainty: float


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
    """Standard uncertainties of the separation by cause, nm; combined by their root sum of squares."""

    statistics_nm: float
    shape_nm: float
    scale_nm: float


@dataclass(frozen=True, slots=True)
class Exclusion:
    """No second line above `ratio_limit` (area, weaker over stronger; 95 %) at this signed separation.

    None: nothing below equal strength is excluded there.
    """

    separation_nm: float
    ratio_limit: float | None


@dataclass(frozen=True, slots=True)
class Look:
    """The answer of one evaluation of the evidence; everything the next look needs is in it.

    verdict : "single", "pair" or "undecided". The pair's numbers are given whatever the verdict.
    separation_nm : >= 0. centre_nm is the stronger line, second_nm the weaker one, ratio = weaker/stronger
    in area. sigma_nm and gamma_nm are the Voigt part, fwhm_nm the whole observed single line.
    log_e_* : evidence for each claim, natural log; max_* the running maxima held against bound_*.
    log_numerator_* : sums of predictive log densities; the next block is predicted by the values of single
    and pair, whose background is anchored at the two ends of window_nm.
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
    log_e_pair: float
    log_e_single: float
    bound_pair: float
    bound_single: float
    max_log_e_pair: float
    max_log_e_single: float
    log_numerator_pair: float
    log_numerator_single: float
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
        if not isinstance(data, dict) or set(data) != set(hints):
            odd = sorted(set(hints).symmetric_difference(data if isinstance(data, dict) else ()))
            raise ValueError(f"{getattr(kind, '__name__', kind)}: keys missing or unknown: {', '.join(odd)}")
        return kind(**{key: _decode(hints[key], data[key]) for key in hints})  # type: ignore[operator]
    if kind is float:
        return float("nan") if data is None else float(data)
    if not isinstance(data, kind):
        raise ValueError(f"expected {kind.__name__}, got {data!r}")
    return data
