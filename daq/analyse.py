"""Looking again: a run's file re-analysed from its own records, or a measured spectrum weighed once."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from analysis.counting import Counts
from analysis.question import Question, to_json
from analysis.verdict import guess_feature, weigh_once
from daq.export_notes import read_notes
from daq.instrument import in_medium
from daq.journal import is_journal
from daq.looks import answer
from daq.machine import Machine, MachineError, StartLook
from daq.records import Body, Kind
from daq.runfile import RunData, read_run
from daq.spectrum import Spectrum, read_spectrum
from daq.summary import separation_in_all_units, summary_of_look, verdict_fields
from daq.target import LoadedTarget
from drivers.errors import DataError

HDF5_ENDINGS = frozenset({".h5", ".hdf5", ".nxs"})
HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"


@dataclass(frozen=True, slots=True)
class Asked:
    """What the user says about a measured spectrum, all of it optional.

    Wavelengths are nm on the file's own scale. `target` brings its line, its known lines, its model and goal.
    """

    target: LoadedTarget | None = None
    line_nm: float | None = None
    known_lines_nm: tuple[float, ...] = ()
    false_alarm: float = 1e-3


def analyse(path: Path, asked: Asked) -> dict[str, Any]:
    """One file's summary. Raises DataError naming the file when it cannot be used."""
    if is_run_file(path):
        return _analyse_run(read_run(path))
    if is_journal(path):
        raise DataError(
            f"{path}: is a journal, not a spectrum; analyse its run file (.h5). "
            f"If there is none yet: gratingd recover {path.parent}"
        )
    return _analyse_spectrum(read_spectrum(path), asked)


def is_run_file(path: Path) -> bool:
    """Whether it is to be read as HDF5: by what it holds, whatever its name, or else by its ending."""
    if path.suffix.lower() in HDF5_ENDINGS:
        return True
    try:
        if not path.is_file():
            return False
        with path.open("rb") as stream:
            return stream.read(8) == HDF5_SIGNATURE
    except OSError:
        return False


# ---- a run ----------------------------------------------------------------------------------------------


def _analyse_run(run: RunData) -> dict[str, Any]:
    """The run's looks and its conclusion computed anew, cold, from the records in the file alone."""
    try:
        return _summary(run, *redo(run))
    except (KeyError, TypeError, ValueError, MachineError) as error:
        raise DataError(
            f"{run.path}: damaged: its records do not fit together ({type(error).__name__}: {error}); "
            "make it again with 'gratingd recover' if its journal is still there"
        ) from error


def _summary(run: RunData, machine: Machine, look: dict[str, Any] | None) -> dict[str, Any]:
    recorded = None if run.conclusion is None else run.conclusion["look"]
    return {
        "target": run.head["target"]["name"],
        "specimen_serial": run.head["specimen_serial"],
        **summary_of_look(run.head, machine, look),
        "stop_reason": None if run.conclusion is None else run.conclusion["stop_reason"],
        "bench_time_s": machine.bench_ns / 1e9,
        "light_s": machine.light_ns / 1e9,
        "points": machine.points,
        "medium": run.head["plan"]["medium"],
        "separation": None if look is None else separation_in_all_units(look, run.head["plan"]["medium"]),
        "run_id": run.head["run_id"],
        "reproduces": _reproduces(recorded, look),
        "notes": [asdict(note) for note in read_notes(run.path)],
        "file": str(run.path.absolute()),
    }


def redo(run: RunData) -> tuple[Machine, dict[str, Any] | None]:
    """The machine folded over the records, each look's answer computed instead of taken from the file.

    Returns it with the final look (None if nothing was counted). Looks that the records do not use (asked
    before a crash, say) are not computed.
    """
    machine = Machine(run.head["plan"])
    asked: dict[int, StartLook] = {}
    for record in run.records():
        if record.kind in (Kind.HEAD, Kind.CONCLUSION):
            continue
        body: Body = record.body
        if record.kind == Kind.LOOK and body["horizon"] in asked:
            body = {**body, "look": answer(run.head, asked.pop(body["horizon"]))}
        for effect in machine.step(record.kind, body):
            if isinstance(effect, StartLook) and not effect.final:
                asked[effect.horizon] = effect
    final = machine.look_request(final=True)
    return machine, answer(run.head, final) if final.now.can_be_weighed else None


def _reproduces(recorded: Mapping[str, Any] | None, look: Mapping[str, Any] | None) -> str:
    """How the re-analysis compares with the conclusion in the file."""
    if recorded is None or look is None:
        return "nothing to compare"
    if json.dumps(recorded, sort_keys=True) == json.dumps(look, sort_keys=True):
        return "bit-equal"
    was, now = _numbers(recorded), _numbers(look)
    if was.shape != now.shape or recorded["verdict"] != look["verdict"]:
        return "different"
    scale = np.maximum(np.abs(was), np.abs(now))
    worst = float(np.max(np.abs(was - now) / np.where(scale > 0, scale, 1.0), initial=0.0))
    return f"within {worst:.1e} relative"


def comparison(reproduces: str) -> str:
    """A summary's `reproduces` as the end of a sentence."""
    if reproduces == "nothing to compare":
        return "no recorded conclusion to compare with"
    joined = {"bit-equal": "bit-equal to", "different": "different from"}
    return f"{joined.get(reproduces, f'{reproduces} of')} the recorded conclusion"


def _numbers(value: Any) -> Any:
    """Every number in a JSON value, in the order of its keys."""
    found: list[float] = []

    def walk(item: Any) -> None:
        if isinstance(item, Mapping):
            for key in sorted(item):
                walk(item[key])
        elif isinstance(item, (list, tuple)):
            for part in item:
                walk(part)
        elif isinstance(item, (int, float)):
            found.append(float(item))

    walk(value)
    return np.array(found)


# ---- a measured spectrum --------------------------------------------------------------------------------


def counts_of_spectrum(spectrum: Spectrum) -> Counts:
    """One position a row, one second each, no dead time left to correct."""
    rows = spectrum.wavelength_nm.size
    return Counts(
        wavelength_nm=np.array(spectrum.wavelength_nm),
        counts=np.array(spectrum.counts),
        gate_s=np.ones(rows),
        group=np.zeros(rows, dtype=np.int64),
        sigma=None if spectrum.sigma is None else np.array(spectrum.sigma),
    )


def _analyse_spectrum(spectrum: Spectrum, asked: Asked) -> dict[str, Any]:
    counts = counts_of_spectrum(spectrum)
    try:
        question = _question(spectrum, counts, asked)
        look = to_json(weigh_once(counts, question))
    except ValueError as error:
        raise DataError(f"{spectrum.path}: {error}") from error
    target = asked.target
    return {
        "target": Path(spectrum.path).stem if target is None else target.target.name,
        **verdict_fields(look),
        "stop_reason": None,
        "bench_time_s": None,
        "light_s": None,
        "points": int(spectrum.wavelength_nm.size),
        "medium": spectrum.medium,
        "separation": separation_in_all_units(look, spectrum.medium),
        "run_id": None,
        "reproduces": None,
        "file": str(Path(spectrum.path).absolute()),
    }


def _check_within(spectrum: Spectrum, line_nm: float | None, known_nm: tuple[float, ...]) -> None:
    """A line the file does not hold would be answered for as if it were there. A known one may stand outside
    and reach in with its wing, but not further away than the file is wide."""
    lowest, highest = float(spectrum.wavelength_nm[0]), float(spectrum.wavelength_nm[-1])
    width = highest - lowest
    told = f"the file covers {lowest:g} to {highest:g} nm in {spectrum.medium}"
    if line_nm is not None and not lowest <= line_nm <= highest:
        raise ValueError(f"a line expected at {line_nm:g} nm is not in it: {told}")
    for known in known_nm:
        if not lowest - width <= known <= highest + width:
            raise ValueError(f"a known line at {known:g} nm is nowhere near: {told}")


def _question(spectrum: Spectrum, counts: Counts, asked: Asked) -> Question:
    target = asked.target
    line_nm, known_nm = asked.line_nm, asked.known_lines_nm
    if target is not None:
        given = target.target
        line_nm = in_medium(given.wavelength_nm, given.medium, spectrum.medium, at_bench=False)
        known_nm = tuple(
            in_medium(w, given.medium, spectrum.medium, at_bench=False) for w in given.known_lines_nm
        )
    _check_within(spectrum, line_nm, known_nm)
    feature = guess_feature(counts)
    if line_nm is not None:  # whoever names the line also names its neighbours: the whole file is the window
        feature = replace(feature, wavelength_nm=line_nm, known_lines_nm=known_nm, reach_nm=None)
    decide = None if target is None else target.target.goal.decision
    if target is not None:
        model = target.target.model
        feature = replace(feature, shape=model.shape, widths=model.widths, background=model.background)
    smallest_pm = None if decide is None else decide.smallest_separation_pm
    goal_pm = None if target is None else target.target.goal.separation_uncertainty_pm
    return Question(
        feature=feature,
        false_alarm=asked.false_alarm if decide is None else decide.false_alarm,
        smallest_separation_nm=feature.fwhm_nm if smallest_pm is None else 1e-3 * smallest_pm,
        smallest_ratio=0.1 if decide is None else decide.smallest_ratio,
        miss_probability=0.05 if decide is None else decide.miss_probability,
        separation_uncertainty_nm=None if goal_pm is None else 1e-3 * goal_pm,
        scale_relative_uncertainty=1e-4,
    )
