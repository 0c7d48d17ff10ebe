"""What a single line excludes: the strongest second line that the data still allow, place by place."""

from __future__ import annotations

import numpy as np

from analysis.fit import FitResult, inverse
from analysis.model import FeatureModel
from analysis.profile import line_profile
from analysis.question import Exclusion, Question

QUANTILE_95 = 1.645
STEPS_A_SIDE = 12


def exclusion_curve(
    model: FeatureModel, single: FitResult, question: Question, spread: float = 1.0
) -> tuple[Exclusion, ...]:
    """Upper limits (95 %) of the ratio at 12 separations on either side, as far as the window reaches.

    A faint second line is added to the single fit to first order, everything else free, the shape modes held
    by their allowance: estimate r and deviation u follow from one linear step; the limit is
    max(r, 0) + 1.645 u. spread : factor on u where the data scatter more than stated.
    """
    feature = question.feature
    values = single.values
    centre, area = single.value("centre_nm"), single.value("area")
    if not area > 0.0:
        return ()
    near = min(question.smallest_separation_nm, 0.5 * feature.fwhm_nm)
    places = []
    for side, room in ((-1.0, centre - model.x[0]), (1.0, model.x[-1] - centre)):
        if room > near:
            places.extend(side * near * (room / near) ** (np.arange(STEPS_A_SIDE) / (STEPS_A_SIDE - 1)))
    separations = np.sort(np.array(places))
    mean, jacobian = model.evaluate(values)
    weight = 1.0 / mean if model.sigma is None else 1.0 / model.sigma**2
    pull = np.where(np.isfinite(model.prior_sd), 1.0 / model.prior_sd**2, 0.0)
    information = (jacobian * weight[:, None]).T @ jacobian + np.diag(pull)
    used = np.diag(information) > 0.0
    covariance = inverse(information[np.ix_(used, used)])
    profile = line_profile(
        model.x - centre - separations[:, None],
        sigma_nm=single.value("sigma_nm"),
        gamma_nm=model.value(values, "gamma_nm"),
        box_widths_nm=feature.box_widths_nm,
    ).value
    gain = np.ones(model.x.size)
    for number in range(1, model.counts.groups):
        gain[model.group == number] = single.value(f"gain_{number}")
    lines = np.zeros((separations.size, mean.size))
    lines[:, : model.x.size] = area * profile * gain * model.live_s(values)
    cross = (lines * weight) @ jacobian[:, used]
    own = np.sum(lines * lines * weight, axis=1) - np.sum((cross @ covariance) * cross, axis=1)
    # at the optimum the other parameters have no gradient (what a bound holds, it goes on holding)
    score = (lines * weight) @ (model.data - mean)
    curve = []
    for place, left, push in zip(separations, own, score, strict=True):
        limit = None
        if left > 0.0:
            u = spread / np.sqrt(left)
            found = max(push / left, 0.0) + QUANTILE_95 * u
            limit = float(found) if found < 1.0 else None
        curve.append(Exclusion(float(place), limit))
    return tuple(curve)
