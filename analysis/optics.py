"""What a scanning spectrometer sees: steps to wavelength and back, slit images, diffraction, line width.

A plane grating turned between two fixed arms obeys m lambda = d (sin alpha + sin beta). The arms enclose the
constant angle 2K, so alpha = phi + K, beta = phi - K with phi the rotation from zero order, and
m lambda = 2 d cos K sin phi (e.g. M. C. Hutley, "Diffraction Gratings", 1982). A positive rotation turns
the normal away from the entrance arm. Wavelengths are those in the medium that the grating stands in.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
import numpy.typing as npt

__all__ = ["SINC2_FWHM", "Mount", "PlaneMount", "TableMount", "expected_fwhm_nm"]

FloatArray = npt.NDArray[np.float64]

SINC2_FWHM = 0.885_892_941_378_904_7
"""Full width at half maximum of (sin pi x / pi x)^2."""


class Mount(Protocol):
    """What the rest asks of a spectrometer's geometry."""

    @property
    def medium(self) -> str:
        """ "air" or "vacuum": what its wavelengths are measured in."""
        ...

    def wavelength_nm(self, steps: npt.ArrayLike) -> FloatArray:
        """Wavelength, nm, at drive positions of any shape. ValueError beyond what the mount can reach."""
        ...

    def steps(self, wavelength_nm: float) -> float:
        """Drive position, not rounded. ValueError beyond what the mount can reach."""
        ...

    def bandpass_nm(self, wavelength_nm: float) -> tuple[float, float]:
        """Full widths, nm, of the images of entrance and exit slit (or of the pixel and 0.0)."""
        ...

    def diffraction_fwhm_nm(self, wavelength_nm: float) -> float:
        """FWHM, nm, that the lit width of the grating alone leaves; 0.0 where it is not known."""
        ...

    def dispersion_nm_per_step(self, steps: float) -> float:
        """d lambda / d step, nm; negative where the drive counts down as the wavelength goes up."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class PlaneMount:
    """Plane grating, constant included angle, rotary drive.

    phi = (steps - zero_order_steps)/steps_per_radian. Both arms have the focal length given. Light reaches
    and leaves the grating only while |alpha| and |beta| are below 90 degrees; beyond, methods raise
    ValueError. So does a field that makes no sense.
    """

    groove_density_per_mm: float
    ruled_width_mm: float
    focal_length_mm: float
    included_angle_deg: float
    order: int
    entrance_slit_um: float
    exit_slit_um: float
    steps_per_radian: float
    zero_order_steps: float = 0.0
    medium: str = "air"

    def __post_init__(self) -> None:
        for name in ("groove_density_per_mm", "ruled_width_mm", "focal_length_mm"):
            value = getattr(self, name)
            if not (value > 0.0 and math.isfinite(value)):
                raise ValueError(f"{name} = {value!r}; allowed: positive, finite")
        for name in ("entrance_slit_um", "exit_slit_um"):
            value = getattr(self, name)
            if not (value >= 0.0 and math.isfinite(value)):
                raise ValueError(f"{name} = {value!r}; allowed: zero or positive, finite")
        if not 0.0 <= self.included_angle_deg < 180.0:
            raise ValueError(f"included_angle_deg = {self.included_angle_deg!r}; allowed: 0 to below 180")
        if self.order == 0:
            raise ValueError("order = 0; allowed: any other whole number (zero order does not disperse)")
        if self.steps_per_radian == 0.0 or not math.isfinite(self.steps_per_radian):
            raise ValueError(f"steps_per_radian = {self.steps_per_radian!r}; allowed: finite, not zero")
        if not math.isfinite(self.zero_order_steps):
            raise ValueError(f"zero_order_steps = {self.zero_order_steps!r}; allowed: finite")
        _check_medium(self.medium)

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
    def half_included_angle_rad(self) -> float:
        return math.radians(0.5 * self.included_angle_deg)

    @property
    def _nm_per_sine(self) -> float:
        return 2.0 * self.groove_spacing_nm * math.cos(self.half_included_angle_rad) / self.order

    def rotation_rad(self, steps: npt.ArrayLike) -> FloatArray:
        """phi, rad. ValueError where incident or diffracted light would pass behind the grating."""
        rotation = (np.asarray(steps, dtype=np.float64) - self.zero_order_steps) / self.steps_per_radian
        limit = 0.5 * math.pi - self.half_included_angle_rad
        behind = ~(np.abs(rotation) < limit)
        if behind.any():
            worst = float(np.asarray(steps, dtype=np.float64)[behind].flat[0])
            raise ValueError(
                f"steps = {worst!r} turns the grating too far for light to reach and leave it; "
                f"allowed: less than {limit * abs(self.steps_per_radian):.0f} steps from zero order"
            )
        return rotation

    def incidence_rad(self, steps: npt.ArrayLike) -> FloatArray:
        """alpha, rad."""
        return self.rotation_rad(steps) + self.half_included_angle_rad

    def diffraction_rad(self, steps: npt.ArrayLike) -> FloatArray:
        """beta, rad."""
        return self.rotation_rad(steps) - self.half_included_angle_rad

    def wavelength_nm(self, steps: npt.ArrayLike) -> FloatArray:
        """2 d cos K sin phi / m; zero at zero order, negative on its far side."""
        return self._nm_per_sine * np.sin(self.rotation_rad(steps))

    def steps(self, wavelength_nm: float) -> float:
        return self.zero_order_steps + self.steps_per_radian * self._rotation_for_rad(wavelength_nm)

    def _rotation_for_rad(self, wavelength_nm: float) -> float:
        longest_nm = abs(self._nm_per_sine) * math.cos(self.half_included_angle_rad)
        # |phi| < 90 deg - K is |sin phi| < cos K, which is stricter than |sin phi| <= 1.
        if not abs(wavelength_nm) < longest_nm:
            raise ValueError(
                f"wavelength_nm = {wavelength_nm!r} is beyond this grating; allowed: below {longest_nm:.3f} "
                f"with {self.groove_density_per_mm:g} grooves per mm, order {self.order}, included angle "
                f"{self.included_angle_deg:g} degrees"
            )
        return math.asin(wavelength_nm / self._nm_per_sine)

    def reciprocal_linear_dispersion_nm_per_mm(self, wavelength_nm: float) -> float:
        """nm per mm across the exit slit: d cos beta / (|m| f)."""
        rotation = self._rotation_for_rad(wavelength_nm)
        return self._nm_per_mm(rotation - self.half_included_angle_rad)

    def _nm_per_mm(self, angle_rad: float) -> float:
        return self.groove_spacing_nm * math.cos(angle_rad) / (abs(self.order) * self.focal_length_mm)

    def bandpass_nm(self, wavelength_nm: float) -> tuple[float, float]:
        """w d cos alpha/(|m| f) and w d cos beta/(|m| f): full widths of the two boxes."""
        rotation, half = self._rotation_for_rad(wavelength_nm), self.half_included_angle_rad
        entrance_nm = 1e-3 * self.entrance_slit_um * self._nm_per_mm(rotation + half)
        exit_nm = 1e-3 * self.exit_slit_um * self._nm_per_mm(rotation - half)
        return entrance_nm, exit_nm

    def diffraction_fwhm_nm(self, wavelength_nm: float) -> float:
        """0.8859 lambda/(|m| N), the FWHM of the sinc^2 of an evenly and fully lit ruled width."""
        return SINC2_FWHM * abs(wavelength_nm) / self.theoretical_resolving_power

    def dispersion_nm_per_step(self, steps: float) -> float:
        return self._nm_per_sine * math.cos(float(self.rotation_rad(steps))) / self.steps_per_radian

    def slit_resolving_power(self, wavelength_nm: float) -> float:
        """lambda over the FWHM that the slits alone leave (the wider image); ValueError without slits."""
        widest_nm = max(self.bandpass_nm(wavelength_nm))
        if widest_nm == 0.0:
            raise ValueError("both slits are 0 um wide; the slits limit nothing")
        return abs(wavelength_nm) / widest_nm


@dataclass(frozen=True, slots=True)
class TableMount:
    """A recorded spectrum in place of a grating: step k stands at row k, between rows on a straight line.

    `wavelengths` (N,) in nm, ascending. A pixel is as wide as the local spacing of the rows; it is the one
    box of the bandpass. What happened before the pixel is in the recording itself, so diffraction is 0.
    """

    wavelengths: tuple[float, ...]
    medium: str
    _wavelength_nm: FloatArray = field(init=False, repr=False, compare=False)
    _spacing_nm: FloatArray = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        table = np.array(self.wavelengths, dtype=np.float64)
        if table.ndim != 1 or table.size < 2:
            raise ValueError(f"{table.size} wavelengths; allowed: two rows or more")
        if not (np.isfinite(table).all() and table[0] > 0.0 and (np.diff(table) > 0.0).all()):
            raise ValueError("wavelengths must be finite, positive and strictly ascending")
        _check_medium(self.medium)
        object.__setattr__(self, "_wavelength_nm", table)
        object.__setattr__(self, "_spacing_nm", np.gradient(table))

    def wavelength_nm(self, steps: npt.ArrayLike) -> FloatArray:
        rows = self._rows(steps)
        return np.asarray(np.interp(rows, np.arange(self._wavelength_nm.size), self._wavelength_nm))

    def _rows(self, steps: npt.ArrayLike) -> FloatArray:
        rows = np.asarray(steps, dtype=np.float64)
        last = self._wavelength_nm.size - 1
        outside = ~((rows >= 0.0) & (rows <= last))
        if outside.any():
            worst = float(rows[outside].flat[0])
            raise ValueError(f"steps = {worst!r}; allowed: 0 to {last}, the recorded rows")
        return rows

    def steps(self, wavelength_nm: float) -> float:
        first_nm, last_nm = float(self._wavelength_nm[0]), float(self._wavelength_nm[-1])
        if not first_nm <= wavelength_nm <= last_nm:
            raise ValueError(
                f"wavelength_nm = {wavelength_nm!r}; allowed: {first_nm:.6g} to {last_nm:.6g} nm, as recorded"
            )
        return float(np.interp(wavelength_nm, self._wavelength_nm, np.arange(self._wavelength_nm.size)))

    def bandpass_nm(self, wavelength_nm: float) -> tuple[float, float]:
        return self.dispersion_nm_per_step(self.steps(wavelength_nm)), 0.0

    def diffraction_fwhm_nm(self, wavelength_nm: float) -> float:
        self.steps(wavelength_nm)  # for its ValueError
        return 0.0

    def dispersion_nm_per_step(self, steps: float) -> float:
        """Local spacing of the rows: central differences at the rows, a straight line between."""
        rows = self._rows(steps)
        return float(np.interp(rows, np.arange(self._spacing_nm.size), self._spacing_nm))


def _check_medium(medium: str) -> None:
    if medium not in ("air", "vacuum"):
        raise ValueError(f"medium = {medium!r}; allowed: 'air', 'vacuum'")


# Gauss-Legendre nodes of one panel: 20 of them meet a Voigt profile over its own half width, and over each
# doubling of the distance from its centre, to 1e-12.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(20)


def expected_fwhm_nm(
    *,
    box_widths_nm: tuple[float, float],
    gaussian_fwhm_nm: float,
    lorentzian_fwhm_nm: float = 0.0,
) -> float:
    """FWHM, nm, of box * box * Gaussian * Lorentzian (all centred, areas one; * is convolution).

    The boxes are given by their full widths; any width may be 0, and is then absent. Diffraction, whose
    sinc^2 is no Gaussian, enters `gaussian_fwhm_nm` in quadrature as an approximation. Evaluated by
    quadrature on panels that refine towards the line's centre, whatever the ratio of the widths, and solved
    by bisection: good to 1e-10 of itself. ValueError for negative widths or when all are zero.
    """
    for value in (*box_widths_nm, gaussian_fwhm_nm, lorentzian_fwhm_nm):
        if not (value >= 0.0 and math.isfinite(value)):
            raise ValueError(f"width {value!r} nm; allowed: zero or positive, finite")
    narrow_nm, wide_nm = sorted(box_widths_nm)
    if gaussian_fwhm_nm == 0.0 and lorentzian_fwhm_nm == 0.0:
        if wide_nm == 0.0:
            raise ValueError("all widths are zero; at least one must be positive")
        return wide_nm  # a trapezoid is at half its height half the wider width from its centre

    from scipy.special import voigt_profile

    sigma_nm = gaussian_fwhm_nm / math.sqrt(8.0 * math.log(2.0))
    gamma_nm = 0.5 * lorentzian_fwhm_nm

    def line(x_nm: FloatArray) -> FloatArray:
        return np.asarray(voigt_profile(x_nm, sigma_nm, gamma_nm))

    core_nm = max(gaussian_fwhm_nm, lorentzian_fwhm_nm)  # the wider of the two smooths the line's core

    def height(x_nm: float) -> float:
        if wide_nm == 0.0:
            return float(line(np.asarray(x_nm)))
        return _through_slits(line, x_nm, narrow_nm, wide_nm, core_nm)

    half = 0.5 * height(0.0)
    inside, outside = 0.0, 0.5 * (narrow_nm + wide_nm) + gaussian_fwhm_nm + lorentzian_fwhm_nm
    for _ in range(60):
        middle = 0.5 * (inside + outside)
        if height(middle) > half:
            inside = middle
        else:
            outside = middle
    return inside + outside


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
