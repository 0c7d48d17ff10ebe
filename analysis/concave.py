"""A concave grating turned about its pole between two fixed slits, and what it loses off its focus.

Grooves equidistant on the chord of a sphere of radius R focus, in the plane of dispersion, from a point at
r1 = R cos alpha to one at r2 = R cos beta, both on Rowland's circle (H. A. Rowland 1883, Phil. Mag. 16, 197).
The arms are fixed, so this holds at the one rotation they were set for. Elsewhere the light path function
F(w) = w F10 + w^2 F20 + w^3 F30 + ... of a groove at w from the pole (T. Namioka 1959, J. Opt. Soc. Am. 49,
446; W. T. Welford 1965, Progress in Optics 4, 241) has a defocus and a coma term,

    2 F20 = T1 + T2,   2 F30 = T1 sin alpha/r1 + T2 sin beta/r2,   T = cos^2/r - cos/R of either arm,

and a groove at w sends to the exit slit's centre not lambda but a wavelength (d/m) dF/dw off it. On the
circle both vanish, and what is left grows as w^3 (aperture aberration). Here the path is not expanded: its
slope is taken from the two distances themselves, so that every term in w is in it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from analysis.turned import TurnedGrating, check_angle, check_positive

__all__ = ["ConcaveMount"]

FloatArray = npt.NDArray[np.float64]

# 40 nodes over the ruled width: the wavelength is a smooth function of the groove, of low degree in effect.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(40)


@dataclass(frozen=True, slots=True, kw_only=True)
class ConcaveMount(TurnedGrating):
    """Spherical grating, constant included angle, turned about its pole.

    The arms are r1 = R cos alpha, r2 = R cos beta at `focused_nm` in order `focused_order`. Rays in the
    plane of dispersion are followed; what the height of grooves and slits adds (astigmatism, F02 and F12)
    is left out.
    """

    radius_mm: float
    included_angle_deg: float
    focused_nm: float
    focused_order: int

    def _check_arms(self) -> None:
        check_positive(self, "radius_mm", "focused_nm")
        check_angle(self, "included_angle_deg", 180.0)
        if self.focused_order == 0:
            raise ValueError(
                "focused_order = 0; allowed: any other whole number (zero order does not disperse)"
            )
        if not self.ruled_width_mm < 2.0 * self.radius_mm:
            raise ValueError(
                f"ruled_width_mm = {self.ruled_width_mm!r}; allowed: below the sphere's diameter, "
                f"{2.0 * self.radius_mm:g}"
            )
        if not abs(self._focused_sine) < math.cos(self.half_included_angle_rad):
            longest_nm = abs(self._longest_nm_per_order / self.focused_order)
            raise ValueError(
                f"focused_nm = {self.focused_nm!r} is beyond this grating in order {self.focused_order}; "
                f"allowed: below {longest_nm:.3f}"
            )

    @property
    def half_included_angle_rad(self) -> float:
        return math.radians(0.5 * self.included_angle_deg)

    @property
    def _longest_nm_per_order(self) -> float:
        return 2.0 * self.groove_spacing_nm * math.cos(self.half_included_angle_rad) ** 2

    @property
    def _focused_sine(self) -> float:
        """sin phi of the rotation that the arms are set for."""
        per_sine_nm = 2.0 * self.groove_spacing_nm * math.cos(self.half_included_angle_rad)
        return self.focused_order * self.focused_nm / per_sine_nm

    @property
    def arms_mm(self) -> tuple[float, float]:
        rotation, half = math.asin(self._focused_sine), self.half_included_angle_rad
        return self.radius_mm * math.cos(rotation + half), self.radius_mm * math.cos(rotation - half)

    def blur_nm(self, wavelength_nm: float) -> float:
        """Full width, nm, of the box with the standard deviation of the wavelengths that the grooves send.

        Defocus alone spreads them evenly, and the box is their spread, 2 F20 W d/|m|. ValueError beyond what
        the mount can reach.
        """
        sent_nm = self.sent_nm(wavelength_nm, 0.5 * self.ruled_width_mm * _NODES)
        share = 0.5 * _WEIGHTS
        mean_nm = float(np.sum(share * sent_nm))
        return math.sqrt(12.0 * float(np.sum(share * (sent_nm - mean_nm) ** 2)))

    def aberration_shift_nm(self, wavelength_nm: float) -> float:
        """Mean of the wavelengths that the grooves send, nm above the one that the pole sends.

        The scale is that of the pole; a line is recorded this much below its place.
        """
        sent_nm = self.sent_nm(wavelength_nm, 0.5 * self.ruled_width_mm * _NODES)
        return float(np.sum(0.5 * _WEIGHTS * sent_nm)) - wavelength_nm

    def sent_nm(self, wavelength_nm: float, groove_mm: FloatArray) -> FloatArray:
        """Wavelengths, nm, (N,) that grooves at `groove_mm` (N,) from the pole send from slit to slit, centre
        to centre, with the grating set to `wavelength_nm`: d/m times the slope of the path along the chord.
        """
        angles, arms_mm = self.angles_rad(wavelength_nm), self.arms_mm
        root_mm = np.sqrt(self.radius_mm**2 - groove_mm**2)
        sag_mm, rise = self.radius_mm - root_mm, groove_mm / root_mm
        slope = np.zeros_like(groove_mm)
        for angle, arm_mm in zip(angles, arms_mm, strict=True):
            along_mm, away_mm = arm_mm * math.sin(angle) - groove_mm, arm_mm * math.cos(angle) - sag_mm
            slope += (along_mm + rise * away_mm) / np.hypot(along_mm, away_mm)
        return slope * self.groove_spacing_nm / self.order
