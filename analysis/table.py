"""A recorded spectrum in place of a grating."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from analysis.turned import check_medium

__all__ = ["TableMount"]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class TableMount:
    """A recorded spectrum in place of a grating: step k stands at row k, between rows on a straight line.

    `wavelengths` (N,) in nm, ascending. A pixel is as wide as the local spacing of the rows; it is the one
    box of the bandpass. What happened before the pixel is in the recording itself, so diffraction is 0.
    """

    wavelengths: tuple[float, ...]
    medium: str
    _wavelength_nm: FloatArray = field(init=False, repr=False, compare=False)
    _spacing_nm: FloatArray = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        table = np.array(self.wavelengths, dtype=np.float64)
        if table.ndim != 1 or table.size < 2:
            raise ValueError(f"{table.size} wavelengths; allowed: two rows or more")
        if not (np.isfinite(table).all() and table[0] > 0.0 and (np.diff(table) > 0.0).all()):
            raise ValueError("wavelengths must be finite, positive and strictly ascending")
        check_medium(self.medium)
        object.__setattr__(self, "_wavelength_nm", table)
        object.__setattr__(self, "_spacing_nm", np.gradient(table))

    @property
    def order(self) -> int:
        """1: which order a recording was made in is not in it, and nothing overlaps that is not in it."""
        return 1

    def wavelength_nm(self, steps: npt.ArrayLike) -> FloatArray:
        rows = self._rows(steps)
        return np.asarray(np.interp(rows, np.arange(self._wavelength_nm.size), self._wavelength_nm))

    def _rows(self, steps: npt.ArrayLike) -> FloatArray:
        rows = np.asarray(steps, dtype=np.float64)
        last = self._wavelength_nm.size - 1
        outside = ~((rows >= 0.0) & (rows <= last))
        if outside.any():
            worst = float(rows[outside].flat[0])
            raise ValueError(f"steps = {worst!r}; allowed: 0 to {last}, the recorded rows")
        return rows

    def steps(self, wavelength_nm: float) -> float:
        first_nm, last_nm = float(self._wavelength_nm[0]), float(self._wavelength_nm[-1])
        if not first_nm <= wavelength_nm <= last_nm:
            raise ValueError(
                f"wavelength_nm = {wavelength_nm!r}; allowed: {first_nm:.6g} to {last_nm:.6g} nm, as recorded"
            )
        return float(np.interp(wavelength_nm, self._wavelength_nm, np.arange(self._wavelength_nm.size)))

    def bandpass_nm(self, wavelength_nm: float) -> tuple[float, float]:
        return self.dispersion_nm_per_step(self.steps(wavelength_nm)), 0.0

    def diffraction_fwhm_nm(self, wavelength_nm: float) -> float:
        self.steps(wavelength_nm)  # for its ValueError
        return 0.0

    def blur_nm(self, wavelength_nm: float) -> float:
        self.steps(wavelength_nm)  # for its ValueError
        return 0.0

    def dispersion_nm_per_step(self, steps: float) -> float:
        """Local spacing of the rows: central differences at the rows, a straight line between."""
        rows = self._rows(steps)
        return float(np.interp(rows, np.arange(self._spacing_nm.size), self._spacing_nm))
