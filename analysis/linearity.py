"""Is the detector linear? The same feature twice: plain, and through a neutral attenuator put in by hand.

At matching positions the true rates are s_i + d and t s_i + d': the attenuator's transmission t need not be
known, because a linear detector leaves one factor between the two runs whatever the rate. What is left of it
tells the dead time (or the curvature of a current): with c(I) the true rate behind a recorded one,

    D_i = [c(I'_i) - d'] - t_g [c(I(x_i - delta_i)) - d] = 0
    c(I) = I/(1 - I tau) for pulses,  c(I) = I (1 + kappa I) for currents

One t_g for each dither group (the lamp drifts between sweeps) and one shift delta between the runs, because a
drive finds its mark to a step or so; with it the drive's periodic errors meet the feature at another phase,
so a sine of each known period is added to it. Shifts are odd about a line where dead time is even: they do
not stand for each other.
Both runs have noise: a structural relation, solved with the derivatives and variances taken at the s_i that
both runs together make likeliest, which leaves no bias of first order (Fuller 1987, "Measurement Error
Models", section 1.3). Darks come in with their counts.

A counter whose dead time depends on the rate, or that piles up, bends otherwise than c does. So a term in the
cube of the rate is asked for as well: the highest rate up to which it is not needed is what the correction
is supported to.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.counting import LOAD_LIMIT, FloatArray, IntArray
from analysis.digits import with_uncertainty
from analysis.fit import inverse
from analysis.readings import AnalogueLaw, CounterLaw

FEWEST_POSITIONS = 12
TOO_FAINT = (
    "the two runs are too faint or too short to be laid over each other; measure a line as bright as the "
    "bench allows, for longer"
)
AGREES_WITHIN = 2.0
"""Standard uncertainties of the difference within which stated and found dead time agree."""
CLEAR_CUBE = 3.0
"""Standard uncertainties from which a term in the cube of the rate is taken for real."""
MOST_BEND = 0.5
"""Dead time times highest rate, or curvature times highest current, beyond which nothing is sought."""
LOWER_LIMIT = 0.8
"""The next limit tried is this share of the one that failed."""


@dataclass(frozen=True, slots=True)
class Arm:
    """One of the two runs: (N,) recorded counts and gates, s, by position; its dark, all dwells together."""

    counts: FloatArray
    gate_s: FloatArray
    dark_counts: float
    dark_gate_s: float


@dataclass(frozen=True, slots=True)
class Linearity:
    """What two runs say of the detector; uncertainties are standard ones, widened where the runs scatter.

    positions : used, of those at or below highest_per_s. transmission : mean over the dither groups.
    dead_time_s : of a counter, else None. curvature_per_a : kappa of a current, truly I (1 + kappa I) where I
    is read, else None. shift : of the plain run's feature against the other's, in units of position.
    scatter : sqrt(chi2/dof); cube : the cubic term in its standard uncertainties.
    highest_per_s : highest recorded rate (counts per s; A for currents) that the correction is supported
    to; is_whole : nothing measured had to be left out above it.
    """

    positions: int
    transmission: float
    transmission_u: float
    dead_time_s: float | None
    dead_time_u_s: float | None
    curvature_per_a: float | None
    curvature_u_per_a: float | None
    shift: float
    shift_u: float
    chi2: float
    dof: int
    scatter: float
    cube: float
    highest_per_s: float
    is_whole: bool


def compare(
    position: FloatArray,
    group: IntArray,
    *,
    plain: Arm,
    attenuated: Arm,
    law: CounterLaw | AnalogueLaw,
    periods: tuple[float, ...] = (),
) -> Linearity:
    """Transmission and dead time (or curvature) from both runs at N matching positions, strictly ascending.

    periods : of the drive's periodic errors, in units of position; those longer than half the comb are no
    more than a shift here and left out. ValueError below FEWEST_POSITIONS usable ones, for positions that do
    not ascend, or where the attenuated run holds no light. Positions at which the counter was dead for more
    than LOAD_LIMIT of the gate are left out.
    """
    recorded = plain.counts / plain.gate_s
    usable = np.ones(position.size, dtype=np.bool_)
    if isinstance(law, CounterLaw):
        usable = recorded * law.dead_time_s <= LOAD_LIMIT
    if int(usable.sum()) < FEWEST_POSITIONS:
        raise ValueError(
            f"only {int(usable.sum())} positions can be compared; at least {FEWEST_POSITIONS} are needed"
        )
    periods = tuple(period for period in periods if period < 0.5 * float(np.ptp(position)))
    if (np.diff(position) <= 0.0).any():
        raise ValueError("positions must ascend, no two of them alike")
    is_whole = bool(usable.all())
    highest = float(recorded[usable].max())
    first: _Fit | None = None
    while True:
        kept = usable & (recorded <= highest)
        if first is not None and int(kept.sum()) < FEWEST_POSITIONS:
            made = first  # no limit makes the cube go away: it is told as it stands
            break
        made = _fit(position, group, plain, attenuated, law, periods, kept)
        if abs(made.cube) < CLEAR_CUBE:
            break
        first, is_whole = first or made, False
        highest = float(recorded[kept & (recorded <= LOWER_LIMIT * highest)].max(initial=0.0))
    u = np.sqrt(np.diag(made.covariance)) * max(1.0, made.scatter)
    groups = made.groups
    mean_u = math.sqrt(float(made.covariance[:groups, :groups].sum())) / groups * max(1.0, made.scatter)
    bend, bend_u = float(made.values[groups]), float(u[groups])
    unit = 1.0 if isinstance(law, CounterLaw) else law.shot_noise_c
    is_counter = isinstance(law, CounterLaw)
    return Linearity(
        positions=made.positions,
        transmission=float(made.values[:groups].mean()),
        transmission_u=mean_u,
        dead_time_s=bend if is_counter else None,
        dead_time_u_s=bend_u if is_counter else None,
        curvature_per_a=None if is_counter else bend / unit,
        curvature_u_per_a=None if is_counter else bend_u / unit,
        shift=float(made.values[groups + 3]),
        shift_u=float(u[groups + 3]),
        chi2=made.chi2,
        dof=made.dof,
        scatter=made.scatter,
        cube=made.cube,
        highest_per_s=made.highest_per_s * (law.charge_unit_c if isinstance(law, AnalogueLaw) else 1.0),
        is_whole=is_whole,
    )


def in_words(found: Linearity, *, law: CounterLaw | AnalogueLaw) -> tuple[str, ...]:
    """Whether the bench file's dead time holds, what it should be, and how far the correction reaches."""
    said = [_of_the_counter(found, law) if isinstance(law, CounterLaw) else _of_the_current(found)]
    unit = "A" if isinstance(law, AnalogueLaw) else "counts per second"
    reach = f"The correction is supported up to {found.highest_per_s:.3g} {unit} as recorded"
    if abs(found.cube) >= CLEAR_CUBE:
        said.append(
            "No limit makes the two runs agree: a term in the cube of the rate stands at"
            f" {abs(found.cube):.1f} of its standard uncertainties. Look for a lamp that was not warm, an"
            " attenuator that is not neutral or that reflects, or light that comes past it."
        )
    elif found.is_whole:
        said.append(f"{reach}, the highest that was measured.")
    else:
        said.append(f"{reach}; brighter positions disagree or were beyond the limit and are left out.")
    if found.scatter > 1.5:
        said.append(
            f"The runs scatter {found.scatter:.1f} times as much as counting does: lamp or drive moved in"
            " them or between them. The uncertainties are widened by that."
        )
    return tuple(said)


def _of_the_counter(found: Linearity, law: CounterLaw) -> str:
    assert found.dead_time_s is not None
    assert found.dead_time_u_s is not None
    both = math.hypot(found.dead_time_u_s, law.dead_time_u_s)
    away = abs(found.dead_time_s - law.dead_time_s)
    stated = f"{1e9 * law.dead_time_s:.3g} ± {1e9 * law.dead_time_u_s:.2g} ns"
    measured = f"{with_uncertainty(1e9 * found.dead_time_s, 1e9 * found.dead_time_u_s)} ns"
    if away > AGREES_WITHIN * both:
        return (
            f"The dead time in the bench file, {stated}, does NOT hold: the two runs give {measured}. Write"
            f" dead_time_ns = {1e9 * found.dead_time_s:.3g} and dead_time_uncertainty_ns ="
            f" {1e9 * found.dead_time_u_s:.2g} into it."
        )
    text = f"The dead time in the bench file, {stated}, holds: the two runs give {measured}"
    if found.dead_time_u_s > law.dead_time_u_s > 0.0:
        return f"{text}, which knows it no better. A brighter plain run or a longer one would."
    return f"{text}."


def _of_the_current(found: Linearity) -> str:
    assert found.curvature_per_a is not None
    assert found.curvature_u_per_a is not None
    percent = 100.0 * found.curvature_per_a * found.highest_per_s
    percent_u = 100.0 * found.curvature_u_per_a * found.highest_per_s
    most = f"at {found.highest_per_s:.3g} A it strays {with_uncertainty(percent, percent_u)} % from a line"
    if abs(percent) > AGREES_WITHIN * percent_u:
        return f"The current is NOT linear: {most} (true over read, less one). Stay lower, or use less gain."
    return f"The current is linear: {most}, nothing clear."


@dataclass(frozen=True, slots=True)
class _Fit:
    """values, covariance : t of each group, bend, both darks, shift and its sines; rates in events per s."""

    values: FloatArray
    covariance: FloatArray
    groups: int
    chi2: float
    dof: int
    scatter: float
    cube: float
    positions: int
    highest_per_s: float


@dataclass(frozen=True, slots=True)
class _Rates:
    """Events per s of one arm, pedestal off; `noise` (N,) what has to be added to them for the variance."""

    rate: FloatArray
    gate_s: FloatArray
    dark: float
    dark_u: float
    noise: float


def _rates(arm: Arm, law: CounterLaw | AnalogueLaw) -> _Rates:
    unit, noise = 1.0, 0.0
    if isinstance(law, AnalogueLaw):
        unit, noise = law.charge_unit_c / law.shot_noise_c, law.pedestal_per_s
    dark, dark_u = 0.0, 0.0
    if arm.dark_gate_s > 0.0:
        dark = arm.dark_counts * unit / arm.dark_gate_s
        dark_u = math.sqrt((max(dark, 1.0 / arm.dark_gate_s) + noise) / arm.dark_gate_s)
    return _Rates(arm.counts * unit / arm.gate_s, arm.gate_s, dark, dark_u, noise)


def _true(rate: FloatArray, bend: float, is_counter: bool) -> FloatArray:
    return rate / (1.0 - rate * bend) if is_counter else rate * (1.0 + bend * rate)


def _variance(true: FloatArray, arm: _Rates, bend: float, is_counter: bool) -> FloatArray:
    """Of a true rate as it is found from counts: r (1 + r tau)/T for pulses (analysis.counting)."""
    true = np.maximum(true, 1.0 / arm.gate_s)  # an empty position still is uncertain by a count
    if is_counter:
        made: FloatArray = true * (1.0 + true * bend) / arm.gate_s
        return made
    made = (true + arm.noise) * (1.0 + bend * true) ** 2 / arm.gate_s
    return made


def _fit(
    position: FloatArray,
    group: IntArray,
    plain: Arm,
    attenuated: Arm,
    law: CounterLaw | AnalogueLaw,
    periods: tuple[float, ...],
    kept: NDArray[np.bool_],
) -> _Fit:
    """Scoring steps on D where kept, its derivatives and variances at the likeliest s.

    What is not kept still helps to read its neighbours between their positions.
    """
    is_counter = isinstance(law, CounterLaw)
    one, two = _rates(plain, law), _rates(attenuated, law)
    _, place = np.unique(group, return_inverse=True)
    comb = _Comb.of(position, place)
    groups = int(place.max()) + 1
    net = two.rate.sum() - two.dark * two.rate.size
    if net <= 0.0:
        raise ValueError("the attenuated run holds no light above its dark")
    start = float(net / (one.rate.sum() - one.dark * one.rate.size))
    phases = [2.0 * math.pi * position / period for period in periods]
    shifts = np.column_stack(
        [np.ones(position.size), *(wave(phase) for phase in phases for wave in (np.cos, np.sin))]
    )
    values = np.concatenate([np.full(groups, start), [0.0, one.dark, two.dark], np.zeros(shifts.shape[1])])
    if isinstance(law, CounterLaw):
        values[groups] = law.dead_time_s
    bend_k, dark_k, dark2_k, shift_k = range(groups, groups + 4)
    pull = np.zeros(values.size)
    for k, arm in ((dark_k, one), (dark2_k, two)):
        pull[k] = 1.0 / arm.dark_u**2 if arm.dark_u > 0.0 else 1e12
    centre = values.copy()
    most = MOST_BEND / float(one.rate.max())
    for _ in range(50):
        bend, t = float(values[bend_k]), values[place]
        read, slope, on_comb = comb.moved(shifts @ values[shift_k:])
        whole = _true(one.rate, bend, is_counter) - values[dark_k]
        gain = comb.level_out(whole)
        whole = whole / gain
        x = read @ whole
        y = _true(two.rate, bend, is_counter) - values[dark2_k]
        v1 = read**2 @ (_variance(whole + values[dark_k], one, bend, is_counter) / gain)
        likely = _likely(x, y, t, v1, two, float(values[dark2_k]), bend, is_counter)
        bright, dim = likely + values[dark_k], t * likely + values[dark2_k]
        missed = y - t * x
        variance = _variance(dim, two, bend, is_counter) + t**2 * v1
        used = kept & on_comb
        variance[~used] = np.inf
        jacobian = np.zeros((x.size, values.size))
        jacobian[np.arange(x.size), place] = -likely
        jacobian[:, bend_k] = dim**2 - t * bright**2
        jacobian[:, shift_k:] = (t * (slope @ whole))[:, None] * shifts
        jacobian[:, dark_k], jacobian[:, dark2_k] = t, -1.0
        weighted = jacobian / variance[:, None]
        information = weighted.T @ jacobian + np.diag(pull)
        if int(used.sum()) < FEWEST_POSITIONS or not (np.diag(information) > 0.0).all():
            raise ValueError(TOO_FAINT)
        covariance = inverse(information)
        step = covariance @ (-weighted.T @ missed - pull * (values - centre))
        values = values + step
        values[bend_k] = np.clip(values[bend_k], -most, most)
        if float(np.max(np.abs(step) / np.sqrt(np.diag(covariance)))) < 1e-6:
            break
    chi2 = float(np.sum(missed**2 / variance))
    dof = max(int(used.sum()) - groups - 1 - shifts.shape[1], 1)
    scatter = math.sqrt(chi2 / dof)
    cube = dim**3 - t * bright**3
    left = float(cube @ (cube / variance)) - float((weighted.T @ cube) @ covariance @ (weighted.T @ cube))
    push = -float(cube @ (missed / variance))
    return _Fit(
        values=values,
        covariance=covariance,
        groups=groups,
        chi2=chi2,
        dof=dof,
        scatter=scatter,
        cube=push / math.sqrt(left) / max(1.0, scatter) if left > 0.0 else 0.0,
        positions=int(used.sum()),
        highest_per_s=float((plain.counts / plain.gate_s)[used].max()),
    )


def _likely(
    x: FloatArray,
    y: FloatArray,
    t: FloatArray,
    v1: FloatArray,
    two: _Rates,
    dark: float,
    bend: float,
    is_counter: bool,
) -> FloatArray:
    """(N,) light of the plain run that both runs together make likeliest. The variance of y is taken at that
    light, not at the reading: one that is low by chance would weigh more."""
    likely = np.maximum(x, 0.0)
    for _ in range(3):
        v2 = _variance(t * likely + dark, two, bend, is_counter)
        likely = np.maximum((x / v1 + t * y / v2) / (1.0 / v1 + t**2 / v2), 0.0)
    return likely


@dataclass(frozen=True, slots=True)
class _Comb:
    """The positions of all dither groups as one comb, strictly ascending.

    level (N, N) : a straight line through the neighbours of a position, over about one step of a group's own
    comb: what a position would read if the lamp had not drifted between the groups.
    """

    position: FloatArray
    place: IntArray
    level: FloatArray

    @staticmethod
    def of(position: FloatArray, place: IntArray) -> _Comb:
        beside = max(1, (int(place.max()) + 1) // 2)
        level = np.zeros((position.size, position.size))
        for k in range(position.size):
            near = slice(max(0, k - beside), k + beside + 1)
            away = position[near] - position[k]
            along = away - away.mean()
            level[k, near] = 1.0 / away.size - away.mean() * along / float(along @ along)
        return _Comb(position, place, level)

    def level_out(self, height: FloatArray) -> FloatArray:
        """(N,) the brightness of each position's group against its neighbours, about 1."""
        smooth = np.bincount(self.place, self.level @ height)
        gain = np.bincount(self.place, height) / np.where(smooth != 0.0, smooth, 1.0)
        made: FloatArray = np.where(gain > 0.0, gain, 1.0)[self.place]
        return made

    def moved(self, shift: FloatArray) -> tuple[FloatArray, FloatArray, NDArray[np.bool_]]:
        """Weights (N, N) that read heights at position - shift, those of the derivative there, and which of
        the places lie on the comb: the cubic through the four positions around each."""
        x, n = self.position, self.position.size
        wanted = x - shift
        first = np.clip(np.searchsorted(x, wanted) - 2, 0, n - 4)
        value, slope = np.zeros((2, n, n))
        rows = np.arange(n)
        for j in range(4):
            others = [k for k in range(4) if k != j]
            steps = [wanted - x[first + k] for k in others]
            size = np.prod([x[first + j] - x[first + k] for k in others], axis=0)
            value[rows, first + j] = steps[0] * steps[1] * steps[2] / size
            pairs = steps[0] * steps[1] + steps[0] * steps[2] + steps[1] * steps[2]
            slope[rows, first + j] = pairs / size
        return value, slope, (wanted >= x[0]) & (wanted <= x[-1])
