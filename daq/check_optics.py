"""Whether the optics can show what a target asks for: reach, slits, focus, drive, and what no light can
mend."""

from __future__ import annotations

import math
from collections.abc import Iterator

from analysis.drives import PeriodicError, separation_rms_nm
from analysis.optics import ConcaveMount, Mount, TableMount
from analysis.turned import TurnedGrating
from daq.finding import Finding, Severity
from daq.instrument import View, in_medium, periodic_errors
from daq.target import Target
from daq.wording import length, whole
from drivers.bench import Bench

LARGEST_BLUR = 1 / 3
"""Of the bandpass: a concave mount out of focus by more makes the light, not the slits, decide the line's
width."""

WIDEST_SLITS = 2.0
"""Bandpass over smallest separation beyond which a pair is not to be told from one line: at 0.5 of a line's
width it takes some 5e4 counts, at 0.4 some 3e5, at 0.3 some 2e6 (information of an equal pair of free
width)."""

HIGHEST_ORDER = 6

FOCUS = "optics.focused_nm"
"""Where a problem with the focus of a concave mount is told."""


def reach_nm(bench: Bench, mount: Mount) -> tuple[float, float]:
    """Shortest and longest wavelength, nm, between the drive's limits (its approach from below included), on
    the side of zero order that the light uses. ValueError if nothing is left there."""
    drive = bench.drive
    ends: list[float] = [drive.lowest_steps + drive.backlash_steps, drive.highest_steps]
    if isinstance(mount, TurnedGrating):
        limit = abs(mount.mechanism.steps(0.5 * math.pi - mount.half_included_angle_rad) - drive.zero_steps)
        limit -= max(1.0, 1e-9 * limit)
        ends = [min(max(end, drive.zero_steps - limit), drive.zero_steps + limit) for end in ends]
    low, high = sorted(float(mount.wavelength_nm(end)) for end in ends)
    if high <= 0.0:
        raise ValueError("the drive's limits leave no wavelength on the side of zero order that is used")
    return max(0.0, low), high


def beyond_air(mount: Mount, target: Target) -> list[Finding]:
    """Wavelengths of the target file that air does not let through, on a bench that stands in air."""
    keyed = [(line_key(target), target.wavelength_nm)]
    keyed += [(f"windows[{number}]", nm) for number, (nm, _) in enumerate(target.stretches) if target.windows]
    keyed += [(f"model.known_lines_{target.medium}_nm", nm) for nm in target.known_lines_nm]
    found = []
    for key, given_nm in keyed:
        try:
            in_medium(given_nm, target.medium, mount.medium)
        except ValueError as error:
            found.append(Finding("problem", "target", key, str(error)))
    return found


def out_of_reach(bench: Bench, mount: Mount, target: Target) -> list[Finding]:
    """One problem if the target's line cannot be brought to the exit slit, or the detector cannot see it."""
    where_nm, detector = in_medium(target.wavelength_nm, target.medium, mount.medium), bench.detector
    try:
        lowest_nm, highest_nm = reach_nm(bench, mount)
    except ValueError as error:
        return [Finding("problem", "bench", "drive", str(error))]
    if lowest_nm <= where_nm <= highest_nm:
        if isinstance(mount, TableMount) or detector.shortest_nm <= where_nm <= detector.longest_nm:
            return []
        text = (
            f"the detector sees {detector.shortest_nm:g} to {detector.longest_nm:g} nm only"
            " (detector.shortest_nm, longest_nm)"
        )
        return [Finding("problem", "target", line_key(target), text)]
    why = f"in order {mount.order} its drive reaches {lowest_nm:.5g} to {highest_nm:.5g} nm"
    if isinstance(mount, TableMount):
        why = f"its recording holds {lowest_nm:.6g} to {highest_nm:.6g} nm"
    tenth_nm = where_nm / 10.0  # of a wavelength that was given in angstrom
    if max(lowest_nm, detector.shortest_nm) <= tenth_nm <= min(highest_nm, detector.longest_nm):
        hint = f"; from angstrom divide by ten: {target.wavelength_nm / 10.0:.8g}"
    else:
        hint = _order_that_reaches(mount, where_nm, lowest_nm, highest_nm)
    text = f"the bench '{bench.name}' cannot reach it: {why}{hint}"
    return [Finding("problem", "target", line_key(target), text)]


def _order_that_reaches(mount: Mount, where_nm: float, lowest_nm: float, highest_nm: float) -> str:
    if not isinstance(mount, TurnedGrating):
        return ""
    per_order = mount.order
    fits = [
        order
        for order in range(1, HIGHEST_ORDER + 1)
        if order != per_order and lowest_nm * per_order <= where_nm * order <= highest_nm * per_order
    ]
    if not fits:
        return "; no order of this grating brings it inside"
    named = " or ".join(str(order) for order in fits[:2])
    return f"; it would be inside in order {named} (setup.order)"


def line_key(target: Target) -> str:
    return f"wavelength_{target.medium}_nm = {target.wavelength_nm:g}"


def smallest_separation_nm(target: Target, view: View) -> float:
    """The separation that a companion is looked for at: the target's, else the width of one line."""
    asked_pm = target.goal.decision.smallest_separation_pm
    return view.fwhm_nm if asked_pm is None else 1e-3 * asked_pm


def goal_severity(target: Target) -> Severity:
    """How bad a goal out of reach is: refused, unless the target says to measure all the same."""
    return "problem" if target.limits.when_out_of_reach == "refuse" else "caution"


def sharpness(bench: Bench, view: View, target: Target) -> Iterator[Finding]:
    """Slits, focus and resolving power against what is asked."""
    yield from _focus(view)
    yield from _slits(view, target)
    asked = target.goal.resolving_power_at_least
    if asked is not None and view.resolving_power < asked:
        yield Finding(
            goal_severity(target),
            "target",
            "goal.resolving_power_at_least",
            f"{whole(asked)}, but with slits, diffraction and a source line of {length(view.source_nm)}"
            f" this bench comes to {whole(view.resolving_power)}; {_sharper(view)}",
        )
    limit_pm, observed = target.model.line_fwhm_at_most_pm, 1e3 * view.fwhm_nm
    if limit_pm is not None and limit_pm > observed:
        yield Finding(
            "note",
            "target",
            "model.line_fwhm_at_most_pm",
            f"{limit_pm:g} pm is wider than a line as recorded ({observed:.3g} pm) and tells nothing",
        )
    if not isinstance(view.mount, TableMount) and view.source_nm > view.slits_nm:
        yield Finding(
            "note",
            "target",
            "model.line_fwhm_pm",
            f"the source line ({length(view.source_nm)}) is wider than the slits' bandpass"
            f" ({length(view.slits_nm)}): wider slits would cost little and give more light",
        )


def _focus(view: View) -> Iterator[Finding]:
    mount, blur_nm = view.mount, view.blur_nm
    if not isinstance(mount, ConcaveMount) or blur_nm <= LARGEST_BLUR * view.slits_nm:
        return
    yield Finding(
        "problem",
        "bench",
        FOCUS,
        f"the concave mount is focused for {mount.focused_nm:g} nm in order {mount.focused_order}; at"
        f" {view.wavelength_nm:.6g} nm in order {mount.order} it blurs a line by {length(blur_nm)},"
        f" against a bandpass of {length(view.slits_nm)}. Set the slits' arms for focused_nm ="
        f" {view.wavelength_nm:.6g} and focused_order = {mount.order}, and say so in the bench file",
    )


def _slits(view: View, target: Target) -> Iterator[Finding]:
    asked_pm = target.goal.decision.smallest_separation_pm
    if asked_pm is None or isinstance(view.mount, TableMount):
        return
    bandpass_pm = 1e3 * view.slits_nm
    if bandpass_pm <= asked_pm:
        return
    is_hopeless = bandpass_pm > WIDEST_SLITS * asked_pm
    yield Finding(
        goal_severity(target) if is_hopeless else "caution",
        "target",
        "goal.decide.smallest_separation_pm",
        f"{asked_pm:g} pm is less than the bandpass of the slits, {bandpass_pm:.3g} pm: the slits are wider"
        f" than the pair asked for{'' if is_hopeless else ', which costs light'};"
        f" {_narrower(view, asked_pm)}",
    )


def _narrower(view: View, asked_pm: float) -> str:
    mount = view.mount
    assert isinstance(mount, TurnedGrating), "a recorded spectrum has no slits"
    if 1e3 * view.diffraction_nm > asked_pm:
        return (
            f"nor would narrower ones do: diffraction alone leaves {length(view.diffraction_nm)}; use"
            " a higher order, or a wider or finer grating"
        )
    limits = [
        width_um * 1e-3 * asked_pm / box_nm
        for width_um, box_nm in zip((mount.entrance_slit_um, mount.exit_slit_um), view.boxes_nm, strict=True)
        if box_nm > 0.0
    ]
    return (
        f"slits of at most {_floored(min(limits)):g} um would do (now {mount.entrance_slit_um:g} and"
        f" {mount.exit_slit_um:g} um)"
    )


def _sharper(view: View) -> str:
    widest = max(view.slits_nm, view.diffraction_nm, view.blur_nm, view.source_nm)
    if widest == view.source_nm:
        return "the source line is the widest part; a cooler lamp at lower pressure is narrower"
    if widest == view.blur_nm:
        return "the blur of the mount is the widest part; focus it"
    if widest == view.diffraction_nm:
        return "diffraction is the widest part; use a higher order, or a wider or finer grating"
    return "the slits are the widest part; narrow them, or use a higher order"


def _floored(width_um: float) -> float:
    """Two digits, never more than the value."""
    digits = 10.0 ** (math.floor(math.log10(width_um)) - 1)
    return math.floor(width_um / digits + 1e-9) * digits


def drive_floor_nm(bench: Bench, view: View, separation_nm: float) -> float:
    """What the drive's periodic errors leave of a separation, nm rms over their phases, together."""
    return math.hypot(*(moved_nm(error, view, separation_nm) for error in periodic_errors(bench)))


def moved_nm(error: PeriodicError, view: View, separation_nm: float) -> float:
    """What one periodic error does to a separation, nm rms over its unknown phase."""
    return separation_rms_nm(
        separation_nm=separation_nm,
        amplitude_nm=error.amplitude_nm(view.nm_per_step),
        period_nm=error.period_nm(view.nm_per_step),
    )


def floor_nm(bench: Bench, view: View, separation_nm: float) -> float:
    """What scale and drive leave of a separation's uncertainty however much light there is, nm."""
    scale_nm = bench.scale.relative_uncertainty * separation_nm
    return math.hypot(scale_nm, drive_floor_nm(bench, view, separation_nm))


def goal_below_floor(bench: Bench, view: View, target: Target) -> Iterator[Finding]:
    goal_pm = target.goal.separation_uncertainty_pm
    if goal_pm is None:
        return
    smallest_nm = smallest_separation_nm(target, view)
    floor_pm = 1e3 * floor_nm(bench, view, smallest_nm)
    if goal_pm > floor_pm:
        return
    scale, drive_pm = bench.scale.relative_uncertainty, 1e3 * drive_floor_nm(bench, view, smallest_nm)
    of_drive = f", and its drive's periodic errors {drive_pm:.2g} pm" if drive_pm > 0.0 else ""
    yield Finding(
        goal_severity(target),
        "target",
        "goal.separation_uncertainty_pm",
        f"{goal_pm:g} pm is below what remains with any amount of light: the scale of the bench"
        f" (relative_uncertainty = {scale:g}) leaves {1e3 * scale * smallest_nm:.2g} pm of"
        f" {length(smallest_nm)}{of_drive}; no light can reach the goal. Ask for more than"
        f" {floor_pm:.2g} pm, or calibrate the bench better",
    )
