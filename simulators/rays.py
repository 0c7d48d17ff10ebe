"""Rays through the mounts: where light goes, by directions and path differences.

Nothing here uses a grating equation in angles. The grating is a row of grooves along a unit vector t; a ray
that comes from the direction u and leaves towards v meets neighbouring grooves with a path difference
P = d t.(u + v), and light of wavelength L goes where P is a whole number of L.

All coordinates lie in the plane of dispersion: y halves the included angle, the entrance arm stands on the
right, the exit arm on the left, and a positive rotation brings t towards the entrance arm. A positive
place in either slit is the side that raises the path difference.
"""

from __future__ import annotations

import math
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from simulators.mounts import ConcaveOptions, LittrowOptions, PlaneOptions

FloatArray = NDArray[np.float64]
Floats = FloatArray | float


class Rays(Protocol):
    """One mount. Places in the slits and on the ruling in mm, angles in rad."""

    is_collimated: bool  # every zone of the ruling sees the same rays
    half_included_rad: float  # between an arm and the y axis

    def path_per_spacing(
        self, rotation_rad: Floats, entrance_mm: Floats, exit_mm: Floats, zone_mm: Floats
    ) -> FloatArray:
        """P/d of the ray from a place in one slit by a zone of the ruling to a place in the other."""
        ...


class PlaneRays:
    """Two collimators: a place in a slit is a direction in the beam."""

    is_collimated = True

    def __init__(self, options: PlaneOptions) -> None:
        self.half_included_rad = math.radians(options.included_angle_deg) / 2.0
        self._focal_mm = options.focal_length_mm

    def path_per_spacing(
        self, rotation_rad: Floats, entrance_mm: Floats, exit_mm: Floats, zone_mm: Floats
    ) -> FloatArray:
        inward_rad = self.half_included_rad + np.arctan(np.asarray(entrance_mm) / self._focal_mm)
        outward_rad = -self.half_included_rad + np.arctan(np.asarray(exit_mm) / self._focal_mm)
        sum_x = np.sin(inward_rad) + np.sin(outward_rad)
        sum_y = np.cos(inward_rad) + np.cos(outward_rad)
        rotation = np.asarray(rotation_rad)
        return np.asarray(np.cos(rotation) * sum_x + np.sin(rotation) * sum_y)


class LittrowRays:
    """One collimator for both beams: u and v differ by their heights alone.

    A slit's place x tilts its beam to (x, f cos g, +-f sin g), made a unit vector.
    """

    is_collimated = True

    def __init__(self, options: LittrowOptions) -> None:
        self.half_included_rad = 0.0
        self._flat = math.cos(math.radians(options.off_plane_angle_deg))
        self._focal_mm = options.focal_length_mm

    def path_per_spacing(
        self, rotation_rad: Floats, entrance_mm: Floats, exit_mm: Floats, zone_mm: Floats
    ) -> FloatArray:
        x1, x2 = np.asarray(entrance_mm) / self._focal_mm, np.asarray(exit_mm) / self._focal_mm
        inward, outward = np.sqrt(1.0 + x1 * x1), np.sqrt(1.0 + x2 * x2)
        rotation = np.asarray(rotation_rad)
        across = x1 / inward + x2 / outward
        along = self._flat / inward + self._flat / outward
        return np.asarray(np.cos(rotation) * across + np.sin(rotation) * along)


class ConcaveRays:
    """A sphere whose grooves are equidistant on its chord, between two arms of fixed lengths.

    A zone stands at w on the chord: at w t + (R - sqrt(R^2 - w^2)) n, its surface tilted by asin(w/R). The
    groove number grows as t.r/d, so along the surface it grows as cos(tilt)/d, and light of wavelength L
    leaves where (u + v) along the surface is m L cos(tilt)/d. Rays in the plane of dispersion only: the
    slits are short.
    """

    is_collimated = False

    def __init__(self, options: ConcaveOptions) -> None:
        half_rad = math.radians(options.included_angle_deg) / 2.0
        self.half_included_rad = half_rad
        self._radius_mm = options.radius_mm
        self._towards_entrance = (math.sin(half_rad), math.cos(half_rad))
        self._towards_exit = (-math.sin(half_rad), math.cos(half_rad))
        self._across_entrance = (math.cos(half_rad), -math.sin(half_rad))
        self._across_exit = (math.cos(half_rad), math.sin(half_rad))
        wanted = options.focused_order * options.focused_nm * options.groove_density_per_mm * 1e-6
        if wanted > 2.0 * math.cos(half_rad):
            raise ValueError(
                f"{options.focused_nm:g} nm in order {options.focused_order} is beyond what this grating can"
                " reach: nothing to focus for"
            )
        # at the pole P/d is the sine of the rotation times the two directions' sum along y
        focused_rad = math.asin(wanted / (self._towards_entrance[1] + self._towards_exit[1]))
        normal = (-math.sin(focused_rad), math.cos(focused_rad))
        # a Rowland circle passes the pole with the diameter R along the normal: its chords are projections
        self.entrance_arm_mm, self.exit_arm_mm = (
            self._radius_mm * (arm[0] * normal[0] + arm[1] * normal[1])
            for arm in (self._towards_entrance, self._towards_exit)
        )
        if min(self.entrance_arm_mm, self.exit_arm_mm) <= 0.0:
            raise ValueError(
                f"{options.focused_nm:g} nm in order {options.focused_order} would leave the grating's front:"
                " no arm has a length"
            )

    def path_per_spacing(
        self, rotation_rad: Floats, entrance_mm: Floats, exit_mm: Floats, zone_mm: Floats
    ) -> FloatArray:
        point_x, point_y, along_x, along_y, tilt_cosine = self._zone(rotation_rad, zone_mm)
        total: FloatArray = np.zeros(())
        for arm_mm, towards, across, place_mm in (
            (self.entrance_arm_mm, self._towards_entrance, self._across_entrance, np.asarray(entrance_mm)),
            (self.exit_arm_mm, self._towards_exit, self._across_exit, np.asarray(exit_mm)),
        ):
            ray_x = arm_mm * towards[0] + place_mm * across[0] - point_x
            ray_y = arm_mm * towards[1] + place_mm * across[1] - point_y
            total = total + (ray_x * along_x + ray_y * along_y) / np.hypot(ray_x, ray_y)
        return total / tilt_cosine

    def hit_mm(
        self, rotation_rad: float, *, path_per_spacing: float, entrance_mm: Floats, zone_mm: Floats
    ) -> FloatArray:
        """Where on the exit slit's plane light of one wavelength arrives: the same law the other way round.

        `path_per_spacing` is m L/d. Rays that cannot leave the surface come out as nan.
        """
        point_x, point_y, along_x, along_y, tilt_cosine = self._zone(rotation_rad, zone_mm)
        place = np.asarray(entrance_mm)
        ray_x = self.entrance_arm_mm * self._towards_entrance[0] + place * self._across_entrance[0] - point_x
        ray_y = self.entrance_arm_mm * self._towards_entrance[1] + place * self._across_entrance[1] - point_y
        inward = (ray_x * along_x + ray_y * along_y) / np.hypot(ray_x, ray_y)
        sine = path_per_spacing * tilt_cosine - inward
        cosine = np.sqrt(np.where(np.abs(sine) < 1.0, 1.0 - sine * sine, np.nan))
        out_x, out_y = sine * along_x - cosine * along_y, sine * along_y + cosine * along_x
        slit_x = self.exit_arm_mm * self._towards_exit[0] - point_x
        slit_y = self.exit_arm_mm * self._towards_exit[1] - point_y
        way = (slit_x * self._towards_exit[0] + slit_y * self._towards_exit[1]) / (
            out_x * self._towards_exit[0] + out_y * self._towards_exit[1]
        )
        return np.asarray(
            (way * out_x - slit_x) * self._across_exit[0] + (way * out_y - slit_y) * self._across_exit[1]
        )

    def _zone(self, rotation_rad: Floats, zone_mm: Floats) -> tuple[FloatArray, ...]:
        """Place and surface direction of a zone, and the cosine of the surface's tilt against the chord."""
        rotation, w = np.asarray(rotation_rad), np.asarray(zone_mm)
        t_x, t_y = np.cos(rotation), np.sin(rotation)
        rest = np.sqrt(self._radius_mm**2 - w * w)
        sag = w * w / (self._radius_mm + rest)  # R - rest, without the loss of digits
        sine, cosine = w / self._radius_mm, rest / self._radius_mm
        # n = (-t_y, t_x), from the pole towards the arms
        return (
            w * t_x - sag * t_y,
            w * t_y + sag * t_x,
            cosine * t_x - sine * t_y,
            cosine * t_y + sine * t_x,
            cosine,
        )
