"""Evidence that stays valid however often one looks: predictive densities against the best rival.

Block j is what was counted between looks j-1 and j. Given the total of a block in a dither group, its counts
are multinomial with shares p_i = rate_i live_i / sum(rate live): brightness, and its drift from block to
block, drops out. For a claim against a composite rival the e-process is

    log E_k = sum_{j=2..k} log p(block j | looks before j) - sup_rival sum_{j=2..k} log p(block j | rival)

The first sum is a density that the past fixes, so under every member of the rival E_k is bounded by a
martingale that starts at 1, and the chance that it EVER reaches 1/alpha is at most alpha (Wasserman, Ramdas,
Balakrishnan 2020, PNAS 117, 16880; Ville's inequality). When to look, when to stop and what to measure next
may depend on everything seen.

The prediction is the fit of the previous look as it stands. Mixtures over its uncertainty (6 or 24 draws of
its covariance) were tried and dropped: with blocks of a half to twice what came before they decided no
sooner (pairs at 1 FWHM after 4.6, 4.6, 4.6 sweeps; singles after 8.4, 9.0, 9.8).

Assumed: within a block the gates of one dither group are proportional from position to position (whole
sweeps), so that the rival's sum over blocks is that of the sums. Where counts scatter more or less than
Poisson counts do, their dispersion divides both sums.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from analysis.counting import Counts, FloatArray
from analysis.model import FeatureModel


def between(now: Counts, then: Counts) -> Counts:
    """What was counted after `then`; its positions must be among those of `now` (ValueError)."""
    place = {key: k for k, key in enumerate(zip(now.wavelength_nm, now.group, strict=True))}
    counts, gate = now.counts.copy(), now.gate_s.copy()
    try:
        where = [place[key] for key in zip(then.wavelength_nm, then.group, strict=True)]
    except KeyError as key:
        raise ValueError(f"position {key} of the earlier look is missing from the later one") from None
    counts[where] -= then.counts
    gate[where] -= then.gate_s
    if now.pedestal_per_s > 0.0:  # a faint current may well read below what was there before
        counts = np.maximum(counts, 0.0)
    if (counts < -0.5).any() or (gate < -1e-9).any():
        raise ValueError("the earlier look counted more than the later one")
    gate[gate < 1e-9] = 0.0
    exposure = now.exposure
    if exposure is not None and then.exposure is not None:
        # a mean over gate time, so the block's is what is left of the sum
        summed = exposure * now.gate_s
        summed[where] -= then.exposure * then.gate_s
        exposure = np.where(gate > 0.0, np.maximum(summed, 0.0) / np.where(gate > 0.0, gate, 1.0), 1.0)
    dark, dark_gate = now.dark_counts - then.dark_counts, now.dark_gate_s - then.dark_gate_s
    return replace(
        now,
        counts=counts,
        gate_s=gate,
        dark_counts=dark,
        dark_gate_s=max(dark_gate, 0.0),
        exposure=exposure,
    )


def log_shares(model: FeatureModel, values: FloatArray) -> float:
    """Log density of the counts given their totals per group, constants of the counts alone left out."""
    weight = model.rate(values)
    weight = np.maximum(weight, 1e-6 * weight.max()) * model.live_s(values)
    seen = model.observed > 0.0
    made = float(np.sum(model.observed[seen] * np.log(weight[seen])))
    totals = np.bincount(model.group, model.observed)
    sums = np.bincount(model.group, weight)
    filled = totals > 0.0
    return made - float(np.sum(totals[filled] * np.log(sums[filled])))
