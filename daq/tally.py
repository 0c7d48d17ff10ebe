"""Counts summed per drive position: what every look needs of the points so far, however many they are.

Everything in it is an integer, so that the sums do not depend on the order of the points.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

FEWEST_POSITIONS = 12
"""A pair on a sloping background has eight parameters; below a dozen positions nothing is weighed."""


@dataclass(frozen=True, slots=True)
class Snapshot:
    """The tally at one moment. `rows`: (steps, group, counts, gate_ns) of the light, by steps and group."""

    rows: tuple[tuple[int, int, int, int], ...]
    dark_counts: int
    dark_gate_ns: int

    @property
    def can_be_weighed(self) -> bool:
        """Whether enough positions were counted with the shutter open for a fit to mean anything."""
        return len(self.rows) >= FEWEST_POSITIONS

    def to_json(self) -> dict[str, Any]:
        return {
            "rows": [list(row) for row in self.rows],
            "dark_counts": self.dark_counts,
            "dark_gate_ns": self.dark_gate_ns,
        }

    @staticmethod
    def from_json(plain: Mapping[str, Any]) -> Snapshot:
        rows = tuple((r[0], r[1], r[2], r[3]) for r in plain["rows"])
        return Snapshot(rows, plain["dark_counts"], plain["dark_gate_ns"])


class Tally:
    """Grows by one good point at a time."""

    def __init__(self) -> None:
        self._light: dict[tuple[int, int], list[int]] = {}
        self._dark = [0, 0]

    def add(self, *, steps: int, group: int, light: bool, counts: int, gate_ns: int) -> None:
        cell = self._light.setdefault((steps, group), [0, 0]) if light else self._dark
        cell[0] += counts
        cell[1] += gate_ns

    def include(self, other: Tally) -> None:
        """Add all that another tally holds."""
        for key, (counts, gate_ns) in other._light.items():
            cell = self._light.setdefault(key, [0, 0])
            cell[0] += counts
            cell[1] += gate_ns
        self._dark[0] += other._dark[0]
        self._dark[1] += other._dark[1]

    @property
    def can_be_weighed(self) -> bool:
        """Whether enough positions were counted with the shutter open for a fit to mean anything."""
        return len(self._light) >= FEWEST_POSITIONS

    def snapshot(self) -> Snapshot:
        rows = tuple((steps, group, c[0], c[1]) for (steps, group), c in sorted(self._light.items()))
        return Snapshot(rows, self._dark[0], self._dark[1])
