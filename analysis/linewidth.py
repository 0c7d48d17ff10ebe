"""How wide one line is recorded: slits, blur, diffraction and the line itself folded together."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np
import numpy.typing as npt

__all__ = ["SINC2_FWHM", "expected_fwhm_nm"]

FloatArray = npt.NDArray[np.float64]

SINC2_FWHM = 0.885_892_941_378_904_7
"""Full width at half maximum of (sin pi x / pi x)^2."""

# Gauss-Legendre nodes of one panel: 20 of them meet a Voigt profile over its own half width, and over each
# doubling of the distance from its centre, to 1e-12; and two periods of a wave to better.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(20)

_FINEST = 1e-3
"""Diffraction narrower than this fraction of the widest box goes in as a Gaussian in quadrature."""


def expected_fwhm_nm(
    *,
    box_widths_nm: Sequence[float],
    gaussian_fwhm_nm: float,
    lorentzian_fwhm_nm: float = 0.0,
    diffraction_fwhm_nm: float = 0.0,
) -> float:
    """FWHM, nm, of box * box * ... * Gaussian * Lorentzian * sinc^2 (centred, areas one; * is convolution).

    The boxes (two slits; what a concave mount's blur leaves) are given by their full widths, diffraction by
    the FWHM of its sinc^2; any width may be 0, and is then absent. Two boxes and a Voigt line are evaluated
    by quadrature on panels that refine towards the line's centre, whatever the ratio of the widths: good to
    1e-10 of itself. With diffraction or a third box the profile is summed from its Fourier transform, in
    which sinc^2 is a triangle with a definite end: good to 1e-6 (diffraction below 1/1000 of the widest box
    is taken for a Gaussian, which costs less than 1e-3). Solved by bisection. ValueError for negative widths
    or when all are zero.
    """
    for value in (*box_widths_nm, gaussian_fwhm_nm, lorentzian_fwhm_nm, diffraction_fwhm_nm):
        if not (value >= 0.0 and math.isfinite(value)):
            raise ValueError(f"width {value!r} nm; allowed: zero or positive, finite")
    boxes_nm = sorted((width for width in box_widths_nm if width > 0.0), reverse=True)
    widest_nm = boxes_nm[0] if boxes_nm else 0.0
    if diffraction_fwhm_nm < _FINEST * widest_nm:
        gaussian_fwhm_nm = math.hypot(gaussian_fwhm_nm, diffraction_fwhm_nm)
        diffraction_fwhm_nm = 0.0
    lines_nm = gaussian_fwhm_nm + lorentzian_fwhm_nm + diffraction_fwhm_nm
    if lines_nm == 0.0 and not boxes_nm:
        raise ValueError("all widths are zero; at least one must be positive")
    if lines_nm == 0.0 and len(boxes_nm) <= 2:
        return widest_nm  # a trapezoid is at half its height half the wider width from its centre

    if diffraction_fwhm_nm == 0.0 and len(boxes_nm) <= 2:
        height = _by_panels(boxes_nm, gaussian_fwhm_nm, lorentzian_fwhm_nm)
    else:
        height = _by_waves(boxes_nm, gaussian_fwhm_nm, lorentzian_fwhm_nm, diffraction_fwhm_nm)
    half = 0.5 * height(0.0)
    inside, outside = 0.0, 0.5 * sum(boxes_nm) + lines_nm
    for _ in range(60):
        middle = 0.5 * (inside + outside)
        if height(middle) > half:
            inside = middle
        else:
            outside = middle
    return inside + outside


def _by_panels(
    boxes_nm: Sequence[float], gaussian_fwhm_nm: float, lorentzian_fwhm_nm: float
) -> Callable[[float], float]:
    """Height of a Voigt line seen through at most two boxes, against the distance from its centre."""
    from scipy.special import voigt_profile

    wide_nm, narrow_nm = [*boxes_nm, 0.0, 0.0][:2]
    sigma_nm = gaussian_fwhm_nm / math.sqrt(8.0 * math.log(2.0))
    gamma_nm = 0.5 * lorentzian_fwhm_nm

    def line(x_nm: FloatArray) -> FloatArray:
        return np.asarray(voigt_profile(x_nm, sigma_nm, gamma_nm))

    core_nm = max(gaussian_fwhm_nm, lorentzian_fwhm_nm)  # the wider of the two smooths the line's core

    def height(x_nm: float) -> float:
        if wide_nm == 0.0:
            return float(line(np.asarray(x_nm)))
        return _through_slits(line, x_nm, narrow_nm, wide_nm, core_nm)

    return height


def _through_slits(
    line: Callable[[FloatArray], FloatArray], x_nm: float, narrow_nm: float, wide_nm: float, core_nm: float
) -> float:
    """The line, seen through the trapezoid of the two boxes, at x from its centre (not normalised)."""
    foot_nm, shoulder_nm = 0.5 * (wide_nm + narrow_nm), 0.5 * (wide_nm - narrow_nm)
    # Panels end at the kinks of the trapezoid and double in size away from the line's centre, which is at x.
    doublings = max(1, math.ceil(math.log2(4.0 * foot_nm / core_nm + 2.0))) + 1
    reach_nm = core_nm * np.concatenate([[0.0], 0.25 * 2.0 ** np.arange(doublings + 2)])
    kinks_nm = [-foot_nm, -shoulder_nm, shoulder_nm, foot_nm]
    edges_nm = np.concatenate([kinks_nm, x_nm - reach_nm, x_nm + reach_nm])
    edges_nm = np.unique(np.clip(edges_nm, -foot_nm, foot_nm))
    half_panel_nm = 0.5 * np.diff(edges_nm)[:, None]
    nodes_nm = (0.5 * (edges_nm[1:] + edges_nm[:-1]))[:, None] + half_panel_nm * _NODES
    if narrow_nm == 0.0:
        slits = np.ones_like(nodes_nm)
    else:
        slits = np.clip((foot_nm - np.abs(nodes_nm)) / narrow_nm, 0.0, 1.0)
    return float(np.sum(slits * line(x_nm - nodes_nm) * half_panel_nm * _WEIGHTS))


def _by_waves(
    boxes_nm: Sequence[float], gaussian_fwhm_nm: float, lorentzian_fwhm_nm: float, diffraction_fwhm_nm: float
) -> Callable[[float], float]:
    """Height of the profile as the integral of its Fourier transform, a product of its parts'.

    A box gives sinc(w f), a Gaussian exp(-2 (pi sigma f)^2), a Lorentzian exp(-pi FWHM f), and the sinc^2 of
    an evenly lit ruled width the triangle 1 - f D, which ends at 1/D with D = FWHM/0.8859.
    """
    widest_nm = max([*boxes_nm, gaussian_fwhm_nm, lorentzian_fwhm_nm, diffraction_fwhm_nm])
    sigma_nm = gaussian_fwhm_nm / math.sqrt(8.0 * math.log(2.0))
    spacing_nm = diffraction_fwhm_nm / SINC2_FWHM
    ends = [1.0 / (_FINEST * widest_nm)]  # three boxes are down to (pi f w)^-3 there
    if spacing_nm > 0.0:
        ends.append(1.0 / spacing_nm)
    if sigma_nm > 0.0:
        ends.append(8.6 / (2.0 * math.pi * sigma_nm))  # exp(-8.6^2/2) is below 1e-16
    if lorentzian_fwhm_nm > 0.0:
        ends.append(37.0 / (math.pi * lorentzian_fwhm_nm))  # exp(-37) likewise
    end = min(ends)
    reach_nm = sum(boxes_nm) + gaussian_fwhm_nm + lorentzian_fwhm_nm + diffraction_fwhm_nm
    panels = 2 + math.ceil(end * reach_nm / 2.0)
    half_panel = 0.5 * end / panels
    frequency = ((2.0 * np.arange(panels) + 1.0)[:, None] * half_panel + half_panel * _NODES).ravel()
    spectrum = np.tile(_WEIGHTS, panels)
    for width_nm in boxes_nm:
        spectrum = spectrum * np.sinc(width_nm * frequency)
    spectrum = spectrum * np.exp(
        -2.0 * (math.pi * sigma_nm * frequency) ** 2 - math.pi * lorentzian_fwhm_nm * frequency
    )
    spectrum = spectrum * (1.0 - spacing_nm * frequency)
    wave = 2.0 * math.pi * frequency
    return lambda x_nm: float(np.sum(spectrum * np.cos(wave * x_nm)))
