"""The photon counter: dark counts, a non-paralysable dead time, and too much light."""

from __future__ import annotations

import math

import numpy as np
from pydantic import Field

from drivers.settings import StrictModel
from simulators.draw import Draws


class DetectorOptions(StrictModel):
    """`[world.options.detector]`"""

    dark_rate_per_s: float = Field(default=10.0, ge=0.0)
    dark_doubling_k: float = Field(default=6.0, gt=0.0)  # 5 to 7 K (memory)
    dead_time_ns: float = Field(default=30.0, ge=0.0)
    saturation_rate_per_s: float = Field(default=3e6, gt=0.0)  # true rate from which a gate is flagged
    trip_rate_per_s: float = Field(default=8e6, gt=0.0)  # true rate at which the supply trips
    afterglow_factor: float = Field(default=5.0, ge=0.0)  # dark raised by this many times after over-light
    afterglow_s: float = Field(default=600.0, gt=0.0)


def registered(draw: np.random.Generator, *, rate_per_s: float, gate_s: float, dead_time_s: float) -> int:
    """How many of the pulses of a Poisson stream a non-paralysable counter registers in one gate.

    Exact, for a counter that is ready when the gate opens. Count time only while the counter is ready:
    there the registered pulses are a plain Poisson process G1 < G2 < ..., and the nth happens at
    Gn + (n - 1) tau. So pulse n is registered when Gn <= T - (n - 1) tau. All candidates are uniform in the
    time that is left, which lets whole batches be decided by one binomial draw: with m registered and R
    candidates left, none beyond T - m tau can count, and all before (T - m tau) - R tau do.
    """
    low, high = 0.0, gate_s
    certain = 0
    left = int(draw.poisson(rate_per_s * gate_s))
    if dead_time_s == 0.0:
        return left
    while left:
        sure_until = high - left * dead_time_s
        if sure_until <= low:
            break
        taken = int(draw.binomial(left, (sure_until - low) / (high - low)))
        certain += taken
        left -= taken
        low = sure_until
        new_high = max(gate_s - certain * dead_time_s, low)  # max: against rounding
        left = int(draw.binomial(left, min(1.0, (new_high - low) / (high - low)))) if left else 0
        high = new_high
    if not left:
        return certain
    ready_s = np.sort(draw.uniform(low, high, left))
    return certain + int(np.count_nonzero(ready_s <= gate_s - (certain + np.arange(left)) * dead_time_s))


class Counter:
    """The counter with its multiplier; times in monotonic ns."""

    def __init__(self, options: DetectorOptions, draws: Draws) -> None:
        self.options = options
        self._draws = draws
        self._tripped_ns: int | None = None

    def dark_rate_per_s(self, now_ns: int, warmer_k: float) -> float:
        """Doubles every few K, and stays raised for minutes after over-light."""
        rate = self.options.dark_rate_per_s * math.pow(2.0, warmer_k / self.options.dark_doubling_k)
        if self._tripped_ns is not None:
            since_s = (now_ns - self._tripped_ns) * 1e-9
            rate *= 1.0 + self.options.afterglow_factor * math.exp(-since_s / self.options.afterglow_s)
        return rate

    def is_too_bright(self, rate_per_s: float) -> bool:
        return rate_per_s > self.options.trip_rate_per_s

    def trip(self, now_ns: int) -> None:
        self._tripped_ns = now_ns

    def count(self, *, rate_per_s: float, gate_s: float) -> tuple[int, tuple[str, ...]]:
        """Counts and flags of one gate at a true mean rate, dark included.

        The mean is enough: a Poisson stream's total depends on nothing else, and the dead time's second
        order is below what a step's ringing could ever change.
        """
        counts = registered(
            self._draws.next_event(),
            rate_per_s=rate_per_s,
            gate_s=gate_s,
            dead_time_s=self.options.dead_time_ns * 1e-9,
        )
        return counts, ("saturated",) if rate_per_s > self.options.saturation_rate_per_s else ()
