"""Light that belongs to no line: flat or sloping over a stretch, each stretch by itself."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from analysis.counting import FloatArray, IntArray


class Background(Protocol):
    """Light that belongs to no line, as a rate over position."""

    @property
    def names(self) -> tuple[str, ...]: ...

    @property
    def lower(self) -> tuple[float, ...]: ...

    def evaluate(self, wavelength_nm: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Rate (N,) and its Jacobian (N, number of parameters)."""
        ...


@dataclass(frozen=True, slots=True)
class LinearBackground:
    """Flat, or a slope given by its rates at both ends of the window: never negative if neither is."""

    left_nm: float
    right_nm: float
    sloping: bool
    floor: float = 0.0
    prefix: str = "background"
    names: tuple[str, ...] = field(init=False)
    lower: tuple[float, ...] = field(init=False)

    def __post_init__(self) -> None:
        ends = ("_left_per_s", "_right_per_s") if self.sloping else ("_per_s",)
        object.__setattr__(self, "names", tuple(self.prefix + end for end in ends))
        object.__setattr__(self, "lower", (self.floor,) * len(ends))

    def evaluate(self, wavelength_nm: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        if not self.sloping:
            return np.full(wavelength_nm.size, values[0]), np.ones((wavelength_nm.size, 1))
        span = self.right_nm - self.left_nm
        share = (wavelength_nm - self.left_nm) / (span if span > 0.0 else 1.0)
        basis = np.stack([1.0 - share, share], axis=1)
        return basis @ values, basis


@dataclass(frozen=True, slots=True)
class StretchedBackground:
    """A background of its own for every stretch that is swept: nothing is known of what lies between."""

    windows_nm: tuple[tuple[float, float], ...]
    sloping: bool
    floor: float = 0.0
    parts: tuple[LinearBackground, ...] = field(init=False)
    names: tuple[str, ...] = field(init=False)
    lower: tuple[float, ...] = field(init=False)

    def __post_init__(self) -> None:
        parts = tuple(
            LinearBackground(left, right, self.sloping, self.floor, f"background_{number}")
            for number, (left, right) in enumerate(self.windows_nm, start=1)
        )
        object.__setattr__(self, "parts", parts)
        object.__setattr__(self, "names", tuple(name for part in parts for name in part.names))
        object.__setattr__(self, "lower", tuple(low for part in parts for low in part.lower))

    def evaluate(self, wavelength_nm: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        rate, basis = np.zeros(wavelength_nm.size), np.zeros((wavelength_nm.size, len(self.names)))
        at, first = stretch_of(self.windows_nm, wavelength_nm), 0
        for number, part in enumerate(self.parts):
            mine, last = at == number, first + len(part.names)
            rate[mine], basis[mine, first:last] = part.evaluate(wavelength_nm[mine], values[first:last])
            first = last
        return rate, basis


def stretch_of(windows_nm: Sequence[tuple[float, float]], wavelength_nm: FloatArray) -> IntArray:
    """(N,) which stretch each position belongs to: the one it is in, or the nearest."""
    ends = np.asarray(windows_nm)
    x = np.asarray(wavelength_nm, dtype=np.float64)[:, None]
    made: IntArray = np.argmin(np.maximum(ends[:, 0] - x, x - ends[:, 1]), axis=1).astype(np.int64)
    return made
