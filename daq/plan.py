"""From bench and target to plain numbers: what a run's head holds and everything later is computed from.

`draw_up` is called once, when a run begins; a resumed run and a re-analysis read the head instead, so that a
settings file edited meanwhile changes nothing.
"""

from __future__ import annotations

import json
import math
from dataclasses import asdict
from functools import lru_cache
from typing import Any

from analysis.air import LABORATORY_AIR, STANDARD_AIR, air_from_vacuum_nm, vacuum_from_air_nm
from analysis.allocate import Window
from analysis.optics import Mount, PlaneMount, TableMount, expected_fwhm_nm
from analysis.question import Feature, Question, to_json
from daq.hands import Grip
from daq.records import Body
from daq.spectrum import Spectrum
from daq.target import LoadedTarget
from drivers.bench import LoadedBench, PlaneOptics
from drivers.errors import SettingsError

DITHER_GROUPS = 4
"""Sweeps start at this many different fractions of a step, where a step holds as many."""

DARK_DWELLS = 4
"""One dark point a sweep, this many dwells long: about 6 % of the time of a sweep over +-4 FWHM."""


def draw_up(
    loaded: LoadedBench, target: LoadedTarget, spectrum: Spectrum | None
) -> tuple[dict[str, Any], dict[str, Any]]:
    """`(plan, question)` as JSON types. Raises SettingsError if the bench cannot do what is asked."""
    bench = loaded.bench
    mount = _mount(loaded, spectrum)
    where = target_wavelength_nm(target, mount.medium)
    key = f"wavelength_{target.target.medium}_nm = {target.target.wavelength_nm:g}"

    def refuse(problem: str) -> SettingsError:
        return SettingsError(str(target.path), [problem])

    try:
        centre_steps = mount.steps(where)
        boxes_nm = mount.bandpass_nm(where)
        diffraction_nm = mount.diffraction_fwhm_nm(where)
        nm_per_step = abs(mount.dispersion_nm_per_step(centre_steps))
    except ValueError as error:
        raise refuse(f"{key}: the bench '{bench.name}' cannot reach it: {error}") from error

    model = target.target.model
    line_nm = math.hypot(1e-3 * model.line_fwhm_pm, diffraction_nm)
    fwhm_nm = expected_fwhm_nm(box_widths_nm=boxes_nm, gaussian_fwhm_nm=line_nm)
    window = _window(loaded, target, mount, where, fwhm_nm, nm_per_step, refuse)
    decide = target.target.goal.decision
    _check_goal(target, loaded, fwhm_nm, refuse)
    goal_pm = target.target.goal.separation_uncertainty_pm
    question = Question(
        feature=Feature(
            wavelength_nm=where,
            fwhm_nm=fwhm_nm,
            box_widths_nm=boxes_nm,
            line_fwhm_nm=line_nm,
            shape=model.shape,
            widths=model.widths,
            background=model.background,
            known_lines_nm=tuple(
                in_medium(w, target.target.medium, mount.medium) for w in target.target.known_lines_nm
            ),
            shape_allowance=bench.shape.allowance,
        ),
        false_alarm=decide.false_alarm,
        smallest_separation_nm=(
            fwhm_nm if decide.smallest_separation_pm is None else 1e-3 * decide.smallest_separation_pm
        ),
        smallest_ratio=decide.smallest_ratio,
        miss_probability=decide.miss_probability,
        separation_uncertainty_nm=None if goal_pm is None else 1e-3 * goal_pm,
        scale_relative_uncertainty=bench.scale.relative_uncertainty,
    )
    limits = target.target.limits
    detector = bench.detector
    plan = {
        "mount": _mount_json(mount),
        "medium": mount.medium,
        "window": window.to_json(),
        "time_limit_ns": round(limits.time_s * 1e9),
        "light_limit_ns": None if limits.light_s is None else round(limits.light_s * 1e9),
        "dead_time_ns": detector.dead_time_ns,
        "dead_time_uncertainty_ns": detector.dead_time_uncertainty_ns,
        "grip": asdict(
            Grip(
                settle_ns=round(bench.drive.settle_s * 1e9),
                backlash_steps=bench.drive.backlash_steps,
                lowest_steps=bench.drive.lowest_steps,
                longest_gate_ns=round(detector.longest_gate_s * 1e9),
                highest_rate_per_s=detector.highest_rate_per_s,
                dead_time_ns=detector.dead_time_ns,
                move_timeout_s=bench.drive.move_timeout_s,
            )
        ),
    }
    return plan, to_json(question)


def in_medium(wavelength_nm: float, given: str, wanted: str, *, at_bench: bool = True) -> float:
    """A catalogue wavelength (in standard air, or vacuum) on another scale.

    "air" is the bench's own, taken as 20 C, 101 325 Pa, 50 %, or standard air if not `at_bench`. A real
    laboratory differs by some 1e-6 of the wavelength, which moves where a feature is looked for, not how far
    apart its lines are.
    """
    if given == wanted and not (wanted == "air" and at_bench):
        return wavelength_nm
    vacuum_nm = wavelength_nm if given == "vacuum" else vacuum_from_air_nm(wavelength_air_nm=wavelength_nm)
    if wanted == "vacuum":
        return vacuum_nm
    air = LABORATORY_AIR if at_bench else STANDARD_AIR
    return air_from_vacuum_nm(wavelength_vacuum_nm=vacuum_nm, air=air)


def target_wavelength_nm(target: LoadedTarget, medium: str) -> float:
    """Where the target's main line is expected, nm, in `medium` at the bench."""
    return in_medium(target.target.wavelength_nm, target.target.medium, medium)


def mount_of(plan: Body) -> Mount:
    """The mount a plan was drawn up for."""
    return _mount_from(json.dumps(plan["mount"], sort_keys=True))


@lru_cache(maxsize=32)
def _mount_from(text: str) -> Mount:
    fields = json.loads(text)
    kind = fields.pop("kind")
    if kind == "table":
        return TableMount(tuple(fields["wavelengths"]), fields["medium"])
    return PlaneMount(**fields)


def _mount_json(mount: PlaneMount | TableMount) -> dict[str, Any]:
    if isinstance(mount, TableMount):
        return {"kind": "table", "wavelengths": list(mount.wavelengths), "medium": mount.medium}
    return {"kind": "plane"} | asdict(mount)


def _mount(loaded: LoadedBench, spectrum: Spectrum | None) -> PlaneMount | TableMount:
    bench = loaded.bench
    optics = bench.optics
    if isinstance(optics, PlaneOptics):
        assert bench.drive.steps_per_radian is not None, "checked when the bench was read"
        return PlaneMount(
            groove_density_per_mm=optics.groove_density_per_mm,
            ruled_width_mm=optics.ruled_width_mm,
            focal_length_mm=optics.focal_length_mm,
            included_angle_deg=optics.included_angle_deg,
            order=optics.order,
            entrance_slit_um=optics.entrance_slit_um,
            exit_slit_um=optics.exit_slit_um,
            steps_per_radian=bench.drive.steps_per_radian,
            zero_order_steps=bench.zero_order_steps,
        )
    assert spectrum is not None, "a table mount is read with its spectrum"
    return TableMount(tuple(float(w) for w in spectrum.wavelength_nm), spectrum.medium)


def _window(
    loaded: LoadedBench,
    target: LoadedTarget,
    mount: PlaneMount | TableMount,
    where_nm: float,
    fwhm_nm: float,
    nm_per_step: float,
    refuse: Any,
) -> Window:
    asked, sweep = target.target.window, target.target.sweep
    outright = asked.outright_pm
    below_nm, above_nm = (
        (asked.half_width * fwhm_nm,) * 2 if outright is None else (1e-3 * outright[0], 1e-3 * outright[1])
    )
    try:
        ends = sorted((mount.steps(where_nm - below_nm), mount.steps(where_nm + above_nm)))
    except ValueError as error:
        raise refuse(f"window: {error}; make the window narrower") from error
    lowest, highest = math.floor(ends[0]), math.ceil(ends[1])
    drive = loaded.bench.drive
    if lowest < drive.lowest_steps or highest > drive.highest_steps:
        raise refuse(
            f"window: around {where_nm:.6g} nm it needs the drive at {lowest} to {highest} steps, "
            f"the bench allows "
            f"{drive.lowest_steps} to {drive.highest_steps}"
        )
    if lowest - drive.backlash_steps < drive.lowest_steps:
        raise refuse(
            f"window: begins at {lowest} steps; to arrive from below the drive needs its backlash_steps = "
            f"{drive.backlash_steps} of room above lowest_steps = {drive.lowest_steps}"
        )
    step_nm = fwhm_nm / 8 if sweep.step_pm is None else 1e-3 * sweep.step_pm
    step_steps = 1 if isinstance(mount, TableMount) else max(1, round(step_nm / nm_per_step))
    if sweep.step_pm is not None:
        _check_step(sweep.step_pm, fwhm_nm, nm_per_step, isinstance(mount, TableMount), refuse)
    groups = min(DITHER_GROUPS, step_steps)
    period = drive.microstep_period_steps
    if period is not None and (step_steps // groups) % period == 0:
        raise refuse(
            f"sweep.step_pm: {step_steps} steps meet the drive's periodic error (microstep_period_steps = "
            f"{period}) at the same phase everywhere; choose another"
        )
    if (highest - lowest) // step_steps < 12:
        raise refuse(
            f"window: holds only {(highest - lowest) // step_steps + 1} positions of "
            f"{1e3 * nm_per_step * step_steps:.3g} pm; widen the window or shorten sweep.step_pm"
        )
    dwell_ns = round(sweep.dwell_s * 1e9)
    return Window(
        lowest_steps=lowest,
        highest_steps=highest,
        step_steps=step_steps,
        groups=groups,
        dwell_ns=dwell_ns,
        dark_ns=DARK_DWELLS * dwell_ns,
    )


def _check_step(step_pm: float, fwhm_nm: float, nm_per_step: float, is_table: bool, refuse: Any) -> None:
    given = f"sweep.step_pm = {step_pm:g}"
    if is_table:
        raise refuse(f"{given}: a recorded spectrum has its own rows; leave step_pm out")
    if step_pm < 0.5e3 * nm_per_step:
        raise refuse(
            f"{given}: one step of the drive is {1e3 * nm_per_step:.3g} pm; nothing finer is possible"
        )
    if step_pm > 0.25e3 * fwhm_nm:
        raise refuse(
            f"{given}: must be at most a quarter of a single line's width of {1e3 * fwhm_nm:.3g} pm on this "
            "bench, or the line is stepped over; an eighth is usual"
        )


def _check_goal(target: LoadedTarget, loaded: LoadedBench, fwhm_nm: float, refuse: Any) -> None:
    """A goal below what the scale alone leaves is refused before light is spent."""
    goal_pm = target.target.goal.separation_uncertainty_pm
    smallest_pm = target.target.goal.decision.smallest_separation_pm or 1e3 * fwhm_nm
    floor_pm = loaded.bench.scale.relative_uncertainty * smallest_pm
    if goal_pm is not None and goal_pm <= floor_pm:
        raise refuse(
            f"goal.separation_uncertainty_pm = {goal_pm:g}: the scale of the bench (relative_uncertainty = "
            f"{loaded.bench.scale.relative_uncertainty:g}) leaves {floor_pm:.2g} pm of {smallest_pm:.3g} pm; "
            "no light can reach the goal"
        )
