"""Plane gratings: between two arms that enclose a constant angle, and in Littrow's mount."""

from __future__ import annotations

import math
from dataclasses import dataclass

from analysis.turned import TurnedGrating, check_angle, check_positive

__all__ = ["LittrowMount", "PlaneMount"]


@dataclass(frozen=True, slots=True, kw_only=True)
class PlaneMount(TurnedGrating):
    """Plane grating, constant included angle. Both arms have the focal length given."""

    focal_length_mm: float
    included_angle_deg: float

    def _check_arms(self) -> None:
        check_positive(self, "focal_length_mm")
        check_angle(self, "included_angle_deg", 180.0)

    @property
    def half_included_angle_rad(self) -> float:
        return math.radians(0.5 * self.included_angle_deg)

    @property
    def arms_mm(self) -> tuple[float, float]:
        return self.focal_length_mm, self.focal_length_mm


@dataclass(frozen=True, slots=True, kw_only=True)
class LittrowMount(TurnedGrating):
    """Plane grating that sends light back the way it came: alpha = beta = phi, one collimator for both beams.

    Entrance and exit slit stand above each other: both beams are `off_plane_angle_deg` (gamma) from the
    plane of dispersion, and m lambda = 2 d cos gamma sin phi. The slits are taken as short and at right
    angles to that plane; the curvature of their images is neglected.
    """

    focal_length_mm: float
    off_plane_angle_deg: float = 0.0

    def _check_arms(self) -> None:
        check_positive(self, "focal_length_mm")
        check_angle(self, "off_plane_angle_deg", 90.0)

    @property
    def half_included_angle_rad(self) -> float:
        return 0.0

    @property
    def off_plane_rad(self) -> float:
        return math.radians(self.off_plane_angle_deg)

    @property
    def arms_mm(self) -> tuple[float, float]:
        return self.focal_length_mm, self.focal_length_mm
