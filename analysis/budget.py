"""What the uncertainty of a separation is made of: counting, line shape, wavelength scale, drive."""

from __future__ import annotations

import numpy as np

from analysis.fit import FitResult, inverse
from analysis.model import FeatureModel
from analysis.question import Budget, Feature


def separation_budget(
    model: FeatureModel, made: FitResult, *, scale_relative_uncertainty: float, spread: float = 1.0
) -> Budget:
    """Separation's standard uncertainties: counting, shape modes, wavelength scale, periodic drive errors.

    Counting is what the covariance says with the modes known. The shape's share is how far the separation
    moves when each mode moves by its allowance and everything else answers: data that seem to measure the
    modes do not shrink it, for the true shape error need not look like two modes. So it floors the whole.
    spread : factor on the statistical part where chi square says that data scatter more than stated.
    """
    place = model.index["separation_nm"]
    _, jacobian = model.evaluate(made.values)
    weight = 1.0 / made.mean if model.sigma is None else 1.0 / model.sigma**2
    modes = np.array([name in ("skewness", "kurtosis") for name in model.names])
    pull = np.where(np.isfinite(model.prior_sd) & ~modes, 1.0 / model.prior_sd**2, 0.0)
    information = (jacobian * weight[:, None]).T @ jacobian + np.diag(pull)
    rest = ~modes & (np.diag(information) > 0.0)
    separation = abs(made.value("separation_nm"))
    counting, shape = made.covariance[place, place], 0.0
    if rest[place]:
        where = int(np.sum(rest[:place]))
        answer = inverse(information[np.ix_(rest, rest)])[where]
        counting = answer[where]
        shape = float(np.linalg.norm(answer @ information[np.ix_(rest, modes)]))
    return Budget(
        statistics_nm=float(spread * np.sqrt(counting)),
        shape_nm=shape * model.feature.shape_allowance,
        scale_nm=scale_relative_uncertainty * separation,
        drive_nm=drive_uncertainty_nm(model.feature, separation),
    )


def drive_uncertainty_nm(feature: Feature, separation_nm: float) -> float:
    """What periodic errors of the drive do to a separation, rms over their phase, nm.

    A sine of amplitude a and period P moves two places s apart against each other by 2 a sin(pi s/P) times
    the cosine of its phase between them, rms a sqrt(2) |sin(pi s/P)|; for s far below P the relative error
    is 2 pi a/(P sqrt 2). ValueError for a period that is not positive.
    """
    moved = 0.0
    for amplitude, period in feature.periodic_errors_nm:
        if not period > 0.0:
            raise ValueError(f"a periodic error needs a period > 0 nm, got {period:g}")
        moved += 2.0 * (amplitude * np.sin(np.pi * separation_nm / period)) ** 2
    return float(np.sqrt(moved))
