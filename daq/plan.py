"""From bench and target to plain numbers: what a run's head holds and everything later is computed from.

`draw_up` is called once, when a run begins; a resumed run and a re-analysis read the head instead, so that a
settings file edited meanwhile changes nothing.
"""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any

from analysis.allocate import Window
from analysis.dark import HORIZON_S
from analysis.drives import PeriodicError
from analysis.mounts import mount_to_json
from analysis.profile import FWHM_PER_SIGMA
from analysis.question import Feature, Question, to_json
from daq.check import problems_of
from daq.hands import Grip
from daq.instrument import (
    Stretch,
    View,
    filter_in_beam,
    in_medium,
    lamp_lit,
    mount_of_bench,
    periodic_errors,
    slits_um,
    stretches_of,
    view_of,
)
from daq.records import Body, utc_ns_of
from daq.spectrum import Spectrum
from daq.target import LoadedTarget, Target
from drivers.bench import Bench, GratingOptics, LoadedBench
from drivers.bench_devices import Detector, Reference
from drivers.errors import SettingsError

DARK_SETTLING_S = 300.0
"""The dark is given this long to settle before the first sweep, and at most a quarter of the run's time."""

AFTER_OVER_LIGHT_S = 1800.0
"""How long the dark may settle in the run after one that too much light ended: at most half of its time."""

DARK_DWELLS = 4
"""One dark point a sweep, this many dwells long: about 6 % of the time of a sweep over +-4 FWHM."""

SIGMA_OF_BOX = 12.0**-0.5
"""Standard deviation of a box of full width 1: so the blur of a concave mount, small beside the slits or
refused, enters the width of the line."""


def draw_up(
    loaded: LoadedBench, target: LoadedTarget, spectrum: Spectrum | None
) -> tuple[dict[str, Any], dict[str, Any]]:
    """`(plan, question)` as JSON types. Raises SettingsError if the bench cannot do what is asked."""
    problems = problems_of(loaded, target, spectrum)
    if problems:
        raise SettingsError(str(target.path), [str(problem) for problem in problems])
    bench, asked = loaded.bench, target.target
    mount = mount_of_bench(bench, asked.setup, spectrum)
    view = view_of(mount, asked)
    stretches = sorted(stretches_of(view, asked), key=lambda stretch: stretch.lowest_steps)
    decide, goal, limits = asked.goal.decision, asked.goal, asked.limits
    smallest_pm, goal_pm = decide.smallest_separation_pm, goal.separation_uncertainty_pm
    question = Question(
        feature=feature_of(bench, asked, view, stretches),
        false_alarm=decide.false_alarm,
        smallest_separation_nm=view.fwhm_nm if smallest_pm is None else 1e-3 * smallest_pm,
        smallest_ratio=decide.smallest_ratio,
        miss_probability=decide.miss_probability,
        separation_uncertainty_nm=None if goal_pm is None else 1e-3 * goal_pm,
        scale_relative_uncertainty=bench.scale.relative_uncertainty,
        ratio_uncertainty=goal.ratio_uncertainty,
        resolving_power_at_least=goal.resolving_power_at_least,
    )
    dwell_ns, time_limit_ns = round(asked.sweep.dwell_s * 1e9), round(limits.time_s * 1e9)
    window = Window(
        stretches=tuple((stretch.lowest_steps, stretch.highest_steps) for stretch in stretches),
        step_steps=view.step_steps,
        groups=view.groups,
        dwell_ns=dwell_ns,
        dark_ns=DARK_DWELLS * dwell_ns,
    )
    plan = {
        "mount": mount_to_json(mount),
        "medium": mount.medium,
        "window": window.to_json(),
        "dark_settling_ns": min(round(DARK_SETTLING_S * 1e9), time_limit_ns // 4),
        "dark_horizon_s": 0.0,
        "time_limit_ns": time_limit_ns,
        "light_limit_ns": None if limits.light_s is None else round(limits.light_s * 1e9),
        "deadline_utc_ns": None if limits.deadline_utc is None else utc_ns_of(limits.deadline_utc),
        "detector": _detector(bench.detector),
        "reference": _reference(bench.reference),
        "setup": _setup(bench, asked),
        "grip": asdict(_grip(bench, asked)),
    }
    return plan, to_json(question)


def after_over_light(plan: Body) -> dict[str, Any]:
    """The plan of the run after one that too much light ended: the dark stays raised for minutes to hours
    (common practice), so it has longer to settle and must be seen to hold."""
    settling_ns = min(round(AFTER_OVER_LIGHT_S * 1e9), plan["time_limit_ns"] // 2)
    return {**plan, "dark_settling_ns": settling_ns, "dark_horizon_s": HORIZON_S}


def feature_of(bench: Bench, target: Target, view: View, stretches: list[Stretch]) -> Feature:
    """What the analysis is told of the line and the instrument."""
    model, medium = target.model, view.mount.medium

    def broadened_nm(own_pm: float) -> float:
        """A source line with what diffraction and blur add to it."""
        blur_nm = SIGMA_OF_BOX * FWHM_PER_SIGMA * view.blur_nm
        return math.hypot(1e-3 * own_pm, view.diffraction_nm, blur_nm)

    limit_pm = model.line_fwhm_at_most_pm
    windows_nm = sorted((stretch.lowest_nm, stretch.highest_nm) for stretch in stretches)
    return Feature(
        wavelength_nm=view.wavelength_nm,
        fwhm_nm=view.fwhm_nm,
        box_widths_nm=view.boxes_nm,
        line_fwhm_nm=broadened_nm(model.line_fwhm_pm),
        shape=model.shape,
        widths=model.widths,
        background=model.background,
        known_lines_nm=tuple(in_medium(nm, target.medium, medium) for nm in target.known_lines_nm),
        shape_allowance=bench.shape.allowance,
        kind=model.kind,
        width_ratio=1.0 if model.width_ratio is None else model.width_ratio,
        line_fwhm_limit_nm=None if limit_pm is None else broadened_nm(limit_pm),
        pattern=tuple((1e-3 * part.offset_pm, part.strength) for part in model.pattern),
        windows_nm=tuple(windows_nm) if len(windows_nm) > 1 else (),
        self_reversal=model.self_reversal,
        periodic_errors_nm=tuple(
            (error.amplitude_nm(view.nm_per_step) * _left(error, view), error.period_nm(view.nm_per_step))
            for error in periodic_errors(bench)
        ),
    )


def _left(error: PeriodicError, view: View) -> float:
    """What the dithered points over a line leave of a periodic error: nothing of one much finer than it."""
    return error.share_left(
        fwhm_steps=view.fwhm_nm / view.nm_per_step, spacing_steps=view.step_steps / view.groups
    )


def _detector(table: Detector) -> dict[str, Any]:
    keys = {
        "counter": ("dead_time_ns", "dead_time_uncertainty_ns"),
        "analogue": ("charge_unit_c", "read_noise_a", "shot_noise_c"),
    }[table.kind]
    return {"kind": table.kind} | {key: getattr(table, key) for key in keys}


def _reference(table: Reference | None) -> dict[str, Any] | None:
    if table is None:
        return None
    return {"dead_time_ns": table.dead_time_ns, "dark_rate_per_s": table.dark_rate_per_s}


def _setup(bench: Bench, target: Target) -> dict[str, Any]:
    """How the optics stand for this run, by device or by hand; null where nobody says."""
    optics = bench.optics
    if not isinstance(optics, GratingOptics):
        return {}
    entrance_um, exit_um = slits_um(optics, target.setup)
    return {
        "order": target.setup.order or optics.order,
        "entrance_slit_um": entrance_um,
        "exit_slit_um": exit_um,
        "filter": filter_in_beam(bench, target.setup),
        "lamp": lamp_lit(bench, target.setup),
    }


def _grip(bench: Bench, target: Target) -> Grip:
    detector, setup = bench.detector, _setup(bench, target)
    return Grip(
        settle_ns=round(bench.drive.settle_s * 1e9),
        backlash_steps=bench.drive.backlash_steps,
        lowest_steps=bench.drive.lowest_steps,
        longest_gate_ns=round(detector.longest_gate_s * 1e9),
        highest_rate_per_s=detector.most_counts_per_s,
        dead_time_ns=detector.dead_time_ns or 0.0,
        move_timeout_s=bench.drive.move_timeout_s,
        charge_unit_c=detector.charge_unit_c,
        highest_current_a=detector.highest_current_a,
        filter=None if bench.filter is None else setup["filter"],
        lamp=None if bench.lamp is None else setup["lamp"],
        entrance_slit_um=None if bench.slits is None else setup["entrance_slit_um"],
        exit_slit_um=None if bench.slits is None else setup["exit_slit_um"],
        reference_dark_per_s=0.0 if bench.reference is None else bench.reference.dark_rate_per_s,
    )
