"""The optical tables of a bench file: mounts, slits, ruling errors, order-sorting filters.

Angles are in degrees here because a person types them; everything else works in radians.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Literal

from pydantic import AfterValidator, Field, WithJsonSchema

from drivers.settings import Name, StrictModel, worded

NO_FILTER = "none"
"""The filter position with nothing in the beam; every bench has it."""

SHORTEST_NM, LONGEST_NM = 10.0, 100_000.0
FINEST_PER_MM = 6_500.0
"""Finer gratings than this are not ruled or etched for any light that passes a spectrometer with slits."""


def _wavelength(value: float) -> float:
    if SHORTEST_NM <= value <= LONGEST_NM:
        return value
    hint = ""
    if LONGEST_NM < value <= 10.0 * LONGEST_NM:
        hint = f"; from angstrom divide by ten: {value / 10.0:g}"
    elif 0.1 <= value < SHORTEST_NM:
        hint = f"; from micrometres multiply by a thousand: {value * 1000.0:g}"
    raise worded(f"must be a number from {SHORTEST_NM:g} to {LONGEST_NM:g}, in nm{hint}")


def _groove_density(value: float) -> float:
    if 0.0 < value <= FINEST_PER_MM:
        return value
    inches = f"; from grooves per inch divide by 25.4: {value / 25.4:.2f}" if value > 0.0 else ""
    raise worded(f"must be a number above 0 and at most {FINEST_PER_MM:g}, in 1/mm{inches}")


def _between(low: float, high: float) -> WithJsonSchema:
    return WithJsonSchema({"type": "number", "minimum": low, "maximum": high})


Wavelength = Annotated[float, AfterValidator(_wavelength), _between(SHORTEST_NM, LONGEST_NM)]
GrooveDensity = Annotated[float, AfterValidator(_groove_density), _between(0.0, FINEST_PER_MM)]
SlitUm = Annotated[float, Field(gt=0.0, le=20_000.0)]


class Ghosts(StrictModel):
    """`[optics.ghosts]`: Rowland ghosts of a periodic error of the ruling."""

    grooves_per_period: Annotated[float, Field(ge=2.0, le=1e7)]
    """Grooves between two equal errors."""
    first_order_fraction: Annotated[float, Field(gt=0.0, le=0.1)]
    """Strength of a line's first ghost over its own, in order 1; it grows as the square of the order."""


class GratingOptics(StrictModel):
    """What all gratings between two slits have in common."""

    groove_density_per_mm: GrooveDensity
    ruled_width_mm: Annotated[float, Field(gt=0.0, le=1_000.0)]
    """As far as it is lit."""
    order: Annotated[int, Field(ge=1, le=100)]
    """Used where a target does not say."""
    entrance_slit_um: SlitUm
    """As set by hand, or where motorised slits stand unless a target says."""
    exit_slit_um: SlitUm
    """As the entrance slit."""
    ghosts: Ghosts | None = None


class PlaneOptics(GratingOptics):
    """`[optics]` with a plane grating turned under a constant included angle."""

    mount: Literal["plane"]
    focal_length_mm: Annotated[float, Field(gt=0.0, le=100_000.0)]
    """Of both arms."""
    included_angle_deg: Annotated[float, Field(ge=0.0, lt=180.0)]
    """Between the two arms."""


class LittrowOptics(GratingOptics):
    """`[optics]` with a plane grating that sends the light back the way it came."""

    mount: Literal["littrow"]
    focal_length_mm: Annotated[float, Field(gt=0.0, le=100_000.0)]
    """Of the one collimator."""
    off_plane_angle_deg: Annotated[float, Field(ge=0.0, lt=45.0)] = 0.0
    """Of both beams with the plane of dispersion, entrance and exit slit one above the other."""


class ConcaveOptics(GratingOptics):
    """`[optics]` with a concave grating turned about its pole, its arms set for one wavelength and order."""

    mount: Literal["concave"]
    radius_mm: Annotated[float, Field(gt=0.0, le=100_000.0)]
    """Of curvature."""
    included_angle_deg: Annotated[float, Field(ge=0.0, lt=180.0)]
    """Between the two arms."""
    focused_nm: Wavelength
    """The arms are R cos alpha and R cos beta at this wavelength."""
    focused_order: Annotated[int, Field(ge=1, le=100)]
    """And in this order."""

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.ruled_width_mm >= 2.0 * self.radius_mm:
            yield "ruled_width_mm", f"must be below twice radius_mm = {self.radius_mm:g}: a sphere ends there"


class TableOptics(StrictModel):
    """`[optics]` of a recorded spectrum: step k of the drive stands at row k of the CSV file."""

    mount: Literal["table"]
    spectrum: Annotated[str, Field(min_length=1, max_length=1000)]
    """A CSV file, its path relative to this file."""


Optics = Annotated[PlaneOptics | LittrowOptics | ConcaveOptics | TableOptics, Field(discriminator="mount")]


class FilterBand(StrictModel):
    """One of `[[filters]]`: an order-sorting filter at hand and the band it lets pass."""

    name: Name
    shortest_nm: Wavelength
    """What it lets pass begins here."""
    longest_nm: Wavelength
    """And ends here."""

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.name == NO_FILTER:
            yield "name", f"{NO_FILTER!r} stands for no filter in the beam; choose another"
        if self.shortest_nm >= self.longest_nm:
            yield "shortest_nm", f"must be below longest_nm = {self.longest_nm:g}, in nm"
