"""The spectrometer: a grating, two slits and what stands between them, in path differences."""

from __future__ import annotations

import math

import numpy as np
from numpy.polynomial.legendre import leggauss

from simulators.mounts import ConcaveOptions, LittrowOptions, PlaneOptions
from simulators.rays import ConcaveRays, FloatArray, Floats, LittrowRays, PlaneRays, Rays

AnyOptics = PlaneOptions | LittrowOptions | ConcaveOptions


def _rays(options: AnyOptics) -> Rays:
    if isinstance(options, PlaneOptions):
        return PlaneRays(options)
    if isinstance(options, LittrowOptions):
        return LittrowRays(options)
    return ConcaveRays(options)


def panels(start: float, end: float, count: int) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes and weights on `count` even panels of (start, end), 16 to a panel."""
    nodes, weights = leggauss(16)
    width = (end - start) / count
    places = start + (np.arange(count)[:, None] + (nodes + 1.0) / 2.0) * width
    return places.ravel(), np.tile(weights * width / 2.0, count)


class Spectrometer:
    """Lengths in nm unless the name says otherwise, angles in rad, rotation 0 at zero order."""

    def __init__(self, options: AnyOptics) -> None:
        self.options = options
        self.rays = _rays(options)
        # at the pole, slit centre to slit centre, a path difference is a cosine and a sine of the rotation
        self._cosine_nm, self._sine_nm = (
            float(self.path_difference_nm(turn, 0.0, 0.0)) for turn in (0.0, math.pi / 2.0)
        )
        half_mm = options.exit_slit_um * 1e-3 / 2.0
        edges = [
            self.path_difference_nm(turn, 0.0, np.array([-half_mm, half_mm])) for turn in (0.0, math.pi / 2)
        ]
        # so is the exit slit's width
        self._exit_cosine_nm, self._exit_sine_nm = (float(high - low) for low, high in edges)

    @property
    def groove_spacing_nm(self) -> float:
        return 1e6 / self.options.groove_density_per_mm

    @property
    def grooves(self) -> float:
        """How many grooves are lit: the beam fills the ruled width."""
        return self.options.groove_density_per_mm * self.options.ruled_width_mm

    def path_difference_nm(
        self, rotation_rad: Floats, entrance_mm: Floats, exit_mm: Floats, zone_mm: Floats = 0.0
    ) -> FloatArray:
        """Path difference between neighbouring grooves, for places in the slits and a zone of the ruling."""
        return self.groove_spacing_nm * self.rays.path_per_spacing(
            rotation_rad, entrance_mm, exit_mm, zone_mm
        )

    def centre_path_nm(self, rotation_rad: float) -> float:
        """Path difference from slit centre to slit centre."""
        return self._cosine_nm * math.cos(rotation_rad) + self._sine_nm * math.sin(rotation_rad)

    def path_per_rad(self, rotation_rad: float) -> float:
        """How fast that path difference grows with the rotation, nm per rad."""
        return self._sine_nm * math.cos(rotation_rad) - self._cosine_nm * math.sin(rotation_rad)

    def exit_path_nm(self, rotation_rad: float) -> float:
        """Path difference between the exit slit's edges."""
        return self._exit_cosine_nm * math.cos(rotation_rad) + self._exit_sine_nm * math.sin(rotation_rad)

    def slit_paths_nm(self, rotation_rad: float) -> tuple[float, float]:
        """Path differences between the edges of the entrance slit and of the exit slit."""
        one, two = (w * 1e-3 / 2.0 for w in (self.options.entrance_slit_um, self.options.exit_slit_um))
        at = rotation_rad
        entrance = self.path_difference_nm(at, one, 0.0) - self.path_difference_nm(at, -one, 0.0)
        exit_ = self.path_difference_nm(at, 0.0, two) - self.path_difference_nm(at, 0.0, -two)
        return float(entrance), float(exit_)

    def wavelength_nm(self, rotation_rad: Floats) -> FloatArray:
        """What passes from slit centre to slit centre in the order of the settings."""
        return self.path_difference_nm(rotation_rad, 0.0, 0.0) / self.options.order

    def rotation_rad(self, wavelength_nm: float, order: float | None = None) -> float:
        """The rotation that brings a wavelength to the exit slit's centre, found by bisection.

        Raises ValueError when no rotation does that keeps both arms before the grating.
        """
        path_nm = wavelength_nm * (self.options.order if order is None else order)
        low, high = 0.0, math.pi / 2.0 - self.rays.half_included_rad
        if not self.centre_path_nm(low) <= path_nm <= self.centre_path_nm(high):
            raise ValueError(f"{wavelength_nm:g} nm is beyond what this grating can reach")
        while True:
            middle = (low + high) / 2.0
            if middle in (low, high):
                return middle
            if self.centre_path_nm(middle) < path_nm:
                low = middle
            else:
                high = middle

    def bandpass_nm(self, wavelength_nm: float, order: int | None = None) -> tuple[float, float]:
        """Widths of the images of the entrance and the exit slit, in nm of wavelength, edge to edge."""
        order = self.options.order if order is None else order
        entrance_nm, exit_nm = self.slit_paths_nm(self.rotation_rad(wavelength_nm, order))
        return entrance_nm / order, exit_nm / order

    def zone_paths_nm(self, rotation_rad: float, count: int = 2) -> tuple[FloatArray, FloatArray]:
        """How far the zones of the ruling lie beside its pole, as path differences from slit centre to slit
        centre, and each zone's share of the light: what defocus and aberrations leave. `count` panels."""
        half_mm = self.options.ruled_width_mm / 2.0
        zones_mm, weights = panels(-half_mm, half_mm, count)
        paths = self.path_difference_nm(rotation_rad, 0.0, 0.0, zones_mm)
        return paths - self.centre_path_nm(rotation_rad), weights / (2.0 * half_mm)

    def blur_nm(self, wavelength_nm: float, order: int | None = None) -> float:
        """Full width, in nm of wavelength, of the image that rays by all zones of the ruling make of the
        middle of the entrance slit: traced rays, not a formula. 0 between collimators.

        Raises ValueError when the wavelength is beyond the grating's reach."""
        order = self.options.order if order is None else order
        rotation = self.rotation_rad(wavelength_nm, order)
        if not isinstance(self.rays, ConcaveRays):
            return 0.0
        half_mm = self.options.ruled_width_mm / 2.0

        def hits(wavelengths_nm: float, zones_mm: Floats) -> FloatArray:
            return self.rays_hit_mm(rotation, order * wavelengths_nm, zones_mm)

        spread_mm = float(np.ptp(hits(wavelength_nm, np.linspace(-half_mm, half_mm, 1001))))
        step_nm = 1e-5 * wavelength_nm
        there, back = (float(hits(wavelength_nm + sign * step_nm, 0.0)) for sign in (1.0, -1.0))
        return spread_mm / abs(there - back) * 2.0 * step_nm

    def rays_hit_mm(self, rotation_rad: float, path_nm: float, zones_mm: Floats) -> FloatArray:
        """Where light of m L = `path_nm` from the entrance slit's middle meets the exit slit's plane."""
        if not isinstance(self.rays, ConcaveRays):
            raise ValueError("only a concave mount is traced ray by ray")
        return self.rays.hit_mm(
            rotation_rad,
            path_per_spacing=path_nm / self.groove_spacing_nm,
            entrance_mm=0.0,
            zone_mm=zones_mm,
        )
