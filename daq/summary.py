"""What a run comes to: the conclusion record, and the few numbers people ask for first."""

from __future__ import annotations

from typing import Any

from analysis.air import LABORATORY_AIR
from analysis.separation import separation_of
from daq.machine import Machine
from daq.records import Body


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
            **verdict_fields(look),
            **({} if look is not None else _no_look(machine)),
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
