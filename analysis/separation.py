"""How far apart two lines stand: nm in air and in vacuum, wavenumber, energy, frequency.

A separation is stated without a sign. The uncertainty handed in is that of the separation, statistics, shape
and scale combined. Units per cm, meV, GHz follow from the vacuum wavelengths alone:
1/lambda_1 - 1/lambda_2 = s/(lambda_1 lambda_2).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from analysis.air import SHORTEST_NM, STANDARD_AIR, Air, air_from_vacuum_nm, group_index, vacuum_from_air_nm

__all__ = ["Separation", "ghz_from_per_cm", "mev_from_per_cm", "separation_of", "wavenumber_per_cm"]

# Exact by definition of the SI (2019).
_PLANCK_J_S = 6.626_070_15e-34
_LIGHT_M_PER_S = 299_792_458.0
_CHARGE_C = 1.602_176_634e-19


def wavenumber_per_cm(*, wavelength_vacuum_nm: float) -> float:
    """Vacuum wavenumber, 1/cm. ValueError unless the wavelength is positive and finite."""
    if not (wavelength_vacuum_nm > 0.0 and math.isfinite(wavelength_vacuum_nm)):
        raise ValueError(f"wavelength_vacuum_nm = {wavelength_vacuum_nm!r}; allowed: positive, finite")
    return 1e7 / wavelength_vacuum_nm


def mev_from_per_cm(per_cm: float) -> float:
    """Energy in meV of a wavenumber in 1/cm: h c/e, exact constants (8065.544 per cm to the eV, CODATA)."""
    return per_cm * 1e5 * _PLANCK_J_S * _LIGHT_M_PER_S / _CHARGE_C


def ghz_from_per_cm(per_cm: float) -> float:
    """Frequency in GHz of a wavenumber in 1/cm (c is exact)."""
    return per_cm * 1e-7 * _LIGHT_M_PER_S


@dataclass(frozen=True, slots=True)
class Separation:
    """The separation of two lines in every unit, each with its standard uncertainty `u_`.

    `air_pm` and `u_air_pm` are None below 180 nm, where air wavelengths are not in use.
    """

    air_pm: float | None
    u_air_pm: float | None
    vacuum_pm: float
    u_vacuum_pm: float
    per_cm: float
    u_per_cm: float
    mev: float
    u_mev: float
    ghz: float
    u_ghz: float


def separation_of(
    *,
    wavelength_1_nm: float,
    wavelength_2_nm: float,
    u_separation_nm: float,
    medium: str,
    air: Air = STANDARD_AIR,
    u_common_nm: float = 0.0,
) -> Separation:
    """The separation of two wavelengths given in `medium` ("air", then in `air`, or "vacuum").

    `u_separation_nm` is the standard uncertainty of the separation in that medium. A shift common to both
    lines, `u_common_nm`, moves a separation in 1/cm, meV, GHz by 2 u_common/lambda of itself (1 pm at 313 nm:
    6e-6) and is negligible unless the scale is off by nanometres; it enters these units independently, and is
    neglected in pm, where only the dispersion of air feels it. The uncertainty of the air's own state is
    neglected likewise: 1 K changes an air separation by 1e-6 of itself.

    Raises ValueError for wavelengths that are not positive and finite, negative uncertainties, other media.
    """
    for name, value in (("u_separation_nm", u_separation_nm), ("u_common_nm", u_common_nm)):
        if not (value >= 0.0 and math.isfinite(value)):
            raise ValueError(f"{name} = {value!r}; allowed: zero or positive, finite")
    for name, value in (("wavelength_1_nm", wavelength_1_nm), ("wavelength_2_nm", wavelength_2_nm)):
        if not (value > 0.0 and math.isfinite(value)):
            raise ValueError(f"{name} = {value!r}; allowed: positive, finite")
    low, high = sorted((wavelength_1_nm, wavelength_2_nm))
    given_nm = high - low
    air_nm: float | None = None
    u_air_nm: float | None = None
    if medium == "air":
        air_nm, u_air_nm = given_nm, u_separation_nm
        low, high = (vacuum_from_air_nm(wavelength_air_nm=w, air=air) for w in (low, high))
        vacuum_nm = high - low
        stretch = (_vacuum_per_air(low, air), _vacuum_per_air(high, air))
    elif medium == "vacuum":
        vacuum_nm, stretch = given_nm, (1.0, 1.0)
        # The slope of the index wants a little room on its short side.
        if low > SHORTEST_NM * 1.001:
            in_air = [air_from_vacuum_nm(wavelength_vacuum_nm=w, air=air) for w in (low, high)]
            air_nm = in_air[1] - in_air[0]
            u_air_nm = 0.5 * u_separation_nm * sum(1.0 / _vacuum_per_air(w, air) for w in (low, high))
    else:
        raise ValueError(f"medium = {medium!r}; allowed: 'air', 'vacuum'")

    per_cm = 1e7 * vacuum_nm / (low * high)
    # Each line moves by half the change of the separation, the middle stays.
    u_vacuum_nm = 0.5 * u_separation_nm * (stretch[0] + stretch[1])
    u_per_cm = math.hypot(
        0.5e7 * u_separation_nm * (stretch[0] / low**2 + stretch[1] / high**2),
        u_common_nm * per_cm * (low + high) / (low * high),
    )
    return Separation(
        air_pm=None if air_nm is None else 1e3 * air_nm,
        u_air_pm=None if u_air_nm is None else 1e3 * u_air_nm,
        vacuum_pm=1e3 * vacuum_nm,
        u_vacuum_pm=1e3 * u_vacuum_nm,
        per_cm=per_cm,
        u_per_cm=u_per_cm,
        mev=mev_from_per_cm(per_cm),
        u_mev=mev_from_per_cm(u_per_cm),
        ghz=ghz_from_per_cm(per_cm),
        u_ghz=ghz_from_per_cm(u_per_cm),
    )


def _vacuum_per_air(wavelength_vacuum_nm: float, air: Air) -> float:
    """d lambda_vacuum / d lambda_air = n^2 / n_group, since lambda_air = lambda/n(lambda)."""
    n = wavelength_vacuum_nm / air_from_vacuum_nm(wavelength_vacuum_nm=wavelength_vacuum_nm, air=air)
    return n**2 / group_index(wavelength_vacuum_nm=wavelength_vacuum_nm, air=air)
