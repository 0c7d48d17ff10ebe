"""The claims of a run: every look adds a block to their evidence and holds it against the best rivals.

    pair           against every single line, and every self-reversed one where that is possible
    single         against every pair of the question, and every self-reversed line of the question
    self-reversed  against every single line and every pair

How the evidence is made and why it stays valid is in `analysis.evidence`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from analysis.background import Background, LinearBackground
from analysis.candidates import PAIR, REVERSED, SINGLE, model_of, summary_of
from analysis.counting import Counts
from analysis.evidence import between, log_shares
from analysis.fit import FitResult
from analysis.model import FeatureModel, vector
from analysis.question import Claims, Evidence, Look, Question
from analysis.starts import fit_pair, fit_reversed, fit_single, pairs_of_question

RIVAL_TOLERANCE = 1e-3
"""A rival's likelihood is needed to this much of a natural logarithm."""
QUESTION_DEPTH, QUESTION_WIDTH, QUESTION_HUMPS = 1.5, 0.4, 1.69
"""A self-reversed line is a rival of `single` from this optical depth and absorber width on, where its humps
stand the question's smallest separation apart or more: 2 q sqrt(2 ln(tau/q^2)) emitter widths (where the
slope of the profile vanishes), which is 1.69 at these two and nowhere less beyond."""
AMBIGUOUS = "self-reversed-or-pair"


@dataclass(frozen=True, slots=True)
class Weighed:
    """is_ambiguous : a plain single line is ruled out, whether by a pair or a self-reversed line is open."""

    claims: Claims
    is_ambiguous: bool = False


def weigh(evidence: Evidence, question: Question, previous: Look | None) -> Weighed:
    """The claims after this look; at the first one nothing is claimed yet."""
    is_reversal_possible = question.feature.self_reversal == "possible"
    bound_pair = -float(np.log(question.false_alarm))
    bounds = {"bound_pair": bound_pair, "bound_single": -float(np.log(question.miss_probability))}
    if is_reversal_possible:
        bounds["bound_reversed"] = bound_pair
    if previous is None or evidence.previous is None or evidence.first is None:
        nothing = {f"{part}_{name}": 0.0 for part in _PARTS for name in ("pair", "single")}
        return Weighed(Claims(**nothing, **bounds))
    swept = evidence.now if evidence.swept is None else evidence.swept
    block = between(swept, evidence.previous)
    if not block.counts.any():
        return Weighed(previous, AMBIGUOUS in previous.flags)
    rivals = _Rivals(between(swept, evidence.first), question)
    single = rivals.single()
    for_pair = previous.log_numerator_pair + _predicted(block, question, previous, PAIR)
    for_single = previous.log_numerator_single + _predicted(block, question, previous, SINGLE)
    asked_pair = rivals.pair(single, is_of_question=True)
    if not is_reversal_possible:
        parts = _parts("pair", for_pair, single.log_density, previous)
        parts |= _parts("single", for_single, asked_pair.log_density, previous)
        return Weighed(Claims(**parts, **bounds))
    for_reversed = previous.log_numerator_reversed + _predicted(block, question, previous, REVERSED)
    any_reversed = rivals.self_reversed()
    asked_reversed = any_reversed
    if not rivals.is_of_question(any_reversed):
        asked_reversed = rivals.self_reversed(is_of_question=True)
    any_pair = rivals.pair(single)
    one_line = max(single.log_density, any_reversed.log_density)
    not_single = max(asked_pair.log_density, asked_reversed.log_density)
    not_reversed = max(single.log_density, any_pair.log_density, asked_pair.log_density)
    parts = _parts("pair", for_pair, one_line, previous)
    parts |= _parts("single", for_single, not_single, previous)
    parts |= _parts("reversed", for_reversed, not_reversed, previous)
    # the mean of two e-processes is one
    either = float(np.logaddexp(for_pair, for_reversed)) - float(np.log(2.0)) - single.log_density
    return Weighed(Claims(**parts, **bounds), either >= bound_pair)


_PARTS = ("log_e", "max_log_e", "log_numerator")


def _parts(name: str, numerator: float, rival: float, previous: Look) -> dict[str, float]:
    log_e = numerator - rival
    most = max(getattr(previous, f"max_log_e_{name}"), log_e)
    return {f"{part}_{name}": value for part, value in zip(_PARTS, (log_e, most, numerator), strict=True)}


@dataclass(frozen=True, slots=True)
class _Rival:
    best: FitResult
    log_density: float


@dataclass(frozen=True, slots=True)
class _Rivals:
    """The best of what a claim denies, on everything tested so far."""

    tested: Counts
    question: Question

    def single(self) -> _Rival:
        model = self._model(SINGLE)
        return _weighed(model, fit_single(model, tolerance=RIVAL_TOLERANCE))

    def pair(self, single: _Rival, *, is_of_question: bool = False) -> _Rival:
        within = pairs_of_question(self.question) if is_of_question else None
        model = self._model(PAIR)
        return _weighed(model, fit_pair(model, single.best, within=within, tolerance=RIVAL_TOLERANCE))

    def self_reversed(self, *, is_of_question: bool = False) -> _Rival:
        at_least = self._least() if is_of_question else None
        model = self._model(REVERSED)
        best = fit_reversed(model, at_least=at_least, tolerance=RIVAL_TOLERANCE)
        return _weighed(model, best)

    def is_of_question(self, reversed_line: _Rival) -> bool:
        """Whether a self-reversed line lies within the question's bounds."""
        return all(reversed_line.best.value(name) >= least for name, least in self._least().items())

    def _least(self) -> dict[str, float]:
        """Lower bounds of a self-reversed line of the question."""
        emitter_nm = self.question.smallest_separation_nm / QUESTION_HUMPS
        return {"reversal_depth": QUESTION_DEPTH, "absorber_width": QUESTION_WIDTH, "sigma_nm": emitter_nm}

    def _model(self, kind: str) -> FeatureModel:
        return model_of(kind, self.tested, self.question.feature, with_dark=False, with_modes_bounded=True)


def _weighed(model: FeatureModel, best: FitResult) -> _Rival:
    return _Rival(best, log_shares(model, best.values))


def _predicted(block: Counts, question: Question, previous: Look, kind: str) -> float:
    """Log density of the block under what the previous look predicted."""
    feature = question.feature
    ends: Background | None = None  # stretches of their own have stated ends
    if len(feature.windows_nm) < 2:
        ends = LinearBackground(*previous.window_nm, feature.background == "slope")
    model = FeatureModel(
        block, feature, 2 if kind == PAIR else 1, background=ends, is_reversed=kind == REVERSED
    )
    summary = summary_of(previous, kind)
    known = {
        name: value for name, value in zip(summary.names, summary.values, strict=True) if name in model.index
    }
    return log_shares(model, vector(model, known))
