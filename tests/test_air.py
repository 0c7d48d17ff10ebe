"""Air: Ciddor's own tables, an independent library over a grid, wavelengths both ways."""

from __future__ import annotations

import math

import numpy as np
import pytest
import ref_index
from hypothesis import given
from hypothesis import strategies as st

from analysis.air import (
    LABORATORY_AIR,
    STANDARD_AIR,
    Air,
    air_from_vacuum_nm,
    group_index,
    refractive_index,
    vacuum_from_air_nm,
)


def refractivity_1e8(wavelength_nm: float, t: float, p: float, rh: float = 0.0, co2: float = 450.0) -> float:
    n = refractive_index(
        wavelength_vacuum_nm=wavelength_nm, temperature_c=t, pressure_pa=p, humidity_percent=rh, co2_ppm=co2
    )
    return 1e8 * (n - 1.0)


@pytest.mark.parametrize(
    ("t", "p", "rh", "expected"),
    [
        # Ciddor 1996, Appl. Opt. 35, 1566: table 1, dry, 450 ppm, 633 nm
        (20.0, 80_000.0, 0.0, 21458.0),
        (20.0, 100_000.0, 0.0, 26824.4),
        (20.0, 120_000.0, 0.0, 32191.6),
        (10.0, 100_000.0, 0.0, 27774.7),
        (30.0, 100_000.0, 0.0, 25937.2),
        (20.0, 101_325.0, 0.0, 27180.0),
        (15.0, 101_325.0, 0.0, 27653.0),
        # the same paper, table 3, 75 % relative humidity
        (20.0, 80_000.0, 75.0, 21394.0),
        (20.0, 120_000.0, 75.0, 32127.8),
    ],
)
def test_ciddors_tables(t: float, p: float, rh: float, expected: float) -> None:
    # 0.07: the tables are printed to 0.1 and were computed at 632.99.. to 633 nm
    assert refractivity_1e8(633.0, t, p, rh) == pytest.approx(expected, abs=0.07)


# NIST engineering metrology calculator (Ciddor's equation), as printed in ref_index 1.0's own tests
NIST = [
    *((w, 20.0, 101_325.0, 50.0, n) for w, n in [
        (321.456, 1.000283543), (500.0, 1.000273781), (600.1234, 1.000271818), (633.0, 1.000271373),
        (700.0, 1.000270657), (1000.987, 1.000269038), (1500.8, 1.00026819), (1700.0, 1.000268041),
    ]),
    *((633.0, t, 101_325.0, 50.0, n) for t, n in [
        (-20.0, 1.00031489), (0.0, 1.000291647), (26.7982, 1.000264994), (40.123, 1.000253031),
        (60.45, 1.000235516),
    ]),
    *((633.0, 20.0, p, 50.0, n) for p, n in [
        (10_000.0, 1.000026385), (50_123.0, 1.000133999), (100_123.4, 1.000268148), (140_000.0, 1.000375169),
    ]),
    *((633.0, 20.0, 101_325.0, rh, n) for rh, n in [
        (0.0, 1.0002718), (20.123, 1.000271627), (40.0, 1.000271458), (50.9876, 1.000271364),
        (70.0, 1.000271203), (90.7432, 1.000271027), (100.0, 1.000270949),
    ]),
]  # fmt: skip


@pytest.mark.parametrize(("wavelength_nm", "t", "p", "rh", "n"), NIST)
def test_nist_calculator(wavelength_nm: float, t: float, p: float, rh: float, n: float) -> None:
    # half of the last printed digit, and what two formulas for the vapour pressure leave
    assert refractivity_1e8(wavelength_nm, t, p, rh) == pytest.approx(1e8 * (n - 1.0), abs=0.08)


def test_an_independent_library_over_a_grid() -> None:
    """ref_index 1.0: same equations, another formula for the vapour pressure, constants for densities."""
    for t in (-20.0, -0.01, 0.0, 11.0, 20.0, 35.0, 60.0):
        for p in (60_000.0, 101_325.0, 130_000.0):
            for rh in (0.0, 45.0, 100.0):
                for wavelength_nm in (200.0, 253.652, 404.656, 633.0, 1700.0):
                    for co2 in (0.0, 450.0, 1500.0):
                        theirs = 1e8 * (ref_index.ciddor(wavelength_nm, t, p, rh, co2) - 1.0)
                        allowed = 1e-5 if rh == 0.0 else 0.06
                        ours = refractivity_1e8(wavelength_nm, t, p, rh, co2)
                        assert ours == pytest.approx(theirs, abs=allowed), (t, p, rh, wavelength_nm, co2)


def test_another_formula_in_dry_air() -> None:
    """Birch and Downs' update of Edlen's equation (1993, 1994), as coded in ref_index 1.0;
    either formula is good to some 1e-8 to 5e-8 (memory)."""
    for wavelength_nm in (360.0, 440.0, 546.1, 633.0):
        theirs = 1e8 * (ref_index.edlen(wavelength_nm, 20.0, 101_325.0, 0.0) - 1.0)
        assert refractivity_1e8(wavelength_nm, 20.0, 101_325.0) == pytest.approx(theirs, abs=1.0)


@pytest.mark.parametrize(
    ("air_nm", "vacuum_nm"),
    # sodium D lines: air values NIST ASD; vacuum values from NIST levels as carried by rydstate 0.14.0
    [(588.9951, 589.1583), (589.5924, 589.7558)],
)
def test_sodium_d_lines_in_air_and_vacuum(air_nm: float, vacuum_nm: float) -> None:
    assert vacuum_from_air_nm(wavelength_air_nm=air_nm) == pytest.approx(vacuum_nm, abs=1e-4)
    assert air_from_vacuum_nm(wavelength_vacuum_nm=vacuum_nm) == pytest.approx(air_nm, abs=1e-4)


def test_the_red_cadmium_line() -> None:
    """643.84696 nm in dry air at 15 deg C with 300 ppm CO2: what once defined the angstrom (memory);
    644.02490 nm in vacuum as in the NIST list carried by pypeit 2.0.1."""
    air = Air(15.0, 101_325.0, 0.0, co2_ppm=300.0)
    assert vacuum_from_air_nm(wavelength_air_nm=643.84696, air=air) == pytest.approx(644.02490, abs=6e-6)


@pytest.mark.parametrize(
    ("air_nm", "vacuum_nm"),
    # vacuum values: NIST lists carried by pypeit 2.0.1; air values NIST ASD (memory)
    [(361.0508, 361.15375), (435.8335, 435.9560), (508.58217, 508.72393), (546.0750, 546.2268)],
)
def test_cadmium_and_mercury_lines(air_nm: float, vacuum_nm: float) -> None:
    assert vacuum_from_air_nm(wavelength_air_nm=air_nm) == pytest.approx(vacuum_nm, abs=6e-5)


@given(
    wavelength_nm=st.floats(180.5, 100_000.0),
    t=st.floats(-40.0, 60.0),
    p=st.floats(60_000.0, 140_000.0),
    rh=st.floats(0.0, 100.0),
)
def test_there_and_back_again(wavelength_nm: float, t: float, p: float, rh: float) -> None:
    air = Air(t, p, rh)
    there = air_from_vacuum_nm(wavelength_vacuum_nm=wavelength_nm, air=air)
    back = vacuum_from_air_nm(wavelength_air_nm=there, air=air)
    assert abs(back - wavelength_nm) < 1e-13 * wavelength_nm + 1e-12
    assert there < wavelength_nm


def test_arrays_keep_their_shape_and_agree_with_floats() -> None:
    wavelengths = np.array([[250.0, 313.155], [546.074, 1100.0]])
    vacuum = vacuum_from_air_nm(wavelength_air_nm=wavelengths, air=LABORATORY_AIR)
    assert vacuum.shape == (2, 2)
    for one, many in zip(wavelengths.flat, vacuum.flat, strict=True):
        alone = vacuum_from_air_nm(wavelength_air_nm=float(one), air=LABORATORY_AIR)
        assert many == pytest.approx(alone, rel=1e-15)


def test_group_index_of_standard_air() -> None:
    """n_g at 633 nm from a five-point derivative of the reference library's own index."""
    h = 1.0
    n = [ref_index.ciddor(633.0 + k * h, 15.0, 101_325.0, 0.0) for k in (-2, -1, 1, 2)]
    slope = (n[0] - 8.0 * n[1] + 8.0 * n[2] - n[3]) / (12.0 * h)
    expected = ref_index.ciddor(633.0, 15.0, 101_325.0, 0.0) - 633.0 * slope
    assert group_index(wavelength_vacuum_nm=633.0) == pytest.approx(expected, abs=1e-9)


@pytest.mark.parametrize(
    ("kwargs", "name"),
    [
        ({"temperature_c": -40.1}, "temperature_c"),
        ({"temperature_c": 100.1, "humidity_percent": 0.0}, "temperature_c"),
        ({"temperature_c": math.nan}, "temperature_c"),
        ({"pressure_pa": 101.325}, "pressure_pa"),  # kPa given for Pa
        ({"pressure_pa": 9_999.0}, "pressure_pa"),
        ({"pressure_pa": 140_001.0}, "pressure_pa"),
        ({"humidity_percent": -1.0}, "humidity_percent"),
        ({"humidity_percent": 101.0}, "humidity_percent"),
        ({"co2_ppm": 2001.0}, "co2_ppm"),
        ({"temperature_c": 99.0, "humidity_percent": 100.0, "pressure_pa": 20_000.0}, "humidity_percent"),
    ],
)
def test_air_that_cannot_be(kwargs: dict[str, float], name: str) -> None:
    good = {"temperature_c": 20.0, "pressure_pa": 101_325.0, "humidity_percent": 50.0}
    with pytest.raises(ValueError, match=rf"{name} = .*allowed"):
        Air(**{**good, **kwargs})


@pytest.mark.parametrize("wavelength_nm", [179.9, 0.0, -500.0, math.nan, math.inf])
def test_wavelengths_that_air_does_not_pass(wavelength_nm: float) -> None:
    with pytest.raises(ValueError, match=r"wavelength_air_nm = .*allowed: 180 nm"):
        vacuum_from_air_nm(wavelength_air_nm=wavelength_nm)
    with pytest.raises(ValueError, match="wavelength_vacuum_nm"):
        air_from_vacuum_nm(wavelength_vacuum_nm=np.array([500.0, wavelength_nm]))


def test_the_borders_are_allowed() -> None:
    Air(-40.0, 10_000.0, 0.0, 0.0)
    Air(100.0, 140_000.0, 100.0, 2_000.0)
    assert vacuum_from_air_nm(wavelength_air_nm=180.0) == pytest.approx(180.06, abs=0.01)


def test_vapour_on_the_brink_of_boiling() -> None:
    """Water boils at 60 deg C under 19.946 kPa (saturation table, (memory)): saturated air needs more."""
    Air(60.0, 20_050.0, 100.0)
    with pytest.raises(ValueError, match=r"humidity_percent = 100\.0 at 60 C"):
        Air(60.0, 19_900.0, 100.0)


def test_co2_is_450_ppm_unless_given() -> None:
    assert Air(20.0, 101_325.0, 0.0).co2_ppm == 450.0
    conditions = {"temperature_c": 20.0, "pressure_pa": 101_325.0, "humidity_percent": 0.0}
    by_default = refractive_index(wavelength_vacuum_nm=633.0, **conditions)
    assert by_default == refractive_index(wavelength_vacuum_nm=633.0, co2_ppm=450.0, **conditions)


def test_standard_air_and_laboratory_air() -> None:
    """Tabulated air wavelengths refer to 15 deg C, 101 325 Pa, dry (common practice)."""
    assert Air(20.0, 101_325.0, 50.0, 450.0) == LABORATORY_AIR
    assert Air(15.0, 101_325.0, 0.0, 450.0) == STANDARD_AIR
