"""Drives: rotary and sine bar there and back, and what a periodic error does to lines and separations."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drives import Drive, PeriodicError, RotaryDrive, SineBarDrive, separation_rms_nm

ROTARY = RotaryDrive(steps_per_radian=1.1e6, zero_order_steps=250.0)
SINE_BAR = SineBarDrive(steps_per_unit_sine=-8.0e5, zero_order_steps=-40.0)
DRIVES: list[Drive] = [ROTARY, SINE_BAR]

# A drive of 4.3 pm a microstep, 64 microsteps a full step, 5 % of a full step of microstep error, period
# four full steps (common practice for two-phase stepping motors).
NM_PER_STEP = 4.3e-3
MICROSTEPS = PeriodicError(name="microsteps", period_steps=4 * 64.0, amplitude_steps=0.05 * 64.0)


@given(rotation_rad=st.floats(-1.5, 1.5), number=st.sampled_from([0, 1]))
def test_there_and_back_again(rotation_rad: float, number: int) -> None:
    drive = DRIVES[number]
    assert float(drive.rotation_rad(drive.steps(rotation_rad))) == pytest.approx(rotation_rad, abs=1e-9)


@given(rotation_rad=st.floats(-1.4, 1.4), number=st.sampled_from([0, 1]))
def test_rad_per_step_is_the_slope(rotation_rad: float, number: int) -> None:
    drive = DRIVES[number]
    steps = drive.steps(rotation_rad)
    below, above = drive.rotation_rad([steps - 10.0, steps + 10.0])
    assert drive.rad_per_step(steps) == pytest.approx((above - below) / 20.0, rel=1e-6)


def test_a_sine_bar_pushes_evenly() -> None:
    """An arm of 400 mm and a screw of 0.5 um a step: 30 degrees are 200 mm of travel, 400 000 steps."""
    drive = SineBarDrive(steps_per_unit_sine=400.0 / 0.5e-3)
    assert drive.steps(math.radians(30.0)) == pytest.approx(400_000.0, rel=1e-12)
    assert float(drive.rotation_rad(200_000.0)) == pytest.approx(math.asin(0.25), rel=1e-12)


def test_a_sine_bar_ends_at_a_right_angle() -> None:
    assert np.isnan(SINE_BAR.rotation_rad([-40.0, 800_000.0])).tolist() == [False, True]
    with pytest.raises(
        ValueError, match=r"steps = 799960\.0 is beyond the sine bar; allowed: less than 800000"
    ):
        SINE_BAR.rad_per_step(799_960.0)
    with pytest.raises(ValueError, match="beyond the sine bar"):
        SINE_BAR.rad_per_step(1e7)


def test_a_sine_bar_reaches_its_right_angle() -> None:
    """The last position is the bar's own length from zero order, and stands at 90 degrees."""
    assert float(SINE_BAR.rotation_rad(799_960.0)) == pytest.approx(-0.5 * math.pi, rel=1e-12)


def test_a_perfect_drive_has_no_error() -> None:
    """An amplitude of zero is a statement, not a mistake, and a position may be finer than a step."""
    perfect = PeriodicError(name="worm", period_steps=100.0, amplitude_steps=0.0)
    assert (perfect.slope, perfect.amplitude_nm(NM_PER_STEP)) == (0.0, 0.0)
    assert separation_rms_nm(separation_nm=0.03, amplitude_nm=0.0, period_nm=1.0) == 0.0
    assert perfect.share_left(fwhm_steps=8.0, spacing_steps=0.25) < 1.0


def test_the_microstep_error_in_figures() -> None:
    """+-14 pm on a line, a local slope of 7.9 %, and so at most 2.3 pm on a pair 29 pm apart: 2 pi a/P, by
    hand."""
    assert 1e3 * MICROSTEPS.amplitude_nm(NM_PER_STEP) == pytest.approx(14.0, abs=0.3)
    assert MICROSTEPS.slope == pytest.approx(0.0785, abs=1e-4)
    assert MICROSTEPS.slope * 29.0 == pytest.approx(2.3, abs=0.03)
    rms_nm = separation_rms_nm(
        separation_nm=0.029,
        amplitude_nm=MICROSTEPS.amplitude_nm(NM_PER_STEP),
        period_nm=MICROSTEPS.period_nm(NM_PER_STEP),
    )
    # the sine's mean square is one half
    assert 1e3 * rms_nm == pytest.approx(MICROSTEPS.slope * 29.0 / math.sqrt(2.0), rel=2e-3)


@pytest.mark.parametrize("separation_nm", [0.001, 0.03, 0.25, 0.5, 0.73, 1.0, 2.5])
def test_error_of_a_separation_against_the_sine_itself(separation_nm: float) -> None:
    """Two lines on the sine, at 1000 phases: their difference's root mean square, summed out."""
    phase = 2.0 * math.pi * np.arange(1000) / 1000.0
    one = 0.014 * np.sin(phase)
    two = 0.014 * np.sin(phase + 2.0 * math.pi * separation_nm / 1.0)
    ours = separation_rms_nm(separation_nm=separation_nm, amplitude_nm=0.014, period_nm=1.0)
    assert ours == pytest.approx(math.sqrt(np.mean((two - one) ** 2)), abs=1e-12)


def centre_moves_by(error: PeriodicError, fwhm_steps: float, spacing_steps: float) -> float:
    """Amplitude of the maximum-likelihood centre's error over the phase, the fit done by Newton's method."""
    sigma = fwhm_steps / math.sqrt(8.0 * math.log(2.0))
    nominal = np.arange(-6.0 * sigma, 6.0 * sigma, spacing_steps)
    moved = []
    for phase in 2.0 * math.pi * np.arange(16) / 16.0:
        wrong = error.amplitude_steps * np.sin(2.0 * math.pi * nominal / error.period_steps + phase)
        counts = np.exp(-0.5 * ((nominal + wrong) / sigma) ** 2)
        centre, height = 0.0, 1.0
        for _ in range(8):
            x = (nominal - centre) / sigma
            model = height * np.exp(-0.5 * x * x)
            slopes = np.stack([model * x / sigma, model / height])
            information = (slopes / model) @ slopes.T
            step = np.linalg.solve(information, slopes @ ((counts - model) / model))
            centre, height = centre + step[0], height + step[1]
        moved.append(centre)
    return float(np.sqrt(2.0 * np.var(moved)))


@pytest.mark.parametrize(
    ("period_steps", "spacing_steps"),
    [(16.0, 5.0), (100.0, 5.0), (60.0, 5.0), (37.0, 12.0), (13.0, 12.0), (4000.0, 12.0), (24.0, 12.0)],
)
def test_what_a_line_averages_against_a_fit(period_steps: float, spacing_steps: float) -> None:
    """Poisson fits of a Gaussian line of FWHM 80 steps, read where the drive truly stood."""
    error = PeriodicError(name="worm", period_steps=period_steps, amplitude_steps=0.01)
    share = error.share_left(fwhm_steps=80.0, spacing_steps=spacing_steps)
    brute = centre_moves_by(error, 80.0, spacing_steps) / error.amplitude_steps
    assert share == pytest.approx(brute, abs=2e-3)


def test_dithered_sweeps_average_what_one_sweep_does_not() -> None:
    """Steps that meet a period at one phase average nothing; four sweeps a quarter of a step apart do."""
    error = PeriodicError(name="microsteps", period_steps=16.0, amplitude_steps=0.8)
    assert error.share_left(fwhm_steps=128.0, spacing_steps=16.0) == 1.0
    assert error.share_left(fwhm_steps=128.0, spacing_steps=4.0) < 1e-60
    # a worm's period far beyond the line stays whatever the sweep does
    worm = PeriodicError(name="worm", period_steps=80_000.0, amplitude_steps=1.5)
    assert worm.share_left(fwhm_steps=128.0, spacing_steps=4.0) == pytest.approx(1.0, abs=1e-4)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: RotaryDrive(steps_per_radian=0.0), r"steps_per_radian = 0\.0; allowed"),
        (lambda: SineBarDrive(steps_per_unit_sine=math.inf), "steps_per_unit_sine = inf; allowed"),
        (lambda: SineBarDrive(steps_per_unit_sine=1.0, zero_order_steps=math.nan), "zero_order_steps = nan"),
        (lambda: RotaryDrive(steps_per_radian=1.0, zero_order_steps=math.inf), "zero_order_steps = inf"),
        (
            lambda: PeriodicError(name="w", period_steps=0.0, amplitude_steps=1.0),
            r"period_steps = 0\.0 of 'w'",
        ),
        (
            lambda: PeriodicError(name="w", period_steps=1.0, amplitude_steps=-1.0),
            r"amplitude_steps = -1\.0 of",
        ),
        (lambda: MICROSTEPS.share_left(fwhm_steps=10.0, spacing_steps=5.0), "spacing below half the FWHM"),
        (lambda: MICROSTEPS.share_left(fwhm_steps=10.0, spacing_steps=0.0), r"spacing_steps = 0\.0 with"),
        (lambda: MICROSTEPS.share_left(fwhm_steps=math.inf, spacing_steps=1.0), "fwhm_steps = inf; allowed"),
        (
            lambda: separation_rms_nm(separation_nm=1.0, amplitude_nm=-1.0, period_nm=1.0),
            r"amplitude_nm = -1\.0; allowed",
        ),
        (
            lambda: separation_rms_nm(separation_nm=1.0, amplitude_nm=1.0, period_nm=math.nan),
            "period_nm = nan; allowed",
        ),
        (
            lambda: separation_rms_nm(separation_nm=1.0, amplitude_nm=1.0, period_nm=0.0),
            r"period_nm = 0\.0; allowed",
        ),
    ],
)
def test_what_makes_no_sense(make: object, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        make()  # type: ignore[operator]
