"""Rowland ghosts: what a periodic error of the ruling makes of every line.

Grooves that stand A sin(2 pi n/p) off their places, p to a period, modulate the phase of order m by
x = 2 pi m A/d. Beside a line of path difference m lambda stand images at (m + k/p) lambda, k = +-1, +-2, ...,
with J_k(x)^2/J_0(x)^2 of its strength (H. A. Rowland 1893, Phil. Mag. 35, 397). Small errors, and no grating
in use has others, give J_k(x) = (x/2)^k/k! (e.g. Abramowitz and Stegun 1964, 9.1.7), that is

    strength_k/strength_0 = (f m^2)^|k| / (|k|!)^2,   f = (pi A/d)^2, the first ghost in order 1.

Against the Bessel functions the first ghost comes out f m^2 of itself low (f m^2 = 1e-3: 0.1 %), the second
a third more.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

__all__ = ["Ghost", "ghosts_near", "ghosts_of"]

LARGEST_FRACTION = 0.1
"""Of f m^2: beyond, the first ghost is no small image of its line and the expansion is 10 % off."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Ghost:
    """The image number k (negative: on the short side) of a line, and its strength in units of its
    parent's.
    """

    parent_nm: float
    number: int
    wavelength_nm: float
    share: float


def ghosts_of(
    *,
    parent_nm: float,
    order: int,
    grooves_per_period: float,
    first_order_fraction: float,
    highest_number: int = 2,
) -> tuple[Ghost, ...]:
    """The ghosts of a line, number -highest_number to highest_number, by wavelength lambda (1 + k/(|m| p)).

    `first_order_fraction` is the first ghost's strength over its line's in order 1.

    Raises ValueError for a line that is not positive, order 0, a period below two grooves, a fraction that is
    negative or grows beyond 0.1 in this order, a highest number below 1.
    """
    magnitude = abs(order)
    if not (parent_nm > 0.0 and math.isfinite(parent_nm)):
        raise ValueError(f"parent_nm = {parent_nm!r}; allowed: positive, finite")
    if magnitude == 0:
        raise ValueError("order = 0; allowed: any other whole number (zero order does not disperse)")
    if not 2.0 <= grooves_per_period < math.inf:
        raise ValueError(f"grooves_per_period = {grooves_per_period!r}; allowed: 2 or more, finite")
    grown = first_order_fraction * magnitude**2
    if not 0.0 <= grown <= LARGEST_FRACTION:
        raise ValueError(
            f"first_order_fraction = {first_order_fraction!r}; allowed: 0 to "
            f"{LARGEST_FRACTION / magnitude**2:g} in order {order}"
        )
    if highest_number < 1:
        raise ValueError(f"highest_number = {highest_number!r}; allowed: 1 or more")
    return tuple(
        Ghost(
            parent_nm=parent_nm,
            number=number,
            wavelength_nm=parent_nm * (1.0 + number / (magnitude * grooves_per_period)),
            share=grown ** abs(number) / math.factorial(abs(number)) ** 2,
        )
        for number in range(-highest_number, highest_number + 1)
        if number != 0
    )


def ghosts_near(
    *,
    wavelength_nm: float,
    reach_nm: float,
    parents_nm: Iterable[float],
    order: int,
    grooves_per_period: float,
    first_order_fraction: float,
    highest_number: int = 2,
) -> tuple[Ghost, ...]:
    """Ghosts of known lines within `reach_nm` of `wavelength_nm`, nearest first. Raises as `ghosts_of`."""
    if not 0.0 <= reach_nm < math.inf:
        raise ValueError(f"reach_nm = {reach_nm!r}; allowed: zero or positive, finite")
    found = [
        ghost
        for parent_nm in parents_nm
        for ghost in ghosts_of(
            parent_nm=parent_nm,
            order=order,
            grooves_per_period=grooves_per_period,
            first_order_fraction=first_order_fraction,
            highest_number=highest_number,
        )
        if abs(ghost.wavelength_nm - wavelength_nm) <= reach_nm
    ]
    return tuple(sorted(found, key=lambda ghost: abs(ghost.wavelength_nm - wavelength_nm)))
