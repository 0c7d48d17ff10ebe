"""From what was recorded to `Counts`: pulses, photocurrents, and a reference detector that sees the lamp.

**Photocurrents.** A reading I over a gate t has the variance (a + g I)/t: read noise a, A^2 s, and shot
noise g, C (elementary charge, gain and excess noise in one). So a charge Q = I t has the variance a t + g Q,
and with

    n = Q/g + p t,     p = a/g^2

n has its variance equal to its mean: read noise is a dark rate of p events per s that light and closed
shutter have in common (Snyder, Helstrom, Lanterman, Faisal, White 1995, J. Opt. Soc. Am. A 12, 272: a Poisson
signal with Gaussian read noise, shifted by the noise's variance, is Poisson to good accuracy). n goes into
the same likelihood as pulses do. Sums of readings are n again, because mean and variance add. The first two
cumulants are exact; the third is that of shot noise throughout, where read noise has none: a skewness of at
most 1/sqrt(p t) too much. The law is trusted where a sum holds FEWEST_EVENTS or more. Recording Q in whole
units of charge q adds q^2/12 to the variance of a reading: q should be below the read noise of the shortest.

**Reference.** It sees the lamp past the monochromator, over the same gates. With M corrected reference counts
where M_0 would be average, the exposure is e = M/M_0 and the mean of the signal counts is e s + b. The
residual n - (e s + b) carries the noise of e too: its variance is

    (s + b) phi,     phi = 1 + s^2 v/(s + b),     v = var(M)/M^2     (error propagation)

and 1 + n/M where neither sees a background. That is exact for the best estimate: given n + M, n is binomial
with odds lambda, and its score, (n - lambda M)/(lambda (1 + lambda)), is that of quasi-Poisson counts with
phi = 1 + lambda (conditional test of two Poisson means: Przyborowski and Wilenski 1940, Biometrika 31, 313).
The odds are taken from the neighbouring positions: a position's own n and M would weigh a chance excess of n
down and pull every estimate low by some 1/M.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.counting import (
    LOAD_LIMIT,
    Counts,
    FloatArray,
    IntArray,
    live_time_s,
    load,
)

OVERLOAD_A = 9.9e36
"""SCPI-99, vol. 1, 7.2.1.4-5: 9.9E37 stands for infinity, 9.91E37 for no number; a tenth of it catches both
and instruments that lost a digit."""
FEWEST_EVENTS = 25.0
"""Below it the skewness of n, 1/sqrt(n), is no longer small and the shifted Poisson law only rough."""


@dataclass(frozen=True, slots=True)
class CounterLaw:
    """A pulse counter: non-paralysable dead time and its standard uncertainty, s."""

    dead_time_s: float
    dead_time_u_s: float = 0.0


@dataclass(frozen=True, slots=True)
class AnalogueLaw:
    """A photocurrent: what one recorded count stands for (C), the standard deviation of a reading of 1 s
    with the shutter closed (A), and the variance of a reading times its gate over its current (C)."""

    charge_unit_c: float
    read_noise_a: float
    shot_noise_c: float

    def __post_init__(self) -> None:
        if not (self.charge_unit_c > 0.0 and self.read_noise_a >= 0.0 and self.shot_noise_c > 0.0):
            raise ValueError("charge unit and shot noise must be above 0, the read noise not below it")

    @property
    def pedestal_per_s(self) -> float:
        """Events per second that stand for the read noise."""
        return (self.read_noise_a / self.shot_noise_c) ** 2

    @property
    def counts_per_event(self) -> float:
        """Recorded counts that one event of the shot noise stands for."""
        return self.shot_noise_c / self.charge_unit_c

    def deviation(self, counts: FloatArray, gate_s: FloatArray) -> FloatArray:
        """(N,) standard deviation of recorded counts, of one event at least: the law at what was read, where
        that is below zero at no light."""
        events = self.pedestal_per_s * gate_s + np.maximum(counts / self.counts_per_event, 0.0)
        made: FloatArray = self.counts_per_event * np.sqrt(np.maximum(events, 1.0))
        return made

    def recorded_per_s(self, events_per_s: FloatArray) -> FloatArray:
        """(N,) rates of events, pedestal included, as recorded counts per s: the inverse of `events`."""
        made: FloatArray = (events_per_s - self.pedestal_per_s) * self.counts_per_event
        return made

    def events(self, counts: FloatArray, gate_s: FloatArray) -> FloatArray:
        """(N,) recorded counts as events whose variance is their mean, pedestal included; may be negative."""
        made: FloatArray = counts * (self.charge_unit_c / self.shot_noise_c) + self.pedestal_per_s * gate_s
        return made


@dataclass(frozen=True, slots=True)
class ReferenceLaw:
    """A counter that sees the lamp past monochromator and shutter: dead time, s, and dark rate, 1/s."""

    dead_time_s: float
    dark_rate_per_s: float


@dataclass(frozen=True, slots=True)
class Sums:
    """Integer sums of all good readings at N positions.

    wavelength_nm, group : (N,) ascending, and the dither group. counts, gate_s : (N,) recorded counts and
    gate time, s; a position not visited yet has none. reference_counts : (N,) of the same gates, or None.
    dark_counts, dark_gate_s : closed shutter, all dwells together.
    """

    wavelength_nm: FloatArray
    group: IntArray
    counts: IntArray
    gate_s: FloatArray
    dark_counts: int = 0
    dark_gate_s: float = 0.0
    reference_counts: IntArray | None = None


@dataclass(frozen=True, slots=True)
class Reduced:
    """What can be fitted, and short codes for what was left out or bent.

    "dead-time": positions dead for more than LOAD_LIMIT of their gates, left out; "reference-dead-time": the
    same of the reference; "no-reference": positions at which it saw no lamp, left out; "clipped": sums of
    currents below what read noise explains, set to 0; "few-events": visited positions with too few events
    for the law of currents.
    """

    counts: Counts
    flags: tuple[str, ...]


def reduce(
    sums: Sums,
    *,
    detector: CounterLaw | AnalogueLaw,
    reference: ReferenceLaw | None = None,
    reference_level_per_s: float | None = None,
) -> Reduced:
    """The sums as `Counts`. ValueError if a reference is stated and its counts are missing, or the reverse.

    Currents come out in events of one shot-noise charge each (`AnalogueLaw.events`), rates in events per s.
    reference_level_per_s : the reference's rate that is exposure 1; None: its mean over these sums. Sums
    that are to be subtracted from each other need a common one: exposure times gate then adds up.
    """
    if (reference is None) != (sums.reference_counts is None):
        raise ValueError("a reference law and reference counts go together: both, or neither")
    flags: list[str] = []
    counts, gate_s = sums.counts.astype(np.float64), sums.gate_s.astype(np.float64)
    dark_counts, pedestal_per_s, tau = float(sums.dark_counts), 0.0, (0.0, 0.0)
    if isinstance(detector, AnalogueLaw):
        counts = detector.events(counts, gate_s)
        dark = detector.events(np.array([dark_counts]), np.array([sums.dark_gate_s]))
        if (counts < 0.0).any() or dark[0] < 0.0:
            flags.append("clipped")
        counts, dark_counts = np.maximum(counts, 0.0), max(float(dark[0]), 0.0)
        if (counts[gate_s > 0.0] < FEWEST_EVENTS).any():
            flags.append("few-events")
        pedestal_per_s = detector.pedestal_per_s
    else:
        tau = (detector.dead_time_s, detector.dead_time_u_s)
        _leave_out(load(counts, gate_s, dead_time_s=tau[0]) > LOAD_LIMIT, counts, gate_s, "dead-time", flags)
    exposure = dispersion = None
    if reference is not None and sums.reference_counts is not None:
        seen = sums.reference_counts.astype(np.float64)
        too_dead = load(seen, sums.gate_s, dead_time_s=reference.dead_time_s) > LOAD_LIMIT
        _leave_out(too_dead, counts, gate_s, "reference-dead-time", flags)
        rate, variance = _reference_rate(seen, sums.gate_s, reference)
        _leave_out((gate_s > 0.0) & (rate <= 0.0), counts, gate_s, "no-reference", flags)
        visited = gate_s > 0.0
        if visited.any():
            level = reference_level_per_s or float(np.average(rate[visited], weights=gate_s[visited]))
            exposure = np.where(visited, rate / level, 1.0)
            dark_per_s = dark_counts / sums.dark_gate_s if sums.dark_gate_s > 0.0 else 0.0
            dispersion = np.ones(counts.size)
            dispersion[visited] = _dispersion(
                counts[visited], gate_s[visited], rate[visited], variance[visited], dark_per_s
            )
    made = Counts(
        wavelength_nm=sums.wavelength_nm,
        counts=counts,
        gate_s=gate_s,
        group=sums.group,
        dark_counts=dark_counts,
        dark_gate_s=sums.dark_gate_s,
        dead_time_s=tau[0],
        dead_time_u_s=tau[1],
        exposure=exposure,
        dispersion=dispersion,
        pedestal_per_s=pedestal_per_s,
    )
    return Reduced(made, tuple(flags))


def reference_level_per_s(sums: Sums, reference: ReferenceLaw) -> float:
    """The reference's mean true rate over all gates, dark taken off, 1/s; ValueError if it saw no lamp."""
    if sums.reference_counts is None:
        raise ValueError("there are no reference counts")
    visited = sums.gate_s > 0.0
    seen, gate_s = sums.reference_counts[visited].astype(np.float64), sums.gate_s[visited]
    rate, _ = _reference_rate(seen, gate_s, reference)
    level = float(np.average(rate, weights=gate_s)) if rate.size else 0.0
    if level <= 0.0:
        raise ValueError("the reference detector saw no lamp: is it lit, and the reference's path open?")
    return level


def check_reading(mean_a: float, *, highest_current_a: float, flags: Iterable[str] = ()) -> tuple[str, ...]:
    """Flags of one reading of current, those of the instrument included, sorted; () is a good one.

    "overload": not finite, or one of SCPI's stand-ins for infinity and no number, which isfinite lets pass.
    "saturated": at or above what the bench allows. "clipped": as far below zero, where no light can take it.
    A flagged reading is recorded and never fitted.
    """
    found = set(flags)
    if not math.isfinite(mean_a) or abs(mean_a) >= OVERLOAD_A:
        found.add("overload")
    elif mean_a >= highest_current_a:
        found.add("saturated")
    elif mean_a <= -highest_current_a:
        found.add("clipped")
    return tuple(sorted(found))


def recorded_counts(mean_a: float, gate_s: float, *, charge_unit_c: float) -> int:
    """A reading's charge in whole units; 0 for a reading that is no number (its flag tells)."""
    if not math.isfinite(mean_a) or abs(mean_a) >= OVERLOAD_A:
        return 0
    return round(mean_a * gate_s / charge_unit_c)


def _leave_out(
    where: NDArray[np.bool_], counts: FloatArray, gate_s: FloatArray, flag: str, flags: list[str]
) -> None:
    """As if not visited: zero counts in zero time."""
    if where.any():
        counts[where] = gate_s[where] = 0.0
        flags.append(flag)


def _reference_rate(seen: FloatArray, gate_s: FloatArray, law: ReferenceLaw) -> tuple[FloatArray, FloatArray]:
    """(N,) true rate less dark and its variance: n/L^2 for n counts in a live time L, since var n = n (L/T)^2
    and d(n/L)/dn = T/L^2; 0 where there was no gate."""
    live = live_time_s(seen, gate_s, dead_time_s=law.dead_time_s)
    live = np.where(gate_s > 0.0, live, np.inf)
    return np.where(gate_s > 0.0, seen / live - law.dark_rate_per_s, 0.0), seen / live**2


def _dispersion(
    counts: FloatArray, gate_s: FloatArray, reference: FloatArray, variance: FloatArray, dark_per_s: float
) -> FloatArray:
    """(N,) phi of visited positions; rates and the reference's variance are those of the positions on both
    sides (its own of one alone)."""

    def beside(summed: FloatArray) -> FloatArray:
        if summed.size == 1:
            return summed
        made = np.zeros(summed.size)
        made[1:] += summed[:-1]
        made[:-1] += summed[1:]
        return made

    time_s = beside(gate_s)
    rate = beside(counts) / time_s
    lamp = beside(reference * gate_s) / time_s
    relative = beside(variance * gate_s**2) / time_s / (lamp**2 * gate_s)
    light = np.maximum(rate - dark_per_s, 0.0)
    made: FloatArray = 1.0 + light**2 * gate_s * relative / np.where(rate > 0.0, rate, 1.0)
    return made
