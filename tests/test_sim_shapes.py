"""Line shapes of the simulated lamps against sums done directly, and against published curves of growth."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.signal import fftconvolve
from scipy.special import voigt_profile

from drivers.errors import SettingsError
from drivers.settings import parse_options
from simulators.lamp import LampOptions, LineOptions
from simulators.mounts import PlaneOptions
from simulators.optics import Spectrometer
from simulators.profile import LineProfile
from simulators.shapes import Component, Shape, absorption, emission

HG_NM = 253.652
GRID_NM = np.linspace(-0.4, 0.4, 80001)
STEP_NM = float(GRID_NM[1] - GRID_NM[0])


def line(**keys: Any) -> LineOptions:
    options = {"wavelength_air_nm": HG_NM, "strength_per_s": 100.0, "temperature_k": 800.0, "mass_u": 200.59}
    return parse_options(LineOptions, options | keys, "line")


def spectrometer(**changes: Any) -> Spectrometer:
    options = {
        "groove_density_per_mm": 1200.0,
        "ruled_width_mm": 96.0,
        "focal_length_mm": 870.0,
        "included_angle_deg": 22.0,
        "entrance_slit_um": 10.0,
        "exit_slit_um": 10.0,
        "order": 3,
    }
    return Spectrometer(PlaneOptions(**(options | changes)))


def check_transform(shape: Shape, density: np.ndarray) -> None:
    """The transform against a plain sum over the given density (per nm, any area, on GRID_NM).

    Lorentz wings go on beyond the grid: 3e-4 of what escapes of a reversed line."""
    area = density.sum() * STEP_NM
    for frequency in (0.0, 17.0, 80.0, 300.0):
        direct = (density * np.exp(-2.0j * math.pi * frequency * GRID_NM)).sum() * STEP_NM / area
        ours = shape.transform(np.array([frequency]))[0]
        assert complex(ours) == pytest.approx(complex(direct), abs=5e-4), frequency


def test_a_voigt_line_has_its_published_shape() -> None:
    """Published (mpmath): V(0;1,1) = 0.208709280520368, V(1;1,1) = 0.165795662689167."""
    shape = emission([Component(0.0, 1.0, 1.0, 2.0)])
    values = shape.density(np.array([0.0, 1.0]))
    assert values.tolist() == pytest.approx([0.208709280520368, 0.165795662689167], rel=1e-12)
    check_transform(emission([Component(0.0, 1.0, 1e-3, 2e-4)]), voigt_profile(GRID_NM, 1e-3, 1e-4))


def test_hyperfine_components_keep_their_centroid_and_strengths() -> None:
    """The first moment of the shape is the strengths' mean offset, its second adds their scatter."""
    components = [
        {"offset_pm": -12.06, "strength": 0.44},
        {"offset_pm": 9.39, "strength": 0.56, "mass_u": 100.0},
    ]
    shape = line(components=components).shape()
    density = shape.density(GRID_NM)
    assert density.sum() * STEP_NM == pytest.approx(1.0, rel=1e-9)
    mean = (density * GRID_NM).sum() * STEP_NM
    assert mean == pytest.approx(1e-3 * (0.44 * -12.06 + 0.56 * 9.39), rel=1e-9)
    slope = np.imag(shape.transform(np.array([1e-3]))[0]) / (-2.0 * math.pi * 1e-3)
    assert slope == pytest.approx(mean, rel=1e-6)
    sigma = line().fwhm_nm / 2.354820045
    # half the mass, twice the variance (textbook: kT/M)
    expected = (0.44 + 0.56 * 2.0059) * sigma**2 + 1e-6 * 0.44 * 0.56 * (12.06 + 9.39) ** 2
    assert ((GRID_NM - mean) ** 2 * density).sum() * STEP_NM == pytest.approx(expected, rel=1e-4)


REVERSAL = {"optical_depth": 4.0, "temperature_k": 350.0, "mass_u": 200.59}


@pytest.mark.parametrize("shift_pm", [0.0, 0.2])
@pytest.mark.parametrize("lorentz_pm", [0.0, 0.1])
def test_self_reversal_is_emission_times_what_the_cooler_layer_lets_through(
    shift_pm: float, lorentz_pm: float
) -> None:
    """Cowan and Dieke 1948, Rev. Mod. Phys. 20, 418: the emitted profile times exp(-depth), written out."""
    layer = REVERSAL | {"shift_pm": shift_pm, "lorentz_fwhm_pm": lorentz_pm}
    reversed_line = line(reversal=layer, lorentz_fwhm_pm=lorentz_pm)
    shape = reversed_line.shape()
    # Doppler FWHM 7.16e-7 lambda sqrt(T/M) (textbook)
    hot, cold = (7.1623e-7 * HG_NM * math.sqrt(t / 200.59) / 2.354820045 for t in (800.0, 350.0))
    half = lorentz_pm * 0.5e-3
    emitted = voigt_profile(GRID_NM, hot, half)
    shifted = GRID_NM - shift_pm * 1e-3
    depth = 4.0 * voigt_profile(shifted, cold, half) / voigt_profile(0.0, cold, half)
    escaped = emitted * np.exp(-depth)
    assert shape.area == pytest.approx(escaped.sum() * STEP_NM, rel=1e-3)
    inner = np.abs(GRID_NM) < 0.003
    ours = shape.density(GRID_NM) * shape.area
    assert ours[inner] == pytest.approx(escaped[inner], abs=2e-3 * float(escaped.max()))
    check_transform(shape, escaped)
    if not shift_pm:
        dip = float(ours[40000] / ours.max())
        # exp(-4) of the top's own depth: the temperatures' fourth digit moves it
        assert dip == pytest.approx(float(escaped[40000] / escaped.max()), rel=5e-3)
        assert dip < 0.1


def test_the_dip_survives_the_instrument_as_direct_integration_says() -> None:
    """Order 3, slits of 10 um: line, both slits and diffraction folded on a fine grid, no transform."""
    strong = line(
        doppler_fwhm_pm=12.0,
        temperature_k=None,
        mass_u=None,
        reversal={"doppler_fwhm_pm": 9.0, "optical_depth": 8.0},
    )
    instrument = spectrometer()
    profile = LineProfile(instrument, wavelength_nm=HG_NM, shape=strong.shape())
    shape = strong.shape()
    parts = [
        np.clip(0.5 + (box / 2.0 - np.abs(GRID_NM)) / STEP_NM, 0.0, 1.0)
        for box in instrument.bandpass_nm(HG_NM)
    ]
    scale_nm = HG_NM / 3.0 / instrument.grooves
    folded = shape.density(GRID_NM)
    for part in (*parts, np.sinc(GRID_NM / scale_nm) ** 2):
        folded = fftconvolve(folded, part / part.sum(), mode="same")
    folded /= folded.max()
    per_rad = 1e6 / 1200.0 * 2.0 * math.cos(math.radians(11.0)) * math.cos(profile.rotation_rad) / 3.0
    for place_nm in (-4e-3, -2e-3, -1e-3, 0.0, 0.7e-3, 2.2e-3, 5e-3):
        ours = profile.share(place_nm / per_rad) / profile.peak
        assert ours == pytest.approx(float(np.interp(place_nm, GRID_NM, folded)), abs=4e-3), place_nm
    assert profile.share(0.0) < 0.8 * profile.peak, "no dip to speak of"


def test_a_thin_absorber_takes_its_depth_times_its_width() -> None:
    """Textbook: for small depths the equivalent width is the area of the depth, tau0 FWHM sqrt(pi/ln 2)/2."""
    fwhm_nm = 1e-3
    thin = absorption([Component(0.0, 1e-3, fwhm_nm / 2.354820045)])
    assert thin.area == pytest.approx(1e-3 * fwhm_nm * math.sqrt(math.pi / math.log(2.0)) / 2.0, rel=1e-3)


@pytest.mark.parametrize("depth", [0.5, 3.0, 50.0, 900.0])
def test_the_curve_of_growth_of_a_doppler_absorber(depth: float) -> None:
    """Textbook: W is the integral of 1 - exp(-tau), done by adaptive quadrature."""
    sigma_nm = 1e-3
    width, _ = quad(lambda u: -math.expm1(-depth * math.exp(-u * u / 2.0)), -12.0, 12.0, epsabs=1e-12)
    assert absorption([Component(0.0, depth, sigma_nm)]).area == pytest.approx(width * sigma_nm, rel=1e-6)


def test_a_thick_lorentz_absorber_grows_as_the_square_root() -> None:
    """Ladenburg and Reiche 1913: W = FWHM sqrt(pi tau0) for a thick, purely pressure-broadened line."""
    fwhm_nm = 1e-2
    shape = absorption([Component(0.0, 200.0, 1e-4, fwhm_nm)])
    assert shape.area == pytest.approx(fwhm_nm * math.sqrt(math.pi * 200.0), rel=0.01)


def test_two_absorbers_that_overlap_multiply() -> None:
    """Beer and Lambert: transmissions multiply, so what is taken is not the sum of both."""
    pair = [Component(-3e-4, 2.0, 4e-4), Component(3e-4, 1.0, 4e-4)]
    shape = absorption(pair)
    depth = sum(c.height * np.exp(-(((GRID_NM - c.offset_nm) / c.sigma_nm) ** 2) / 2.0) for c in pair)
    taken = 1.0 - np.exp(-depth)
    assert shape.area == pytest.approx(taken.sum() * STEP_NM, rel=1e-6)
    assert shape.area < 0.9 * sum(absorption([c]).area for c in pair)
    check_transform(shape, taken)


def test_a_cell_before_the_lamp_eats_into_its_line_only_where_it_stands() -> None:
    options = {
        "lines": [
            {"wavelength_air_nm": 852.113, "strength_per_s": 100.0, "doppler_fwhm_pm": 2.0},
            {"wavelength_air_nm": 894.347, "strength_per_s": 100.0, "doppler_fwhm_pm": 2.0},
        ],
        "cell": [{"wavelength_air_nm": 852.113, "optical_depth": 5.0, "doppler_fwhm_pm": 1.0}],
    }
    lamp = parse_options(LampOptions, options, "lamp")
    eaten, spared = (one.shape(lamp.cell).area for one in lamp.lines)
    assert spared == 1.0
    assert 0.1 < eaten < 0.6


@pytest.mark.parametrize(
    ("keys", "fragment"),
    [
        ({"components": [{"offset_pm": 0.0, "strength": 0.0}]}, "strength"),
        ({"reversal": {"optical_depth": 2.0}}, "either doppler_fwhm_pm, or both"),
        (
            {
                "temperature_k": None,
                "mass_u": None,
                "doppler_fwhm_pm": 1.0,
                "components": [{"offset_pm": 0.0, "strength": 1.0, "mass_u": 2.0}],
            },
            "a mass_u needs the line's temperature_k",
        ),
    ],
)
def test_lines_that_make_no_sense_are_refused(keys: dict[str, Any], fragment: str) -> None:
    with pytest.raises(SettingsError, match=fragment):
        line(**keys)


def test_a_lamp_without_light_is_refused() -> None:
    with pytest.raises(SettingsError, match="needs lines or a continuum"):
        parse_options(LampOptions, {}, "lamp")
