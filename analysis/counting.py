"""Counts and their likelihood: Poisson pulses behind a dead time, or readings with a standard deviation.

A non-paralysable counter (dead time tau) that registers n pulses in a gate T at true rate r was live for
T - n tau. Given that, n behaves as Poisson with mean r (T - n tau):

    log p(n | r, tau) = n log(r L) - r L - log n!,    L = T - n tau

It has the right mean T r/(1 + r tau), the right information T/(r (1 + r tau)), and therefore the
underdispersion var/mean = 1/(1 + r tau)^2 that a plain Poisson fit to corrected counts would miss.

What it leaves out, x = r tau being at most 0.43 where n tau <= LOAD_LIMIT:

- the gate's two ends. A counter that is ready when the gate opens registers x^2/(2 (1 + x)^2) pulses a gate
  more than T r/(1 + r tau), at most 0.045 (renewal theory: Cox 1962, "Renewal Theory", section 4.2);
- a factor T/L that would make the density sum to one. It does not depend on the rate. It draws a dead time
  that is fitted along down by about 1/(r n), n counts a position: nothing beside its uncertainty as long
  as positions hold more counts than there are positions, or a prior holds the dead time;
- a dead time that grows with the load (paralysable). At r tau = 0.1 the two laws differ by 0.5 % of the
  rate, at 0.43 by 7 %: so the limit, and so the check with an attenuator (analysis.linearity).
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
FEWEST_LIVE = 1e-3
"""Share of a gate that counts as live at least, so that a fit on its way through nonsense finds back."""


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
    exposure : (N,) lamp strength during the gates, relative, by a reference detector; None: 1 throughout.
    dispersion : (N,) variance over mean of the counts, their dead time apart; None: 1, plain Poisson.
    pedestal_per_s : the part of the dark rate that stands for read noise (see analysis.readings).
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
    exposure: FloatArray | None = None
    dispersion: FloatArray | None = None
    pedestal_per_s: float = 0.0

    @property
    def groups(self) -> int:
        """Number of dither groups."""
        return int(self.group.max()) + 1 if self.group.size else 0


def registered_rate_per_s(true_rate_per_s: FloatArray, *, dead_time_s: float) -> FloatArray:
    """What a non-paralysable counter registers: r/(1 + r tau), 1/s (Mueller 1973, NIM 112, 47; memory)."""
    return true_rate_per_s / (1.0 + true_rate_per_s * dead_time_s)


def paralysable_rate_per_s(true_rate_per_s: FloatArray, *, dead_time_s: float) -> FloatArray:
    """What a paralysable counter registers: r exp(-r tau), 1/s (same source). For comparison only."""
    made: FloatArray = true_rate_per_s * np.exp(-true_rate_per_s * dead_time_s)
    return made


def true_rate_per_s(registered_per_s: FloatArray, *, dead_time_s: float) -> FloatArray:
    """The inverse of `registered_rate_per_s`; ValueError where the counter would be dead all the time."""
    if np.any(registered_per_s * dead_time_s >= 1.0):
        raise ValueError("registered rate times dead time must stay below 1")
    return registered_per_s / (1.0 - registered_per_s * dead_time_s)


def load(counts: FloatArray, gate_s: FloatArray, *, dead_time_s: float) -> FloatArray:
    """(N,) registered rate times dead time: the share of a gate in which the counter was dead; 0: no gate."""
    made: FloatArray = counts * dead_time_s / np.where(gate_s > 0.0, gate_s, np.inf)
    return made


def refuse_overload(counts: FloatArray, gate_s: FloatArray, *, dead_time_s: float) -> None:
    """ValueError where the correction is not to be trusted: a load above LOAD_LIMIT."""
    worst = float(load(counts, gate_s, dead_time_s=dead_time_s).max(initial=0.0))
    if worst > LOAD_LIMIT:
        raise ValueError(
            f"the counter was dead for {worst:.0%} of a gate; above {LOAD_LIMIT:.0%} its dead time of "
            f"{dead_time_s:.3g} s corrects nothing: less light"
        )


def live_time_s(counts: FloatArray, gate_s: FloatArray, *, dead_time_s: float) -> FloatArray:
    """T - n tau, never less than FEWEST_LIVE of the gate (such data are refused elsewhere: LOAD_LIMIT)."""
    made: FloatArray = np.maximum(gate_s - counts * dead_time_s, FEWEST_LIVE * gate_s)
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
