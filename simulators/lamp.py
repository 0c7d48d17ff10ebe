"""The lamp: Doppler-broadened lines and a continuum, warming up and drifting.

Strengths are the rates at the detector, per s, when all light of a line that has passed the entrance slit
also passes the exit slit: the lamp's power, the grating's efficiency and the detector's are in that number.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

from pydantic import Field

from drivers.settings import ListOf, StrictModel
from simulators.draw import Draws, smooth_drift

_BOLTZMANN_J_PER_K = 1.380649e-23  # exact, SI
_ATOMIC_MASS_KG = 1.66053906660e-27  # CODATA 2018
_SPEED_OF_LIGHT_M_PER_S = 299792458.0  # exact, SI


class LineOptions(StrictModel):
    """One line. Its width is given outright, or by the temperature and mass of the atoms."""

    wavelength_air_nm: float = Field(gt=100.0, lt=20000.0)
    strength_per_s: float = Field(ge=0.0)
    doppler_fwhm_pm: float | None = Field(default=None, gt=0.0)
    temperature_k: float | None = Field(default=None, gt=0.0)
    mass_u: float | None = Field(default=None, gt=0.0)

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        given = [value is not None for value in (self.doppler_fwhm_pm, self.temperature_k, self.mass_u)]
        if given not in ([True, False, False], [False, True, True]):
            yield "", "needs either doppler_fwhm_pm, or both temperature_k and mass_u"

    @property
    def fwhm_nm(self) -> float:
        if self.doppler_fwhm_pm is not None:
            return self.doppler_fwhm_pm * 1e-3
        assert self.temperature_k is not None
        assert self.mass_u is not None
        return doppler_fwhm_nm(
            wavelength_nm=self.wavelength_air_nm, temperature_k=self.temperature_k, mass_u=self.mass_u
        )


class LampOptions(StrictModel):
    """`[world.options.lamp]`"""

    lines: ListOf[LineOptions] = Field(min_length=1)
    continuum_per_s_per_nm: float = Field(default=0.0, ge=0.0)
    burning_s: float = Field(default=3600.0, ge=0.0)  # how long the lamp has been on when the night starts
    warm_up_s: float = Field(default=300.0, gt=0.0)
    warm_up_depth: float = Field(default=0.3, ge=0.0, lt=1.0)
    drift_fraction: float = Field(default=0.003, ge=0.0, le=0.2)
    drift_period_s: float = Field(default=1800.0, ge=10.0)


def doppler_fwhm_nm(*, wavelength_nm: float, temperature_k: float, mass_u: float) -> float:
    """FWHM of a thermal line: the speeds along the line of sight are normal with variance kT/M."""
    speed_m_per_s = math.sqrt(_BOLTZMANN_J_PER_K * temperature_k / (mass_u * _ATOMIC_MASS_KG))
    return wavelength_nm * speed_m_per_s / _SPEED_OF_LIGHT_M_PER_S * math.sqrt(8.0 * math.log(2.0))


@dataclass(slots=True)
class Lamp:
    """The lamp's intensity against its steady one; time in s since 1970, UTC."""

    options: LampOptions
    lit_at_s: float
    drift: Callable[[float], float]
    is_on: bool = True

    @classmethod
    def build(cls, options: LampOptions, seed: int, start_utc_s: float) -> Lamp:
        drift = smooth_drift(Draws(seed, "lamp"), rms=options.drift_fraction, period_s=options.drift_period_s)
        return cls(options, start_utc_s - options.burning_s, drift)

    def switch(self, is_on: bool, utc_s: float) -> None:
        """Off at once; on begins a new warm-up."""
        if is_on and not self.is_on:
            self.lit_at_s = utc_s
        self.is_on = is_on

    def gain(self, utc_s: float) -> float:
        """1 when warm and on average; 0 when off."""
        if not self.is_on:
            return 0.0
        cold = math.exp(-max(utc_s - self.lit_at_s, 0.0) / self.options.warm_up_s)
        return (1.0 - self.options.warm_up_depth * cold) * (1.0 + self.drift(utc_s))
