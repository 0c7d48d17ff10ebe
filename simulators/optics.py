"""A plane grating between two arms at a fixed angle: rays, path differences, slit images.

Nothing here uses a grating equation. The grating is a row of grooves along a unit vector t; a ray that
comes from the direction u and leaves towards v meets neighbouring grooves with a path difference
P = d t.(u + v). All else follows:

- the ruled width, N grooves, sends light of wavelength L into path differences around mL with the intensity
  sinc^2(N (P - mL) / L) (Fraunhofer diffraction at a slit as wide as the ruling);
- a point at x1 in the entrance slit tilts u by atan(x1/f), a point at x2 in the exit slit tilts v likewise,
  so the two edges of the exit slit are two path differences, and what passes between them is a difference
  of the cumulated spread C(P) of line and diffraction together;
- the entrance slit's points are independent sources: their transmissions are averaged.

C(P) is summed in the Fourier domain, where sinc^2 is a triangle with a definite end and the Doppler width a
Gaussian, so its wide tails are not cut off anywhere.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.polynomial.legendre import leggauss
from numpy.typing import NDArray
from pydantic import Field

from drivers.settings import StrictModel

FloatArray = NDArray[np.float64]

_SLIT_NODES = 48  # points of the entrance slit
_BLOCK = 64  # cells of the spread's grid that share one coarse wave
_CELLS_PER_WIDTH = 16  # cells of the look-up grid per width of line and diffraction together


class OpticsOptions(StrictModel):
    """`[world.options.optics]`: the instrument as it truly is."""

    mount: Literal["plane"] = "plane"
    groove_density_per_mm: float = Field(gt=0.0, le=10000.0)
    ruled_width_mm: float = Field(gt=0.0, le=1000.0)
    focal_length_mm: float = Field(gt=0.0, le=20000.0)
    included_angle_deg: float = Field(gt=0.0, lt=180.0)
    order: int = Field(default=1, ge=1, le=20)
    entrance_slit_um: float = Field(gt=0.0, le=5000.0)
    exit_slit_um: float = Field(gt=0.0, le=5000.0)
    coma_um: float = Field(default=0.0, ge=0.0, le=100.0)  # mean length of a one-sided tail of the slit image


@dataclass(frozen=True, slots=True)
class Spectrometer:
    """The rays. Lengths in nm unless the name says otherwise, angles in rad, rotation 0 at zero order."""

    options: OpticsOptions

    @property
    def groove_spacing_nm(self) -> float:
        return 1e6 / self.options.groove_density_per_mm

    @property
    def grooves(self) -> float:
        """How many grooves are lit: the beam fills the ruled width."""
        return self.options.groove_density_per_mm * self.options.ruled_width_mm

    def path_difference_nm(
        self, rotation_rad: FloatArray | float, entrance_mm: FloatArray | float, exit_mm: FloatArray | float
    ) -> FloatArray:
        """Path difference between neighbouring grooves, by vectors in the plane of dispersion.

        The y axis halves the included angle; the entrance arm stands on its right, the exit arm on its left.
        Turning the grating by a positive rotation brings its groove vector towards the entrance arm.
        """
        half_rad = math.radians(self.options.included_angle_deg) / 2.0
        focal_mm = self.options.focal_length_mm
        inward_rad = half_rad + np.arctan(np.asarray(entrance_mm) / focal_mm)
        outward_rad = -half_rad + np.arctan(np.asarray(exit_mm) / focal_mm)
        sum_x = np.sin(inward_rad) + np.sin(outward_rad)
        sum_y = np.cos(inward_rad) + np.cos(outward_rad)
        rotation = np.asarray(rotation_rad)
        return np.asarray(self.groove_spacing_nm * (np.cos(rotation) * sum_x + np.sin(rotation) * sum_y))

    def wavelength_nm(self, rotation_rad: FloatArray | float) -> FloatArray:
        """What passes from slit centre to slit centre."""
        return self.path_difference_nm(rotation_rad, 0.0, 0.0) / self.options.order

    def rotation_rad(self, wavelength_nm: float) -> float:
        """The rotation that brings a wavelength to the exit slit's centre, found by bisection.

        Raises ValueError when no rotation up to 90 degrees does.
        """
        low, high = 0.0, math.pi / 2.0
        if not self.wavelength_nm(low) <= wavelength_nm <= self.wavelength_nm(high):
            raise ValueError(f"{wavelength_nm:g} nm is beyond what this grating can reach")
        while True:
            middle = (low + high) / 2.0
            if middle in (low, high):
                return middle
            if self.wavelength_nm(middle) < wavelength_nm:
                low = middle
            else:
                high = middle

    def bandpass_nm(self, wavelength_nm: float) -> tuple[float, float]:
        """Widths of the images of the entrance and the exit slit, in nm of wavelength, edge to edge."""
        rotation = self.rotation_rad(wavelength_nm)
        one, two = (w * 1e-3 / 2.0 for w in (self.options.entrance_slit_um, self.options.exit_slit_um))
        order = self.options.order
        entrance = self.path_difference_nm(rotation, one, 0.0) - self.path_difference_nm(rotation, -one, 0.0)
        exit_ = self.path_difference_nm(rotation, 0.0, two) - self.path_difference_nm(rotation, 0.0, -two)
        return float(entrance) / order, float(exit_) / order


def _panels(end: float, count: int) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes and weights on `count` even panels of (0, end), 16 to a panel."""
    nodes, weights = leggauss(16)
    width = end / count
    places = (np.arange(count)[:, None] + (nodes + 1.0) / 2.0) * width
    return places.ravel(), np.tile(weights * width / 2.0, count)


class CumulatedSpread:
    """C(P): the share of a line's light with a path difference below P; line and diffraction together.

    Tabulated with its derivative on a grid and read by cubic Hermite interpolation.
    """

    def __init__(
        self, *, centre_nm: float, diffraction_nm: float, sigma_nm: float, tail_nm: float, reach_nm: float
    ) -> None:
        self.width_nm = math.hypot(0.886 * diffraction_nm, 2.355 * sigma_nm)
        step = self.width_nm / _CELLS_PER_WIDTH
        blocks = 2 * math.ceil(reach_nm / step / _BLOCK) + 1
        first_nm = -(blocks // 2) * _BLOCK * step
        # the triangle ends at 1/diffraction; the Gaussian is below 1e-16 beyond 8.6/(2 pi sigma)
        end = min(1.0 / diffraction_nm, 8.6 / (2.0 * math.pi * sigma_nm))
        frequency, weights = _panels(end, 4 + math.ceil(0.4 * end * reach_nm))
        spread = (1.0 - frequency * diffraction_nm) * np.exp(-2.0 * (math.pi * sigma_nm * frequency) ** 2)
        turn = 2.0j * math.pi * frequency
        # a one-sided exponential tail, its mean taken off so that the line stays where it is
        spectrum = spread * np.exp(turn * tail_nm) / (1.0 + turn * tail_nm) * weights
        # the grid is even, so a wave on it is a product of two short ones; einsum's plain sums, as the last
        # bits of a matrix product depend on the machine's BLAS
        coarse = np.exp(np.outer(first_nm + np.arange(blocks) * (_BLOCK * step), turn))
        fine = np.exp(np.outer(np.arange(_BLOCK) * step, turn))
        self._first_nm = centre_nm + first_nm
        self._step = step
        self._slope = 2.0 * np.einsum("bf,cf->bc", coarse * spectrum, fine).real.ravel()
        waves = np.einsum("bf,cf->bc", coarse * (spectrum / (math.pi * frequency)), fine)
        self._value = 0.5 + waves.imag.ravel()

    def __call__(self, path_difference_nm: FloatArray) -> FloatArray:
        place = (path_difference_nm - self._first_nm) / self._step
        cell = np.clip(place.astype(np.int64), 0, self._value.size - 2)
        u = np.clip(place - cell, 0.0, 1.0)
        low, high = self._value[cell], self._value[cell + 1]
        rise_low, rise_high = self._slope[cell] * self._step, self._slope[cell + 1] * self._step
        turn = high - low
        return np.asarray(
            low
            + u
            * (
                rise_low
                + u * (3.0 * turn - 2.0 * rise_low - rise_high + u * (rise_low + rise_high - 2.0 * turn))
            )
        )


class LineProfile:
    """What share of one line passes both slits, against the grating's rotation.

    A table on an even grid of rotations, 16 cells to the width of line and diffraction, read by a cubic
    through four neighbours: within 2e-6 of the peak of the integral it stands for (the tests hold it against
    brute force). Beyond the table, where only diffraction's wings are left, their mean (the sin^2 replaced by
    1/2) goes on as the inverse square of the distance. The table is laid when it is first asked for: most
    lines of a lamp are never come near.
    """

    def __init__(self, spectrometer: Spectrometer, *, wavelength_nm: float, fwhm_nm: float) -> None:
        options = spectrometer.options
        order = options.order
        self._spectrometer = spectrometer
        self._centre_nm = order * wavelength_nm
        self.rotation_rad = spectrometer.rotation_rad(wavelength_nm)
        self.tangent = math.tan(self.rotation_rad)
        entrance_nm, self._exit_nm = (order * w for w in spectrometer.bandpass_nm(wavelength_nm))
        self._slits_nm = entrance_nm + self._exit_nm
        self._diffraction_nm = wavelength_nm / spectrometer.grooves
        self._sigma_nm = order * fwhm_nm / math.sqrt(8.0 * math.log(2.0))
        self._tail_nm = options.coma_um / options.exit_slit_um * self._exit_nm
        half_included_rad = math.radians(options.included_angle_deg) / 2.0
        slope = spectrometer.groove_spacing_nm * 2.0 * math.cos(half_included_rad)
        # path difference per rotation, only to lay the grid and to scale the far wings
        self._per_rad = slope * math.cos(self.rotation_rad)
        self._reach_nm = (
            self._slits_nm / 2.0 + 30.0 * self._diffraction_nm + 8.0 * self._sigma_nm + 15.0 * self._tail_nm
        )
        self._reach_rad = self._reach_nm / self._per_rad
        self._wing_rad2 = self._exit_nm * self._diffraction_nm / (2.0 * math.pi**2) / self._per_rad**2

    def share(self, offset_rad: float) -> float:
        """The share that passes at `offset_rad` from the rotation that centres the line."""
        if not -self._reach_rad < offset_rad < self._reach_rad:
            return self._wing_rad2 / (offset_rad * offset_rad)
        first_rad, per_cell, table = self._table
        place = (offset_rad - first_rad) * per_cell
        cell = int(place)
        u = place - cell
        a, b, c, d = table[cell - 1 : cell + 3]
        # Lagrange's cubic through four neighbours
        return b + u * (
            (c - a / 3.0 - b / 2.0 - d / 6.0) + u * ((a + c) / 2.0 - b + u * ((d - a) / 6.0 + (b - c) / 2.0))
        )

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
        return cells / per_cell * self._per_rad / self._spectrometer.options.order

    @functools.cached_property
    def _table(self) -> tuple[float, float, list[float]]:
        """First offset (rad), cells per rad, shares."""
        spread = CumulatedSpread(
            centre_nm=self._centre_nm,
            diffraction_nm=self._diffraction_nm,
            sigma_nm=self._sigma_nm,
            tail_nm=self._tail_nm,
            reach_nm=1.05 * (self._reach_nm + self._slits_nm),
        )
        cell_rad = spread.width_nm / _CELLS_PER_WIDTH / self._per_rad
        cells = math.ceil(self._reach_rad / cell_rad) + 2
        rotations = self.rotation_rad + cell_rad * np.arange(-cells, cells + 1, dtype=np.float64)
        options = self._spectrometer.options
        half_entrance_mm, half_exit_mm = options.entrance_slit_um * 5e-4, options.exit_slit_um * 5e-4
        nodes, weights = leggauss(_SLIT_NODES)
        share = np.zeros_like(rotations)
        for node, weight in zip(nodes.tolist(), weights.tolist(), strict=True):
            low, high = (
                spread(self._spectrometer.path_difference_nm(rotations, node * half_entrance_mm, x2))
                for x2 in (-half_exit_mm, half_exit_mm)
            )
            share += weight / 2.0 * (high - low)
        return -cells * cell_rad, 1.0 / cell_rad, share.tolist()
