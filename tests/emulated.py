"""A feature counted point by point, for tests of the verdict: nothing of the fit's code is in it.

The line is scipy's Voigt profile averaged over a triangle of 399 points (two equal slits); counts are
numpy's Poisson draws; between sweeps the lamp jumps by a few per cent.
"""

from __future__ import annotations

import numpy as np
from scipy.special import voigt_profile

from analysis.counting import Counts, FloatArray
from analysis.question import Evidence, Feature, Look, Question
from analysis.verdict import look

FWHM_NM = 0.0186
SLIT_NM = 0.018
CENTRE_NM = 313.155
LOOKS = (2, 4, 6, 8, 12, 16, 24, 32, 48, 64, 96, 128)


class Lamp:
    """Sweeps over +-4 FWHM in steps of FWHM/8; every second sweep half a step later (two dither groups)."""

    def __init__(
        self,
        seed: int,
        *,
        separation_fwhm: float = 0.0,
        ratio: float = 0.0,
        peak_per_s: float = 200.0,
        background_per_s: float = 10.0,
        slope: float = 0.2,
        line_fwhm_nm: float = 0.003,
        skewness: float = 0.0,
        third_line: float = 0.0,
    ) -> None:
        self.rng = np.random.Generator(np.random.Philox(key=seed))
        step = FWHM_NM / 8.0
        grid = np.arange(-32, 33) * step
        places = np.concatenate([grid, grid + 0.5 * step])
        order = np.argsort(places, kind="stable")
        self.wavelength_nm = CENTRE_NM + places[order]
        self.group = np.repeat(np.arange(2), grid.size)[order]
        self.centre_nm = CENTRE_NM + float(self.rng.uniform(-0.5, 0.5)) * step
        offset = self.wavelength_nm - self.centre_nm
        light = line(offset, line_fwhm_nm)
        if ratio:
            light = light + ratio * line(offset - separation_fwhm * FWHM_NM, line_fwhm_nm)
        if third_line:
            light = light + third_line * line(offset + 2.3 * FWHM_NM, line_fwhm_nm)
        u = offset / (0.41 * FWHM_NM)
        light = np.maximum(light + skewness * (u**3 - 3.0 * u) * np.exp(-0.5 * u * u) / 1.38, 0.0)
        sloping = 1.0 + slope * (self.wavelength_nm - CENTRE_NM) / (4.0 * FWHM_NM)
        self.rate_per_s = peak_per_s * light + background_per_s * sloping
        self.counted = np.zeros(places.size)
        self.gate_s = np.zeros(places.size)
        self.dark_counts, self.dark_gate_s, self.sweeps = 0.0, 0.0, 0

    def sweep(self, *, dwell_s: float = 0.2, dark_per_s: float = 10.0) -> None:
        mine = self.group == self.sweeps % 2
        gain = 1.0 + 0.03 * self.rng.standard_normal()
        self.counted[mine] += self.rng.poisson((gain * self.rate_per_s[mine] + dark_per_s) * dwell_s)
        self.gate_s[mine] += dwell_s
        self.dark_counts += float(self.rng.poisson(dark_per_s * 2.0))
        self.dark_gate_s += 2.0
        self.sweeps += 1

    def counts(self) -> Counts:
        return Counts(
            self.wavelength_nm,
            self.counted.copy(),
            self.gate_s.copy(),
            self.group,
            None,
            self.dark_counts,
            self.dark_gate_s,
        )


def line(offset_nm: FloatArray, line_fwhm_nm: float) -> FloatArray:
    """Height 1 at the centre."""
    sigma = line_fwhm_nm / 2.354820045
    places = np.linspace(-1.0, 1.0, 401)[1:-1]
    weights = (1.0 - np.abs(places)) / np.sum(1.0 - np.abs(places))
    spread = SLIT_NM * places
    top = voigt_profile(spread, sigma, 0.1 * sigma) @ weights
    made: FloatArray = voigt_profile(offset_nm[:, None] + spread, sigma, 0.1 * sigma) @ weights / top
    return made


def question(
    *,
    false_alarm: float = 1e-3,
    miss_probability: float = 0.05,
    smallest_separation_nm: float = FWHM_NM,
    smallest_ratio: float = 0.1,
    goal_nm: float | None = None,
) -> Question:
    feature = Feature(CENTRE_NM, FWHM_NM, (SLIT_NM, SLIT_NM), 0.003)
    return Question(
        feature, false_alarm, smallest_separation_nm, smallest_ratio, miss_probability, goal_nm, 2e-5
    )


def night(lamp: Lamp, asked: Question, *, looks: tuple[int, ...] = LOOKS, stop: bool = True) -> list[Look]:
    """Look after every so many sweeps; the answers in order."""
    answers: list[Look] = []
    first = previous = None
    for sweeps in looks:
        while lamp.sweeps < sweeps:
            lamp.sweep()
        now = lamp.counts()
        answers.append(look(Evidence(now, previous, first), asked, answers[-1] if answers else None))
        first = first or now
        previous = now
        if stop and answers[-1].goal_reached:
            break
    return answers
