"""All light that one lamp sends through the instrument as it is set, against the grating's rotation.

Every line stands at a rotation of its own in every order, with ghosts beside it; the continuum of all orders
lies below. Of these hundreds only the few that the rotation comes near are read from their tables; the far
wings of the others, smooth there, are summed once per region of rotations.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

from simulators.air import bench_wavelength_nm, standard_refractivity
from simulators.ghosts import ghosts
from simulators.lamp import LampOptions
from simulators.optics import Spectrometer
from simulators.profile import LineProfile
from simulators.shapes import Shape

_NODES = 7  # per region, of the polynomial that stands for the far wings
_CONTINUUM_CELLS = 400
_FAINTEST = 1e-12  # a ghost's share below which it is not there


class Emission(NamedTuple):
    """One line in one order (or one of its ghosts) as it meets the spectrometer."""

    strength_per_s: float
    refractivity: float  # n - 1 of standard air at its wavelength
    profile: LineProfile


class Region(NamedTuple):
    """A stretch of rotations: what must be read exactly, and the far wings as a Newton polynomial."""

    near: tuple[Emission, ...]
    middle_rad: float
    coefficients: tuple[float, ...]


class Spectrum:
    """One lamp, one setting of the slits, one filter.

    `transmission` is the filter's at a wavelength. Raises ValueError when a line of the lamp is beyond the
    grating's reach in the order of the settings.
    """

    def __init__(
        self,
        lamp: LampOptions,
        spectrometer: Spectrometer,
        *,
        density_ratio: float,
        widening: float,
        profiles: dict[tuple[int, float], LineProfile],
        transmission: Callable[[float], float],
    ) -> None:
        self.lamp = lamp
        self._spectrometer = spectrometer
        self._density_ratio = density_ratio
        self._widening = widening  # entrance slit against the one the strengths are given for
        self._profiles = profiles  # shared by the spectra of all filters
        self._transmission = transmission
        self._orders = spectrometer.options.efficiencies
        self._sources = self._all_sources()
        self.entries = tuple(self._all_entries())
        self.lines = tuple(self._reference_lines())
        self._nodes = [math.cos(math.pi * (i + 0.5) / _NODES) for i in range(_NODES)]
        reaches = [entry.profile.reach_rad for entry in self.entries]
        self._half_rad = min(reaches, default=1e-3)
        self._regions: dict[int, Region] = {}
        self.total_per_s = self._total()
        self.stray_per_s = spectrometer.options.stray_fraction * self.total_per_s

    def rate_per_s(self, rotation_rad: float, denser: float) -> float:
        """Rate at the detector for a lamp of gain 1; `denser` is the air's density above its mean, as a
        share of standard density: it shortens a wavelength, and the sine of its rotation follows. Far wings
        are too flat to notice."""
        index = math.floor(rotation_rad / (2.0 * self._half_rad))
        region = self._regions.get(index) or self._lay(index)
        rate = 0.0
        for strength, refractivity, profile in region.near:
            rate += strength * profile.share(
                rotation_rad - profile.rotation_rad + refractivity * denser * profile.tangent
            )
        if region.coefficients:
            u = (rotation_rad - region.middle_rad) / self._half_rad
            far = 0.0
            for coefficient, node in zip(region.coefficients, self._nodes, strict=True):
                far = far * (u - node) + coefficient
            rate += far
        return rate + self._continuum_per_s(rotation_rad) + self.stray_per_s

    def _continuum_per_s(self, rotation_rad: float) -> float:
        if not self.lamp.continuum_per_s_per_nm:
            return 0.0
        path_nm = self._spectrometer.centre_path_nm(rotation_rad)
        if path_nm <= 0.0:
            return 0.0
        per_path = 0.0
        for order, efficiency in self._orders.items():
            if order:
                where_nm = path_nm / order
                per_nm = self.lamp.continuum(where_nm)
                if per_nm:
                    per_path += efficiency * per_nm * self._transmission(where_nm) / order
        return self._widening * per_path * self._spectrometer.exit_path_nm(rotation_rad)

    def _lay(self, index: int) -> Region:
        """Near is what comes within its table's reach and two half regions of the middle: the others' wings
        are then so smooth that seven nodes hold them to a few 1e-9 of a line's peak."""
        half = self._half_rad
        middle = (2 * index + 1) * half
        near: list[Emission] = []
        far: list[Emission] = []
        for entry in self.entries:
            is_near = abs(middle - entry.profile.rotation_rad) < entry.profile.reach_rad + 2.0 * half
            (near if is_near else far).append(entry)
        places = [(e.strength_per_s * e.profile.wing_rad2, e.profile.rotation_rad) for e in far]
        values = [
            sum(wing / (middle + half * node - centre) ** 2 for wing, centre in places)
            for node in self._nodes
        ]
        region = Region(tuple(near), middle, _newton(self._nodes, values) if far else ())
        self._regions[index] = region
        return region

    # ---- what stands where -------------------------------------------------------------------------------

    def _all_entries(self) -> list[Emission]:
        own = self._spectrometer.options.order
        found = []
        for number, (wavelength_nm, strength, shape) in enumerate(self._sources):
            for order, efficiency in self._orders.items():
                if order == 0 and number >= len(self.lamp.lines):
                    continue  # a cell's lines are gaps in a continuum; zero order shows lines only
                for ghost in ghosts(self._spectrometer.options, order):
                    if ghost.fraction < _FAINTEST:
                        continue
                    is_own = order == own and ghost.k == 0
                    emission = self._emission(number, wavelength_nm, shape, ghost.order, must_be=is_own)
                    if emission is not None:
                        share = efficiency * ghost.fraction
                        found.append(emission._replace(strength_per_s=strength * share))
        return found

    def _reference_lines(self) -> list[Emission]:
        """The lamp's lines in the order of the settings."""
        order = self._spectrometer.options.order
        share = self._orders.get(order, 0.0) * ghosts(self._spectrometer.options, order)[0].fraction
        lines = []
        for number, (wavelength_nm, strength, shape) in enumerate(self._sources[: len(self.lamp.lines)]):
            emission = self._emission(number, wavelength_nm, shape, float(order), must_be=True)
            assert emission is not None
            lines.append(emission._replace(strength_per_s=strength * share))
        return lines

    def _all_sources(self) -> list[tuple[float, float, Shape]]:
        """Wavelength in standard air, strength behind filter and absorbers, shape: lines, then the cell's
        gaps in the continuum as lines of negative strength."""
        sources = []
        for line in self.lamp.lines:
            shape = line.shape(self.lamp.cell)
            passed = self._widening * self._transmission(line.wavelength_air_nm) * shape.area
            sources.append((line.wavelength_air_nm, line.strength_per_s * passed, shape))
        for where_nm, shape in self.lamp.cell_clusters():
            gap = self.lamp.continuum(where_nm) * self._transmission(where_nm) * shape.area
            sources.append((where_nm, -self._widening * gap, shape))
        return sources

    def _emission(
        self, number: int, wavelength_air_nm: float, shape: Shape, order: float, *, must_be: bool
    ) -> Emission | None:
        """Of strength 0; None where the grating cannot turn that far."""
        profile = self._profiles.get((number, order))
        if profile is None:
            try:
                profile = LineProfile(
                    self._spectrometer,
                    wavelength_nm=bench_wavelength_nm(
                        wavelength_air_nm=wavelength_air_nm, density_ratio=self._density_ratio
                    ),
                    shape=shape,
                    order=order,
                )
            except ValueError:
                if must_be:
                    raise
                return None
            self._profiles[number, order] = profile
        return Emission(0.0, standard_refractivity(wavelength_air_nm), profile)

    def _total(self) -> float:
        """All light behind filter and entrance slit, per s: lines and continuum, less the cell's gaps."""
        total = math.fsum(strength for _, strength, _ in self._sources)
        lamp = self.lamp
        if lamp.continuum_per_s_per_nm:
            width_nm = (lamp.continuum_longest_nm - lamp.continuum_shortest_nm) / _CONTINUUM_CELLS
            for cell in range(_CONTINUUM_CELLS):
                where_nm = lamp.continuum_shortest_nm + (cell + 0.5) * width_nm
                light = lamp.continuum(where_nm) * self._transmission(where_nm)
                total += self._widening * light * width_nm
        return total

    @property
    def brightest_per_s(self) -> float:
        """Above any rate that a lamp of gain 1 can make."""
        lines = sum(max(entry.strength_per_s, 0.0) for entry in self.entries)
        lamp = self.lamp
        if not lamp.continuum_per_s_per_nm:
            return lines + self.stray_per_s
        highest = max(lamp.continuum(lamp.continuum_shortest_nm), lamp.continuum(lamp.continuum_longest_nm))
        widest = max(
            abs(self._spectrometer.exit_path_nm(turn)) for turn in (0.0, math.pi / 4.0, math.pi / 2.0)
        )
        orders = sum(efficiency / order for order, efficiency in self._orders.items() if order)
        return lines + self.stray_per_s + self._widening * highest * 1.5 * widest * orders


def _newton(nodes: list[float], values: list[float]) -> tuple[float, ...]:
    """Coefficients of Newton's interpolation, highest first, for c = c (u - node) + next from the front.

    Divided differences are built from the last node backwards, so that the nodes come in reading order."""
    table = list(reversed(values))
    places = list(reversed(nodes))
    for level in range(1, len(table)):
        for i in range(len(table) - 1, level - 1, -1):
            table[i] = (table[i] - table[i - 1]) / (places[i] - places[i - level])
    return tuple(reversed(table))
