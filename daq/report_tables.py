"""The tables of a report: rows of words and numbers, digits by the uncertainty."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from analysis.digits import NOTHING, with_uncertainty
from daq.export_layout import iso_utc
from daq.export_tree import unit_of
from daq.report_curves import FIT_OF
from daq.report_data import RunView
from daq.report_words import CAUSES, stop_in_words, verdict_in_words
from daq.wording import duration

MOST_ROWS = 200
"""Rows of a table that grows with the run; the file has them all."""


NO_BREAK = "\N{NO-BREAK SPACE}"

MULTIPLES = (1.0, 1.5, 2.0, 3.0, 4.0)
"""Of the separation asked for: where a table gives the exclusion curve."""


@dataclass(frozen=True, slots=True)
class Link:
    """A cell that leads to another page of the report."""

    text: str
    to: str


Cell = str | Link


@dataclass(frozen=True, slots=True)
class Table:
    """`numbers` are the columns whose cells are numbers, aligned by their right edge. `left_out`: rows."""

    caption: str
    columns: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]
    numbers: frozenset[int] = frozenset()
    left_out: int = 0

    @property
    def is_list(self) -> bool:
        """Names and values: on a narrow page one below the other."""
        return len(self.columns) == 2 and not self.numbers


def clock_of(utc: str) -> str:
    """`18:00:46` of `2031-02-11T18:00:46.785961Z`."""
    return utc[11:19]


def day_of(utc_ns: int) -> str:
    """`2031-02-11 18:00 UTC`."""
    return f"{iso_utc(utc_ns)[:16].replace('T', ' ')} UTC"


def separation(view: RunView) -> Table | None:
    """A pair's separation in every unit."""
    units = view.summary["separation"]
    if units is None:
        return None
    rows = [
        ("in air", "air_pm", "pm"),
        ("in vacuum", "vacuum_pm", "pm"),
        ("as a wavenumber", "per_cm", "cm⁻¹"),
        ("as an energy", "mev", "meV"),
        ("as a frequency", "ghz", "GHz"),
    ]
    return Table(
        "Separation of the two lines; ± is one standard uncertainty",
        ("separation", "value", "unit"),
        tuple(
            (name, with_uncertainty(units[f"separation_{key}"], units[f"separation_u_{key}"]), unit)
            for name, key, unit in rows
        ),
        numbers=frozenset({1}),
    )


def budget(view: RunView) -> Table | None:
    """Where the uncertainty of the separation comes from."""
    look = view.look
    if look is None or look["budget"] is None or view.summary["verdict"] != "pair":
        return None
    parts = {key: value for key, value in look["budget"].items() if value is not None}
    total = math.sqrt(sum(value**2 for value in parts.values()))
    rows = [
        (
            _cause(key),
            _two_digits(1e3 * value),
            f"{100.0 * (value / total) ** 2:.0f} %" if total > 0.0 else NOTHING,
        )
        for key, value in parts.items()
    ]
    rows.append(("combined", _two_digits(1e3 * total), ""))
    goal_nm = view.head["question"]["separation_uncertainty_nm"]
    if goal_nm is not None:
        rows.append(("goal", _two_digits(1e3 * goal_nm), ""))
    return Table(
        "Standard uncertainty of the separation by cause",
        ("cause", "uncertainty, pm", "share of the variance"),
        tuple(rows),
        numbers=frozenset({1, 2}),
    )


def _cause(key: str) -> str:
    return CAUSES.get(key, key.removesuffix("_nm").replace("_", " "))


def seen(view: RunView) -> Table | None:
    """Line, background and dark as the fit has them, beside what was expected."""
    look, feature = view.look, view.head["question"]["feature"]
    if look is None:
        return None
    fit = look[FIT_OF.get(look["verdict"], "pair")]
    unit = ("events per s" if view.is_analogue else "counts per s").replace(" ", NO_BREAK)
    chi2 = f"{fit['pearson_chi2'] / fit['dof']:.2f}" if fit["dof"] > 0 else NOTHING
    centre = with_uncertainty(look["centre_nm"], look["centre_u_nm"])
    width, usual = _pm(look["fwhm_nm"], look["fwhm_u_nm"]), _pm(feature["fwhm_nm"], None)
    rows: list[tuple[str, str, str]] = [
        ("line", f"{centre} nm", f"{feature['wavelength_nm']:.4f} nm"),
        ("width of a line (FWHM)", f"{width} pm", f"{usual} pm"),
    ]
    power = look.get("resolving_power")
    if power is not None:
        least = view.head["question"].get("resolving_power_at_least")
        asked = "" if least is None else f"at least {least:g}"
        rows.append(("resolving power", with_uncertainty(power, look.get("resolving_power_u")), asked))
    background = with_uncertainty(look["background_per_s"], look["background_u_per_s"])
    rows.append(("background under the line", f"{background} {unit}", ""))
    dark = with_uncertainty(look["dark_per_s"], look["dark_u_per_s"])
    rows.append(("dark", dark if look["dark_per_s"] is None else f"{dark} {unit}", ""))
    rows.append(("χ² per degree of freedom", f"{chi2} ({fit['dof']})", "1"))
    caption = "What the fit found; ± is counting alone, a place rests on the drive's zero as well"
    return Table(caption, ("quantity", "found", "expected"), tuple(rows))


def asked(view: RunView) -> Table:
    """The question the run was to answer, and its limits."""
    question, plan = view.head["question"], view.head["plan"]
    smallest = f"{1e3 * question['smallest_separation_nm']:.3g} pm"
    rows = [
        ("risk of calling a single line a pair", f"{question['false_alarm']:g}"),
        ("a second line to be excluded", f"ratio {question['smallest_ratio']:g} at {smallest} or more"),
        ("risk of missing such a line", f"{question['miss_probability']:g}"),
    ]
    goal_nm = question["separation_uncertainty_nm"]
    if goal_nm is not None:
        rows.append(("standard uncertainty of a separation", f"at most {1e3 * goal_nm:.3g} pm"))
    if question.get("ratio_uncertainty") is not None:
        rows.append(("standard uncertainty of a ratio", f"at most {question['ratio_uncertainty']:g}"))
    if question.get("resolving_power_at_least") is not None:
        rows.append(("resolving power", f"at least {question['resolving_power_at_least']:g}"))
    for name, key in (("limit of bench time", "time_limit_ns"), ("limit of light", "light_limit_ns")):
        if plan.get(key) is not None:
            rows.append((name, duration(plan[key] * 1e-9)))
    if plan.get("deadline_utc_ns") is not None:
        rows.append(("to be over by", day_of(plan["deadline_utc_ns"])))
    return Table("What was asked", ("question", "value"), tuple(rows))


def looks(view: RunView) -> Table | None:
    """Every evaluation of the evidence, oldest first."""
    if not view.looks:
        return None
    claims = [("for two lines", "pair"), ("for one line", "single")]
    if view.looks[-1].body.get("bound_reversed") is not None:
        claims.append(("self-reversed", "reversed"))
    rows = [
        (
            str(look.body["number"]),
            duration(look.bench_s),
            str(look.points),
            verdict_in_words(look.body["verdict"]),
            _pm(look.body["separation_nm"], look.body["separation_u_nm"]),
            with_uncertainty(look.body["ratio"], look.body["ratio_u"]),
            *(
                _against(look.body.get(f"max_log_e_{key}"), look.body.get(f"bound_{key}"))
                for _, key in claims
            ),
        )
        for look in view.looks
    ]
    columns = (
        "look",
        "bench time",
        "points",
        "verdict",
        "separation, pm",
        "ratio",
        *(name for name, _ in claims),
    )
    return Table(
        "Looks at the evidence; a claim is made when its evidence reaches its bound. Separation and ratio "
        "are those of the best pair, whatever the verdict.",
        columns,
        tuple(rows[-MOST_ROWS:]),
        numbers=frozenset(range(len(columns))) - {3},
        left_out=max(0, len(rows) - MOST_ROWS),
    )


def excludes(look: Mapping[str, Any]) -> bool:
    """Whether a look's exclusion curve says anything; without a line, or where one line does not hold, there
    is none."""
    return any(row["ratio_limit"] is not None for row in look["exclusion"])


def limits(view: RunView) -> Table | None:
    """The exclusion curve in a few numbers: at the separation asked for and at multiples of it."""
    look = view.look
    if look is None or not excludes(look):
        return None
    smallest_nm = view.head["question"]["smallest_separation_nm"]
    rows = []
    for multiple in MULTIPLES:
        below, above = (limit_at(look["exclusion"], side * multiple * smallest_nm) for side in (-1.0, 1.0))
        if below is not None or above is not None:
            rows.append((f"{1e3 * multiple * smallest_nm:.4g}", _limit(below), _limit(above)))
    return Table(
        "Strongest second line still allowed (95 %), as a ratio to the line; the first distance is the one "
        "asked for",
        ("distance, pm", "below the line", "above the line"),
        tuple(rows),
        numbers=frozenset({0, 1, 2}),
    )


def limit_at(exclusion: Sequence[Mapping[str, Any]], separation_nm: float) -> float | None:
    """The exclusion curve at a signed separation, between its points on a logarithmic scale.

    Infinite where nothing below equal strength is excluded, None outside the curve.
    """
    curve = sorted((row["separation_nm"], row["ratio_limit"]) for row in exclusion)
    for (left, low), (right, high) in itertools.pairwise(curve):
        slack = 1e-9 * abs(separation_nm)
        if left * right > 0.0 and left - slack <= separation_nm <= right + slack:
            if low is None or high is None:
                return math.inf
            share = (separation_nm - left) / (right - left)
            return float(low ** (1.0 - share) * high**share)
    return None


def _limit(value: float | None) -> str:
    if value is None:
        return "outside the window"
    return "any" if math.isinf(value) else _two_digits(value)


def events(view: RunView) -> Table | None:
    """What happened, in order."""
    if not view.events:
        return None
    rows = [(clock_of(event.utc), duration(event.bench_s), event.text) for event in view.events]
    return Table(
        "Events; the clock is UTC",
        ("clock", "bench time", "what happened"),
        tuple(rows[:MOST_ROWS]),
        numbers=frozenset({0, 1}),
        left_out=max(0, len(rows) - MOST_ROWS),
    )


def devices(view: RunView) -> Table | None:
    """What the devices said they are."""
    if not view.identities:
        return None
    rows = tuple(
        (role, *(str(identity.get(key) or NOTHING) for key in ("maker", "model", "serial", "firmware")))
        for role, identity in sorted(view.identities.items())
    )
    return Table(
        "Devices, as they identify themselves", ("role", "maker", "model", "serial", "firmware"), rows
    )


def by_hand(view: RunView) -> Table | None:
    """What a person has set and confirmed, and what the run itself set or asked for."""
    rows: list[tuple[str, str, str]] = []
    confirmed = view.head.get("confirmed") or {}
    how = confirmed.get("how", "")
    by = f"confirmed by {confirmed['who']}" if confirmed.get("who") else how
    for item in confirmed.get("items", ()):
        rows.append((*_named(item["key"], item["value"]), f"{by} ({how})" if by != how else how))
    sources: list[tuple[str, Any]] = [
        ("target file", view.target_settings.get("setup")),
        ("bench file", view.bench_settings.get("by_hand")),
        ("bench file", _optics(view.bench_settings)),
    ]
    told = {item["key"] for item in confirmed.get("items", ())}
    for source, settings in sources:
        for key, value in (settings if isinstance(settings, Mapping) else {}).items():
            if key not in told:
                rows.append((*_named(key, value), source))
                told.add(key)
    return Table("What was set", ("setting", "value", "as stated in"), tuple(rows)) if rows else None


def _optics(bench: Mapping[str, Any]) -> dict[str, Any]:
    optics = bench.get("optics")
    keys = ("entrance_slit_um", "exit_slit_um", "order")
    return {key: optics[key] for key in keys if key in optics} if isinstance(optics, Mapping) else {}


def _named(key: str, value: Any) -> tuple[str, str]:
    """A key with its unit taken apart: `lamp_current_a = 0.4` is "lamp current", "0.4 A"."""
    units = {"_v": "V", "_a": "A", "_um": "µm"}
    ending = next((end for end in units if key.endswith(end)), None)
    unit = units[ending] if ending else unit_of(key)
    shown = f"{value:g}" if isinstance(value, float) else str(value)
    if unit is None:
        return key.replace("_", " "), shown
    name = key.rpartition("_")[0] or key
    return name.replace("_", " "), f"{shown} {unit}"


def provenance(view: RunView) -> Table:
    """What it was made with: files with their hashes, versions, seed, operator."""
    head = view.head
    rows = [("run", view.run_id), ("file", view.path.name), ("night", head["night"] or "none")]
    rows.append(("operator", head["operator"] or "not stated"))
    rows.append(("began, ended", f"{iso_utc(view.start_utc_ns)}, {iso_utc(view.end_utc_ns)}"))
    for name, key in (
        ("bench", "bench"), ("target", "target"), ("night file", "night_file"), ("spectrum", "spectrum"),
    ):  # fmt: skip
        source = head.get(key)
        if source is not None:
            where = source.get("path") or source.get("name") or ""
            rows.append(
                (f"{name} file" if key != "night_file" else name, f"{where}, SHA-256 {source['sha256']}")
            )
    rows.append(("seed of simulated devices", str(head["seed"])))
    software = sorted(head["software"].items(), key=lambda item: (item[0] != "gratingd", item[0]))
    rows.append(("software", "; ".join(f"{name} {version}" for name, version in software)))
    return Table("What it was made with", ("what", "value"), tuple(rows))


def night(views: Sequence[RunView], page_of: Mapping[str, str]) -> Table:
    """The runs of a night."""
    rows = tuple(
        (
            Link(str(view.summary["target"]), page_of[view.run_id]),
            verdict_in_words(view.summary["verdict"]),
            with_uncertainty(view.summary["separation_pm"], view.summary["separation_u_pm"]),
            str(view.summary["medium"]),
            with_uncertainty(view.summary["ratio"], view.summary["ratio_u"]),
            stop_in_words(view.summary["stop_reason"]),
            duration(view.summary["bench_time_s"]),
            duration(view.summary["light_s"]),
            str(view.summary["points"]),
        )
        for view in views
    )
    return Table(
        "Runs in the order they began; ± is one standard uncertainty. Each target leads to its own page.",
        (
            "target",
            "verdict",
            "separation, pm",
            "in",
            "ratio",
            "ended because",
            "bench time",
            "light",
            "points",
        ),
        rows,
        numbers=frozenset({2, 4, 6, 7, 8}),
    )


def _two_digits(value: float) -> str:
    """`0.030`, `12`: as an uncertainty is written, a nought at the end kept."""
    return f"{value:#.2g}".rstrip(".") if value else "0"


def _pm(value_nm: float | None, u_nm: float | None) -> str:
    return with_uncertainty(
        None if value_nm is None else 1e3 * value_nm, None if u_nm is None else 1e3 * u_nm
    )


def _against(evidence: float | None, bound: float | None) -> str:
    if evidence is None or bound is None:
        return NOTHING
    return f"{max(0.0, evidence):.1f} of {bound:.1f}"
