"""What `gratingd check` prints: plain text, at most 100 columns, numbers first, then findings, worst
first."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from daq.wording import duration, length, whole

WIDTH = 98
LABEL = 24
NO_BREAK = "\N{NO-BREAK SPACE}"
MARKS = {"problem": "PROBLEM", "caution": "caution", "note": "note"}
MOUNTS = {
    "plane": "plane grating, constant included angle",
    "littrow": "plane grating, Littrow",
    "concave": "concave grating, Rowland circle",
    "table": "a recorded spectrum in place of optics",
}
DETECTORS = {"counter": "counts photons", "analogue": "a photocurrent"}

Row = tuple[str, str]


def check_text(report: Mapping[str, Any]) -> str:
    """The report of `daq.check.checked` as a person reads it."""
    blocks = [_block("bench", report["bench"], list(_bench(report["bench"]["numbers"])))]
    for target in report["targets"]:
        blocks.append(_block("target", target, list(_target(target["numbers"]))))
    problems = report["problems"]
    end = "No problem found." if problems == 0 else f"{problems} problem{'s' if problems > 1 else ''} found."
    return "\n\n".join([*blocks, end])


def _block(kind: str, table: Mapping[str, Any], rows: Sequence[Row]) -> str:
    title = f"{kind}: {table['name']}"
    lines = [title, "=" * len(title)]
    for label, text in rows:
        lines += _wrapped(f"{label:<{LABEL}}", text)
    if rows and table["findings"]:
        lines.append("")
    for finding in table["findings"]:
        lines += _wrapped(f"{MARKS[finding['severity']]:<9}", f"{finding['key']}: {finding['text']}")
    return "\n".join(lines)


def _wrapped(head: str, text: str) -> list[str]:
    """Lines of at most WIDTH columns; a number keeps its unit."""
    kept = re.sub(r"(?<=\d) (?=(?:nm|pm|um|mm|min|s|degrees)\b|\d{3}\b)", NO_BREAK, text)
    lines = textwrap.wrap(
        kept,
        WIDTH,
        initial_indent=head,
        subsequent_indent=" " * len(head),
        break_long_words=False,
        break_on_hyphens=False,
    )
    return [line.replace(NO_BREAK, " ") for line in lines] or [head]


def _bench(numbers: Mapping[str, Any]) -> Iterator[Row]:
    yield "mount", MOUNTS[numbers["mount"]]
    if "groove_density_per_mm" in numbers:
        grating = f"{numbers['groove_density_per_mm']:g} grooves/mm, {numbers['ruled_width_mm']:g} mm ruled"
        yield "grating", f"{grating}, order {numbers['order']}"
        yield "arms", _arms(numbers)
        yield "drive", {"rotary": "rotary", "sine-bar": "sine bar"}[numbers["drive"]]
    for order, (lowest, highest) in numbers.get("reach_nm", {}).items():
        label = "recorded" if order == "recorded" else f"reach in order {order}"
        yield label, f"{lowest:.5g} to {highest:.5g} nm"
    for place in numbers.get("places", ()):
        yield (
            f"at {place['wavelength_nm']:.1f} nm",
            f"{place['dispersion_nm_per_mm']:.4g} nm/mm, {_pm(place['drive_step_pm'])} a step,"
            f" bandpass {place['entrance_bandpass_pm']:.3g} and {_pm(place['exit_bandpass_pm'])},"
            f" diffraction {_pm(place['diffraction_pm'])}{_blur(place)}, resolving power"
            f" {whole(place['instrument_resolving_power'])}",
        )
    load = numbers.get("dead_time_load_at_most")
    dead = f", a dead-time load of {load:.2g}" if load else ""
    sees = "{:g} to {:g} nm".format(*numbers["detector_sees_nm"]) if numbers["mount"] != "table" else ""
    yield (
        "detector",
        f"{DETECTORS[numbers['detector']]}, at most {numbers['most_counts_per_s']:.3g} counts per s{dead}"
        f"{'; sees ' + sees if sees else ''}",
    )
    if numbers["confirmed_by_hand"]:
        yield "confirmed by hand", "; ".join(numbers["confirmed_by_hand"])


def _arms(numbers: Mapping[str, Any]) -> str:
    if numbers["mount"] == "concave":
        return (
            f"radius {numbers['radius_mm']:g} mm, included angle {numbers['included_angle_deg']:g} degrees,"
            f" focused for {numbers['focused_nm']:g} nm in order {numbers['focused_order']}"
        )
    angle = (
        f"included angle {numbers['included_angle_deg']:g} degrees"
        if numbers["mount"] == "plane"
        else f"{numbers['off_plane_angle_deg']:g} degrees off the plane of dispersion"
    )
    return f"focal length {numbers['focal_length_mm']:g} mm, {angle}"


def _pm(value_pm: float) -> str:
    return length(1e-3 * value_pm)


def _blur(place: Mapping[str, Any]) -> str:
    return f", blur {_pm(place['blur_pm'])}" if place["blur_pm"] > 0.0 else ""


def _target(numbers: Mapping[str, Any]) -> Iterator[Row]:
    if not numbers:
        return
    order = f", order {numbers['order']}" if "order" in numbers else ""
    lamp = f", lamp {numbers['lamp']}" if numbers["lamp"] else ""
    medium = "air at the bench" if numbers["medium"] == "air" else "vacuum"
    yield "line", f"{numbers['wavelength_nm']:.4f} nm in {medium}{order}{lamp}"
    if "order" in numbers:
        yield from _optics(numbers)
    else:
        yield "pixel", f"{_pm(numbers['pixel_pm'])}"
    yield (
        "a line as recorded",
        f"{_pm(numbers['fwhm_pm'])} FWHM with a source line of {_pm(numbers['source_fwhm_pm'])}:"
        f" resolving power {whole(numbers['resolving_power'])}",
    )
    yield (
        "sampling",
        f"{_pm(numbers['step_pm'])} a point, {numbers['points_per_fwhm']:.1f} points per FWHM,"
        f" {numbers['points_per_fwhm_dithered']:.1f} with the dithered sweeps together",
    )
    for error in numbers.get("periodic_errors", ()):
        yield (
            f"error of {error['name']}",
            f"±{error['amplitude_pm']:.2g} pm every {_pm(error['period_pm'])}, slope"
            f" {error['slope']:.2%}; moves a separation of {_pm(numbers['smallest_separation_pm'])} by"
            f" {error['separation_error_pm']:.2g} pm if it is not averaged (over a line's points"
            f" {error['share_left']:.0%} of it is left)",
        )
    yield (
        "least uncertainty",
        f"{numbers['separation_floor_pm']:.2g} pm of {_pm(numbers['smallest_separation_pm'])} by scale"
        " and drive, with any amount of light; the line shape comes on top",
    )
    if "overlaps" in numbers:
        yield "other orders", _overlaps(numbers)
    if "windows_nm" in numbers:
        yield from _sweep(numbers)


def _optics(numbers: Mapping[str, Any]) -> Iterator[Row]:
    yield (
        "dispersion",
        f"{numbers['dispersion_nm_per_mm']:.4g} nm/mm, {_pm(numbers['drive_step_pm'])} a step of the"
        f" drive; grating turned by {numbers['rotation_deg']:.2f} degrees",
    )
    yield (
        "bandpass",
        f"{_pm(numbers['entrance_bandpass_pm'])} by the entrance slit of {numbers['entrance_slit_um']:g}"
        f" um, {_pm(numbers['exit_bandpass_pm'])} by the exit slit of {numbers['exit_slit_um']:g} um"
        f" (anamorphism {numbers['anamorphism']:.3g})",
    )
    yield "diffraction and blur", f"{_pm(numbers['diffraction_pm'])} and {_pm(numbers['blur_pm'])}"
    yield (
        "resolving power",
        f"slits {whole(numbers['slit_resolving_power'])}, grating"
        f" {whole(numbers['theoretical_resolving_power'])}, instrument"
        f" {whole(numbers['instrument_resolving_power'])} (a source line of no width)",
    )


def _overlaps(numbers: Mapping[str, Any]) -> str:
    name = numbers["filter"]
    beam = "no filter in the beam" if name == "none" else f"filter {name!r}"
    told = [
        f"{other['wavelength_nm']:.4g} nm (order {other['order']}),"
        f" {'stopped' if other['is_stopped'] else 'not stopped'}"
        for other in numbers["overlaps"]
    ]
    return f"{beam}; " + (" and ".join(told) if told else "none that the detector sees")


def _sweep(numbers: Mapping[str, Any]) -> Iterator[Row]:
    stretches = " and ".join(f"{low:.4f} to {high:.4f} nm" for low, high in numbers["windows_nm"])
    yield (
        "one sweep",
        f"{stretches}: {numbers['points_per_sweep']} points, {duration(numbers['sweep_s'])} without the"
        " moves",
    )
    if "counts_at_peak_per_point" not in numbers:
        return
    load = f", dead-time load {numbers['dead_time_load']:.2g}" if "dead_time_load" in numbers else ""
    yield (
        "expected light",
        f"{numbers['counts_at_peak_per_point']:.3g} counts at the top,"
        f" {numbers['counts_of_line_per_sweep']:.3g} of the line a sweep;"
        f" {numbers['peak_share_of_allowed_light']:.2g} of what the detector may see{load}",
    )
    if "separation_u_one_sweep_pm" not in numbers:
        return
    seconds = numbers.get("time_to_goal_s")
    goal = f"; roughly {duration(seconds)} to the goal" if seconds is not None else ""
    yield (
        "expected outcome",
        f"a pair at the smallest separation, the weaker line half as strong, to"
        f" {numbers['separation_u_one_sweep_pm']:.2g} pm in one sweep{goal}",
    )
