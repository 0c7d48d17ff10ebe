"""What a scanning spectrometer sees: steps to wavelength and back, slit images, diffraction, line width.

The table of contents of the modules that hold it: `turned` (the grating equation and all that plane,
Littrow and concave mounts share), `plane`, `concave`, `table` (a recorded spectrum), `drives`, `linewidth`;
`mounts` says what the rest may ask of any of them.
"""

from __future__ import annotations

from analysis.concave import ConcaveMount
from analysis.drives import PeriodicError, RotaryDrive, SineBarDrive
from analysis.linewidth import SINC2_FWHM, expected_fwhm_nm
from analysis.mounts import Mount, mount_from_json, mount_to_json
from analysis.plane import LittrowMount, PlaneMount
from analysis.table import TableMount

__all__ = [
    "SINC2_FWHM",
    "ConcaveMount",
    "LittrowMount",
    "Mount",
    "PeriodicError",
    "PlaneMount",
    "RotaryDrive",
    "SineBarDrive",
    "TableMount",
    "expected_fwhm_nm",
    "mount_from_json",
    "mount_to_json",
]
