"""How sharp a bench is, and how sharp it has to be: resolving power, always with the source width it
assumes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from analysis.linewidth import expected_fwhm_nm
from analysis.mounts import Mount

__all__ = ["ResolvingPower", "needed_resolving_power", "resolving_power"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ResolvingPower:
    """lambda over FWHM of one line at `wavelength_nm`; infinite where a part leaves no width.

    observed : of a line of the source width, as recorded, with its FWHM `observed_fwhm_nm`.
    instrument : of a line without a width of its own: slits, diffraction and blur together.
    slits, diffraction, blur : of each alone (the wider slit image; sinc^2, so |m| N/0.8859; the box).
    source_gaussian_fwhm_nm, source_lorentzian_fwhm_nm : the source line that `observed` assumes.
    """

    wavelength_nm: float
    source_gaussian_fwhm_nm: float
    source_lorentzian_fwhm_nm: float
    observed_fwhm_nm: float
    observed: float
    instrument: float
    slits: float
    diffraction: float
    blur: float


def resolving_power(
    mount: Mount,
    *,
    wavelength_nm: float,
    source_gaussian_fwhm_nm: float,
    source_lorentzian_fwhm_nm: float = 0.0,
) -> ResolvingPower:
    """What `mount` resolves at a wavelength, and what of it is left with a source line of the widths given.

    ValueError beyond what the mount can reach, for negative widths, and if nothing has a width.
    """
    boxes_nm = (*mount.bandpass_nm(wavelength_nm), mount.blur_nm(wavelength_nm))
    diffraction_nm = mount.diffraction_fwhm_nm(wavelength_nm)

    def width_nm(gaussian_nm: float, lorentzian_nm: float) -> float:
        return expected_fwhm_nm(
            box_widths_nm=boxes_nm,
            gaussian_fwhm_nm=gaussian_nm,
            lorentzian_fwhm_nm=lorentzian_nm,
            diffraction_fwhm_nm=diffraction_nm,
        )

    observed_nm = width_nm(source_gaussian_fwhm_nm, source_lorentzian_fwhm_nm)
    instrument_nm = width_nm(0.0, 0.0) if any(boxes_nm) or diffraction_nm > 0.0 else 0.0

    def power(fwhm_nm: float) -> float:
        return abs(wavelength_nm) / fwhm_nm if fwhm_nm > 0.0 else math.inf

    return ResolvingPower(
        wavelength_nm=wavelength_nm,
        source_gaussian_fwhm_nm=source_gaussian_fwhm_nm,
        source_lorentzian_fwhm_nm=source_lorentzian_fwhm_nm,
        observed_fwhm_nm=observed_nm,
        observed=power(observed_nm),
        instrument=power(instrument_nm),
        slits=power(max(boxes_nm[:2])),
        diffraction=power(diffraction_nm),
        blur=power(boxes_nm[2]),
    )


def needed_resolving_power(*, wavelength_1_nm: float, wavelength_2_nm: float) -> float:
    """Mean wavelength over separation: what tells the two apart in the textbook sense.

    ValueError unless both are positive, finite and different.
    """
    low, high = sorted((wavelength_1_nm, wavelength_2_nm))
    if not 0.0 < low < high < math.inf:
        raise ValueError(
            f"wavelengths {wavelength_1_nm!r} and {wavelength_2_nm!r} nm; "
            "allowed: positive, finite, different"
        )
    return 0.5 * (low + high) / (high - low)
