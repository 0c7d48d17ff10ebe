"""What a mount is to the rest, and mounts as JSON."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from analysis.concave import ConcaveMount
from analysis.plane import LittrowMount, PlaneMount
from analysis.table import TableMount

__all__ = ["Mount", "mount_from_json", "mount_to_json"]

FloatArray = npt.NDArray[np.float64]


class Mount(Protocol):
    """What the rest asks of a spectrometer's geometry."""

    @property
    def medium(self) -> str:
        """ "air" or "vacuum": what its wavelengths are measured in."""
        ...

    @property
    def order(self) -> int:
        """The order that its wavelengths are in."""
        ...

    def wavelength_nm(self, steps: npt.ArrayLike) -> FloatArray:
        """Wavelength, nm, at drive positions of any shape. ValueError beyond what the mount can reach."""
        ...

    def steps(self, wavelength_nm: float) -> float:
        """Drive position, not rounded. ValueError beyond what the mount can reach."""
        ...

    def bandpass_nm(self, wavelength_nm: float) -> tuple[float, float]:
        """Full widths, nm, of the images of entrance and exit slit (or of the pixel and 0.0)."""
        ...

    def diffraction_fwhm_nm(self, wavelength_nm: float) -> float:
        """FWHM, nm, that the lit width of the grating alone leaves; 0.0 where it is not known."""
        ...

    def blur_nm(self, wavelength_nm: float) -> float:
        """Full width, nm, of the box that defocus and aberrations leave; 0.0 if none."""
        ...

    def dispersion_nm_per_step(self, steps: float) -> float:
        """d lambda / d step, nm; negative where the drive counts down as the wavelength goes up."""
        ...


_KINDS: dict[str, type[PlaneMount] | type[LittrowMount] | type[ConcaveMount]] = {
    "plane": PlaneMount,
    "littrow": LittrowMount,
    "concave": ConcaveMount,
}


def mount_to_json(mount: Mount) -> dict[str, Any]:
    """JSON types that `mount_from_json` makes an equal mount of. ValueError for a mount of another module."""
    if isinstance(mount, TableMount):
        return {"kind": "table", "wavelengths": list(mount.wavelengths), "medium": mount.medium}
    for kind, cls in _KINDS.items():
        if isinstance(mount, cls):
            return {"kind": kind} | asdict(mount)
    raise ValueError(f"{type(mount).__name__} is none of the mounts {', '.join([*_KINDS, 'table'])}")


def mount_from_json(fields: Mapping[str, Any]) -> Mount:
    """The mount that was written. ValueError for another kind, missing, unknown or nonsensical fields."""
    rest = dict(fields)
    kind = rest.pop("kind", None)
    try:
        if kind == "table":
            return TableMount(tuple(rest.pop("wavelengths")), **rest)
        if kind in _KINDS:
            return _KINDS[kind](**rest)
    except (KeyError, TypeError) as error:
        raise ValueError(
            f"a mount of kind {kind!r} is not made of {', '.join(sorted(rest))}: {error}"
        ) from error
    raise ValueError(f"kind = {kind!r}; allowed: {', '.join(map(repr, [*_KINDS, 'table']))}")
