"""What the fit draws through the points of a run: the whole, its parts, and its rival."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from analysis.counting import Counts, live_time_s
from analysis.curve import curve
from analysis.question import FitSummary, Look, Question, from_json
from analysis.readings import AnalogueLaw
from daq.planned import detector_law
from daq.records import Body

FloatArray: TypeAlias = NDArray[np.float64]
Values: TypeAlias = dict[str, float]

FINE_BETWEEN = 4
"""Places drawn between two neighbouring positions."""

FIT_OF = {"single": "single", "self-reversed": "self_reversed"}
"""Name of the fit in a look that a verdict rests on; "pair" for any other."""

FIT_IN_WORDS = {"single": "one line", "pair": "two lines", "self_reversed": "self-reversed line"}


@dataclass(frozen=True, slots=True)
class Component:
    """One part of the fit over `Curves.fine_nm`, background and dark included."""

    label: str
    rate_per_s: FloatArray


@dataclass(frozen=True, slots=True)
class Curves:
    """The fit that a verdict rests on; rates in recorded counts per s, dark included, dead time left out.

    fine_nm : (M,) ascending, every position of the points among them. whole, rival, base : (M,) rates at the
    strength of the first comb; base is background and dark. at_points : (N,) rates with the strength of each
    point's own comb and moment; strength : (N,) that strength, relative. residual_sigma : (N,) counts less
    the fit, in standard deviations that the fit expects of them.
    """

    label: str
    rival_label: str
    fine_nm: FloatArray
    whole: FloatArray
    rival: FloatArray
    base: FloatArray
    components: tuple[Component, ...]
    dark_per_s: float
    at_points: FloatArray
    strength: FloatArray
    residual_sigma: FloatArray


def curves_of(look_record: Body, head: Body, counts: Counts) -> Curves:
    """The curves of a look's record through the counts it weighed, all of them visited positions.

    Raises KeyError, TypeError or ValueError for a record that this version does not understand.
    """
    plain = {key: value for key, value in look_record.items() if key not in ("horizon", "at_ns")}
    look, question = from_json(Look, plain), from_json(Question, head["question"])
    fit = FIT_OF.get(look.verdict, "pair")
    rival = "pair" if fit == "single" else "single"
    fine = _finer(counts)

    def draw(of: str, through: Counts, changes: Values) -> FloatArray:
        made = curve(_with(look, of, changes), question, through, kind=of.replace("_", "-"))
        return np.asarray(made, dtype=np.float64)

    def steady(changes: Values, of: str = fit) -> FloatArray:
        """One rate a fine place: the place added for the sake of the groups is taken off."""
        return draw(of, fine, changes)[: fine.wavelength_nm.size - 1]

    fine_nm = fine.wavelength_nm[:-1]
    whole, summary = steady({}), _summary(look, fit)
    base = steady(dict.fromkeys(_areas(summary), 0.0))
    at_points = draw(fit, counts, {})
    dark = summary.value("dark_per_s") if "dark_per_s" in summary.names else 0.0
    light = whole[np.searchsorted(fine_nm, counts.wavelength_nm)] - dark
    strength = np.divide(at_points - dark, light, out=np.ones_like(light), where=light > 1e-9)
    law = detector_law(head["plan"])

    def recorded(rate_per_s: FloatArray) -> FloatArray:
        """A photocurrent is fitted in events of its shot noise and recorded in units of charge."""
        return law.recorded_per_s(rate_per_s) if isinstance(law, AnalogueLaw) else rate_per_s

    parts = _components(summary, question, steady)
    return Curves(
        label=FIT_IN_WORDS[fit],
        rival_label=FIT_IN_WORDS[rival],
        fine_nm=fine_nm,
        whole=recorded(whole),
        rival=recorded(steady({}, rival)),
        base=recorded(base),
        components=tuple(Component(part.label, recorded(part.rate_per_s)) for part in parts),
        dark_per_s=float(recorded(np.array([dark]))[0]),
        at_points=recorded(at_points),
        strength=np.where(strength > 1e-3, strength, 1.0),
        residual_sigma=_residual_sigma(counts, at_points),
    )


def _residual_sigma(counts: Counts, model_per_s: FloatArray) -> FloatArray:
    """Poisson scatter of what the fit expects, not of the single reading; (N,)."""
    live_s = live_time_s(counts.counts, counts.gate_s, dead_time_s=counts.dead_time_s)
    dispersion = 1.0 if counts.dispersion is None else counts.dispersion
    expected = np.maximum(model_per_s, 1e-12) * live_s
    made: FloatArray = (counts.counts - expected) / np.sqrt(dispersion * expected)
    return made


def _components(
    summary: FitSummary, question: Question, steady: Callable[[Values], FloatArray]
) -> tuple[Component, ...]:
    """Each line alone on the background: the fit with every other line's area at nothing."""
    known = [name for name in _areas(summary) if name != "area"]
    made = []
    if "ratio" in summary.names:
        gone = dict.fromkeys(known, 0.0)
        first = steady({"ratio": 0.0, **gone})
        base = steady({"area": 0.0, **gone})
        made = [Component("line 1", first), Component("line 2", steady(gone) - first + base)]
    elif known:
        made = [Component("the line", steady(dict.fromkeys(known, 0.0)))]
    for name, where_nm in zip(known, question.feature.known_lines_nm, strict=True):
        gone = dict.fromkeys((other for other in _areas(summary) if other != name), 0.0)
        made.append(Component(f"known line, {where_nm:.3f} nm", steady(gone)))
    return tuple(made)


def _areas(summary: FitSummary) -> list[str]:
    """Parameters that are a line's strength; the second line's is a ratio to the first."""
    return [name for name in summary.names if name == "area" or name.endswith("_area")]


def _summary(look: Look, fit: str) -> FitSummary:
    found: FitSummary | None = getattr(look, fit)
    if found is None:
        raise ValueError(f"the look holds no fit of a {FIT_IN_WORDS[fit]}")
    return found


def _with(look: Look, fit: str, changes: Values) -> Look:
    """The look with some parameters of one fit put elsewhere."""
    if not changes:
        return look
    summary = _summary(look, fit)
    values = tuple(
        changes.get(name, value) for name, value in zip(summary.names, summary.values, strict=True)
    )
    fields: dict[str, Any] = {fit: replace(summary, values=values)}
    return replace(look, **fields)


def _finer(counts: Counts) -> Counts:
    """Places between the positions, all of the first group; one at the end keeps the number of groups."""
    x = np.unique(counts.wavelength_nm)
    shares = np.arange(FINE_BETWEEN + 1) / (FINE_BETWEEN + 1)
    places = np.append((x[:-1, None] + np.diff(x)[:, None] * shares).ravel(), [x[-1], x[-1]])
    nothing = np.zeros(places.size)
    group = np.zeros(places.size, dtype=np.int64)
    group[-1] = counts.groups - 1
    return replace(
        counts, wavelength_nm=places, counts=nothing, gate_s=nothing + 1.0, group=group, sigma=None,
        exposure=None, dispersion=None,
    )  # fmt: skip
