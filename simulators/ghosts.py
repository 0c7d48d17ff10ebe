"""Rowland ghosts, by what a periodic error of the ruling does to the waves.

A groove displaced by e along the ruling changes the path of its wave by e P/d, P being the path difference
between neighbours. Displacements of amplitude a with a period of p grooves are a phase swing of 2 pi a m/d in
order m, repeated every p grooves: the light splits into orders m + k/p, in shares that are the squared
Fourier coefficients of exp(i swing sin(x)).
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from simulators.mounts import GratingOptions

_PHASES = 512  # moments of one period; a smooth periodic function is summed to rounding by far fewer


class Ghost(NamedTuple):
    """`order` is where it stands, m + k/p; `fraction` of the whole line's light; k = 0 is the line itself."""

    k: int
    order: float
    fraction: float


def ghosts(options: GratingOptions, order: int) -> list[Ghost]:
    """The line in one order and the ghosts around it. Without a ruling error, the line alone."""
    error = options.ghosts
    if error is None:
        return [Ghost(0, float(order), 1.0)]
    swing_rad = 2.0 * math.pi * error.amplitude_nm * order * options.groove_density_per_mm * 1e-6
    phase = 2.0 * math.pi * np.arange(_PHASES) / _PHASES
    wave = np.exp(1j * swing_rad * np.sin(phase))
    return [
        Ghost(
            k,
            order + k / error.grooves_per_period,
            float(np.abs(np.mean(wave * np.exp(-1j * k * phase))) ** 2),
        )
        for k in sorted(range(-error.highest, error.highest + 1), key=abs)
    ]
