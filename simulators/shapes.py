"""What a source sends out around one wavelength: broadened components, and absorbers in the light's way.

A shape is known by its Fourier transform, as the spectrometer folds it with slits and diffraction there. For
Doppler and Lorentz widths the transform is written down. What an absorber takes away follows
exp(-depth), which has no such form: it is laid on a fine grid and transformed by summing. Only that part
which falls off quickly goes on the grid, so that no wide wing is cut off.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

_CELLS_PER_SIGMA = 16
_MOST_CELLS = 40_000


class Component(NamedTuple):
    """A Voigt profile: `height` is its area in emission, its optical depth at the centre in absorption."""

    offset_nm: float
    height: float
    sigma_nm: float
    lorentz_fwhm_nm: float = 0.0

    def density(self, x_nm: FloatArray) -> FloatArray:
        """The profile of area 1, per nm."""
        if not self.lorentz_fwhm_nm:
            u = (x_nm - self.offset_nm) / self.sigma_nm
            return np.asarray(np.exp(-u * u / 2.0) / (self.sigma_nm * math.sqrt(2.0 * math.pi)))
        from scipy.special import voigt_profile

        return np.asarray(voigt_profile(x_nm - self.offset_nm, self.sigma_nm, self.lorentz_fwhm_nm / 2.0))

    @property
    def top_per_nm(self) -> float:
        return float(self.density(np.array([self.offset_nm]))[0])

    def transform(self, frequency_per_nm: FloatArray) -> NDArray[np.float64] | NDArray[np.complex128]:
        """Of the profile of area 1; real where the component stands at the line's own place."""
        wave = np.exp(-2.0 * (math.pi * self.sigma_nm * frequency_per_nm) ** 2)
        if self.lorentz_fwhm_nm:
            wave = wave * np.exp(-math.pi * self.lorentz_fwhm_nm * frequency_per_nm)
        if self.offset_nm:
            return np.asarray(wave * np.exp(-2.0j * math.pi * self.offset_nm * frequency_per_nm))
        return np.asarray(wave)


@dataclass(frozen=True)
class Shape:
    """Components, less what `taken_per_nm` says; that is summed over the grid. `finest_sigma_nm` is the
    narrowest width in it."""

    parts: tuple[Component, ...]
    finest_sigma_nm: float
    grid_nm: FloatArray = field(default_factory=lambda: np.zeros(0))
    taken_per_nm: Callable[[FloatArray], FloatArray] = np.zeros_like

    @functools.cached_property
    def area(self) -> float:
        """What is left of the components' heights: of 1 in emission; in absorption the equivalent width."""
        return math.fsum(part.height for part in self.parts) - float(self._taken.sum())

    @property
    def reach_nm(self) -> float:
        """Beyond this from the line's place only Lorentz wings are left."""
        parts = (abs(p.offset_nm) + 8.0 * p.sigma_nm + 30.0 * p.lorentz_fwhm_nm for p in self.parts)
        return max(max(parts), float(np.max(np.abs(self.grid_nm), initial=0.0)))

    @property
    def wing_nm(self) -> float:
        """w of the wing w/x^2 per nm, for a shape of area 1."""
        return sum(p.height * p.lorentz_fwhm_nm for p in self.parts) / (2.0 * math.pi) / self.area

    def density(self, x_nm: FloatArray) -> FloatArray:
        """The shape itself, area 1, per nm."""
        whole = sum((p.height * p.density(x_nm) for p in self.parts), np.zeros_like(x_nm))
        return np.asarray((whole - self.taken_per_nm(x_nm)) / self.area)

    def transform(self, frequency_per_nm: FloatArray) -> NDArray[np.float64] | NDArray[np.complex128]:
        """Of the shape with area 1."""
        if len(self.parts) == 1 and not self.grid_nm.size:
            return self.parts[0].transform(frequency_per_nm)
        total = np.zeros(frequency_per_nm.shape, dtype=np.complex128)
        for part in self.parts:
            total += part.height * part.transform(frequency_per_nm)
        if self.grid_nm.size:
            for start in range(0, frequency_per_nm.size, 256):  # in blocks: the table of waves is large
                block = slice(start, start + 256)
                waves = np.exp(-2.0j * math.pi * np.outer(frequency_per_nm[block], self.grid_nm))
                total[block] -= np.einsum("fx,x->f", waves, self._taken)
        return total / self.area

    @functools.cached_property
    def _taken(self) -> FloatArray:
        """What each cell of the grid takes away."""
        if not self.grid_nm.size:
            return self.grid_nm
        return self.taken_per_nm(self.grid_nm) * float(self.grid_nm[1] - self.grid_nm[0])


def gaussian(fwhm_nm: float) -> Shape:
    """One Doppler-broadened line."""
    sigma_nm = fwhm_nm / math.sqrt(8.0 * math.log(2.0))
    return Shape((Component(0.0, 1.0, sigma_nm),), sigma_nm)


def emission(parts: Sequence[Component], absorbers: Sequence[Component] = ()) -> Shape:
    """Components whose heights are shares of the line, seen through absorbers (heights: optical depths).

    What is taken away is emission times 1 - exp(-depth): it falls off as both do together."""
    finest = min(p.sigma_nm for p in (*parts, *absorbers))
    if not absorbers:
        return Shape(tuple(parts), finest)

    def taken(x_nm: FloatArray) -> FloatArray:
        light = sum((p.height * p.density(x_nm) for p in parts), np.zeros_like(x_nm))
        return np.asarray(-light * np.expm1(-_depth(absorbers, x_nm)))

    return _on_grid(tuple(parts), absorbers, finest, taken)


def absorption(absorbers: Sequence[Component]) -> Shape:
    """What absorbers (heights: optical depths) take out of a continuum of 1 per nm: 1 - exp(-depth).

    The depth itself is a sum of components; the grid takes the rest, exp(-depth) - 1 + depth, which falls
    off as its square."""
    finest = min(a.sigma_nm for a in absorbers)
    parts = tuple(a._replace(height=a.height / a.top_per_nm) for a in absorbers)

    def taken(x_nm: FloatArray) -> FloatArray:
        depth = _depth(absorbers, x_nm)
        return np.asarray(np.expm1(-depth) + depth)

    return _on_grid(parts, absorbers, finest, taken)


def _depth(absorbers: Sequence[Component], x_nm: FloatArray) -> FloatArray:
    return sum((a.height / a.top_per_nm * a.density(x_nm) for a in absorbers), np.zeros_like(x_nm))


def _on_grid(
    parts: tuple[Component, ...],
    absorbers: Sequence[Component],
    finest_nm: float,
    taken: Callable[[FloatArray], FloatArray],
) -> Shape:
    """Cells wide enough for all absorbers' reach, fine enough for the narrowest width."""
    low, high = (
        min(a.offset_nm - 9.0 * a.sigma_nm - 60.0 * a.lorentz_fwhm_nm for a in absorbers),
        max(a.offset_nm + 9.0 * a.sigma_nm + 60.0 * a.lorentz_fwhm_nm for a in absorbers),
    )
    cells = min(math.ceil((high - low) / finest_nm * _CELLS_PER_SIGMA), _MOST_CELLS)
    return Shape(parts, finest_nm, np.linspace(low, high, cells + 1), taken)
