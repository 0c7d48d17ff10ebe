"""The packaged reference lines against published wavelengths."""

from __future__ import annotations

import math

import pytest

from analysis.air import vacuum_from_air_nm
from analysis.lines import ReferenceLine, elements, lines, near

# Air wavelengths in nm, NIST Atomic Spectra Database (memory); Cd 643.84696: by it the angstrom was once
# defined.
PUBLISHED = {
    "Ar": (696.5431, 706.7218, 738.3980, 750.3869, 763.5106, 794.8176, 811.5311, 912.2967),
    "Cd": (643.84696, 508.58217, 479.99121, 467.81493, 361.0508),
    "Fe": (371.99347, 385.9911, 404.5812, 438.3545, 516.7488),
    "Hg": (365.0153, 404.6563, 435.8328, 546.0735, 576.9598, 579.0663),
    "Ne": (585.24879, 594.48342, 614.30626, 640.2248, 650.65281, 692.94673, 703.24131),
    "Zn": (468.0134, 472.2153, 481.0528, 636.2338),
}


def nearest(element: str, wavelength_air_nm: float) -> ReferenceLine:
    return min(lines(element), key=lambda line: abs(line.wavelength_air_nm - wavelength_air_nm))


@pytest.mark.parametrize("element", PUBLISHED)
def test_published_wavelengths_are_met_within_the_stated_uncertainty(element: str) -> None:
    for published_nm in PUBLISHED[element]:
        line = nearest(element, published_nm)
        assert abs(line.wavelength_air_nm - published_nm) < line.uncertainty_nm


@pytest.mark.parametrize(
    ("element", "air_nm", "apart_pm"),
    [
        ("Hg", (313.1548, 313.1839), 29.1),
        ("Hg", (576.9598, 579.0663), 2106.5),
        ("Cd", (361.0508, 361.2873), 236.5),
    ],
)
def test_well_known_pairs(element: str, air_nm: tuple[float, float], apart_pm: float) -> None:
    """Separations in air from NIST ASD (memory), within the two lines' uncertainties."""
    one, two = (nearest(element, where) for where in air_nm)
    assert one != two
    allowed_nm = math.hypot(one.uncertainty_nm, two.uncertainty_nm)
    assert two.wavelength_air_nm - one.wavelength_air_nm == pytest.approx(1e-3 * apart_pm, abs=allowed_nm)


def test_air_and_vacuum_belong_together() -> None:
    """Another road: the air wavelength taken back to vacuum by iteration (Ciddor 1996)."""
    for element in elements():
        for line in lines(element):
            back_nm = vacuum_from_air_nm(wavelength_air_nm=line.wavelength_air_nm)
            assert back_nm == pytest.approx(line.wavelength_vacuum_nm, rel=1e-12)
            assert line.wavelength_nm("air") < line.wavelength_nm("vacuum")


def test_the_lists_are_whole_and_in_order() -> None:
    assert elements() == ("Ar", "Cd", "Fe", "Hg", "Ne", "Zn")
    for element in elements():
        found = lines(element)
        where = [line.wavelength_vacuum_nm for line in found]
        assert len(found) >= 10
        assert where == sorted(set(where))
        assert where[0] >= 180.0
        assert where[-1] <= 1100.0
        assert all(line.element == element and line.strength > 0.0 for line in found)
        assert all(1e-4 <= line.uncertainty_nm <= 5e-3 for line in found)


def test_lines_near_a_wavelength_come_nearest_first() -> None:
    found = near(546.0, 1.0)
    assert (found[0].element, found[0].wavelength_air_nm) == ("Hg", pytest.approx(546.075, abs=0.002))
    away = [abs(line.wavelength_air_nm - 546.0) for line in found]
    assert away == sorted(away)
    assert max(away) <= 1.0
    assert {line.element for line in near(546.0, 1.0, of=("Fe",))} == {"Fe"}
    assert near(546.227, 0.01, medium="vacuum", of=("Hg",))[0].element == "Hg"
    assert near(546.227, 0.01, of=("Hg",)) == ()


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: lines("Xx"), "element = 'Xx'; allowed: Ar, Cd, Fe, Hg, Ne, Zn"),
        (lambda: near(500.0, -1.0), r"reach_nm = -1\.0; allowed"),
        (lambda: near(500.0, 1.0, medium="glass"), "medium = 'glass'; allowed"),
        (lambda: near(500.0, 1.0, of=("Xx",)), "element = 'Xx'"),
    ],
)
def test_what_makes_no_sense(call: object, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        call()  # type: ignore[operator]
