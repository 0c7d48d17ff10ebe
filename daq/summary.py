"""What a run comes to: the conclusion record, and the few numbers people ask for first."""

from __future__ import annotations

from typing import Any

from analysis.air import LABORATORY_AIR
from analysis.dark import FEWEST_DWELLS, drift
from analysis.digits import with_uncertainty
from analysis.readings import AnalogueLaw
from analysis.separation import separation_of
from daq.machine import Machine
from daq.planned import detector_law
from daq.records import Body, StopReason
from daq.tally import dark_events

DARK_DRIFT = "dark-drift"
"""The flag of a dark that was not the same throughout the run."""

DARK_UNSETTLED = "dark-unsettled"
"""The flag of sweeps that began before the dark had settled."""

DRIFT_RISK = 1e-3
"""How often a steady dark is told to drift, a run."""


def conclusion(head: Body, machine: Machine, look: dict[str, Any] | None) -> dict[str, Any]:
    """The body of a run's last record (its time excepted)."""
    assert machine.stop is not None, "a run is concluded after its stop only"
    separation = None if look is None else separation_in_all_units(look, head["plan"]["medium"])
    return {
        "stop_reason": machine.stop,
        "look": look,
        "separation": separation,
        "bench_time_ns": machine.bench_ns,
        "light_ns": machine.light_ns,
        "points": machine.points,
        "sweeps": machine.sweeps_done,
        "summary": {
            "target": head["target"]["name"],
            "specimen_serial": head["specimen_serial"],
            **summary_of_look(head, machine, look),
            "cause": machine.cause,
            "stop_reason": machine.stop,
            "bench_time_s": machine.bench_ns / 1e9,
            "light_s": machine.light_ns / 1e9,
            "points": machine.points,
            "safe": machine.last_safe,
            "medium": head["plan"]["medium"],
            "separation": separation,
            "run_id": head["run_id"],
            "file": f"{head['run_id']}.h5",
        },
    }


def summary_of_look(head: Body, machine: Machine, look: Body | None) -> dict[str, Any]:
    """Verdict, numbers, flags and sentences of a run: those of its last look, and of its darks."""
    fields = verdict_fields(look) | ({} if look is not None else _no_look(machine))
    if machine.stop is StopReason.NOT_AS_STATED:
        fields["evidence"] = [
            *fields["evidence"],
            "stopped: the lines are narrower than the stated slits and the diffraction let them be; "
            "look at the slits, mend the bench file and measure again",
        ]
    if machine.dark_is_unsettled:
        fields["flags"] = [*fields["flags"], DARK_UNSETTLED]
        fields["evidence"] = [
            *fields["evidence"],
            "the dark had not settled when the sweeps began; was there too much light before?",
        ]
    moved = _dark_drift(head, machine)
    if moved is not None:
        fields["flags"] = [*fields["flags"], DARK_DRIFT]
        fields["evidence"] = [*fields["evidence"], moved]
    return fields


def _dark_drift(head: Body, machine: Machine) -> str | None:
    """What the darks of the sweeps say of their change over the run, if they say anything clear."""
    if len(machine.darks) < FEWEST_DWELLS:
        return None
    law = detector_law(head["plan"])
    events = dark_events([d[:2] for d in machine.darks], law if isinstance(law, AnalogueLaw) else None)
    found = drift(events, at_s=[d[2] * 1e-9 for d in machine.darks], risk=DRIFT_RISK)
    if not found.is_clear:
        return None
    return (
        f"the dark was not the same throughout: about {found.rate_per_s:.3g} per s, "
        f"changed by {with_uncertainty(found.change_per_s, found.change_u_per_s)} per s from the first sweep "
        "to the last; the fit took it as one"
    )


def _no_look(machine: Machine) -> dict[str, Any]:
    if machine.tally.can_be_weighed:
        return {"flags": ["analysis-failed"], "evidence": ["the analysis failed; the counts are in the file"]}
    return {"flags": ["too-few-points"], "evidence": ["too few points were counted for anything to be said"]}


def verdict_fields(look: Body | None) -> dict[str, Any]:
    """Verdict, separation and ratio; the numbers of a pair are null unless the verdict is "pair"."""
    is_pair = look is not None and look["verdict"] == "pair"

    def of_pair(key: str, scale: float) -> float | None:
        value = look[key] if is_pair and look is not None else None
        return None if value is None else value * scale

    return {
        "verdict": "undecided" if look is None else look["verdict"],
        "separation_pm": of_pair("separation_nm", 1e3),
        "separation_u_pm": of_pair("separation_u_nm", 1e3),
        "ratio": of_pair("ratio", 1.0),
        "ratio_u": of_pair("ratio_u", 1.0),
        "flags": [] if look is None else list(look["flags"]),
        "evidence": [] if look is None else list(look["evidence"]),
    }


def separation_in_all_units(look: Body, medium: str) -> dict[str, float | None] | None:
    """The pair's separation in pm (air, vacuum), 1/cm, meV and GHz, each with its uncertainty; else None."""
    if look["verdict"] != "pair" or look["second_nm"] is None or look["separation_u_nm"] is None:
        return None
    result = separation_of(
        wavelength_1_nm=look["centre_nm"],
        wavelength_2_nm=look["second_nm"],
        u_separation_nm=look["separation_u_nm"],
        medium=medium,
        air=LABORATORY_AIR,
    )
    return {
        "separation_air_pm": result.air_pm,
        "separation_u_air_pm": result.u_air_pm,
        "separation_vacuum_pm": result.vacuum_pm,
        "separation_u_vacuum_pm": result.u_vacuum_pm,
        "separation_per_cm": result.per_cm,
        "separation_u_per_cm": result.u_per_cm,
        "separation_mev": result.mev,
        "separation_u_mev": result.u_mev,
        "separation_ghz": result.ghz,
        "separation_u_ghz": result.u_ghz,
    }
