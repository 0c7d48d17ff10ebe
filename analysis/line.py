"""One line as it is observed: its components through the slits, with the instrument's shape modes.

A line is a sum of components (hyperfine, isotopes) at fixed offsets from their strength-weighted mean, which
is the line's centre; every component has the width of the line. Without a pattern it is one component.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from analysis.counting import FloatArray
from analysis.profile import FWHM_PER_SIGMA, line_profile, mode_width, shape_modes
from analysis.question import Feature
from analysis.reversal import taken_by_layer


@dataclass(frozen=True, slots=True)
class Shape:
    """Profile and modes together, (L, N) each; modes (2, L, N), d_reversal (0 or 3, L, N).

    Without derivatives only value and modes mean anything.
    """

    value: FloatArray
    d_offset: FloatArray
    d_sigma: FloatArray
    d_gamma: FloatArray
    modes: FloatArray
    d_reversal: FloatArray | None = None


def components(feature: Feature) -> tuple[FloatArray, FloatArray]:
    """Offsets from their strength-weighted mean, nm, and strengths of sum 1, (C,) each."""
    if not feature.pattern:
        return np.zeros(1), np.ones(1)
    offsets, strengths = np.array(feature.pattern, dtype=np.float64).T
    if strengths.min() < 0.0 or not strengths.sum() > 0.0:
        raise ValueError(f"strengths of a pattern must be >= 0 and not all 0, got {strengths.tolist()}")
    shares = strengths / strengths.sum()
    return offsets - shares @ offsets, shares


def bare_line(offset_nm: FloatArray, feature: Feature, *, sigma_nm: float, gamma_nm: float) -> FloatArray:
    """A line of area 1 with its pattern, through the slits, without shape modes; 1/nm."""
    made = np.zeros(np.shape(offset_nm))
    for place, share in zip(*components(feature), strict=True):
        profile = line_profile(
            offset_nm - place,
            sigma_nm=sigma_nm,
            gamma_nm=gamma_nm,
            box_widths_nm=feature.box_widths_nm,
        )
        made += share * profile.value
    return made


def observed_line(
    offset_nm: FloatArray,
    feature: Feature,
    *,
    sigma_nm: float,
    gamma_nm: float,
    mode_shares: tuple[float, float] | None,
    reversal: FloatArray | None = None,
    derivatives: bool = True,
) -> Shape:
    """Lines of area 1 at offsets (L, N).

    mode_shares : coefficients of skewness and kurtosis, None: no modes. reversal : (3,) optical depth, width
    and shift of the absorber; every component is reversed by itself.
    """

    def one(offset: FloatArray) -> Shape:
        emitted = _plain(offset, feature, sigma_nm, gamma_nm, mode_shares, derivatives)
        if reversal is None:
            return emitted
        taken = taken_by_layer(
            offset,
            sigma_nm=sigma_nm,
            gamma_nm=gamma_nm,
            reversal=reversal,
            box_widths_nm=feature.box_widths_nm,
            mode_shares=mode_shares,
        )
        return Shape(
            emitted.value + taken.value,
            emitted.d_offset + taken.d_offset,
            emitted.d_sigma + taken.d_sigma,
            emitted.d_gamma + taken.d_gamma,
            emitted.modes + taken.modes,
            taken.d_reversal,
        )

    if not feature.pattern:
        return one(offset_nm)
    places, shares = components(feature)
    each = one(offset_nm[..., None] - places)
    return Shape(
        each.value @ shares,
        each.d_offset @ shares,
        each.d_sigma @ shares,
        each.d_gamma @ shares,
        each.modes @ shares,
        None if each.d_reversal is None else each.d_reversal @ shares,
    )


def _plain(
    offset_nm: FloatArray,
    feature: Feature,
    sigma_nm: float,
    gamma_nm: float,
    mode_shares: tuple[float, float] | None,
    derivatives: bool,
) -> Shape:
    boxes = feature.box_widths_nm
    profile = line_profile(
        offset_nm, sigma_nm=sigma_nm, gamma_nm=gamma_nm, box_widths_nm=boxes, derivatives=derivatives
    )
    if mode_shares is None:
        none = np.empty((0, *offset_nm.shape))
        return Shape(profile.value, profile.d_offset, profile.d_sigma, profile.d_gamma, none)
    width = mode_width(sigma_nm=sigma_nm, gamma_nm=gamma_nm, box_widths_nm=boxes)
    modes = shape_modes(offset_nm, width_nm=width)
    skewness, kurtosis = mode_shares

    def mixed(part: FloatArray) -> FloatArray:
        made: FloatArray = skewness * part[0] + kurtosis * part[1]
        return made

    value = profile.value + mixed(modes.value)
    if not derivatives:
        return Shape(value, value, value, value, modes.value)
    d_width = mixed(modes.d_width)
    return Shape(
        value=value,
        d_offset=profile.d_offset + mixed(modes.d_offset),
        d_sigma=profile.d_sigma + d_width * (sigma_nm / width),
        d_gamma=profile.d_gamma + d_width * (gamma_nm / width * (2.0 / FWHM_PER_SIGMA) ** 2),
        modes=modes.value,
    )
