"""Other orders at the same rotation: m1 lambda1 = m2 lambda2 sends both into the exit slit.

The grating equation knows only the product of order and wavelength, so the mount does not matter.
Wavelengths are those in the medium at the grating, and of one sign of the order: the other sign stands on
the far side of zero order.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

__all__ = [
    "LONGEST_NM",
    "SHORTEST_NM",
    "FilterBand",
    "Overlap",
    "filter_is_demanded",
    "free_spectral_range_nm",
    "overlaps",
    "overlaps_near",
    "passes",
]

SHORTEST_NM = 185.0
"""Common practice: air and quartz windows let little through below."""
LONGEST_NM = 1100.0
"""Common practice: silicon sees little beyond."""


@dataclass(frozen=True, slots=True, kw_only=True)
class FilterBand:
    """An order-sorting filter and the band that it lets through, edges included."""

    name: str
    shortest_nm: float
    longest_nm: float

    def __post_init__(self) -> None:
        if not 0.0 <= self.shortest_nm < self.longest_nm:
            raise ValueError(
                f"{self.name!r}: shortest_nm = {self.shortest_nm!r}, longest_nm = {self.longest_nm!r}; "
                "allowed: zero or positive, the shorter one first"
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class Overlap:
    """Light of another order where the grating is set for something else.

    order, wavelength_nm : whose light it is. apparent_nm : where it stands on the scale of the order in use.
    """

    order: int
    wavelength_nm: float
    apparent_nm: float


def free_spectral_range_nm(*, wavelength_nm: float, order: int) -> float:
    """lambda/|m|, nm: above `wavelength_nm` the stretch that its next order does not overlap.

    lambda + lambda/m in order m stands where lambda stands in order m + 1 (e.g. M. Born and E. Wolf,
    "Principles of Optics", section 8.6). ValueError for order 0 and wavelengths that are not positive.
    """
    _check(wavelength_nm, order)
    return wavelength_nm / abs(order)


def overlaps(
    *,
    wavelength_nm: float,
    order: int,
    shortest_nm: float = SHORTEST_NM,
    longest_nm: float = LONGEST_NM,
    band: FilterBand | None = None,
) -> tuple[Overlap, ...]:
    """The wavelengths of other orders that stand where `wavelength_nm` stands in `order`, longest first.

    Only those between `shortest_nm` and `longest_nm`, which the detector sees, and in `band` if there is a
    filter. ValueError for order 0, wavelengths that are not positive, an empty range.
    """
    _check(wavelength_nm, order)
    if not 0.0 < shortest_nm <= longest_nm < math.inf:
        raise ValueError(
            f"shortest_nm = {shortest_nm!r}, longest_nm = {longest_nm!r}; "
            "allowed: positive, finite, the shorter one first"
        )
    product_nm, sign = abs(order) * wavelength_nm, 1 if order > 0 else -1
    found = []
    for other in range(1, math.floor(product_nm / shortest_nm) + 1):
        its_nm = product_nm / other
        if other != abs(order) and its_nm <= longest_nm and passes(band, its_nm):
            found.append(Overlap(order=sign * other, wavelength_nm=its_nm, apparent_nm=wavelength_nm))
    return tuple(found)


def overlaps_near(
    *,
    wavelength_nm: float,
    reach_nm: float,
    order: int,
    lines_nm: Iterable[float],
    band: FilterBand | None = None,
) -> tuple[Overlap, ...]:
    """Known lines that stand, in another order, within `reach_nm` of `wavelength_nm`; nearest first.

    ValueError for order 0, wavelengths that are not positive, a negative reach.
    """
    _check(wavelength_nm, order)
    if not 0.0 <= reach_nm < math.inf:
        raise ValueError(f"reach_nm = {reach_nm!r}; allowed: zero or positive, finite")
    magnitude, sign = abs(order), 1 if order > 0 else -1
    found = []
    for line_nm in lines_nm:
        _check(line_nm, order)
        lowest = math.ceil(magnitude * (wavelength_nm - reach_nm) / line_nm)
        highest = math.floor(magnitude * (wavelength_nm + reach_nm) / line_nm)
        for other in range(max(1, lowest), highest + 1):
            if other != magnitude and passes(band, line_nm):
                apparent_nm = other * line_nm / magnitude
                found.append(Overlap(order=sign * other, wavelength_nm=line_nm, apparent_nm=apparent_nm))
    return tuple(sorted(found, key=lambda overlap: abs(overlap.apparent_nm - wavelength_nm)))


def filter_is_demanded(
    *, wavelength_nm: float, order: int, shortest_nm: float = SHORTEST_NM, longest_nm: float = LONGEST_NM
) -> bool:
    """Whether the detector sees another order there if nothing keeps it out. Raises as `overlaps`."""
    return bool(
        overlaps(wavelength_nm=wavelength_nm, order=order, shortest_nm=shortest_nm, longest_nm=longest_nm)
    )


def passes(band: FilterBand | None, wavelength_nm: float) -> bool:
    """Whether a filter lets a wavelength through; no filter lets everything through."""
    return band is None or band.shortest_nm <= wavelength_nm <= band.longest_nm


def _check(wavelength_nm: float, order: int) -> None:
    if not (wavelength_nm > 0.0 and math.isfinite(wavelength_nm)):
        raise ValueError(f"wavelength_nm = {wavelength_nm!r}; allowed: positive, finite")
    if order == 0:
        raise ValueError("order = 0; allowed: any other whole number (zero order does not disperse)")
