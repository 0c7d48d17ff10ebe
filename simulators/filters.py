"""What stands in the beam before the entrance slit: order-sorting filters and neutral attenuators."""

from __future__ import annotations

import math
from collections.abc import Iterator

from pydantic import Field

from drivers.settings import Name, StrictModel

NONE = "none"
"""The empty place of every wheel."""


class FilterOptions(StrictModel):
    """`[[world.options.filters]]`: a band with soft edges. Without a band it is neutral."""

    name: Name
    shortest_nm: float = Field(default=0.0, ge=0.0)
    longest_nm: float = Field(default=1e6, gt=0.0)
    edge_nm: float = Field(default=5.0, gt=0.0, le=200.0)  # from 10 to 90 % of the transmission
    transmission: float = Field(default=0.9, gt=0.0, le=1.0)
    leak: float = Field(default=0.0, ge=0.0, lt=1.0)  # what passes outside of the band all the same

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.shortest_nm >= self.longest_nm:
            yield "shortest_nm", f"must be below longest_nm = {self.longest_nm:g}"
        if self.leak > self.transmission:
            yield "leak", f"must not be above transmission = {self.transmission:g}"

    def at(self, wavelength_nm: float) -> float:
        """The share that passes; halfway down at the band's ends."""
        # a logistic edge goes from 0.1 to 0.9 over 2 ln 9 of its scale
        scale_nm = self.edge_nm / (2.0 * math.log(9.0))
        band = _logistic((wavelength_nm - self.shortest_nm) / scale_nm)
        band *= _logistic((self.longest_nm - wavelength_nm) / scale_nm)
        return self.leak + (self.transmission - self.leak) * band


class AttenuatorOptions(StrictModel):
    """`[[world.options.attenuators]]`: the same share of any light."""

    name: Name
    transmission: float = Field(gt=0.0, le=1.0)


def _logistic(x: float) -> float:
    return 1.0 / (1.0 + math.exp(-x)) if x > -700.0 else 0.0
