"""The air the bench stands in: its slow changes, and what they do to a wavelength.

The refractive index follows Edlén 1966 (Metrologia 2, 71; coefficients from memory) for standard air, and
scales with the density of an ideal gas; moisture follows Birch and Downs 1993 (Metrologia 30, 155; from
memory). That is another formula than the daemon's own: only ratios of indices matter here, and over the range
of a laboratory the two agree to a few parts in 1e8.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from pydantic import Field

from drivers.protocols import AmbientReading
from drivers.settings import StrictModel
from simulators.draw import Draws, smooth_drift

_STANDARD_TEMPERATURE_K = 288.15
_STANDARD_PRESSURE_PA = 101325.0
# Birch and Downs 1993: -(3.7345 - 0.0401/um^2)e-10, near 500 nm; Edlén's own figure was found too large
_WATER_REFRACTIVITY_PER_PA = -3.57e-10
_TYPICAL_REFRACTIVITY = 2.78e-4  # near 500 nm


class AirOptions(StrictModel):
    """`[world.options.air]`"""

    temperature_c: float = Field(default=20.0, ge=-20.0, le=60.0)
    temperature_drift_k: float = Field(default=0.15, ge=0.0, le=5.0)
    pressure_pa: float = Field(default=101325.0, ge=50000.0, le=110000.0)
    pressure_drift_pa: float = Field(default=60.0, ge=0.0, le=3000.0)
    humidity_percent: float = Field(default=50.0, ge=0.0, le=100.0)
    drift_period_s: float = Field(default=14400.0, ge=60.0)
    sensor_noise_k: float = Field(default=0.02, ge=0.0)
    sensor_noise_pa: float = Field(default=3.0, ge=0.0)


def standard_refractivity(wavelength_nm: float) -> float:
    """n - 1 of dry air at 15 C and 101325 Pa (Edlén 1966, eq. 1); wavelength in nm, air or vacuum alike."""
    s2 = (1000.0 / wavelength_nm) ** 2  # per square micrometre
    return 1e-8 * (8342.13 + 2406030.0 / (130.0 - s2) + 15997.0 / (38.9 - s2))


@dataclass(frozen=True, slots=True)
class Air:
    """Temperature, pressure and humidity as functions of time (s since 1970, UTC)."""

    options: AirOptions
    temperature_drift_k: Callable[[float], float]
    pressure_drift_pa: Callable[[float], float]

    @classmethod
    def build(cls, options: AirOptions, seed: int) -> Air:
        draws = Draws(seed, "air")
        period_s = options.drift_period_s
        return cls(
            options,
            smooth_drift(draws, rms=options.temperature_drift_k, period_s=period_s),
            smooth_drift(draws, rms=options.pressure_drift_pa, period_s=1.37 * period_s),
        )

    def temperature_c(self, utc_s: float) -> float:
        return self.options.temperature_c + self.temperature_drift_k(utc_s)

    def pressure_pa(self, utc_s: float) -> float:
        return self.options.pressure_pa + self.pressure_drift_pa(utc_s)

    def density_ratio(self, utc_s: float) -> float:
        """Density against dry standard air, as far as it sets n - 1 near 500 nm; moisture included."""
        return self._density_ratio(self.temperature_c(utc_s), self.pressure_pa(utc_s))

    def mean_density_ratio(self) -> float:
        """The same at the bench's stated mean conditions."""
        return self._density_ratio(self.options.temperature_c, self.options.pressure_pa)

    def _density_ratio(self, temperature_c: float, pressure_pa: float) -> float:
        kelvin = temperature_c + 273.15
        dry = pressure_pa / _STANDARD_PRESSURE_PA * _STANDARD_TEMPERATURE_K / kelvin
        # Magnus' formula for the saturation pressure of water, Pa (common practice)
        saturated_pa = 611.2 * math.pow(10.0, 7.5 * temperature_c / (237.3 + temperature_c))
        water_pa = self.options.humidity_percent / 100.0 * saturated_pa
        return dry + water_pa * _WATER_REFRACTIVITY_PER_PA / _TYPICAL_REFRACTIVITY

    def reading(self, utc_s: float, draws: Draws) -> AmbientReading:
        """What a sensor at the bench says, its own noise included."""
        noise = draws.next_event().standard_normal(2)
        return AmbientReading(
            temperature_c=self.temperature_c(utc_s) + self.options.sensor_noise_k * float(noise[0]),
            pressure_pa=self.pressure_pa(utc_s) + self.options.sensor_noise_pa * float(noise[1]),
            humidity_percent=self.options.humidity_percent,
        )


def bench_wavelength_nm(*, wavelength_air_nm: float, density_ratio: float) -> float:
    """The wavelength in air of the given density of a line whose wavelength in standard air is known."""
    refractivity = standard_refractivity(wavelength_air_nm)
    return wavelength_air_nm * (1.0 + refractivity) / (1.0 + refractivity * density_ratio)
