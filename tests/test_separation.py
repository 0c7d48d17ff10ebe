"""Separations in every unit: published doublets, exact constants, uncertainties against a simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import constants

from analysis.air import LABORATORY_AIR, STANDARD_AIR, Air, air_from_vacuum_nm, vacuum_from_air_nm
from analysis.separation import ghz_from_per_cm, mev_from_per_cm, separation_of, wavenumber_per_cm


def test_sodium_d_lines() -> None:
    """17.1959(1) per cm = 2.132 meV; air wavelengths 588.9951, 589.5924 nm (NIST ASD)."""
    # a unit in the last place of either wavelength is 0.1 pm or 0.003 per cm
    pair = separation_of(
        wavelength_1_nm=588.9951, wavelength_2_nm=589.5924, u_separation_nm=7e-5, medium="air"
    )
    assert pair.air_pm == pytest.approx(597.3, abs=1e-6)
    assert pair.u_air_pm == pytest.approx(0.07)
    assert pair.per_cm == pytest.approx(17.1959, abs=0.003)
    assert pair.u_per_cm == pytest.approx(0.002, abs=1e-4)
    assert pair.mev == pytest.approx(2.132, abs=5e-4)
    assert pair.ghz == pytest.approx(515.5, abs=0.1)
    assert pair.vacuum_pm == pytest.approx(597.5, abs=0.15)


@pytest.mark.parametrize(
    ("half_nm", "three_halves_nm", "per_cm", "digits"),
    [  # NIST levels as carried by rydstate 0.14.0: first p doublets, vacuum
        (770.1084, 766.7009, 57.7103, 0.003),  # K
        (794.9789, 780.2415, 237.595, 0.003),  # Rb
        (894.5930, 852.3473, 554.0389, 0.003),  # Cs
        (589.7558, 589.1583, 17.1959, 0.004),  # Na
    ],
)
def test_alkali_doublets(half_nm: float, three_halves_nm: float, per_cm: float, digits: float) -> None:
    pair = separation_of(
        wavelength_1_nm=half_nm, wavelength_2_nm=three_halves_nm, u_separation_nm=0.0, medium="vacuum"
    )
    assert pair.per_cm == pytest.approx(per_cm, abs=digits)
    assert pair.u_per_cm == 0.0


def test_caesium_hyperfine_groups() -> None:
    """21.45 pm at 852.113 nm (air) is 8857 MHz (computed from hyperfine constants (memory)).

    5 MHz: the last digit of 21.45 pm is worth 2, taking the air values for vacuum ones 2.4.
    """
    pair = separation_of(
        wavelength_1_nm=852.113, wavelength_2_nm=852.113 + 0.02145, u_separation_nm=0.0, medium="air"
    )
    assert pair.ghz == pytest.approx(8.857, abs=0.005)


def test_constants() -> None:
    # CODATA: 8065.544 per cm to the electronvolt
    assert mev_from_per_cm(8065.544) == pytest.approx(1000.0, rel=1e-7)
    assert mev_from_per_cm(1.0) == pytest.approx(
        1e3 * constants.physical_constants["inverse meter-electron volt relationship"][0] * 100.0, rel=1e-9
    )
    assert ghz_from_per_cm(1.0) == pytest.approx(29.979_245_8, rel=1e-15)  # c, exact by definition
    assert wavenumber_per_cm(wavelength_vacuum_nm=1000.0) == pytest.approx(10_000.0)


def test_air_and_vacuum_tell_the_same() -> None:
    for air in (STANDARD_AIR, LABORATORY_AIR, Air(35.0, 85_000.0, 10.0)):
        in_air = [air_from_vacuum_nm(wavelength_vacuum_nm=w, air=air) for w in (313.24, 313.27)]
        one = separation_of(
            wavelength_1_nm=in_air[0],
            wavelength_2_nm=in_air[1],
            u_separation_nm=2e-4,
            medium="air",
            air=air,
        )
        two = separation_of(
            wavelength_1_nm=313.27,
            wavelength_2_nm=313.24,
            u_separation_nm=1e-3 * one.u_vacuum_pm,
            medium="vacuum",
            air=air,
        )
        for unit in ("vacuum_pm", "air_pm", "per_cm", "mev", "ghz"):
            assert getattr(one, unit) == pytest.approx(getattr(two, unit), rel=1e-8)
            assert getattr(one, f"u_{unit}") == pytest.approx(getattr(two, f"u_{unit}"), rel=1e-8)


@pytest.mark.parametrize("medium", ["air", "vacuum"])
@pytest.mark.parametrize(("low", "high"), [(577.0, 579.1), (852.35, 894.59), (300.0, 600.0)])
def test_uncertainties_against_a_simulation(medium: str, low: float, high: float) -> None:
    """Shift the two lines apart at random (Philox seed 11): the spread of every unit is its `u_`."""
    seed, n = 11, 20_000
    rng = np.random.Generator(np.random.Philox(seed))
    u = 0.02
    shift = u * rng.standard_normal(n)
    ones, twos = low - 0.5 * shift, high + 0.5 * shift
    if medium == "air":
        vacuum = [vacuum_from_air_nm(wavelength_air_nm=w) for w in (ones, twos)]
        in_air = [ones, twos]
    else:
        vacuum = [ones, twos]
        in_air = [air_from_vacuum_nm(wavelength_vacuum_nm=w) for w in (ones, twos)]
    per_cm = 1e7 / vacuum[0] - 1e7 / vacuum[1]
    spread = {
        "air_pm": 1e3 * (in_air[1] - in_air[0]),
        "vacuum_pm": 1e3 * (vacuum[1] - vacuum[0]),
        "per_cm": per_cm,
        "mev": per_cm * 1e5 * constants.h * constants.c / constants.e,
        "ghz": per_cm * 1e-7 * constants.c,
    }
    pair = separation_of(wavelength_1_nm=low, wavelength_2_nm=high, u_separation_nm=u, medium=medium)
    # compared with the sample's own spread of the shift, so that the sample's size does not matter
    for unit, values in spread.items():
        ratio = float(np.std(values) / np.std(shift))
        assert getattr(pair, f"u_{unit}") == pytest.approx(u * ratio, rel=1e-5), (unit, seed)


def test_common_shift() -> None:
    """1 pm of scale shift at 313 nm is 2/313 000 of the separation in 1/cm; checked by shifting both."""
    shift = 0.5
    where = {"u_separation_nm": 0.0, "medium": "vacuum"}
    pair = separation_of(wavelength_1_nm=313.0, wavelength_2_nm=314.0, u_common_nm=shift, **where)  # type: ignore[arg-type]
    up = separation_of(wavelength_1_nm=313.0 + shift, wavelength_2_nm=314.0 + shift, **where)  # type: ignore[arg-type]
    down = separation_of(wavelength_1_nm=313.0 - shift, wavelength_2_nm=314.0 - shift, **where)  # type: ignore[arg-type]
    assert pair.u_per_cm == pytest.approx(0.5 * (down.per_cm - up.per_cm), rel=1e-4)
    assert pair.u_vacuum_pm == 0.0
    small = separation_of(wavelength_1_nm=313.0, wavelength_2_nm=313.029, u_common_nm=1e-3, **where)  # type: ignore[arg-type]
    assert small.u_per_cm / small.per_cm == pytest.approx(2e-3 / 313.0, rel=1e-3)


def test_below_180_nm_there_is_only_vacuum() -> None:
    pair = separation_of(
        wavelength_1_nm=121.567, wavelength_2_nm=121.534, u_separation_nm=1e-3, medium="vacuum"
    )
    assert pair.air_pm is None
    assert pair.u_air_pm is None
    assert pair.vacuum_pm == pytest.approx(33.0)
    assert pair.per_cm == pytest.approx(1e7 * (1.0 / 121.534 - 1.0 / 121.567))


def test_at_the_border_of_air() -> None:
    border = separation_of(
        wavelength_1_nm=180.0, wavelength_2_nm=180.01, u_separation_nm=0.0, medium="vacuum"
    )
    assert border.air_pm is None
    beyond = separation_of(
        wavelength_1_nm=181.0, wavelength_2_nm=181.01, u_separation_nm=0.0, medium="vacuum"
    )
    assert beyond.air_pm == pytest.approx(10.0, rel=1e-3)


def test_two_lines_at_one_place() -> None:
    pair = separation_of(wavelength_1_nm=500.0, wavelength_2_nm=500.0, u_separation_nm=1e-3, medium="air")
    assert pair.per_cm == 0.0
    assert pair.u_per_cm == pytest.approx(1e7 * 1e-3 / 500.0**2, rel=1e-3)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"medium": "water"}, "medium = 'water'; allowed: 'air', 'vacuum'"),
        ({"u_separation_nm": -1.0}, "u_separation_nm = -1.0; allowed"),
        ({"u_common_nm": math.nan}, "u_common_nm = nan; allowed"),
        ({"wavelength_1_nm": 0.0}, "wavelength_1_nm = 0.0; allowed"),
        ({"wavelength_2_nm": math.inf}, "wavelength_2_nm = inf; allowed"),
        ({"medium": "air", "wavelength_1_nm": 150.0}, "allowed: 180 nm"),
    ],
)
def test_misuse(change: dict[str, object], message: str) -> None:
    good: dict[str, object] = {
        "wavelength_1_nm": 500.0,
        "wavelength_2_nm": 501.0,
        "u_separation_nm": 1e-3,
        "medium": "vacuum",
    }
    with pytest.raises(ValueError, match=message):
        separation_of(**{**good, **change})  # type: ignore[arg-type]


@pytest.mark.parametrize("wavelength_nm", [0.0, -1.0, math.nan, math.inf])
def test_wavenumber_of_nothing(wavelength_nm: float) -> None:
    with pytest.raises(ValueError, match="wavelength_vacuum_nm"):
        wavenumber_per_cm(wavelength_vacuum_nm=wavelength_nm)
