"""The device tables of a bench file: what turns, counts, opens, selects and measures."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Any, Literal

from pydantic import Field

from drivers.settings import Factory, ListOf, Name, Steps, StrictModel

LARGEST_DEAD_FRACTION = 0.3
"""Registered rate times dead time beyond which the dead-time correction is not to be trusted."""

Options = Annotated[dict[str, Any], Field(default_factory=dict)]
DeadTime = Annotated[float, Field(ge=0.0, le=1e6)]


class PeriodicError(StrictModel):
    """One of `[[drive.periodic_errors]]`: what is left, uncorrected, of worm, leadscrew or microsteps."""

    name: Name
    period_steps: Annotated[float, Field(ge=2.0, le=1e9)]
    """Steps from one error to the next equal one."""
    amplitude_steps: Annotated[float, Field(gt=0.0, le=1e6)]
    """Half of the error from peak to peak."""

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.amplitude_steps * 6.3 >= self.period_steps:
            yield (
                "amplitude_steps",
                f"would turn the grating backwards within period_steps = {self.period_steps:g};"
                f" must be below {self.period_steps / 6.3:.3g}",
            )


class Drive(StrictModel):
    """`[drive]`: the grating drive; positions are whole steps.

    A rotary drive turns the grating in proportion to the steps, a sine bar its sine.
    """

    factory: Factory
    """Its driver, module:factory."""
    kind: Literal["rotary", "sine-bar"] = "rotary"
    steps_per_radian: Annotated[float, Field(gt=0.0, le=1e12)] | None = None
    """Of the grating; a rotary drive."""
    steps_per_unit_sine: Annotated[float, Field(gt=0.0, le=1e12)] | None = None
    """Length of the bar over the travel of its screw in one step; a sine bar."""
    zero_order_steps: Steps | None = None
    """Where zero order stands; 0 if nothing is given."""
    lowest_steps: Steps
    """No position below it is ever asked for."""
    highest_steps: Steps
    """No position above it is ever asked for."""
    backlash_steps: Annotated[int, Field(ge=0, le=10_000_000)] = 0
    """More than the play: every position is arrived at from below, over at least this way."""
    settle_s: Annotated[float, Field(ge=0.0, le=60.0)] = 0.05
    """Waited after a move before counting."""
    microstep_period_steps: Annotated[int, Field(ge=2, le=1_000_000)] | None = None
    """Period of the microstep error: four full steps."""
    periodic_errors: ListOf[PeriodicError] = ()
    move_timeout_s: Annotated[float, Field(gt=0.0, le=3600.0)] = 60.0
    """Of one move; longer is a fault."""
    options: Options
    """For the driver's own model."""

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.lowest_steps >= self.highest_steps:
            yield "lowest_steps", f"must be below highest_steps = {self.highest_steps}"
        elif self.backlash_steps >= self.highest_steps - self.lowest_steps:
            room = self.highest_steps - self.lowest_steps
            yield "backlash_steps", f"must be below the drive's whole travel of {room} steps"
        if self.kind == "rotary" and self.steps_per_unit_sine is not None:
            yield "steps_per_unit_sine", "only for kind = 'sine-bar'; a rotary drive has steps_per_radian"
        if self.kind == "sine-bar" and self.steps_per_radian is not None:
            yield "steps_per_radian", "only for kind = 'rotary'; a sine bar has steps_per_unit_sine"
        names = [error.name for error in self.periodic_errors]
        twice = sorted({name for name in names if names.count(name) > 1})
        if twice:
            yield "periodic_errors", f"names {twice[0]!r} twice"

    @property
    def steps_per_unit(self) -> float | None:
        """Steps per radian or per unit of the sine, whichever the kind goes by."""
        return self.steps_per_radian if self.kind == "rotary" else self.steps_per_unit_sine

    @property
    def zero_steps(self) -> int:
        """Where zero order stands, in steps; 0 unless the file says otherwise."""
        return self.zero_order_steps or 0


class Detector(StrictModel):
    """`[detector]`: a photon counter, or a photocurrent and what reads it.

    An analogue detector's readings are recorded as whole numbers of `charge_unit_c`; its readings of time t
    at current I have the variance read_noise_a**2 (1 s / t) + shot_noise_c I / t, as it was measured.
    """

    factory: Factory
    """Its driver, module:factory."""
    kind: Literal["counter", "analogue"] = "counter"
    dead_time_ns: DeadTime | None = None
    """Non-paralysable; a counter."""
    dead_time_uncertainty_ns: DeadTime = 0.0
    """Standard uncertainty."""
    highest_rate_per_s: Annotated[float, Field(gt=0.0, le=1e12)] | None = None
    """More closes the shutter between two gates; a counter."""
    charge_unit_c: Annotated[float, Field(gt=0.0, le=1.0)] | None = None
    """Charge that one recorded count stands for; below the read noise of the shortest gate. An analogue
    detector."""
    highest_current_a: Annotated[float, Field(gt=0.0, le=1.0)] | None = None
    """More closes the shutter between two gates; an analogue detector."""
    read_noise_a: Annotated[float, Field(gt=0.0, le=1.0)] | None = None
    """Standard deviation of a reading of 1 s, shutter closed; an analogue detector."""
    shot_noise_c: Annotated[float, Field(gt=0.0, le=1.0)] | None = None
    """Variance of a reading times its time over its current; an analogue detector."""
    longest_gate_s: Annotated[float, Field(gt=0.0, le=1.0)] = 1.0
    """Longer dwells are sums of gates."""
    shortest_nm: Annotated[float, Field(gt=0.0, le=100_000.0)] = 185.0
    """It sees nothing below."""
    longest_nm: Annotated[float, Field(gt=0.0, le=100_000.0)] = 1100.0
    """It sees nothing beyond."""
    options: Options
    """For the driver's own model."""

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.shortest_nm >= self.longest_nm:
            yield "shortest_nm", f"must be below longest_nm = {self.longest_nm:g}, in nm"
        counting = ("dead_time_ns", "highest_rate_per_s")
        analogue = ("charge_unit_c", "highest_current_a", "read_noise_a", "shot_noise_c")
        wanted, odd = (counting, analogue) if self.kind == "counter" else (analogue, counting)
        for key in wanted:
            if getattr(self, key) is None:
                yield key, f"missing; kind = {self.kind!r} needs {', '.join(wanted)}"
        if self.kind == "analogue" and self.dead_time_uncertainty_ns:
            yield "dead_time_uncertainty_ns", "not for kind = 'analogue'; a current has no dead time"
        for key in odd:
            if getattr(self, key) is not None:
                yield key, f"not for kind = {self.kind!r}, which has {', '.join(wanted)}"
        if self.kind == "counter" and self.dead_time_ns is not None:
            yield from self._dead_time_checks(self.dead_time_ns)

    def _dead_time_checks(self, dead_time_ns: float) -> Iterator[tuple[str, str]]:
        if self.dead_time_uncertainty_ns > dead_time_ns:
            yield "dead_time_uncertainty_ns", f"must be at most dead_time_ns = {dead_time_ns:g}"
        if self.highest_rate_per_s is None:
            return
        dead = self.highest_rate_per_s * dead_time_ns / 1e9
        if dead > LARGEST_DEAD_FRACTION:
            most = LARGEST_DEAD_FRACTION * 1e9 / dead_time_ns
            yield (
                "highest_rate_per_s",
                f"with dead_time_ns = {dead_time_ns:g} the counter would be dead {dead:.0%} of the time;"
                f" must be at most {most:.3g}, in 1/s",
            )

    @property
    def most_counts_per_s(self) -> float:
        """The highest rate allowed, in recorded counts per s, whatever the kind."""
        if self.kind == "counter":
            assert self.highest_rate_per_s is not None, "checked when the file was read"
            return self.highest_rate_per_s
        assert self.highest_current_a is not None, "checked when the file was read"
        assert self.charge_unit_c is not None, "checked when the file was read"
        return self.highest_current_a / self.charge_unit_c


class Reference(StrictModel):
    """`[reference]`: a counter that always sees the lamp, past monochromator and shutter."""

    factory: Factory
    """Its driver, module:factory."""
    dead_time_ns: DeadTime
    """Non-paralysable."""
    dark_rate_per_s: Annotated[float, Field(ge=0.0, le=1e9)] = 0.0
    options: Options
    """For the driver's own model."""


class Shutter(StrictModel):
    """`[shutter]`: between the lamp and the entrance slit, or before the detector."""

    factory: Factory
    options: Options


class FilterWheel(StrictModel):
    """`[filter]`: a wheel whose positions are the names of `[[filters]]`, and "none"."""

    factory: Factory
    options: Options


class LampTurret(StrictModel):
    """`[lamp]`: a mirror or turret that brings one lamp or another before the slit."""

    factory: Factory
    positions: Annotated[ListOf[Name], Field(min_length=1, max_length=100)]
    """Names of the lamps; the first stands unless a target says."""
    options: Options

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        twice = sorted({name for name in self.positions if self.positions.count(name) > 1})
        if twice:
            yield "positions", f"names {twice[0]!r} twice"


class MotorisedSlits(StrictModel):
    """`[slits]`: slits that a motor sets; without it they are set by hand."""

    factory: Factory
    narrowest_um: Annotated[float, Field(gt=0.0, le=20_000.0)]
    widest_um: Annotated[float, Field(gt=0.0, le=20_000.0)]
    options: Options

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.narrowest_um >= self.widest_um:
            yield "narrowest_um", f"must be below widest_um = {self.widest_um:g}, in um"


class Ambient(StrictModel):
    """`[ambient]`: a sensor of the air; without it the bench assumes 20 C, 101 325 Pa, 50 %."""

    factory: Factory
    options: Options
