"""The line profile against published values, scipy's Voigt function and brute-force quadrature."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import voigt_profile

from analysis.counting import FloatArray
from analysis.profile import (
    box_kernel,
    line_profile,
    mode_width,
    observed_width,
    shape_modes,
    voigt_fwhm,
)

CASES = [
    (1.0, 1.0, (0.0, 0.0)),
    (1.0, 0.0, (0.0, 0.0)),
    (1.0, 0.3, (5.0, 0.0)),
    (1.0, 0.3, (18.0, 18.0)),
    (1.0, 0.2, (18.0, 11.0)),
    (1.0, 0.2, (0.59, 0.59)),
    (1.0, 0.2, (0.61, 0.61)),
    (1.0, 0.2, (4.0, 0.3)),
    (0.05, 0.01, (18.0, 18.0)),
    (1.0, 3.0, (5.0, 4.0)),
]


def by_quadrature(x: FloatArray, sigma: float, gamma: float, boxes: tuple[float, float]) -> FloatArray:
    """scipy's Voigt profile averaged over both boxes, one after the other, 40 pieces of 12 nodes each."""
    nodes, weights = np.polynomial.legendre.leggauss(12)
    places, shares = [np.zeros(1)], [np.ones(1)]
    for box in boxes:
        edges = np.linspace(-0.5 * box, 0.5 * box, 41)
        centres, half = 0.5 * (edges[1:] + edges[:-1]), 0.5 * (edges[1] - edges[0])
        places.append((centres[:, None] + half * nodes).ravel() if box else np.zeros(1))
        shares.append(np.tile(weights / 80.0, 40) if box else np.ones(1))
    grid = places[1][:, None] + places[2]
    share = shares[1][:, None] * shares[2]
    return np.array([np.sum(share * voigt_profile(one + grid, sigma, gamma)) for one in x])


def test_voigt_values() -> None:
    """V(0;1,1) and V(1;1,1), computed with mpmath to 15 digits."""
    made = line_profile(np.array([0.0, 1.0]), sigma_nm=1.0, gamma_nm=1.0, box_widths_nm=(0.0, 0.0))
    assert made.value == pytest.approx([0.208709280520368, 0.165795662689167], rel=2e-7)


@pytest.mark.parametrize(("sigma", "gamma", "boxes"), CASES)
def test_profile_through_boxes(sigma: float, gamma: float, boxes: tuple[float, float]) -> None:
    x = np.array([-31.0, -18.0, -9.3, -4.0, -1.1, -0.2, 0.0, 0.5, 2.2, 6.4, 11.0, 25.0])
    made = line_profile(x, sigma_nm=sigma, gamma_nm=gamma, box_widths_nm=boxes)
    wanted = by_quadrature(x, sigma, gamma, boxes)
    assert np.abs(made.value - wanted).max() < 2e-7 * wanted.max()


@pytest.mark.parametrize(("sigma", "gamma", "boxes"), CASES)
def test_derivatives_are_those_of_the_profile(sigma: float, gamma: float, boxes: tuple[float, float]) -> None:
    x = np.linspace(-14.0, 14.0, 57)
    gamma = gamma + 0.05
    step = 2e-3 * sigma

    def value(dx: float = 0.0, ds: float = 0.0, dg: float = 0.0) -> FloatArray:
        return line_profile(x + dx, sigma_nm=sigma + ds, gamma_nm=gamma + dg, box_widths_nm=boxes).value

    made = line_profile(x, sigma_nm=sigma, gamma_nm=gamma, box_widths_nm=boxes)
    peak = made.value.max()
    for analytic, name in ((made.d_offset, "dx"), (made.d_sigma, "ds"), (made.d_gamma, "dg")):
        numeric = (value(**{name: step}) - value(**{name: -step})) / (2.0 * step)
        assert np.abs(analytic - numeric).max() * sigma < 2e-5 * peak, name


def test_area_is_one() -> None:
    x = np.linspace(-60.0, 60.0, 24001)
    made = line_profile(x, sigma_nm=1.3, gamma_nm=0.0, box_widths_nm=(18.0, 11.0)).value
    assert np.sum(made) * (x[1] - x[0]) == pytest.approx(1.0, abs=1e-8)
    # variances of convolved shapes add: two boxes of width b give b^2/12 each (textbook)
    assert np.sum(made * x * x) * (x[1] - x[0]) == pytest.approx(
        1.3**2 + (18.0**2 + 11.0**2) / 12.0, rel=1e-7
    )


def test_fwhm_of_known_shapes() -> None:
    gauss = observed_width(sigma_nm=2.0, gamma_nm=0.0, box_widths_nm=(0.0, 0.0))
    assert gauss.fwhm_nm == pytest.approx(2.0 * 2.354820045, rel=2e-7)
    assert gauss.d_sigma == pytest.approx(2.354820045, rel=1e-5)
    # a triangle of two equal boxes is as wide at half height as each of them
    triangle = observed_width(sigma_nm=1e-5, gamma_nm=0.0, box_widths_nm=(5.0, 5.0))
    assert triangle.fwhm_nm == pytest.approx(5.0, rel=1e-5)


@pytest.mark.parametrize("gamma", [0.0, 0.1, 0.4, 1.0, 3.0, 20.0])
def test_olivero_and_longbothum_agree_with_the_profile(gamma: float) -> None:
    """Olivero and Longbothum 1977 state 0.02 %."""
    exact = observed_width(sigma_nm=1.0, gamma_nm=gamma, box_widths_nm=(0.0, 0.0)).fwhm_nm
    assert voigt_fwhm(1.0, gamma) == pytest.approx(exact, rel=2.5e-4)


def test_fwhm_derivatives() -> None:
    boxes = (18.0, 12.0)
    made = observed_width(sigma_nm=2.0, gamma_nm=0.5, box_widths_nm=boxes)

    def width(sigma: float, gamma: float) -> float:
        return observed_width(sigma_nm=sigma, gamma_nm=gamma, box_widths_nm=boxes).fwhm_nm

    assert made.d_sigma == pytest.approx((width(2.01, 0.5) - width(1.99, 0.5)) / 0.02, rel=1e-4)
    assert made.d_gamma == pytest.approx((width(2.0, 0.51) - width(2.0, 0.49)) / 0.02, rel=1e-4)


def test_shape_modes_have_the_stated_height_and_no_area() -> None:
    width = mode_width(sigma_nm=1.0, gamma_nm=0.0, box_widths_nm=(2.0, 0.0))
    assert width == pytest.approx(np.sqrt(1.0 + 4.0 / 12.0))
    x = np.linspace(-12.0, 12.0, 48001)
    modes = shape_modes(x, width_nm=width)
    peak = 1.0 / (width * np.sqrt(2.0 * np.pi))
    assert np.abs(modes.value).max(axis=1) == pytest.approx([peak, peak], rel=1e-7)
    assert np.abs(modes.value.sum(axis=1) * (x[1] - x[0])).max() < 1e-10
    near = shape_modes(x + 1e-4, width_nm=width).value - shape_modes(x - 1e-4, width_nm=width).value
    assert np.abs(near / 2e-4 - modes.d_offset).max() < 1e-7
    wider = shape_modes(x, width_nm=width + 1e-4).value - shape_modes(x, width_nm=width - 1e-4).value
    assert np.abs(wider / 2e-4 - modes.d_width).max() < 1e-7


def test_kernel_of_narrow_boxes_is_an_average() -> None:
    kernel = box_kernel(box_widths_nm=(0.3, 0.2), sigma_nm=1.0)
    assert kernel.order == 0
    assert kernel.weights.sum() == pytest.approx(1.0, abs=1e-14)
    assert kernel.weights @ kernel.offsets_nm**2 == pytest.approx(kernel.variance_nm2, rel=1e-12)
    assert kernel.variance_nm2 == pytest.approx((0.09 + 0.04) / 12.0)


def test_misuse_is_refused() -> None:
    with pytest.raises(ValueError, match="box widths"):
        box_kernel(box_widths_nm=(-1.0, 0.0), sigma_nm=1.0)
    with pytest.raises(ValueError, match="sigma must be > 0"):
        line_profile(np.zeros(1), sigma_nm=0.0, gamma_nm=0.0, box_widths_nm=(0.0, 0.0))
