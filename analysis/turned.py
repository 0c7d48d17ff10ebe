"""A grating turned between two arms at a fixed angle: what plane, Littrow and concave mounts have in common.

The arms enclose the constant angle 2K, so alpha = phi + K, beta = phi - K with phi the rotation from zero
order, and

    m lambda = d cos gamma (sin alpha + sin beta) = 2 d cos gamma cos K sin phi,

gamma being the angle of both beams with the plane of dispersion (e.g. M. C. Hutley, "Diffraction Gratings",
1982). A positive rotation turns the normal away from the entrance arm. Wavelengths are those in the medium
that the grating stands in.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from analysis.drives import Drive, RotaryDrive, SineBarDrive
from analysis.linewidth import SINC2_FWHM

__all__ = ["DRIVES", "TurnedGrating", "check_angle", "check_medium", "check_positive"]

FloatArray = npt.NDArray[np.float64]

DRIVES = ("rotary", "sine-bar")


@dataclass(frozen=True, slots=True, kw_only=True)
class TurnedGrating(ABC):
    """Grating, slits and drive. A mount adds its arms.

    `drive` says which gearing counts: steps_per_radian ("rotary") or steps_per_unit_sine ("sine-bar"). Light
    reaches and leaves the grating only while |alpha| and |beta| are below 90 degrees; beyond, methods raise
    ValueError. So does a field that makes no sense.
    """

    groove_density_per_mm: float
    ruled_width_mm: float
    order: int
    entrance_slit_um: float
    exit_slit_um: float
    drive: str = "rotary"
    steps_per_radian: float = 0.0
    steps_per_unit_sine: float = 0.0
    zero_order_steps: float = 0.0
    medium: str = "air"

    def __post_init__(self) -> None:
        check_positive(self, "groove_density_per_mm", "ruled_width_mm")
        for name in ("entrance_slit_um", "exit_slit_um"):
            value = getattr(self, name)
            if not (value >= 0.0 and math.isfinite(value)):
                raise ValueError(f"{name} = {value!r}; allowed: zero or positive, finite")
        if self.order == 0:
            raise ValueError("order = 0; allowed: any other whole number (zero order does not disperse)")
        if self.drive not in DRIVES:
            raise ValueError(f"drive = {self.drive!r}; allowed: {', '.join(map(repr, DRIVES))}")
        _ = self.mechanism  # for its ValueError
        check_medium(self.medium)
        self._check_arms()

    @abstractmethod
    def _check_arms(self) -> None:
        """Raises ValueError for fields of the mount that make no sense."""

    @property
    @abstractmethod
    def half_included_angle_rad(self) -> float:
        """K, rad."""

    @property
    @abstractmethod
    def arms_mm(self) -> tuple[float, float]:
        """Distances from the grating's centre, or its collimators' focal lengths, to entrance and exit
        slit.
        """

    @property
    def off_plane_rad(self) -> float:
        """gamma, rad."""
        return 0.0

    @property
    def mechanism(self) -> Drive:
        if self.drive == "sine-bar":
            return SineBarDrive(
                steps_per_unit_sine=self.steps_per_unit_sine, zero_order_steps=self.zero_order_steps
            )
        return RotaryDrive(steps_per_radian=self.steps_per_radian, zero_order_steps=self.zero_order_steps)

    @property
    def groove_spacing_nm(self) -> float:
        return 1e6 / self.groove_density_per_mm

    @property
    def grooves(self) -> float:
        """Grooves on the whole ruled width."""
        return self.groove_density_per_mm * self.ruled_width_mm

    @property
    def theoretical_resolving_power(self) -> float:
        """|m| N: two lines a factor 1 + 1/(|m| N) apart meet Rayleigh's criterion, all grooves lit."""
        return abs(self.order) * self.grooves

    @property
    def nm_per_sine(self) -> float:
        """lambda/sin phi: 2 d cos gamma cos K/m, nm."""
        cosines = math.cos(self.off_plane_rad) * math.cos(self.half_included_angle_rad)
        return 2.0 * self.groove_spacing_nm * cosines / self.order

    def rotation_rad(self, steps: npt.ArrayLike) -> FloatArray:
        """phi, rad. ValueError where incident or diffracted light would pass behind the grating."""
        mechanism = self.mechanism
        rotation = mechanism.rotation_rad(steps)
        limit = 0.5 * math.pi - self.half_included_angle_rad
        behind = ~(np.abs(rotation) < limit)
        if behind.any():
            worst = float(np.asarray(steps, dtype=np.float64)[behind].flat[0])
            raise ValueError(
                f"steps = {worst!r} turns the grating too far for light to reach and leave it; "
                f"allowed: less than {abs(mechanism.steps(limit) - self.zero_order_steps):.0f} steps "
                "from zero order"
            )
        return rotation

    def incidence_rad(self, steps: npt.ArrayLike) -> FloatArray:
        """alpha, rad, in the plane of dispersion."""
        return self.rotation_rad(steps) + self.half_included_angle_rad

    def diffraction_rad(self, steps: npt.ArrayLike) -> FloatArray:
        """beta, rad, in the plane of dispersion."""
        return self.rotation_rad(steps) - self.half_included_angle_rad

    def wavelength_nm(self, steps: npt.ArrayLike) -> FloatArray:
        """2 d cos gamma cos K sin phi/m; zero at zero order, negative on its far side."""
        return self.nm_per_sine * np.sin(self.rotation_rad(steps))

    def steps(self, wavelength_nm: float) -> float:
        return self.mechanism.steps(self._rotation_for_rad(wavelength_nm))

    def _rotation_for_rad(self, wavelength_nm: float) -> float:
        longest_nm = abs(self.nm_per_sine) * math.cos(self.half_included_angle_rad)
        # |phi| < 90 deg - K is |sin phi| < cos K, which is stricter than |sin phi| <= 1.
        if not abs(wavelength_nm) < longest_nm:
            raise ValueError(
                f"wavelength_nm = {wavelength_nm!r} is beyond this grating; allowed: below {longest_nm:.3f} "
                f"with {self.groove_density_per_mm:g} grooves per mm, order {self.order}, included angle "
                f"{2.0 * math.degrees(self.half_included_angle_rad):g} degrees"
            )
        return math.asin(wavelength_nm / self.nm_per_sine)

    def angles_rad(self, wavelength_nm: float) -> tuple[float, float]:
        """alpha and beta, rad, with `wavelength_nm` set. ValueError beyond what the mount can reach."""
        rotation, half = self._rotation_for_rad(wavelength_nm), self.half_included_angle_rad
        return rotation + half, rotation - half

    def dispersion_nm_per_step(self, steps: float) -> float:
        rotation = float(self.rotation_rad(steps))
        return self.nm_per_sine * math.cos(rotation) * self.mechanism.rad_per_step(steps)

    def anamorphism(self, wavelength_nm: float) -> float:
        """cos alpha/cos beta: width of the diffracted beam's image of a slit over the slit's, equal arms."""
        alpha, beta = self.angles_rad(wavelength_nm)
        return math.cos(alpha) / math.cos(beta)

    def reciprocal_linear_dispersion_nm_per_mm(self, wavelength_nm: float) -> float:
        """nm per mm across the exit slit: d cos beta/(|m| f2)."""
        _, beta = self.angles_rad(wavelength_nm)
        return self._nm_per_mm(beta, self.arms_mm[1])

    def _nm_per_mm(self, angle_rad: float, arm_mm: float) -> float:
        # A slit edge moves its ray along the surface by cos(angle)/arm, also out of the plane of dispersion.
        return self.groove_spacing_nm * math.cos(angle_rad) / (abs(self.order) * arm_mm)

    def bandpass_nm(self, wavelength_nm: float) -> tuple[float, float]:
        """w d cos alpha/(|m| f1) and w d cos beta/(|m| f2): full widths of the two boxes."""
        (alpha, beta), (entrance_mm, exit_mm) = self.angles_rad(wavelength_nm), self.arms_mm
        return (
            1e-3 * self.entrance_slit_um * self._nm_per_mm(alpha, entrance_mm),
            1e-3 * self.exit_slit_um * self._nm_per_mm(beta, exit_mm),
        )

    def diffraction_fwhm_nm(self, wavelength_nm: float) -> float:
        """0.8859 lambda/(|m| N), the FWHM of the sinc^2 of an evenly and fully lit ruled width."""
        return SINC2_FWHM * abs(wavelength_nm) / self.theoretical_resolving_power

    def blur_nm(self, wavelength_nm: float) -> float:
        """0.0: the collimators are taken as perfect. ValueError beyond what the mount can reach."""
        self._rotation_for_rad(wavelength_nm)
        return 0.0

    def slit_resolving_power(self, wavelength_nm: float) -> float:
        """lambda over the FWHM that the slits alone leave (the wider image); ValueError without slits."""
        widest_nm = max(self.bandpass_nm(wavelength_nm))
        if widest_nm == 0.0:
            raise ValueError("both slits are 0 um wide; the slits limit nothing")
        return abs(wavelength_nm) / widest_nm


def check_positive(mount: object, *names: str) -> None:
    for name in names:
        value = getattr(mount, name)
        if not (value > 0.0 and math.isfinite(value)):
            raise ValueError(f"{name} = {value!r}; allowed: positive, finite")


def check_angle(mount: object, name: str, below_deg: float) -> None:
    value = getattr(mount, name)
    if not 0.0 <= value < below_deg:
        raise ValueError(f"{name} = {value!r}; allowed: 0 to below {below_deg:g}")


def check_medium(medium: str) -> None:
    if medium not in ("air", "vacuum"):
        raise ValueError(f"medium = {medium!r}; allowed: 'air', 'vacuum'")
