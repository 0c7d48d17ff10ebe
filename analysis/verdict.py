"""One line or two: the verdict, with what it rests on.

`look` answers during a run, as often as wanted (see `analysis.evidence` for why its claims stay valid);
`weigh_once` answers for a recorded spectrum, one fixed sample. Both are pure functions of their arguments and
fit cold: an earlier look lends its predictions to the evidence, never a start to a fit.
"""

from __future__ import annotations

import numpy as np

from analysis.answer import describe
from analysis.candidates import fit_candidates
from analysis.claims import AMBIGUOUS, weigh
from analysis.counting import LOAD_LIMIT, Counts
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
    flags = []
    registered = evidence.now.counts / np.maximum(evidence.now.gate_s, 1e-300)
    if (registered * evidence.now.dead_time_s).max() > LOAD_LIMIT:
        flags.append("dead-time-load")
    candidates = fit_candidates(evidence.now, question.feature)
    weighed = weigh(evidence, question, previous)
    if weighed.is_ambiguous and not {"pair", "self-reversed"} & set(weighed.claims.said):
        flags.append(AMBIGUOUS)
    return describe(
        number=1 if previous is None else previous.number + 1,
        question=question,
        claims=weighed.claims,
        candidates=candidates,
        flags=flags,
    )
