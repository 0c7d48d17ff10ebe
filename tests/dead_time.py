"""A lamp behind a counter that is dead after every pulse, with a dead time that is told wrongly.

The line is a Gaussian, broad against the slits: its top, flattened by lost pulses, can read as a close pair.
Every pulse train is drawn by the simulator's exact non-paralysable counter, not by the likelihood's mean.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from emulated import FWHM_NM, Lamp, question

from analysis.counting import Counts
from analysis.question import Question
from simulators.detector import registered


def ask(*, false_alarm: float = 0.05, shape_allowance: float = 0.01) -> Question:
    """The emulated question of a bench whose slits are narrow."""
    asked = question(false_alarm=false_alarm)
    feature = replace(
        asked.feature, box_widths_nm=(0.002, 0.002), line_fwhm_nm=FWHM_NM, shape_allowance=shape_allowance
    )
    return replace(asked, feature=feature)


RELATIVE_U = 0.1
DARK_PER_S = 10.0


class BehindDeadTime(Lamp):
    """load : registered rate times dead time at the top of the line. off_by : error of the stated dead time
    in its stated standard uncertainties of 10 %; `is_trusted` states it without any."""

    def __init__(
        self, seed: int, *, load: float, off_by: float, peak_per_s: float, is_trusted: bool = False
    ) -> None:
        super().__init__(seed, peak_per_s=0.0)
        offset = self.wavelength_nm - self.centre_nm
        self.rate_per_s = self.rate_per_s + peak_per_s * np.exp(-4.0 * np.log(2.0) * (offset / FWHM_NM) ** 2)
        self.dead_time_s = load / (1.0 - load) / (float(self.rate_per_s.max()) + DARK_PER_S)
        self.stated_s = self.dead_time_s * (1.0 + off_by * RELATIVE_U)
        self.stated_u_s = 0.0 if is_trusted else RELATIVE_U * self.dead_time_s
        self.draw = np.random.Generator(np.random.Philox(key=[seed, 2]))

    def sweep(self, *, dwell_s: float = 0.2, dark_per_s: float = DARK_PER_S) -> None:
        mine = np.flatnonzero(self.group == self.sweeps % 2)
        gain = 1.0 + 0.003 * self.rng.standard_normal()
        for place in mine.tolist():
            rate = gain * float(self.rate_per_s[place]) + dark_per_s
            self.counted[place] += registered(
                self.draw, rate_per_s=rate, gate_s=dwell_s, dead_time_s=self.dead_time_s
            )
        self.gate_s[mine] += dwell_s
        self.dark_counts += float(self.rng.poisson(dark_per_s * 2.0))
        self.dark_gate_s += 2.0
        self.sweeps += 1

    def counts(self) -> Counts:
        return replace(super().counts(), dead_time_s=self.stated_s, dead_time_u_s=self.stated_u_s)
