"""A look in sentences: what was found, what it rests on, what is wrong and what to do about it."""

from __future__ import annotations

from dataclasses import replace

from analysis.claims import AMBIGUOUS
from analysis.digits import with_uncertainty
from analysis.doubts import NO_LINE, NOT_REACHED
from analysis.question import Look, Question

PM = 1e3

SENTENCES = {
    "conflict": "the evidence reached both bounds: line shape or light are not what they are taken for",
    "poor-fit": "neither one nor two lines describe the data",
    NO_LINE: "no line stands above the background: lamp, shutter, filter, wavelength?",
    NOT_REACHED: "the run ended before its first sweep had passed the line",
    "not-converged": "a fit did not settle; look at the spectrum",
    "overdispersed": "the scatter is over twice what is stated: line shape, neighbours or sigma are not "
    "what they are taken for, and the false-alarm level is nominal",
    "dead-time-load": "counts come too fast for the dead-time correction: take light away",
    "lamp-drift": "the light changed by more than 5 % from sweep to sweep: each comb has a gain of its own, "
    "but let the lamp warm up longer",
    "broader-than-expected": "the line is over 15 % broader than the instrument and lamp let expect",
    "narrower-than-expected": "the line is narrower than the stated slits and the lamp let expect: "
    "are the slits as the bench file says?",
    "foreign-line": "a foreign line reaches into the window: give it as a known line",
    "window-cut": "only the part of the window around the main peak was used",
    AMBIGUOUS: "a self-reversed line or a pair: more light cannot tell them apart where the dip is narrower "
    "than about half the bandpass; ask for a higher order or narrower slits",
}


def explain(look: Look, question: Question, reasons: tuple[str, ...]) -> Look:
    """The same look with its evidence as sentences."""
    said = list(reasons) + _findings(look, question) + [_claims(look)]
    said += [SENTENCES[flag] for flag in look.flags if flag in SENTENCES]
    budget = None if {NO_LINE, NOT_REACHED} & set(look.flags) else look.budget
    if budget is not None and budget.shape_nm > budget.statistics_nm:
        said.append("the line shape, not the light, limits the separation: more light does not help")
    if budget is not None and budget.drive_nm > max(budget.statistics_nm, budget.shape_nm):
        said.append("periodic errors of the drive limit the separation: more light does not help")
    return replace(look, evidence=tuple(said))


def _findings(look: Look, question: Question) -> list[str]:
    feature, made = question.feature, []
    if look.verdict == "pair" and look.separation_nm is not None and look.separation_u_nm is not None:
        made.append(
            f"two lines, {with_uncertainty(look.separation_nm * PM, look.separation_u_nm * PM)} pm apart, "
            f"strengths 1 : {with_uncertainty(look.ratio, look.ratio_u)}"
        )
        if feature.line_fwhm_limit_nm is not None:
            made.append(
                "the verdict rests on the known width of the line: no more than "
                f"{feature.line_fwhm_limit_nm * PM:.3g} pm with diffraction"
            )
    if look.verdict == "single":
        made.append(
            f"one line: a second one of at least {question.smallest_ratio:g} of its strength, "
            f"{question.smallest_separation_nm * PM:.3g} pm or more away, is excluded"
        )
    if look.verdict == "self-reversed" and look.self_reversed is not None:
        depth, width = (look.self_reversed.value(name) for name in ("reversal_depth", "absorber_width"))
        made.append(
            f"one self-reversed line: its middle is absorbed, optical depth about {depth:.2g}, by a layer "
            f"{width:.2g} times as wide as the line is emitted"
        )
    made += _resolving(look, question)
    return made


def _resolving(look: Look, question: Question) -> list[str]:
    wanted = question.resolving_power_at_least
    if wanted is None:
        return []
    if look.resolving_power is None or look.resolving_power_u is None:
        return ["no resolving power can be read from this feature"]
    line = question.feature.line_fwhm_nm * PM
    found = with_uncertainty(look.resolving_power, look.resolving_power_u)
    said = f"resolving power {found}, the line's own width in it (expected {line:.3g} pm with diffraction): "
    reaches = reaches_resolving_power(look.resolving_power, look.resolving_power_u, wanted)
    if reaches is None:
        return [said + f"too near the {wanted:g} asked for to decide yet"]
    return [said + ("at least" if reaches else "below") + f" the {wanted:g} asked for"]


def reaches_resolving_power(found: float, u: float, wanted: float) -> bool | None:
    """Whether it is as high as wanted; None: less than two standard uncertainties away, undecided."""
    return None if abs(found - wanted) < 2.0 * u else found > wanted


def _claims(look: Look) -> str:
    said = (
        f"evidence for two lines {look.max_log_e_pair:.1f} of {look.bound_pair:.1f} needed, "
        f"for one {look.max_log_e_single:.1f} of {look.bound_single:.1f}"
    )
    if look.bound_reversed is not None:
        said += f", for a self-reversed one {look.max_log_e_reversed:.1f} of {look.bound_reversed:.1f}"
    return said
