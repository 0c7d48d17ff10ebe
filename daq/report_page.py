"""The pages of a report: one for each run, one for each night. HTML that needs nothing but itself."""

from __future__ import annotations

import base64
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from typing import Any

from jinja2 import Environment, FileSystemLoader, StrictUndefined
from matplotlib.figure import Figure

from analysis.digits import with_uncertainty
from daq import report_plots, report_tables
from daq.report_data import RunView
from daq.report_tables import Table
from daq.report_words import (
    CAUTIONS,
    answer_in_words,
    flag_in_words,
    point_flag_in_words,
    stop_in_words,
    verdict_in_words,
)
from daq.wording import duration

PIXELS_PER_IN = 96


@dataclass(frozen=True, slots=True)
class Plot:
    """A figure as a page shows it: a data URI, its size in CSS pixels, what it shows in words."""

    source: str
    width: int
    height: int
    alt: str
    caption: str


@dataclass(frozen=True, slots=True)
class Part:
    """A section of a run's page."""

    title: str
    sentences: tuple[str, ...] = ()
    figures: tuple[Plot, ...] = ()
    tables: tuple[Table, ...] = ()
    wide_tables: tuple[Table, ...] = ()

    @property
    def is_empty(self) -> bool:
        return not (self.sentences or self.figures or self.tables or self.wide_tables)


@dataclass(frozen=True, slots=True)
class NightView:
    """The runs of one night in the order they began, and the page each of them has."""

    title: str
    page: str
    runs: tuple[RunView, ...]
    page_of: Mapping[str, str] = field(default_factory=dict)


def run_page(view: RunView, night: NightView) -> str:
    """The page of a run."""
    with report_plots.styled():
        return _run_page(view, night)


def night_page(night: NightView) -> str:
    """The page of a night."""
    with report_plots.styled():
        return _night_page(night)


def _run_page(view: RunView, night: NightView) -> str:
    summary, look = view.summary, view.look
    program = f"gratingd {view.head['software'].get('gratingd', '')}".strip()
    is_pair = summary["verdict"] == "pair" and summary["separation_pm"] is not None
    number = with_uncertainty(summary["separation_pm"], summary["separation_u_pm"])
    return _render(
        "run.html",
        title=str(summary["target"]),
        night_title=night.title,
        night_page=night.page,
        bench=str(view.head["bench"]["name"]),
        began=f"begun {report_tables.day_of(view.start_utc_ns)}",
        verdict=verdict_in_words(summary["verdict"]),
        verdict_code=summary["verdict"],
        number=f"{number} pm" if is_pair else "",
        medium=view.medium,
        sentence=answer_in_words(summary, view.head["question"]),
        notices=_notices(view),
        facts=_facts(view),
        evidence=[_sentence(text) for text in summary["evidence"]],
        flags=[(flag, flag_in_words(flag)) for flag in summary["flags"]],
        spectrum=_spectrum(view),
        parts=[part for part in _parts(view, look) if not part.is_empty],
        notes=[
            {"when": f"{note.date[:16].replace('T', ' ')} UTC", "author": note.author, "text": note.text}
            for note in view.notes
        ],
        cautions=CAUTIONS,
        command=f"gratingd analyse {view.path.name}",
        made=[
            made for made in (report_tables.by_hand(view), report_tables.devices(view)) if made is not None
        ],
        provenance=report_tables.provenance(view),
        run_id=view.run_id,
        program=program,
    )


def _night_page(night: NightView) -> str:
    views = night.runs
    decided = sum(view.summary["verdict"] != "undecided" for view in views)
    notices = [f"{view.summary['target']}: {notice}" for view in views for notice in _notices(view)]
    benches = dict.fromkeys(str(view.head["bench"]["name"]) for view in views)
    programs = dict.fromkeys(
        f"gratingd {view.head['software'].get('gratingd', '')}".strip() for view in views
    )
    runs = f"{len(views)} runs" if len(views) != 1 else "One run"
    return _render(
        "night.html",
        title=night.title,
        bench=", ".join(benches),
        began=f"begun {report_tables.day_of(views[0].night_utc_ns)}",
        headline=f"{runs}, {decided} decided",
        notices=notices,
        runs=report_tables.night(views, night.page_of),
        course=_plot(
            report_plots.night(views),
            alt=f"A bar for each of {len(views)} runs from its beginning to its end: "
            + "; ".join(f"{v.summary['target']}, {v.summary['verdict']}" for v in views),
            caption="When each run was under way, by verdict.",
        ),
        answers=[(str(view.summary["target"]), night.page_of[view.run_id], _answer(view)) for view in views],
        cautions=CAUTIONS,
        program=", ".join(programs),
    )


def _answer(view: RunView) -> list[str]:
    """One sentence; where nothing was decided, also what it lies between."""
    told = [answer_in_words(view.summary, view.head["question"])]
    if view.summary["verdict"] == "undecided":
        told += [_sentence(text) for text in view.summary["evidence"]]
    return told


def _notices(view: RunView) -> list[str]:
    """What a reader must know before the numbers."""
    found = []
    if not view.is_complete or not view.is_concluded:
        found.append("This run is not over, or broke off: everything here is as far as it had come.")
    if view.summary.get("cause"):
        found.append(f"Stopped by a fault: {view.summary['cause']}")
    safe = view.summary.get("safe")
    if safe is not None and (safe["shutter"], safe["drive"]) != ("closed", "stopped"):
        problems = "; ".join(safe["problems"])
        found.append(
            f"Go and look at the bench: the shutter was left {safe['shutter']}, the drive {safe['drive']}"
            + (f" ({problems})." if problems else ".")
        )
    if view.curves_problem is not None:
        found.append(f"The fit cannot be drawn by this version of gratingd ({view.curves_problem}).")
    return found


def _facts(view: RunView) -> list[tuple[str, str]]:
    summary = view.summary
    facts = [("ended because", stop_in_words(summary["stop_reason"]))]
    if summary["ratio"] is not None:
        facts.append(("ratio, weaker to stronger", with_uncertainty(summary["ratio"], summary["ratio_u"])))
    specimen = view.head.get("specimen_serial")
    if specimen is not None:
        facts.append(("specimen", str(specimen)))
    facts += [
        ("bench time", duration(summary["bench_time_s"])),
        ("of it with light", duration(summary["light_s"])),
        ("points", str(summary["points"])),
    ]
    if view.faults:
        facts.append(("faults of the bench", f"{view.faults}, see what happened"))
    return facts


def _spectrum(view: RunView) -> list[Plot]:
    points = view.points
    if points is None:
        return []
    low, high = points.wavelength_nm[0], points.wavelength_nm[-1]
    alt = (
        f"{points.wavelength_nm.size} measured rates between {low:.3f} and {high:.3f} nm in "
        f"{view.medium}, up to {points.rate_per_s.max():.0f} per second"
    )
    caption = (
        "Photocurrent in units of the recorded charge per second; bars are one standard uncertainty."
        if view.is_analogue
        else "Counts per second, dead time removed; bars are one standard uncertainty."
    )
    if view.curves is not None:
        alt += f", with the fit of {view.curves.label}, its parts, and the residuals below"
        caption += (
            " Each comb of positions is drawn at the strength of the first. Below: what the fit leaves, in "
            "standard deviations expected of the counts; the band is ± 2."
        )
    return [_plot(report_plots.spectrum(view, points), alt=f"{alt}.", caption=caption)]


def _parts(view: RunView, look: Mapping[str, Any] | None) -> list[Part]:
    numbers = [report_tables.separation(view), report_tables.budget(view), report_tables.seen(view)]
    told, limits, happened = (
        report_tables.looks(view),
        report_tables.limits(view),
        report_tables.events(view),
    )
    left_out = tuple(
        f"{count} {'reading was' if count == 1 else 'readings were'} recorded and left out: "
        f"{point_flag_in_words(flag)}."
        for flag, count in view.flagged.items()
    )
    return [
        Part("Numbers", tables=(*(made for made in numbers if made is not None), report_tables.asked(view))),
        Part(
            "How the answer came, and where the light went",
            figures=(*_progress(view), *_light(view)),
            wide_tables=() if told is None else (told,),
        ),
        Part(
            "What a second line is excluded to",
            figures=_exclusion(view, look),
            tables=() if limits is None else (limits,),
        ),
        Part(
            "What changed and what happened",
            sentences=left_out,
            figures=_drift(view),
            tables=() if happened is None else (happened,),
        ),
    ]


def _progress(view: RunView) -> tuple[Plot, ...]:
    if not view.looks:
        return ()
    last = view.looks[-1].body
    above = (
        "the strongest second line still allowed at the separation asked for"
        if view.summary["verdict"] == "single"
        else "the separation of the best pair with one standard uncertainty"
    )
    caption = (
        f"Above: {above}, look by look. Below: evidence for each claim as a share of its bound, natural "
        "logarithms; at 1 the claim is made, at the risk stated in the question. Linear up to 1, logarithmic "
        "beyond."
    )
    alt = (
        f"{len(view.looks)} looks: {above} against bench time; in the end the evidence for two lines is "
        f"{last['max_log_e_pair']:.1f} of {last['bound_pair']:.1f}, for one line "
        f"{last['max_log_e_single']:.1f} of {last['bound_single']:.1f}."
    )
    return (_plot(report_plots.progress(view), alt=alt, caption=caption),)


def _exclusion(view: RunView, look: Mapping[str, Any] | None) -> tuple[Plot, ...]:
    if look is None or not report_tables.excludes(look):
        return ()
    curve = look["exclusion"]
    best = min(row["ratio_limit"] for row in curve if row["ratio_limit"] is not None)
    return (
        _plot(
            report_plots.exclusion(view, curve),
            alt=f"Upper limit of a second line's ratio over its distance from the line; best {best:.2g}.",
            caption="A second line in the shaded region is excluded: one-sided 95 % limit at each distance "
            "by itself, from the last look alone; repeated looks and an early stop are not allowed for. "
            "Where no curve is drawn, nothing below equal strength is excluded.",
        ),
    )


def _light(view: RunView) -> tuple[Plot, ...]:
    if not view.dwell_nm.size:
        return ()
    return (
        _plot(
            report_plots.light(view),
            alt=f"Time with light at {view.dwell_nm.size} positions, {view.dwell_s.sum():.4g} s in all.",
            caption="Time counted with the shutter open, all sweeps together, by wavelength.",
        ),
    )


def _drift(view: RunView) -> tuple[Plot, ...]:
    made = report_plots.drift(view)
    if made is None:
        return ()
    return (
        _plot(
            made,
            alt="Strength of each sweep, dark rate, air temperature and pressure against bench time, as far "
            "as they were recorded.",
            caption="Lamp: light of each sweep against what the fit expects at its positions. Dark: counts "
            "behind the closed shutter. Bars are one standard uncertainty; long series are averaged.",
        ),
    )


def _plot(figure: Figure, *, alt: str, caption: str) -> Plot:
    width, height = figure.get_size_inches()
    source = base64.b64encode(report_plots.svg_of(figure)).decode("ascii")
    return Plot(
        source=f"data:image/svg+xml;base64,{source}",
        width=round(width * PIXELS_PER_IN),
        height=round(height * PIXELS_PER_IN),
        alt=alt,
        caption=caption,
    )


def _sentence(text: str) -> str:
    """Evidence is written to follow a name and a colon; here each begins a line."""
    return text[:1].upper() + text[1:] + ("" if text.endswith((".", "?", "!")) else ".")


def _render(template: str, **page: Any) -> str:
    return _environment().get_template(template).render(page=page)


@lru_cache(maxsize=1)
def _environment() -> Environment:
    return Environment(
        loader=FileSystemLoader(Path(__file__).resolve().parent / "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
