"""What a line leaves behind the exit slit while the grating turns.

- The ruled width, N grooves, sends light of wavelength L into path differences around mL with the intensity
  sinc^2(N (P - mL) / L) (Fraunhofer diffraction at a slit as wide as the ruling).
- A place in the entrance slit and the two edges of the exit slit are two path differences, and what passes
  between them is a difference of the cumulated spread C(P) of line, diffraction and the ruling's zones.
- The entrance slit's points are independent sources: their transmissions are averaged, which is a difference
  of the integral of C. So are the zones of a concave ruling averaged, each of which brings another wavelength
  to the slit's middle when out of focus.

C(P) is summed in the Fourier domain, where sinc^2 is a triangle with a definite end and the Doppler width a
Gaussian, so its wide tails are not cut off anywhere. The zones are a factor there, taken at the line's own
rotation and the slits' middles: against a sum over all rays that is within 2e-3 of the peak in focus, and
within 1.5e-2 where a grating far out of focus spreads a line over several nm.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from typing import Any

import numpy as np

from simulators.optics import Spectrometer, panels
from simulators.rays import FloatArray
from simulators.shapes import Shape

_STRIPS = 8  # of the entrance slit
_BLOCK = 64  # cells of the spread's grid that share one coarse wave
_CELLS_PER_WIDTH = 16  # cells of the look-up grid per width of line and diffraction together


class CumulatedSpread:
    """The integral of C(P) up to a path difference, nm; C is the share of a line's light with a path
    difference below P, line and diffraction together.

    C is tabulated with its derivative on a grid; between the nodes it is Hermite's cubic, and its integral
    exactly that cubic's. `source` is the transform of the line and of the zones, in path differences from the
    centre.
    """

    def __init__(
        self,
        *,
        centre_nm: float,
        diffraction_nm: float,
        sigma_nm: float,
        tail_nm: float,
        reach_nm: float,
        source: Callable[[FloatArray], Any],
    ) -> None:
        self.width_nm = math.hypot(0.886 * diffraction_nm, 2.355 * sigma_nm)
        step = self.width_nm / _CELLS_PER_WIDTH
        blocks = 2 * math.ceil(reach_nm / step / _BLOCK) + 1
        first_nm = -(blocks // 2) * _BLOCK * step
        # the triangle ends at 1/diffraction; the Gaussian is below 1e-16 beyond 8.6/(2 pi sigma)
        end = 1.0 / diffraction_nm
        if sigma_nm:
            end = min(end, 8.6 / (2.0 * math.pi * sigma_nm))
        frequency, weights = panels(0.0, end, 4 + math.ceil(0.4 * end * reach_nm))
        spread = (1.0 - frequency * diffraction_nm) * source(frequency)
        turn = 2.0j * math.pi * frequency
        # a one-sided exponential tail, its mean taken off so that the line stays where it is
        spectrum = spread * np.exp(turn * tail_nm) / (1.0 + turn * tail_nm) * weights
        # the grid is even, so a wave on it is a product of two short ones; einsum's plain sums, as the last
        # bits of a matrix product depend on the machine's BLAS
        coarse = np.exp(np.outer(first_nm + np.arange(blocks) * (_BLOCK * step), turn))
        fine = np.exp(np.outer(np.arange(_BLOCK) * step, turn))
        self._first_nm = centre_nm + first_nm
        self._step = step
        rise = 2.0 * np.einsum("bf,cf->bc", coarse * spectrum, fine).real.ravel() * step
        waves = np.einsum("bf,cf->bc", coarse * (spectrum / (math.pi * frequency)), fine)
        value = 0.5 + waves.imag.ravel()
        low, high, rise_low, rise_high = value[:-1], value[1:], rise[:-1], rise[1:]
        # the cubic low + u rise_low + u^2 a + u^3 b, integrated term by term
        a, b = 3.0 * (high - low) - 2.0 * rise_low - rise_high, rise_low + rise_high - 2.0 * (high - low)
        self._terms = np.stack([low, rise_low / 2.0, a / 3.0, b / 4.0])
        self._before = np.concatenate(([0.0], np.cumsum(self._terms.sum(axis=0))))

    def __call__(self, path_difference_nm: FloatArray) -> FloatArray:
        place = (path_difference_nm - self._first_nm) / self._step
        cell = np.clip(place.astype(np.int64), 0, self._terms.shape[1] - 1)
        u = np.clip(place - cell, 0.0, 1.0)
        one, two, three, four = self._terms[:, cell]
        within = u * (one + u * (two + u * (three + u * four)))
        return np.asarray(self._step * (self._before[cell] + within))


class LineProfile:
    """What share of one line passes both slits, against the grating's rotation.

    A table on an even grid of rotations, 16 cells to the width of line and diffraction, read by a cubic
    through four neighbours: within 2e-6 of the peak of the integral it stands for (the tests hold it against
    brute force). Beyond the table, where only the wings of diffraction and of Lorentz widths are left, their
    mean (the sin^2 replaced by 1/2) goes on as the inverse square of the distance. The table is laid when it
    is first asked for: most lines of a lamp are never come near.

    `order` need not be whole: a ghost stands beside its order. Raises ValueError beyond the grating's reach.
    """

    def __init__(
        self, spectrometer: Spectrometer, *, wavelength_nm: float, shape: Shape, order: float | None = None
    ) -> None:
        options = spectrometer.options
        order = options.order if order is None else order
        self._spectrometer = spectrometer
        self._shape = shape
        self._order = order
        self._centre_nm = order * wavelength_nm
        self.rotation_rad = spectrometer.rotation_rad(wavelength_nm, order)
        self.tangent = math.tan(self.rotation_rad)
        self._entrance_nm, self._exit_nm = spectrometer.slit_paths_nm(self.rotation_rad)
        self._slits_nm = self._entrance_nm + self._exit_nm
        self._diffraction_nm = wavelength_nm / spectrometer.grooves
        self._sigma_nm = order * shape.finest_sigma_nm
        self._tail_nm = options.coma_um / options.exit_slit_um * self._exit_nm
        self._zone_reach_nm = 0.0
        if not spectrometer.rays.is_collimated:
            self._zone_reach_nm = float(np.max(np.abs(spectrometer.zone_paths_nm(self.rotation_rad)[0])))
        # path difference per rotation, only to lay the grid and to scale the far wings
        self._per_rad = spectrometer.path_per_rad(self.rotation_rad)
        self._reach_nm = (
            self._slits_nm / 2.0
            + 30.0 * self._diffraction_nm
            + order * shape.reach_nm
            + 15.0 * self._tail_nm
            + 1.01 * self._zone_reach_nm
        )
        self.reach_rad = self._reach_nm / self._per_rad
        wing_nm = self._diffraction_nm / (2.0 * math.pi**2) + order * shape.wing_nm
        self.wing_rad2 = self._exit_nm * wing_nm / self._per_rad**2

    @property
    def order(self) -> float:
        return self._order

    def share(self, offset_rad: float) -> float:
        """The share that passes at `offset_rad` from the rotation that centres the line."""
        if not -self.reach_rad < offset_rad < self.reach_rad:
            return self.wing_rad2 / (offset_rad * offset_rad)
        first_rad, per_cell, table = self._table
        place = (offset_rad - first_rad) * per_cell
        cell = int(place)
        u = place - cell
        a, b, c, d = table[cell - 1 : cell + 3]
        # Lagrange's cubic through four neighbours
        return b + u * (
            (c - a / 3.0 - b / 2.0 - d / 6.0) + u * ((a + c) / 2.0 - b + u * ((d - a) / 6.0 + (b - c) / 2.0))
        )

    @property
    def exit_width_rad(self) -> float:
        """The exit slit's width as a rotation: the integral of the share over all rotations."""
        return self._exit_nm / self._per_rad

    @functools.cached_property
    def peak(self) -> float:
        """The largest share: what slits, line and diffraction leave of the strength at the line's top."""
        return max(self._table[2])

    @functools.cached_property
    def fwhm_nm(self) -> float:
        """Full width at half maximum of the recorded line, nm of wavelength, from the table."""
        _, per_cell, values = self._table
        table, half = np.asarray(values), self.peak / 2.0
        above = np.flatnonzero(table > half)
        first, last = int(above[0]), int(above[-1])
        left = (table[first] - half) / (table[first] - table[first - 1])
        right = (table[last] - half) / (table[last] - table[last + 1])
        cells = float(last - first + left + right)
        return cells / per_cell * self._per_rad / self._order

    def _source(self, frequency_per_nm: FloatArray) -> Any:
        """Transform of the line, and of the zones where they differ, in path differences."""
        line = self._shape.transform(self._order * frequency_per_nm)
        if not self._zone_reach_nm:
            return line
        waves = 2.0 * self._zone_reach_nm * float(frequency_per_nm[-1])
        paths_nm, weights = self._spectrometer.zone_paths_nm(self.rotation_rad, 2 + math.ceil(0.5 * waves))
        zones = np.zeros(frequency_per_nm.shape, dtype=np.complex128)
        for start in range(0, frequency_per_nm.size, 256):
            block = slice(start, start + 256)
            turns = np.exp(2.0j * math.pi * np.outer(frequency_per_nm[block], paths_nm))
            zones[block] = np.einsum("fz,z->f", turns, weights)
        return line * zones

    @functools.cached_property
    def _table(self) -> tuple[float, float, list[float]]:
        """First offset (rad), cells per rad, shares."""
        spread = CumulatedSpread(
            centre_nm=self._centre_nm,
            diffraction_nm=self._diffraction_nm,
            sigma_nm=self._sigma_nm,
            tail_nm=self._tail_nm,
            reach_nm=1.05 * (self._reach_nm + self._slits_nm),
            source=self._source,
        )
        cell_rad = spread.width_nm / _CELLS_PER_WIDTH / self._per_rad
        cells = math.ceil(self.reach_rad / cell_rad) + 2
        rotations = self.rotation_rad + cell_rad * np.arange(-cells, cells + 1, dtype=np.float64)
        options = self._spectrometer.options
        half_exit_mm = options.exit_slit_um * 5e-4
        # strips of the entrance slit: within one, path differences are even, so that the mean of C over it is
        # a difference of C's integral
        edges_mm = np.linspace(-0.5, 0.5, _STRIPS + 1) * options.entrance_slit_um * 1e-3
        share = np.zeros_like(rotations)
        for side_mm, sign in ((half_exit_mm, 1.0), (-half_exit_mm, -1.0)):
            paths = [self._spectrometer.path_difference_nm(rotations, x1, side_mm) for x1 in edges_mm]
            below = [spread(path) for path in paths]
            for strip in range(_STRIPS):
                width = paths[strip + 1] - paths[strip]
                share += sign / _STRIPS * (below[strip + 1] - below[strip]) / width
        return -cells * cell_rad, 1.0 / cell_rad, share.tolist()
