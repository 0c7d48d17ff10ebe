"""A bench by itself: what it reaches, how sharp it is there, and what its file leaves unsaid."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from analysis.optics import ConcaveMount, Mount, PlaneMount, TableMount
from analysis.orders import overlaps
from analysis.turned import TurnedGrating
from daq.check_numbers import optics_numbers
from daq.check_optics import HIGHEST_ORDER, LARGEST_BLUR, reach_nm
from daq.confirm import required
from daq.finding import Finding, worst_first
from daq.instrument import mount_of_bench
from daq.spectrum import Spectrum
from daq.target import Setup
from drivers.bench import NO_FILTER, Bench, ConcaveOptics, GratingOptics
from drivers.bench_devices import Detector

PLACES = 4
"""Wavelengths at which the numbers are told, evenly over what drive and detector share."""


def bench_numbers(bench: Bench, spectrum: Spectrum | None) -> dict[str, Any]:
    """JSON types: the mount, what the drive reaches in each order, the optics at some places within it, what
    a person must confirm."""
    optics = bench.optics
    numbers: dict[str, Any] = {"mount": optics.mount}
    if isinstance(optics, GratingOptics):
        numbers |= optics.model_dump(exclude={"mount", "ghosts"})
        numbers["drive"] = bench.drive.kind
    numbers |= _detector_numbers(bench.detector)
    numbers["confirmed_by_hand"] = [item.words for item in required(bench)]
    try:
        mount = mount_of_bench(bench, Setup(), spectrum)
        lowest_nm, highest_nm = reach_nm(bench, mount)
    except ValueError:  # told as a finding
        return numbers
    numbers["medium"] = mount.medium
    if isinstance(mount, TableMount):
        return numbers | {"reach_nm": {"recorded": [lowest_nm, highest_nm]}}
    numbers["reach_nm"] = {
        str(order): [lowest_nm * mount.order / order, highest_nm * mount.order / order]
        for order in sorted({*range(1, HIGHEST_ORDER + 1), mount.order})
        if highest_nm * mount.order / order >= bench.detector.shortest_nm
    }
    return numbers | {"places": _places(bench, mount, lowest_nm, highest_nm)}


def _detector_numbers(detector: Detector) -> dict[str, Any]:
    numbers: dict[str, Any] = {
        "detector": detector.kind,
        "most_counts_per_s": detector.most_counts_per_s,
        "detector_sees_nm": [detector.shortest_nm, detector.longest_nm],
    }
    if detector.dead_time_ns is not None:
        numbers["dead_time_load_at_most"] = detector.most_counts_per_s * detector.dead_time_ns * 1e-9
    return numbers


def _places(bench: Bench, mount: Mount, lowest_nm: float, highest_nm: float) -> list[dict[str, Any]]:
    """For a concave mount the place of its focus alone: anywhere else the numbers are of no use."""
    low, high = max(lowest_nm, bench.detector.shortest_nm), min(highest_nm, bench.detector.longest_nm)
    if low >= high:
        return []
    where_nm = [low + (high - low) * (k + 0.5) / PLACES for k in range(PLACES)]
    if isinstance(mount, ConcaveMount):
        where_nm = [mount.focused_nm * mount.focused_order / mount.order]
    return [{"wavelength_nm": nm} | optics_numbers(mount, nm, 0.0) for nm in where_nm if low <= nm <= high]


def bench_findings(bench: Bench, spectrum: Spectrum | None) -> list[Finding]:
    """What is wrong with or left out of a bench file whatever the target is, worst first."""
    return worst_first(_findings(bench, spectrum))


def _findings(bench: Bench, spectrum: Spectrum | None) -> Iterator[Finding]:
    try:
        mount = mount_of_bench(bench, Setup(), spectrum)
        reached_nm = reach_nm(bench, mount)
    except ValueError as error:
        yield Finding("problem", "bench", "optics", str(error))
        return
    if not isinstance(mount, TurnedGrating):
        return
    yield from _odd_units(bench, mount)
    yield from _concave(bench)
    yield from _filters(bench, mount, reached_nm)
    yield from _drive(bench)
    yield from _detector(bench)
    if bench.lamp is None and bench.by_hand.lamp is None:
        yield _note("by_hand.lamp", "missing: the record will not say which lamp was lit")


def _odd_units(bench: Bench, mount: TurnedGrating) -> Iterator[Finding]:
    """Numbers that are possible but look as if they were typed in another unit."""
    if isinstance(mount, PlaneMount | ConcaveMount) and 0.0 < mount.included_angle_deg < 1.6:
        yield _caution(
            "optics.included_angle_deg",
            f"{mount.included_angle_deg:g} is very small; was it given in radians? That would be"
            f" {mount.included_angle_deg * 57.29578:.4g} degrees",
        )
    fastest = min(mount.arms_mm) / mount.ruled_width_mm
    if fastest < 2.0:
        key = "optics.radius_mm" if isinstance(mount, ConcaveMount) else "optics.focal_length_mm"
        yield _caution(
            key,
            f"the arms are only {fastest:.2g} times as long as the ruled width of {mount.ruled_width_mm:g}"
            f" mm; was the length given in {'cm' if fastest > 0.1 else 'm'}?",
        )
    if bench.optics.mount != "table" and max(mount.entrance_slit_um, mount.exit_slit_um) < 1.0:
        yield _caution(
            "optics.entrance_slit_um",
            f"{mount.entrance_slit_um:g} and {mount.exit_slit_um:g} um are narrower than slits can be made;"
            " were they given in mm?",
        )


def _concave(bench: Bench) -> Iterator[Finding]:
    optics = bench.optics
    if not isinstance(optics, ConcaveOptics) or optics.focused_order == optics.order:
        return
    yield _caution(
        "optics.order",
        f"{optics.order}, but the mount is focused for order {optics.focused_order}: off its focus a"
        f" concave grating blurs, and a run whose blur is above {LARGEST_BLUR:.0%} of the bandpass is"
        " refused",
    )


def _filters(bench: Bench, mount: TurnedGrating, reached_nm: tuple[float, float]) -> Iterator[Finding]:
    detector = bench.detector
    longest_nm = min(reached_nm[1], detector.longest_nm)
    if longest_nm <= detector.shortest_nm:
        yield _caution(
            "detector.shortest_nm",
            f"the detector sees {detector.shortest_nm:g} to {detector.longest_nm:g} nm, the drive reaches"
            f" {reached_nm[0]:.4g} to {reached_nm[1]:.4g} nm in order {mount.order}: nothing in common",
        )
        return
    seen = overlaps(
        wavelength_nm=longest_nm,
        order=mount.order,
        shortest_nm=detector.shortest_nm,
        longest_nm=detector.longest_nm,
    )
    if seen and not bench.filters:
        yield _note(
            "filters",
            f"missing; in order {mount.order} light of other orders overlaps beyond"
            f" {detector.shortest_nm * (mount.order + 1) / mount.order:.4g} nm, and no filter is there to"
            " stop it",
        )
    if bench.filters and bench.filter is None and bench.by_hand.filter is None:
        yield _note(
            "by_hand.filter", f"missing; taken as {NO_FILTER!r}. State which of [[filters]] is in the beam"
        )


def _drive(bench: Bench) -> Iterator[Finding]:
    drive = bench.drive
    if drive.backlash_steps == 0:
        yield _note(
            "drive.backlash_steps", "0: the drive arrives from both sides, and its play is in every position"
        )
    if drive.microstep_period_steps is not None and not any(
        error.period_steps == drive.microstep_period_steps for error in drive.periodic_errors
    ):
        yield _note(
            "drive.periodic_errors",
            f"the microsteps' period is stated ({drive.microstep_period_steps} steps), their error is not:"
            " it is not in the uncertainty of a separation. Five per cent of a full step is usual",
        )


def _detector(bench: Bench) -> Iterator[Finding]:
    detector = bench.detector
    if detector.kind == "counter" and detector.dead_time_ns and detector.dead_time_uncertainty_ns == 0.0:
        yield _note(
            "detector.dead_time_uncertainty_ns",
            "0: the dead time is taken as known exactly, which nobody does",
        )


def _caution(key: str, text: str) -> Finding:
    return Finding("caution", "bench", key, text)


def _note(key: str, text: str) -> Finding:
    return Finding("note", "bench", key, text)
