"""The plots of a report: matplotlib figures without a display, as SVG that is the same for the same run.

Colours are those of Okabe and Ito (2008, "Color Universal Design"), told apart by colour-blind readers; every
curve has a line style or a marker of its own besides.
"""

from __future__ import annotations

import io
import math
from collections.abc import Mapping, Sequence
from typing import Any

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, MaxNLocator

from daq.report_data import FloatArray, Points, RunView, Series, Stretch
from daq.report_tables import limit_at
from daq.report_words import verdict_in_words

INK, GREY, FAINT = "#1b2a33", "#6b7780", "#d5dadd"
BLUE, VERMILION, GREEN, ORANGE, PURPLE, SKY = "#0072b2", "#d55e00", "#009e73", "#e69f00", "#cc79a7", "#56b4e9"

PARTS = (
    (VERMILION, "--"),
    (GREEN, "-."),
    (PURPLE, ":"),
    (ORANGE, (0, (5, 1, 1, 1, 1, 1))),
    (SKY, (0, (1, 1))),
)
"""Colour and line style of the fit's parts, in turn."""

WIDTH_IN = 5.2
BARS = 60
"""At most so many bars show where the light went."""
MANY = 1200
"""Beyond this many points they are drawn as an image: thousands of marks make a page heavy."""

STYLE: Mapping[str, Any] = {
    "svg.hashsalt": "gratingd",
    "svg.fonttype": "path",
    "font.family": "DejaVu Sans",
    "font.size": 10,
    "axes.edgecolor": GREY,
    "axes.labelcolor": INK,
    "axes.labelsize": 10,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.formatter.useoffset": False,
    "axes.grid": True,
    "axes.axisbelow": True,
    "grid.color": FAINT,
    "grid.linewidth": 0.6,
    "xtick.color": GREY,
    "ytick.color": GREY,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "text.color": INK,
    "legend.frameon": False,
    "legend.fontsize": 9,
    "savefig.dpi": 150,
}


def svg_of(figure: Figure) -> bytes:
    """The figure as an SVG document without a date."""
    stream = io.BytesIO()
    figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None})
    return stream.getvalue()


def styled() -> Any:
    """A context in which figures are made and written, whatever a user's own matplotlib settings are."""
    settings: dict[Any, Any] = {**mpl.rcParamsDefault, **STYLE, "backend": "svg"}
    return mpl.rc_context(settings)


# ---- the spectrum ---------------------------------------------------------------------------------------


def spectrum(view: RunView, points: Points) -> Figure:
    """Points with their uncertainties, the fit with its parts and its rival; below, what the fit leaves."""
    figure = Figure(figsize=(WIDTH_IN, 5.2), layout="constrained")
    stretches = view.stretches
    shares = _shares(stretches)
    fitted = view.curves is not None
    axes = figure.subplots(
        2 if fitted else 1, len(stretches), sharex="col", sharey="row", squeeze=False,
        gridspec_kw={"height_ratios": [3.2, 1] if fitted else [1], "width_ratios": shares},
    )  # fmt: skip
    for column, stretch in enumerate(stretches):
        _spectrum(axes[0, column], view, points, stretch)
        if view.curves is not None:
            _residuals(axes[1, column], points.wavelength_nm, view.curves.residual_sigma, stretch)
        axes[-1, column].set_xlabel(_offset_label(stretch, view.medium, is_only=len(stretches) == 1))
        axes[-1, column].xaxis.set_major_locator(MaxNLocator(max(3, round(8 * shares[column] / sum(shares)))))
    axes[0, 0].set_ylabel(f"rate, {_counts(view)} per s")
    if fitted:
        axes[1, 0].set_ylabel("residual, σ")
    handles, labels = axes[0, 0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside upper left", ncols=3, columnspacing=1.0, handlelength=2.4)
    return figure


def _shares(stretches: Sequence[Stretch]) -> list[float]:
    """Widths of the panels: as the stretches are, none below a third of the widest."""
    widths = [stretch.high_nm - stretch.low_nm for stretch in stretches]
    return [max(width, max(widths) / 3.0) for width in widths]


def _spectrum(axes: Axes, view: RunView, points: Points, stretch: Stretch) -> None:
    inside = _inside(points.wavelength_nm, stretch)
    x = _offset_pm(points.wavelength_nm[inside], stretch)
    rate, u = points.rate_per_s[inside], points.rate_u_per_s[inside]
    curves = view.curves
    label = "measured"
    if curves is not None:
        strength, dark = curves.strength[inside], curves.dark_per_s
        rate, u = (rate - dark) / strength + dark, u / strength
        fine = _inside(curves.fine_nm, stretch)
        fine_pm = _offset_pm(curves.fine_nm[fine], stretch)
        axes.plot(fine_pm, curves.rival[fine], color=GREY, lw=0.9, label=f"{curves.rival_label} (rival)")
        axes.plot(fine_pm, curves.base[fine], color=GREY, lw=1.1, ls=(0, (1, 2)), label="background, dark")
        for number, part in enumerate(curves.components):
            colour, style = PARTS[number % len(PARTS)]
            axes.plot(fine_pm, part.rate_per_s[fine], color=colour, lw=1.3, ls=style, label=part.label)
        axes.plot(fine_pm, curves.whole[fine], color=BLUE, lw=1.8, label=f"fit: {curves.label}", zorder=3)
    axes.errorbar(
        x, rate, yerr=u, fmt="o", ms=2.8, lw=0, elinewidth=0.8, color=INK, ecolor="#7d8991",
        label=label, zorder=2.5, rasterized=x.size > MANY,
    )  # fmt: skip


def _residuals(axes: Axes, wavelength_nm: FloatArray, sigma: FloatArray, stretch: Stretch) -> None:
    inside = _inside(wavelength_nm, stretch)
    axes.axhspan(-2.0, 2.0, color="#e8f1f7", lw=0)
    axes.axhline(0.0, color=BLUE, lw=1.0)
    x = _offset_pm(wavelength_nm[inside], stretch)
    axes.plot(x, sigma[inside], "o", ms=2.5, color=INK, rasterized=x.size > MANY)
    axes.yaxis.set_major_locator(MaxNLocator(4, integer=True))


# ---- how the answer came --------------------------------------------------------------------------------


def progress(view: RunView) -> Figure:
    """What was asked for, look by look, against bench time; below, the evidence against its bounds."""
    figure = Figure(figsize=(WIDTH_IN, 5.2), layout="constrained")
    above, below = figure.subplots(2, 1, sharex=True, gridspec_kw={"height_ratios": [1.15, 1]})
    unit, per_unit = _time_unit(max(look.bench_s for look in view.looks))
    at = np.array([look.bench_s for look in view.looks]) / per_unit
    if view.summary["verdict"] == "single":
        _limits(above, view, at)
    else:
        _estimates(above, view, at)
    _evidence(below, view, at)
    for axes in (above, below):
        if view.is_concluded:
            axes.axvline(at[-1], color=GREY, lw=1.0, ls="--")
        axes.margins(x=0.06)
    if view.is_concluded:
        above.annotate(
            "stop", (at[-1], 1.0), xycoords=("data", "axes fraction"), xytext=(0, 2),
            textcoords="offset points", ha="center", va="bottom", color=GREY, fontsize=8.5,
        )  # fmt: skip
    below.set_xlim(left=0.0)
    below.set_xlabel(f"bench time, {unit}")
    return figure


def estimate_series(view: RunView) -> tuple[FloatArray, FloatArray]:
    """Separation and its standard uncertainty, pm, (L,) each, look by look; NaN where a look has none."""
    rows = [(look.body["separation_nm"], look.body["separation_u_nm"]) for look in view.looks]
    table = np.array([[math.nan if v is None else 1e3 * v for v in row] for row in rows]).reshape(-1, 2)
    return table[:, 0], table[:, 1]


def limit_series(view: RunView) -> FloatArray:
    """(L,) strongest second line that each look still allows at the separation asked for; NaN: any."""
    asked_nm = view.head["question"]["smallest_separation_nm"]
    made = []
    for look in view.looks:
        sides = [limit_at(look.body["exclusion"], side * asked_nm) for side in (-1.0, 1.0)]
        worst = max((side for side in sides if side is not None), default=math.inf)
        made.append(worst if math.isfinite(worst) else math.nan)
    return np.array(made)


def _estimates(axes: Axes, view: RunView, at: FloatArray) -> None:
    value, u = estimate_series(view)
    known = np.isfinite(value)
    settled = np.array([look.body["verdict"] == "pair" for look in view.looks]) & known
    open_marks = known & ~settled
    for mine, fill, label in (
        (settled, BLUE, "separation, decided: pair"),
        (open_marks, "white", "best pair, not claimed"),
    ):
        if mine.any():
            axes.errorbar(
                at[mine], value[mine], yerr=np.nan_to_num(u[mine]), fmt="o", ms=5, lw=0, elinewidth=1.2,
                capsize=3, color=BLUE, mfc=fill, label=label,
            )  # fmt: skip
    goal_nm = view.head["question"]["separation_uncertainty_nm"]
    if known.any():
        last = value[known][-1]
        if goal_nm is not None and view.summary["verdict"] == "pair":
            axes.axhspan(
                last - 1e3 * goal_nm, last + 1e3 * goal_nm, color=SKY, alpha=0.25, lw=0,
                label=f"goal: ± {1e3 * goal_nm:.3g} pm",
            )  # fmt: skip
        _keep_in_sight(axes, value[known], u[known])
        axes.legend(loc="best")
    else:
        _say(axes, "no look found a second line")
    axes.set_ylabel("separation, pm")


def _keep_in_sight(axes: Axes, value: FloatArray, u: FloatArray) -> None:
    """Early looks know far less: they may reach out of the picture, so that the last ones can be read."""
    if not np.isfinite(u[-1]) or u[-1] <= 0.0:
        return
    sharp = np.isfinite(u) & (u <= 10.0 * u[-1])
    ends = np.concatenate([value[sharp] - u[sharp], value[sharp] + u[sharp]])
    low, high = axes.get_ylim()
    room = 0.15 * (ends.max() - ends.min())
    if high - low > 12.0 * u[-1]:
        axes.set_ylim(max(low, ends.min() - room), min(high, ends.max() + room))


def _limits(axes: Axes, view: RunView, at: FloatArray) -> None:
    question = view.head["question"]
    limit = limit_series(view)
    if np.isfinite(limit).any():
        axes.plot(at, limit, "o-", ms=5, color=BLUE, label="strongest second line still allowed (95 %)")
    else:
        _say(axes, "nothing below equal strength is excluded at that separation")
    asked = f"asked for: {question['smallest_ratio']:g} at {1e3 * question['smallest_separation_nm']:.3g} pm"
    axes.axhline(question["smallest_ratio"], color=VERMILION, lw=1.3, ls="--", label=asked)
    axes.set_ylim(bottom=0.0)
    axes.legend(loc="best")
    axes.set_ylabel("ratio to the line")


def _evidence(axes: Axes, view: RunView, at: FloatArray) -> None:
    claims = [
        ("two lines", "pair", BLUE, "o", "-"), ("one line", "single", VERMILION, "s", "--"),
        ("self-reversed", "reversed", GREEN, "^", "-."),
    ]  # fmt: skip
    highest = 1.0
    for label, key, colour, marker, style in claims:
        if not all(look.body.get(f"bound_{key}") for look in view.looks):  # it was excluded from the start
            continue
        share = np.array(
            [max(0.0, look.body[f"max_log_e_{key}"]) / look.body[f"bound_{key}"] for look in view.looks]
        )
        highest = max(highest, float(share.max()))
        axes.plot(at, share, color=colour, marker=marker, ls=style, ms=4.5, lw=1.4, label=label)
    axes.axhline(1.0, color=INK, lw=1.0, ls=":", label="bound: decided")
    # linear up to the bound, where it matters; decades beyond
    axes.set_yscale("symlog", linthresh=1.0, linscale=1.0)
    ticks = [0.0, 0.5, *(10.0**power for power in range(math.ceil(math.log10(highest)) + 1))]
    axes.set_yticks(ticks)
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.yaxis.set_minor_locator(mpl.ticker.NullLocator())
    axes.set_ylim(-0.08, max(1.6, 1.5 * highest))
    axes.set_ylabel("evidence / bound")
    axes.legend(loc="best", ncols=2, frameon=True, edgecolor="none", facecolor="white")


# ---- exclusion, light, drift ----------------------------------------------------------------------------


def exclusion(view: RunView, curve: Sequence[Mapping[str, Any]]) -> Figure:
    """The strongest second line that the counts still allow, over its distance from the line."""
    figure = Figure(figsize=(WIDTH_IN, 3.4), layout="constrained")
    axes = figure.subplots()
    question = view.head["question"]
    place = 1e3 * np.array([row["separation_nm"] for row in curve])
    limit = np.array([math.nan if row["ratio_limit"] is None else row["ratio_limit"] for row in curve])
    axes.set_yscale("log")
    for side in (place < 0.0, place > 0.0):
        shown = side & np.isfinite(limit)
        axes.plot(place[shown], limit[shown], "o-", ms=3.5, lw=1.5, color=BLUE)
        axes.fill_between(place[shown], limit[shown], 1.0, color=SKY, alpha=0.25, lw=0)
    asked_pm, ratio = 1e3 * question["smallest_separation_nm"], question["smallest_ratio"]
    axes.plot(
        [-asked_pm, asked_pm], [ratio, ratio], "D", ms=6, color=VERMILION, mfc="white", mew=1.5,
        label=f"asked for: {ratio:g} at {asked_pm:.3g} pm",
    )  # fmt: skip
    low = np.nanmin(limit, initial=ratio)
    axes.set_ylim(0.6 * min(low, ratio), 1.0)
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.yaxis.set_minor_formatter(FuncFormatter(_few_minor))
    axes.set_xlabel("distance of a second line from the line, pm")
    axes.set_ylabel("ratio excluded above (95 %)")
    figure.legend(loc="outside upper left")
    return figure


def light(view: RunView) -> Figure:
    """How much light each part of the scale was given."""
    figure = Figure(figsize=(WIDTH_IN, 3.0), layout="constrained")
    shares = _shares(view.stretches)
    axes = figure.subplots(
        1, len(view.stretches), sharey=True, squeeze=False, gridspec_kw={"width_ratios": shares}
    )[0]
    for one, stretch in zip(axes, view.stretches, strict=True):
        inside = _inside(view.dwell_nm, stretch)
        edges_nm, density_s_per_pm = light_density(view.dwell_nm[inside], view.dwell_s[inside])
        one.stairs(density_s_per_pm, _offset_pm(edges_nm, stretch), color=ORANGE, fill=True, alpha=0.35)
        one.stairs(density_s_per_pm, _offset_pm(edges_nm, stretch), color=ORANGE, lw=1.4)
        one.set_xlabel(_offset_label(stretch, view.medium, is_only=len(view.stretches) == 1))
        one.grid(visible=False, axis="x")
    axes[0].set_ylim(bottom=0.0)
    axes[0].set_ylabel("light, s per pm")
    return figure


def light_density(wavelength_nm: FloatArray, dwell_s: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Edges (B + 1,), nm, and light (B,), s per pm, of at most BARS bars that hold whole positions.

    wavelength_nm : (M,) ascending; each position stands for the scale half-way to its neighbours.
    """
    if wavelength_nm.size < 2:
        return np.array([0.0, 1e-3]) + wavelength_nm.sum(), np.array([dwell_s.sum()])
    middles = 0.5 * (wavelength_nm[1:] + wavelength_nm[:-1])
    ends = 2.0 * wavelength_nm[[0, -1]] - middles[[0, -1]]
    edges = np.concatenate([ends[:1], middles, ends[1:]])
    bars = min(BARS, wavelength_nm.size)
    starts = np.arange(bars) * wavelength_nm.size // bars
    edges = np.append(edges[starts], edges[-1])
    return edges, np.add.reduceat(dwell_s, starts) / (1e3 * np.diff(edges))


def drift(view: RunView) -> Figure | None:
    """Lamp, dark and air against bench time: what there is of them; None if there is nothing."""
    made = view.drift
    panels = [
        (made.strength, "lamp,\nrelative", BLUE, "o"),
        (made.dark_per_s, f"dark,\n{_counts(view)} per s", INK, "s"),
        (made.temperature_c, "air, °C", VERMILION, "-"),
        (_scaled(made.pressure_pa, 1e-2), "air, hPa", GREEN, "-."),
    ]
    panels = [panel for panel in panels if panel[0].value.size]
    if not panels:
        return None
    figure = Figure(figsize=(WIDTH_IN, 0.7 + 1.15 * len(panels)), layout="constrained")
    axes = figure.subplots(len(panels), 1, sharex=True, squeeze=False)[:, 0]
    unit, per_unit = _time_unit(max(float(series.bench_s.max()) for series, *_ in panels))
    for one, (series, label, colour, mark) in zip(axes, panels, strict=True):
        at = series.bench_s / per_unit
        if np.isfinite(series.u).all():
            one.errorbar(
                at, series.value, yerr=series.u, fmt=mark, ms=3.5, lw=0, elinewidth=1.0, color=colour,
                rasterized=at.size > MANY,
            )  # fmt: skip
        else:
            one.plot(
                at, series.value, ls=mark, marker=".", ms=3, lw=1.0, color=colour, rasterized=at.size > MANY
            )
        one.set_ylabel(label)
        one.yaxis.set_major_locator(MaxNLocator(4))
        _widen(one, series)
    axes[-1].set_xlabel(f"bench time, {unit}")
    return figure


def _widen(axes: Axes, series: Series) -> None:
    """A value that hardly moved is not blown up into a drift."""
    smallest = {"°C": 0.1, "hPa": 0.5}
    least = next((value for unit, value in smallest.items() if unit in axes.get_ylabel()), 0.0)
    low, high = axes.get_ylim()
    if high - low < least:
        middle = 0.5 * (low + high)
        axes.set_ylim(middle - 0.5 * least, middle + 0.5 * least)


# ---- a night --------------------------------------------------------------------------------------------

BAR_OF = {
    "pair": (BLUE, ""), "single": (GREEN, "//"), "self-reversed": (PURPLE, "xx"), "undecided": (ORANGE, ".."),
}  # fmt: skip


def night(views: Sequence[RunView]) -> Figure:
    """When each run was under way, by verdict."""
    figure = Figure(figsize=(6.4, 0.9 + 0.34 * len(views)), layout="constrained")
    axes = figure.subplots()
    start_ns = min(view.start_utc_ns for view in views)
    unit, per_unit = _time_unit(max(view.end_utc_ns - start_ns for view in views) * 1e-9)
    named: set[str] = set()
    for row, view in enumerate(views):
        verdict = view.summary["verdict"]
        colour, hatch = BAR_OF.get(verdict, (GREY, ""))
        begin = (view.start_utc_ns - start_ns) * 1e-9 / per_unit
        length = (view.end_utc_ns - view.start_utc_ns) * 1e-9 / per_unit
        axes.barh(
            row, length, left=begin, height=0.62, color=colour, hatch=hatch, edgecolor="white",
            label=None if verdict in named else verdict_in_words(verdict),
        )  # fmt: skip
        named.add(verdict)
    axes.set_yticks(range(len(views)), [_short(view.summary["target"]) for view in views])
    axes.invert_yaxis()
    axes.grid(visible=False, axis="y")
    axes.set_xlim(left=0.0)
    axes.set_xlabel(f"time since the first run began, {unit}")
    figure.legend(loc="outside upper right", ncols=4)
    return figure


# ---- parts ----------------------------------------------------------------------------------------------


def _inside(wavelength_nm: FloatArray, stretch: Stretch) -> Any:
    slack = 1e-9 * stretch.high_nm
    return (wavelength_nm >= stretch.low_nm - slack) & (wavelength_nm <= stretch.high_nm + slack)


def _offset_pm(wavelength_nm: FloatArray, stretch: Stretch) -> FloatArray:
    return 1e3 * (wavelength_nm - stretch.reference_nm)


def _offset_label(stretch: Stretch, medium: str, *, is_only: bool) -> str:
    where = f"{stretch.reference_nm:.4f} nm"
    return f"wavelength in {medium}, pm from {where}" if is_only else f"pm from {where}"


def _counts(view: RunView) -> str:
    return "charges" if view.is_analogue else "counts"


def _time_unit(longest_s: float) -> tuple[str, float]:
    if longest_s < 180.0:
        return "s", 1.0
    return ("min", 60.0) if longest_s < 3 * 3600.0 else ("h", 3600.0)


def _scaled(series: Series, factor: float) -> Series:
    return Series(series.bench_s, series.value * factor, series.u * factor)


def _few_minor(value: float, _: int) -> str:
    """Minor ticks of a decade that are worth a label: 2 and 5."""
    leading = round(value / 10 ** math.floor(math.log10(value)))
    return f"{value:g}" if leading in (2, 5) else ""


def _say(axes: Axes, text: str) -> None:
    axes.text(0.5, 0.5, text, transform=axes.transAxes, ha="center", va="center", color=GREY)


def _short(name: str, longest: int = 32) -> str:
    """A target's name as a label. A dollar sign would begin a formula."""
    shown = name if len(name) <= longest else f"{name[: longest - 1]}…"
    return shown.replace("$", r"\$")
