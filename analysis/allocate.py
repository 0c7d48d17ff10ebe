"""Where the next light goes: one entry, `next_sweep`.

Uniform sweeps over the window, one stretch after another, always in the direction of rising steps (a drive
with backlash is approached from one side), each opened by one dark point. Successive sweeps start a fraction
of a step later, so that after `groups` sweeps the window is sampled `groups` times as finely and a periodic
error of the drive is not always met at the same phase. Each of these interleaved combs is a group with a gain
of its own in the fit, which lets the lamp drift between sweeps.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from functools import lru_cache
from typing import Any

SHORTEST_DWELL_NS = 1_000_000
"""A rest of a dwell or of the light shorter than this is not worth a gate, and real counters refuse it."""


@dataclass(frozen=True, slots=True)
class Visit:
    """One dwell: at `steps` for `dwell_ns`, shutter open if `light`; `group` is the comb it belongs to."""

    steps: int
    dwell_ns: int
    light: bool
    group: int

    def shortened(self, counted_ns: int, light_left_ns: int | None) -> Visit:
        """What is left of this visit after `counted_ns`, and within the light that may still be spent."""
        left_ns = self.dwell_ns - counted_ns
        if self.light and light_left_ns is not None:
            left_ns = min(left_ns, light_left_ns)
        return self if left_ns == self.dwell_ns else Visit(self.steps, left_ns, self.light, self.group)


@dataclass(frozen=True, slots=True)
class Window:
    """The stretches of drive positions to be swept, ascending, in whole steps, and the dwells, in ns."""

    stretches: tuple[tuple[int, int], ...]
    step_steps: int
    groups: int
    dwell_ns: int
    dark_ns: int

    def __post_init__(self) -> None:
        if not 1 <= self.groups <= self.step_steps:
            raise ValueError("groups must be between 1 and step_steps")
        if not self.stretches:
            raise ValueError("a window needs a stretch to be swept")
        if any(highest - lowest < self.step_steps for lowest, highest in self.stretches):
            raise ValueError("a stretch must end at least step_steps above its beginning")
        ends = [end for stretch in self.stretches for end in stretch]
        if ends != sorted(ends):
            raise ValueError("stretches must ascend and not overlap")
        if self.dwell_ns <= 0 or self.dark_ns < 0:
            raise ValueError("dwell_ns must be positive, dark_ns not negative")

    @property
    def lowest_steps(self) -> int:
        return self.stretches[0][0]

    @property
    def highest_steps(self) -> int:
        return self.stretches[-1][1]

    def to_json(self) -> dict[str, Any]:
        return asdict(self) | {"stretches": [list(stretch) for stretch in self.stretches]}

    @staticmethod
    def from_json(plain: Mapping[str, Any]) -> Window:
        stretches = tuple((lowest, highest) for lowest, highest in plain["stretches"])
        return Window(**{**plain, "stretches": stretches})


def next_sweep(window: Window, *, number: int) -> tuple[Visit, ...]:
    """The visits of sweep `number` (0, 1, ...), in the order they are made."""
    return _comb(window, number % window.groups)


@lru_cache(maxsize=64)
def _comb(window: Window, group: int) -> tuple[Visit, ...]:
    # Bit-reversed-like order of the offsets (0, 1/2, 1/4, 3/4): any run of sweeps covers the step evenly.
    order = sorted(range(window.groups), key=lambda g: int(f"{g:08b}"[::-1], 2))
    late_steps = order[group] * window.step_steps // window.groups
    visits = [
        Visit(steps, window.dwell_ns, True, group)
        for lowest, highest in window.stretches
        for steps in range(lowest + late_steps, highest + 1, window.step_steps)
    ]
    if window.dark_ns > 0:
        visits.insert(0, Visit(visits[0].steps, window.dark_ns, False, group))
    return tuple(visits)


def settling_dark(window: Window) -> Visit:
    """The dwell that is repeated behind a closed shutter until the dark has settled (analysis.dark)."""
    return Visit(window.lowest_steps, window.dark_ns, False, 0)
