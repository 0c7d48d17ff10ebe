"""A self-reversed line: a source whose cool outer layer takes out the middle of what its core emits.

Emitted is a Voigt profile V, let through is exp(-tau g) with an absorber g that is a Gaussian of height 1,
width q s and shift d s (Cowan and Dieke 1948, Rev. Mod. Phys. 20, 418, on self-absorption in a layer of its
own). The exponential is expanded in its power series. Its first term is V itself; in the others V counts only
where g is, in its middle, and is taken there as the Gaussian B N(x; 0, s^2) of the same height and curvature.
A Gaussian times the k-th power of a Gaussian is a Gaussian again,

    N(x; 0, s^2) (-tau g)^k / k! = a_k N(x - m_k; s_k^2),     s_k = s q / sqrt(q^2 + k),
    m_k = s d k / (q^2 + k),     a_k = (-tau)^k / k!  q / sqrt(q^2 + k)  exp(-k d^2 / (2 (q^2 + k)))

so that what the layer takes is a finite sum of Gaussians, and what two slits make of a Gaussian is closed.
Where V is a Gaussian the sum is exact.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from analysis.counting import FloatArray
from analysis.profile import NARROW, shape_modes

HIGHEST_DEPTH = 6.0
"""Optical depth of the layer; beyond it the middle is black and a deeper one looks the same."""
NARROWEST, WIDEST = 0.2, 1.0
"""Absorber over emitter width: a cooler layer is never the wider one."""
FURTHEST_SHIFT = 0.5
"""Shift of the absorber in emitter widths, either way."""
NAMES = ("reversal_depth", "absorber_width", "absorber_shift")
"""tau, q and d."""
_MOST_TERMS = 40
LEFT_OUT = 1e-8
"""The power series ends where its terms fall below this."""


@dataclass(frozen=True, slots=True)
class Terms:
    """What the layer takes: weights, offsets and widths (K,) of the Gaussians from k = 1 on, the latter two
    in units of s, and their derivatives in tau, q and d, (3, K)."""

    weight: FloatArray
    offset: FloatArray
    width: FloatArray
    d_weight: FloatArray
    d_offset: FloatArray
    d_width: FloatArray


def terms(depth: float, width: float, shift: float) -> Terms:
    """The power series at optical depth `depth`, with absorber width and shift in emitter widths."""
    k = np.arange(1.0, _MOST_TERMS)
    below = np.cumprod(-depth / k)
    # d/dtau of (-tau)^k/k! is minus the term before
    d_below = -np.concatenate([[1.0], below[:-1]])
    count = int(np.sum(np.abs(d_below) > LEFT_OUT))
    k, below, d_below = k[:count], below[:count], d_below[:count]
    q2k = width * width + k
    rest = width / np.sqrt(q2k) * np.exp(-0.5 * k * shift * shift / q2k)
    weight = below * rest
    zero = np.zeros(k.size)
    by_width = weight * (k / (width * q2k) + k * shift * shift * width / q2k**2)
    return Terms(
        weight=weight,
        offset=shift * k / q2k,
        width=width / np.sqrt(q2k),
        d_weight=np.stack([d_below * rest, by_width, -weight * k * shift / q2k]),
        d_offset=np.stack([zero, -2.0 * width * shift * k / q2k**2, k / q2k]),
        d_width=np.stack([zero, k / q2k**1.5, zero]),
    )


@dataclass(frozen=True, slots=True)
class Bells:
    """Gaussians of area 1 seen through the slits, and derivatives in offset and width, all of one shape."""

    value: FloatArray
    d_offset: FloatArray
    d_width: FloatArray


def bells(offset_nm: FloatArray, width_nm: FloatArray, box_widths_nm: tuple[float, float]) -> Bells:
    """Gaussians (standard deviation `width_nm`, broadcast with the offsets) seen through two boxes.

    The box average is a difference of antiderivatives, N, Phi and x Phi + s^2 N; a box narrow against the
    narrowest Gaussian would cancel there and is counted into the Gaussian's variance instead.
    """
    narrow = [box for box in box_widths_nm if box < 0.1 * NARROW * float(width_nm.min())]
    boxes = [box for box in box_widths_nm if box not in narrow]
    s = np.sqrt(width_nm**2 + sum(box**2 for box in narrow) / 12.0)
    places, shares = np.zeros(1), np.ones(1)
    for box in boxes:
        places = (places[:, None] + box * np.array([-0.5, 0.5])).ravel()
        shares = (shares[:, None] * np.array([-1.0, 1.0]) / box).ravel()
    if len(boxes) == 2 and boxes[0] == boxes[1]:
        # a triangle: the two middle terms are one
        places, shares = places[[0, 1, 3]], shares[[0, 1, 3]] * np.array([1.0, 2.0, 1.0])
    value, d_offset, curvature = (np.zeros(np.broadcast_shapes(offset_nm.shape, s.shape)) for _ in range(3))
    for place, share in zip(places, shares, strict=True):
        levels = _levels(offset_nm + place, s, len(boxes))
        value += share * levels[0]
        d_offset += share * levels[1]
        curvature += share * levels[2]
    # heat equation: d/ds of a Gaussian is s times its second derivative
    return Bells(value, d_offset, width_nm * curvature)


def _levels(x: FloatArray, s: FloatArray, order: int) -> list[FloatArray]:
    """Antiderivative number `order` of a Gaussian and the two levels below it."""
    from scipy.special import ndtr

    u = x / s
    bell = np.exp(-0.5 * u * u) / (s * np.sqrt(2.0 * np.pi))
    if order == 0:
        return [bell, -u / s * bell, (u * u - 1.0) / s**2 * bell]
    step = ndtr(u)
    if order == 1:
        return [step, bell, -u / s * bell]
    return [x * step + s * s * bell, step, bell]


@dataclass(frozen=True, slots=True)
class _Core:
    """The middle of a Voigt profile as B N(x; 0, s^2): B and s, and their derivatives in sigma and gamma."""

    share: float
    width_nm: float
    d_share: tuple[float, float]
    d_width: tuple[float, float]


def _core(sigma: float, gamma: float) -> _Core:
    """From V(0) = erfcx(y)/(sigma sqrt(2 pi)), y = gamma/(sigma sqrt 2); V is harmonic: V'' = -d2V/dgamma2"""
    from scipy.special import erfcx

    rho = gamma / sigma
    y = rho / _ROOT2
    e = float(erfcx(y))
    e1 = 2.0 * y * e - 2.0 / np.sqrt(np.pi)
    e2 = 2.0 * e + 2.0 * y * e1
    e3 = 4.0 * e1 + 2.0 * y * e2
    # height and its derivatives in rho, for sigma = 1, without the factor 1/sqrt(2 pi) that B has not
    h, h1, h2, h3 = e, e1 / _ROOT2, e2 / 2.0, e3 / (2.0 * _ROOT2)
    wide = float(np.sqrt(h / h2))
    by_rho = 0.5 * wide * (h1 / h - h3 / h2)
    share, share_by_rho = h * wide, h1 * wide + h * by_rho
    return _Core(
        share=share,
        width_nm=sigma * wide,
        d_share=(-rho * share_by_rho / sigma, share_by_rho / sigma),
        d_width=(wide - rho * by_rho, by_rho),
    )


_ROOT2 = float(np.sqrt(2.0))


@dataclass(frozen=True, slots=True)
class Taken:
    """What the layer takes from a line of area 1 (negative), 1/nm, and derivatives, 1/nm^2; d_reversal
    (3, ...) in depth, width and shift; modes (0 or 2, ...)."""

    value: FloatArray
    d_offset: FloatArray
    d_sigma: FloatArray
    d_gamma: FloatArray
    d_reversal: FloatArray
    modes: FloatArray


def taken_by_layer(
    offset_nm: FloatArray,
    *,
    sigma_nm: float,
    gamma_nm: float,
    reversal: FloatArray,
    box_widths_nm: tuple[float, float],
    mode_shares: tuple[float, float] | None = None,
) -> Taken:
    """Seen through two boxes, at offsets of any shape from the emitter's centre; to be added to the line.

    sigma_nm, gamma_nm : of the emitter. reversal : (3,) optical depth, absorber width and shift in widths of
    the emitter's middle. mode_shares : coefficients of the instrument's skewness and kurtosis modes, which
    every Gaussian of the sum carries; None: no modes.
    """
    made, core = terms(*reversal.tolist()), _core(sigma_nm, gamma_nm)
    axes = (slice(None),) + (None,) * np.ndim(offset_nm)
    width = (core.width_nm * made.width)[axes]
    offset = np.asarray(offset_nm, dtype=np.float64) - (core.width_nm * made.offset)[axes]
    seen = bells(offset, width, box_widths_nm)
    value, d_offset, d_width = seen.value, seen.d_offset, seen.d_width
    modes = np.empty((0, *np.shape(offset_nm)))
    if mode_shares is not None:
        spread = np.sqrt(width**2 + sum(box**2 for box in box_widths_nm) / 12.0)
        both = shape_modes(offset, width_nm=spread)
        shares = np.array(mode_shares)
        value = value + np.tensordot(shares, both.value, 1)
        d_offset = d_offset + np.tensordot(shares, both.d_offset, 1)
        d_width = d_width + np.tensordot(shares, both.d_width, 1) * (width / spread)
        modes = core.share * np.tensordot(both.value, made.weight, (1, 0))
    # sums over the Gaussians: one product with the stacked weights
    by_value = np.tensordot(np.vstack([made.weight, made.d_weight]), value, 1)
    by_offset = np.tensordot(
        np.vstack([made.weight, made.weight * made.offset, made.weight * made.d_offset]), d_offset, 1
    )
    by_width = np.tensordot(np.vstack([made.weight * made.width, made.weight * made.d_width]), d_width, 1)
    in_width = by_width[0] - by_offset[1]
    in_reversal = by_value[1:] + core.width_nm * (by_width[1:] - by_offset[2:])
    in_sigma, in_gamma = (
        d_share * by_value[0] + core.share * d_core * in_width
        for d_share, d_core in zip(core.d_share, core.d_width, strict=True)
    )
    share = core.share
    return Taken(share * by_value[0], share * by_offset[0], in_sigma, in_gamma, share * in_reversal, modes)
