"""The shutter between lamp and entrance slit: when it was open, to the nanosecond."""

from __future__ import annotations

from collections import deque

from pydantic import Field

from drivers.settings import StrictModel


class ShutterOptions(StrictModel):
    """`[world.options.shutter]`"""

    travel_s: float = Field(default=0.015, ge=0.0, le=5.0)
    leak_fraction: float = Field(default=0.0, ge=0.0, le=1.0)  # light that passes the closed blade


class ShutterBlade:
    """Closed when the world begins. Remembers the last few changes, as a gate may span one."""

    def __init__(self, options: ShutterOptions) -> None:
        self.options = options
        self._changes: deque[tuple[int, bool]] = deque([(-(1 << 62), False)], maxlen=64)

    @property
    def is_open(self) -> bool:
        return self._changes[-1][1]

    def set(self, is_open: bool, now_ns: int) -> None:
        if is_open != self.is_open:
            self._changes.append((now_ns, is_open))

    def passed_share(self, start_ns: int, end_ns: int) -> float:
        """The share of the light that came through between two moments."""
        leak = self.options.leak_fraction
        if self._changes[-1][0] <= start_ns:
            return 1.0 if self.is_open else leak
        open_ns, until_ns = 0, end_ns
        for since_ns, was_open in reversed(self._changes):
            since_ns = max(since_ns, start_ns)
            if was_open and until_ns > since_ns:
                open_ns += until_ns - since_ns
            until_ns = min(until_ns, since_ns)
            if since_ns == start_ns:
                break
        share = open_ns / (end_ns - start_ns)
        return share + leak * (1.0 - share)
