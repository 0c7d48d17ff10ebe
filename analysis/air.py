"""The refractive index of air after Ciddor (1996), and wavelengths in air and in vacuum.

P. E. Ciddor, "Refractive index of air: new equations for the visible and near infrared", Appl. Opt. 35,
1566 (1996), below "Ciddor". In ordinary laboratory air the equations are good to some 2e-8 to 5e-8 (memory).
Outside 300..1690 nm they extrapolate: by convention air wavelengths are used down to 200 nm, and nothing
here vouches for absorption bands in the infrared.

A wavelength may be a float or an array of any shape; the answer has the same type and shape.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
import numpy.typing as npt

__all__ = [
    "LABORATORY_AIR",
    "SHORTEST_NM",
    "STANDARD_AIR",
    "Air",
    "air_from_vacuum_nm",
    "group_index",
    "refractive_index",
    "vacuum_from_air_nm",
]

FloatArray = npt.NDArray[np.float64]
Nm = TypeVar("Nm", float, FloatArray)

# Oxygen absorbs below, nobody tabulates air wavelengths there, and the dispersion formula nears its pole.
SHORTEST_NM = 180.0

_KELVIN = 273.15
_STANDARD_DRY = (15.0, 101_325.0)  # deg C, Pa: Ciddor, below Eq. (1)
_STANDARD_VAPOUR = (20.0, 1_333.0)  # deg C, Pa: Ciddor, below Eq. (3)


@dataclass(frozen=True, slots=True)
class Air:
    """The air the light passes: deg C, Pa, relative humidity in percent, CO2 in parts per million (molar).

    Raises ValueError outside -40..100 deg C, 10..140 kPa, 0..100 %, 0..2000 ppm (the widest ranges for
    which the equations are in use).
    """

    temperature_c: float
    pressure_pa: float
    humidity_percent: float
    co2_ppm: float = 450.0

    def __post_init__(self) -> None:
        for name, value, lowest, highest in (
            ("temperature_c", self.temperature_c, -40.0, 100.0),
            ("pressure_pa", self.pressure_pa, 10_000.0, 140_000.0),
            ("humidity_percent", self.humidity_percent, 0.0, 100.0),
            ("co2_ppm", self.co2_ppm, 0.0, 2_000.0),
        ):
            if not lowest <= value <= highest:  # a NaN fails this too
                raise ValueError(f"{name} = {value!r}; allowed: {lowest:g} to {highest:g}")
        if self._vapour_fraction() > 1.0:
            raise ValueError(
                f"humidity_percent = {self.humidity_percent!r} at {self.temperature_c:g} C; allowed: less "
                f"(the vapour alone would press more than pressure_pa = {self.pressure_pa:g})"
            )

    def _vapour_fraction(self) -> float:
        """Molar fraction of water vapour, enhancement factor included (Ciddor, appendix A)."""
        t, p = self.temperature_c, self.pressure_pa
        enhancement = 1.00062 + 3.14e-8 * p + 5.60e-7 * t**2
        return self.humidity_percent / 100.0 * enhancement * _saturation_pa(t) / p


def _saturation_pa(temperature_c: float) -> float:
    """Saturation vapour pressure, Pa: over water Giacomo (1982) as used by Ciddor, appendix A; below 0 deg C
    over ice, Marti and Mauersberger (1993), Geophys. Res. Lett. 20, 363."""
    kelvin = temperature_c + _KELVIN
    if temperature_c < 0.0:
        return float(10.0 ** (12.537 - 2663.5 / kelvin))
    return math.exp(1.2378847e-5 * kelvin**2 - 1.9121316e-2 * kelvin + 33.93711047 - 6.3431645e3 / kelvin)


def _compressibility(temperature_c: float, pressure_pa: float, vapour: float) -> float:
    """Z of moist air (BIPM equation of state, 1991; Ciddor, Eq. (12)); `vapour` is a molar fraction."""
    t, x = temperature_c, vapour
    per_kelvin = pressure_pa / (t + _KELVIN)
    linear = (
        1.58123e-6
        - 2.9331e-8 * t
        + 1.1043e-10 * t**2
        + (5.707e-6 - 2.051e-8 * t) * x
        + (1.9898e-4 - 2.376e-6 * t) * x**2
    )
    return 1.0 - per_kelvin * linear + per_kelvin**2 * (1.83e-11 - 0.765e-8 * x**2)


def _molar_density(temperature_c: float, pressure_pa: float, vapour: float) -> float:
    """Proportional to mol/m3. The gas constant and the molar masses of Ciddor's Eq. (4) cancel in Eq. (5)."""
    return pressure_pa / (_compressibility(temperature_c, pressure_pa, vapour) * (temperature_c + _KELVIN))


STANDARD_AIR = Air(15.0, 101_325.0, 0.0)
"""15 deg C, 101 325 Pa, dry, 450 ppm CO2: what tabulated air wavelengths refer to (common practice)."""

LABORATORY_AIR = Air(20.0, 101_325.0, 50.0)
"""20 deg C, 101 325 Pa, 50 %: taken for a bench that does not measure its air."""


def refractive_index(
    *,
    wavelength_vacuum_nm: Nm,
    temperature_c: float,
    pressure_pa: float,
    humidity_percent: float,
    co2_ppm: float = 450.0,
) -> Nm:
    """Phase index n of air at a VACUUM wavelength (Ciddor, Eqs. (1) to (5)).

    Raises ValueError for conditions outside those of `Air` and wavelengths below 180 nm.
    """
    air = Air(temperature_c, pressure_pa, humidity_percent, co2_ppm)
    return _index(wavelength_vacuum_nm, air)


def _index(wavelength_vacuum_nm: Nm, air: Air) -> Nm:
    _check_wavelength(wavelength_vacuum_nm, "wavelength_vacuum_nm")
    s = (1000.0 / wavelength_vacuum_nm) ** 2  # wavenumber squared, 1/um^2
    dry = 1e-8 * (5_792_105.0 / (238.0185 - s) + 167_917.0 / (57.362 - s))  # Eq. (1), 450 ppm CO2
    dry = dry * (1.0 + 0.534e-6 * (air.co2_ppm - 450.0))  # Eq. (2)
    vapour = 1.022e-8 * (295.235 + 2.6422 * s - 0.032380 * s**2 + 0.004028 * s**3)  # Eq. (3)
    x = air._vapour_fraction()
    density = _molar_density(air.temperature_c, air.pressure_pa, x)
    dry_share = (1.0 - x) * density / _molar_density(*_STANDARD_DRY, 0.0)
    vapour_share = x * density / _molar_density(*_STANDARD_VAPOUR, 1.0)
    return 1.0 + dry_share * dry + vapour_share * vapour  # Eq. (5)


def air_from_vacuum_nm(*, wavelength_vacuum_nm: Nm, air: Air = STANDARD_AIR) -> Nm:
    """Wavelength in `air`, nm: the vacuum wavelength over n. ValueError below 180 nm."""
    return wavelength_vacuum_nm / _index(wavelength_vacuum_nm, air)


def vacuum_from_air_nm(*, wavelength_air_nm: Nm, air: Air = STANDARD_AIR) -> Nm:
    """Vacuum wavelength, nm, of a wavelength in `air`; the inverse of `air_from_vacuum_nm`.

    n belongs to the vacuum wavelength, so it is iterated. One round shrinks the error by |lambda dn/dlambda|,
    at most 1e-3 (at 180 nm) and mostly 1e-5; six rounds end at the last bit. ValueError below 180 nm.
    """
    _check_wavelength(wavelength_air_nm, "wavelength_air_nm")
    vacuum = wavelength_air_nm
    for _ in range(6):
        vacuum = wavelength_air_nm * _index(vacuum, air)
    return vacuum


def group_index(*, wavelength_vacuum_nm: Nm, air: Air = STANDARD_AIR) -> Nm:
    """n - lambda dn/dlambda; a small separation in vacuum is n^2/n_group times the one in air.

    Central difference over 1e-4 of the wavelength: good to 1e-8.
    """
    step = 1e-4 * wavelength_vacuum_nm
    below, above = wavelength_vacuum_nm - step, wavelength_vacuum_nm + step
    slope = (_index(above, air) - _index(below, air)) / (2.0 * step)
    return _index(wavelength_vacuum_nm, air) - wavelength_vacuum_nm * slope


def _check_wavelength(wavelength_nm: float | FloatArray, name: str) -> None:
    values = np.asarray(wavelength_nm)
    bad = ~((values >= SHORTEST_NM) & np.isfinite(values))
    if bad.any():
        raise ValueError(
            f"{name} = {float(values[bad].flat[0])!r}; allowed: {SHORTEST_NM:g} nm and above (below, light "
            f"does not pass through air and wavelengths are given in vacuum)"
        )
