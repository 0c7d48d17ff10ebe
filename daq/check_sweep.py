"""Whether a sweep is laid so that it can answer: window, step, the drive's periods, time and light."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence

import numpy as np
import numpy.typing as npt

from analysis.optics import TableMount
from daq.check_optics import FOCUS, LARGEST_BLUR, floor_nm, smallest_separation_nm
from daq.finding import Finding
from daq.instrument import Stretch, View, in_medium, periodic_errors
from daq.target import Target
from daq.wording import duration, length
from drivers.bench import Bench
from drivers.bench_devices import LARGEST_DEAD_FRACTION

FEWEST_POSITIONS = 13
MOST_POSITIONS = 200_000
"""Of a sweep that is worth a forecast; longer ones take days."""
DARK_DWELLS = 4
"""One dark point a sweep, this many dwells long: about 6 % of the time of a sweep over +-4 FWHM."""
FAR_FWHM = 5.0
"""A known line this far beyond a window's end adds nothing there but a parameter that nothing settles."""


def step_findings(bench: Bench, view: View, target: Target) -> Iterator[Finding]:
    """The step against the line, the drive's own step and its periods."""
    step_pm, one_pm, line_pm = target.sweep.step_pm, 1e3 * view.nm_per_step, 1e3 * view.fwhm_nm
    if isinstance(view.mount, TableMount):
        if step_pm is not None:
            yield _problem(
                "sweep.step_pm", f"{step_pm:g}: a recorded spectrum has its own rows; leave it out"
            )
        return
    if one_pm > line_pm / 8:
        yield Finding(
            "problem",
            "bench",
            "drive." + ("steps_per_radian" if bench.drive.kind == "rotary" else "steps_per_unit_sine"),
            f"one step of the drive is {one_pm:.3g} pm, more than an eighth of a single line's width of"
            f" {line_pm:.3g} pm: lines are stepped over. Finer microsteps, or wider slits. (Were the steps"
            " given per degree, or per turn?)",
        )
    elif step_pm is not None and step_pm < 0.5 * one_pm:
        yield _problem(
            "sweep.step_pm",
            f"{step_pm:g}: one step of the drive is {one_pm:.3g} pm; nothing finer is possible",
        )
    elif step_pm is not None and step_pm > line_pm / 8 * (1 + 1e-9):
        yield _problem(
            "sweep.step_pm",
            f"{step_pm:g}: must be at most an eighth of a single line's width of {line_pm:.3g} pm on this"
            f" bench, that is {_floored(line_pm / 8):g} pm, or the line is stepped over",
        )
    yield from _periods(bench, view, target)


def _periods(bench: Bench, view: View, target: Target) -> Iterator[Finding]:
    periods = {
        error.period_steps: f"error {error.name!r} (period_steps = {error.period_steps:g})"
        for error in periodic_errors(bench)
    }
    microsteps = bench.drive.microstep_period_steps
    if microsteps is not None:
        periods.setdefault(microsteps, f"periodic error (microstep_period_steps = {microsteps})")
    for period_steps, named in periods.items():
        if not _in_phase(view.step_steps, view.groups, period_steps):
            continue
        finer_pm = 1e3 * (view.step_steps - 1) * view.nm_per_step
        other = "choose another" if target.sweep.step_pm is not None else f"state one, such as {finer_pm:.4g}"
        yield _problem(
            "sweep.step_pm",
            f"{view.step_steps} steps meet the drive's {named} at the same phase everywhere; {other}",
        )


def _in_phase(step_steps: int, groups: int, period_steps: float) -> bool:
    """Whether all the dithered sweeps meet a period at one phase, so that nothing of its error averages."""
    apart = [step_steps, *(group * step_steps // groups for group in range(1, groups))]
    turns = [steps / period_steps for steps in apart]
    return all(turn >= 1.0 and abs(turn - round(turn)) < 1e-3 for turn in turns)


def window_findings(
    bench: Bench, view: View, target: Target, stretches: Sequence[Stretch]
) -> Iterator[Finding]:
    """Each stretch against the drive's limits, the pair that is to be seen in it, and the known lines."""
    drive = bench.drive
    for number, stretch in enumerate(stretches):
        key = f"windows[{number}]" if target.windows else "window"
        if stretch.lowest_steps < drive.lowest_steps or stretch.highest_steps > drive.highest_steps:
            yield _problem(
                key,
                f"around {stretch.centre_nm:.6g} nm it needs the drive at {stretch.lowest_steps} to"
                f" {stretch.highest_steps} steps, the bench allows {drive.lowest_steps} to"
                f" {drive.highest_steps}; make the window narrower",
            )
        elif stretch.lowest_steps - drive.backlash_steps < drive.lowest_steps:
            yield _problem(
                key,
                f"begins at {stretch.lowest_steps} steps; to arrive from below the drive needs its"
                f" backlash_steps = {drive.backlash_steps} of room above lowest_steps = {drive.lowest_steps}",
            )
        positions = (stretch.highest_steps - stretch.lowest_steps) // view.step_steps + 1
        if positions < FEWEST_POSITIONS:
            yield _problem(
                key,
                f"holds only {positions} positions of {1e3 * view.step_nm:.3g} pm; widen the window or"
                " shorten sweep.step_pm",
            )
    if not target.windows:
        yield from _room(view, target, stretches[0])
    yield from _focus_at_ends(view, stretches)
    yield from _overlapping(stretches)
    yield from _far_lines(view, target, stretches)


def _room(view: View, target: Target, stretch: Stretch) -> Iterator[Finding]:
    """One window holds line, companion at the smallest separation, and a line's width of background
    beyond."""
    fwhm_nm, separation_nm = view.fwhm_nm, smallest_separation_nm(target, view)
    below_nm, above_nm = stretch.centre_nm - stretch.lowest_nm, stretch.highest_nm - stretch.centre_nm
    wanted_nm, least_nm = separation_nm + fwhm_nm, fwhm_nm
    if max(below_nm, above_nm) >= wanted_nm and min(below_nm, above_nm) >= least_nm:
        return
    yield _problem(
        "window",
        f"reaches {1e3 * below_nm:.3g} pm below the line and {1e3 * above_nm:.3g} pm above; a pair"
        f" {1e3 * separation_nm:.3g} pm apart with background beside it needs at least"
        f" {1e3 * wanted_nm:.3g} pm on one side and {1e3 * least_nm:.3g} pm on the other (a line is"
        f" {1e3 * fwhm_nm:.3g} pm wide here)",
    )


def _focus_at_ends(view: View, stretches: Sequence[Stretch]) -> Iterator[Finding]:
    """A concave mount loses its focus along the sweep: lines at the ends are wider than the one in the
    middle."""
    ends = [end for part in stretches for end in (part.lowest_nm, part.highest_nm)]
    worst_nm = max(ends, key=view.mount.blur_nm)
    blur_nm = view.mount.blur_nm(worst_nm)
    if blur_nm > LARGEST_BLUR * view.slits_nm:
        yield Finding(
            "caution",
            "bench",
            FOCUS,
            f"at the end of the window, {worst_nm:.6g} nm, the concave mount blurs by {length(blur_nm)},"
            f" against a bandpass of {length(view.slits_nm)}: a line there is wider than one at"
            f" {view.wavelength_nm:.6g} nm. Focus for the middle of the window, use a narrower one, or"
            " light less of the grating",
        )


def _overlapping(stretches: Sequence[Stretch]) -> Iterator[Finding]:
    ordered = sorted(stretches, key=lambda stretch: stretch.lowest_nm)
    for one, other in itertools.pairwise(ordered):
        if other.lowest_nm < one.highest_nm:
            yield _problem(
                "windows",
                f"those around {one.centre_nm:.6g} and {other.centre_nm:.6g} nm overlap; make one [window]"
                " of them",
            )


def _far_lines(view: View, target: Target, stretches: Sequence[Stretch]) -> Iterator[Finding]:
    for given_nm in target.known_lines_nm:
        line_nm = in_medium(given_nm, target.medium, view.mount.medium)
        beyond_nm = min(max(part.lowest_nm - line_nm, line_nm - part.highest_nm) for part in stretches)
        if beyond_nm > FAR_FWHM * view.fwhm_nm:
            yield _problem(
                f"model.known_lines_{target.medium}_nm",
                f"the line at {given_nm:.7g} nm stands {length(beyond_nm)} beyond the end of the window,"
                " where its strength cannot be settled; leave it out, or widen the window",
            )


def sweep_points(view: View, stretches: Sequence[Stretch]) -> int:
    """Points of one sweep, the dark one not among them."""
    return sum((stretch.highest_steps - stretch.lowest_steps) // view.step_steps + 1 for stretch in stretches)


def sweep_s(bench: Bench, view: View, target: Target, stretches: Sequence[Stretch]) -> float:
    """Time of one sweep, s: dwells, settling and the dark point; moves are not known here and not in it."""
    points, dwell_s = sweep_points(view, stretches), target.sweep.dwell_s
    return points * (dwell_s + bench.drive.settle_s) + DARK_DWELLS * dwell_s


def limit_findings(
    bench: Bench, view: View, target: Target, stretches: Sequence[Stretch]
) -> Iterator[Finding]:
    """One sweep against the limits of time and light, and the light against the detector."""
    limits, dwell_s = target.limits, target.sweep.dwell_s
    points, one_s = sweep_points(view, stretches), sweep_s(bench, view, target, stretches)
    if one_s > limits.time_s:
        yield _problem(
            "limits.time_s",
            f"{limits.time_s:g}: one sweep of {points} points takes {duration(one_s)} without the moves;"
            " give more time, a shorter sweep.dwell_s or a narrower window",
        )
    elif limits.light_s is not None and points * dwell_s > limits.light_s:
        yield _problem(
            "limits.light_s",
            f"{limits.light_s:g}: one sweep counts {duration(points * dwell_s)} with the shutter open; give"
            " more light, a shorter sweep.dwell_s or a narrower window",
        )
    elif 3.0 * one_s > limits.time_s:
        yield Finding(
            "caution",
            "target",
            "limits.time_s",
            f"{limits.time_s:g}: hardly {limits.time_s / one_s:.1f} sweeps of {duration(one_s)}; drift"
            " shows only between sweeps",
        )
    yield from _light(bench, target)
    yield from _charge(bench, target)


def _light(bench: Bench, target: Target) -> Iterator[Finding]:
    rate = target.model.expected_peak_rate_per_s
    if rate is None:
        return
    detector, key = bench.detector, "model.expected_peak_rate_per_s"
    if rate >= detector.most_counts_per_s:
        yield _problem(
            key,
            f"{rate:.3g} per s is more than the detector may see ({detector.most_counts_per_s:.3g} per s):"
            " the shutter would close at the line's top. Narrow the slits or put an attenuator in",
        )
    if detector.kind != "counter" or not detector.dead_time_ns:
        return
    load = rate * detector.dead_time_ns * 1e-9
    if load > LARGEST_DEAD_FRACTION:
        yield _problem(
            key,
            f"{rate:.3g} per s with a dead time of {detector.dead_time_ns:g} ns is a load of {load:.2f};"
            f" more than {LARGEST_DEAD_FRACTION:g} cannot be corrected. Less light at the top: narrower"
            " slits, an attenuator",
        )
    elif rate * detector.dead_time_uncertainty_ns * 1e-9 > 0.01:
        yield Finding(
            "caution",
            "target",
            key,
            f"at {rate:.3g} per s the dead time's uncertainty of {detector.dead_time_uncertainty_ns:g} ns"
            f" flattens or sharpens the top by {rate * detector.dead_time_uncertainty_ns * 1e-9:.1%}, which"
            " looks like a close pair",
        )


def _charge(bench: Bench, target: Target) -> Iterator[Finding]:
    """Whole units of charge are recorded: they must be finer than the read noise of a reading."""
    detector = bench.detector
    if detector.charge_unit_c is None or detector.read_noise_a is None:
        return
    gate_s = min(detector.longest_gate_s, target.sweep.dwell_s)
    noise_c = detector.read_noise_a * math.sqrt(gate_s)
    if detector.charge_unit_c > noise_c:
        yield Finding(
            "caution",
            "bench",
            "detector.charge_unit_c",
            f"{detector.charge_unit_c:g} C is coarser than the read noise of a reading of {gate_s:g} s,"
            f" {noise_c:.2g} C; a tenth of that loses nothing",
        )


MOST_SEPARATIONS = 100.0
"""Uncertainty of a separation from one sweep, in separations, beyond which nothing is forecast."""


def forecast(
    bench: Bench, view: View, target: Target, stretches: Sequence[Stretch], floor_nm: float
) -> tuple[float, float | None] | None:
    """(uncertainty of a separation from one sweep, pm; seconds until the goal), roughly. None without a
    rate, with several windows, and where the window does not hold both lines.

    A pair of Gaussian lines at the smallest separation, the weaker half as strong, counts without background;
    the information of Poisson counts about place, separation, strengths, width and background (Cramer-Rao).
    Seconds are None without a goal for the separation, and infinite for one below the floor.
    """
    rate = target.model.expected_peak_rate_per_s
    if rate is None or target.windows:
        return None  # lines in windows of their own are no pair at the smallest separation
    if not FEWEST_POSITIONS <= sweep_points(view, stretches) <= MOST_POSITIONS:
        return None
    sigma_nm = view.fwhm_nm / math.sqrt(8.0 * math.log(2.0))
    separation_nm = smallest_separation_nm(target, view)
    points = [np.arange(s.lowest_nm, s.highest_nm, view.step_nm) for s in stretches]
    x_nm = np.concatenate(points) - view.wavelength_nm
    side = 1.0 if abs(x_nm.max()) >= abs(x_nm.min()) else -1.0

    def counts(p: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        first = np.exp(-0.5 * ((x_nm - p[0]) / p[4]) ** 2)
        second = np.exp(-0.5 * ((x_nm - p[0] - side * p[1]) / p[4]) ** 2)
        return np.asarray(rate * target.sweep.dwell_s * (p[2] * first + p[3] * second + p[5]))

    at = np.array([0.0, separation_nm, 1.0, 0.5, sigma_nm, 1e-3])
    small = np.array([sigma_nm, sigma_nm, 1.0, 1.0, sigma_nm, 1.0]) * 1e-5
    aside = np.diag(small)
    slopes = np.array([counts(at + one) - counts(at - one) for one in aside]) / (2.0 * small[:, None])
    information = (slopes / counts(at)) @ slopes.T
    if not (np.diag(information) > 0.0).all():
        return None  # the window does not see both lines
    scale = 1.0 / np.sqrt(np.diag(information))
    try:
        variance = float(np.linalg.inv(information * np.outer(scale, scale))[1, 1])
    except np.linalg.LinAlgError:
        return None
    if not 0.0 < variance < math.inf:
        return None
    one_nm = math.sqrt(variance) * float(scale[1])
    if one_nm > MOST_SEPARATIONS * separation_nm:
        return None  # the window says next to nothing about the second line
    goal_pm = target.goal.separation_uncertainty_pm
    if goal_pm is None:
        return 1e3 * one_nm, None
    room = (1e-3 * goal_pm) ** 2 - floor_nm**2
    if room <= 0.0:
        return 1e3 * one_nm, math.inf
    return 1e3 * one_nm, max(1.0, one_nm**2 / room) * sweep_s(bench, view, target, stretches)


def forecast_findings(
    bench: Bench, view: View, target: Target, stretches: Sequence[Stretch]
) -> Iterator[Finding]:
    """A goal that the expected light will not reach in the time allowed."""
    separation_nm = smallest_separation_nm(target, view)
    expected = forecast(bench, view, target, stretches, floor_nm(bench, view, separation_nm))
    seconds = None if expected is None else expected[1]
    if seconds is None or not target.limits.time_s < seconds < math.inf:
        return
    yield Finding(
        "caution",
        "target",
        "goal.separation_uncertainty_pm",
        f"roughly {duration(seconds)} would be needed at the expected rate, limits.time_s allows"
        f" {duration(target.limits.time_s)}",
    )


def _problem(key: str, text: str) -> Finding:
    return Finding("problem", "target", key, text)


def _floored(pm: float) -> float:
    digits = 10.0 ** (math.floor(math.log10(pm)) - 2)
    return math.floor(pm / digits + 1e-9) * digits
