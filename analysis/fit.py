"""The fit: damped Fisher scoring on a Poisson or Gaussian likelihood, with bounds, priors and frozen values.

The step solves (H + lambda diag H) step = gradient with the Fisher information H (Marquardt 1963, SIAM J.
Appl. Math. 11, 431, on the deviance), on the parameters that no bound holds; it is then clipped to the
bounds. All is done on parameters scaled by their own information, so units do not matter. Written here
because scipy.optimize takes a third of a second to import and knows no Poisson likelihood.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from analysis.counting import FloatArray, deviance
from analysis.question import FitSummary


class Model(Protocol):
    """What can be fitted; `analysis.model.FeatureModel` is the one in use."""

    @property
    def names(self) -> tuple[str, ...]: ...

    @property
    def lower(self) -> FloatArray: ...

    @property
    def upper(self) -> FloatArray: ...

    @property
    def prior_mean(self) -> FloatArray: ...

    @property
    def prior_sd(self) -> FloatArray: ...

    @property
    def sigma(self) -> FloatArray | None: ...

    @property
    def data(self) -> FloatArray: ...

    def evaluate(self, values: FloatArray) -> tuple[FloatArray, FloatArray]: ...


@dataclass(frozen=True, slots=True)
class FitResult:
    """names, values : (P,). covariance : (P, P), inverse of information and priors, bounds disregarded.

    deviance : 2 (log-likelihood of the saturated model - of this one), chi square for Gaussian readings.
    log_likelihood : -(deviance + penalty)/2, the penalty being the priors'. mean : of the data, (N,).
    dof : data minus parameters that neither a prior nor a bound nor the caller holds.
    """

    names: tuple[str, ...]
    values: FloatArray
    covariance: FloatArray
    deviance: float
    penalty: float
    log_likelihood: float
    pearson_chi2: float
    dof: int
    converged: bool
    iterations: int
    mean: FloatArray

    def value(self, name: str) -> float:
        """A parameter by its name."""
        return float(self.values[self.names.index(name)])

    def deviation(self, name: str) -> float:
        """Standard deviation of a parameter by its name."""
        place = self.names.index(name)
        return float(np.sqrt(self.covariance[place, place]))

    def summary(self) -> FitSummary:
        """The same in plain tuples, for records."""
        return FitSummary(
            self.names,
            tuple(float(v) for v in self.values),
            tuple(tuple(float(v) for v in row) for row in self.covariance),
            self.log_likelihood,
            self.deviance,
            self.pearson_chi2,
            self.dof,
            self.converged,
            self.iterations,
        )


def fit(
    model: Model,
    start: FloatArray,
    *,
    frozen: tuple[str, ...] = (),
    lower: FloatArray | None = None,
    upper: FloatArray | None = None,
    tolerance: float = 1e-9,
    iterations: int = 120,
) -> FitResult:
    """Best parameters from `start` (P,). ValueError if it has another length or is not finite.

    lower, upper : (P,) bounds in place of the model's own. frozen : names that stay where they start.
    tolerance : converged when a step can gain no more than this in log-likelihood.
    """
    low = model.lower if lower is None else lower
    high = model.upper if upper is None else upper
    if start.shape != low.shape or not np.isfinite(start).all():
        raise ValueError(f"the start must be {low.size} finite numbers: {', '.join(model.names)}")
    values = np.clip(start, low, high)
    held = np.array([name in frozen for name in model.names])
    data, sigma = model.data, model.sigma
    pull = np.where(np.isfinite(model.prior_sd), 1.0 / model.prior_sd**2, 0.0)
    mean, jacobian = model.evaluate(values)
    cost = deviance(data, mean, sigma) + float(pull @ (values - model.prior_mean) ** 2)
    damping, converged, step_no = 1e-3, False, 0
    while step_no < iterations and not converged:
        step_no += 1
        weight = 1.0 / mean if sigma is None else 1.0 / sigma**2
        weighted = jacobian * weight[:, None]
        gradient = weighted.T @ (data - mean) - pull * (values - model.prior_mean)
        information = weighted.T @ jacobian + np.diag(pull)
        free = ~held & ~((values <= low) & (gradient <= 0.0)) & ~((values >= high) & (gradient >= 0.0))
        free &= np.diag(information) > 0.0
        if not free.any():
            converged = True
            break
        while True:
            step = np.zeros(values.size)
            step[free] = _solve(information[np.ix_(free, free)], gradient[free], damping)
            trial = np.clip(values + step, low, high)
            moved = trial - values
            gain = float(gradient @ moved - 0.5 * moved @ information @ moved)
            trial_mean, trial_jacobian = model.evaluate(trial)
            trial_cost = deviance(data, trial_mean, sigma)
            trial_cost += float(pull @ (trial - model.prior_mean) ** 2)
            if trial_cost <= cost:
                converged = abs(gain) < tolerance and damping <= 1.0
                better = cost - trial_cost > 0.5 * gain
                damping = max(damping * (0.1 if better else 0.5), 1e-9)
                values, mean, jacobian, cost = trial, trial_mean, trial_jacobian, trial_cost
                break
            if abs(gain) < tolerance:
                converged = True
                break
            damping *= 8.0
            if damping > 1e12:
                break
        if damping > 1e12:
            break
    return _result(model, values, mean, jacobian, held, low, high, pull, converged, step_no)


def _result(
    model: Model,
    values: FloatArray,
    mean: FloatArray,
    jacobian: FloatArray,
    held: NDArray[np.bool_],
    low: FloatArray,
    high: FloatArray,
    pull: FloatArray,
    converged: bool,
    iterations: int,
) -> FitResult:
    data, sigma = model.data, model.sigma
    weight = 1.0 / mean if sigma is None else 1.0 / sigma**2
    information = (jacobian * weight[:, None]).T @ jacobian + np.diag(pull)
    covariance = np.zeros(information.shape)
    known = ~held & (np.diag(information) > 0.0)
    covariance[np.ix_(known, known)] = inverse(information[np.ix_(known, known)])
    fit_deviance = deviance(data, mean, sigma)
    penalty = float(pull @ (values - model.prior_mean) ** 2)
    bound = (values <= low) | (values >= high)
    free = int(np.sum(~held & ~bound & (pull == 0.0)))
    return FitResult(
        names=model.names,
        values=values,
        covariance=covariance,
        deviance=fit_deviance,
        penalty=penalty,
        log_likelihood=-0.5 * (fit_deviance + penalty),
        pearson_chi2=float(weight @ (data - mean) ** 2),
        dof=max(data.size - free, 1),
        converged=converged,
        iterations=iterations,
        mean=mean,
    )


def _solve(information: FloatArray, gradient: FloatArray, damping: float) -> FloatArray:
    scale = 1.0 / np.sqrt(np.diag(information))
    matrix = information * scale[:, None] * scale
    matrix[np.diag_indices_from(matrix)] += damping
    made: FloatArray = scale * np.linalg.solve(matrix, scale * gradient)
    return made


def inverse(information: FloatArray) -> FloatArray:
    """Inverse of a symmetric information matrix, scaled first; directions without information get 1e12 times
    the variance that their parameter alone would have, instead of a division by zero."""
    scale = 1.0 / np.sqrt(np.diag(information))
    sizes, axes = np.linalg.eigh(information * scale[:, None] * scale)
    made: FloatArray = scale[:, None] * ((axes / np.maximum(sizes, 1e-12)) @ axes.T) * scale
    return made
