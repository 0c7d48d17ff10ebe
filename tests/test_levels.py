"""Levels: what doublets of alkalis and hydrogen say, against tabulated levels."""

from __future__ import annotations

import math

import pytest

from analysis.levels import (
    boltzmann_factor,
    level_splitting_per_cm,
    normal_mass_shift_nm,
    spin_orbit,
    thin_photon_ratio,
)
from analysis.resolving import needed_resolving_power
from analysis.separation import mev_from_per_cm, separation_of

# First p doublets: splitting and spin-orbit constant in 1/cm, vacuum wavelengths of J = 1/2 and 3/2 in nm:
# NIST levels, as carried by rydstate 0.14.0.
DOUBLETS = {
    "Na": (17.1959, 11.464, 589.7558, 589.1583),
    "K": (57.7103, 38.474, 770.1084, 766.7009),
    "Rb": (237.595, 158.40, 794.9789, 780.2415),
    "Cs": (554.0389, 369.36, 894.5930, 852.3473),
}

# Transition probabilities in 1e7/s, J = 3/2 and 1/2, and the ratio of photons from thin light (memory).
PROBABILITIES = {
    "Na": (6.16, 6.14, 2.01),
    "K": (3.80, 3.75, 2.03),
    "Rb": (3.81, 3.61, 2.11),
    "Cs": (3.28, 2.86, 2.29),
}


@pytest.mark.parametrize("element", DOUBLETS)
def test_spin_orbit_constants_of_the_alkalis(element: str) -> None:
    """zeta = Delta E/(l + 1/2) from tabulated levels (NIST), there and back."""
    splitting, zeta, _, _ = DOUBLETS[element]
    found = spin_orbit(splitting_per_cm=splitting, splitting_u_per_cm=0.003, orbital_l=1)
    assert found.zeta_per_cm == pytest.approx(zeta, abs=0.005)
    assert found.zeta_u_per_cm == pytest.approx(0.002)
    assert (found.j_low, found.j_high) == (0.5, 1.5)
    assert level_splitting_per_cm(zeta_per_cm=found.zeta_per_cm, orbital_l=1) == pytest.approx(splitting)


@pytest.mark.parametrize("element", DOUBLETS)
def test_from_measured_wavelengths_to_the_spin_orbit_constant(element: str) -> None:
    """The tabulated vacuum wavelengths (NIST levels) have the tabulated splitting: zeta through
    analysis.separation."""
    splitting, zeta, long_nm, short_nm = DOUBLETS[element]
    measured = separation_of(
        wavelength_1_nm=long_nm, wavelength_2_nm=short_nm, u_separation_nm=1e-4, medium="vacuum"
    )
    assert measured.per_cm == pytest.approx(splitting, abs=3.0 * measured.u_per_cm)
    found = spin_orbit(splitting_per_cm=measured.per_cm, splitting_u_per_cm=measured.u_per_cm, orbital_l=1)
    assert found.zeta_per_cm == pytest.approx(zeta, abs=3.0 * found.zeta_u_per_cm + 0.005)


def test_sodium_in_mev() -> None:
    """17.1959 1/cm are 2.132 meV (NIST ASD)."""
    assert mev_from_per_cm(17.1959) == pytest.approx(2.132, abs=5e-4)


@pytest.mark.parametrize("element", PROBABILITIES)
def test_thin_doublets(element: str) -> None:
    """2 A(3/2)/A(1/2) = 2.01, 2.03, 2.11, 2.29 (A values: memory)."""
    strong, weak, ratio = PROBABILITIES[element]
    ours = thin_photon_ratio(a_1_per_s=strong * 1e7, j_1=1.5, a_2_per_s=weak * 1e7, j_2=0.5)
    assert ours == pytest.approx(ratio, abs=0.006)


def test_population_of_the_caesium_levels() -> None:
    """At 1000 K the upper level of caesium holds 0.45 of its share (computed, k = 0.695 1/cm per K:
    CODATA)."""
    factor = boltzmann_factor(splitting_per_cm=554.0389, temperature_k=1000.0)
    assert factor == pytest.approx(0.45, abs=0.005)
    assert factor == pytest.approx(math.exp(-554.0389 / 695.0348), rel=1e-6)
    assert boltzmann_factor(splitting_per_cm=17.1959, temperature_k=1000.0) == pytest.approx(0.9756, abs=1e-4)


@pytest.mark.parametrize(
    ("one_nm", "two_nm", "needed"),
    [
        (588.9951, 589.5924, 987.0),
        (579.0663, 576.9598, 274.0),
        (770.1084, 766.7009, 226.0),
        (794.9789, 780.2415, 53.0),
        (894.5930, 852.3473, 21.0),
        (656.4696, 656.4696 - 0.178576, 3676.0),
        (670.961, 670.961 * (1.0 - 670.961e-7 * 0.3354), 44_400.0),
    ],
    ids=["Na", "Hg", "K", "Rb", "Cs", "H/D", "Li"],
)
def test_resolving_power_needed(one_nm: float, two_nm: float, needed: float) -> None:
    """lambda/delta lambda of well-known pairs (wavelengths: NIST ASD; Li splitting 0.3354 1/cm: memory)."""
    found = needed_resolving_power(wavelength_1_nm=one_nm, wavelength_2_nm=two_nm)
    assert found == pytest.approx(needed, rel=2.5e-3, abs=0.7)


def test_levels_that_do_not_split_are_populated_alike() -> None:
    """No splitting is a splitting too: zeta is 0, and the populations differ by the weights alone."""
    assert spin_orbit(splitting_per_cm=0.0, orbital_l=2).zeta_per_cm == 0.0
    assert boltzmann_factor(splitting_per_cm=0.0, temperature_k=0.5) == 1.0


def test_an_upper_level_of_j_0_has_one_state() -> None:
    """Lines of equal A from J = 0 and J = 1 go as the weights 1 and 3."""
    assert thin_photon_ratio(a_1_per_s=1e7, j_1=0.0, a_2_per_s=1e7, j_2=1.0) == pytest.approx(1.0 / 3.0)


def test_muonium_is_an_isotope_too() -> None:
    """A nucleus far below one u: the antimuon, 206.768 electron masses (CODATA), against the proton, by
    hand lambda goes as 1 + m_e/M."""
    muon_u, proton_u = 206.768283 * 5.4857990907e-4, 1.007276466621
    shift_nm = normal_mass_shift_nm(wavelength_vacuum_nm=656.0, lighter_u=muon_u, heavier_u=proton_u)
    by_hand_nm = 656.0 * (1.0 - (1.0 + 1.0 / 1836.152673) / (1.0 + 1.0 / 206.768283))
    assert shift_nm == pytest.approx(by_hand_nm, rel=1e-7)


def test_hydrogen_and_deuterium() -> None:
    """H-alpha and D-alpha are 0.178576 nm apart, gross structure in vacuum (computed from CODATA constants).

    R_infinity 10 973 731.568 per m, nuclei of 1.007276467 and 2.013553213 u (CODATA).
    """
    per_m = 10_973_731.568 / (1.0 + 5.4857990907e-4 / 1.007276466621)
    h_alpha_nm = 1e9 / (per_m * (1.0 / 4.0 - 1.0 / 9.0))
    shift_nm = normal_mass_shift_nm(
        wavelength_vacuum_nm=h_alpha_nm, lighter_u=1.007276466621, heavier_u=2.013553212745
    )
    assert shift_nm == pytest.approx(0.178576, abs=5e-7)
    assert normal_mass_shift_nm(wavelength_vacuum_nm=500.0, lighter_u=4.0, heavier_u=4.0) == 0.0


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: spin_orbit(splitting_per_cm=1.0, orbital_l=0), "orbital_l = 0; allowed: 1 or more"),
        (lambda: spin_orbit(splitting_per_cm=-1.0, orbital_l=1), r"splitting_per_cm = -1\.0; allowed"),
        (
            lambda: spin_orbit(splitting_per_cm=1.0, splitting_u_per_cm=-0.1, orbital_l=1),
            r"splitting_u_per_cm = -0\.1; allowed",
        ),
        (lambda: level_splitting_per_cm(zeta_per_cm=math.nan, orbital_l=1), "zeta_per_cm = nan"),
        (lambda: level_splitting_per_cm(zeta_per_cm=1.0, orbital_l=0), "orbital_l = 0; allowed"),
        (
            lambda: boltzmann_factor(splitting_per_cm=-1.0, temperature_k=300.0),
            r"splitting_per_cm = -1\.0; allowed",
        ),
        (lambda: boltzmann_factor(splitting_per_cm=1.0, temperature_k=0.0), r"temperature_k = 0\.0; allowed"),
        (
            lambda: thin_photon_ratio(a_1_per_s=0.0, j_1=0.5, a_2_per_s=1.0, j_2=0.5),
            r"a_1_per_s = 0\.0; allowed",
        ),
        (
            lambda: thin_photon_ratio(a_1_per_s=1.0, j_1=0.3, a_2_per_s=1.0, j_2=0.5),
            r"j_1 = 0\.3; allowed: 0, 0\.5",
        ),
        (
            lambda: normal_mass_shift_nm(wavelength_vacuum_nm=1.0, lighter_u=2.0, heavier_u=1.0),
            "the lighter first",
        ),
        (
            lambda: normal_mass_shift_nm(wavelength_vacuum_nm=1.0, lighter_u=0.0, heavier_u=1.0),
            r"lighter_u = 0\.0, .*positive",
        ),
        (
            lambda: normal_mass_shift_nm(wavelength_vacuum_nm=1.0, lighter_u=1.0, heavier_u=math.inf),
            "heavier_u = inf; allowed: positive, finite",
        ),
        (
            lambda: normal_mass_shift_nm(wavelength_vacuum_nm=0.0, lighter_u=1.0, heavier_u=2.0),
            "wavelength_vacuum_nm = 0",
        ),
        (
            lambda: needed_resolving_power(wavelength_1_nm=5.0, wavelength_2_nm=5.0),
            "positive, finite, different",
        ),
    ],
)
def test_what_makes_no_sense(call: object, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        call()  # type: ignore[operator]
