"""Counts and their likelihood: Poisson pulses behind a dead time, or readings with a standard deviation.

A non-paralysable counter (dead time tau) that registers n pulses in a gate T at true rate r was live for
T - n tau. Given that, n behaves as Poisson with mean r (T - n tau):

    log p(n | r, tau) = n log(r L) - r L - log n!,    L = T - n tau

It has the right mean T r/(1 + r tau), the right information T/(r (1 + r tau)), and therefore the
underdispersion var/mean = 1/(1 + r tau)^2 that a plain Poisson fit to corrected counts would miss. Edge
effects of one dead time per gate are left out: relative 1 part in r T.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

FloatArray: TypeAlias = NDArray[np.float64]
IntArray: TypeAlias = NDArray[np.int64]

LOAD_LIMIT = 0.3
"""Registered rate times dead time above which the correction is not trusted (common practice)."""


@dataclass(frozen=True, slots=True)
class Counts:
    """What was counted at N distinct positions, summed over sweeps.

    wavelength_nm : (N,) ascending, nominal, in the medium of the scale.
    counts : (N,) registered pulses, summed; floats holding integers, any real for recorded spectra.
    gate_s : (N,) summed gate time, s; 1.0 for recorded spectra.
    group : (N,) dither group 0..G-1; each has a gain of its own in the fit (lamp drift between sweeps).
    sigma : (N,) standard deviations of Gaussian readings, or None for Poisson counts.
    dark_counts, dark_gate_s : closed shutter; a gate of 0 means that no dark was measured.
    dead_time_s, dead_time_u_s : non-paralysable dead time and its standard uncertainty.
    """

    wavelength_nm: FloatArray
    counts: FloatArray
    gate_s: FloatArray
    group: IntArray
    sigma: FloatArray | None = None
    dark_counts: float = 0.0
    dark_gate_s: float = 0.0
    dead_time_s: float = 0.0
    dead_time_u_s: float = 0.0

    @property
    def groups(self) -> int:
        """Number of dither groups."""
        return int(self.group.max()) + 1 if self.group.size else 0
