"""One line or two: the verdict, with what it rests on.

`look` answers during a run, as often as wanted (see `analysis.evidence` for why its claims stay valid);
`weigh_once` answers for a recorded spectrum, one fixed sample. Both are pure functions of their arguments and
fit cold: an earlier look lends its predictions to the evidence, never a start to a fit.
"""

from __future__ import annotations

import numpy as np

from analysis.answer import Claims, describe
from analysis.counting import LOAD_LIMIT, Counts
from analysis.evidence import between, log_shares
from analysis.model import FeatureModel, LinearBackground, vector
from analysis.question import (
    Budget,
    Evidence,
    Exclusion,
    Feature,
    FitSummary,
    Look,
    Question,
    from_json,
    to_json,
)
from analysis.recorded import guess_feature, weigh_once
from analysis.starts import Bounds, fit_pair, fit_single

__all__ = [
    "Budget",
    "Counts",
    "Evidence",
    "Exclusion",
    "Feature",
    "FitSummary",
    "Look",
    "Question",
    "from_json",
    "guess_feature",
    "look",
    "to_json",
    "weigh_once",
]

RIVAL_TOLERANCE = 1e-3
"""A rival's likelihood is needed to this much of a natural logarithm."""


def look(evidence: Evidence, question: Question, previous: Look | None) -> Look:
    """One evaluation of the evidence.

    previous : what the previous look answered; None at the first one, which only prepares: its counts train
    the first predictions. ValueError if `previous` and `evidence.previous` do not go together, or for
    readings with sigma.
    """
    if (previous is None) != (evidence.previous is None) or (previous is None) != (evidence.first is None):
        raise ValueError("only the first look has no earlier counts and no earlier answer")
    if evidence.now.sigma is not None:
        raise ValueError("a look needs counts; readings with a standard deviation are weighed once")
    number = 1 if previous is None else previous.number + 1
    model_1 = FeatureModel(evidence.now, question.feature, 1)
    model_2 = FeatureModel(evidence.now, question.feature, 2)
    single = fit_single(model_1)
    pair = fit_pair(model_2, single)
    claims = _claims(evidence, question, previous)
    flags = []
    registered = evidence.now.counts / np.maximum(evidence.now.gate_s, 1e-300)
    if (registered * evidence.now.dead_time_s).max() > LOAD_LIMIT:
        flags.append("dead-time-load")
    return describe(
        number=number,
        question=question,
        claims=claims,
        model_1=model_1,
        model_2=model_2,
        single=single,
        pair=pair,
        flags=flags,
    )


def _claims(evidence: Evidence, question: Question, previous: Look | None) -> Claims:
    bound_pair, bound_single = -np.log(question.false_alarm), -np.log(question.miss_probability)
    if previous is None or evidence.previous is None or evidence.first is None:
        return Claims(0.0, 0.0, bound_pair, bound_single, 0.0, 0.0, 0.0, 0.0)
    swept = evidence.now if evidence.swept is None else evidence.swept
    block = between(swept, evidence.previous)
    tested = between(swept, evidence.first)
    if not block.counts.any():
        return Claims.carried(previous)
    numerator_pair = previous.log_numerator_pair + _predicted(block, question, previous, 2)
    numerator_single = previous.log_numerator_single + _predicted(block, question, previous, 1)
    rival_1 = FeatureModel(tested, question.feature, 1, with_dark=False, with_modes_bounded=True)
    best_1 = fit_single(rival_1, tolerance=RIVAL_TOLERANCE)
    rival_2 = FeatureModel(tested, question.feature, 2, with_dark=False, with_modes_bounded=True)
    within = Bounds(question.smallest_ratio, 1.0, question.smallest_separation_nm)
    best_2 = fit_pair(rival_2, best_1, within=within, tolerance=RIVAL_TOLERANCE)
    log_e_pair = numerator_pair - log_shares(rival_1, best_1.values)
    log_e_single = numerator_single - log_shares(rival_2, best_2.values)
    return Claims(
        log_e_pair,
        log_e_single,
        bound_pair,
        bound_single,
        max(previous.max_log_e_pair, log_e_pair),
        max(previous.max_log_e_single, log_e_single),
        numerator_pair,
        numerator_single,
    )


def _predicted(block: Counts, question: Question, previous: Look, lines: int) -> float:
    """Log density of the block under what the previous look predicted."""
    ends = LinearBackground(*previous.window_nm, question.feature.background == "slope")
    model = FeatureModel(block, question.feature, lines, background=ends)
    summary = previous.pair if lines == 2 else previous.single
    known = {
        name: value for name, value in zip(summary.names, summary.values, strict=True) if name in model.index
    }
    return log_shares(model, vector(model, known))
