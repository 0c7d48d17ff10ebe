"""Two runs of one feature, plain and through an attenuator put in by hand: is the detector linear?"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np

from analysis.digits import with_uncertainty
from analysis.linearity import FEWEST_POSITIONS, Arm, Linearity, compare, in_words
from analysis.readings import AnalogueLaw, CounterLaw
from analysis.variance import variance_law
from daq.planned import detector_law
from daq.runfile import RunData, read_run
from drivers.bench import read_bench
from drivers.errors import DataError


def linearity(plain: Path, attenuated: Path) -> dict[str, Any]:
    """Dead time, or curvature and variance law, from two run files; JSON types, `sentences` for people.

    The runs must be of the same detector and the same comb of positions; what the attenuator lets through
    need not be known. Raises DataError naming the file that cannot be used, or both.
    """
    one, two = read_run(plain), read_run(attenuated)
    _check(one, two)
    law = detector_law(one.head["plan"])
    both = f"{plain} and {attenuated}"
    mine, other = _light(one), _light(two)
    common = sorted(mine.keys() & other.keys())
    if len(common) < FEWEST_POSITIONS:
        raise DataError(
            f"{both}: have {len(common)} positions of the drive in common, {FEWEST_POSITIONS} are needed; "
            "measure one target twice, with the same window and step"
        )
    if sum(mine[key][0] for key in common) < sum(other[key][0] for key in common):
        raise DataError(f"{both}: the second is the brighter one; name the run without the attenuator first")
    position, group = np.array(common, dtype=np.int64).T
    try:
        found = compare(
            position.astype(np.float64),
            group,
            plain=_arm(one, mine, common),
            attenuated=_arm(two, other, common),
            law=law,
            periods=_periods_steps(one),
        )
    except ValueError as error:
        raise DataError(f"{both}: {error}") from error
    sentences = list(in_words(found, law=law))
    made: dict[str, Any] = {
        "plain": str(plain),
        "attenuated": str(attenuated),
        "kind": "counter" if isinstance(law, CounterLaw) else "analogue",
        "positions": found.positions,
        "transmission": found.transmission,
        "transmission_u": found.transmission_u,
        "shift_steps": found.shift,
        "shift_u_steps": found.shift_u,
        "chi2": found.chi2,
        "dof": found.dof,
        "is_supported_throughout": found.is_whole,
    }
    made |= _of_counter(found, law) if isinstance(law, CounterLaw) else _of_current(found)
    if isinstance(law, AnalogueLaw):
        noise, said = _noise(one, two, law)
        made["variance_law"] = noise
        sentences.append(said)
    return made | {"sentences": sentences}


def text_lines(made: Mapping[str, Any]) -> list[str]:
    """What `linearity` found, for a terminal."""
    transmission = with_uncertainty(made["transmission"], made["transmission_u"])
    shift = with_uncertainty(made["shift_steps"], made["shift_u_steps"])
    head = (
        f"{made['positions']} positions compared: transmission {transmission}, chi square {made['chi2']:.1f} "
        f"of {made['dof']}, runs shifted by {shift} steps."
    )
    return [head, *made["sentences"]]


def _of_counter(found: Linearity, law: CounterLaw) -> dict[str, Any]:
    assert found.dead_time_s is not None
    assert found.dead_time_u_s is not None
    return {
        "dead_time_ns": 1e9 * found.dead_time_s,
        "dead_time_u_ns": 1e9 * found.dead_time_u_s,
        "stated_dead_time_ns": 1e9 * law.dead_time_s,
        "stated_dead_time_u_ns": 1e9 * law.dead_time_u_s,
        "highest_rate_per_s": found.highest_per_s,
    }


def _of_current(found: Linearity) -> dict[str, Any]:
    return {
        "curvature_per_a": found.curvature_per_a,
        "curvature_u_per_a": found.curvature_u_per_a,
        "highest_current_a": found.highest_per_s,
    }


def _periods_steps(run: RunData) -> tuple[float, ...]:
    """Of the periodic errors that the bench file knows of its drive."""
    drive = read_bench(run.head["bench"]["text"], run.head["bench"]["name"]).drive
    microsteps = () if drive.microstep_period_steps is None else (float(drive.microstep_period_steps),)
    return (*microsteps, *(error.period_steps for error in drive.periodic_errors))


def _check(one: RunData, two: RunData) -> None:
    if one.points["seq"].shape == two.points["seq"].shape and one.head == two.head:
        raise DataError(
            f"{one.path} and {two.path}: are the same run; give one measured plainly and one through an "
            "attenuator"
        )
    for run in (one, two):
        if "detector" not in run.head["plan"]:
            raise DataError(f"{run.path}: written before detectors were recorded; measure anew")
    plan, other = one.head["plan"], two.head["plan"]
    for key, what in (("detector", "[detector]"), ("mount", "[optics] and [drive]")):
        if plan[key] != other[key]:
            raise DataError(
                f"{one.path} and {two.path}: taken with different {what} in their bench files; only the "
                "attenuator may differ"
            )

    for key in ("high_voltage_v", "gain"):
        if _confirmed(one, key) != _confirmed(two, key):
            raise DataError(
                f"{one.path} and {two.path}: taken with different {key} ({_confirmed(one, key)} and "
                f"{_confirmed(two, key)}); a detector is another one at another voltage or gain"
            )


def _confirmed(run: RunData, key: str) -> object:
    """What a person confirmed for the run; None where nothing was said."""
    items = (run.head["confirmed"] or {}).get("items", ())
    return next((item["value"] for item in items if item["key"] == key), None)


def _good(run: RunData) -> np.ndarray[Any, np.dtype[np.bool_]]:
    made: np.ndarray[Any, np.dtype[np.bool_]] = run.points["flags"] == ""
    return made


def _light(run: RunData) -> dict[tuple[int, int], tuple[int, int]]:
    """(counts, gate in ns) by (steps, dither group) of good points with the shutter open."""
    points, sums = run.points, dict[tuple[int, int], tuple[int, int]]()
    kept = _good(run) & points["light"]
    columns = (points[name][kept].tolist() for name in ("steps", "group", "counts", "gate_ns"))
    for steps, group, counts, gate_ns in zip(*columns, strict=True):
        before = sums.get((steps, group), (0, 0))
        sums[steps, group] = (before[0] + counts, before[1] + gate_ns)
    return sums


def _arm(
    run: RunData, light: Mapping[tuple[int, int], tuple[int, int]], common: list[tuple[int, int]]
) -> Arm:
    dark = _good(run) & ~run.points["light"] & (run.points["sweep"] >= 0)  # before the sweeps it may settle
    return Arm(
        counts=np.array([light[key][0] for key in common], dtype=np.float64),
        gate_s=np.array([light[key][1] for key in common], dtype=np.float64) * 1e-9,
        dark_counts=float(run.points["counts"][dark].sum()),
        dark_gate_s=float(run.points["gate_ns"][dark].sum()) * 1e-9,
    )


def _noise(one: RunData, two: RunData, law: AnalogueLaw) -> tuple[dict[str, float] | None, str]:
    """The variance law of the readings of both runs, and what it means for the bench file."""
    cells, currents, gates = [], [], []
    for number, run in enumerate((one, two)):
        kept = _good(run) & (run.points["sweep"] >= 0)
        where = np.where(run.points["light"], run.points["steps"], np.iinfo(np.int64).min)[kept]
        gate_s = run.points["gate_ns"][kept] * 1e-9
        cells.append(np.column_stack([np.full(where.size, number), where]))
        currents.append(run.points["counts"][kept] * law.charge_unit_c / gate_s)
        gates.append(gate_s)
    _, cell = np.unique(np.concatenate(cells), axis=0, return_inverse=True)
    try:
        found = variance_law(cell.reshape(-1), np.concatenate(currents), np.concatenate(gates))
    except ValueError as error:
        return None, f"No variance law: {error}."
    read = _against(found.read_noise_a, found.read_noise_u_a, law.read_noise_a, "read_noise_a", "A")
    shot = _against(found.shot_noise_c, found.shot_noise_u_c, law.shot_noise_c, "shot_noise_c", "C")
    said = f"Repeats scatter as {read} and {shot} say."
    if found.flicker > 0.0:
        said += f" Besides, the lamp varies by {100.0 * found.flicker:.2g} % between repeats."
    return asdict(found), said


def _against(found: float, u: float, stated: float, key: str, unit: str) -> str:
    """A measured constant beside the stated one."""
    verdict = "as stated" if abs(found - stated) <= 2.0 * u else f"NOT {stated:.3g} {unit} as stated"
    return f"{key} = {found:.3g} ± {u:.1g} {unit} ({verdict})"
