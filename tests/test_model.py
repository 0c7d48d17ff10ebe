"""What the model knows besides plain lines: absorption, tied widths, windows, exposure, dispersion."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from emulated import CENTRE_NM, FWHM_NM, SLIT_NM, Lamp, line, night, question

from analysis.budget import drive_uncertainty_nm, separation_budget
from analysis.counting import Counts, FloatArray
from analysis.evidence import between
from analysis.fit import FitResult
from analysis.model import FeatureModel, vector
from analysis.question import Feature
from analysis.recorded import guess_feature, weigh_once
from analysis.starts import fit_pair, fit_single

FEATURE = Feature(
    CENTRE_NM, FWHM_NM, (SLIT_NM, 0.016), 0.004, known_lines_nm=(CENTRE_NM + 0.05,), shape_allowance=0.01
)
PATTERN = ((-0.006, 0.4), (0.004, 0.7), (0.001, 0.2))
VALUES = {
    "area": 4.0,
    "centre_nm": CENTRE_NM + 0.0012,
    "ratio": 0.4,
    "separation_nm": 0.021,
    "sigma_nm": 0.0027,
    "sigma2_nm": 0.0021,
    "gamma_nm": 0.0006,
    "known_1_area": 0.6,
    "known_shift_nm": 1e-4,
    "reversal_depth": 2.0,
    "absorber_width": 0.6,
    "absorber_shift": 0.2,
    "gain_1": 1.1,
    "dark_per_s": 4.0,
    "dead_time_s": 2.1e-4,
    "skewness": 0.012,
    "kurtosis": -0.008,
}


def counted(seed: int) -> Counts:
    rng = np.random.Generator(np.random.Philox(key=seed))
    x = CENTRE_NM + np.linspace(-0.07, 0.07, 90)
    return Counts(
        x,
        rng.poisson(900.0, 90).astype(np.float64),
        np.full(90, 2.0),
        np.arange(90, dtype=np.int64) % 2,
        None,
        200.0,
        40.0,
        2e-4,
        2e-5,
        exposure=rng.uniform(0.8, 1.2, 90),
        dispersion=rng.uniform(0.7, 1.6, 90),
    )


@pytest.mark.parametrize(
    ("feature", "lines", "is_reversed"),
    [
        (replace(FEATURE, widths="tied", width_ratio=0.7071), 2, False),
        (replace(FEATURE, widths="free", pattern=PATTERN), 2, False),
        (replace(FEATURE, widths="tied", width_ratio=1.3, kind="absorption", pattern=PATTERN), 2, False),
        (
            replace(
                FEATURE,
                windows_nm=((CENTRE_NM - 0.07, CENTRE_NM + 0.01), (CENTRE_NM + 0.015, CENTRE_NM + 0.07)),
            ),
            2,
            False,
        ),
        (FEATURE, 1, True),
        (replace(FEATURE, box_widths_nm=(SLIT_NM, 0.0)), 1, True),
        (replace(FEATURE, box_widths_nm=(0.0, 0.0)), 1, True),
        (replace(FEATURE, pattern=PATTERN, shape_allowance=0.0), 1, True),
    ],
)
def test_jacobian_is_that_of_the_mean(feature: Feature, lines: int, is_reversed: bool) -> None:
    model = FeatureModel(counted(1), feature, lines, is_reversed=is_reversed)
    given = {name: value for name, value in VALUES.items() if name in model.names}
    assert model.background is not None
    given |= {name: 500.0 + 10.0 * k for k, name in enumerate(model.background.names)}
    values = vector(model, given)
    _, jacobian = model.evaluate(values)
    for place, name in enumerate(model.names):
        step = 1e-4 * max(abs(values[place]), 1e-3) if "_nm" not in name else 2e-6
        up, down = values.copy(), values.copy()
        up[place] += step
        down[place] -= step
        numeric = (model.evaluate(up)[0] - model.evaluate(down)[0]) / (2.0 * step)
        size = np.abs(jacobian[:, place]).max()
        assert size > 0.0, name
        assert np.abs(numeric - jacobian[:, place]).max() < 1e-4 * size, name


class Absorbing(Lamp):
    """The emulated lines taken out of a continuum."""

    def __init__(
        self,
        seed: int,
        *,
        separation_fwhm: float = 0.0,
        ratio: float = 0.0,
        continuum_per_s: float = 4000.0,
    ) -> None:
        super().__init__(seed, peak_per_s=0.0)
        offset = self.wavelength_nm - self.centre_nm
        depth = 0.5 * line(offset, 0.003)
        if ratio:
            depth += 0.5 * ratio * line(offset - separation_fwhm * FWHM_NM, 0.003)
        self.rate_per_s = continuum_per_s * (1.0 + 3.0 * (offset + 0.05)) * (1.0 - depth)


def test_lines_taken_out_of_a_continuum_are_weighed_like_lines_given() -> None:
    asked = question()
    asked = replace(asked, feature=replace(asked.feature, kind="absorption"))
    last = night(Absorbing(800, separation_fwhm=1.5, ratio=0.6), asked, looks=(2, 4, 8, 16, 24))[-1]
    assert last.verdict == "pair"
    assert last.ratio is not None
    assert last.ratio_u is not None
    assert last.separation_nm is not None
    assert last.separation_u_nm is not None
    assert abs(last.ratio - 0.6) < 3.0 * last.ratio_u
    assert abs(last.separation_nm - 1.5 * FWHM_NM) < 3.0 * last.separation_u_nm
    one = night(Absorbing(801), asked, looks=(2, 4, 8, 16, 24))[-1]
    assert one.verdict == "single"
    assert [point for point in one.exclusion if point.ratio_limit is not None]
    # taken for emission there is no line in it
    assert night(Absorbing(801), question(), looks=(2, 4))[-1].verdict != "single"


def test_a_recorded_dip_is_a_line() -> None:
    lamp = Absorbing(802, separation_fwhm=1.6, ratio=0.7, continuum_per_s=2e4)
    data = lamp.rng.poisson(lamp.rate_per_s).astype(np.float64)
    counts = Counts(lamp.wavelength_nm, data, np.ones(data.size), np.zeros(data.size, dtype=np.int64))
    feature = guess_feature(counts, kind="absorption")
    answer = weigh_once(counts, replace(question(), feature=feature))
    assert answer.verdict == "pair"
    assert answer.separation_nm == pytest.approx(1.6 * FWHM_NM, rel=0.05)


def two_widths(x: FloatArray, ratio: float) -> FloatArray:
    """A main line of source width 20 pm and, 24 pm off, a second one of 14.142 pm; both through the slits."""
    main, second = line(x - CENTRE_NM, 0.020), line(x - CENTRE_NM - 0.024, 0.020 / np.sqrt(2.0))
    # heights 1 to equal areas
    grid = np.linspace(-0.2, 0.2, 4001)
    areas = [np.trapezoid(line(grid, width), grid) for width in (0.020, 0.020 / np.sqrt(2.0))]
    return main / areas[0] + ratio * second / areas[1]


@pytest.mark.parametrize("ratio", [0.5, 1.6])
def test_widths_tied_by_mass_give_the_right_ratio(ratio: float) -> None:
    """Twice the mass, a Doppler width smaller by sqrt 2 (textbook): the ratio is covered with widths tied,
    also where the second line is the stronger one, and missed by far with equal ones."""
    seed = 810
    x = CENTRE_NM + np.arange(-60, 80) * 0.0015
    rng = np.random.Generator(np.random.Philox(key=seed))
    data = rng.poisson(200.0 * two_widths(x, ratio) + 50.0).astype(np.float64)
    counts = Counts(x, data, np.ones(x.size), np.zeros(x.size, dtype=np.int64))
    feature = Feature(CENTRE_NM, 0.028, (SLIT_NM, SLIT_NM), 0.02, shape_allowance=0.0)
    pulls = {}
    for widths in ("tied", "equal"):
        told = replace(feature, widths=widths, width_ratio=1.0 / np.sqrt(2.0))
        made = fit_pair(FeatureModel(counts, told, 2), fit_single(FeatureModel(counts, told, 1)))
        found, u = made.value("ratio"), made.deviation("ratio")
        if abs(made.value("centre_nm") - CENTRE_NM) > 0.012:  # the other one was taken for the main line
            found, u = 1.0 / found, u / found**2
        pulls[widths] = (found - ratio) / u
    assert abs(pulls["tied"]) < 3.0, seed
    assert abs(pulls["equal"]) > 5.0, seed


def test_lines_in_windows_far_apart_are_a_pair() -> None:
    """Two stretches 15 nm apart, each with a background of its own, which nothing in between tells."""
    seed = 820
    ends = ((CENTRE_NM - 0.07, CENTRE_NM + 0.07), (CENTRE_NM + 14.93, CENTRE_NM + 15.07))
    x = np.concatenate([np.linspace(*window, 60) for window in ends])
    light = 200.0 * line(x - CENTRE_NM, 0.003) + 120.0 * line(x - CENTRE_NM - 15.004, 0.003)
    light += np.where(x < CENTRE_NM + 1.0, 10.0, 90.0)
    counts = np.random.Generator(np.random.Philox(key=seed)).poisson(5.0 * light).astype(np.float64)
    data = Counts(x, counts, np.full(x.size, 5.0), np.zeros(x.size, dtype=np.int64))
    feature = replace(question().feature, windows_nm=ends)
    model = FeatureModel(data, feature, 2)
    made = fit_pair(model, fit_single(FeatureModel(data, feature, 1)))
    assert made.converged
    apart = made.value("separation_nm")
    assert abs(apart - 15.004) < 3.0 * made.deviation("separation_nm")
    assert abs(made.value("ratio") - 0.6) < 3.0 * made.deviation("ratio")
    assert model.background_rate(made.values, CENTRE_NM) == pytest.approx(10.0, abs=3.0)
    assert model.background_rate(made.values, CENTRE_NM + 15.0) == pytest.approx(90.0, abs=6.0)


def test_a_known_exposure_takes_the_flicker_out() -> None:
    """The lamp wanders by tens of per cent from point to point: with its strength known the fit is good and
    unbiased, without it nothing fits."""
    seed = 830
    rng = np.random.Generator(np.random.Philox(key=seed))
    x = CENTRE_NM + np.linspace(-0.07, 0.07, 120)
    strength = rng.uniform(0.7, 1.3, x.size)
    mean = 4.0 * (strength * (300.0 * line(x - CENTRE_NM, 0.003) + 10.0) + 5.0)
    data = Counts(
        x,
        rng.poisson(mean).astype(np.float64),
        np.full(x.size, 4.0),
        np.zeros(x.size, dtype=np.int64),
        None,
        200.0,
        40.0,
        exposure=strength,
    )
    aware = fit_single(FeatureModel(data, question().feature, 1))
    unaware = fit_single(FeatureModel(replace(data, exposure=None), question().feature, 1))
    assert aware.deviance / aware.dof < 1.4, seed
    assert unaware.deviance / unaware.dof > 5.0, seed
    assert abs(aware.value("centre_nm") - CENTRE_NM) < 3.0 * aware.deviation("centre_nm"), seed


def test_a_block_has_the_exposure_of_its_own_gates() -> None:
    """Exposures are means over gate time: strength 1 for 2 s and then 1.6 for 1 s is 1.2 over 3 s."""
    x, group = np.array([1.0, 2.0]), np.zeros(2, dtype=np.int64)
    then = Counts(x, np.array([4.0, 0.0]), np.array([2.0, 0.0]), group, exposure=np.array([1.0, 1.0]))
    now = Counts(x, np.array([9.0, 3.0]), np.array([3.0, 2.0]), group, exposure=np.array([1.2, 0.9]))
    block = between(now, then)
    assert block.exposure == pytest.approx([1.6, 0.9])
    assert block.gate_s == pytest.approx([1.0, 2.0])


@pytest.mark.parametrize("dispersion", [0.5, 3.0])
def test_dispersion_states_the_scatter_there_is(dispersion: float) -> None:
    """Centres of 80 fits of counts whose variance is not their mean: their pulls have unit width."""
    seed = 840
    rng = np.random.Generator(np.random.Philox(key=seed))
    x = CENTRE_NM + np.linspace(-0.06, 0.06, 60)
    mean = 2000.0 * np.exp(-0.5 * ((x - CENTRE_NM) / 0.008) ** 2) + 200.0
    feature = Feature(CENTRE_NM, 0.0188, (0.0, 0.0), 0.0188, shape="gaussian", shape_allowance=0.0)
    pulls = []
    for _ in range(80):
        data = np.maximum(np.round(rng.normal(mean, np.sqrt(dispersion * mean))), 0.0)
        counts = Counts(
            x, data, np.ones(60), np.zeros(60, dtype=np.int64), dispersion=np.full(60, dispersion)
        )
        made = fit_single(FeatureModel(counts, feature, 1))
        pulls.append((made.value("centre_nm") - CENTRE_NM) / made.deviation("centre_nm"))
    # the sd of 80 unit normals lies in 0.8..1.21 but for 1 in 100
    assert 0.8 < np.std(pulls) < 1.21, seed


def test_a_known_width_makes_a_broad_line_two() -> None:
    """Two lines half a FWHM apart look like one broad line; known not to be broad, they are two."""
    asked = question(smallest_separation_nm=0.4 * FWHM_NM, smallest_ratio=0.5)
    known = replace(asked, feature=replace(asked.feature, line_fwhm_limit_nm=0.004))
    open_, limited = (
        night(
            Lamp(850, separation_fwhm=0.5, ratio=0.9, peak_per_s=600.0),
            one,
            looks=(2, 4, 8, 16, 24),
            stop=False,
        )[-1]
        for one in (asked, known)
    )
    assert limited.verdict == "pair"
    assert limited.max_log_e_pair > open_.max_log_e_pair + 5.0
    assert any("rests on the known width" in sentence for sentence in limited.evidence)
    assert limited.pair.value("sigma_nm") <= 0.004 / 2.3548


def test_read_noise_is_no_dark() -> None:
    """The part of the dark that stands for read noise is not reported as dark."""
    lamp, asked = Lamp(860), question()
    for _ in range(2):
        lamp.sweep()
    plain = night(lamp, asked, looks=(2,))[0]

    class Reading(Lamp):
        def counts(self) -> Counts:
            return replace(super().counts(), pedestal_per_s=3.0)

    read = Reading(860)
    noisy = night(read, asked, looks=(2,))[0]
    assert plain.dark_per_s is not None
    assert noisy.dark_per_s == pytest.approx(plain.dark_per_s - 3.0)


def test_periodic_errors_of_the_drive() -> None:
    """rms over the phase of the difference of two sines, by sampling the phase."""
    phase = np.linspace(0.0, 2.0 * np.pi, 10001)[:-1]
    feature = replace(FEATURE, periodic_errors_nm=((2e-4, 0.02), (1e-4, 1.3)))
    for apart in (0.003, 0.01, 0.029, 0.02):
        squares = 0.0
        for amplitude, period in feature.periodic_errors_nm:
            moved = amplitude * (np.sin(phase + 2.0 * np.pi * apart / period) - np.sin(phase))
            squares += np.mean(moved**2)
        assert drive_uncertainty_nm(feature, apart) == pytest.approx(np.sqrt(squares), rel=1e-9, abs=1e-15)
    # s far below P: 2 pi a/(P sqrt 2) of s (common practice)
    near = replace(FEATURE, periodic_errors_nm=((2e-4, 10.0),))
    assert drive_uncertainty_nm(near, 0.02) == pytest.approx(
        0.02 * 2.0 * np.pi * 2e-4 / (10.0 * np.sqrt(2.0)), rel=1e-4
    )
    with pytest.raises(ValueError, match="period > 0"):
        drive_uncertainty_nm(replace(FEATURE, periodic_errors_nm=((1e-4, 0.0),)), 0.02)


def expected(feature: Feature, deviation: float | None, **modes: float) -> Counts:
    """Counts, or readings of one standard deviation, exactly as expected of a pair 0.026 nm apart.

    Beyond its middle the pair was swept under another lamp: only the prior of the gain tells the two apart.
    """
    x = CENTRE_NM + np.linspace(-0.08, 0.08, 161)
    sigma = None if deviation is None else np.full(x.size, deviation)
    dark = (200.0, 40.0) if deviation is None else (0.0, 0.0)
    group = (x > CENTRE_NM + 0.013).astype(np.int64)
    blank = Counts(x, np.ones(x.size), np.full(x.size, 2.0), group, sigma, *dark)
    model = FeatureModel(blank, feature, 2)
    assert model.background is not None
    values = {name: VALUES[name] for name in ("gamma_nm", "sigma_nm", "dark_per_s")}
    values |= {"gain_1": 1.0, "area": 40.0, "centre_nm": CENTRE_NM, "ratio": 0.5, "separation_nm": 0.026}
    values |= dict.fromkeys(model.background.names, 50.0) | modes
    known = {name: value for name, value in values.items() if name in model.names}
    return replace(blank, counts=model.evaluate(vector(model, known))[0][: x.size])


@pytest.mark.parametrize("deviation", [None, 30.0])
def test_a_budget_is_what_fits_with_the_shape_known_and_with_a_wrong_one_say(deviation: float | None) -> None:
    """Counting: the deviation of a fit without shape modes. Shape: how far that fit's separation moves when
    the light has an allowance of skewness, or of kurtosis; from fits to a tenth of it (linear response)."""
    bent = replace(FEATURE, known_lines_nm=())
    straight = replace(bent, shape_allowance=0.0)

    def fitted(feature: Feature, **modes: float) -> tuple[FeatureModel, FitResult]:
        model = FeatureModel(expected(bent, deviation, **modes), feature, 2)
        return model, fit_pair(model, fit_single(model))

    model, made = fitted(bent)
    budget = separation_budget(model, made, scale_relative_uncertainty=2e-5)
    _, known = fitted(straight)
    assert made.value("separation_nm") == pytest.approx(0.026, rel=1e-6)
    assert budget.statistics_nm == pytest.approx(known.deviation("separation_nm"), rel=1e-6)
    tenth = 0.1 * bent.shape_allowance
    moved = [
        10.0 * (fitted(straight, **{mode: tenth})[1].value("separation_nm") - 0.026)
        for mode in ("skewness", "kurtosis")
    ]
    assert budget.shape_nm == pytest.approx(float(np.hypot(*moved)), rel=0.01)
    assert budget.scale_nm == pytest.approx(2e-5 * 0.026)
    assert budget.drive_nm == 0.0
    scattered = separation_budget(model, made, scale_relative_uncertainty=2e-5, spread=1.5)
    assert scattered == replace(budget, statistics_nm=1.5 * budget.statistics_nm)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"kind": "fluorescence"}, "kind must be 'emission' or 'absorption'"),
        ({"widths": "tight"}, "widths must be"),
        ({"self_reversal": "maybe"}, "self_reversal must be"),
        ({"width_ratio": 0.0}, "width_ratio must be > 0"),
        ({"pattern": ((0.0, -1.0), (0.1, 2.0))}, "strengths of a pattern"),
    ],
)
def test_misuse_is_refused(change: dict[str, object], said: str) -> None:
    with pytest.raises(ValueError, match=said):
        FeatureModel(counted(2), replace(FEATURE, **change), 2)  # type: ignore[arg-type]
