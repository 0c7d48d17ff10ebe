"""What else may stand where a target stands: other orders and the filter that keeps them out, ghosts, and a
wavelength read in the wrong medium."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from typing import Literal

from analysis.ghosts import ghosts_near
from analysis.lines import ReferenceLine, elements, lines, near
from analysis.optics import TableMount
from analysis.orders import FilterBand, Overlap, overlaps, overlaps_near, passes
from daq.check_optics import line_key
from daq.finding import Finding
from daq.instrument import Stretch, View, filter_in_beam, in_medium, lamp_lit
from daq.target import Target
from drivers.bench import NO_FILTER, Bench, GratingOptics
from drivers.bench_optics import FilterBand as FilterTable

SAME_LINE_NM = 3e-3
OTHER_LINE_NM = 30e-3
"""A wavelength is taken for one read in the wrong medium if in the other one it meets a known line to the
first, and as it was given none to the second."""

GHOST_SHARE = 0.1
"""Of the smallest companion asked for: a ghost stronger than that could be taken for one."""

FAINTEST_GHOST = 1e-9
"""Of its parent: fainter ones are below a count in any run."""

ENGLISH = {"Ar": "argon", "Cd": "cadmium", "Hg": "mercury", "Fe": "iron", "Ne": "neon", "Zn": "zinc"}


def band_of(table: FilterTable | None) -> FilterBand | None:
    if table is None:
        return None
    return FilterBand(name=table.name, shortest_nm=table.shortest_nm, longest_nm=table.longest_nm)


def overlaps_seen(bench: Bench, view: View, band: FilterBand | None) -> tuple[Overlap, ...]:
    """Light of other orders at the target's place that detector and filter let through, longest first."""
    return overlaps(
        wavelength_nm=view.wavelength_nm,
        order=view.mount.order,
        shortest_nm=bench.detector.shortest_nm,
        longest_nm=bench.detector.longest_nm,
        band=band,
    )


def filter_findings(
    bench: Bench, view: View, target: Target, stretches: Sequence[Stretch]
) -> Iterator[Finding]:
    """Whether the filter in the beam lets the target through and other orders not."""
    if isinstance(view.mount, TableMount):
        return
    name = filter_in_beam(bench, target.setup)
    table = bench.band(name)
    if table is None and name != NO_FILTER:
        return  # told as a problem of [setup]
    key = "setup.filter" if bench.filter is not None else "by_hand.filter"
    file: Literal["bench", "target"] = "target" if bench.filter is not None else "bench"
    ends = [end for part in stretches for end in (part.lowest_nm, part.highest_nm)] or [view.wavelength_nm]
    if table is not None:
        blocked = [end for end in ends if not passes(band_of(table), end)]
        if blocked:
            yield Finding(
                "problem",
                file,
                key,
                f"the filter {name!r} passes {table.shortest_nm:g} to {table.longest_nm:g} nm and blocks"
                f" the target ({blocked[0]:.6g} nm){_better(bench, view, ends)}",
            )
            return
    seen = overlaps_seen(bench, view, band_of(table))
    if not seen:
        return
    told = " and ".join(f"{other.wavelength_nm:.5g} nm (order {other.order})" for other in seen[:4])
    known = _known_overlaps(bench, view, target, stretches, band_of(table))
    if table is not None:
        band = f"{table.shortest_nm:g} to {table.longest_nm:g} nm"
        wrong = f"the filter {name!r} ({band}) lets {told} through as well"
    else:
        wrong = f"no filter is in the beam, and {told} would stand where the target stands"
    is_silent = not bench.filters and bench.by_hand.filter is None
    yield Finding(
        "caution" if is_silent and not known else "problem",
        file,
        key,
        f"{wrong}{_named(known)}{_better(bench, view, ends)}",
    )


def _better(bench: Bench, view: View, ends: Sequence[float]) -> str:
    """Which filter of the bench would do; else what it would have to be."""
    fits = [
        table.name
        for table in bench.filters
        if all(passes(band_of(table), end) for end in ends) and not overlaps_seen(bench, view, band_of(table))
    ]
    if fits:
        return f"; of the bench's filters {' or '.join(repr(name) for name in fits)} would do"
    others = [other.wavelength_nm for other in overlaps_seen(bench, view, None)]
    if not others:
        return "; no filter is needed here" if not bench.by_hand.filter else f"; {NO_FILTER!r} would do here"
    below = max((nm for nm in others if nm < view.wavelength_nm), default=None)
    above = min((nm for nm in others if nm > view.wavelength_nm), default=None)
    wanted = [f"above {below:.4g} nm"] if below is not None else []
    wanted += [f"below {above:.4g} nm"] if above is not None else []
    none_fits = (
        "; none of the bench's filters would do" if bench.filters else "; state the bench's [[filters]]"
    )
    return (
        f"{none_fits}: one is wanted that passes {view.wavelength_nm:.4g} nm and only {' and '.join(wanted)}"
    )


def _known_overlaps(
    bench: Bench, view: View, target: Target, stretches: Sequence[Stretch], band: FilterBand | None
) -> list[tuple[ReferenceLine, Overlap]]:
    """Reference lines of the lamp's elements that fall into the window from another order."""
    medium, found = view.mount.medium, []
    for line in _lamp_lines(bench, target):
        line_nm = in_medium(line.wavelength_vacuum_nm, "vacuum", medium)
        if not bench.detector.shortest_nm <= line_nm <= bench.detector.longest_nm:
            continue
        for part in stretches:
            middle, half = (part.lowest_nm + part.highest_nm) / 2, (part.highest_nm - part.lowest_nm) / 2
            for overlap in overlaps_near(
                wavelength_nm=middle, reach_nm=half, order=view.mount.order, lines_nm=[line_nm], band=band
            ):
                found.append((line, overlap))
    return found


def _named(known: Sequence[tuple[ReferenceLine, Overlap]]) -> str:
    if not known:
        return ""
    line, overlap = known[0]
    return (
        f" ({line.element} {line.wavelength_air_nm:.3f} nm in order {overlap.order} falls at"
        f" {overlap.apparent_nm:.3f} nm, inside the window)"
    )


def _lamp_lines(bench: Bench, target: Target) -> list[ReferenceLine]:
    lamp = lamp_lit(bench, target.setup) or ""
    return [line for element in elements_named(f"{target.name} {lamp}") for line in lines(element)]


def elements_named(text: str) -> tuple[str, ...]:
    """The elements with known lines whose symbols or names stand as words in a text: "Hg 313 nm pair"."""
    words = {word.lower() for word in re.split(r"[^A-Za-z]+", text)}
    return tuple(
        element
        for element in elements()
        if element.lower() in words or ENGLISH.get(element, element).lower() in words
    )


def ghost_findings(
    bench: Bench, view: View, target: Target, stretches: Sequence[Stretch]
) -> Iterator[Finding]:
    """Rowland ghosts of the target's own lines and of the lamp's reference lines inside the windows."""
    optics = bench.optics
    if not isinstance(optics, GratingOptics) or optics.ghosts is None:
        return
    medium = view.mount.medium
    own = [view.wavelength_nm, *(in_medium(nm, target.medium, medium) for nm in target.known_lines_nm)]
    lamp = [in_medium(line.wavelength_vacuum_nm, "vacuum", medium) for line in _lamp_lines(bench, target)]
    parents = own + [nm for nm in lamp if all(abs(nm - known) > OTHER_LINE_NM for known in own)]
    for part in stretches:
        try:
            found = ghosts_near(
                wavelength_nm=(part.lowest_nm + part.highest_nm) / 2,
                reach_nm=(part.highest_nm - part.lowest_nm) / 2,
                parents_nm=parents,
                order=view.mount.order,
                grooves_per_period=optics.ghosts.grooves_per_period,
                first_order_fraction=optics.ghosts.first_order_fraction,
            )
        except ValueError as error:
            yield Finding("problem", "bench", "optics.ghosts", str(error))
            return
        for ghost in found:
            if ghost.share < FAINTEST_GHOST:
                continue
            could_mislead = ghost.share >= GHOST_SHARE * target.goal.decision.smallest_ratio
            yield Finding(
                "caution" if could_mislead else "note",
                "target",
                line_key(target),
                f"the grating's ghost number {ghost.number:+d} of the line at {ghost.parent_nm:.6g} nm"
                f" stands at {ghost.wavelength_nm:.6g} nm, inside the window, with {ghost.share:.1g} of its"
                " parent's strength" + ("; a companion there may be no line" if could_mislead else ""),
            )


def medium_findings(target: Target) -> Iterator[Finding]:
    """A wavelength that meets a known line only when read in the other medium."""
    given_nm, medium = target.wavelength_nm, target.medium
    other = "vacuum" if medium == "air" else "air"
    try:
        if near(given_nm, OTHER_LINE_NM, medium=medium):
            return
        met = near(given_nm, SAME_LINE_NM, medium=other)
    except ValueError:  # below 180 nm nobody tabulates air wavelengths
        return
    if met:
        line = met[0]
        yield Finding(
            "caution",
            "target",
            line_key(target),
            f"no known line stands within {1e3 * OTHER_LINE_NM:g} pm in {medium}, but {given_nm:.7g} nm is"
            f" {line.element}'s line in {other}: in air {line.wavelength_air_nm:.4f}, in vacuum"
            f" {line.wavelength_vacuum_nm:.4f} nm. If that is meant, write wavelength_{other}_nm",
        )
