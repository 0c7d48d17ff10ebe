"""Lines behind a dead time: area and width from a counter that is drawn pulse by pulse, up to the limit."""

from __future__ import annotations

import math

import numpy as np
import pytest

from analysis.counting import LOAD_LIMIT, Counts, load
from analysis.fit import FitResult
from analysis.model import FeatureModel
from analysis.question import Feature
from analysis.starts import fit_single
from simulators.detector import registered

SIGMA_NM = 6e-3
CENTRE_NM = 500.02
TAU_S = 30e-9
FEATURE = Feature(
    wavelength_nm=CENTRE_NM,
    fwhm_nm=0.0141,
    box_widths_nm=(0.0, 0.0),
    line_fwhm_nm=0.0141,
    shape="gaussian",
    background="flat",
    shape_allowance=0.0,
)


def one_line(
    rng: np.random.Generator,
    *,
    peak_load: float,
    tau_s: float = TAU_S,
    tau_u_s: float = 0.0,
    gate_s: float = 2e-3,
) -> tuple[FitResult, float]:
    """A fit to one sweep over a Gaussian line whose peak keeps the counter dead for `peak_load` of the time,
    and the line's true area. tau_s : the counter's; the fit is told TAU_S and its uncertainty."""
    peak = peak_load / (1.0 - peak_load) / TAU_S
    x = CENTRE_NM + 1e-3 * np.arange(-21.0, 21.5, 1.5)
    true = peak * np.exp(-0.5 * ((x - CENTRE_NM) / SIGMA_NM) ** 2) + 0.01 * peak
    counts = [registered(rng, rate_per_s=r, gate_s=gate_s, dead_time_s=tau_s) for r in true]
    made = Counts(
        wavelength_nm=x,
        counts=np.array(counts, dtype=np.float64),
        gate_s=np.full(x.size, gate_s),
        group=np.zeros(x.size, dtype=np.int64),
        dead_time_s=TAU_S,
        dead_time_u_s=tau_u_s,
    )
    return fit_single(FeatureModel(made, FEATURE, 1)), peak * SIGMA_NM * math.sqrt(2.0 * math.pi)


@pytest.mark.parametrize("peak_load", [0.01, 0.1, 0.2, 0.295])
def test_area_and_width_are_unbiased(peak_load: float) -> None:
    """Up to the limit of the load a line's area and width come out right on average, and scatter as the fit
    says; a plain Poisson fit to corrected counts would claim (1 + r tau)^2 times the variance at the top."""
    seed, runs = 17, 120
    rng = np.random.Generator(np.random.Philox(key=seed))
    area_off, width_off = [], []
    for _ in range(runs):
        made, area = one_line(rng, peak_load=peak_load)
        area_off.append((made.value("area") - area) / made.deviation("area"))
        width_off.append((made.value("sigma_nm") - SIGMA_NM) / made.deviation("sigma_nm"))
    for off in (area_off, width_off):
        assert abs(float(np.mean(off))) < 4.0 / math.sqrt(runs), seed
        assert 0.74 < float(np.std(off)) < 1.26, seed  # 4 standard deviations of a deviation from 120


def test_a_dead_time_taken_for_none_shows() -> None:
    """The same line without the correction: too little area, too much width, by many standard deviations."""
    seed = 18
    rng = np.random.Generator(np.random.Philox(key=seed))
    made, area = one_line(rng, peak_load=0.2, tau_s=2.0 * TAU_S)  # told half of the truth
    assert (made.value("area") - area) / made.deviation("area") < -20.0, seed
    assert (made.value("sigma_nm") - SIGMA_NM) / made.deviation("sigma_nm") > 10.0, seed


@pytest.mark.parametrize("peak_load", [0.1, 0.295])
def test_intervals_cover_whatever_the_dead_time_is(peak_load: float) -> None:
    """The counter's dead time drawn from its stated uncertainty of 7 %: intervals of one and two standard
    uncertainties hold area and width as often as they should."""
    seed, runs = 19, 200
    rng = np.random.Generator(np.random.Philox(key=seed))
    off = np.zeros((runs, 2))
    for k in range(runs):
        tau_s = TAU_S * (1.0 + 0.07 * float(rng.standard_normal()))
        made, area = one_line(rng, peak_load=peak_load, tau_s=tau_s, tau_u_s=0.07 * TAU_S)
        off[k] = (
            (made.value("area") - area) / made.deviation("area"),
            (made.value("sigma_nm") - SIGMA_NM) / made.deviation("sigma_nm"),
        )
    for within, expected in ((1.0, 0.6827), (2.0, 0.9545)):
        covered = np.mean(np.abs(off) < within, axis=0)
        spread = 4.0 * math.sqrt(expected * (1.0 - expected) / runs)
        assert covered == pytest.approx([expected, expected], abs=spread), (seed, within)


def test_the_brightest_position_is_at_the_limit() -> None:
    """The tests above reach what the bench refuses from: the peak's load is LOAD_LIMIT less 2 % at most."""
    seed = 20
    rng = np.random.Generator(np.random.Philox(key=seed))
    true = 0.295 / 0.705 / TAU_S
    counts = float(registered(rng, rate_per_s=true, gate_s=1.0, dead_time_s=TAU_S))
    at_peak = load(np.array([counts]), np.array([1.0]), dead_time_s=TAU_S)[0]
    assert 0.98 * LOAD_LIMIT < at_peak < LOAD_LIMIT, seed
