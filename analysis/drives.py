"""Grating drives: from steps to the grating's rotation and back, and what their periodic errors do.

A rotary drive turns the grating in proportion to its steps. A sine bar pushes an arm with a leadscrew
square to it, so that the sine of the rotation, and with it the wavelength, goes in proportion. Both count
from zero order.

What worm, leadscrew and microsteps leave is a sine of the position, here of known period and amplitude and
unknown phase. Two lines a distance s apart then stand wrong against each other by
a sin(x + 2 pi s/P) - a sin(x) = 2 a sin(pi s/P) cos(x + pi s/P): elementary trigonometry, from which
everything below follows.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

__all__ = ["Drive", "PeriodicError", "RotaryDrive", "SineBarDrive", "separation_rms_nm"]

FloatArray = npt.NDArray[np.float64]


class Drive(Protocol):
    """What a mount asks of its drive."""

    def rotation_rad(self, steps: npt.ArrayLike) -> FloatArray:
        """Rotation from zero order, rad, at positions of any shape; NaN where the mechanism cannot be."""
        ...

    def steps(self, rotation_rad: float) -> float:
        """Position, not rounded, that turns the grating by `rotation_rad` (within +-pi/2)."""
        ...

    def rad_per_step(self, steps: float) -> float:
        """Local rotation per step, rad; negative where the drive counts down as the rotation goes up."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class RotaryDrive:
    """phi = (steps - zero_order_steps)/steps_per_radian. ValueError for fields that make no sense."""

    steps_per_radian: float
    zero_order_steps: float = 0.0

    def __post_init__(self) -> None:
        _check_gearing("steps_per_radian", self.steps_per_radian)
        _check_zero(self.zero_order_steps)

    def rotation_rad(self, steps: npt.ArrayLike) -> FloatArray:
        return (np.asarray(steps, dtype=np.float64) - self.zero_order_steps) / self.steps_per_radian

    def steps(self, rotation_rad: float) -> float:
        return self.zero_order_steps + self.steps_per_radian * rotation_rad

    def rad_per_step(self, steps: float) -> float:
        return 1.0 / self.steps_per_radian


@dataclass(frozen=True, slots=True, kw_only=True)
class SineBarDrive:
    """sin phi = (steps - zero_order_steps)/steps_per_unit_sine. ValueError for fields that make no sense.

    `steps_per_unit_sine` is the bar's length over the screw's travel per step.
    """

    steps_per_unit_sine: float
    zero_order_steps: float = 0.0

    def __post_init__(self) -> None:
        _check_gearing("steps_per_unit_sine", self.steps_per_unit_sine)
        _check_zero(self.zero_order_steps)

    def rotation_rad(self, steps: npt.ArrayLike) -> FloatArray:
        sine = (np.asarray(steps, dtype=np.float64) - self.zero_order_steps) / self.steps_per_unit_sine
        return np.arcsin(np.where(np.abs(sine) <= 1.0, sine, np.nan))

    def steps(self, rotation_rad: float) -> float:
        return self.zero_order_steps + self.steps_per_unit_sine * math.sin(rotation_rad)

    def rad_per_step(self, steps: float) -> float:
        """1/(steps_per_unit_sine cos phi). ValueError at and beyond a right angle, where it is infinite."""
        cosine = math.cos(float(self.rotation_rad(steps)))
        if not cosine > 1e-12:  # a NaN fails this too
            raise ValueError(
                f"steps = {steps!r} is beyond the sine bar; allowed: less than "
                f"{abs(self.steps_per_unit_sine):.0f} steps from zero order"
            )
        return 1.0 / (self.steps_per_unit_sine * cosine)


@dataclass(frozen=True, slots=True, kw_only=True)
class PeriodicError:
    """A sine error of the drive's position that nobody corrects: worm, leadscrew, microsteps.

    The drive stands amplitude_steps * sin(2 pi steps/period_steps + phase) off, the phase unknown. An
    `nm_per_step` handed in below is that of the mount where the lines stand; its sign does not matter.
    Raises ValueError for fields that make no sense.
    """

    name: str
    period_steps: float
    amplitude_steps: float

    def __post_init__(self) -> None:
        if not (self.period_steps > 0.0 and math.isfinite(self.period_steps)):
            raise ValueError(
                f"period_steps = {self.period_steps!r} of {self.name!r}; allowed: positive, finite"
            )
        if not (self.amplitude_steps >= 0.0 and math.isfinite(self.amplitude_steps)):
            raise ValueError(
                f"amplitude_steps = {self.amplitude_steps!r} of {self.name!r}; "
                "allowed: zero or positive, finite"
            )

    @property
    def slope(self) -> float:
        """2 pi a/P: the largest relative error of a small separation."""
        return 2.0 * math.pi * self.amplitude_steps / self.period_steps

    def amplitude_nm(self, nm_per_step: float) -> float:
        """Largest error of one line's wavelength, nm."""
        return self.amplitude_steps * abs(nm_per_step)

    def period_nm(self, nm_per_step: float) -> float:
        """The period as a stretch of wavelength, nm."""
        return self.period_steps * abs(nm_per_step)

    def share_left(self, *, fwhm_steps: float, spacing_steps: float) -> float:
        """What a sweep leaves of the error of one line's centre: 1 where it averages nothing, 0 where all.

        A line's centre, estimated from Poisson counts on even positions `spacing_steps` apart (all the
        dithered sweeps together), moves by the errors of its positions weighted with mu'^2/mu. For a
        Gaussian line of standard deviation s without background the weight is x^2 exp(-x^2/2 s^2), and a
        sine error of frequency f keeps |1 - q^2| exp(-q^2/2) of its amplitude, q = 2 pi s f. Positions see
        f only as its distance from the next multiple of 1/spacing_steps: where the spacing is a multiple of
        the period every position has the same phase, and nothing is averaged. Sweeps whose starts are
        dithered have a spacing as many times finer.

        Raises ValueError unless both lengths are positive and the spacing is below half the FWHM.
        """
        if not (0.0 < spacing_steps < 0.5 * fwhm_steps and math.isfinite(fwhm_steps)):
            raise ValueError(
                f"spacing_steps = {spacing_steps!r} with fwhm_steps = {fwhm_steps!r}; "
                "allowed: positive, spacing below half the FWHM"
            )
        periods = spacing_steps / self.period_steps
        frequency = abs(periods - round(periods)) / spacing_steps
        q = 2.0 * math.pi * frequency * fwhm_steps / math.sqrt(8.0 * math.log(2.0))
        return abs(1.0 - q * q) * math.exp(-0.5 * q * q)


def separation_rms_nm(*, separation_nm: float, amplitude_nm: float, period_nm: float) -> float:
    """Error of a separation, nm, that a periodic error leaves, root mean square over its unknown phase.

    a sqrt(2) |sin(pi s/P)|; where s << P this is 2 pi a/(P sqrt 2) of s. ValueError unless the amplitude is
    zero or positive and the period positive.
    """
    if not (amplitude_nm >= 0.0 and math.isfinite(amplitude_nm)):
        raise ValueError(f"amplitude_nm = {amplitude_nm!r}; allowed: zero or positive, finite")
    if not (period_nm > 0.0 and math.isfinite(period_nm)):
        raise ValueError(f"period_nm = {period_nm!r}; allowed: positive, finite")
    return math.sqrt(2.0) * amplitude_nm * abs(math.sin(math.pi * separation_nm / period_nm))


def _check_gearing(name: str, value: float) -> None:
    if value == 0.0 or not math.isfinite(value):
        raise ValueError(f"{name} = {value!r}; allowed: finite, not zero")


def _check_zero(zero_order_steps: float) -> None:
    if not math.isfinite(zero_order_steps):
        raise ValueError(f"zero_order_steps = {zero_order_steps!r}; allowed: finite")
