"""The shape of one line: a Voigt profile seen through two slits, with exact derivatives.

Theory of operation. The Voigt profile is the real part of an analytic function of z = x + i gamma,

    f(z) = w(z / (sigma sqrt 2)) / (sigma sqrt(2 pi)),      V = Re f       (Faddeeva function w)

so every derivative and antiderivative in x of V is the real part of one "level" of f, and

    dV/dgamma = -Im f',      dV/dsigma = sigma Re f''        (Cauchy-Riemann; heat equation).

A convolution with a box of full width b is a difference of the next antiderivative at x + b/2 and x - b/2,
with two boxes (entrance and exit slit: a trapezoid) a second difference of the second antiderivative. The
levels stand in a table over x/sigma (spacing growing with distance) and are read by cubic Hermite
interpolation; within 1e-7 of the peak, far cheaper than quadrature over the slits at every point. The
difference cancels where a box is narrow against sigma: there four Gauss-Legendre nodes replace it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from analysis.counting import FloatArray

FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
NARROW = 0.6
"""A box narrower than this many sigma is integrated by nodes: their error is then below 2e-9."""
_STEP = 0.03
_LORENTZ_AS_SIGMA = 2.0 / FWHM_PER_SIGMA


def voigt_fwhm(sigma: float, gamma: float) -> float:
    """FWHM of a Voigt profile; accurate to 0.02 % (Olivero and Longbothum 1977, JQSRT 17, 233, eq. 1.3)."""
    lorentz, gauss = 2.0 * gamma, FWHM_PER_SIGMA * sigma
    return float(0.5346 * lorentz + np.sqrt(0.2166 * lorentz**2 + gauss**2))


@dataclass(frozen=True, slots=True)
class Kernel:
    """The known part of the instrument: a weighted sum of shifted antiderivatives of the line.

    offsets_nm, weights : (K,) the line seen through the slits is sum_k weights[k] f^(-order)(x + offsets[k]).
    order : 0, 1 or 2 boxes taken as differences; the rest as nodes. variance_nm2 : of the boxes alone.
    """

    offsets_nm: FloatArray
    weights: FloatArray
    order: int
    variance_nm2: float


def box_kernel(*, box_widths_nm: tuple[float, float], sigma_nm: float) -> Kernel:
    """Kernel of two boxes (full widths, nm; 0.0 is absent) for this sigma. ValueError if negative."""
    if min(box_widths_nm) < 0.0 or not sigma_nm > 0.0:
        raise ValueError(f"box widths must be >= 0 and sigma > 0, got {box_widths_nm} and {sigma_nm}")
    offsets, weights, order = np.zeros(1), np.ones(1), 0
    for width in box_widths_nm:
        if width == 0.0:
            continue
        if width < NARROW * sigma_nm:
            places, shares = 0.5 * width * _NODES, 0.5 * _NODE_WEIGHTS
        else:
            places, shares = np.array([-0.5, 0.5]) * width, np.array([-1.0, 1.0]) / width
            order += 1
        offsets = (offsets[:, None] + places).ravel()
        weights = (weights[:, None] * shares).ravel()
    if order == 2 and box_widths_nm[0] == box_widths_nm[1]:
        # a triangle: the two middle terms are one
        offsets, weights = offsets[[0, 1, 3]], weights[[0, 1, 3]] * np.array([1.0, 2.0, 1.0])
    return Kernel(offsets, weights, order, sum(width**2 for width in box_widths_nm) / 12.0)


_NODES, _NODE_WEIGHTS = np.polynomial.legendre.leggauss(4)


@dataclass(frozen=True, slots=True)
class Profile:
    """Area-normalised profile and its derivatives at the given offsets, each of their shape; 1/nm, 1/nm^2."""

    value: FloatArray
    d_offset: FloatArray
    d_sigma: FloatArray
    d_gamma: FloatArray


def line_profile(
    offset_nm: FloatArray,
    *,
    sigma_nm: float,
    gamma_nm: float,
    box_widths_nm: tuple[float, float],
    derivatives: bool = True,
) -> Profile:
    """Voigt profile (sigma > 0, gamma >= 0: half width of the Lorentz part) seen through two boxes.

    offset_nm : position minus line centre, any shape, nm. Without derivatives only `value` means anything.
    """
    if not sigma_nm > 0.0 or gamma_nm < 0.0:
        raise ValueError(f"sigma must be > 0 and gamma >= 0, got {sigma_nm} and {gamma_nm}")
    kernel = box_kernel(box_widths_nm=box_widths_nm, sigma_nm=sigma_nm)
    points = np.asarray(offset_nm, dtype=np.float64)[..., None] + kernel.offsets_nm
    columns = 4 if derivatives else 1
    levels = _levels(points / sigma_nm, gamma_nm / sigma_nm, kernel.order, columns)
    # in units of sigma every level down is one more power of it; the antiderivatives bring it back
    made = sigma_nm ** (kernel.order - 1) * np.einsum("...kc,k->c...", levels, kernel.weights)
    if not derivatives:
        return Profile(made[0], made[0], made[0], made[0])
    per_sigma = made[1:] / sigma_nm
    return Profile(value=made[0], d_offset=per_sigma[0], d_sigma=per_sigma[2], d_gamma=-per_sigma[1])


@dataclass(frozen=True, slots=True)
class ObservedWidth:
    """FWHM of a line seen through the boxes, nm, and its derivatives in sigma and gamma."""

    fwhm_nm: float
    d_sigma: float
    d_gamma: float


def observed_width(*, sigma_nm: float, gamma_nm: float, box_widths_nm: tuple[float, float]) -> ObservedWidth:
    """FWHM by Newton's method from a bracket; the profile is symmetric and single-peaked."""

    def at(x: FloatArray) -> Profile:
        return line_profile(x, sigma_nm=sigma_nm, gamma_nm=gamma_nm, box_widths_nm=box_widths_nm)

    ladder = np.linspace(0.0, voigt_fwhm(sigma_nm, gamma_nm) + sum(box_widths_nm), 200)
    values = at(ladder).value
    below = int(np.argmax(values < 0.5 * values[0]))
    share = (values[below - 1] - 0.5 * values[0]) / (values[below - 1] - values[below])
    place = ladder[below - 1] + share * (ladder[1] - ladder[0])
    for _ in range(4):
        made = at(np.array([0.0, place]))
        place -= float((made.value[1] - 0.5 * made.value[0]) / made.d_offset[1])
    # P(w/2) = P(0)/2 differentiated
    slope = made.d_offset[1]
    return ObservedWidth(
        fwhm_nm=float(2.0 * place),
        d_sigma=float(2.0 * (0.5 * made.d_sigma[0] - made.d_sigma[1]) / slope),
        d_gamma=float(2.0 * (0.5 * made.d_gamma[0] - made.d_gamma[1]) / slope),
    )


def mode_width(*, sigma_nm: float, gamma_nm: float, box_widths_nm: tuple[float, float]) -> float:
    """Width s of the shape modes: s^2 = sigma^2 + boxes' variance + (the Gaussian sigma of FWHM 2 gamma)^2.

    An approximation: a Lorentz part has no variance. The modes stand for what is unknown anyway.
    """
    boxes = sum(width**2 for width in box_widths_nm) / 12.0
    return float(np.sqrt(sigma_nm**2 + boxes + (_LORENTZ_AS_SIGMA * gamma_nm) ** 2))


@dataclass(frozen=True, slots=True)
class ShapeModes:
    """Skewness and kurtosis modes: (2, ...) values, derivatives in the offset and in s; 1/nm and 1/nm^2."""

    value: FloatArray
    d_offset: FloatArray
    d_width: FloatArray


def shape_modes(offset_nm: FloatArray, *, width_nm: float | FloatArray) -> ShapeModes:
    """Gauss-Hermite functions He3(u) e^(-u^2/2) and He4(u) e^(-u^2/2), u = offset/width, of no area.

    Scaled so that a coefficient of 1 is as high as the peak of a Gaussian of the same width: a coefficient
    of 0.01 is a shape error of 1 % of the peak. They are correlated over the whole line, which is what
    distinguishes a wrong shape from noise: more light does not average it away.
    """
    u = np.asarray(offset_nm, dtype=np.float64) / width_nm
    bell = np.exp(-0.5 * u * u) / (width_nm * np.sqrt(2.0 * np.pi))
    u2 = u * u
    third, fourth, fifth = u * (u2 - 3.0), u2 * (u2 - 6.0) + 3.0, u * (u2 * (u2 - 10.0) + 15.0)
    high, low = bell / _PEAK_3, bell / _PEAK_4
    value = np.stack([third * high, fourth * low])
    # d/du of He_n e^(-u^2/2) is -He_(n+1) e^(-u^2/2)
    d_u = np.stack([-fourth * high, -fifth * low])
    return ShapeModes(value, d_u / width_nm, -(value + u * d_u) / width_nm)


# max of |He3| e^(-u^2/2) is at u^2 = 3 - sqrt 6, where He4 vanishes; of |He4| at u = 0
_U3 = np.sqrt(3.0 - np.sqrt(6.0))
_PEAK_3 = _U3 * (3.0 - _U3**2) * np.exp(-0.5 * _U3**2)
_PEAK_4 = 3.0


def _levels(x: FloatArray, gamma: float, order: int, columns: int) -> FloatArray:
    """(..., columns) at x (...), everything in units of sigma: Re f of level -order, Re and Im of level
    1 - order, Re of level 2 - order."""
    distance = np.abs(x)
    steps = np.arcsinh(distance) / _STEP
    cell = steps.astype(np.int64)
    grid = np.sinh(_STEP * np.arange(int(cell.max(initial=0)) + 2))
    values = _table(grid, gamma, order)
    low, slope = values[:, _VALUES[:columns]], values[:, _SLOPES[:columns]]
    # cubic Hermite in every cell, as polynomials in x - grid
    width = np.diff(grid)[:, None]
    rise = np.diff(low, axis=0) / width
    second = (3.0 * rise - 2.0 * slope[:-1] - slope[1:]) / width
    third = (slope[:-1] + slope[1:] - 2.0 * rise) / width**2
    cubic = np.stack([low[:-1], slope[:-1], second, third], axis=1)[cell]
    along = (distance - grid[cell])[..., None]
    read = cubic[..., 3, :]
    for power in (2, 1, 0):
        read = read * along + cubic[..., power, :]
    # f(-x) is the conjugate of f(x), and each level changes the sign once more
    signs = np.array([1.0, -1.0, 1.0, 1.0])[:columns] * (-1.0) ** order
    made: FloatArray = np.where(x[..., None] < 0.0, signs * read, read)
    return made


_VALUES, _SLOPES = [0, 1, 5, 2], [1, 2, 6, 3]


def _table(grid: FloatArray, gamma: float, order: int) -> FloatArray:
    """(M, 8) on the grid: real parts of the levels -order..3-order, then their imaginary parts.

    Antiderivatives are 0 at 0.
    """
    from scipy.special import wofz

    z = (grid + 1j * gamma) / _ROOT2
    w = [wofz(z)]
    w.append(-2.0 * z * w[0] + 2j / np.sqrt(np.pi))
    for n in range(2, 4):
        w.append(-2.0 * z * w[n - 1] - 2.0 * (n - 1) * w[n - 2])
    levels = [w[n] / (np.sqrt(2.0 * np.pi) * _ROOT2**n) for n in range(4)]
    h = np.diff(grid)
    for _ in range(order):
        # exact integral of the quintic Hermite interpolant of the level, from its two derivatives
        f, d1, d2 = levels[0], levels[1], levels[2]
        piece = h / 2.0 * (f[:-1] + f[1:]) + h**2 / 10.0 * (d1[:-1] - d1[1:])
        piece += h**3 / 120.0 * (d2[:-1] + d2[1:])
        levels.insert(0, np.concatenate([np.zeros(1, dtype=np.complex128), np.cumsum(piece)]))
    made = np.array(levels[:4]).T
    return np.concatenate([made.real, made.imag], axis=1)


_ROOT2 = np.sqrt(2.0)
