"""Rowland ghosts against a grating summed groove by groove, and against the Bessel functions."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import jv

from analysis.ghosts import ghosts_near, ghosts_of


def far_field(places: np.ndarray, cycles_per_groove: np.ndarray) -> np.ndarray:
    """Intensity of grooves at `places` (in spacings) towards path differences of `cycles_per_groove`."""
    waves = np.exp(2j * math.pi * np.outer(cycles_per_groove, places))
    return np.abs(waves.mean(axis=1)) ** 2


@pytest.mark.parametrize("order", [1, 2, 3])
def test_places_and_strengths_against_a_grating_summed_groove_by_groove(order: int) -> None:
    """3600 grooves, 36 to a period, each 0.5 % of a spacing off at most: one wavelength, all path
    differences.

    Path differences m + k/p belong to the apparent wavelengths lambda (1 + k/(m p)), and 100 whole periods
    put every ghost on a zero of all the others' diffraction.
    """
    period, amplitude = 36, 0.005
    n = np.arange(3600)
    places = n + amplitude * np.sin(2.0 * math.pi * n / period)
    fraction = (math.pi * amplitude) ** 2
    ghosts = ghosts_of(parent_nm=500.0, order=order, grooves_per_period=period, first_order_fraction=fraction)
    assert [ghost.number for ghost in ghosts] == [-2, -1, 1, 2]
    paths = np.array([order * ghost.wavelength_nm / 500.0 for ghost in ghosts])
    summed = far_field(places, paths) / far_field(places, np.array([float(order)]))
    # the groove's displacement also counts the ghost's own k/p of a wave: (1 + k/(m p))^2k of the strength
    stretch = [(1.0 + g.number / (order * period)) ** (2 * abs(g.number)) for g in ghosts]
    expected = [g.share * s for g, s in zip(ghosts, stretch, strict=True)]
    assert summed == pytest.approx(expected, rel=2.0 * fraction * order**2)
    off = far_field(places, paths + 0.5 / period)
    assert off.max() < 1e-3 * summed.min(), "between the ghosts there is nothing"


@pytest.mark.parametrize("order", [1, 2, 3])
def test_strengths_against_bessel_functions(order: int) -> None:
    """J_k(x)^2/J_0(x)^2 with x = 2 m sqrt(f): Rowland 1893, Phil. Mag. 35, 397."""
    x = 2.0 * order * math.sqrt(1e-4)
    for ghost in ghosts_of(
        parent_nm=546.07, order=order, grooves_per_period=720.0, first_order_fraction=1e-4, highest_number=3
    ):
        exact = (jv(abs(ghost.number), x) / jv(0, x)) ** 2
        assert ghost.share == pytest.approx(exact, rel=2e-4 * order**2)


def test_growth_with_the_order() -> None:
    """The first ghosts grow as m^2, the second as m^4 (Rowland 1893)."""
    one, three = (
        {
            g.number: g.share
            for g in ghosts_of(parent_nm=500.0, order=m, grooves_per_period=100.0, first_order_fraction=1e-4)
        }
        for m in (1, 3)
    )
    assert three[1] / one[1] == pytest.approx(9.0)
    assert three[-2] / one[-2] == pytest.approx(81.0)
    assert one[2] == pytest.approx(1e-8 / 4.0)


def test_ghosts_of_lamp_lines_near_a_target() -> None:
    """720 grooves to a turn of the screw (common practice): mercury 546.074 has its first ghosts 0.758 nm
    away."""
    found = ghosts_near(
        wavelength_nm=546.8,
        reach_nm=0.1,
        parents_nm=(435.833, 546.074),
        order=1,
        grooves_per_period=720.0,
        first_order_fraction=1e-4,
    )
    (ghost,) = found
    assert (ghost.parent_nm, ghost.number) == (546.074, 1)
    assert ghost.wavelength_nm == pytest.approx(546.074 + 546.074 / 720.0)
    # in order 2 the same ghost stands half as far away
    (closer,) = ghosts_near(
        wavelength_nm=546.45,
        reach_nm=0.1,
        parents_nm=(546.074,),
        order=2,
        grooves_per_period=720.0,
        first_order_fraction=1e-4,
        highest_number=1,
    )
    assert closer.wavelength_nm - 546.074 == pytest.approx(0.5 * 546.074 / 720.0)
    assert closer.share == pytest.approx(4e-4)


def test_ghosts_come_nearest_first_and_the_second_among_them() -> None:
    """Around a line with 100 grooves to a period: +-5 nm, then +-10 nm; what stands just at the reach is
    in."""
    found = ghosts_near(
        wavelength_nm=505.1,
        reach_nm=16.0,
        parents_nm=(500.0,),
        order=1,
        grooves_per_period=100.0,
        first_order_fraction=1e-4,
    )
    assert [ghost.number for ghost in found] == [1, 2, -1, -2]
    (at_home,) = ghosts_near(
        wavelength_nm=found[0].wavelength_nm,
        reach_nm=0.0,
        parents_nm=(500.0,),
        order=1,
        grooves_per_period=100.0,
        first_order_fraction=1e-4,
    )
    assert at_home == found[0]


def test_a_perfect_ruling_and_the_worst_allowed() -> None:
    """No error makes ghosts of no strength; a tenth of the line in the first, two grooves to a period, and a
    wavelength below one nm are still within the law."""
    perfect = ghosts_of(parent_nm=500.0, order=1, grooves_per_period=100.0, first_order_fraction=0.0)
    assert [ghost.share for ghost in perfect] == [0.0] * 4
    worst = ghosts_of(
        parent_nm=0.5, order=1, grooves_per_period=2.0, first_order_fraction=0.1, highest_number=1
    )
    assert [(ghost.wavelength_nm, ghost.share) for ghost in worst] == [(0.25, 0.1), (0.75, 0.1)]


GOOD = {"parent_nm": 500.0, "order": 1, "grooves_per_period": 720.0, "first_order_fraction": 1e-4}


@pytest.mark.parametrize(
    ("field", "value", "message"),
    [
        ("parent_nm", 0.0, r"parent_nm = 0\.0; allowed"),
        ("order", 0, "order = 0; allowed"),
        ("grooves_per_period", 1.0, r"grooves_per_period = 1\.0; allowed: 2 or more"),
        ("grooves_per_period", math.inf, "grooves_per_period = inf; allowed: 2 or more, finite"),
        ("first_order_fraction", 0.2, r"first_order_fraction = 0\.2; allowed: 0 to 0\.1 in order 1"),
        ("first_order_fraction", math.nan, "first_order_fraction = nan; allowed"),
        ("order", 40, r"first_order_fraction = 0\.0001; allowed: 0 to 6\.25e-05 in order 40"),
        ("highest_number", 0, "highest_number = 0; allowed: 1 or more"),
    ],
)
def test_what_makes_no_sense(field: str, value: float, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        ghosts_of(**(GOOD | {field: value}))  # type: ignore[arg-type]


@pytest.mark.parametrize("reach_nm", [-0.1, math.inf])
def test_a_reach_is_neither_negative_nor_endless(reach_nm: float) -> None:
    with pytest.raises(ValueError, match=f"reach_nm = {reach_nm}; allowed"):
        ghosts_near(
            wavelength_nm=500.0,
            reach_nm=reach_nm,
            parents_nm=(),
            order=1,
            grooves_per_period=720.0,
            first_order_fraction=1e-4,
        )
