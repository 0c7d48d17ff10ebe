"""Random numbers that depend on who draws and how often, never on what others drew in between.

Every device owns a `Draws`; the n-th event of that device gets a stretch of the Philox counter of its own
(Salmon et al. 2011, "Parallel random numbers: as easy as 1, 2, 3"). So the dark counts of one device stay
the same when another one is asked more often, and a night can be replayed from its seed.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable
from typing import Any

import numpy as np

_EVENT_WORD = 2  # the lower two words of the counter count within an event: 2**130 bytes each


class Draws:
    """The random numbers of one device.

    `seed` is the run's, `device` the device's name, `epoch_ns` the moment its world began: a world that is
    built again later, after a restart, must not repeat the noise of the first.
    """

    def __init__(self, seed: int, device: str, epoch_ns: int = 0) -> None:
        digest = hashlib.blake2b(f"{seed}|{device}|{epoch_ns}".encode(), digest_size=16).digest()
        key = np.frombuffer(digest, dtype="<u8").astype(np.uint64)
        self._bits = np.random.Philox(key=key)
        self._generator = np.random.Generator(self._bits)
        self._state: Any = self._bits.state  # a copy of the fresh state, its buffer empty
        self._counter = self._state["state"]["counter"]
        self._next = 0

    def event(self, number: int) -> np.random.Generator:
        """The generator set to the start of event `number` (>= 0). It is shared: use it before the next."""
        self._counter[:] = 0
        self._counter[_EVENT_WORD] = number
        self._bits.state = self._state
        return self._generator

    def next_event(self) -> np.random.Generator:
        """The generator of the event after the last one that was asked for this way."""
        number = self._next
        self._next += 1
        return self.event(number)


def smooth_drift(draws: Draws, *, rms: float, period_s: float) -> Callable[[float], float]:
    """A slow random function of time with mean 0 and the given rms, the same for the same draws.

    Four sine waves whose periods, around `period_s`, share no multiple, with random phases: smooth, without
    a step anywhere, and computable for any moment without the moments before it. Time in s.
    """
    if rms == 0.0:
        return lambda _t_s: 0.0
    phases = draws.next_event().uniform(0.0, 2.0 * math.pi, 4)
    height = rms / math.sqrt(2.0)  # four waves of variance height**2/2 each make rms**2
    waves = tuple(
        (2.0 * math.pi / (period_s * stretch), float(phase))
        for stretch, phase in zip((0.61803, 1.0, 1.7321, 2.7183), phases, strict=True)
    )

    def drift(t_s: float) -> float:
        return height * sum(math.sin(rate * t_s + phase) for rate, phase in waves)

    return drift
