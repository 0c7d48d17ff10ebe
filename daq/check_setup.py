"""Whether a bench can be set up as a target asks: slits, filter, lamp."""

from __future__ import annotations

from collections.abc import Iterator

from daq.finding import Finding
from daq.target import Target
from drivers.bench import NO_FILTER, Bench, GratingOptics


def setup_problems(bench: Bench, target: Target) -> list[Finding]:
    """What of `[setup]` this bench cannot do, one finding a key."""
    asked = target.setup.model_dump(exclude_none=True)
    if not isinstance(bench.optics, GratingOptics):
        return [
            _problem(key, f"the bench '{bench.name}' is a recorded spectrum; leave it out") for key in asked
        ]
    return [*_slits(bench, target, bench.optics), *_filter(bench, target), *_lamp(bench, target)]


def _problem(key: str, text: str) -> Finding:
    return Finding("problem", "target", f"setup.{key}", text)


def _slits(bench: Bench, target: Target, optics: GratingOptics) -> Iterator[Finding]:
    for key in ("entrance_slit_um", "exit_slit_um"):
        asked_um, set_um = getattr(target.setup, key), getattr(optics, key)
        if asked_um is None:
            continue
        if bench.slits is None:
            if asked_um != set_um:
                yield _problem(
                    key,
                    f"{asked_um:g} um, but the slit is set by hand and stands at {set_um:g} um"
                    f" (optics.{key} of the bench file); set it, mend the bench file and confirm, or leave"
                    " the key out",
                )
        elif not bench.slits.narrowest_um <= asked_um <= bench.slits.widest_um:
            yield _problem(
                key,
                f"{asked_um:g} um; the bench's motorised slits allow {bench.slits.narrowest_um:g} to"
                f" {bench.slits.widest_um:g} um",
            )


def _filter(bench: Bench, target: Target) -> Iterator[Finding]:
    asked = target.setup.filter
    if asked is None:
        return
    known = [NO_FILTER, *(band.name for band in bench.filters)]
    if asked not in known:
        yield _problem("filter", f"{asked!r} is none of the bench's [[filters]]; allowed: {_listed(known)}")
    elif bench.filter is None and asked != (set_by_hand := bench.by_hand.filter or NO_FILTER):
        yield _problem(
            "filter",
            f"{asked!r}, but filters are set by hand at this bench and its file says {set_by_hand!r}"
            " (by_hand.filter); set it, mend the bench file and confirm, or leave the key out",
        )


def _lamp(bench: Bench, target: Target) -> Iterator[Finding]:
    asked = target.setup.lamp
    if asked is None:
        if bench.lamp is not None and len(bench.lamp.positions) > 1:
            yield _problem(
                "lamp",
                "missing; the bench has several lamps: one of " + _listed(bench.lamp.positions),
            )
        return
    if bench.lamp is not None:
        if asked not in bench.lamp.positions:
            yield _problem(
                "lamp",
                f"{asked!r} is not in the lamp turret; allowed: {_listed(bench.lamp.positions)}",
            )
    elif bench.by_hand.lamp is None:
        yield _problem(
            "lamp",
            f"{asked!r}, but the bench has no [lamp] to choose one and its file does not say which is lit;"
            " state it as by_hand.lamp, or leave the key out",
        )
    elif asked != bench.by_hand.lamp:
        yield _problem(
            "lamp",
            f"{asked!r}, but the lamp is set by hand at this bench and its file says {bench.by_hand.lamp!r}"
            " (by_hand.lamp); change the lamp, mend the bench file and confirm",
        )


def _listed(names: list[str] | tuple[str, ...]) -> str:
    return ", ".join(repr(name) for name in names)
