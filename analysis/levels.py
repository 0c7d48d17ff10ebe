"""What a doublet says about its levels: spin-orbit splitting, thin strengths, population, mass shift.

One valence electron with orbital angular momentum l has the levels J = l - 1/2 and l + 1/2, apart by
Delta E = zeta (l + 1/2) (e.g. E. U. Condon and G. H. Shortley, "The Theory of Atomic Spectra", 1935).
Energies are wavenumbers in 1/cm; analysis.separation turns them into meV and GHz.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

__all__ = [
    "SpinOrbit",
    "boltzmann_factor",
    "level_splitting_per_cm",
    "normal_mass_shift_nm",
    "spin_orbit",
    "thin_photon_ratio",
]

_PER_CM_PER_KELVIN = 1.380_649e-23 / (6.626_070_15e-34 * 2.997_924_58e10)
"""k/(h c), 1/cm per K: exact by definition of the SI (2019)."""

_ELECTRON_U = 5.485_799_09e-4
"""Mass of the electron in u (CODATA, all its recent adjustments agree to these digits)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SpinOrbit:
    """The spin-orbit constant zeta and its standard uncertainty, and the J of the two levels."""

    zeta_per_cm: float
    zeta_u_per_cm: float
    j_low: float
    j_high: float


def spin_orbit(*, splitting_per_cm: float, splitting_u_per_cm: float = 0.0, orbital_l: int) -> SpinOrbit:
    """zeta = Delta E/(l + 1/2) of the two levels of one valence electron (orbital_l = 1 for p, 2 for d).

    ValueError for orbital_l below 1 (an s level does not split), a splitting or uncertainty below 0.
    """
    _check_l(orbital_l)
    _check_size("splitting_per_cm", splitting_per_cm)
    _check_size("splitting_u_per_cm", splitting_u_per_cm)
    return SpinOrbit(
        zeta_per_cm=splitting_per_cm / (orbital_l + 0.5),
        zeta_u_per_cm=splitting_u_per_cm / (orbital_l + 0.5),
        j_low=orbital_l - 0.5,
        j_high=orbital_l + 0.5,
    )


def level_splitting_per_cm(*, zeta_per_cm: float, orbital_l: int) -> float:
    """Delta E = zeta (l + 1/2), 1/cm. ValueError as `spin_orbit`."""
    _check_l(orbital_l)
    _check_size("zeta_per_cm", zeta_per_cm)
    return zeta_per_cm * (orbital_l + 0.5)


def thin_photon_ratio(*, a_1_per_s: float, j_1: float, a_2_per_s: float, j_2: float) -> float:
    """Photons of line 1 over those of line 2 from optically thin light: A1 (2 J1 + 1)/(A2 (2 J2 + 1)).

    A are the transition probabilities, J those of the upper levels, which are taken as populated by their
    weights; where they lie far apart multiply by `boltzmann_factor`. ValueError for an A that is not
    positive, a J that is no half or whole number.
    """
    for name, value in (("a_1_per_s", a_1_per_s), ("a_2_per_s", a_2_per_s)):
        if not (value > 0.0 and math.isfinite(value)):
            raise ValueError(f"{name} = {value!r}; allowed: positive, finite")
    for name, value in (("j_1", j_1), ("j_2", j_2)):
        if not (value >= 0.0 and (2.0 * value).is_integer()):
            raise ValueError(f"{name} = {value!r}; allowed: 0, 0.5, 1, 1.5, ...")
    return a_1_per_s * (2.0 * j_1 + 1.0) / (a_2_per_s * (2.0 * j_2 + 1.0))


def boltzmann_factor(*, splitting_per_cm: float, temperature_k: float) -> float:
    """exp(-Delta E/kT): population of the upper of two levels over the lower one's, weights apart.

    ValueError for a splitting below 0 or a temperature that is not positive.
    """
    _check_size("splitting_per_cm", splitting_per_cm)
    if not (temperature_k > 0.0 and math.isfinite(temperature_k)):
        raise ValueError(f"temperature_k = {temperature_k!r}; allowed: positive, finite")
    return math.exp(-splitting_per_cm / (_PER_CM_PER_KELVIN * temperature_k))


def normal_mass_shift_nm(*, wavelength_vacuum_nm: float, lighter_u: float, heavier_u: float) -> float:
    """How far the heavier isotope's line stands below the lighter one's at `wavelength_vacuum_nm`, nm.

    The reduced mass of one electron alone: lambda goes as 1 + m_e/M. Exact for hydrogen's gross structure,
    the normal part of the shift elsewhere (there the specific and the field shift come on top). Masses are
    those of the nuclei, in u. ValueError for wavelengths or masses that are not positive or out of order.
    """
    if not (wavelength_vacuum_nm > 0.0 and math.isfinite(wavelength_vacuum_nm)):
        raise ValueError(f"wavelength_vacuum_nm = {wavelength_vacuum_nm!r}; allowed: positive, finite")
    if not 0.0 < lighter_u <= heavier_u < math.inf:
        raise ValueError(
            f"lighter_u = {lighter_u!r}, heavier_u = {heavier_u!r}; "
            "allowed: positive, finite, the lighter first"
        )
    # 1 - (1 + e/M2)/(1 + e/M1), without the difference of two ones
    smaller, larger = _ELECTRON_U / heavier_u, _ELECTRON_U / lighter_u
    return wavelength_vacuum_nm * (larger - smaller) / (1.0 + larger)


def _check_l(value: int) -> None:
    if value < 1:
        raise ValueError(f"orbital_l = {value!r}; allowed: 1 or more (an s level does not split)")


def _check_size(name: str, value: float) -> None:
    if not (value >= 0.0 and math.isfinite(value)):
        raise ValueError(f"{name} = {value!r}; allowed: zero or positive, finite")
