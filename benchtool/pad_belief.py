"""Figures of a reference sweep and pads that may not be what the sheet says in; figures that carry that doubt out.

Where a pad in the reference's line may be off, alone, with some probability, that share of the possible true values of
each gain stands where it would then be: a mixture, whose interval holds both readings until a sweep parts them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from statistics import NormalDist
from typing import Final

import numpy as np

from benchtool.drive_results import PadEstimate
from benchtool.model import Figure, FloatArray
from benchtool.propagation import interval_about

__all__ = ["carry_pad_doubt"]

_LEAST_PROBABILITY: Final = 0.05
"""A pad that is less likely than this to be off is left to its tolerance."""
_GAINS: Final[Mapping[str, float]] = {"gain": 1.0, "peak_gain": 1.0, "insertion_loss": -1.0}
"""Figures that a pad's error moves, and which way, dB for each dB of gain."""


def carry_pad_doubt(
    figures: Mapping[str, Figure],
    values: Mapping[str, FloatArray],
    pads: Sequence[PadEstimate],
    weights: Mapping[str, int],
    confidence: float,
    *,
    seed: int = 0,
) -> tuple[dict[str, Figure], dict[str, FloatArray]]:
    """Return figures and possible true values with the doubt about pads in them.

    Parameters
    ----------
    figures, values : as :func:`benchtool.uncertainty.figure_trials` gives them
    pads : those that may be off, from the study of drive; their intervals are at `confidence`
    weights : 1 for each pad that was added to the reference's line since calibration, -1 for each taken away
    seed : of the draws
    """
    wider, moved = dict(figures), dict(values)
    reach = NormalDist().inv_cdf(0.5 + confidence / 2.0)
    for number, pad in enumerate(pads):
        if pad.name not in weights or pad.probability < _LEAST_PROBABILITY:
            continue
        rng = np.random.default_rng([seed, number])
        for key, sign in _GAINS.items():
            figure = wider.get(key)
            if figure is None or figure.value is None or key not in moved or not figure.standard_uncertainty:
                continue
            trial = moved[key]
            off = (rng.permutation(trial.size) + 0.5) / trial.size < pad.probability
            u = (pad.high_db - pad.low_db) / (2.0 * reach)
            errors = pad.value_db - pad.stated_db + u * rng.standard_normal(trial.size)
            moved[key] = trial + sign * weights[pad.name] * np.where(off, errors, 0.0)
            wider[key] = _with_doubt(figure, moved[key], f"pad {pad.name}")
    return wider, moved


def _with_doubt(figure: Figure, values: FloatArray, source: str) -> Figure:
    """Return a figure with the interval of its values, what they scatter more being put to the pad in its budget."""
    assert figure.value is not None and figure.confidence is not None and figure.standard_uncertainty
    low, high = interval_about(figure.value, values, figure.confidence)
    finite = values[np.isfinite(values)]
    spread = float(np.std(finite, ddof=1))
    kept = min(1.0, (figure.standard_uncertainty / spread) ** 2) if spread > 0.0 else 1.0
    budget = {name: share * kept for name, share in figure.budget.items()}
    budget[source] = budget.get(source, 0.0) + 1.0 - kept
    return replace(
        figure,
        low=low if np.isfinite(low) else figure.low,
        high=high if np.isfinite(high) else figure.high,
        standard_uncertainty=spread,
        budget=dict(sorted(budget.items(), key=lambda item: -item[1])),
    )
