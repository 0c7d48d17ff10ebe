"""The rate expected at every position: one or two lines, known neighbours, background, dark, gains.

    light(x) = sum_l A_l [P(x - c_l) + sum_m a_m h_m(x - c_l)] + background(x)
    rate_i   = gain(group_i) light(x_i) + dark,       mean_i = rate_i (T_i - n_i tau)

P is the line seen through the slits, h_m the shape modes (coefficients common to all lines). Line 1 is the
main line at centre_nm, line 2 stands at centre_nm + separation_nm with ratio times its area; known lines keep
their distance from the main line. Everything is analytic, the Jacobian included.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from analysis.counting import Counts, FloatArray, IntArray, live_time_s
from analysis.profile import FWHM_PER_SIGMA, line_profile, mode_width, shape_modes
from analysis.question import Feature

KNOWN_SHIFT_FWHM = 0.02
"""Standard deviation of the known lines' common shift against the main line, in expected FWHM."""
GAIN_SD = 0.1
"""Standard deviation of a dither group's gain about 1: lamps drift 0.1 to 1 % and more while they warm up
(common practice). It holds a group that has seen no line yet; one that has is known to a few per cent and
better, and there the prior moves it by less than its uncertainty."""
_TINY = 1e-12


class Background(Protocol):
    """Light that belongs to no line, as a rate over position."""

    @property
    def names(self) -> tuple[str, ...]: ...

    @property
    def lower(self) -> tuple[float, ...]: ...

    def evaluate(self, wavelength_nm: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Rate (N,) and its Jacobian (N, number of parameters)."""
        ...


@dataclass(frozen=True, slots=True)
class LinearBackground:
    """Flat, or a slope given by its rates at both ends of the window: never negative if neither is."""

    left_nm: float
    right_nm: float
    sloping: bool
    floor: float = 0.0
    names: tuple[str, ...] = field(init=False)
    lower: tuple[float, ...] = field(init=False)

    def __post_init__(self) -> None:
        names = ("background_left_per_s", "background_right_per_s") if self.sloping else ("background_per_s",)
        object.__setattr__(self, "names", names)
        object.__setattr__(self, "lower", (self.floor,) * len(names))

    def evaluate(self, wavelength_nm: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        if not self.sloping:
            return np.full(wavelength_nm.size, values[0]), np.ones((wavelength_nm.size, 1))
        span = self.right_nm - self.left_nm
        share = (wavelength_nm - self.left_nm) / (span if span > 0.0 else 1.0)
        basis = np.stack([1.0 - share, share], axis=1)
        return basis @ values, basis


@dataclass(frozen=True)
class FeatureModel:
    """One or two lines over the visited positions of `counts`. ValueError if nothing was counted.

    names, lower, upper, prior_mean, prior_sd : (P,) the parameters, their bounds, their Gaussian priors
    (infinite sd: none). with_dark: fit the closed-shutter counts jointly, as a last row of their own.
    with_modes_bounded: shape modes are free within two allowances instead of drawn to zero by their prior,
    and gains have no prior either: a rival of a claim may be anything that is possible.
    """

    counts: Counts
    feature: Feature
    lines: int
    with_dark: bool = True
    with_modes_bounded: bool = False
    background: Background | None = None
    names: tuple[str, ...] = field(init=False)
    lower: FloatArray = field(init=False)
    upper: FloatArray = field(init=False)
    prior_mean: FloatArray = field(init=False)
    prior_sd: FloatArray = field(init=False)

    def __post_init__(self) -> None:
        if self.lines not in (1, 2):
            raise ValueError(f"a feature has 1 or 2 lines, got {self.lines}")
        if self.feature.shape not in ("voigt", "gaussian"):
            raise ValueError(f"shape must be 'voigt' or 'gaussian', got {self.feature.shape!r}")
        counts, feature = self.counts, self.feature
        visited = counts.gate_s > 0.0
        if not visited.any():
            raise ValueError("no position was visited: nothing to fit")
        put = object.__setattr__
        self_x = counts.wavelength_nm[visited]
        put(self, "x", self_x)
        put(self, "observed", counts.counts[visited])
        put(self, "gate", counts.gate_s[visited])
        put(self, "group", counts.group[visited])
        put(self, "sigma", None if counts.sigma is None else counts.sigma[visited])
        if self.background is None:
            floor = 0.0 if counts.sigma is None else -np.inf
            made = LinearBackground(self_x[0], self_x[-1], feature.background == "slope", floor)
            put(self, "background", made)
        self._list_parameters()

    # the arrays of the visited positions, set once above
    x: FloatArray = field(init=False, repr=False)
    observed: FloatArray = field(init=False, repr=False)
    gate: FloatArray = field(init=False, repr=False)
    group: IntArray = field(init=False, repr=False)
    sigma: FloatArray | None = field(init=False, repr=False)
    index: dict[str, int] = field(init=False, repr=False)

    def _list_parameters(self) -> None:
        counts, feature = self.counts, self.feature
        fwhm, inf = feature.fwhm_nm, np.inf
        part = max(feature.line_fwhm_nm, 0.02 * fwhm)
        rows: list[tuple[str, float, float, float, float]] = [("area", 0.0, inf, 0.0, inf)]

        def add(name: str, low: float, high: float = inf, mean: float = 0.0, sd: float = inf) -> None:
            rows.append((name, low, high, mean, sd))

        add("centre_nm", self.x[0], self.x[-1])
        if self.lines == 2:
            add("ratio", 0.0, inf)
            reach = self.x[-1] - self.x[0] if feature.reach_nm is None else feature.reach_nm
            add("separation_nm", -reach, reach)
        add("sigma_nm", 0.1 * part / FWHM_PER_SIGMA, 4.0 * fwhm)
        if self.lines == 2 and feature.widths == "free":
            add("sigma2_nm", 0.1 * part / FWHM_PER_SIGMA, 4.0 * fwhm)
        if feature.shape == "voigt":
            add("gamma_nm", 0.0, 2.0 * fwhm)
        for number in range(len(feature.known_lines_nm)):
            add(f"known_{number + 1}_area", 0.0)
        if feature.known_lines_nm:
            add("known_shift_nm", -inf, sd=KNOWN_SHIFT_FWHM * fwhm)
        assert self.background is not None
        for name, low in zip(self.background.names, self.background.lower, strict=True):
            add(name, low)
        if self.has_dark:
            add("dark_per_s", 0.0)
        for number in range(1, counts.groups):
            add(f"gain_{number}", 0.0, mean=1.0, sd=np.inf if self.with_modes_bounded else GAIN_SD)
        if counts.sigma is None and counts.dead_time_s > 0.0 and counts.dead_time_u_s > 0.0:
            tau, u = counts.dead_time_s, counts.dead_time_u_s
            if self.with_modes_bounded:
                add("dead_time_s", max(0.0, tau - 2.0 * u), tau + 2.0 * u)
            else:
                add("dead_time_s", max(0.0, tau - 5.0 * u), tau + 5.0 * u, tau, u)
        if feature.shape_allowance > 0.0:
            allowance = feature.shape_allowance
            for name in ("skewness", "kurtosis"):
                if self.with_modes_bounded:
                    add(name, -2.0 * allowance, 2.0 * allowance)
                else:
                    add(name, -5.0 * allowance, 5.0 * allowance, 0.0, allowance)
        put = object.__setattr__
        put(self, "names", tuple(row[0] for row in rows))
        for place, key in enumerate(("lower", "upper", "prior_mean", "prior_sd"), start=1):
            put(self, key, np.array([row[place] for row in rows]))
        put(self, "index", {name: place for place, name in enumerate(self.names)})

    @property
    def has_dark(self) -> bool:
        """Whether the closed-shutter counts are a row of the fit."""
        return self.with_dark and self.counts.dark_gate_s > 0.0 and self.counts.sigma is None

    @property
    def data(self) -> FloatArray:
        """(N,) or, with dark, (N + 1,) what was counted."""
        return np.append(self.observed, self.counts.dark_counts) if self.has_dark else self.observed

    def value(self, values: FloatArray, name: str, default: float = 0.0) -> float:
        """One parameter by name; `default` where the model has none of it."""
        place = self.index.get(name)
        return default if place is None else float(values[place])

    def rate(self, values: FloatArray) -> FloatArray:
        """(N,) expected true rate, 1/s, at the visited positions, without Jacobian."""
        light, _ = self._light(values, derivatives=False)
        gain = self.gains(values)[self.group]
        made: FloatArray = np.maximum(gain * light + self.value(values, "dark_per_s"), _TINY)
        return made

    def live_s(self, values: FloatArray) -> FloatArray:
        """(N,) gate time less the dead time of what was registered, s."""
        if self.sigma is not None:
            return self.gate
        tau = self.value(values, "dead_time_s", self.counts.dead_time_s)
        return live_time_s(self.observed, self.gate, dead_time_s=tau)

    def evaluate(self, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Mean (N,) and Jacobian (N, P); with dark one more row."""
        light, d_light = self._light(values, derivatives=True)
        gain = self.gains(values)[self.group]
        live = self.live_s(values)
        rate = gain * light + self.value(values, "dark_per_s")
        if self.sigma is None:
            rate = np.maximum(rate, _TINY)
        jacobian = (gain * live)[:, None] * d_light
        for number in range(1, self.counts.groups):
            jacobian[:, self.index[f"gain_{number}"]] = np.where(self.group == number, live * light, 0.0)
        if "dead_time_s" in self.index:
            jacobian[:, self.index["dead_time_s"]] = -rate * self.observed
        mean = rate * live
        if self.has_dark:
            dark, gate = self.index["dark_per_s"], self.counts.dark_gate_s
            jacobian[:, dark] = live
            row = np.zeros(len(self.names))
            row[dark] = gate
            mean = np.append(mean, max(float(values[dark]) * gate, _TINY))
            jacobian = np.vstack([jacobian, row])
        return mean, jacobian

    def background_rate(self, values: FloatArray, wavelength_nm: float) -> float:
        """Background rate at one place, 1/s."""
        assert self.background is not None
        made, _ = self.background.evaluate(np.array([wavelength_nm]), self._background_values(values))
        return float(made[0])

    def line_light(self, values: FloatArray) -> FloatArray:
        """(N,) expected counts that belong to lines, without background and dark."""
        light, _ = self._light(values, derivatives=False)
        assert self.background is not None
        base, _ = self.background.evaluate(self.x, self._background_values(values))
        made: FloatArray = self.gains(values)[self.group] * (light - base) * self.live_s(values)
        return made

    def gains(self, values: FloatArray) -> FloatArray:
        """(G,) brightness of the dither groups against the first."""
        first = self.index.get("gain_1")
        if first is None:
            return np.ones(1)
        return np.concatenate([np.ones(1), values[first : first + self.counts.groups - 1]])

    def _background_values(self, values: FloatArray) -> FloatArray:
        assert self.background is not None
        start = self.index[self.background.names[0]]
        return values[start : start + len(self.background.names)]

    def _light(self, values: FloatArray, *, derivatives: bool) -> tuple[FloatArray, FloatArray]:
        """Light (N,) and, on demand, its Jacobian (N, P)."""
        index, feature = self.index, self.feature
        area, centre = values[index["area"]], values[index["centre_nm"]]
        ratio, separation = self.value(values, "ratio"), self.value(values, "separation_nm")
        known = np.asarray(feature.known_lines_nm) - feature.wavelength_nm
        centres = centre + np.concatenate([[0.0, separation][: self.lines], known])
        areas = np.array([area, area * ratio][: self.lines])
        if known.size:
            first = index["known_1_area"]
            areas = np.concatenate([areas, values[first : first + known.size]])
            centres[self.lines :] += values[index["known_shift_nm"]]
        offsets = self.x - centres[:, None]
        sigma, gamma = values[index["sigma_nm"]], self.value(values, "gamma_nm")
        shapes = [self._shape(offsets, sigma, gamma, values, derivatives)]
        owner = np.zeros(centres.size, dtype=np.int64)
        if "sigma2_nm" in index:
            owner[1] = 1
            shapes.append(self._shape(offsets, values[index["sigma2_nm"]], gamma, values, derivatives))
        value = np.stack([shapes[own].value[line] for line, own in enumerate(owner)])
        assert self.background is not None
        base, d_base = self.background.evaluate(self.x, self._background_values(values))
        light = areas @ value + base
        if not derivatives:
            return light, np.empty((0, 0))
        jacobian = np.zeros((self.x.size, len(self.names)))
        slope = -np.stack([areas[line] * shapes[own].d_offset[line] for line, own in enumerate(owner)])
        jacobian[:, index["area"]] = value[0]
        jacobian[:, index["centre_nm"]] = slope.sum(axis=0)
        if self.lines == 2:
            jacobian[:, index["area"]] += ratio * value[1]
            jacobian[:, index["ratio"]] = area * value[1]
            jacobian[:, index["separation_nm"]] = slope[1]
        if known.size:
            jacobian[:, first : first + known.size] = value[self.lines :].T
            jacobian[:, index["known_shift_nm"]] = slope[self.lines :].sum(axis=0)
        for own, name in enumerate(("sigma_nm", "sigma2_nm")[: len(shapes)]):
            mine = np.where(owner == own, areas, 0.0)
            jacobian[:, index[name]] = mine @ shapes[own].d_sigma
            if "gamma_nm" in index:
                jacobian[:, index["gamma_nm"]] += mine @ shapes[own].d_gamma
            if "skewness" in index:
                jacobian[:, index["skewness"]] += mine @ shapes[own].modes[0]
                jacobian[:, index["kurtosis"]] += mine @ shapes[own].modes[1]
        start = index[self.background.names[0]]
        jacobian[:, start : start + d_base.shape[1]] = d_base
        return light, jacobian

    def _shape(
        self, offsets: FloatArray, sigma: float, gamma: float, values: FloatArray, derivatives: bool
    ) -> _Shape:
        boxes = self.feature.box_widths_nm
        profile = line_profile(
            offsets, sigma_nm=sigma, gamma_nm=gamma, box_widths_nm=boxes, derivatives=derivatives
        )
        if "skewness" not in self.index:
            none = np.empty((0, *offsets.shape))
            return _Shape(profile.value, profile.d_offset, profile.d_sigma, profile.d_gamma, none)
        width = mode_width(sigma_nm=sigma, gamma_nm=gamma, box_widths_nm=boxes)
        modes = shape_modes(offsets, width_nm=width)
        skewness, kurtosis = values[self.index["skewness"]], values[self.index["kurtosis"]]

        def mixed(part: FloatArray) -> FloatArray:
            made: FloatArray = skewness * part[0] + kurtosis * part[1]
            return made

        value = profile.value + mixed(modes.value)
        if not derivatives:
            return _Shape(value, value, value, value, modes.value)
        d_width = mixed(modes.d_width)
        return _Shape(
            value=value,
            d_offset=profile.d_offset + mixed(modes.d_offset),
            d_sigma=profile.d_sigma + d_width * (sigma / width),
            d_gamma=profile.d_gamma + d_width * (gamma / width * (2.0 / FWHM_PER_SIGMA) ** 2),
            modes=modes.value,
        )


@dataclass(frozen=True, slots=True)
class _Shape:
    """Profile and modes together, (L, N) each; modes (2, L, N). Without derivatives only value and modes."""

    value: FloatArray
    d_offset: FloatArray
    d_sigma: FloatArray
    d_gamma: FloatArray
    modes: FloatArray


def vector(
    model: FeatureModel, values: dict[str, float], default: Sequence[float] | None = None
) -> FloatArray:
    """Parameter vector (P,) from names; ValueError on a name the model has not."""
    unknown = sorted(set(values) - set(model.names))
    if unknown:
        raise ValueError(f"the model has no parameter {', '.join(unknown)}; it has {', '.join(model.names)}")
    made = np.array(neutral(model) if default is None else default, dtype=np.float64)
    for name, value in values.items():
        made[model.index[name]] = value
    return np.clip(made, model.lower, model.upper)


def neutral(model: FeatureModel) -> FloatArray:
    """Where parameters stand before anything is known: no lines, no modes, gains 1, widths as expected."""
    feature, made = model.feature, np.zeros(len(model.names))
    sigma = max(feature.line_fwhm_nm, 0.05 * feature.fwhm_nm) / FWHM_PER_SIGMA
    for place, name in enumerate(model.names):
        if name.startswith("gain_"):
            made[place] = 1.0
        elif name in ("sigma_nm", "sigma2_nm"):
            made[place] = 0.8 * sigma if feature.shape == "voigt" else sigma
        elif name == "gamma_nm":
            made[place] = 0.2 * sigma
        elif name == "centre_nm":
            made[place] = feature.wavelength_nm
        elif name == "dead_time_s":
            made[place] = model.counts.dead_time_s
        elif name == "dark_per_s":
            made[place] = model.counts.dark_counts / model.counts.dark_gate_s
    return made
