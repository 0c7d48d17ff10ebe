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


def registered_rate_per_s(true_rate_per_s: FloatArray, *, dead_time_s: float) -> FloatArray:
    """What a non-paralysable counter registers: r/(1 + r tau), 1/s (textbook)."""
    return true_rate_per_s / (1.0 + true_rate_per_s * dead_time_s)


def true_rate_per_s(registered_per_s: FloatArray, *, dead_time_s: float) -> FloatArray:
    """The inverse; ValueError where the counter would have been dead all the time."""
    if np.any(registered_per_s * dead_time_s >= 1.0):
        raise ValueError("registered rate times dead time must stay below 1")
    return registered_per_s / (1.0 - registered_per_s * dead_time_s)


def live_time_s(counts: FloatArray, gate_s: FloatArray, *, dead_time_s: float) -> FloatArray:
    """T - n tau, never less than a thousandth of the gate (such data are refused elsewhere: LOAD_LIMIT)."""
    made: FloatArray = np.maximum(gate_s - counts * dead_time_s, 1e-3 * gate_s)
    return made


def deviance(data: FloatArray, mean: FloatArray, sigma: FloatArray | None) -> float:
    """Twice the log-likelihood ratio of the saturated model to this one; chi square where sigma is given.

    data, mean, sigma : (N,). Poisson with mean = rate times live time covers the dead time: log L does not
    depend on the rate.
    """
    if sigma is not None:
        return float(np.sum(((data - mean) / sigma) ** 2))
    counted = data > 0.0
    logs = np.zeros(data.size)
    logs[counted] = data[counted] * np.log(data[counted] / mean[counted])
    return float(2.0 * np.sum(mean - data + logs))
