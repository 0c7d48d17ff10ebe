"""What a feature may be: one line, a pair, a self-reversed line; each as a model and as its best fit."""

from __future__ import annotations

from dataclasses import dataclass

from analysis.counting import Counts
from analysis.fit import FitResult
from analysis.model import FeatureModel
from analysis.question import Feature, FitSummary, Look
from analysis.starts import fit_pair, fit_reversed, fit_single

SINGLE, PAIR, REVERSED = "single", "pair", "self-reversed"


@dataclass(frozen=True, slots=True)
class Candidate:
    """A model of the counts with its best parameters."""

    model: FeatureModel
    best: FitResult


@dataclass(frozen=True, slots=True)
class Candidates:
    """All of them from the same counts; self_reversed is None where it is excluded."""

    single: Candidate
    pair: Candidate
    self_reversed: Candidate | None = None


def model_of(
    kind: str, counts: Counts, feature: Feature, *, with_dark: bool = True, with_modes_bounded: bool = False
) -> FeatureModel:
    """The model of "single", "pair" or "self-reversed"; ValueError for another kind."""
    if kind not in (SINGLE, PAIR, REVERSED):
        raise ValueError(f"kind = {kind!r}; allowed: 'single', 'pair', 'self-reversed'")
    return FeatureModel(
        counts,
        feature,
        2 if kind == PAIR else 1,
        with_dark=with_dark,
        with_modes_bounded=with_modes_bounded,
        is_reversed=kind == REVERSED,
    )


def fit_candidates(counts: Counts, feature: Feature) -> Candidates:
    """Cold fits of everything that the feature may be."""
    single_model, pair_model = model_of(SINGLE, counts, feature), model_of(PAIR, counts, feature)
    single = fit_single(single_model)
    pair = Candidate(pair_model, fit_pair(pair_model, single))
    made = Candidates(Candidate(single_model, single), pair)
    if feature.self_reversal == "excluded":
        return made
    reversed_model = model_of(REVERSED, counts, feature)
    return Candidates(made.single, pair, Candidate(reversed_model, fit_reversed(reversed_model)))


def summary_of(look: Look, kind: str) -> FitSummary:
    """A look's fit of that kind; ValueError for another kind, or where self-reversal was excluded."""
    made = {SINGLE: look.single, PAIR: look.pair, REVERSED: look.self_reversed}.get(kind)
    if made is None:
        raise ValueError(f"the look has no fit of kind {kind!r}; allowed: 'single', 'pair', 'self-reversed'")
    return made
