"""The variance law of an analogue detector, from the scatter of repeated readings at the same places.

    var(I) = (a + g I)/t + f^2 I^2

a : read noise, A^2 s; g : shot noise, C; f : what of the lamp's flicker and drift comes between repeats, as a
fraction. The first two are what the bench file wants; the third keeps a restless lamp out of them.
Sample variances of Gaussian readings are gamma distributed about the law with relative variance 2/(m - 1), m
readings each: a generalised linear model with identity link, solved by weights taken at the law (McCullagh
and Nelder 1989, "Generalized Linear Models", chapter 8). A term that comes out negative is zero.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from analysis.counting import FloatArray, IntArray
from analysis.fit import inverse

FEWEST_REPEATS = 20
"""Degrees of freedom in all the repeats: below it, noise is not known to a third."""
_SAME_GATE = 0.01
_LOWEST_SHARE = 1e-3


@dataclass(frozen=True, slots=True)
class VarianceLaw:
    """read_noise_a : standard deviation of a reading of 1 s without light, A. shot_noise_c : C.
    flicker : fraction. Standard uncertainties beside them, 0 for a term that is held at zero. repeats :
    degrees of freedom. reduced_chi2 : scatter of the sample variances about the law over what is expected.
    """

    read_noise_a: float
    read_noise_u_a: float
    shot_noise_c: float
    shot_noise_u_c: float
    flicker: float
    flicker_u: float
    repeats: int
    reduced_chi2: float


def variance_law(cell: IntArray, current_a: FloatArray, gate_s: FloatArray) -> VarianceLaw:
    """From M readings: cell (M,) says which were repeats of one another (same place, same gate, same light).

    Repeats whose gate differs by more than a per cent from their cell's first are left out. ValueError below
    FEWEST_REPEATS degrees of freedom, or if no reading differs from another.
    """
    means, variances, gates, freedom = [], [], [], []
    for name in np.unique(cell):
        here = cell == name
        gate = float(gate_s[here][0])
        here &= np.abs(gate_s - gate) <= _SAME_GATE * gate
        if int(here.sum()) > 1:
            means.append(float(current_a[here].mean()))
            variances.append(float(current_a[here].var(ddof=1)))
            gates.append(gate)
            freedom.append(int(here.sum()) - 1)
    if sum(freedom) < FEWEST_REPEATS or not any(variances):
        raise ValueError(
            f"{sum(freedom)} repeats of readings at the same place; a variance law needs {FEWEST_REPEATS} "
            "that differ: sweep longer"
        )
    seen, nu, t = np.array(variances), np.array(freedom, dtype=np.float64), np.array(gates)
    light = np.maximum(np.array(means), 0.0)
    terms = np.column_stack([1.0 / t, light / t, light**2])
    values, covariance = _solve(terms, seen, nu)
    law = np.maximum(terms @ values, 1e-3 * seen)
    chi2 = float(np.sum(0.5 * nu * (seen / law - 1.0) ** 2))
    free = int(np.count_nonzero(values))
    u = np.sqrt(np.diag(covariance))
    roots = np.sqrt(values)
    root_u = [float(u[k] / (2.0 * roots[k])) if values[k] > 0.0 else 0.0 for k in range(3)]
    return VarianceLaw(
        read_noise_a=float(roots[0]),
        read_noise_u_a=root_u[0],
        shot_noise_c=float(values[1]),
        shot_noise_u_c=float(u[1]),
        flicker=float(roots[2]),
        flicker_u=root_u[2],
        repeats=int(nu.sum()),
        reduced_chi2=chi2 / max(seen.size - free, 1),
    )


def _solve(terms: FloatArray, seen: FloatArray, freedom: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Coefficients (3,), none negative, and their covariance (3, 3)."""
    # a first law of the right size at every strength of light: weights that are wrong by decades lead astray
    darkest = int(np.argmin(terms[:, 1] / terms[:, 0]))
    light = float(terms[:, 1] @ freedom)
    shot = float(seen @ freedom) / light if light > 0.0 else 0.0
    first = terms @ np.array([seen[darkest] / terms[darkest, 0], shot, 0.0])
    lowest = _LOWEST_SHARE * np.maximum(first, float(first[first > 0.0].min()))
    law, free = np.maximum(first, lowest), terms.any(axis=0)
    values, covariance = np.zeros(3), np.zeros((3, 3))
    for _ in range(200):
        used = terms[:, free] * (0.5 * freedom / law**2)[:, None]
        inner = inverse(used.T @ terms[:, free])
        before, values, covariance = values, np.zeros(3), np.zeros((3, 3))
        values[free], covariance[np.ix_(free, free)] = inner @ (used.T @ seen), inner
        law = np.maximum(terms @ values, lowest)
        if not np.allclose(values, before, rtol=1e-9, atol=0.0):
            continue
        if (values >= 0.0).all():
            break
        free = free & (values != values.min())  # held at zero from here on
    return np.maximum(values, 0.0), covariance
