"""What can be known of a bench and its targets before any light is spent, from the files alone.

`problems_of` is what a run is refused for. `checked` is all of it for a person to read: numbers, then
findings.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

from daq.check_bench import bench_findings, bench_numbers
from daq.check_numbers import target_numbers
from daq.check_optics import FOCUS, beyond_air, goal_below_floor, out_of_reach, sharpness
from daq.check_orders import filter_findings, ghost_findings, medium_findings
from daq.check_setup import setup_problems
from daq.check_sweep import forecast_findings, limit_findings, step_findings, window_findings
from daq.finding import Finding, worst_first
from daq.instrument import Stretch, View, mount_of_bench, stretches_of, view_of
from daq.spectrum import Spectrum, read_spectrum
from daq.target import LoadedTarget, Target
from drivers.bench import Bench, LoadedBench
from drivers.errors import SettingsError
from drivers.factory import load_factories


def problems_of(loaded: LoadedBench, target: LoadedTarget, spectrum: Spectrum | None) -> list[Finding]:
    """What makes a run on this bench for this target worthless; [] if nothing does.

    `spectrum` is the recording of a table mount.
    """
    findings, _, _ = findings_of(loaded.bench, target.target, spectrum)
    return [finding for finding in findings if finding.severity == "problem"]


def _driver_findings(loaded: LoadedBench) -> list[Finding]:
    """Factories that cannot be loaded; nothing is called, so no device is opened. A caution only: the optics
    can be checked before the drivers are written."""
    try:
        load_factories(loaded)
    except SettingsError as error:
        return [Finding("caution", "bench", *problem.split(": ", 1)) for problem in error.problems]
    return []


def findings_of(
    bench: Bench, target: Target, spectrum: Spectrum | None
) -> tuple[list[Finding], View | None, tuple[Stretch, ...]]:
    """Everything found about a target, worst first, and how the bench sees it (None, () where it cannot)."""
    found = setup_problems(bench, target)
    try:
        mount = mount_of_bench(bench, target.setup, spectrum)
    except ValueError as error:
        return [*found, Finding("problem", "bench", "optics", str(error))], None, ()
    lost = beyond_air(mount, target) or out_of_reach(bench, mount, target)
    found += [*lost, *medium_findings(target)]
    if lost:
        return worst_first(found), None, ()
    view = view_of(mount, target)
    found += sharpness(bench, view, target)
    if any(finding.key == FOCUS for finding in found):
        return worst_first(found), view, ()  # nothing told about so wide a line would be of use
    found += [*goal_below_floor(bench, view, target), *step_findings(bench, view, target)]
    try:
        stretches = stretches_of(view, target)
    except ValueError as error:
        found.append(Finding("problem", "target", "window", f"{error}; make the window narrower"))
        return worst_first(found), view, ()
    found += [
        *window_findings(bench, view, target, stretches),
        *filter_findings(bench, view, target, stretches),
        *ghost_findings(bench, view, target, stretches),
        *limit_findings(bench, view, target, stretches),
        *forecast_findings(bench, view, target, stretches),
    ]
    return worst_first(found), view, stretches


def checked(loaded: LoadedBench, targets: Sequence[LoadedTarget]) -> dict[str, Any]:
    """JSON types: `bench` and `targets` with their numbers and findings, `problems` the number of problems.

    Raises DataError when the recording of a table mount cannot be read.
    """
    bench = loaded.bench
    spectrum = None if loaded.spectrum_path is None else read_spectrum(loaded.spectrum_path)
    found = worst_first([*_driver_findings(loaded), *bench_findings(bench, spectrum)])
    report: dict[str, Any] = {
        "bench": {
            "name": bench.name,
            "file": str(loaded.path),
            "numbers": bench_numbers(bench, spectrum),
            "findings": [asdict(finding) for finding in found],
        },
        "targets": [],
    }
    for target in targets:
        its, view, stretches = findings_of(bench, target.target, spectrum)
        numbers = {} if view is None else target_numbers(bench, view, target.target, stretches)
        report["targets"].append(
            {
                "name": target.target.name,
                "file": str(target.path),
                "numbers": numbers,
                "findings": [asdict(finding) for finding in its],
            }
        )
    tables = [report["bench"], *report["targets"]]
    severities = [finding["severity"] for table in tables for finding in table["findings"]]
    report["problems"] = severities.count("problem")
    return report
