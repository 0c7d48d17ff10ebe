"""Everything in a report that is a code elsewhere, in words."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from analysis.digits import with_uncertainty
from daq.records import Kind

VERDICTS = {
    "pair": "Two lines",
    "single": "One line",
    "self-reversed": "One line, self-reversed",
    "undecided": "Undecided",
}

STOPS = {
    "goal-reached": "the goal was reached",
    "time-limit": "the time limit was reached",
    "light-limit": "the limit of light was reached",
    "conflict": "more than one claim reached its bound: something is not what it is taken for",
    "stopped-by-user": "somebody stopped it",
    "deadline": "the target's deadline had come",
    "not-as-stated": "the lines are narrower than the stated slits let them be",
    "night-deadline": "the night was over",
    "fault": "a fault of the bench",
    "over-light": "more light than the bench file allows",
    "internal-error": "an internal error",
    "interrupted": "it broke off and was concluded from what had been counted",
}

FLAGS = {
    "analysis-failed": "The analysis failed; the counts are in the file.",
    "too-few-points": "Too few points were counted for anything to be said.",
    "conflict": "More than one claim reached its bound: line shape or light are not what they are taken for.",
    "poor-fit": "Neither one nor two lines describe the data.",
    "line-not-reached": "The run ended before its first sweep had passed the line.",
    "no-line": "No line stands above the background. Lamp, shutter, filter, wavelength?",
    "not-converged": "A fit did not settle; look at the spectrum.",
    "overdispersed": "The readings scatter more than stated; the false-alarm level is nominal.",
    "dead-time-load": "Counts came too fast for the dead-time correction; take light away.",
    "broader-than-expected": "The line is over 15 % broader than instrument and lamp let expect.",
    "narrower-than-expected": "The line is narrower than the stated slits and the lamp let expect.",
    "third-line": "A further line would explain what the fit leaves over; give it as a known line.",
    "foreign-line": "A foreign line reaches into the window; give it as a known line.",
    "window-cut": "Only the part of the window around the main peak was used.",
    "self-reversed-or-pair": "A self-reversed line and a pair describe the data equally well.",
    "lamp-drift": "The light changed by more than 5 % from sweep to sweep.",
    "dark-drift": "The dark was not the same throughout; the fit took it as one.",
    "dark-unsettled": "The sweeps began before the dark had settled; was there too much light before?",
    "few-events": "Some positions hold too few events for the noise law of currents.",
    "clipped": "Some currents lay below what read noise explains and were taken as nothing.",
    "dead-time": "Some positions were dead for too much of their gates and are left out.",
    "reference-dead-time": "The reference was dead for too much of some gates; those positions are left out.",
    "no-reference": "The reference saw no lamp at some positions; they are left out.",
}

POINT_FLAGS = {
    "late": "the reading came late",
    "saturated": "the detector was saturated",
    "overload": "the detector was overloaded",
    "clipped": "the reading was clipped",
    "dead-time": "counts came too fast for the dead-time correction",
}

CAUSES = {
    "statistics_nm": "counting statistics",
    "shape_nm": "line shape",
    "scale_nm": "wavelength scale",
    "drive_nm": "periodic errors of the drive",
}

CAUTIONS = (
    "Ultraviolet light from mercury, cadmium and other discharge lamps burns eyes and skin and makes ozone: "
    "lamps stay housed, interlocked and ventilated.",
    "A broken mercury lamp is a chemical accident: leave the room, let it air, follow the local procedure.",
    "Lamp supplies and photomultipliers work at voltages that kill. Only licensed people open them.",
    "Lamps stay hot long after they are off. Nothing that burns stands near them, least of all unattended.",
    "Local codes, the makers' sheets and the people licensed to answer for the installation decide, not "
    "this page.",
)


def verdict_in_words(verdict: str) -> str:
    """The headline of a page."""
    return VERDICTS.get(verdict, verdict.replace("-", " ").capitalize())


def stop_in_words(reason: str | None) -> str:
    """Why a run ended, as the end of a sentence; a run without a conclusion has not."""
    return "it is not over, or broke off" if reason is None else STOPS.get(reason, reason.replace("-", " "))


def flag_in_words(flag: str) -> str:
    """What a flag of a look means."""
    return FLAGS.get(flag, f"{flag.replace('-', ' ').capitalize()}.")


def point_flag_in_words(flag: str) -> str:
    """What a flag of a reading means."""
    return POINT_FLAGS.get(flag, flag.replace("-", " "))


def answer_in_words(summary: Mapping[str, Any], question: Mapping[str, Any]) -> str:
    """The verdict with its numbers, one sentence."""
    verdict = summary["verdict"]
    if verdict == "pair":
        separation = with_uncertainty(summary["separation_pm"], summary["separation_u_pm"])
        ratio = with_uncertainty(summary["ratio"], summary["ratio_u"])
        return f"Two lines, {separation} pm apart in {summary['medium']}, strengths 1 : {ratio}."
    if verdict == "single":
        return (
            f"One line: a second one of at least {question['smallest_ratio']:g} of its strength, "
            f"{1e3 * question['smallest_separation_nm']:.3g} pm or more away, is excluded at the risk "
            f"{question['miss_probability']:g}."
        )
    if verdict == "self-reversed":
        return "One line whose middle its own cooler vapour takes away: the dip is no gap between two lines."
    return "Neither one line nor two is certain." if summary["evidence"] else "Nothing has been weighed yet."


def event_in_words(kind: str, body: Mapping[str, Any], *, is_repaired: bool) -> str | None:
    """A record for people; None if it is of no interest to them.

    is_repaired : the bench came back after it.
    """
    match kind:
        case Kind.SESSION:
            again = body.get("number", 1) > 1
            return f"Taken up again ({body['reason']})" if again else "Run begun"
        case Kind.PREPARED:
            return f"Bench ready, drive homed at {body['home_steps']} steps"
        case Kind.FAULT:
            then = "; the bench was prepared anew and the run went on" if is_repaired else ""
            return f"Fault of {body['device']}: {body['text'] or body['error']}{then}"
        case Kind.WISH:
            reason = f" ({body['reason']})" if body.get("reason") else ""
            return f"Wish from {body['source']}: {body['wish']}{reason}"
        case Kind.DEADLINE:
            return f"The limit of {body.get('limit', 'time')} was reached"
        case Kind.SAFE:
            problems = "".join(f"; {problem}" for problem in body["problems"])
            return f"Shutter {_state(body['shutter'])}, drive {_state(body['drive'])}{problems}"
        case Kind.CONCLUSION:
            return f"Ended: {stop_in_words(body['stop_reason'])}"
        case _:
            return None


def _state(value: Any) -> str:
    return value if isinstance(value, str) else ("safe" if value else "unknown")
