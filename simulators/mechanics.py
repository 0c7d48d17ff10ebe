"""The stepper drive that turns the grating: ramps, backlash, ringing, periodic errors, heat.

Three positions are told apart, all in steps: what was commanded, where the motor stands (errors of
microsteps, worm or leadscrew and ringing included), and where the grating stands (backlash: the gear has
play, the grating stays where it is until the motor has crossed it).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from pydantic import Field

from drivers.settings import ListOf, Name, StrictModel
from simulators.draw import Draws

_STILL_STEPS = 0.01  # ringing below this no longer counts as motion


class PeriodicErrorOptions(StrictModel):
    """`[[world.options.drive.periodic_errors]]`: a worm, a leadscrew. Without a phase the seed chooses it."""

    name: Name
    period_steps: float = Field(gt=0.0)
    amplitude_steps: float = Field(ge=0.0)
    phase_rad: float | None = None


class DriveOptions(StrictModel):
    """`[world.options.drive]`: the mechanics as they truly are."""

    kind: Literal["rotary", "sine-bar"] = "rotary"
    steps_per_radian: float = Field(default=1.0, gt=0.0)  # rotary
    steps_per_unit_sine: float | None = Field(default=None, gt=0.0)  # sine bar: its length in steps
    periodic_errors: ListOf[PeriodicErrorOptions] = ()
    zero_order_steps: float = (
        0.0  # where zero order truly stands after homing; may differ from the bench file
    )
    lowest_steps: int = -1000
    highest_steps: int = 1_000_000
    steps_per_full_step: int = Field(default=16, ge=1, le=1024)
    microstep_error_full_steps: float = Field(default=0.05, ge=0.0, le=0.5)  # common practice: 5 %
    play_steps: float = Field(default=0.0, ge=0.0)
    speed_steps_per_s: float = Field(default=20000.0, gt=0.0)
    acceleration_steps_per_s2: float = Field(default=80000.0, gt=0.0)
    ring_steps: float = Field(default=4.0, ge=0.0)  # amplitude after a long move; a short one rings less
    ring_frequency_hz: float = Field(default=40.0, gt=0.0)
    ring_decay_s: float = Field(default=0.008, gt=0.0)
    index_noise_steps: float = Field(default=0.0, ge=0.0)  # repeatability of the reference mark, 1 sigma
    thermal_steps_per_k: float = 0.0
    home_s: float = Field(default=4.0, ge=0.0)  # slow search for the mark, beside the way to it

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.kind == "sine-bar" and self.steps_per_unit_sine is None:
            yield "steps_per_unit_sine", "missing; kind = 'sine-bar' needs the bar's length in steps"
        if self.kind == "rotary" and self.steps_per_unit_sine is not None:
            yield "steps_per_unit_sine", "only for kind = 'sine-bar'"


@dataclass(frozen=True, slots=True)
class Motion:
    """One commanded motion, a trapezoid of speed (a triangle when short)."""

    start_ns: int
    start: float
    end: float
    speed: float
    acceleration: float

    @property
    def duration_s(self) -> float:
        way = abs(self.end - self.start)
        ramp_s = self.speed / self.acceleration
        if way <= self.speed * ramp_s:
            return 2.0 * math.sqrt(way / self.acceleration)
        return way / self.speed + ramp_s

    @property
    def end_ns(self) -> int:
        return self.start_ns + math.ceil(self.duration_s * 1e9)

    def position(self, now_ns: int) -> float:
        if now_ns >= self.end_ns:
            return self.end
        way = abs(self.end - self.start)
        duration_s = self.duration_s
        t_s = (now_ns - self.start_ns) * 1e-9
        ramp_s = min(self.speed / self.acceleration, duration_s / 2.0)
        if t_s < ramp_s:
            gone = self.acceleration * t_s * t_s / 2.0
        elif t_s <= duration_s - ramp_s:
            gone = self.acceleration * ramp_s * (t_s - ramp_s / 2.0)
        else:
            gone = way - self.acceleration * (duration_s - t_s) ** 2 / 2.0
        return self.start + math.copysign(gone, self.end - self.start)


class Stepper:
    """Motor, gear and grating. All times are monotonic ns.

    `draws` are those of the reference mark; `worm` chooses the phases of the periodic errors that have none.
    """

    def __init__(self, options: DriveOptions, draws: Draws, worm: Draws | None = None) -> None:
        self.options = options
        self._draws = draws
        phases = (worm or draws).next_event().uniform(0.0, 2.0 * math.pi, len(options.periodic_errors))
        self.periodic_errors = tuple(
            (
                error.amplitude_steps,
                2.0 * math.pi / error.period_steps,
                float(phase) if error.phase_rad is None else error.phase_rad,
            )
            for error, phase in zip(options.periodic_errors, phases, strict=True)
        )
        self._full_steps = options.steps_per_full_step
        self._motion = Motion(0, 0.0, 0.0, options.speed_steps_per_s, options.acceleration_steps_per_s2)
        self._play_from = 0.0  # where the grating stood, in motor steps, when the present motion began
        self._mark_steps = 0.0  # what the reference mark was off when it was last found
        self._ring_until_ns = 0
        self.is_homed = False

    def begin(self, steps: float, now_ns: int) -> int:
        """Start a motion from wherever the motor is now; returns when it will arrive, monotonic ns."""
        self._play_from = self._engaged(now_ns)
        self._motion = Motion(
            now_ns,
            self._motion.position(now_ns),
            steps,
            self.options.speed_steps_per_s,
            self.options.acceleration_steps_per_s2,
        )
        decays = math.log(max(abs(self._ring_amplitude()) / _STILL_STEPS, 1.0))
        self._ring_until_ns = self._motion.end_ns + round(decays * self.options.ring_decay_s * 1e9)
        return self._motion.end_ns

    def stop(self, now_ns: int) -> None:
        """Stand still at the next whole step; the short ramp down is left out."""
        here = self._motion.position(now_ns)
        if now_ns < self._motion.end_ns:
            ahead = math.ceil if self._motion.end > self._motion.start else math.floor
            self.begin(float(ahead(here)), now_ns)

    def found_mark(self) -> None:
        """Homing ends here: the position counter is true again, as well as the mark repeats."""
        noise = self.options.index_noise_steps
        self._mark_steps = noise * float(self._draws.next_event().standard_normal()) if noise else 0.0
        self.is_homed = True

    def commanded_steps(self, now_ns: int) -> float:
        return self._motion.position(now_ns)

    def is_still(self, now_ns: int) -> bool:
        """Neither moving nor ringing."""
        return now_ns >= self._ring_until_ns

    def rotation_rad(self, now_ns: int, warmer_k: float) -> float:
        """The grating's true rotation, for a bench `warmer_k` above its stated temperature."""
        steps = self._engaged(now_ns)
        if now_ns < self._ring_until_ns:
            steps += self._ringing(now_ns)
        return self._rotation(steps + self._mark_steps + self.options.thermal_steps_per_k * warmer_k)

    def rest_rotation_rad(self, steps: float) -> float:
        """The rotation at rest after arriving from below, at the stated temperature, the mark exact."""
        return self._rotation(self._motor(steps))

    def _rotation(self, grating_steps: float) -> float:
        from_zero = grating_steps - self.options.zero_order_steps
        bar_steps = self.options.steps_per_unit_sine
        if bar_steps is None:
            return from_zero / self.options.steps_per_radian
        # the leadscrew pushes the end of a bar sideways: the bar is the hypotenuse; a right angle is its stop
        return math.asin(min(max(from_zero / bar_steps, -1.0), 1.0))

    def _motor(self, commanded: float) -> float:
        """Microstep error: a sine wave in four full steps (common practice), the currents not being ideal;
        worm and leadscrew: sine waves of their own turns."""
        error = self.options.microstep_error_full_steps * self._full_steps
        motor = commanded + error * math.sin(2.0 * math.pi * commanded / (4.0 * self._full_steps))
        for amplitude, per_step, phase in self.periodic_errors:
            motor += amplitude * math.sin(per_step * commanded + phase)
        return motor

    def _engaged(self, now_ns: int) -> float:
        """Where the gear has taken the grating: pushed from below it stands where the motor stands, coming
        down it lags by the play."""
        motor = self._motor(self._motion.position(now_ns))
        return min(max(self._play_from, motor), motor + self.options.play_steps)

    def _ring_amplitude(self) -> float:
        way = self._motion.end - self._motion.start
        return math.copysign(min(self.options.ring_steps, abs(way)), way)

    def _ringing(self, now_ns: int) -> float:
        after_s = (now_ns - self._motion.end_ns) * 1e-9
        if after_s < 0.0:
            return 0.0
        turn = 2.0 * math.pi * self.options.ring_frequency_hz * after_s
        return self._ring_amplitude() * math.exp(-after_s / self.options.ring_decay_s) * math.cos(turn)
