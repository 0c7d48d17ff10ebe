"""The reference counter: it looks at the lamp itself, past shutter, filters and monochromator."""

from __future__ import annotations

from pydantic import Field

from drivers.settings import StrictModel
from simulators.detector import registered
from simulators.draw import Draws


class ReferenceOptions(StrictModel):
    """`[world.options.reference]`"""

    rate_per_s: float = Field(default=2e5, ge=0.0)  # true rate from a warm lamp on average
    dark_rate_per_s: float = Field(default=5.0, ge=0.0)
    dead_time_ns: float = Field(default=30.0, ge=0.0)
    noise_fraction: float = Field(default=0.0, ge=0.0, le=0.1)  # rms of one gate, its own


class ReferenceCounter:
    """Counts what the lamp gives at the moment, with noise of its own."""

    def __init__(self, options: ReferenceOptions, draws: Draws) -> None:
        self.options = options
        self._draws = draws

    def count(self, *, gain: float, gate_s: float) -> int:
        """Registered counts for the lamp's mean gain over the gate."""
        o = self.options
        draw = self._draws.next_event()
        own = max(1.0 + o.noise_fraction * float(draw.standard_normal()), 0.0)
        return registered(
            draw,
            rate_per_s=gain * own * o.rate_per_s + o.dark_rate_per_s,
            gate_s=gate_s,
            dead_time_s=o.dead_time_ns * 1e-9,
        )
