"""A run file read into what a report shows: plain arrays, words and numbers, nothing yet of how they look."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from analysis.counting import Counts, live_time_s
from analysis.readings import AnalogueLaw, CounterLaw
from daq.export_layout import Summary, iso_utc
from daq.export_notes import Note, read_notes
from daq.looks import counts_of
from daq.planned import detector_law, mount_of
from daq.records import Body, Kind, Record
from daq.report_curves import Curves, curves_of
from daq.report_words import event_in_words
from daq.runfile import RunData, open_run, read_run
from daq.summary import separation_in_all_units, verdict_fields
from drivers.errors import DataError

FloatArray: TypeAlias = NDArray[np.float64]
Law: TypeAlias = CounterLaw | AnalogueLaw


MOST_MOMENTS = 60
"""A series that shows a drift has at most so many."""

VAGUE = 0.2
"""A sweep whose strength is known no better than this tells nothing of a drift and is not shown."""


@dataclass(frozen=True, slots=True)
class Stretch:
    """A part of the scale that was swept without a gap. Offsets are drawn from `reference_nm`."""

    low_nm: float
    high_nm: float
    reference_nm: float


@dataclass(frozen=True, slots=True)
class Points:
    """Everything counted with the shutter open and not flagged, by position and comb.

    All (N,) by rising wavelength, as the file's own plot has them: counts as recorded, rate_per_s and
    rate_u_per_s with dead time removed and dark included. model_per_s is None where no fit could be drawn.
    """

    wavelength_nm: FloatArray
    counts: FloatArray
    gate_s: FloatArray
    rate_per_s: FloatArray
    rate_u_per_s: FloatArray
    model_per_s: FloatArray | None


@dataclass(frozen=True, slots=True)
class Series:
    """Values (N,) with standard uncertainties (N,; NaN: none) at moments of bench time (N,), s."""

    bench_s: FloatArray
    value: FloatArray
    u: FloatArray


@dataclass(frozen=True, slots=True)
class Drift:
    """What changed while the run went on. `strength` of each sweep is relative to the fit's first comb."""

    strength: Series
    dark_per_s: Series
    temperature_c: Series
    pressure_pa: Series


@dataclass(frozen=True, slots=True)
class LookAt:
    """A look, when its counts were in (bench time, s), and of how many points."""

    bench_s: float
    points: int
    body: Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Event:
    """Something that happened, in words."""

    bench_s: float
    utc: str
    text: str


@dataclass(frozen=True, slots=True)
class RunView:
    """One run as its page shows it. `summary` is what `--json` prints of it."""

    path: Path
    run_id: str
    is_complete: bool
    is_concluded: bool
    head: Mapping[str, Any]
    summary: Mapping[str, Any]
    look: Mapping[str, Any] | None
    looks: tuple[LookAt, ...]
    points: Points | None
    stretches: tuple[Stretch, ...]
    curves: Curves | None
    curves_problem: str | None
    dwell_nm: FloatArray
    dwell_s: FloatArray
    drift: Drift
    events: tuple[Event, ...]
    faults: int
    flagged: Mapping[str, int]
    identities: Mapping[str, Any]
    bench_settings: Mapping[str, Any]
    target_settings: Mapping[str, Any]
    notes: tuple[Note, ...]
    start_utc_ns: int
    end_utc_ns: int

    @property
    def medium(self) -> str:
        """What the scale is in, "air" or "vacuum"."""
        return str(self.head["plan"]["medium"])

    @property
    def is_analogue(self) -> bool:
        """Whether a recorded count is a unit of charge instead of a pulse."""
        return isinstance(detector_law(self.head["plan"]), AnalogueLaw)

    @property
    def night_utc_ns(self) -> int:
        """When its night began."""
        return int(self.head.get("night_start_utc_ns", self.head["created_utc_ns"]))


def gather(path: Path) -> RunView:
    """Read a run file. Raises DataError naming it if it is none, damaged, or of a newer format."""
    run = read_run(path)
    notes = read_notes(path)
    try:
        return _view(run, notes)
    except (KeyError, TypeError, ValueError, IndexError) as error:
        raise DataError(
            f"{path}: damaged: its records do not fit together ({type(error).__name__}: {error}); "
            "make it again with 'gratingd recover' if its journal is still there"
        ) from error


class _Walk:
    """The records in their order, with the bench time of each as the run itself reckons it."""

    def __init__(self, run: RunData) -> None:
        self.summary = Summary()
        self.bench_ns = 0
        self.session_base_ns: list[int] = []
        self.told: list[tuple[int, int, Record]] = []
        self.looks: list[LookAt] = []
        self.air: list[tuple[float, Body]] = []
        for record in run.records():
            self._take(record)

    def _take(self, record: Record) -> None:
        body = record.body
        self.summary.take(record)
        if record.kind == Kind.SESSION:
            self.session_base_ns.append(self.bench_ns)
        elif record.kind != Kind.HEAD:
            base_ns = self.session_base_ns[-1] if self.session_base_ns else 0
            self.bench_ns = max(self.bench_ns, base_ns + body.get("end_ns", body["at_ns"]))
        if record.kind == Kind.LOOK:
            self._look(body["horizon"], body["look"])
        if record.kind == Kind.CONCLUSION and body["look"] is not None:
            self._look(body["points"], body["look"])
        if body.get("ambient") is not None:
            self.air.append((self.bench_ns * 1e-9, body["ambient"]))
        if record.kind not in (Kind.HEAD, Kind.POINT):
            sessions = self.summary.sessions
            utc_ns = (sessions[-1]["utc_ns"] if sessions else 0) + body.get("at_ns", 0)
            self.told.append((self.bench_ns, utc_ns, record))

    def _look(self, points: int, look: Body) -> None:
        self.looks.append(LookAt(self.bench_ns * 1e-9, points, look))


def _view(run: RunData, notes: tuple[Note, ...]) -> RunView:
    walk = _Walk(run)
    head, look = run.head, walk.summary.last_look
    snapshot = walk.summary.tally.snapshot()
    counts, points, curves, problem = None, None, None, None
    if snapshot.rows:
        counts, visited = _visited(counts_of(snapshot, head["plan"]))
        curves, problem = _curves(look, head, counts)
        points = _points(run.path, visited, curves) if visited.any() else None
    dwell_nm, dwell_s = _dwell(counts)
    return RunView(
        path=run.path,
        run_id=str(head["run_id"]),
        is_complete=run.complete,
        is_concluded=run.conclusion is not None,
        head=head,
        summary=_summary(run, walk, look),
        look=look,
        looks=tuple(walk.looks),
        points=points,
        stretches=_stretches(head, look, counts),
        curves=curves,
        curves_problem=problem,
        dwell_nm=dwell_nm,
        dwell_s=dwell_s,
        drift=_drift(run, walk, curves),
        events=_events(walk.told),
        faults=sum(record.kind == Kind.FAULT for record in run.events),
        flagged=_flagged(run),
        identities={} if walk.summary.prepared is None else walk.summary.prepared["identities"],
        bench_settings=_settings(head["bench"]["text"]),
        target_settings=_settings(head["target"]["text"]),
        notes=notes,
        start_utc_ns=head["created_utc_ns"],
        end_utc_ns=walk.summary.latest_utc_ns,
    )


def _summary(run: RunData, walk: _Walk, look: Body | None) -> dict[str, Any]:
    """The conclusion's own summary; of a run without one the same keys from its last look."""
    if run.conclusion is not None:
        return dict(run.conclusion["summary"])
    light = run.points["light"]
    medium = run.head["plan"]["medium"]
    return {
        "target": run.head["target"]["name"],
        **verdict_fields(look),
        "stop_reason": None,
        "bench_time_s": walk.bench_ns * 1e-9,
        "light_s": float(run.points["gate_ns"][light].sum()) * 1e-9,
        "points": len(light),
        "medium": medium,
        "separation": None if look is None else separation_in_all_units(look, medium),
        "run_id": run.head["run_id"],
    }


def _curves(look: Body | None, head: Body, counts: Counts) -> tuple[Curves | None, str | None]:
    if look is None:
        return None, None
    try:
        return curves_of(look, head, counts), None
    except (KeyError, TypeError, ValueError) as error:
        return None, f"{type(error).__name__}: {error}"


def _points(path: Path, visited: NDArray[np.bool_], curves: Curves | None) -> Points:
    """The file's own plot, without positions that the analysis could not use."""
    with open_run(path) as file:
        data = file["entry/data"]
        names = ("wavelength", "counts", "gate_ns", "rate", "rate_errors")
        column = {name: np.asarray(data[name][:], dtype=np.float64)[visited] for name in names}
    return Points(
        wavelength_nm=column["wavelength"],
        counts=column["counts"],
        gate_s=column["gate_ns"] * 1e-9,
        rate_per_s=column["rate"],
        rate_u_per_s=column["rate_errors"],
        model_per_s=None if curves is None else curves.at_points,
    )


def _visited(counts: Counts) -> tuple[Counts, NDArray[np.bool_]]:
    """The counts without positions that were left out of the analysis, and which were kept."""
    kept = counts.gate_s > 0.0

    def part(values: FloatArray | None) -> FloatArray | None:
        return None if values is None else values[kept]

    made = replace(
        counts,
        wavelength_nm=counts.wavelength_nm[kept],
        counts=counts.counts[kept],
        gate_s=counts.gate_s[kept],
        group=counts.group[kept],
        exposure=part(counts.exposure),
        dispersion=part(counts.dispersion),
    )
    return made, kept


def _stretches(head: Body, look: Body | None, counts: Counts | None) -> tuple[Stretch, ...]:
    """The windows of the question, or all that was swept; each with the line in it as its reference."""
    if counts is None:
        return ()
    feature, x = head["question"]["feature"], counts.wavelength_nm
    asked = feature.get("windows_nm") or [(float(x[0]), float(x[-1]))]
    known = (*(look[key] for key in ("centre_nm", "second_nm") if look is not None), feature["wavelength_nm"])
    lines = [float(line) for line in known if line is not None]
    made = []
    for low, high in asked:
        inside = [line for line in lines if low <= line <= high]
        reference = inside[0] if inside else 0.5 * (low + high)
        made.append(Stretch(float(low), float(high), round(reference, 4)))
    return tuple(made)


def _dwell(counts: Counts | None) -> tuple[FloatArray, FloatArray]:
    """Time spent at each position, all combs together: (M,) nm and (M,) s."""
    if counts is None:
        return np.empty(0), np.empty(0)
    places, owner = np.unique(counts.wavelength_nm, return_inverse=True)
    return places, np.bincount(owner, weights=counts.gate_s).astype(np.float64)


def _drift(run: RunData, walk: _Walk, curves: Curves | None) -> Drift:
    points = run.points
    base_s = np.array(walk.session_base_ns or [0], dtype=np.float64) * 1e-9
    bench_s = base_s[np.maximum(points["session"] - 1, 0)] + points["end_ns"] * 1e-9
    good = points["flags"] == ""
    light, dark = points["light"] & good, ~points["light"] & good
    law = detector_law(run.head["plan"])
    return Drift(
        strength=_strength(run, law, bench_s, light, curves),
        dark_per_s=_dark(points, law, bench_s, dark),
        temperature_c=_air(walk.air, "temperature_c"),
        pressure_pa=_air(walk.air, "pressure_pa"),
    )


def _strength(
    run: RunData, law: Law, bench_s: FloatArray, light: NDArray[Any], curves: Curves | None
) -> Series:
    """Light of each sweep over what the fit expects at the same positions from a lamp of the first comb's
    strength: a sweep that was broken off is compared with its own part."""
    if curves is None or not light.any():
        return _series([])
    points = run.points
    where_nm = np.asarray(mount_of(run.head["plan"]).wavelength_nm(points["steps"][light]), dtype=np.float64)
    expected_per_s = np.interp(where_nm, curves.fine_nm, curves.whole)
    n, u, live_s = _readings(points, law, light)
    found, wanted = n - curves.dark_per_s * live_s, (expected_per_s - curves.dark_per_s) * live_s
    sweeps = points["sweep"][light]
    rows = []
    for sweep in np.unique(sweeps):
        mine = sweeps == sweep
        expected = float(wanted[mine].sum())
        relative_u = float(np.sqrt(np.sum(u[mine] ** 2))) / expected if expected > 0.0 else math.inf
        if relative_u < VAGUE:
            moment = float(bench_s[light][mine].mean())
            rows.append((moment, float(found[mine].sum()) / expected, relative_u))
    return _series(rows)


def _dark(points: Mapping[str, NDArray[Any]], law: Law, bench_s: FloatArray, dark: NDArray[Any]) -> Series:
    """Closed-shutter rate of each dwell, in recorded counts."""
    n, u, live_s = _readings(points, law, dark)
    return _series(
        list(zip(bench_s[dark].tolist(), (n / live_s).tolist(), (u / live_s).tolist(), strict=True))
    )


def _readings(
    points: Mapping[str, NDArray[Any]], law: Law, which: NDArray[Any]
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Recorded counts, their standard uncertainty (that of one event at least), live time in s."""
    n, gate_s = points["counts"][which].astype(np.float64), points["gate_ns"][which] * 1e-9
    if isinstance(law, AnalogueLaw):
        return n, np.sqrt(np.maximum(law.events(n, gate_s), 1.0)) * law.counts_per_event, gate_s
    return n, np.sqrt(np.maximum(n, 1.0)), live_time_s(n, gate_s, dead_time_s=law.dead_time_s)


def _air(readings: Sequence[tuple[float, Body]], key: str) -> Series:
    return _series([(at_s, air[key], math.nan) for at_s, air in readings if air[key] is not None])


def _series(rows: Sequence[tuple[float, float, float]]) -> Series:
    """In order of time; more than MOST_MOMENTS are averaged in equal bundles of neighbours."""
    table = np.array(sorted(rows), dtype=np.float64).reshape(-1, 3)
    bundle = math.ceil(len(table) / MOST_MOMENTS)
    if bundle > 1:
        starts = np.arange(0, len(table), bundle)
        size = np.diff(np.append(starts, len(table)))
        variance = np.add.reduceat(table[:, 2] ** 2, starts)
        means = [np.add.reduceat(table[:, column], starts) / size for column in (0, 1)]
        table = np.column_stack([*means, np.sqrt(variance) / size])
    return Series(table[:, 0], table[:, 1], table[:, 2])


def _events(told: Sequence[tuple[int, int, Record]]) -> tuple[Event, ...]:
    made = []
    for place, (bench_ns, utc_ns, record) in enumerate(told):
        later = (other.kind for _, _, other in told[place + 1 :])
        after = next((kind for kind in later if kind in (Kind.PREPARED, Kind.FAULT, Kind.SAFE)), None)
        text = event_in_words(record.kind, record.body, is_repaired=after == Kind.PREPARED)
        if text is not None:
            made.append(Event(bench_ns * 1e-9, iso_utc(utc_ns), text))
    return tuple(made)


def _flagged(run: RunData) -> dict[str, int]:
    """Readings that were recorded and left out, by what was wrong with them."""
    found: dict[str, int] = {}
    for flags in run.points["flags"].tolist():
        for flag in flags.split(",") if flags else ():
            found[flag] = found.get(flag, 0) + 1
    return dict(sorted(found.items()))


def _settings(text: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError:  # the run did not need it again, and neither does its report
        return {}
