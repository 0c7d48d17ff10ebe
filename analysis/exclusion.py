"""What a single line excludes: the strongest second line that the data still allow, place by place."""

from __future__ import annotations

import numpy as np

from analysis.counting import FloatArray
from analysis.fit import FitResult, inverse
from analysis.model import FeatureModel
from analysis.question import Exclusion, Question

QUANTILE_95 = 1.645
STEPS_A_SIDE = 12


def exclusion_curve(
    model: FeatureModel, single: FitResult, question: Question, spread: float = 1.0
) -> tuple[Exclusion, ...]:
    """Upper limits (95 %) of the ratio at 12 separations on either side, as far as the window reaches, and at
    12 more in every further window.

    A faint second line is added to the single fit to first order, everything else free, the shape modes held
    by their allowance: estimate r and deviation u follow from one linear step; the limit is
    max(r, 0) + 1.645 u. spread : factor on u where the data scatter more than stated.
    """
    feature = question.feature
    centre, area = single.value("centre_nm"), single.value("area")
    if not area > 0.0:
        return ()
    near = min(question.smallest_separation_nm, 0.5 * feature.fwhm_nm)
    places: list[float] = []
    for low, high in model.windows_nm:
        if not low <= centre <= high:
            places.extend(np.linspace(low - centre, high - centre, STEPS_A_SIDE))
            continue
        for side, room in ((-1.0, centre - low), (1.0, high - centre)):
            if room > near:
                places.extend(side * near * (room / near) ** (np.arange(STEPS_A_SIDE) / (STEPS_A_SIDE - 1)))
    separations = np.sort(np.array(places))
    push, left = added_line(model, single, centre + separations)
    curve = []
    for place, score, information in zip(separations, push, left, strict=True):
        limit = None
        if information > 0.0:
            u = spread / np.sqrt(information)
            found = (max(score / information, 0.0) + QUANTILE_95 * u) / area
            limit = float(found) if found < 1.0 else None
        curve.append(Exclusion(float(place), limit))
    return tuple(curve)


def added_line(model: FeatureModel, made: FitResult, places_nm: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Score (M,) and information (M,) of the area of one more line at each of M places, to first order.

    Everything else is free to answer; its area is score over information, the variance 1/information, and
    score squared over information is what it takes off chi square.
    """
    mean, jacobian = model.evaluate(made.values)
    weight = 1.0 / mean if model.sigma is None else 1.0 / model.sigma**2
    pull = np.where(np.isfinite(model.prior_sd), 1.0 / model.prior_sd**2, 0.0)
    information = (jacobian * weight[:, None]).T @ jacobian + np.diag(pull)
    used = np.diag(information) > 0.0
    covariance = inverse(information[np.ix_(used, used)])
    lines = np.zeros((places_nm.size, mean.size))
    lines[:, : model.x.size] = model.added_light(made.values, places_nm)
    cross = (lines * weight) @ jacobian[:, used]
    own = np.sum(lines * lines * weight, axis=1) - np.sum((cross @ covariance) * cross, axis=1)
    # at the optimum the other parameters have no gradient (what a bound holds, it goes on holding)
    score = (lines * weight) @ (model.data - mean)
    return score, own
