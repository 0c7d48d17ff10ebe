"""Lines of several components: hyperfine and isotope patterns."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from emulated import CENTRE_NM, FWHM_NM, Lamp, line, night, question

from analysis.counting import FloatArray
from analysis.line import components, observed_line
from analysis.question import Question

# Two groups in the ratio of the ground levels' statistical weights, 9 : 7, as caesium's line at 852.113 nm
# has them (common practice); the distance is 0.9 FWHM of the emulated bench.
GROUPS = ((0.0, 9.0), (0.9 * FWHM_NM, 7.0))


class Patterned(Lamp):
    """The emulated lamp with lines of two components; `shares` of sum 1, about their mean."""

    def __init__(self, seed: int, *, second_fwhm: float = 0.0, ratio: float = 0.0) -> None:
        super().__init__(seed, peak_per_s=0.0)
        offset = self.wavelength_nm - self.centre_nm
        light = pattern(offset)
        if ratio:
            light = light + ratio * pattern(offset - second_fwhm * FWHM_NM)
        self.rate_per_s = self.rate_per_s + 400.0 * light


def pattern(offset: FloatArray) -> FloatArray:
    """Two lines, 9 : 7, with their centre of gravity at 0."""
    mean = 0.9 * FWHM_NM * 7.0 / 16.0
    made: FloatArray = (
        9.0 * line(offset + mean, 0.003) + 7.0 * line(offset + mean - 0.9 * FWHM_NM, 0.003)
    ) / 16.0
    return made


def ask() -> Question:
    asked = question(smallest_separation_nm=1.5 * FWHM_NM, smallest_ratio=0.2)
    return replace(asked, feature=replace(asked.feature, pattern=GROUPS))


def test_a_pattern_is_the_sum_of_its_components() -> None:
    feature = replace(question().feature, pattern=((0.01, 3.0), (0.022, 1.0)))
    x = np.linspace(-0.06, 0.06, 61)[None, :]
    made = observed_line(x, feature, sigma_nm=0.002, gamma_nm=2e-4, mode_shares=(0.01, -0.005))
    plain = replace(feature, pattern=())
    one, two = (
        observed_line(x - place, plain, sigma_nm=0.002, gamma_nm=2e-4, mode_shares=(0.01, -0.005))
        for place in (-0.003, 0.009)  # 3 : 1 about their mean, 0.013
    )
    assert made.value == pytest.approx(0.75 * one.value + 0.25 * two.value, rel=1e-12)
    assert made.modes == pytest.approx(0.75 * one.modes + 0.25 * two.modes, rel=1e-9, abs=1e-12)


def test_offsets_count_from_anywhere() -> None:
    """A line's place is the strength-weighted mean of its components."""
    near = components(replace(question().feature, pattern=((0.0, 2.0), (0.03, 1.0))))
    far = components(replace(question().feature, pattern=((5.0, 0.2), (5.03, 0.1))))
    for made in (near, far):
        assert made[0] == pytest.approx([-0.01, 0.02])
        assert made[1] == pytest.approx([2.0 / 3.0, 1.0 / 3.0])
        assert made[0] @ made[1] == pytest.approx(0.0, abs=1e-15)


def test_a_line_of_two_groups_is_one_line() -> None:
    """With its pattern given it is single, at its centre of gravity; without, it is a pair."""
    for seed in (870, 871):
        lamp = Patterned(seed)
        last = night(lamp, ask(), looks=(2, 4, 8, 16))[-1]
        assert last.verdict == "single", seed
        assert last.centre_u_nm is not None
        assert abs(last.centre_nm - lamp.centre_nm) < 3.5 * last.centre_u_nm, seed
        # the width is that of a component, not of the pattern
        assert last.fwhm_nm == pytest.approx(FWHM_NM, rel=0.1)
        assert night(Patterned(seed), question(), looks=(2, 4, 8, 16))[-1].verdict == "pair", seed


def test_two_lines_of_two_groups_are_two_lines() -> None:
    seed = 872
    last = night(Patterned(seed, second_fwhm=2.0, ratio=0.5), ask(), looks=(2, 4, 8, 16))[-1]
    assert last.verdict == "pair"
    assert last.separation_nm is not None
    assert last.separation_u_nm is not None
    assert last.ratio is not None
    assert last.ratio_u is not None
    assert abs(last.separation_nm - 2.0 * FWHM_NM) < 3.0 * last.separation_u_nm
    assert abs(last.ratio - 0.5) < 3.0 * last.ratio_u
    assert abs(last.centre_nm - CENTRE_NM) < 0.1 * FWHM_NM
