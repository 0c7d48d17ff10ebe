"""Reference lines of lamps: where they stand in vacuum and in standard air.

The one module here that reads a file: `data/reference_lines.dat`, packed with the package;
`data/SOURCES.md` says where its values come from and what uncertainty was adopted.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from functools import cache
from importlib.resources import files

from analysis.air import air_from_vacuum_nm

__all__ = ["ReferenceLine", "elements", "lines", "near"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ReferenceLine:
    """One line of a neutral atom.

    wavelength_air_nm : in standard air (15 C, 101 325 Pa, dry).
    strength : relative, rough, comparable within the element at best.
    uncertainty_nm : adopted standard uncertainty of the wavelength.
    """

    element: str
    wavelength_vacuum_nm: float
    wavelength_air_nm: float
    strength: float
    uncertainty_nm: float

    def wavelength_nm(self, medium: str) -> float:
        """In "air" (standard air) or "vacuum"; ValueError for other media."""
        if medium == "air":
            return self.wavelength_air_nm
        if medium == "vacuum":
            return self.wavelength_vacuum_nm
        raise ValueError(f"medium = {medium!r}; allowed: 'air', 'vacuum'")


def elements() -> tuple[str, ...]:
    """The elements whose lines are known, by symbol."""
    return tuple(_table())


def lines(element: str) -> tuple[ReferenceLine, ...]:
    """The lines of an element, given by its symbol, ascending. ValueError for one that is not known."""
    table = _table()
    if element not in table:
        raise ValueError(f"element = {element!r}; allowed: {', '.join(table)}")
    return table[element]


def near(
    wavelength_nm: float, reach_nm: float, *, medium: str = "air", of: Iterable[str] | None = None
) -> tuple[ReferenceLine, ...]:
    """The lines within `reach_nm` of a wavelength, nearest first; `of` some elements only.

    ValueError for a reach that is negative or not finite, another medium, an element that is not known.
    """
    if not 0.0 <= reach_nm < math.inf:
        raise ValueError(f"reach_nm = {reach_nm!r}; allowed: zero or positive, finite")
    candidates = [line for element in (elements() if of is None else of) for line in lines(element)]
    away = [(abs(line.wavelength_nm(medium) - wavelength_nm), line) for line in candidates]
    return tuple(line for far, line in sorted(away, key=lambda pair: pair[0]) if far <= reach_nm)


@cache
def _table() -> dict[str, tuple[ReferenceLine, ...]]:
    text = (files("analysis") / "data" / "reference_lines.dat").read_text(encoding="utf-8")
    table: dict[str, list[ReferenceLine]] = {}
    for row in text.splitlines():
        if row.startswith("#"):
            continue
        element, vacuum_nm, strength, uncertainty_pm = row.split()
        line = ReferenceLine(
            element=element,
            wavelength_vacuum_nm=float(vacuum_nm),
            wavelength_air_nm=air_from_vacuum_nm(wavelength_vacuum_nm=float(vacuum_nm)),
            strength=float(strength),
            uncertainty_nm=1e-3 * float(uncertainty_pm),
        )
        table.setdefault(element, []).append(line)
    return {element: tuple(found) for element, found in table.items()}
