"""Lamps: lines, a continuum, a cell before it; warming up, drifting, flickering.

Strengths are the rates at the detector, per s, when all light of a line that has passed the entrance slit
also passes the exit slit: the lamp's power, the grating's efficiency and the detector's are in that number.
They hold for the entrance slit of `[world.options.optics]`, evenly lit, and before any absorber.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

from pydantic import Field

from drivers.settings import ListOf, Name, StrictModel
from simulators.draw import Draws, smooth_drift
from simulators.shapes import Component, Shape, absorption, emission

_BOLTZMANN_J_PER_K = 1.380649e-23  # exact, SI
_ATOMIC_MASS_KG = 1.66053906660e-27  # CODATA 2018
_SPEED_OF_LIGHT_M_PER_S = 299792458.0  # exact, SI
_FWHM_PER_SIGMA = math.sqrt(8.0 * math.log(2.0))
_CELL_REACH_NM = 0.5  # a cell's line further than this from a line leaves it alone


class Broadened(StrictModel):
    """Doppler width, outright or by the temperature and mass of the atoms, and a Lorentz width: natural and
    pressure broadening together."""

    doppler_fwhm_pm: float | None = Field(default=None, gt=0.0)
    temperature_k: float | None = Field(default=None, gt=0.0)
    mass_u: float | None = Field(default=None, gt=0.0)
    lorentz_fwhm_pm: float = Field(default=0.0, ge=0.0, le=1000.0)

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        given = [value is not None for value in (self.doppler_fwhm_pm, self.temperature_k, self.mass_u)]
        if given not in ([True, False, False], [False, True, True]):
            yield "", "needs either doppler_fwhm_pm, or both temperature_k and mass_u"

    def doppler_nm(self, wavelength_nm: float, mass_u: float | None = None) -> float:
        """FWHM at a wavelength; `mass_u` in place of the table's own."""
        if self.doppler_fwhm_pm is not None:
            return self.doppler_fwhm_pm * 1e-3
        assert self.temperature_k is not None
        assert self.mass_u is not None
        return doppler_fwhm_nm(
            wavelength_nm=wavelength_nm, temperature_k=self.temperature_k, mass_u=mass_u or self.mass_u
        )


class ComponentOptions(StrictModel):
    """One hyperfine or isotope component; strengths count against each other."""

    offset_pm: float = Field(ge=-1000.0, le=1000.0)
    strength: float = Field(gt=0.0)
    mass_u: float | None = Field(default=None, gt=0.0)


class ReversalOptions(Broadened):
    """A cooler layer of the same atoms before the lamp's hot core: each component absorbs by its share."""

    optical_depth: float = Field(gt=0.0, le=1000.0)
    shift_pm: float = Field(default=0.0, ge=-100.0, le=100.0)


class LineOptions(Broadened):
    """One line. Offsets of its components are from `wavelength_air_nm`."""

    wavelength_air_nm: float = Field(gt=100.0, lt=20000.0)
    strength_per_s: float = Field(ge=0.0)
    components: ListOf[ComponentOptions] = ()
    reversal: ReversalOptions | None = None

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        yield from super().cross_checks()
        if self.doppler_fwhm_pm is not None and any(c.mass_u is not None for c in self.components):
            yield "components", "a mass_u needs the line's temperature_k and mass_u, not doppler_fwhm_pm"

    @property
    def fwhm_nm(self) -> float:
        """The Doppler width of a single component of the line's own mass."""
        return self.doppler_nm(self.wavelength_air_nm)

    def shape(self, cell: tuple[CellLineOptions, ...] = ()) -> Shape:
        """Its profile as it leaves the lamp and the cell."""
        parts = self._parts(self, 0.0)
        absorbers: list[Component] = []
        if self.reversal is not None:
            layer = self.reversal
            # peak depth of each component by its share, as if all stood in one place with one width
            absorbers = [
                part._replace(height=part.height * layer.optical_depth)
                for part in self._parts(layer, layer.shift_pm * 1e-3)
            ]
        absorbers += [
            line.absorber(self.wavelength_air_nm)
            for line in cell
            if abs(line.wavelength_air_nm - self.wavelength_air_nm) < _CELL_REACH_NM
        ]
        return emission(parts, absorbers)

    def _parts(self, width: Broadened, shift_nm: float) -> tuple[Component, ...]:
        lorentz_nm = width.lorentz_fwhm_pm * 1e-3

        def sigma_nm(mass_u: float | None) -> float:
            return width.doppler_nm(self.wavelength_air_nm, mass_u) / _FWHM_PER_SIGMA

        if not self.components:
            return (Component(shift_nm, 1.0, sigma_nm(None), lorentz_nm),)
        total = math.fsum(c.strength for c in self.components)
        return tuple(
            Component(c.offset_pm * 1e-3 + shift_nm, c.strength / total, sigma_nm(c.mass_u), lorentz_nm)
            for c in self.components
        )


class CellLineOptions(Broadened):
    """One absorption line of a cell before the entrance slit (Beer and Lambert)."""

    wavelength_air_nm: float = Field(gt=100.0, lt=20000.0)
    optical_depth: float = Field(gt=0.0, le=1000.0)  # at its centre

    def absorber(self, around_nm: float) -> Component:
        sigma_nm = self.doppler_nm(self.wavelength_air_nm) / _FWHM_PER_SIGMA
        offset_nm = self.wavelength_air_nm - around_nm
        return Component(offset_nm, self.optical_depth, sigma_nm, self.lorentz_fwhm_pm * 1e-3)


class LampOptions(StrictModel):
    """`[world.options.lamp]`"""

    lines: ListOf[LineOptions] = ()
    cell: ListOf[CellLineOptions] = ()
    continuum_per_s_per_nm: float = Field(default=0.0, ge=0.0)  # at continuum_at_nm
    continuum_at_nm: float = Field(default=500.0, gt=100.0, lt=20000.0)
    continuum_slope_per_nm: float = Field(default=0.0, ge=-0.1, le=0.1)  # as a fraction of that
    continuum_shortest_nm: float = Field(default=185.0, gt=0.0)  # air takes what is shorter
    continuum_longest_nm: float = Field(default=1100.0, lt=20000.0)  # the detector sees nothing longer
    burning_s: float = Field(default=3600.0, ge=0.0)  # how long the lamp has been on when the night starts
    warm_up_s: float = Field(default=300.0, gt=0.0)
    warm_up_depth: float = Field(default=0.3, ge=0.0, lt=1.0)
    drift_fraction: float = Field(default=0.003, ge=0.0, le=0.2)
    drift_period_s: float = Field(default=1800.0, ge=10.0)
    flicker_fraction: float = Field(default=0.0, ge=0.0, le=0.3)  # rms of one cell of flicker_time_s
    flicker_time_s: float = Field(default=0.1, ge=0.001, le=10.0)

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if not self.lines and not self.continuum_per_s_per_nm:
            yield "lines", "missing; a lamp needs lines or a continuum"
        if self.continuum_shortest_nm >= self.continuum_longest_nm:
            yield "continuum_shortest_nm", f"must be below continuum_longest_nm = {self.continuum_longest_nm}"

    def continuum(self, wavelength_nm: float) -> float:
        """Per s and nm, before the cell."""
        if not self.continuum_shortest_nm <= wavelength_nm <= self.continuum_longest_nm:
            return 0.0
        slope = self.continuum_slope_per_nm * (wavelength_nm - self.continuum_at_nm)
        return self.continuum_per_s_per_nm * max(1.0 + slope, 0.0)

    def cell_clusters(self) -> list[tuple[float, Shape]]:
        """The cell's lines, those that may overlap as one: a wavelength and what is taken around it."""
        clusters: list[list[CellLineOptions]] = []
        for line in sorted(self.cell, key=lambda one: one.wavelength_air_nm):
            if clusters and line.wavelength_air_nm - clusters[-1][-1].wavelength_air_nm < _CELL_REACH_NM:
                clusters[-1].append(line)
            else:
                clusters.append([line])
        middles = [(c[0].wavelength_air_nm + c[-1].wavelength_air_nm) / 2.0 for c in clusters]
        return [
            (middle, absorption([line.absorber(middle) for line in cluster]))
            for middle, cluster in zip(middles, clusters, strict=True)
        ]


class NamedLampOptions(LampOptions):
    """`[[world.options.lamps]]`: one of several, chosen by a mirror or turret."""

    name: Name


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
    noise: Draws
    is_on: bool = True

    @classmethod
    def build(cls, options: LampOptions, seed: int, start_utc_s: float, name: str = "lamp") -> Lamp:
        drift = smooth_drift(Draws(seed, name), rms=options.drift_fraction, period_s=options.drift_period_s)
        return cls(options, start_utc_s - options.burning_s, drift, Draws(seed, f"{name} flicker"))

    def switch(self, is_on: bool, utc_s: float) -> None:
        """Off at once; on begins a new warm-up."""
        if is_on and not self.is_on:
            self.lit_at_s = utc_s
        self.is_on = is_on

    def gain(self, utc_s: float) -> float:
        """1 when warm and on average; 0 when off. Without the flicker."""
        if not self.is_on:
            return 0.0
        cold = math.exp(-max(utc_s - self.lit_at_s, 0.0) / self.options.warm_up_s)
        return (1.0 - self.options.warm_up_depth * cold) * (1.0 + self.drift(utc_s))

    def flicker(self, start_utc_s: float, end_utc_s: float) -> float:
        """Mean of the fast noise, 1 on average, between two moments.

        Time is cut into cells, each with a number of its own drawn by the cell's place in time: whoever looks
        at the same moments sees the same, and a long gate averages many cells."""
        rms, cell_s = self.options.flicker_fraction, self.options.flicker_time_s
        first, last = math.floor(start_utc_s / cell_s), math.floor(end_utc_s / cell_s)
        total = 0.0
        for cell in range(first, last + 1):
            inside_s = min(end_utc_s, (cell + 1) * cell_s) - max(start_utc_s, cell * cell_s)
            value = max(1.0 + rms * float(self.noise.event(cell).standard_normal()), 0.0)
            if first == last:
                return value
            total += inside_s * value
        return total / (end_utc_s - start_utc_s)
