"""The curve a fit draws through its counts: what a plot shows beside the points."""

from __future__ import annotations

from analysis.candidates import model_of, summary_of
from analysis.counting import Counts, FloatArray
from analysis.model import vector
from analysis.question import Look, Question


def curve(look: Look, question: Question, counts: Counts, *, kind: str) -> FloatArray:
    """(N,) expected rate, 1/s, dark included and dead time removed, at the positions of `counts`.

    kind : "single", "pair" or "self-reversed", which of the look's fits. The counts must be those the look
    weighed, since dither gains belong to them. ValueError for another kind, or one that the look has not.
    """
    summary = summary_of(look, kind)
    model = model_of(kind, counts, question.feature)
    return model.rate(vector(model, dict(zip(summary.names, summary.values, strict=True))))
