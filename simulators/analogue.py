"""A multiplier read as a current: shot noise, an offset, and a range that ends."""

from __future__ import annotations

import math
from collections.abc import Iterator

from pydantic import Field

from drivers.settings import StrictModel
from simulators.draw import Draws

OVERLOAD_A = 9.9e37
"""What the reading says when the amplifier is driven beyond its range (common practice)."""


class AnalogueOptions(StrictModel):
    """`[world.options.analogue]`: the same tube as the counter's, its current read by an amplifier.

    Dark rate, afterglow and the rate at which the supply trips are those of `[world.options.detector]`.
    """

    charge_c: float = Field(default=1.6e-13, gt=0.0)  # that one photoelectron brings on average
    excess_factor: float = Field(default=1.2, ge=1.0, le=10.0)  # of the variance: the gain itself is noisy
    read_noise_a: float = Field(default=1e-12, ge=0.0)  # standard deviation of a reading over 1 s
    offset_a: float = 0.0
    range_a: float = Field(default=1e-6, gt=0.0)  # a larger current is clipped there
    overload_a: float = Field(default=2e-6, gt=0.0)  # from here the reading means nothing

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.overload_a < self.range_a:
            yield "overload_a", f"must not be below range_a = {self.range_a:g}"


class Ammeter:
    """Reads the tube's mean current over a gate."""

    def __init__(self, options: AnalogueOptions, draws: Draws) -> None:
        self.options = options
        self._draws = draws

    def read(self, *, rate_per_s: float, gate_s: float) -> tuple[float, tuple[str, ...]]:
        """Mean current (A) and flags at a true rate of photoelectrons, dark included.

        Each photoelectron's charge scatters by itself, with the relative variance excess_factor - 1; the
        amplifier's noise is white, so it falls as the square root of the time."""
        o = self.options
        draw = self._draws.next_event()
        electrons = int(draw.poisson(rate_per_s * gate_s))
        spread = math.sqrt(electrons * (o.excess_factor - 1.0)) * float(draw.standard_normal())
        current_a = o.offset_a + o.charge_c * (electrons + spread) / gate_s
        current_a += o.read_noise_a / math.sqrt(gate_s) * float(draw.standard_normal())
        if current_a >= o.overload_a:
            return OVERLOAD_A, ("overload",)
        if current_a > o.range_a:
            return o.range_a, ("clipped",)
        return current_a, ()
