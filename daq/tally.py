"""Counts summed per drive position: what every look needs of the points so far, however many they are.

Everything in it is an integer, so that the sums do not depend on the order of the points.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.dark import is_stable
from analysis.readings import AnalogueLaw
from daq.records import Body

FEWEST_POSITIONS = 12
"""A pair on a sloping background has eight parameters; below a dozen positions nothing is weighed."""

SETTLING = -1
"""The number of the sweep that the dark dwells before the first sweep of a session belong to."""

KEPT_UNSETTLED = 3
"""Of darks that have not settled in the time they were given, this many of the last are taken."""

HARMLESS_FALL_PER_S = 20.0
"""A fall of the dark by this rate may go unseen before the sweeps: each sweep takes a dark of its own, and
what is as slow as that is seen by all of them together."""


def dark_events(readings: Sequence[tuple[int, int]], law: AnalogueLaw | None) -> list[tuple[float, float]]:
    """(events, gate in s) of dark readings (counts, gate_ns): counts are events, charges are made so."""
    counts = np.array([reading[0] for reading in readings], dtype=np.float64)
    gate_s = np.array([reading[1] for reading in readings], dtype=np.float64) * 1e-9
    if law is not None:
        counts = np.maximum(law.events(counts, gate_s), 0.0)
    return list(zip(counts.tolist(), gate_s.tolist(), strict=True))


@dataclass(frozen=True, slots=True)
class Snapshot:
    """The tally at one moment.

    rows : (steps, group, counts, gate_ns, reference counts) of the light, by steps and group; the reference
    is 0 throughout on a bench without one.
    """

    rows: tuple[tuple[int, int, int, int, int], ...]
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
        rows = tuple((r[0], r[1], r[2], r[3], r[4]) for r in plain["rows"])
        return Snapshot(rows, plain["dark_counts"], plain["dark_gate_ns"])


class Tally:
    """Grows by one good point at a time.

    Dark dwells before the first sweep of a session are readings of one quantity that may still decay, as it
    does for minutes after too much light: those before it has settled are recorded, but not summed.
    """

    def __init__(self, law: AnalogueLaw | None = None, *, dark_horizon_s: float = 0.0) -> None:
        """law : of an analogue detector, whose dark readings are judged as events. dark_horizon_s : how far
        ahead a settled dark must hold: 0 where every sweep takes a dark of its own, far after over-light."""
        self._law = law
        self._dark_horizon_s = dark_horizon_s
        self._light: dict[tuple[int, int], list[int]] = {}
        self._dark = [0, 0]
        self._readings: list[tuple[int, int]] = []
        self._kept = 0
        self.dark_is_settled = False

    def begin_session(self) -> None:
        """The bench was left alone meanwhile: the dark has to settle anew."""
        self._sum(self._dark, self._settled_sums())
        self._readings = []
        self._kept = 0
        self.dark_is_settled = False

    def add(
        self, *, steps: int, group: int, light: bool, counts: int, gate_ns: int, reference_counts: int = 0
    ) -> None:
        if light:
            self._sum(self._light.setdefault((steps, group), [0, 0, 0]), (counts, gate_ns, reference_counts))
        else:
            self._sum(self._dark, (counts, gate_ns))

    def add_point(self, body: Body) -> None:
        """Add a point's record."""
        if body["sweep"] == SETTLING:
            self._readings.append((body["counts"], body["gate_ns"]))
            kept = self._stable_dwells()
            self.dark_is_settled = kept is not None
            self._kept = min(KEPT_UNSETTLED, len(self._readings)) if kept is None else kept
            return
        self.add(
            steps=body["steps"],
            group=body["group"],
            light=body["light"],
            counts=body["counts"],
            gate_ns=body["gate_ns"],
            reference_counts=body.get("reference_counts", 0),
        )

    def include(self, other: Tally) -> None:
        """Add all that another tally holds."""
        for key, sums in other._light.items():
            self._sum(self._light.setdefault(key, [0, 0, 0]), sums)
        self._sum(self._dark, other._dark)

    def _stable_dwells(self) -> int | None:
        events = dark_events(self._readings, self._law)
        if self._dark_horizon_s > 0.0:
            return is_stable(events, horizon_s=self._dark_horizon_s)
        return is_stable(events, horizon_s=0.0, largest_fall=1.0, harmless_per_s=HARMLESS_FALL_PER_S)

    def _settled_sums(self) -> tuple[int, int]:
        kept = self._readings[len(self._readings) - self._kept :]
        return sum(counts for counts, _ in kept), sum(gate_ns for _, gate_ns in kept)

    @staticmethod
    def _sum(cell: list[int], more: tuple[int, ...] | list[int]) -> None:
        for place, value in enumerate(more):
            cell[place] += value

    @property
    def can_be_weighed(self) -> bool:
        """Whether enough positions were counted with the shutter open for a fit to mean anything."""
        return len(self._light) >= FEWEST_POSITIONS

    def snapshot(self) -> Snapshot:
        rows = tuple((*key, c[0], c[1], c[2]) for key, c in sorted(self._light.items()))
        counts, gate_ns = self._settled_sums()
        return Snapshot(rows, self._dark[0] + counts, self._dark[1] + gate_ns)
