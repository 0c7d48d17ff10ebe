"""The fit: certified problems, exact derivatives, honest covariances."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from analysis.counting import Counts, FloatArray
from analysis.fit import fit
from analysis.model import FeatureModel, neutral, vector
from analysis.question import Feature

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


# NIST Statistical Reference Datasets, nonlinear regression, Gauss1 and Gauss2 (Rust 1996): certified values and
# standard deviations from the files; the sd of b7 - b4 follows from the certified problem's covariance.
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
