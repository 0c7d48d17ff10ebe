"""What may be wrong with the picture itself: a poor fit, no line at all, slits that are not as stated, a
further line. Each is weighed against fits already made and costs at most one more."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from analysis.candidates import REVERSED, Candidates, model_of
from analysis.exclusion import added_line
from analysis.fit import FitResult, fit
from analysis.model import FeatureModel, vector
from analysis.profile import FWHM_PER_SIGMA
from analysis.starts import fit_reversed

POOR_FIT_SIGMAS = 4.753
"""One-sided normal quantile of 1e-6."""
CLEAR_GAIN = 25.0
"""What counts as clear: five standard deviations, squared, of chi square per unit of scatter."""
OBVIOUS = 10.0
"""A line of more standard deviations than this needs no such fit."""
NARROW_BOXES = 0.85
"""Slit images scaled by this much stand for an instrument 15 % sharper than stated."""
FURTHER_GAIN = 20.0
"""The same for a further line: 1e-3 that noise alone has it anywhere among some 20 places (chi square of its
area and place)."""
FURTHER_ALLOWANCES = 3.0
"""A further line has more than this many shape allowances of the nearer line's area: a fainter one may be
that line's own flank."""
DRIFT = 0.05
DRIFT_SIGMAS = 3.0
"""Gains of sweep combs that differ by more than DRIFT, and by this many standard uncertainties more."""
REVERSED_FWHM = 2.0
"""Lines further apart than this are no two humps of one."""
REVERSED_LOSS = 3.0
"""A self-reversed line is about as good as a pair if its log-likelihood is no lower by more than this."""
_TOLERANCE = 1e-3


NO_LINE = "no-line"
"""The flag of a window in which nothing stands above the background."""

NOT_REACHED = "line-not-reached"
"""The flag of a sweep that ended before it had passed the place where the line is expected."""


def misfit_sigmas(model: FeatureModel, made: FitResult) -> float:
    """How far chi square lies above what noise and the shape allowance let expect, in normal sigmas.

    Wilson and Hilferty 1931 (PNAS 17, 684) on a chi square scaled to the mean and variance that Pearson's
    statistic has: at m expected counts a position adds 2 + 1/m, not 2, to the variance. A shape error of the
    allowance, fraction of the line's counts there, counts as noise here. A parameter that its prior holds
    takes no degree of freedom, one that the data hold takes one, and between them its share.
    """
    if model.sigma is None and made.mean.sum() < 5.0:
        return 0.0
    sigma2 = made.mean if model.sigma is None else model.sigma**2
    light = model.line_light(made.values)
    peak = float(light.max(initial=0.0))
    allowed = np.zeros(sigma2.size)
    # half of the allowance at the flanks' foot, all of it at the peak: the modes are of that kind
    allowed[: light.size] = (model.feature.shape_allowance * np.sqrt(np.abs(light) * peak)) ** 2
    spread = sigma2 + allowed
    chi2 = float(np.sum((model.data - made.mean) ** 2 / spread))
    extra = np.sum((sigma2 / spread) ** 2 / made.mean) if model.sigma is None else 0.0
    drawn = np.isfinite(model.prior_sd)
    measured = 1.0 - np.diag(made.covariance)[drawn] / model.prior_sd[drawn] ** 2
    dof = max(made.dof - float(np.clip(measured, 0.0, 1.0).sum()), 1.0)
    variance = 2.0 * dof + float(extra)
    shape = 2.0 * dof**2 / variance
    third = 2.0 / (9.0 * shape)
    return float(((chi2 / dof) ** (1.0 / 3.0) - (1.0 - third)) / np.sqrt(third))


def fits_poorly(model: FeatureModel, made: FitResult, residual_limit: float | None) -> bool:
    """Whether data stray from the fit by more than this fraction of its peak; None: by chi square."""
    if residual_limit is None:
        return misfit_sigmas(model, made) > POOR_FIT_SIGMAS
    peak = float(model.line_light(made.values).max(initial=0.0))
    return float(np.abs(model.data - made.mean).max()) > residual_limit * peak


def line_stands_out(model: FeatureModel, single: FitResult, spread: float) -> bool:
    """Whether the single line explains the data clearly better than background and known lines alone.

    Its area against the area's uncertainty does not tell: that grows with the freedom of the width.
    spread : scatter of the readings, in units of the stated one.
    """
    if not single.value("area") > 0.0:
        return False
    if single.value("area") > OBVIOUS * spread * single.deviation("area"):
        return True
    without = single.values.copy()
    without[model.index["area"]] = 0.0
    bare = fit(model, without, frozen=("area",), tolerance=_TOLERANCE)
    return 2.0 * (single.log_likelihood - bare.log_likelihood) > CLEAR_GAIN * spread**2


def sharper_than_stated(model: FeatureModel, made: FitResult) -> bool:
    """Whether a clearly better fit needs narrower slit images than stated.

    They are given, so a fitted width cannot fall below theirs. Asked only where the fit leaves the source
    less width than expected, else the slits have room.
    """
    feature = model.feature
    if made.value("sigma_nm") * FWHM_PER_SIGMA > feature.line_fwhm_nm:
        return False
    boxes = (NARROW_BOXES * feature.box_widths_nm[0], NARROW_BOXES * feature.box_widths_nm[1])
    sharper = replace(model, feature=replace(feature, box_widths_nm=boxes))
    start = np.clip(made.values, sharper.lower, sharper.upper)
    better = fit(sharper, start, tolerance=0.1, iterations=12)  # only a large gain matters
    return 2.0 * (better.log_likelihood - made.log_likelihood) > CLEAR_GAIN


def lamp_drifts(model: FeatureModel, made: FitResult) -> bool:
    """Whether the gains of two sweep combs differ by more than 5 %, beyond what their uncertainty tells."""
    gains = model.gains(made.values)
    if gains.size < 2:
        return False
    first = model.index["gain_1"]
    covariance = np.zeros((gains.size, gains.size))
    covariance[1:, 1:] = made.covariance[first : first + gains.size - 1, first : first + gains.size - 1]
    low, high = int(np.argmin(gains)), int(np.argmax(gains))
    variance = covariance[low, low] + covariance[high, high] - 2.0 * covariance[low, high]
    return bool(gains[high] - gains[low] - DRIFT_SIGMAS * np.sqrt(max(variance, 0.0)) > DRIFT)


def is_like_reversed(candidates: Candidates, separation_nm: float) -> bool:
    """Whether a self-reversed line, excluded by the target, would describe a pair's data about as well."""
    pair = candidates.pair
    feature = pair.model.feature
    if feature.self_reversal != "excluded" or feature.kind != "emission":
        return False
    if separation_nm > REVERSED_FWHM * feature.fwhm_nm:
        return False
    model = model_of(REVERSED, pair.model.counts, feature)
    made = fit_reversed(model, tolerance=0.1)
    return made.log_likelihood > pair.best.log_likelihood - REVERSED_LOSS


def further_line_nm(model: FeatureModel, pair: FitResult) -> float | None:
    """Where a line besides the pair (and besides known ones) would clearly explain the rest; None: nowhere.

    Sought to first order on a grid of an eighth of the FWHM, then fitted as a known line is.
    """
    feature = model.feature
    ends = model.windows_nm
    places = np.concatenate([np.arange(left, right, 0.125 * feature.fwhm_nm) for left, right in ends])
    push, left = added_line(model, pair, places)
    found = np.where((push > 0.0) & (left > 0.0), push**2 / np.where(left > 0.0, left, 1.0), 0.0)
    best = int(np.argmax(found))
    if not found[best] > 0.0:
        return None
    distance = float(places[best]) - pair.value("centre_nm")
    wider = replace(feature, known_lines_nm=(*feature.known_lines_nm, feature.wavelength_nm + distance))
    three = FeatureModel(model.counts, wider, 2)
    name = f"known_{len(wider.known_lines_nm)}_area"
    start = dict(zip(pair.names, pair.values.tolist(), strict=True)) | {name: push[best] / left[best]}
    made = fit(three, vector(three, start), tolerance=_TOLERANCE)
    scatter = max(1.0, -2.0 * made.log_likelihood / made.dof)
    gain = 2.0 * (made.log_likelihood - pair.log_likelihood)
    nearer = made.value("area")
    if abs(distance - made.value("separation_nm")) < abs(distance):
        nearer *= made.value("ratio")
    strong = made.value(name) > FURTHER_ALLOWANCES * feature.shape_allowance * nearer
    if not (strong and gain > FURTHER_GAIN * scatter):
        return None
    return made.value("centre_nm") + distance + made.value("known_shift_nm")
