"""A recorded spectrum: one fixed sample, made by an instrument whose line shape is not known.

On real spectra line shape, not noise, decides. So a second line is claimed only where (a) it lowers chi
square beyond the 4-degree tail of `false_alarm` after the scatter around the pair is divided out (Birge
1932, Phys. Rev. 40, 207), and (b) no single line within two shape allowances looks like it: the best pair
and the best single line differ by more than that fraction of the peak somewhere.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from analysis.answer import describe
from analysis.candidates import Candidate, Candidates
from analysis.counting import Counts, FloatArray
from analysis.fit import FitResult
from analysis.model import FeatureModel
from analysis.question import Claims, Feature, Look, Question
from analysis.starts import fit_pair, fit_single, pairs_of_question

RECORDED_ALLOWANCE = 0.02
SLIT_SHARE = 0.7
"""Slit image of an unknown instrument, fraction of the FWHM: slits are opened until they begin to widen the
line (common practice). A pure Voigt shape instead leaves 3 % of the peak on real lamp lines, this one 1 %."""
OVERDISPERSED = 2.0
"""Scatter, in units of the stated one, above which it is flagged. It forbids no claim: of 48 single lines and
20 pairs of a real lamp one single is called a pair (scatter 4.8), but 14 of the 15 pairs found and 24 of the
46 singles scatter more than twice as stated too."""
FOREIGN_PEAK = 0.01
CLEAR_PEAK = 0.1


def guess_feature(
    counts: Counts, *, shape_allowance: float = RECORDED_ALLOWANCE, kind: str = "emission"
) -> Feature:
    """What a spectrum without a target shows: its main peak, FWHM above background, pixel width.

    The window is taken to be centred on the feature: the main peak is the highest in its middle half, and
    every peak there of a tenth of it or more belongs to the feature. A second line is sought within 3 FWHM
    of the main one, or as far as such a peak. ValueError without a peak or with fewer than 8 positions.
    kind : "emission" or "absorption": then a peak is a dip.
    """
    x, y = counts.wavelength_nm, _upright(counts.counts / np.maximum(counts.gate_s, 1e-300), kind)
    if x.size < 8:
        raise ValueError(f"a feature needs at least 8 positions, got {x.size}")
    quarter = x.size // 4
    main = quarter + int(np.argmax(y[quarter : x.size - quarter]))
    base = float(np.percentile(y, 10.0))
    height = float(y[main]) - base
    if not height > 0.0:
        raise ValueError("no peak stands above the background in the middle half of the spectrum")
    pixel = float(np.median(np.diff(x)))
    fwhm = max(_half_width(x, y - base - 0.5 * height, main), 1.5 * pixel)
    reach = 3.0 * fwhm
    for peak in _peaks(y - base, CLEAR_PEAK * height):
        if quarter <= peak < x.size - quarter:
            reach = max(reach, abs(float(x[peak] - x[main])) + fwhm)
    slit = SLIT_SHARE * fwhm
    boxes = (pixel**2 + slit**2) / 12.0 * (2.0 * np.sqrt(2.0 * np.log(2.0))) ** 2
    return Feature(
        wavelength_nm=float(x[main]),
        fwhm_nm=fwhm,
        box_widths_nm=(pixel, slit),
        line_fwhm_nm=float(np.sqrt(max(fwhm**2 - boxes, (0.3 * fwhm) ** 2))),
        shape_allowance=shape_allowance,
        reach_nm=reach,
        kind=kind,
    )


def weigh_once(counts: Counts, question: Question) -> Look:
    """One line or two in a recorded spectrum.

    Without sigma the variance is the counts, or the scatter of the faint readings where that is more.
    With `feature.reach_nm` the spectrum is cut at the valleys towards foreign peaks beyond that reach. Where
    single is claimed, every pair of the question's smallest ratio and separation fails as (a) and (b) above
    demand of a claim. Either way the data stay within 2.5 allowances of the fit, or it is undecided.
    """
    feature = question.feature
    flags: list[str] = []
    used = _cut(counts, feature)
    if used.counts.size < counts.counts.size:
        flags.append("window-cut")
    softened = _soften(used, feature)
    model_1, model_2 = FeatureModel(softened, feature, 1), FeatureModel(softened, feature, 2)
    single = fit_single(model_1)
    pair = fit_pair(model_2, single)
    within = pairs_of_question(question)
    rival = fit_pair(model_2, single, within=within)
    if rival.log_likelihood > pair.log_likelihood:
        pair = rival
    best = max(single, pair, key=lambda made: made.log_likelihood)
    scatter = max(1.0, -2.0 * best.log_likelihood / best.dof)
    peak = float(model_1.line_light(single.values).max())
    tolerated = 2.0 * feature.shape_allowance * peak
    e_pair = _strength(single, pair, scatter, tolerated)
    e_single = _strength(rival, best, scatter, tolerated)
    second = pair.value("centre_nm") + pair.value("separation_nm")
    room = min(second - model_2.x[0], model_2.x[-1] - second) - 0.5 * feature.fwhm_nm
    if feature.reach_nm is not None and (
        room < 1e-3 * feature.fwhm_nm or abs(pair.value("separation_nm")) > 0.999 * feature.reach_nm
    ):
        # driven to the end of its reach it is the flank of a foreign line
        flags.append("foreign-line")
        e_pair = 0.0
    bound_pair = -float(np.log(question.false_alarm))
    claims = Claims(
        log_e_pair=e_pair,
        log_e_single=e_single,
        bound_pair=bound_pair,
        bound_single=-float(np.log(question.miss_probability)),
        max_log_e_pair=e_pair,
        # two lines outside the question (fainter or closer) leave "single" unsaid where they are claimed
        max_log_e_single=e_single if e_pair < bound_pair else 0.0,
        log_numerator_pair=0.0,
        log_numerator_single=0.0,
    )
    reasons: list[str] = []
    if scatter > OVERDISPERSED**2:
        flags.append("overdispersed")
    if scatter > 1.0:
        reasons.append(f"readings scatter {np.sqrt(scatter):.2g} times as much as stated: u widened")
    if e_pair == 0.0 and claims.max_log_e_single < claims.bound_single:
        reasons.append("a line shape off by twice the allowance would look the same as a second line")
    return describe(
        number=1,
        question=question,
        claims=claims,
        candidates=Candidates(Candidate(model_1, single), Candidate(model_2, pair)),
        flags=flags,
        spread=float(np.sqrt(scatter)),
        residual_limit=2.5 * feature.shape_allowance,
        reasons=tuple(reasons),
    )


def _strength(worse: FitResult, better: FitResult, scatter: float, tolerated: float) -> float:
    """-log of the chi-square tail (4 degrees: e^(-d/2) (1 + d/2)) of what `better` gains over `worse`, in
    units of the scatter; 0 where the two differ by less than the line shape is uncertain."""
    if np.abs(worse.mean - better.mean).max() < tolerated:
        return 0.0
    half = max(better.log_likelihood - worse.log_likelihood, 0.0) / scatter
    return float(half - np.log1p(half))


def _soften(counts: Counts, feature: Feature) -> Counts:
    """Readings with their standard deviation; half the shape allowance is added to it point by point, so
    that a few strong points of a wrong shape do not outweigh all others."""
    y = counts.counts
    if counts.sigma is None:
        smooth = np.convolve(np.pad(y, 1, mode="edge"), [0.25, 0.5, 0.25], mode="valid")
        sigma = np.sqrt(np.maximum(smooth, max(_quiet_sd(y, smooth) ** 2, 1.0)))
    else:
        sigma = counts.sigma
    strong = y if feature.kind == "emission" else _upright(y, feature.kind) + float(np.percentile(y, 90.0))
    allowed = 0.5 * feature.shape_allowance * np.sqrt(np.maximum(strong, 0.0) * max(float(strong.max()), 0.0))
    return replace(counts, sigma=np.hypot(sigma, allowed))


def _quiet_sd(y: FloatArray, smooth: FloatArray) -> float:
    """Scatter of the fainter half of the readings against their neighbours' mean (robust: median): the noise
    that stays where a bias was subtracted and the counts no longer tell it."""
    stray = y[1:-1] - 0.5 * (y[:-2] + y[2:])
    quiet = smooth[1:-1] <= np.median(smooth)
    return float(1.4826 * np.sqrt(2.0 / 3.0) * np.median(np.abs(stray[quiet])))


def _cut(counts: Counts, feature: Feature) -> Counts:
    """The positions up to the valleys towards peaks beyond the reach; at least 5 on either side stay."""
    if feature.reach_nm is None:
        return counts
    x, y = counts.wavelength_nm, _upright(counts.counts, feature.kind)
    main = int(np.argmin(np.abs(x - feature.wavelength_nm)))
    first, last = 0, x.size
    base = float(np.percentile(y, 10.0))
    noise = np.sqrt(max(abs(base), 1.0)) if counts.sigma is None else float(np.median(counts.sigma))
    threshold = base + FOREIGN_PEAK * (float(y[main]) - base) + 5.0 * noise
    peaks = _peaks(np.concatenate([[-np.inf], y, [-np.inf]]), threshold) - 1
    for peak in peaks.tolist():
        if abs(x[peak] - x[main]) <= feature.reach_nm:
            continue
        if peak < main:
            first = max(first, min(peak + int(np.argmin(y[peak : main + 1])), max(main - 5, 0)))
        else:
            last = min(last, max(main + int(np.argmin(y[main : peak + 1])) + 1, main + 6))
    part = slice(first, last)
    return replace(
        counts,
        wavelength_nm=x[part],
        counts=counts.counts[part],
        gate_s=counts.gate_s[part],
        group=counts.group[part],
        sigma=None if counts.sigma is None else counts.sigma[part],
    )


def _upright(y: FloatArray, kind: str) -> FloatArray:
    """The readings, so that lines stand up."""
    return -y if kind == "absorption" else y


def _peaks(y: FloatArray, threshold: float) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
    inner = (y[1:-1] >= y[:-2]) & (y[1:-1] > y[2:]) & (y[1:-1] > threshold)
    return np.flatnonzero(inner).astype(np.int64) + 1


def _half_width(x: FloatArray, above: FloatArray, main: int) -> float:
    """Distance between the two crossings of zero around the main peak, linear between positions."""
    ends = []
    for step in (-1, 1):
        k = main
        while 0 < k < x.size - 1 and above[k] > 0.0:
            k += step
        inside = k - step
        share = above[inside] / (above[inside] - above[k]) if above[k] < 0.0 else 1.0
        ends.append(float(x[inside] + share * (x[k] - x[inside])))
    return ends[1] - ends[0]
