"""Small simulated benches for tests of the world: a clock that stands still, one line, changes by table."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from drivers.protocols import DriverContext
from simulators.world import World, build

START_NS = 1_928_599_200_000_000_000
STILL_AIR = {"temperature_drift_k": 0.0, "pressure_drift_pa": 0.0}
PLANE = {
    "mount": "plane",
    "groove_density_per_mm": 1200.0,
    "ruled_width_mm": 96.0,
    "focal_length_mm": 870.0,
    "included_angle_deg": 22.0,
    "entrance_slit_um": 20.0,
    "exit_slit_um": 20.0,
}
STEADY = {"drift_fraction": 0.0, "burning_s": 1e6}


class StoppedClock:
    """A clock that a test moves by hand."""

    is_virtual = True

    def __init__(self) -> None:
        self.now_ns = 0

    def utc_ns(self) -> int:
        return START_NS + self.now_ns

    def monotonic_ns(self) -> int:
        return self.now_ns


def line(wavelength_air_nm: float, strength_per_s: float = 100.0, **keys: Any) -> dict[str, Any]:
    width = {} if "temperature_k" in keys else {"doppler_fwhm_pm": 1.0}
    return {"wavelength_air_nm": wavelength_air_nm, "strength_per_s": strength_per_s} | width | keys


def lamp(*lines: dict[str, Any], **keys: Any) -> dict[str, Any]:
    """A lamp that neither drifts nor warms up."""
    return {"lines": list(lines)} | STEADY | keys


def world(*, optics: dict[str, Any] | None = None, seed: int = 1, clock: Any = None, **tables: Any) -> World:
    """A world in still air; `optics` changes keys of the plane mount, None takes one out."""
    table = {key: value for key, value in (PLANE | (optics or {})).items() if value is not None}
    options = {"optics": table, "air": STILL_AIR} | tables
    if "lamps" not in options:
        options.setdefault("lamp", lamp(line(313.155)))
    return build(options, DriverContext(clock or StoppedClock(), "world", seed, str(Path(__file__).parent)))


def rate(bench: World, rotation_rad: float) -> float:
    """Light at the detector at the start of the night."""
    return bench.light_rate_per_s(rotation_rad, utc_s=START_NS * 1e-9)
