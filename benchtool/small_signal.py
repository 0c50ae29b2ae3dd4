"""Figures of a reference sweep and the proof that it was small-signal in; figures that carry the doubt out.

A limiting amplifier loses its peak first: its gain reads low, its band wide, its loaded Q low. So a reference that is
proven small-signal leaves its figures alone; one that may read low by a known little widens the interval of the gain
upward by that much; one of which nothing is known turns its figures into bounds.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from types import MappingProxyType
from typing import Final

import numpy as np

from benchtool.drive_results import ReferenceProof
from benchtool.model import Bound, Figure, FloatArray
from benchtool.propagation import interval_about

__all__ = ["BOUND_WHEN_COMPRESSED", "carry_drive_doubt"]

BOUND_WHEN_COMPRESSED: Final[Mapping[str, Bound]] = MappingProxyType(
    {
        "gain": "at least",
        "peak_gain": "at least",
        "rejection": "at least",
        "bandwidth": "at most",
        "lower_edge": "at least",
        "upper_edge": "at most",
        "loaded_q": "at least",
    }
)
"""How each figure of a sweep that may be compressed bounds the device's own."""

_LITTLE_DB: Final = 0.5
"""A gain that may read low by more than this no longer has a value, only a bound."""


def carry_drive_doubt(
    figures: Mapping[str, Figure], values: Mapping[str, FloatArray], proof: ReferenceProof, *, seed: int = 0
) -> tuple[dict[str, Figure], dict[str, FloatArray]]:
    """Return figures and possible true values with the doubt about the reference's drive in them.

    Parameters
    ----------
    figures, values : as :func:`benchtool.uncertainty.figure_trials` gives them
    proof : whether the reference sweep is small-signal, and by how much it may read low
    seed : of the draws
    """
    if proof.proven:
        return dict(figures), dict(values)
    low, high = proof.reads_low_db.low, proof.reads_low_db.high
    if low is not None and high is not None and high <= _LITTLE_DB:
        return _widened(figures, values, low, high, seed)
    bounded = {key: _bounded(figure) for key, figure in figures.items()}
    return bounded, dict(values)


def _bounded(figure: Figure) -> Figure:
    bound = BOUND_WHEN_COMPRESSED.get(figure.id)
    if figure.id == "centre_frequency":
        # Both edges are bounds, and nothing is known of how they would move.
        return replace(figure, value=None, low=None, high=None, bound=None, standard_uncertainty=None)
    if figure.value is None or bound is None:
        return figure
    if figure.bound is not None and figure.bound != bound:
        # Bounded from both sides by different doubts, nothing is left.
        return replace(figure, value=None, low=None, high=None, bound=None, standard_uncertainty=None)
    return replace(figure, bound=bound)


def _widened(
    figures: Mapping[str, Figure], values: Mapping[str, FloatArray], low: float, high: float, seed: int
) -> tuple[dict[str, Figure], dict[str, FloatArray]]:
    rng = np.random.default_rng(seed)
    wider, moved = dict(figures), dict(values)
    for key in ("gain", "peak_gain"):
        figure = wider.get(key)
        if figure is None or figure.value is None or key not in values or figure.confidence is None:
            continue
        moved[key] = values[key] + rng.uniform(max(low, 0.0), max(high, 0.0), values[key].shape)
        ends = interval_about(figure.value, moved[key], figure.confidence)
        spread = float(np.std(moved[key], ddof=1))
        wider[key] = replace(figure, low=ends[0], high=ends[1], standard_uncertainty=spread)
    return wider, moved
