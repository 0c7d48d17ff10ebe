"""The fit: certified problems, exact derivatives, honest covariances."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest

from analysis.counting import Counts, FloatArray
from analysis.fit import fit
from analysis.model import GAIN_SD, FeatureModel, vector
from analysis.question import Feature
from analysis.starts import fit_pair, fit_single

REFERENCE = Path(__file__).parent / "reference"


@dataclass(frozen=True)
class Decay:
    """b1 exp(-b2 x): the baseline of the certified problems."""

    names: tuple[str, ...] = ("b1", "b2")
    lower: tuple[float, ...] = (-np.inf, -np.inf)

    def evaluate(self, wavelength_nm: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        fall = np.exp(-values[1] * wavelength_nm)
        return values[0] * fall, np.stack([fall, -values[0] * wavelength_nm * fall], axis=1)


def read_certified(name: str) -> tuple[FloatArray, FloatArray, FloatArray]:
    """(8, 4) start 1, start 2, value, sd; x (N,), y (N,)."""
    lines = (REFERENCE / name).read_text().splitlines()
    table = np.array([[float(word) for word in line.split("=")[1].split()] for line in lines[40:48]])
    data = np.array([[float(word) for word in line.split()] for line in lines[60:] if line.strip()])
    return table, data[:, 1], data[:, 0]


def recorded(x: FloatArray, y: FloatArray, sigma: FloatArray | None) -> Counts:
    return Counts(x, y, np.ones(x.size), np.zeros(x.size, dtype=np.int64), sigma)


# NIST Statistical Reference Datasets, nonlinear regression, Gauss1 and Gauss2 (Rust 1996): certified values
# and standard deviations from the files; the sd of b7 - b4 follows from the certified problem's covariance.
@pytest.mark.parametrize("start", [0, 1])
@pytest.mark.parametrize(
    ("name", "separation", "separation_sd"),
    [("Gauss1.dat", 111.516939, 0.162907), ("Gauss2.dat", 46.239147, 0.155438)],
)
def test_certified_pairs_from_both_starts(
    name: str, separation: float, separation_sd: float, start: int
) -> None:
    table, x, y = read_certified(name)
    feature = Feature(
        wavelength_nm=100.0,
        fwhm_nm=35.0,
        box_widths_nm=(0.0, 0.0),
        line_fwhm_nm=35.0,
        shape="gaussian",
        widths="free",
        shape_allowance=0.0,
    )
    model = FeatureModel(recorded(x, y, np.ones(x.size)), feature, 2, background=Decay())
    b = table[:, start]
    # the certified model is exp(-(x - c)^2 / b^2), so b = sqrt(2) sigma and the area is b3 b5 sqrt(pi)
    begin = {
        "b1": b[0],
        "b2": b[1],
        "area": b[2] * b[4] * np.sqrt(np.pi),
        "centre_nm": b[3],
        "sigma_nm": b[4] / np.sqrt(2.0),
        "ratio": b[5] * b[7] / (b[2] * b[4]),
        "separation_nm": b[6] - b[3],
        "sigma2_nm": b[7] / np.sqrt(2.0),
    }
    made = fit(model, vector(model, begin), tolerance=1e-13)
    assert made.converged
    width, width2 = np.sqrt(2.0) * made.value("sigma_nm"), np.sqrt(2.0) * made.value("sigma2_nm")
    found = [
        made.value("b1"),
        made.value("b2"),
        made.value("area") / (width * np.sqrt(np.pi)),
        made.value("centre_nm"),
        width,
        made.value("ratio") * made.value("area") / (width2 * np.sqrt(np.pi)),
        made.value("centre_nm") + made.value("separation_nm"),
        width2,
    ]
    digits = -np.log10(np.abs(np.array(found) / table[:, 2] - 1.0))
    assert digits.min() >= 6.0, digits
    spread = np.sqrt(made.deviance / made.dof)
    assert made.dof == 242
    assert made.value("separation_nm") == pytest.approx(separation, rel=1e-7)
    assert spread * made.deviation("separation_nm") == pytest.approx(separation_sd, rel=1e-4)
    for parameter, place in (("b1", 0), ("b2", 1), ("centre_nm", 3)):
        assert spread * made.deviation(parameter) == pytest.approx(table[place, 3], rel=1e-4)
    assert spread * made.deviation("sigma_nm") * np.sqrt(2.0) == pytest.approx(table[4, 3], rel=1e-4)


LINE = Feature(
    wavelength_nm=313.155,
    fwhm_nm=0.0186,
    box_widths_nm=(0.018, 0.016),
    line_fwhm_nm=0.004,
    known_lines_nm=(313.184,),
)


def poisson_counts(seed: int, *, peak: float = 300.0, dead_time_s: float = 0.0) -> Counts:
    """A Gaussian line on a slope in three dither groups with gains 1, 1.1 and 0.9, and a dark."""
    rng = np.random.Generator(np.random.Philox(key=seed))
    x = 313.155 + np.linspace(-0.07, 0.07, 90)
    group = np.arange(90, dtype=np.int64) % 3
    gain = np.array([1.0, 1.1, 0.9])[group]
    light = peak * np.exp(-0.5 * ((x - 313.156) / 0.008) ** 2) + 6.0 + 20.0 * (x - 313.085)
    counts = rng.poisson(2.0 * (gain * light + 5.0)).astype(np.float64)
    dark = float(rng.poisson(5.0 * 40.0))
    return Counts(x, counts, np.full(90, 2.0), group, None, dark, 40.0, dead_time_s, 0.1 * dead_time_s)


@pytest.mark.parametrize("widths", ["equal", "free"])
@pytest.mark.parametrize("shape", ["voigt", "gaussian"])
@pytest.mark.parametrize("lines", [1, 2])
def test_jacobian_is_that_of_the_mean(lines: int, shape: str, widths: str) -> None:
    counts = poisson_counts(1, dead_time_s=2e-4)
    model = FeatureModel(counts, replace(LINE, shape=shape, widths=widths), lines)
    values = vector(
        model,
        {
            name: value
            for name, value in {
                "area": 4.0,
                "centre_nm": 313.1562,
                "ratio": 0.4,
                "separation_nm": 0.021,
                "sigma_nm": 0.0017,
                "sigma2_nm": 0.0025,
                "gamma_nm": 0.0006,
                "known_1_area": 0.6,
                "known_shift_nm": 1e-4,
                "background_left_per_s": 5.0,
                "background_right_per_s": 9.0,
                "dark_per_s": 4.0,
                "gain_1": 1.1,
                "gain_2": 0.95,
                "dead_time_s": 2.1e-4,
                "skewness": 0.012,
                "kurtosis": -0.008,
            }.items()
            if name in model.names
        },
    )
    _, jacobian = model.evaluate(values)
    for place, name in enumerate(model.names):
        step = 1e-4 * max(abs(values[place]), 1e-3) if "_nm" not in name else 2e-6
        up, down = values.copy(), values.copy()
        up[place] += step
        down[place] -= step
        numeric = (model.evaluate(up)[0] - model.evaluate(down)[0]) / (2.0 * step)
        size = np.abs(jacobian[:, place]).max()
        assert size > 0.0, name
        assert np.abs(numeric - jacobian[:, place]).max() < 2e-4 * size, name


def test_against_an_independent_minimiser() -> None:
    """The same Poisson likelihood, written out again, minimised by iminuit: values and HESSE errors.

    The prior of the gains is part of it."""
    from iminuit import Minuit

    seed = 7
    counts = poisson_counts(seed)
    plain = Feature(313.155, 0.0188, (0.0, 0.0), 0.0188, shape="gaussian", shape_allowance=0.0)
    made = fit_single(FeatureModel(counts, plain, 1))
    x, n, group = counts.wavelength_nm, counts.counts, counts.group
    share = (x - x[0]) / (x[-1] - x[0])

    def minus_log(
        a: float, c: float, s: float, bl: float, br: float, d: float, gain1: float, gain2: float
    ) -> float:
        bell = a / (s * np.sqrt(2.0 * np.pi)) * np.exp(-0.5 * ((x - c) / s) ** 2)
        light = bell + bl * (1.0 - share) + br * share
        mean = 2.0 * (np.array([1.0, gain1, gain2])[group] * light + d)
        dark = 40.0 * d
        held = 0.5 * ((gain1 - 1.0) ** 2 + (gain2 - 1.0) ** 2) / GAIN_SD**2
        return float(np.sum(mean - n * np.log(mean)) + dark - counts.dark_counts * np.log(dark) + held)

    other = Minuit(minus_log, a=5.0, c=313.155, s=0.008, bl=5.0, br=9.0, d=5.0, gain1=1.0, gain2=1.0)
    other.errordef = Minuit.LIKELIHOOD
    other.tol = 1e-4
    other.migrad()
    other.hesse()
    assert other.valid
    names = ("area", "centre_nm", "sigma_nm", "background_left_per_s", "background_right_per_s")
    for theirs, ours in zip(
        ["a", "c", "s", "bl", "br", "d", "gain1", "gain2"],
        (*names, "dark_per_s", "gain_1", "gain_2"),
        strict=True,
    ):
        u = other.errors[theirs]
        assert abs(made.value(ours) - other.values[theirs]) < 0.01 * u, (ours, seed)
        # HESSE is the observed information, the fit's the expected one: they differ by chance
        assert made.deviation(ours) == pytest.approx(u, rel=0.1), (ours, seed)


def test_gains_are_those_of_the_data_where_data_tell() -> None:
    """Gains of 0.7 and 1.2, far beyond the prior's 0.1: found within their uncertainty all the same, and a
    group that has seen only the window's foot keeps to the prior."""
    for seed in range(20, 26):
        rng = np.random.Generator(np.random.Philox(key=seed))
        x = 313.155 + np.linspace(-0.07, 0.07, 90)
        group = np.arange(90, dtype=np.int64) % 3
        light = 3000.0 * np.exp(-0.5 * ((x - 313.156) / 0.008) ** 2) + 6.0
        counts = rng.poisson(np.array([1.0, 0.7, 1.2])[group] * light).astype(np.float64)
        plain = Feature(313.155, 0.0188, (0.0, 0.0), 0.0188, shape="gaussian", shape_allowance=0.0)
        made = fit_single(FeatureModel(Counts(x, counts, np.ones(90), group), plain, 1))
        for name, true in (("gain_1", 0.7), ("gain_2", 1.2)):
            assert made.deviation(name) < 0.02, seed
            assert abs(made.value(name) - true) < 3.5 * made.deviation(name), (name, seed)
        gate = np.where((group < 2) | (x < 313.10), 1.0, 0.0)
        begun = Counts(x, np.where(gate > 0.0, counts, 0.0), gate, group)
        foot = fit_single(FeatureModel(begun, plain, 1))
        assert foot.converged
        assert foot.deviation("gain_2") == pytest.approx(GAIN_SD, rel=0.1), seed
        assert abs(foot.value("gain_2") - 1.0) < GAIN_SD, seed


def test_line_centre_reaches_the_cramer_rao_bound() -> None:
    """The centre of a line of N photons without background is known to sigma/sqrt(N) (Cramer-Rao)."""
    seed, sigma = 3, 0.008
    rng = np.random.Generator(np.random.Philox(key=seed))
    x = 313.155 + np.linspace(-0.05, 0.05, 101)
    shape = np.exp(-0.5 * ((x - 313.155) / sigma) ** 2)
    feature = Feature(
        313.155, 0.0188, (0.0, 0.0), 0.0188, shape="gaussian", background="flat", shape_allowance=0.0
    )
    pulls, stated = [], []
    for _ in range(120):
        counts = rng.poisson(50.0 * shape).astype(np.float64)
        data = Counts(x, counts, np.ones(x.size), np.zeros(x.size, dtype=np.int64))
        made = fit_single(FeatureModel(data, feature, 1))
        bound = sigma / np.sqrt(50.0 * shape.sum())
        stated.append(made.deviation("centre_nm") / bound)
        pulls.append((made.value("centre_nm") - 313.155) / bound)
    # the background's bound at zero counts a little into the stated uncertainty
    assert np.mean(stated) == pytest.approx(1.0, abs=0.04), seed
    assert np.std(pulls) == pytest.approx(1.0, abs=0.2), seed
    assert abs(np.mean(pulls)) < 3.0 / np.sqrt(120), seed


def test_an_unsure_dead_time_widens_the_top() -> None:
    """The prior holds tau where counts say nothing about it, and its uncertainty reaches the area."""
    slow = fit_single(FeatureModel(poisson_counts(2), LINE, 1))
    sure = fit_single(FeatureModel(poisson_counts(2, dead_time_s=3e-4), LINE, 1))
    assert sure.value("dead_time_s") == pytest.approx(3e-4, rel=0.15)
    assert sure.deviation("dead_time_s") <= 3e-5 * 1.0001
    assert sure.deviation("area") > 1.05 * slow.deviation("area")


def test_bounds_frozen_and_refusals() -> None:
    counts = poisson_counts(4)
    model = FeatureModel(counts, LINE, 2)
    start = vector(model, {"area": 3.0, "ratio": 0.2, "separation_nm": 0.02, "background_left_per_s": 2.0})
    made = fit(model, start, frozen=("separation_nm",))
    assert made.value("separation_nm") == 0.02
    assert made.deviation("separation_nm") == 0.0
    assert (made.values >= model.lower).all()
    assert (made.values <= model.upper).all()
    with pytest.raises(ValueError, match="finite numbers"):
        fit(model, start[:-1])
    with pytest.raises(ValueError, match="no parameter colour"):
        vector(model, {"colour": 1.0})
    with pytest.raises(ValueError, match="1 or 2 lines"):
        FeatureModel(counts, LINE, 3)
    with pytest.raises(ValueError, match="no position was visited"):
        FeatureModel(replace(counts, gate_s=np.zeros(90)), LINE, 1)


def test_neighbours_of_known_place_take_their_light() -> None:
    """A known line keeps its distance from the main one; without it the centre is pulled over."""
    seed = 9
    counts = poisson_counts(seed)
    extra = np.random.Generator(np.random.Philox(key=seed)).poisson(
        2.0 * 90.0 * np.exp(-0.5 * ((counts.wavelength_nm - 313.185) / 0.008) ** 2)
    )
    counts = replace(counts, counts=counts.counts + extra)
    plain = replace(LINE, box_widths_nm=(0.0, 0.0), line_fwhm_nm=0.0188, shape="gaussian")
    aware = fit_single(FeatureModel(counts, plain, 1))
    assert aware.value("centre_nm") == pytest.approx(313.156, abs=3.5 * aware.deviation("centre_nm"))
    assert aware.value("known_1_area") == pytest.approx(90.0 * 0.008 * np.sqrt(2.0 * np.pi), rel=0.15)
    unaware = fit_single(FeatureModel(counts, replace(plain, known_lines_nm=()), 1))
    assert unaware.value("centre_nm") - 313.156 > 8.0 * aware.deviation("centre_nm")


def test_a_cold_fit_finds_what_is_there() -> None:
    """No start is given: the pair is found wherever in the window it stands."""
    x = 313.155 + np.linspace(-0.08, 0.08, 120)
    plain = Feature(313.155, 0.0188, (0.0, 0.0), 0.0188, shape="gaussian", shape_allowance=0.0)
    for first, apart, ratio in ((313.12, 0.03, 0.3), (313.18, -0.05, 0.9), (313.155, 0.013, 0.6)):
        light = np.exp(-0.5 * ((x - first) / 0.008) ** 2)
        light += ratio * np.exp(-0.5 * ((x - first - apart) / 0.008) ** 2)
        data = Counts(x, np.round(4000.0 * light + 50.0), np.ones(x.size), np.zeros(x.size, dtype=np.int64))
        model = FeatureModel(data, plain, 2)
        made = fit_pair(model, fit_single(FeatureModel(data, plain, 1)))
        assert made.converged
        # either line may have been taken for the main one
        found, there = made.value("centre_nm"), made.value("centre_nm") + made.value("separation_nm")
        if made.value("ratio") > 1.0:
            found, there = there, found
        assert found == pytest.approx(first, abs=1e-4)
        assert there == pytest.approx(first + apart, abs=2e-4)
        assert min(made.value("ratio"), 1.0 / made.value("ratio")) == pytest.approx(ratio, abs=0.02)
