"""Cold fits: where a fit starts is found from the data alone, never from an earlier answer.

Over a grid of places (a quarter of the expected FWHM apart) and a few widths the areas and the background
follow by linear least squares from one Gram matrix; the best few different places are polished by `fit`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product
from typing import TypeAlias

import numpy as np

from analysis.background import stretch_of
from analysis.counting import FloatArray
from analysis.fit import FitResult, fit
from analysis.gram import gram_of
from analysis.model import FeatureModel, neutral
from analysis.profile import FWHM_PER_SIGMA
from analysis.question import Question
from analysis.reversal import NAMES

PAIR_STARTS = 4
KNOWN_ZONE_FWHM = 0.3
"""A second line is not sought closer than this to a known line: there it could only replace it."""
_ROUGH_STEPS = 6

Limits: TypeAlias = tuple[FloatArray, FloatArray]


@dataclass(frozen=True, slots=True)
class Bounds:
    """What a pair may be: ratio of the second line to the main one, distance in absolute value, nm."""

    lowest_ratio: float
    highest_ratio: float
    smallest_separation_nm: float


def pairs_of_question(question: Question) -> Bounds:
    """Every pair that `single` denies."""
    # with widths of their own, either of the two may be the weaker one
    most = 1.0 / question.smallest_ratio if question.feature.widths == "tied" else 1.0
    return Bounds(question.smallest_ratio, most, question.smallest_separation_nm)


def fit_single(model: FeatureModel, *, tolerance: float = 1e-6) -> FitResult:
    """The best single line. ValueError if the model is not of one line with the built-in background."""
    found = [start for width in _widths(model) for start in _single_starts(model, width)]
    # nothing stands out: begin with no line at all
    starts = _choose(model, found, most=2) or [np.clip(neutral(model), model.lower, model.upper)]
    return _polish(model, starts, [_in_window(model, start) for start in starts], tolerance)


def fit_pair(
    model: FeatureModel, single: FitResult, *, within: Bounds | None = None, tolerance: float = 1e-6
) -> FitResult:
    """The best pair; `single` (of the same data) lends its widths. within: bounds of a composite rival."""
    widths = [*_widths(model), (0.9 * single.value("sigma_nm"), _gamma(single))]
    found = [start for width in widths for start in _pair_starts(model, width, within)]
    starts = _choose(model, found, most=PAIR_STARTS) or [_beside(model, single, within)]
    return _polish(model, starts, [_limits(model, start, within) for start in starts], tolerance)


def fit_reversed(
    model: FeatureModel, *, at_least: Mapping[str, float] | None = None, tolerance: float = 1e-6
) -> FitResult:
    """The best self-reversed line. at_least : lower bounds of parameters, of a composite rival."""
    low, high = model.lower.copy(), model.upper.copy()
    for name, value in (at_least or {}).items():
        low[model.index[name]] = min(max(low[model.index[name]], value), high[model.index[name]])
    starts = _reversed_starts(model, low, high)
    limits = []
    for start in starts:
        left, right = _in_window(model, start)
        limits.append((np.maximum(low, left), np.minimum(high, right)))
    return _polish(model, starts, limits, tolerance)


def _reversed_starts(model: FeatureModel, low: FloatArray, high: FloatArray) -> list[FloatArray]:
    """For each of a few depths of the layer the best of a coarse choice of widths and places.

    Sought afresh, over the whole window: a single line that fits badly stands on one of the two humps.
    """
    feature, starts = model.feature, []
    expected, gamma = _widths(model)[0]
    broad = feature.fwhm_nm / FWHM_PER_SIGMA
    for depth in (1.0, 3.5):
        found = []
        for sigma, absorber in product((expected, 0.6 * broad, 1.2 * broad, 2.4 * broad), (0.4, 0.8)):
            layer = np.clip((depth, absorber, 0.0), *(bound[_layer(model)] for bound in (low, high)))
            width = (float(np.clip(sigma, low[model.index["sigma_nm"]], None)), gamma)
            found += _single_starts(model, width, layer)
        starts += _choose(model, found, most=1)
    return starts or [np.clip(neutral(model), low, high)]


def _layer(model: FeatureModel) -> slice:
    """Where the three numbers of a reversing layer stand."""
    first = model.index[NAMES[0]]
    return slice(first, first + len(NAMES))


def _beside(model: FeatureModel, single: FitResult, within: Bounds | None) -> FloatArray:
    """The single line and a faint second one beside it: where the grid finds no pair at all."""
    made = neutral(model)
    for place, name in enumerate(single.names):
        made[model.index[name]] = single.values[place]
    smallest = 0.0 if within is None else within.smallest_separation_nm
    made[model.index["ratio"]] = 0.1 if within is None else within.lowest_ratio
    made[model.index["separation_nm"]] = max(model.feature.fwhm_nm, smallest)
    if "sigma2_nm" in model.index:
        made[model.index["sigma2_nm"]] = single.value("sigma_nm")
    return made


def _choose(model: FeatureModel, found: list[tuple[float, FloatArray]], *, most: int) -> list[FloatArray]:
    """The best of the starts (gain, values), no two of them with both lines in the same places."""
    chosen: list[FloatArray] = []
    index, near = model.index, 0.3 * model.feature.fwhm_nm
    for _, start in sorted(found, key=lambda item: -item[0]):
        place = start[index["centre_nm"]]
        second = place + model.value(start, "separation_nm")
        if all(
            abs(place - other[index["centre_nm"]]) > near
            or abs(second - other[index["centre_nm"]] - model.value(other, "separation_nm")) > near
            for other in chosen
        ):
            chosen.append(start)
        if len(chosen) == most:
            break
    return chosen


def _gamma(made: FitResult) -> float:
    return made.value("gamma_nm") if "gamma_nm" in made.names else 0.0


def _widths(model: FeatureModel) -> list[tuple[float, float]]:
    """(sigma, gamma) worth starting from: as expected, and with the whole line 1.4 times as broad."""
    base = neutral(model)
    sigma, gamma = model.value(base, "sigma_nm"), model.value(base, "gamma_nm")
    return [(sigma, gamma), (float(np.hypot(sigma, model.feature.fwhm_nm / FWHM_PER_SIGMA)), gamma)]


def _known_gaps(model: FeatureModel) -> list[float]:
    """Distances of the known lines from the main line, nm."""
    return [known - model.feature.wavelength_nm for known in model.feature.known_lines_nm]


def _window(model: FeatureModel, place_nm: float) -> tuple[float, float]:
    windows = model.windows_nm
    return windows[int(stretch_of(windows, np.array([place_nm]))[0])]


def _in_window(model: FeatureModel, start: FloatArray) -> Limits:
    """The model's bounds, the main line kept to the window in which it starts."""
    low, high, centre = model.lower.copy(), model.upper.copy(), model.index["centre_nm"]
    left, right = _window(model, start[centre])
    low[centre], high[centre] = max(low[centre], left), min(high[centre], right)
    return low, high


def _limits(model: FeatureModel, start: FloatArray, within: Bounds | None) -> Limits:
    low, high = _in_window(model, start)
    ratio, separation = model.index["ratio"], model.index["separation_nm"]
    # the second line stays where there are data: outside it could be of any strength; where the window was
    # cut at the foot of a foreign line, inside by half a FWHM
    centre = start[model.index["centre_nm"]]
    margin = 0.0 if model.feature.reach_nm is None else 0.5 * model.feature.fwhm_nm
    left, right = _window(model, centre + start[separation])
    low[separation] = max(low[separation], left + margin - centre)
    high[separation] = min(high[separation], right - margin - centre)
    for gap in _known_gaps(model):
        if start[separation] > gap:
            low[separation] = max(low[separation], gap + KNOWN_ZONE_FWHM * model.feature.fwhm_nm)
        else:
            high[separation] = min(high[separation], gap - KNOWN_ZONE_FWHM * model.feature.fwhm_nm)
    if within is not None:
        low[ratio], high[ratio] = within.lowest_ratio, within.highest_ratio
        if start[separation] > 0.0:
            low[separation] = max(low[separation], within.smallest_separation_nm)
        else:
            high[separation] = min(high[separation], -within.smallest_separation_nm)
    return low, high


def _polish(
    model: FeatureModel,
    starts: list[FloatArray],
    limits: list[Limits],
    tolerance: float,
) -> FitResult:
    rough = [
        fit(model, start, lower=low, upper=high, tolerance=1e-2, iterations=_ROUGH_STEPS)
        for start, (low, high) in zip(starts, limits, strict=True)
    ]
    order = sorted(range(len(rough)), key=lambda k: -rough[k].log_likelihood)
    finals: list[FitResult] = []
    for k in order[:2]:
        # the runner-up is finished only where it could still win
        if finals and (rough[k].converged or rough[k].log_likelihood < finals[0].log_likelihood - 1.0):
            break
        low, high = limits[k]
        finals.append(fit(model, rough[k].values, lower=low, upper=high, tolerance=tolerance))
    return max(finals, key=lambda made: made.log_likelihood)


def _single_starts(
    model: FeatureModel, width: tuple[float, float], layer: FloatArray | None = None
) -> list[tuple[float, FloatArray]]:
    gram = gram_of(model, width, layer)
    main = np.arange(gram.places.size)
    columns = np.column_stack([main, gram.known, np.tile(gram.base, (main.size, 1))])
    solution, gain = gram.solve(columns)
    gain = np.where(solution[:, 0] > 0.0, gain, -np.inf)
    order = np.argsort(-gain, kind="stable")
    starts = []
    for k in order[:2]:
        start = _assemble(model, width, gram.places[k], None, solution[k])
        if layer is not None:
            start[_layer(model)] = layer
        starts.append((float(gain[k]), start))
    return starts


def _pair_starts(
    model: FeatureModel, width: tuple[float, float], within: Bounds | None
) -> list[tuple[float, FloatArray]]:
    gram = gram_of(model, width)
    number = np.arange(gram.places.size)
    main, second = np.repeat(number, number.size), np.tile(number, number.size)
    smallest = 0.0 if within is None else within.smallest_separation_nm
    apart = np.abs(gram.places[main] - gram.places[second])
    keep = (main != second) & (apart >= smallest - 0.5 * (gram.places[1] - gram.places[0]))
    for gap in _known_gaps(model):
        away = np.abs(gram.places[second] - gram.places[main] - gap)
        keep &= away > KNOWN_ZONE_FWHM * model.feature.fwhm_nm
    keep &= apart <= model.upper[model.index["separation_nm"]]
    main, second = main[keep], second[keep]
    columns = np.column_stack(
        [main, gram.second + second, gram.known[main], np.tile(gram.base, (main.size, 1))]
    )
    solution, gain = gram.solve(columns)
    ratio = solution[:, 1] / np.where(solution[:, 0] > 0.0, solution[:, 0], np.inf)
    # with one width for both, a second line stronger than the main one is the same pair the other way round
    most = np.inf if model.feature.widths == "tied" else 1.0
    low, high = (0.0, most) if within is None else (within.lowest_ratio, within.highest_ratio)
    gain = np.where((solution[:, 0] > 0.0) & (ratio >= low) & (ratio <= high), gain, -np.inf)
    if within is not None:
        for factor in (low, high):
            tied, tied_gain = gram.solve(columns, factor)
            better = (tied_gain > gain) & (tied[:, 0] > 0.0)
            gain = np.where(better, tied_gain, gain)
            spread = np.column_stack([tied[:, 0], factor * tied[:, 0], tied[:, 1:]])
            solution = np.where(better[:, None], spread, solution)
    best: list[int] = []
    for k in np.argsort(-gain, kind="stable")[:200].tolist():
        if len(best) == PAIR_STARTS or not np.isfinite(gain[k]):
            break
        if all(max(abs(main[k] - main[c]), abs(second[k] - second[c])) > 1 for c in best):
            best.append(k)
    return [
        (float(gain[k]), _assemble(model, width, gram.places[main[k]], gram.places[second[k]], solution[k]))
        for k in best
    ]


def _assemble(
    model: FeatureModel, width: tuple[float, float], main: float, second: float | None, solution: FloatArray
) -> FloatArray:
    made, index = neutral(model), model.index
    made[index["area"]] = solution[0]
    made[index["centre_nm"]] = main
    made[index["sigma_nm"]] = width[0]
    if "gamma_nm" in index:
        made[index["gamma_nm"]] = width[1]
    rest = solution[1:]
    if second is not None:
        made[index["separation_nm"]] = second - main
        made[index["ratio"]] = solution[1] / solution[0]
        if "sigma2_nm" in index:
            made[index["sigma2_nm"]] = width[0]
        rest = solution[2:]
    known = len(model.feature.known_lines_nm)
    if known:
        made[index["known_1_area"] : index["known_1_area"] + known] = np.maximum(rest[:known], 0.0)
    assert model.background is not None
    first = index[model.background.names[0]]
    level = rest[known:]
    if model.sigma is None:
        # never start at zero: a background that a few counts will need must be able to grow
        level = np.maximum(level, 0.01 * model.observed.sum() / model.gate.sum())
    made[first : first + level.size] = level
    return np.clip(made, model.lower, model.upper)
