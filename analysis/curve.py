"""The curve a fit draws through its counts: what a plot shows beside the points."""

from __future__ import annotations

from analysis.counting import Counts, FloatArray
from analysis.model import FeatureModel, vector
from analysis.question import Look, Question


def curve(look: Look, question: Question, counts: Counts, *, kind: str) -> FloatArray:
    """(N,) expected rate, 1/s, dark included and dead time removed, at the positions of `counts`.

    kind : "single" or "pair", which of the look's two fits. The counts must be those the look weighed, since
    dither gains belong to them. ValueError for another kind.
    """
    if kind not in ("single", "pair"):
        raise ValueError(f"kind = {kind!r}; allowed: 'single', 'pair'")
    summary = look.pair if kind == "pair" else look.single
    model = FeatureModel(counts, question.feature, 2 if kind == "pair" else 1)
    return model.rate(vector(model, dict(zip(summary.names, summary.values, strict=True))))
