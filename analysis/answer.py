"""From fits and claims to an answer: a verdict, numbers with their budget, flags, what is excluded."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from analysis.budget import separation_budget
from analysis.candidates import PAIR, REVERSED, SINGLE, Candidate, Candidates
from analysis.claims import AMBIGUOUS
from analysis.digits import with_uncertainty
from analysis.doubts import (
    NO_LINE,
    NOT_REACHED,
    fits_poorly,
    further_line_nm,
    is_like_reversed,
    lamp_drifts,
    line_stands_out,
    sharper_than_stated,
)
from analysis.exclusion import exclusion_curve
from analysis.fit import FitResult
from analysis.model import FeatureModel
from analysis.profile import ObservedWidth, observed_width
from analysis.question import Budget, Claims, Look, Question
from analysis.words import explain, reaches_resolving_power


def describe(
    *,
    number: int,
    question: Question,
    claims: Claims,
    candidates: Candidates,
    flags: list[str],
    spread: float = 1.0,
    residual_limit: float | None = None,
    reasons: tuple[str, ...] = (),
) -> Look:
    """Put the answer together.

    spread : factor on statistical uncertainties where readings scatter more than stated. residual_limit : a
    fit is poor where data stray from it by more than this fraction of the peak; None: where chi square says.
    """
    said, feature = claims.said, question.feature
    if set(said) == {SINGLE, REVERSED}:  # no conflict: `single` denies only what the question asks about
        said = (REVERSED,)
    model_1, single = candidates.single.model, candidates.single.best
    model_2, pair = candidates.pair.model, candidates.pair.best
    if len(said) > 1:
        flags.append("conflict")
    claimed = _claimed(said, candidates)
    where, chosen = claimed.model, claimed.best
    if _describes_nothing(claimed, candidates, said, residual_limit):
        flags.append("poor-fit")
    sigma, gamma = chosen.value("sigma_nm"), where.value(chosen.values, "gamma_nm")
    width = observed_width(sigma_nm=sigma, gamma_nm=gamma, box_widths_nm=feature.box_widths_nm)
    fwhm, fwhm_u = width.fwhm_nm, _fwhm_u(where, chosen, width, spread)
    if not (PAIR in said or REVERSED in said or line_stands_out(model_1, single, spread)):
        is_seen = model_1.x[0] < feature.wavelength_nm - feature.fwhm_nm
        is_seen &= bool(model_1.x[-1] > feature.wavelength_nm + feature.fwhm_nm)
        flags.append(NO_LINE if is_seen else NOT_REACHED)
    elif feature.reach_nm is None:  # else the width was read off the same data: nothing to compare
        if fwhm - 2.0 * fwhm_u > 1.15 * feature.fwhm_nm:
            flags.append("broader-than-expected")
        # of a recorded spectrum no slits are stated, and the humps of a reversed line are narrower than it is
        if residual_limit is None and (feature.self_reversal == "excluded" or said == (SINGLE,)):
            narrow = fwhm + 2.0 * fwhm_u < 0.85 * feature.fwhm_nm
            if narrow or sharper_than_stated(where, chosen):
                flags.append("narrower-than-expected")
    if lamp_drifts(where, chosen):
        flags.append("lamp-drift")
    further_nm = further_line_nm(model_2, pair) if PAIR in said or "poor-fit" in flags else None
    if further_nm is not None:
        flags.append("third-line")
        place = with_uncertainty(further_nm, 0.1 * feature.fwhm_nm).split()[0]
        reasons += (f"a further line at about {place} nm would explain the rest: give it as a known line",)
    verdict = _verdict(flags, said)
    rests_on = [claimed.best] if verdict != "undecided" else [single, pair]
    is_without_line = bool({NO_LINE, NOT_REACHED} & set(flags))
    if not is_without_line and not all(made.converged for made in rests_on):
        flags.append("not-converged")
    numbers = _pair_numbers(model_2, pair, question, spread)
    # without a line there is nothing that a second one could be a part of, and where one line does not hold
    # nothing is excluded beside it
    one_holds = pair.log_likelihood - single.log_likelihood < claims.bound_pair
    has_curve = one_holds and not is_without_line and set(said) <= {SINGLE}
    excluded = exclusion_curve(model_1, single, question, spread) if has_curve else ()
    centre, centre_u = numbers.centre_nm, numbers.centre_u_nm
    if verdict in (SINGLE, REVERSED):
        centre, centre_u = chosen.value("centre_nm"), spread * chosen.deviation("centre_nm")
    resolving = resolving_u = None
    if verdict in (SINGLE, PAIR):
        resolving = centre / fwhm
        resolving_u = resolving * float(np.hypot(fwhm_u / fwhm, centre_u / centre))
    reached = _is_goal_reached(verdict, question, numbers, resolving, resolving_u)
    asked_twice = (
        verdict == PAIR and reached and residual_limit is None
    )  # a fit more: only at the end of a run
    if asked_twice and is_like_reversed(candidates, numbers.separation_nm or 0.0):
        reasons += (
            "a self-reversed line describes the data about as well: the target file alone excludes it",
        )
    background_per_s, background_u = _background(where, chosen, centre)
    dark = chosen.value("dark_per_s") if where.has_dark else None
    look = Look(
        **{part.name: getattr(claims, part.name) for part in fields(Claims)},
        number=number,
        verdict=verdict,
        goal_reached=reached,
        separation_nm=numbers.separation_nm,
        separation_u_nm=numbers.u_nm,
        budget=numbers.budget,
        ratio=numbers.ratio,
        ratio_u=numbers.ratio_u,
        centre_nm=centre,
        centre_u_nm=centre_u,
        second_nm=numbers.second_nm,
        sigma_nm=sigma,
        gamma_nm=gamma,
        fwhm_nm=fwhm,
        fwhm_u_nm=fwhm_u,
        background_per_s=background_per_s,
        background_u_per_s=spread * background_u,
        # what stands for read noise is no dark current
        dark_per_s=None if dark is None else dark - where.counts.pedestal_per_s,
        dark_u_per_s=chosen.deviation("dark_per_s") if where.has_dark else None,
        single=single.summary(),
        pair=pair.summary(),
        self_reversed=None if candidates.self_reversed is None else candidates.self_reversed.best.summary(),
        resolving_power=resolving,
        resolving_power_u=resolving_u,
        window_nm=(float(model_2.x[0]), float(model_2.x[-1])),
        exclusion=excluded,
        flags=tuple(flags),
        evidence=(),
    )
    return explain(look, question, reasons)


def _claimed(said: tuple[str, ...], candidates: Candidates) -> Candidate:
    """What the answer's numbers are taken from: what was claimed, else the pair."""
    if said == (SINGLE,):
        return candidates.single
    if said == (REVERSED,) and candidates.self_reversed is not None:
        return candidates.self_reversed
    return candidates.pair


def _describes_nothing(
    claimed: Candidate, candidates: Candidates, said: tuple[str, ...], residual_limit: float | None
) -> bool:
    """Whether the data stray from what is claimed; where no second line nor a dip is, from those too."""
    if not fits_poorly(claimed.model, claimed.best, residual_limit):
        return False
    other = candidates.self_reversed
    if other is None or said not in ((), (SINGLE,)):
        return True
    return fits_poorly(other.model, other.best, residual_limit)


def _verdict(flags: list[str], said: tuple[str, ...]) -> str:
    if {"conflict", "poor-fit", "dead-time-load"} & set(flags) or not said:
        return "undecided"
    # a broad line may be two lines closer than the question asks about
    if said == (SINGLE,) and {NO_LINE, NOT_REACHED, "broader-than-expected", AMBIGUOUS} & set(flags):
        return "undecided"
    return said[0]


def _is_goal_reached(
    verdict: str,
    question: Question,
    numbers: _PairNumbers,
    resolving: float | None,
    resolving_u: float | None,
) -> bool:
    """Whether more light would change nothing that was asked for."""
    if verdict == "undecided":
        return False
    if verdict == PAIR:
        for goal, u in (
            (question.separation_uncertainty_nm, numbers.u_nm),
            (question.ratio_uncertainty, numbers.ratio_u),
        ):
            if goal is not None and (u is None or not u <= goal):
                return False
    wanted = question.resolving_power_at_least
    if wanted is None or resolving is None or resolving_u is None:
        return True
    return reaches_resolving_power(resolving, resolving_u, wanted) is not None


def _background(where: FeatureModel, made: FitResult, centre_nm: float) -> tuple[float, float]:
    """Background rate at the line, and the standard uncertainty of its stretch's first value, 1/s."""
    assert where.background is not None
    _, basis = where.background.evaluate(np.array([centre_nm]), np.zeros(len(where.background.names)))
    name = where.background.names[int(np.flatnonzero(basis[0])[0])]
    return where.background_rate(made.values, centre_nm), made.deviation(name)


@dataclass(frozen=True, slots=True)
class _PairNumbers:
    """The pair with the stronger line first; None where the second line has no strength."""

    separation_nm: float | None
    u_nm: float | None
    budget: Budget | None
    ratio: float | None
    ratio_u: float | None
    centre_nm: float
    centre_u_nm: float
    second_nm: float | None


def _pair_numbers(model: FeatureModel, pair: FitResult, question: Question, spread: float) -> _PairNumbers:
    ratio, separation = pair.value("ratio"), pair.value("separation_nm")
    centre, centre_u = pair.value("centre_nm"), spread * pair.deviation("centre_nm")
    if not (ratio > 1e-6 and pair.value("area") > 0.0):
        return _PairNumbers(None, None, None, None, None, centre, centre_u, None)
    budget = separation_budget(
        model, pair, scale_relative_uncertainty=question.scale_relative_uncertainty, spread=spread
    )
    ratio_u = spread * pair.deviation("ratio")
    second = centre + separation
    if ratio > 1.0:
        places = [model.index["centre_nm"], model.index["separation_nm"]]
        other_u = spread * float(np.sqrt(max(pair.covariance[np.ix_(places, places)].sum(), 0.0)))
        centre, centre_u, second = second, other_u, centre
        ratio, ratio_u = 1.0 / ratio, ratio_u / ratio**2
    return _PairNumbers(abs(separation), budget.combined_nm, budget, ratio, ratio_u, centre, centre_u, second)


def _fwhm_u(model: FeatureModel, made: FitResult, width: ObservedWidth, spread: float) -> float:
    """Standard uncertainty of the observed FWHM from the covariance of sigma and gamma."""
    slopes = {"sigma_nm": width.d_sigma, "gamma_nm": width.d_gamma}
    places = [model.index[name] for name in slopes if name in model.index]
    gradient = np.array([slope for name, slope in slopes.items() if name in model.index])
    return float(spread * np.sqrt(max(gradient @ made.covariance[np.ix_(places, places)] @ gradient, 0.0)))
