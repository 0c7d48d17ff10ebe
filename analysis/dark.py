"""Is the dark stable? Repeated dwells behind a closed shutter, judged by trend and by scatter.

After too much light the dark of a multiplier stays raised for minutes to hours and decays (common practice);
with the temperature it drifts through a night. Given the total of K dwells, their counts under a constant
dark are multinomial with shares p_i in proportion to the gates: the rate, which nobody knows, drops out.

- Trend: the score of a rate that changes linearly, S = sum n_i x_i with x_i the middle of dwell i. Its tail
  comes from its exact cumulant generating function, N log sum p_i exp(s x_i), by the saddlepoint formula of
  Lugannani and Rice 1980 (Adv. Appl. Probab. 12, 475, eq. 10): good to a few per cent of the tail itself,
  with the half of the probability of what was seen counted in where N is small.
- Scatter: chi square of the counts against N p_i, on a gamma law with the exact conditional mean K - 1 and
  variance 2 (K - 1) + (sum 1/p_i - K^2 - 2 K + 2)/N (Haldane 1937, Biometrika 29, 133), turned into a normal
  deviate by its cube root (Wilson and Hilferty 1931, PNAS 17, 684).

Currents come as events (analysis.readings.AnalogueLaw), whose variance is their mean too.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np

from analysis.counting import FloatArray

FEWEST_DWELLS = 4
"""Two make a difference, three a line through two of them."""
RISK = 0.01
"""How often a dark that is stable is told not to be, trend and scatter together."""
LARGEST_FALL = 0.5
"""A decay that may still take this much of the rate within the dwells used is no stable dark."""
HARMLESS_PER_S = 1.0
"""A change of the dark by this rate is let go: the fitted background carries it."""
HORIZON_S = 600.0
"""How far ahead a dark is to hold unless the caller says otherwise. Four dwells of 2 s cannot see a decay of
ten minutes: without a horizon, a dark raised sixfold passes after 8 s at 5.9 times its true rate."""
KEPT = 0.8
"""Where dwells do not agree, this share of them is tried next, the latest."""
_NORMAL = NormalDist()


@dataclass(frozen=True, slots=True)
class Drift:
    """How a series of darks changes.

    p_fall, p_rise, p_scatter : chances of at least as much, by chance, in a constant dark.
    change_per_s, change_u_per_s : rate at the end less rate at the beginning, of a straight line through it.
    rate_per_s : over all. is_clear : at the stated risk, one of the three is too improbable.
    """

    p_fall: float
    p_rise: float
    p_scatter: float
    rate_per_s: float
    change_per_s: float
    change_u_per_s: float
    is_clear: bool


def is_stable(
    readings: Sequence[tuple[float, float]],
    *,
    risk: float = RISK,
    largest_fall: float = LARGEST_FALL,
    harmless_per_s: float = HARMLESS_PER_S,
    horizon_s: float = HORIZON_S,
) -> int | None:
    """How many of the last dwells are a stable dark, at least FEWEST_DWELLS; None: go on repeating.

    readings : (counts, gate in s), oldest first, one right after another. The longest run of last dwells is
    taken, in steps of a fifth, that shows neither trend nor scatter at `risk` and that was long enough to
    show a decay: at the same risk, the fall that may go on unseen for `horizon_s` (0: for the dwells
    themselves) is below `largest_fall` of the rate or `harmless_per_s`. What came before is to be discarded.
    ValueError for a gate that is not above 0 or counts below 0.

    A dark of 8 /s takes some 4 min at the defaults, which is for the time after over-light. Before a run
    that measures its dark in every sweep, horizon_s = 0 asks only that the first dwells agree.
    """
    dwells = len(readings)
    while dwells >= FEWEST_DWELLS:
        last = readings[len(readings) - dwells :]
        found = drift(last, risk=risk)
        if found.is_clear:
            dwells = min(dwells - 1, int(KEPT * dwells))
            continue
        hidden = _NORMAL.inv_cdf(1.0 - risk) * found.change_u_per_s - found.change_per_s
        hidden *= max(1.0, horizon_s / sum(gate_s for _, gate_s in last))
        if hidden > max(largest_fall * found.rate_per_s, harmless_per_s):
            return None  # fewer dwells know even less
        return dwells
    return None


def drift(
    readings: Sequence[tuple[float, float]], *, at_s: Sequence[float] | None = None, risk: float = RISK
) -> Drift:
    """Trend and scatter of (counts, gate in s); ValueError as `is_stable`, and below two readings.

    at_s : the middle of each dwell, s, ascending; None: one right after another.
    """
    counts, gates = (np.array([r[k] for r in readings], dtype=np.float64) for k in (0, 1))
    if counts.size < 2:
        raise ValueError("a drift needs at least two dark readings")
    if (gates <= 0.0).any() or (counts < 0.0).any():
        raise ValueError("dark readings need gates above 0 and counts not below it")
    middle = np.cumsum(gates) - 0.5 * gates if at_s is None else np.array(at_s, dtype=np.float64)
    if middle.size != counts.size:
        raise ValueError(f"{counts.size} dark readings, but {middle.size} times")
    total, time_s = float(counts.sum()), float(gates.sum())
    share = gates / time_s
    x = middle - float(share @ middle)
    span = float(np.ptp(middle))
    x = x / span if span > 0.0 else x
    variance = float(share @ x**2)
    p_fall, p_rise = trend_tails(counts, share, x)
    p_scatter = scatter_tail(counts, share)
    rate = total / time_s
    # without a single count the rate is still only known to be below about one count in all the time
    u = math.sqrt(max(total, 1.0) / variance) / time_s if variance > 0.0 else math.inf
    return Drift(
        p_fall=p_fall,
        p_rise=p_rise,
        p_scatter=p_scatter,
        rate_per_s=rate,
        change_per_s=float(counts @ x) / variance / time_s if variance > 0.0 else 0.0,
        change_u_per_s=u,
        is_clear=min(p_fall, p_rise, p_scatter) < risk / 3.0,
    )


def trend_tails(counts: FloatArray, share: FloatArray, x: FloatArray) -> tuple[float, float]:
    """Chances of a score sum n_i x_i as low, and as high, given the total; x (K,) has weighted mean 0."""
    total = float(counts.sum())
    score = float(counts @ x)
    variance = total * float(share @ x**2)
    if total <= 0.0 or variance <= 0.0:
        return 1.0, 1.0
    low, high = total * float(x.min()), total * float(x.max())
    if score <= low * (1.0 - 1e-12):  # everything at one end: no saddlepoint, but an exact chance
        return float(share[np.argmin(x)] ** total), 1.0
    if score >= high * (1.0 - 1e-12):
        return 1.0, float(share[np.argmax(x)] ** total)
    tilt, generated, curvature = _saddlepoint(score / total, share, x)
    w = math.copysign(math.sqrt(max(2.0 * total * (tilt * score / total - generated), 0.0)), tilt)
    u = tilt * math.sqrt(total * curvature)
    if abs(w) < 1e-4:  # the formula is 0/0 at the mean; what remains there is the skewness
        third = total * float(share @ x**3) / variance**1.5
        below = 0.5 + third / (6.0 * math.sqrt(2.0 * math.pi)) + w / math.sqrt(2.0 * math.pi)
    else:
        below = _NORMAL.cdf(w) + _NORMAL.pdf(w) * (1.0 / w - 1.0 / u)
    below = min(max(below, 0.0), 1.0)
    return below, 1.0 - below


def scatter_tail(counts: FloatArray, share: FloatArray) -> float:
    """Chance of a chi square as high given the total, under a constant rate."""
    total = float(counts.sum())
    if total <= 1.0:
        return 1.0
    expected = total * share
    chi2 = float(np.sum((counts - expected) ** 2 / expected))
    mean, variance = chi2_moments(total, share)
    third = variance / (9.0 * mean**2)  # one ninth over the gamma law's shape
    return _NORMAL.cdf(-((chi2 / mean) ** (1.0 / 3.0) - (1.0 - third)) / math.sqrt(third))


def chi2_moments(total: float, share: FloatArray) -> tuple[float, float]:
    """Mean and variance of chi square of multinomial counts against their expectation (Haldane 1937)."""
    dwells = share.size
    more = float(np.sum(1.0 / share)) - dwells**2 - 2.0 * dwells + 2.0
    return dwells - 1.0, 2.0 * (dwells - 1.0) + more / total


def _saddlepoint(target: float, share: FloatArray, x: FloatArray) -> tuple[float, float, float]:
    """s with K'(s) = target for K(s) = log sum p exp(s x), by guarded Newton; and K(s), K''(s)."""
    tilt, low, high = 0.0, -math.inf, math.inf
    for _ in range(100):
        exponent = tilt * x
        shift = float(exponent.max())
        weight = share * np.exp(exponent - shift)
        size = float(weight.sum())
        mean = float(weight @ x) / size
        curvature = float(weight @ x**2) / size - mean**2
        if abs(mean - target) <= 1e-12 * float(np.abs(x).max()):
            break
        low, high = (tilt, high) if mean < target else (low, tilt)
        step = (target - mean) / max(curvature, 1e-300)
        new = tilt + step
        if not low < new < high:
            new = 0.5 * (low + high) if math.isfinite(low + high) else 2.0 * tilt + math.copysign(1.0, step)
        tilt = new
    return tilt, math.log(size) + shift, curvature
