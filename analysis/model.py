"""The rate expected at every position: one or two lines, known neighbours, background, dark, gains.

    light(x) = background(x) +- sum_l A_l [P(x - c_l) + sum_m a_m h_m(x - c_l)]      (minus: absorption)
    rate_i   = gain(group_i) exposure_i light(x_i) + dark
    mean_i   = rate_i (T_i - n_i tau) / dispersion_i,       data_i = n_i / dispersion_i

P is the line seen through the slits with its components, h_m the shape modes (coefficients common to all
lines). Line 1 is the main line at centre_nm (the strength-weighted mean of its components), line 2 stands at
centre_nm + separation_nm with ratio times its area; known lines keep their distance from the main line.
Counts of variance phi times their mean, divided by phi, weigh as Poisson counts do (quasi-likelihood:
Wedderburn 1974, Biometrika 61, 439). Everything is analytic, the Jacobian included.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from analysis import reversal
from analysis.background import Background, LinearBackground, StretchedBackground, stretch_of
from analysis.counting import Counts, FloatArray, IntArray, live_time_s
from analysis.line import Shape, bare_line, components, observed_line
from analysis.profile import FWHM_PER_SIGMA
from analysis.question import Feature

KNOWN_SHIFT_FWHM = 0.02
"""Standard deviation of the known lines' common shift against the main line, in expected FWHM."""
GAIN_SD = 0.1
"""Standard deviation of a dither group's gain about 1: lamps drift 0.1 to 1 % and more while they warm up
(common practice). It holds a group that has seen no line yet; one that has is known to a few per cent and
better, and there the prior moves it by less than its uncertainty."""
_TINY = 1e-12


@dataclass(frozen=True)
class FeatureModel:
    """One or two lines over the visited positions of `counts`. ValueError if nothing was counted.

    names, lower, upper, prior_mean, prior_sd : (P,) the parameters, their bounds, their Gaussian priors
    (infinite sd: none). with_dark: fit the closed-shutter counts jointly, as a last row of their own.
    with_modes_bounded: shape modes are free within two allowances instead of drawn to zero by their prior,
    and gains have no prior either: a rival of a claim may be anything that is possible.
    is_reversed: the main line is self-reversed (one line only; `analysis.reversal`).
    x, observed, gate, group, sigma : (N,) of the visited positions; observed is counts over dispersion.
    """

    counts: Counts
    feature: Feature
    lines: int
    with_dark: bool = True
    with_modes_bounded: bool = False
    background: Background | None = None
    is_reversed: bool = False
    names: tuple[str, ...] = field(init=False)
    lower: FloatArray = field(init=False)
    upper: FloatArray = field(init=False)
    prior_mean: FloatArray = field(init=False)
    prior_sd: FloatArray = field(init=False)

    def __post_init__(self) -> None:
        self._refuse_misuse()
        counts, feature = self.counts, self.feature
        visited = counts.gate_s > 0.0
        if not visited.any():
            raise ValueError("no position was visited: nothing to fit")
        put = object.__setattr__
        x = counts.wavelength_nm[visited]
        ones = np.ones(x.size)
        put(self, "x", x)
        put(self, "registered", counts.counts[visited])
        put(self, "gate", counts.gate_s[visited])
        put(self, "group", counts.group[visited])
        put(self, "sigma", None if counts.sigma is None else counts.sigma[visited])
        put(self, "exposure", ones if counts.exposure is None else counts.exposure[visited])
        put(self, "dispersion", ones if counts.dispersion is None else counts.dispersion[visited])
        put(self, "observed", self.registered / self.dispersion)
        if self.background is None:
            floor, sloping = 0.0 if counts.sigma is None else -np.inf, feature.background == "slope"
            if len(feature.windows_nm) > 1:
                put(self, "background", StretchedBackground(feature.windows_nm, sloping, floor))
            else:
                put(self, "background", LinearBackground(x[0], x[-1], sloping, floor))
        self._list_parameters()

    # the arrays of the visited positions, set once above
    x: FloatArray = field(init=False, repr=False)
    observed: FloatArray = field(init=False, repr=False)
    registered: FloatArray = field(init=False, repr=False)
    gate: FloatArray = field(init=False, repr=False)
    group: IntArray = field(init=False, repr=False)
    sigma: FloatArray | None = field(init=False, repr=False)
    exposure: FloatArray = field(init=False, repr=False)
    dispersion: FloatArray = field(init=False, repr=False)
    index: dict[str, int] = field(init=False, repr=False)

    def _refuse_misuse(self) -> None:
        feature = self.feature
        if self.lines not in (1, 2):
            raise ValueError(f"a feature has 1 or 2 lines, got {self.lines}")
        if self.is_reversed and self.lines != 1:
            raise ValueError("a self-reversed line is one line")
        for name, allowed in (
            ("shape", ("voigt", "gaussian")),
            ("kind", ("emission", "absorption")),
            ("widths", ("equal", "tied", "free")),
            ("self_reversal", ("excluded", "possible")),
        ):
            if getattr(feature, name) not in allowed:
                known = " or ".join(repr(word) for word in allowed)
                raise ValueError(f"{name} must be {known}, got {getattr(feature, name)!r}")
        components(feature)  # refuses what is no pattern
        if not feature.width_ratio > 0.0:
            raise ValueError(f"width_ratio must be > 0, got {feature.width_ratio:g}")

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
        limit = feature.line_fwhm_limit_nm
        narrow = 0.1 * (part if limit is None else min(part, limit)) / FWHM_PER_SIGMA
        # of a reversed line the emitter is hot: a limit on the line's own width is not about it
        broad = 4.0 * fwhm if limit is None or self.is_reversed else limit / FWHM_PER_SIGMA
        add("sigma_nm", narrow, broad)
        if self.lines == 2 and feature.widths == "free":
            add("sigma2_nm", narrow, broad)
        if self.is_reversed:
            shift = reversal.FURTHEST_SHIFT
            add("reversal_depth", 0.0, reversal.HIGHEST_DEPTH)
            add("absorber_width", reversal.NARROWEST, reversal.WIDEST)
            add("absorber_shift", -shift, shift)
        if feature.shape == "voigt":
            add("gamma_nm", 0.0, 2.0 * fwhm if limit is None or self.is_reversed else 0.5 * limit)
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
        made: FloatArray = np.maximum(
            self.brightness(values) * light + self.value(values, "dark_per_s"), _TINY
        )
        return made

    def live_s(self, values: FloatArray) -> FloatArray:
        """(N,) gate time less the dead time of what was registered, s, over the dispersion."""
        if self.sigma is not None:
            return self.gate
        tau = self.value(values, "dead_time_s", self.counts.dead_time_s)
        made: FloatArray = live_time_s(self.registered, self.gate, dead_time_s=tau) / self.dispersion
        return made

    def evaluate(self, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Mean (N,) and Jacobian (N, P); with dark one more row."""
        light, d_light = self._light(values, derivatives=True)
        gain = self.brightness(values)
        live = self.live_s(values)
        rate = gain * light + self.value(values, "dark_per_s")
        if self.sigma is None:
            rate = np.maximum(rate, _TINY)
        jacobian = (gain * live)[:, None] * d_light
        exposed = live * (self.exposure * light)
        for number in range(1, self.counts.groups):
            jacobian[:, self.index[f"gain_{number}"]] = np.where(self.group == number, exposed, 0.0)
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
        """(N,) data expected from lines alone: what they give or, in absorption, take."""
        light, _ = self._light(values, derivatives=False)
        assert self.background is not None
        base, _ = self.background.evaluate(self.x, self._background_values(values))
        made: FloatArray = self.brightness(values) * (self.sign * (light - base)) * self.live_s(values)
        return made

    def added_light(self, values: FloatArray, places_nm: FloatArray) -> FloatArray:
        """(M, N) how one more line of area 1 at each of M places would change the data; no shape modes."""
        profile = bare_line(
            self.x - places_nm[:, None],
            self.feature,
            sigma_nm=float(values[self.index["sigma_nm"]]),
            gamma_nm=self.value(values, "gamma_nm"),
        )
        made: FloatArray = self.sign * profile * self.brightness(values) * self.live_s(values)
        return made

    @property
    def sign(self) -> float:
        """1 where lines add light, -1 where they take it."""
        return -1.0 if self.feature.kind == "absorption" else 1.0

    @property
    def windows_nm(self) -> tuple[tuple[float, float], ...]:
        """The ends of every stretch in which something was counted."""
        if len(self.feature.windows_nm) < 2:
            return ((float(self.x[0]), float(self.x[-1])),)
        at = stretch_of(self.feature.windows_nm, self.x)
        return tuple(
            (float(self.x[at == k].min()), float(self.x[at == k].max())) for k in np.unique(at).tolist()
        )

    def gains(self, values: FloatArray) -> FloatArray:
        """(G,) brightness of the dither groups against the first."""
        first = self.index.get("gain_1")
        if first is None:
            return np.ones(1)
        return np.concatenate([np.ones(1), values[first : first + self.counts.groups - 1]])

    def brightness(self, values: FloatArray) -> FloatArray:
        """(N,) gain of the position's dither group times its exposure."""
        made: FloatArray = self.gains(values)[self.group] * self.exposure
        return made

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
        casts = self._casts(centres.size)
        shapes = [self._shape(offsets[cast.lines], cast, values, derivatives) for cast in casts]
        value = np.empty(offsets.shape)
        for cast, shape in zip(casts, shapes, strict=True):
            value[cast.lines] = shape.value
        assert self.background is not None
        base, d_base = self.background.evaluate(self.x, self._background_values(values))
        light = self.sign * (areas @ value) + base
        if not derivatives:
            return light, np.empty((0, 0))
        jacobian = np.zeros((self.x.size, len(self.names)))
        slope = np.empty(offsets.shape)
        for cast, shape in zip(casts, shapes, strict=True):
            mine = areas[cast.lines]
            slope[cast.lines] = -mine[:, None] * shape.d_offset
            jacobian[:, index[cast.sigma]] += cast.sigma_factor * (mine @ shape.d_sigma)
            if "gamma_nm" in index:
                jacobian[:, index["gamma_nm"]] += cast.gamma_factor * (mine @ shape.d_gamma)
            if "skewness" in index:
                jacobian[:, index["skewness"]] += mine @ shape.modes[0]
                jacobian[:, index["kurtosis"]] += mine @ shape.modes[1]
            if shape.d_reversal is not None:
                start = index[reversal.NAMES[0]]
                jacobian[:, start : start + 3] = (mine @ shape.d_reversal).T
        jacobian[:, index["area"]] = value[0]
        jacobian[:, index["centre_nm"]] = slope.sum(axis=0)
        if self.lines == 2:
            jacobian[:, index["area"]] += ratio * value[1]
            jacobian[:, index["ratio"]] = area * value[1]
            jacobian[:, index["separation_nm"]] = slope[1]
        if known.size:
            jacobian[:, first : first + known.size] = value[self.lines :].T
            jacobian[:, index["known_shift_nm"]] = slope[self.lines :].sum(axis=0)
        if self.sign < 0.0:
            jacobian = -jacobian
        start = index[self.background.names[0]]
        jacobian[:, start : start + d_base.shape[1]] = d_base
        return light, jacobian

    def _casts(self, lines: int) -> list[_Cast]:
        """Which lines share a shape."""
        rest = [line for line in range(lines) if line != 1 or self.lines == 1]
        if self.is_reversed:
            return [_Cast([0], reverses=True), *([_Cast(rest[1:])] if lines > 1 else [])]
        if self.lines == 2 and self.feature.widths == "free":
            return [_Cast(rest), _Cast([1], sigma="sigma2_nm")]
        if self.lines == 2 and self.feature.widths == "tied":
            ratio = self.feature.width_ratio
            return [_Cast(rest), _Cast([1], sigma_factor=ratio, gamma_factor=ratio)]
        return [_Cast(slice(None))]

    def _shape(self, offsets: FloatArray, cast: _Cast, values: FloatArray, derivatives: bool) -> Shape:
        modes = None
        if "skewness" in self.index:
            modes = (values[self.index["skewness"]], values[self.index["kurtosis"]])
        start = self.index.get(reversal.NAMES[0], 0)
        return observed_line(
            offsets,
            self.feature,
            sigma_nm=cast.sigma_factor * values[self.index[cast.sigma]],
            gamma_nm=cast.gamma_factor * self.value(values, "gamma_nm"),
            mode_shares=modes,
            reversal=values[start : start + 3] if cast.reverses else None,
            derivatives=derivatives,
        )


@dataclass(frozen=True, slots=True)
class _Cast:
    """Lines of one shape, and where its widths come from."""

    lines: list[int] | slice
    sigma: str = "sigma_nm"
    sigma_factor: float = 1.0
    gamma_factor: float = 1.0
    reverses: bool = False


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
        elif name == "absorber_width":
            made[place] = 0.6
        elif name == "dead_time_s":
            made[place] = model.counts.dead_time_s
        elif name == "dark_per_s":
            made[place] = model.counts.dark_counts / model.counts.dark_gate_s
    return made
