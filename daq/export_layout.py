"""The layout of a run file in NeXus terms (an open standard), section by section.

    /entry               title, times, run id, program
      data               the default plot: rate over wavelength, model, residuals
      scan               every point in the order taken
      instrument         source, monochromator, slits, grating, drive, detector, ambient
      analysis           verdict, the last look in full, a table of all looks
      events             every other record, as the journal has it
      config             bench, target, night, spectrum verbatim with hashes; question, plan, versions

`scan` and `events` together are the journal, bit for bit; everything else is there for the reader's ease and
can be computed from them.
"""

from __future__ import annotations

import json
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from typing import Any, Protocol

import h5py
import numpy as np
from numpy.typing import ArrayLike, NDArray

from analysis.readings import AnalogueLaw
from daq.export_tree import EventWriter, PointWriter, group, put, table, tree, unit_of
from daq.planned import detector_law, tally_of
from daq.records import FORMAT, Body, Kind, Record
from daq.tally import Snapshot, Tally

FloatArray = NDArray[np.float64]


class Scale(Protocol):
    """What the layout asks of a mount."""

    @property
    def medium(self) -> str: ...

    def wavelength_nm(self, steps: ArrayLike) -> FloatArray: ...


class Curve(Protocol):
    """Model rates (N,), 1/s, of the look's "single" or "pair" fit; dark included, dead time left out.

    N are the rows of the snapshot, by rising wavelength (equal ones in the snapshot's order).
    """

    def __call__(self, look: Body, head: Body, snapshot: Snapshot, *, kind: str) -> FloatArray: ...


@dataclass(slots=True)
class Summary:
    """What the sections need to know of the records, gathered while they stream by."""

    head: dict[str, Any] = field(default_factory=dict)
    tally: Tally = field(default_factory=Tally)
    sessions: list[dict[str, Any]] = field(default_factory=list)
    prepared: dict[str, Any] | None = None
    ambient: dict[str, Any] | None = None
    looks: list[dict[str, Any]] = field(default_factory=list)
    conclusion: dict[str, Any] | None = None
    records: int = 0
    points: int = 0
    latest_utc_ns: int = 0

    def take(self, record: Record) -> None:
        """The next record, in order."""
        body = record.body
        self.records += 1
        match record.kind:
            case Kind.HEAD:
                self.head = body
                self.tally = tally_of(body["plan"])
                self.latest_utc_ns = body["created_utc_ns"]
            case Kind.SESSION:
                self.sessions.append(body)
                self.tally.begin_session()
            case Kind.POINT:
                self._point(body)
            case Kind.PREPARED:
                self.prepared = body
                self.ambient = body["ambient"] or self.ambient
            case Kind.LOOK:
                self.looks.append({**body["look"], "horizon": body["horizon"], "at_ns": body["at_ns"]})
            case Kind.CONCLUSION:
                self.conclusion = body
        base_ns = self.sessions[-1]["utc_ns"] if self.sessions else 0
        elapsed_ns = body.get("end_ns", body.get("at_ns", 0))
        self.latest_utc_ns = max(self.latest_utc_ns, base_ns + elapsed_ns)

    def _point(self, body: Body) -> None:
        self.points += 1
        self.ambient = body.get("ambient") or self.ambient
        if not body["flags"]:  # a flagged reading is recorded, never summed
            self.tally.add_point(body)

    @property
    def last_look(self) -> dict[str, Any] | None:
        """The conclusion's look, or the newest before it."""
        concluded = None if self.conclusion is None else self.conclusion["look"]
        return concluded or (self.looks[-1] if self.looks else None)


class RunWriter:
    """Fills an empty HDF5 file: `add` every record in order, then `finish`."""

    def __init__(self, file: h5py.File) -> None:
        self._file = file
        self._entry = group(file, "entry", "NXentry")
        self._scan = group(self._entry, "scan", "NXcollection")
        self._points = PointWriter(self._scan)
        self._events = EventWriter(group(self._entry, "events", "NXcollection"))
        self.summary = Summary()

    def add(self, record: Record, text: str) -> None:
        """`text` is the body as the journal has it. Raises ValueError or KeyError for an odd record."""
        self.summary.take(record)
        if record.kind == Kind.POINT:
            self._points.add(record.seq, len(self.summary.sessions), record.body)
        else:
            self._events.add(record, text)

    def finish(self, *, complete: bool, scale: Scale, curve: Curve | None) -> None:
        """Write everything that is made from the whole of the records."""
        self._points.flush()
        self._events.flush()
        summary, entry = self.summary, self._entry
        _root(self._file, summary)
        _entry_fields(entry, summary)
        _data(entry, summary, scale, curve)
        _scan_wavelengths(self._scan, scale)
        _instrument(entry, summary)
        _analysis(entry, summary)
        _config(entry, summary, complete)


def iso_utc(utc_ns: int) -> str:
    """`2031-02-11T18:00:00.000000Z`, to the microsecond."""
    moment = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=utc_ns // 1000)
    return moment.strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def _root(file: h5py.File, summary: Summary) -> None:
    file.attrs["NX_class"] = "NXroot"
    file.attrs["default"] = "entry"
    file.attrs["creator"] = "gratingd"
    file.attrs["creator_version"] = str(summary.head["software"].get("gratingd", "unknown"))
    file.attrs["file_time"] = iso_utc(summary.latest_utc_ns)


def _entry_fields(entry: h5py.Group, summary: Summary) -> None:
    head = summary.head
    entry.attrs["default"] = "data"
    put(entry, "title", str(head["target"]["name"]))
    put(entry, "entry_identifier", str(head["run_id"]))
    put(entry, "collection_identifier", head["night"] and str(head["night"]))
    put(entry, "start_time", iso_utc(head["created_utc_ns"]))
    put(entry, "end_time", iso_utc(summary.latest_utc_ns))
    version = str(head["software"].get("gratingd", "unknown"))
    put(entry, "program_name", "gratingd", version=version)
    if head["operator"]:
        put(group(entry, "operator", "NXuser"), "name", head["operator"])


def _data(entry: h5py.Group, summary: Summary, scale: Scale, curve: Curve | None) -> None:
    head, snapshot = summary.head, summary.tally.snapshot()
    rows = np.array(snapshot.rows, dtype=np.int64).reshape(-1, 5)
    wavelength_nm = np.asarray(scale.wavelength_nm(rows[:, 0]), dtype=np.float64)
    order = np.argsort(wavelength_nm, kind="stable")
    steps, groups, counts, gate_ns, reference = (rows[order, column] for column in range(5))
    law = detector_law(head["plan"])
    if isinstance(law, AnalogueLaw):
        live_s, what = gate_ns * 1e-9, "current in units of the recorded charge, dark included (1/s)"
        u_counts = law.deviation(counts, live_s)
    else:
        # live time of a non-paralysable counter: T - n tau
        live_s = gate_ns * 1e-9 - counts * law.dead_time_s
        what = "rate, dead time removed, dark included (1/s)"
        # no counts still leave an uncertainty: that of one count (common practice)
        u_counts = np.sqrt(np.maximum(counts, 1))
    rate = counts / live_s
    data = group(entry, "data", "NXdata")
    data.attrs["signal"] = "rate"
    data.attrs["axes"] = ["wavelength"]
    put(data, "title", f"{head['target']['name']} ({head['run_id']})")
    put(data, "wavelength", wavelength_nm[order], units="nm", long_name=f"wavelength in {scale.medium} (nm)")
    put(data, "rate", rate, units="1/s", long_name=what)
    put(data, "rate_errors", u_counts / live_s, units="1/s")
    put(data, "counts", counts, units="counts")
    put(data, "gate_ns", gate_ns)
    put(data, "steps", steps)
    put(data, "group", groups, long_name="dither group: each has a strength of its own in the fit")
    if head["plan"]["reference"] is not None:
        put(data, "reference_counts", reference, units="counts")
    put(data, "dark_counts", snapshot.dark_counts, units="counts")
    put(data, "dark_gate_ns", snapshot.dark_gate_ns)
    look = summary.last_look
    if curve is None or look is None or not len(rows):
        return
    kinds = ["single", "pair", *(["self-reversed"] if look.get("self_reversed") else [])]
    models = {kind: np.asarray(curve(look, head, snapshot, kind=kind)) for kind in kinds}
    for kind, model in models.items():
        put(data, f"model_{kind.replace('-', '_')}", model, units="1/s", long_name=f"best {kind} (1/s)")
    chosen = look["verdict"] if look["verdict"] in models else "pair"
    put(data, "model", models[chosen], units="1/s", long_name=f"best {chosen} (1/s)")
    put(data, "residuals", rate - models[chosen], units="1/s", long_name="rate - model (1/s)")
    data.attrs["auxiliary_signals"] = ["model"]


def _scan_wavelengths(scan: h5py.Group, scale: Scale) -> None:
    """Nominal wavelengths of the points; computed, so it is no column of the journal."""
    steps = scan["steps"]
    name = f"wavelength_{scale.medium}_nm"
    made = scan.create_dataset(
        name, shape=steps.shape, maxshape=(None,), chunks=steps.chunks, dtype=np.float64,
        compression="gzip", compression_opts=4, shuffle=True, track_times=False,
    )  # fmt: skip
    made.attrs["units"] = "nm"
    for start in range(0, len(steps), steps.chunks[0]):
        part = slice(start, start + steps.chunks[0])
        made[part] = scale.wavelength_nm(steps[part])


def _instrument(entry: h5py.Group, summary: Summary) -> None:
    head = summary.head
    bench = tomllib.loads(head["bench"]["text"])
    identities = summary.prepared["identities"] if summary.prepared else {}
    instrument = group(entry, "instrument", "NXinstrument")
    put(instrument, "name", str(head["bench"]["name"]))
    source = group(instrument, "source", "NXsource")
    put(source, "name", f"lamp under test: {head['target']['name']}")
    _monochromator(instrument, bench.get("optics", {}) | head["plan"]["setup"], head)
    drive = group(instrument, "drive", "NXpositioner")
    settings = bench.get("drive", {})
    _identity(drive, identities.get("drive"))
    put(drive, "soft_limit_min", settings.get("lowest_steps"), units="steps")
    put(drive, "soft_limit_max", settings.get("highest_steps"), units="steps")
    if summary.prepared is not None:
        put(drive, "raw_value", summary.prepared["home_steps"], units="steps", long_name="position at home")
    detector = group(instrument, "detector", "NXdetector")
    _identity(detector, identities.get("detector"))
    table = head["plan"]["detector"]
    put(detector, "type", {"counter": "photon counter", "analogue": "photocurrent"}[table["kind"]])
    if table["kind"] == "counter":
        put(detector, "dead_time", float(table["dead_time_ns"]), units="ns")
    ambient = group(instrument, "ambient", "NXenvironment")
    _identity(ambient, identities.get("ambient"))
    for name, kind in (
        ("temperature_c", "temperature"),
        ("pressure_pa", "pressure"),
        ("humidity_percent", None),
    ):
        if summary.ambient and summary.ambient[name] is not None:
            sensor = group(ambient, name.partition("_")[0], "NXsensor")
            put(sensor, "measurement", kind)
            put(sensor, "value", float(summary.ambient[name]), units=unit_of(name))
    tree(group(instrument, "identities", "NXcollection"), identities)
    tree(group(instrument, "settings", "NXcollection"), _plain(bench))


def _monochromator(instrument: h5py.Group, optics: Mapping[str, Any], head: Body) -> None:
    mono = group(instrument, "monochromator", "NXmonochromator")
    put(mono, "wavelength", float(head["question"]["feature"]["wavelength_nm"]), units="nm")
    if "groove_density_per_mm" in optics:
        grating = group(mono, "grating", "NXgrating")
        put(grating, "period", 1e6 / optics["groove_density_per_mm"], units="nm")
        put(grating, "diffraction_order", optics.get("order"), units="1")
        if "included_angle_deg" in optics:
            put(grating, "deflection_angle", float(optics["included_angle_deg"]), units="degree")
    for name in ("entrance_slit", "exit_slit"):
        if f"{name}_um" in optics:
            slit = group(mono, name, "NXaperture")
            put(slit, "shape", "straight slit")
            put(slit, "size", float(optics[f"{name}_um"]), units="um")


def _identity(parent: h5py.Group, identity: Body | None) -> None:
    if identity is not None:
        put(parent, "name", f"{identity['maker']} {identity['model']}".strip())
        if identity["serial"]:
            name = "serial_number" if parent.attrs["NX_class"] == "NXdetector" else "description"
            text = identity["serial"] if name == "serial_number" else f"serial number {identity['serial']}"
            put(parent, name, text)


def _analysis(entry: h5py.Group, summary: Summary) -> None:
    analysis = group(entry, "analysis", "NXprocess")
    put(analysis, "program", "gratingd")
    put(analysis, "version", str(summary.head["software"].get("gratingd", "unknown")))
    put(analysis, "date", iso_utc(summary.latest_utc_ns))
    look = summary.last_look
    result = group(analysis, "result", "NXparameters")
    if summary.conclusion is not None:
        tree(result, {k: v for k, v in summary.conclusion["summary"].items() if k != "file"})
        if summary.conclusion["separation"] is not None:
            tree(group(analysis, "separation", "NXcollection"), summary.conclusion["separation"])
    elif look is not None:
        put(result, "verdict", look["verdict"])
    if look is not None:
        whole = group(analysis, "look", "NXcollection")
        tree(whole, {name: value for name, value in look.items() if name != "exclusion"})
        _exclusion(whole, look)
    if summary.looks:
        tree(group(analysis, "looks", "NXcollection"), table(summary.looks))


def _exclusion(parent: h5py.Group, look: Mapping[str, Any]) -> None:
    """What a single line excludes: meaningless beside a pair, and a look without a line has none."""
    if not look["exclusion"]:
        return
    made = group(parent, "exclusion", "NXcollection")
    made.attrs["confidence"] = 0.95
    made.attrs["bound"] = "one-sided upper limit at each separation by itself"
    made.attrs["look"] = look["number"]
    made.attrs["method"] = (
        "fixed-sample: a faint second line is added to this look's single fit to first order, all else free; "
        "limit = max(estimate, 0) + 1.645 u. It does not allow for repeated looks or for an early stop."
    )
    points = look["exclusion"]
    put(
        made,
        "separation_nm",
        [point["separation_nm"] for point in points],
        long_name="second line's wavelength less the main line's (nm)",
    )
    put(
        made,
        "ratio_limit",
        [point["ratio_limit"] for point in points],
        units="1",
        long_name="area of a second line over the main line's, at most; NaN: nothing below 1 is excluded",
    )


def _config(entry: h5py.Group, summary: Summary, complete: bool) -> None:
    head = summary.head
    config = group(entry, "config", "NXcollection")
    # here and not at the root, where NeXus allows no attributes but its own
    put(config, "format", FORMAT)
    put(config, "complete", complete)
    put(config, "records", summary.records)
    for name in ("bench", "target", "night_file", "spectrum"):
        source = head[name]
        if source is not None:
            attributes = {key: str(source[key]) for key in ("name", "path", "sha256") if source.get(key)}
            put(config, name, source["text"], **attributes)
    for name in ("question", "plan"):
        put(config, name, json.dumps(head[name], sort_keys=True, separators=(",", ":")))
    put(config, "seed", head["seed"])
    tree(group(config, "software", "NXcollection"), head["software"])
    tree(group(config, "sessions", "NXcollection"), table(summary.sessions))


def _plain(settings: Mapping[str, Any]) -> dict[str, Any]:
    """A settings table as JSON types: times become text; lists of tables stay in the verbatim text only."""
    made: dict[str, Any] = {}
    for name, value in settings.items():
        if isinstance(value, Mapping):
            made[name] = _plain(value)
        elif isinstance(value, (str, bool, int, float)):
            made[name] = value
        elif isinstance(value, datetime):
            made[name] = value.isoformat()
    return made
