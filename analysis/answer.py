"""From fits and claims to an answer: numbers with their budget, flags, sentences, what is excluded."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from analysis.digits import with_uncertainty
from analysis.doubts import fits_poorly, further_line_nm, line_stands_out, sharper_than_stated
from analysis.exclusion import exclusion_curve
from analysis.fit import FitResult, inverse
from analysis.model import FeatureModel
from analysis.profile import ObservedWidth, observed_width
from analysis.question import Budget, Look, Question


@dataclass(frozen=True, slots=True)
class Claims:
    """Evidence for either claim, natural logs: now, what it must reach, the most it reached, numerators."""

    log_e_pair: float
    log_e_single: float
    bound_pair: float
    bound_single: float
    max_log_e_pair: float
    max_log_e_single: float
    log_numerator_pair: float
    log_numerator_single: float

    @staticmethod
    def carried(previous: Look) -> Claims:
        """The same as before: nothing was counted since."""
        return Claims(
            previous.log_e_pair,
            previous.log_e_single,
            previous.bound_pair,
            previous.bound_single,
            previous.max_log_e_pair,
            previous.max_log_e_single,
            previous.log_numerator_pair,
            previous.log_numerator_single,
        )


def separation_budget(
    model: FeatureModel, made: FitResult, *, scale_relative_uncertainty: float, spread: float = 1.0
) -> Budget:
    """Separation's standard uncertainties: counting, shape modes, wavelength scale.

    Counting is what the covariance says with the modes known. The shape's share is how far the separation
    moves when each mode moves by its allowance and everything else answers: data that seem to measure the
    modes do not shrink it, for the true shape error need not look like two modes. So it floors the whole.
    spread : factor on the statistical part where chi square says that data scatter more than stated.
    """
    place = model.index["separation_nm"]
    _, jacobian = model.evaluate(made.values)
    weight = 1.0 / made.mean if model.sigma is None else 1.0 / model.sigma**2
    modes = np.array([name in ("skewness", "kurtosis") for name in model.names])
    pull = np.where(np.isfinite(model.prior_sd) & ~modes, 1.0 / model.prior_sd**2, 0.0)
    information = (jacobian * weight[:, None]).T @ jacobian + np.diag(pull)
    rest = ~modes & (np.diag(information) > 0.0)
    separation = abs(made.value("separation_nm"))
    counting, shape = made.covariance[place, place], 0.0
    if rest[place]:
        where = int(np.sum(rest[:place]))
        answer = inverse(information[np.ix_(rest, rest)])[where]
        counting = answer[where]
        shape = float(np.linalg.norm(answer @ information[np.ix_(rest, modes)]))
    return Budget(
        statistics_nm=float(spread * np.sqrt(counting)),
        shape_nm=shape * model.feature.shape_allowance,
        scale_nm=scale_relative_uncertainty * separation,
    )


def describe(
    *,
    number: int,
    question: Question,
    claims: Claims,
    model_1: FeatureModel,
    model_2: FeatureModel,
    single: FitResult,
    pair: FitResult,
    flags: list[str],
    spread: float = 1.0,
    residual_limit: float | None = None,
    reasons: tuple[str, ...] = (),
) -> Look:
    """Put the answer together.

    spread : factor on statistical uncertainties where readings scatter more than stated. residual_limit : a
    fit is poor where data stray from it by more than this fraction of the peak; None: where chi square says.
    """
    said_pair = claims.max_log_e_pair >= claims.bound_pair
    said_single = claims.max_log_e_single >= claims.bound_single
    feature = question.feature
    if said_pair and said_single:
        flags.append("conflict")
    where, chosen = (model_1, single) if said_single and not said_pair else (model_2, pair)
    if fits_poorly(where, chosen, residual_limit):
        flags.append("poor-fit")
    sigma, gamma = chosen.value("sigma_nm"), where.value(chosen.values, "gamma_nm")
    width = observed_width(sigma_nm=sigma, gamma_nm=gamma, box_widths_nm=feature.box_widths_nm)
    fwhm, fwhm_u = width.fwhm_nm, _fwhm_u(where, chosen, width, spread)
    if not (said_pair or line_stands_out(model_1, single, spread)):
        flags.append("no-line")
    elif feature.reach_nm is None:  # else the width was read off the same data: nothing to compare
        if fwhm - 2.0 * fwhm_u > 1.15 * feature.fwhm_nm:
            flags.append("broader-than-expected")
        narrower = fwhm + 2.0 * fwhm_u < 0.85 * feature.fwhm_nm or sharper_than_stated(where, chosen)
        if narrower and residual_limit is None:  # of a recorded spectrum no slits are stated
            flags.append("narrower-than-expected")
    further_nm = further_line_nm(model_2, pair) if said_pair or "poor-fit" in flags else None
    if further_nm is not None:
        flags.append("third-line")
        place = with_uncertainty(further_nm, 0.1 * feature.fwhm_nm).split()[0]
        reasons += (f"a further line at about {place} nm would explain the rest: give it as a known line",)
    verdict = _verdict(flags, said_pair=said_pair, said_single=said_single)
    rests_on = {"pair": [pair], "single": [single]}.get(verdict, [single, pair])
    if "no-line" not in flags and not all(made.converged for made in rests_on):
        flags.append("not-converged")
    numbers = _pair_numbers(model_2, pair, question, spread)
    # without a line there is nothing that a second one could be a part of
    excluded = () if "no-line" in flags else exclusion_curve(model_1, single, question, spread)
    base_name = where.background.names[0] if where.background is not None else ""
    goal = question.separation_uncertainty_nm
    reached = verdict == "single"
    if verdict == "pair":
        reached = goal is None or (numbers.u_nm is not None and numbers.u_nm <= goal)
    centre, centre_u = numbers.centre_nm, numbers.centre_u_nm
    if verdict == "single":
        centre, centre_u = single.value("centre_nm"), spread * single.deviation("centre_nm")
    look = Look(
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
        background_per_s=where.background_rate(chosen.values, centre),
        background_u_per_s=spread * chosen.deviation(base_name),
        dark_per_s=chosen.value("dark_per_s") if where.has_dark else None,
        dark_u_per_s=chosen.deviation("dark_per_s") if where.has_dark else None,
        single=single.summary(),
        pair=pair.summary(),
        log_e_pair=claims.log_e_pair,
        log_e_single=claims.log_e_single,
        bound_pair=float(claims.bound_pair),
        bound_single=float(claims.bound_single),
        max_log_e_pair=claims.max_log_e_pair,
        max_log_e_single=claims.max_log_e_single,
        log_numerator_pair=claims.log_numerator_pair,
        log_numerator_single=claims.log_numerator_single,
        window_nm=(float(model_2.x[0]), float(model_2.x[-1])),
        exclusion=excluded,
        flags=tuple(flags),
        evidence=(),
    )
    return explain(look, question, model_1, model_2, reasons)


def _verdict(flags: list[str], *, said_pair: bool, said_single: bool) -> str:
    if {"conflict", "poor-fit", "dead-time-load"} & set(flags):
        return "undecided"
    if said_pair:
        return "pair"
    # a broad line may be two lines closer than the question asks about
    return "single" if said_single and not {"no-line", "broader-than-expected"} & set(flags) else "undecided"


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
    u = float(np.sqrt(budget.statistics_nm**2 + budget.shape_nm**2 + budget.scale_nm**2))
    ratio_u = spread * pair.deviation("ratio")
    second = centre + separation
    if ratio > 1.0:
        places = [model.index["centre_nm"], model.index["separation_nm"]]
        other_u = spread * float(np.sqrt(max(pair.covariance[np.ix_(places, places)].sum(), 0.0)))
        centre, centre_u, second = second, other_u, centre
        ratio, ratio_u = 1.0 / ratio, ratio_u / ratio**2
    return _PairNumbers(abs(separation), u, budget, ratio, ratio_u, centre, centre_u, second)


def _fwhm_u(model: FeatureModel, made: FitResult, width: ObservedWidth, spread: float) -> float:
    """Standard uncertainty of the observed FWHM from the covariance of sigma and gamma."""
    slopes = {"sigma_nm": width.d_sigma, "gamma_nm": width.d_gamma}
    places = [model.index[name] for name in slopes if name in model.index]
    gradient = np.array([slope for name, slope in slopes.items() if name in model.index])
    return float(spread * np.sqrt(max(gradient @ made.covariance[np.ix_(places, places)] @ gradient, 0.0)))


def explain(
    look: Look, question: Question, model_1: FeatureModel, model_2: FeatureModel, reasons: tuple[str, ...]
) -> Look:
    """The same look with its evidence as sentences."""
    said = list(reasons)
    pm = 1e3
    if look.verdict == "pair" and look.separation_nm is not None and look.separation_u_nm is not None:
        said.append(
            f"two lines, {with_uncertainty(look.separation_nm * pm, look.separation_u_nm * pm)} pm apart, "
            f"strengths 1 : {with_uncertainty(look.ratio, look.ratio_u)}"
        )
    if look.verdict == "single":
        said.append(
            f"one line: a second one of at least {question.smallest_ratio:g} of its strength, "
            f"{question.smallest_separation_nm * pm:.3g} pm or more away, is excluded"
        )
    said.append(
        f"evidence for two lines {look.max_log_e_pair:.1f} of {look.bound_pair:.1f} needed, "
        f"for one {look.max_log_e_single:.1f} of {look.bound_single:.1f}"
    )
    sentences = {
        "conflict": "the evidence reached both bounds: line shape or light are not what they are taken for",
        "poor-fit": "neither one nor two lines describe the data",
        "no-line": "no line stands above the background: lamp, shutter, filter, wavelength?",
        "not-converged": "a fit did not settle; look at the spectrum",
        "overdispersed": "the scatter is over twice what is stated: line shape, neighbours or sigma are not "
        "what they are taken for, and the false-alarm level is nominal",
        "dead-time-load": "counts come too fast for the dead-time correction: take light away",
        "broader-than-expected": "the line is over 15 % broader than the instrument and lamp let expect",
        "narrower-than-expected": "the line is narrower than the stated slits and the lamp let expect: "
        "are the slits as the bench file says?",
        "foreign-line": "a foreign line reaches into the window: give it as a known line",
        "window-cut": "only the part of the window around the main peak was used",
    }
    said += [sentences[flag] for flag in look.flags if flag in sentences]
    budget = None if "no-line" in look.flags else look.budget
    if budget is not None and budget.shape_nm > budget.statistics_nm:
        said.append("the line shape, not the light, limits the separation: more light does not help")
    return replace(look, evidence=tuple(said))
