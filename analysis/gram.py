"""Areas by linear least squares for many lines at many places at once: where cold fits start from."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.background import LinearBackground, StretchedBackground
from analysis.counting import FloatArray
from analysis.line import components
from analysis.model import FeatureModel, neutral
from analysis.profile import line_profile
from analysis.question import Feature
from analysis.reversal import taken_by_layer

MOST_PLACES = 60
FINE = 400
TABLE_FWHM = 60.0
"""How far from its centre a line is tabulated; further away it counts as it does there."""


@dataclass(frozen=True, slots=True)
class Gram:
    """Normal equations over a dictionary of columns: M places, K known lines for each, the background.

    second : where the columns of second lines begin, if they have a width of their own; 0: they have not.
    """

    places: FloatArray
    matrix: FloatArray
    target: FloatArray
    known: NDArray[np.int64]
    base: NDArray[np.int64]
    second: int

    def solve(self, columns: NDArray[np.int64], tied: float | None = None) -> tuple[FloatArray, FloatArray]:
        """Solutions (S, C) and reductions of chi square (S,) for S choices of C columns.

        tied : the second column is added to the first with this factor and dropped.
        """
        matrix = self.matrix[columns[:, :, None], columns[:, None, :]]
        target = self.target[columns]
        if tied is not None:
            mix = np.eye(columns.shape[1])
            mix[1, 0] = tied
            mix = np.delete(mix, 1, axis=1)
            matrix = mix.T @ matrix @ mix
            target = target @ mix
        size = np.einsum("sii->si", matrix)
        matrix = matrix + np.eye(matrix.shape[1]) * (1e-9 * size[:, :, None] + 1e-300)
        made = np.linalg.solve(matrix, target[:, :, None])[:, :, 0]
        return made, np.sum(made * target, axis=1)


def gram_of(model: FeatureModel, width: tuple[float, float], layer: FloatArray | None = None) -> Gram:
    """The dictionary of a model for lines of this (sigma, gamma). ValueError for a background of its own.

    layer : (3,) what reverses the main line, without a shift (see `analysis.reversal`).
    """
    feature, x = model.feature, model.x
    if not isinstance(model.background, LinearBackground | StretchedBackground):
        raise ValueError("a fit with a background of its own needs its own start: use analysis.fit.fit")
    places = np.concatenate([_grid(left, right, feature.fwhm_nm) for left, right in model.windows_nm])
    known = np.asarray(feature.known_lines_nm) - feature.wavelength_nm
    centres = np.concatenate([places, (places[:, None] + known).ravel()])
    lines = _seen(x - centres[:, None], feature, width)
    if layer is not None:
        lines[: places.size] = _seen(x - places[:, None], feature, width, layer)
    number = places.size
    tied = model.lines == 2 and feature.widths == "tied"
    if tied:
        own = (feature.width_ratio * width[0], feature.width_ratio * width[1])
        lines = np.vstack([lines, _seen(x - places[:, None], feature, own)])
    _, base = model.background.evaluate(x, np.zeros(len(model.background.names)))
    columns = np.vstack([model.sign * lines, base.T]) * (model.live_s(neutral(model)) * model.exposure)
    sigma = np.sqrt(np.maximum(model.observed, 1.0)) if model.sigma is None else model.sigma
    scaled = columns / sigma
    return Gram(
        places=places,
        matrix=scaled @ scaled.T,
        target=scaled @ (model.observed / sigma),
        known=number + np.arange(number * known.size).reshape(number, known.size),
        base=lines.shape[0] + np.arange(base.shape[1]),
        second=number * (1 + known.size) if tied else 0,
    )


def _grid(left_nm: float, right_nm: float, fwhm_nm: float) -> FloatArray:
    """A quarter of the FWHM apart, 9 to 60 of them."""
    return np.linspace(
        left_nm, right_nm, int(np.clip(np.ceil(4.0 * (right_nm - left_nm) / fwhm_nm) + 1, 9, MOST_PLACES))
    )


def _seen(
    offset_nm: FloatArray, feature: Feature, width: tuple[float, float], layer: FloatArray | None = None
) -> FloatArray:
    """Lines of area 1 with their pattern, from a fine table read linearly: enough for starts."""
    places, shares = components(feature)
    far = float(np.abs(offset_nm).max()) + float(np.abs(places).max())
    fine = np.linspace(0.0, min(far, TABLE_FWHM * feature.fwhm_nm), FINE)
    table = line_profile(
        fine,
        sigma_nm=width[0],
        gamma_nm=width[1],
        box_widths_nm=feature.box_widths_nm,
        derivatives=False,
    ).value
    if layer is not None:
        taken = taken_by_layer(
            fine, sigma_nm=width[0], gamma_nm=width[1], reversal=layer, box_widths_nm=feature.box_widths_nm
        )
        table = table + taken.value
    made = np.zeros(offset_nm.shape)
    for place, share in zip(places.tolist(), shares.tolist(), strict=True):
        made += share * np.interp(np.abs(offset_nm - place), fine, table)
    return made
