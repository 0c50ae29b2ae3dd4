"""The reference sweep of a device and its doubts in; intervals, budgets and trial values of every figure out.

Each trial is a copy of the sweep as it might have been read (:mod:`benchtool.doubts`), measured by the very code that
measured the sweep itself. Noise makes a maximum read high, and trials that add noise to a noisy sweep read it higher
still, by as much again: that bias, seen as the median departure in trials with noise alone, is taken out of both.

A trial in which a figure is lost (an edge leaves the sweep) is never dropped: it counts as beyond every limit on the
side where the figure went. Where more than a hundredth are lost the figure becomes a bound.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from benchtool.compression import MeasuredSweep
from benchtool.doubts import SweepDoubts
from benchtool.draws import Segment, SweepCopier
from benchtool.model import Bound, Figure, Finding, FloatArray
from benchtool.pads import PadBank
from benchtool.propagation import BATCH, BLOCK, interval_about, run_blocks
from benchtool.units import from_db, to_db

__all__ = ["FigureTrials", "figure_trials"]

_BUDGET_TRIALS: Final = 128
"""Trials with one source alone: spread evenly, they know its share of a variance to a hundredth or two."""
_BIAS_TRIALS: Final = 1024
"""Trials with noise alone: their median is the bias that is taken out, and must not wander."""
_TOGETHER: Final = 2048
"""Trials of a budget that are made in one go, where they take no more memory than others."""
_MAY_BE_LOST: Final = 0.01
_BLOCK_BYTES: Final = 48e6
"""Memory that the samples of one block of copies may take."""
_PLAUSIBLE_BIAS: Final = 0.6
"""Largest bias that noise is taken to give a figure, as a share of its standard uncertainty."""
_SMALLEST_REFLECTION: Final = 1e-4
_LOST_SIDE: Final[Mapping[str, float]] = {"lower_edge": -1.0, "upper_edge": 1.0, "bandwidth": 1.0, "loaded_q": -1.0}
"""Where a figure goes when a half-power edge leaves the sweep: up (+1) or down (-1)."""


@dataclass(frozen=True, eq=False)
class FigureTrials:
    """Figures with intervals and budgets, the values they may truly have, and what was found on the way."""

    figures: Mapping[str, Figure]
    values: Mapping[str, FloatArray]
    """Possible true values of each figure, (trials,); infinite where a figure was lost."""
    trials: int
    findings: tuple[Finding, ...]


def _block_size(samples: int) -> int:
    """Return how many trials to draw at a time, when each takes so many samples drawn one by one.

    Whole batches where there is room for one, so that each has a lattice of its own.
    """
    size = int(max(16, min(BLOCK, _BLOCK_BYTES / (4 * 16 * max(samples, 1)))))
    return size - size % BATCH if size > BATCH else size


def figure_trials(
    measured: MeasuredSweep,
    doubts: SweepDoubts,
    bank: PadBank,
    figures: Mapping[str, Figure],
    confidence: float,
    *,
    trials: int | None = None,
    seed: int = 0,
    deciding: Collection[str] = (),
) -> FigureTrials:
    """Return the figures of a sweep with their intervals.

    Parameters
    ----------
    measured : the reference sweep and the plan of its figures
    figures : its figures without intervals; those without a value stay so
    confidence : coverage probability of the intervals
    trials : how many; None runs until the `deciding` figures have settled
    seed : of the draws
    """
    sweep, plan = measured.result.sweep, measured.plan
    rng, copier = np.random.default_rng(seed), SweepCopier(sweep, plan, doubts, bank)
    known = [key for key, figure in figures.items() if figure.value is not None]

    def block(segments: Sequence[Segment]) -> dict[str, FloatArray]:
        found = plan.extract(copier.copies(rng, segments))
        return {key: found[key] for key in known if key in found}

    size = _block_size(copier.samples)
    raw = run_blocks(
        lambda count: block([(None, min(BATCH, left)) for left in range(count, 0, -BATCH)]),
        confidence,
        trials=trials,
        deciding=[key for key in deciding if key in known],
        size=size,
    )
    alone = _alone(block, doubts.sources, _TOGETHER if size == BLOCK else size)
    sought = {key: figure for key, figure in figures.items() if figure.value is not None and key in raw}
    departures = {source: _departures(sought, trial) for source, trial in alone.items()}
    variances = {source: _variances(departure) for source, departure in departures.items()}
    biases = _noise_biases(departures["noise"])
    finished: dict[str, Figure] = {}
    values: dict[str, FloatArray] = {}
    findings: list[Finding] = []
    places = {key: place for place, key in enumerate(sought)}
    for key, figure in figures.items():
        if key not in places:
            finished[key] = figure
            continue
        place = places[key]
        values[key] = _possible_values(figure, raw[key], float(biases[place]))
        budget = _shares({source: float(variance[place]) for source, variance in variances.items()})
        finished[key] = _with_interval(figure, values[key], confidence, budget)
        lost = float(np.mean(~np.isfinite(values[key])))
        if figure.bound is None and finished[key].bound is not None:
            findings.append(_lost_finding(measured.file, key, lost))
    count = next(iter(raw.values())).size if raw else 0
    return FigureTrials(finished, values, count, tuple(findings))


def _alone(
    block: Callable[[Sequence[Segment]], dict[str, FloatArray]], sources: Sequence[str], size: int
) -> dict[str, dict[str, FloatArray]]:
    """Return trials of every figure with each source of doubt alone, at most `size` of them drawn together."""
    counts = {source: _BIAS_TRIALS if source == "noise" else _BUDGET_TRIALS for source in sources}
    pieces = [(source, min(size, left)) for source, count in counts.items() for left in range(count, 0, -size)]
    parts: dict[str, list[dict[str, FloatArray]]] = {source: [] for source in sources}
    while pieces:
        room, together = size, []
        while pieces and pieces[0][1] <= room:
            together.append(pieces.pop(0))
            room -= together[-1][1]
        found = block(together)
        ends = np.cumsum([count for _, count in together])[:-1]
        split = {key: np.split(values, ends) for key, values in found.items()}
        for place, (source, _) in enumerate(together):
            parts[source].append({key: each[place] for key, each in split.items()})
    return {
        source: {key: np.concatenate([part[key] for part in mine]) for key in mine[0]} for source, mine in parts.items()
    }


def _departures(figures: Mapping[str, Figure], trials: Mapping[str, FloatArray]) -> FloatArray:
    """Return how far trials of figures are from their values, (figures, trials)."""
    return np.array([_departure(figure, trials[key]) for key, figure in figures.items()])


def _departure(figure: Figure, trial: FloatArray) -> FloatArray:
    """Return how far trials are from the value; a lost trial lies beyond every limit on the side where it went."""
    assert figure.value is not None
    departure = trial - figure.value
    if figure.id == "phase":
        departure = 180.0 - np.mod(180.0 - departure, 360.0)
    lost = np.isnan(departure)
    if np.any(lost):
        departure[lost] = _LOST_SIDE.get(figure.id, 1.0) * np.inf
    return np.asarray(departure)


def _possible_values(figure: Figure, trial: FloatArray, noise_bias: float) -> FloatArray:
    """Return the values a figure may truly have.

    A return loss is the worst over a band, and every error makes the worst worse, whichever way it points: so its
    reflection is mirrored at the value, as a magnitude, instead of being taken as it came.
    """
    assert figure.value is not None
    if figure.id in ("input_return_loss", "output_return_loss"):
        # Past nothing it comes out on the other side: a reflection smaller than its doubt may be as large as that.
        mirrored = np.abs(2.0 * from_db(-figure.value) - from_db(-trial))
        return -to_db(np.maximum(mirrored, _SMALLEST_REFLECTION))
    return np.asarray(figure.value + _departure(figure, trial) - 2.0 * noise_bias)


def _noise_biases(departures: FloatArray) -> FloatArray:
    """Return the bias that noise gives each figure: 0 where the trials do not show one beyond their own scatter."""
    finite = np.isfinite(departures)
    if np.all(finite):
        bias, spread = np.median(departures, axis=1), np.std(departures, axis=1)
    else:
        kept = [row[own] if own.any() else np.zeros(1) for row, own in zip(departures, finite, strict=True)]
        bias, spread = np.array([[np.median(row), np.std(row)] for row in kept]).T
    count = np.count_nonzero(finite, axis=1)
    # The median of n trials scatters by 1.25 σ/√n. More than σ is no bias: two humps vie for the peak.
    shown = (count >= 0.9 * departures.shape[1]) & (2.5 * spread < np.abs(bias) * np.sqrt(count))
    return np.where(shown & (np.abs(bias) < _PLAUSIBLE_BIAS * spread), bias, 0.0)


def _with_interval(figure: Figure, values: FloatArray, confidence: float, budget: Mapping[str, float]) -> Figure:
    assert figure.value is not None
    low, high = interval_about(figure.value, values, confidence)
    finite = values[np.isfinite(values)]
    spread = float(np.std(finite, ddof=1)) if finite.size > 1 else 0.0
    bound: Bound | None = figure.bound
    if values.size - finite.size > _MAY_BE_LOST * values.size and bound is None:
        bound = "at least" if _LOST_SIDE.get(figure.id, 1.0) > 0 else "at most"
    return replace(
        figure,
        low=low if np.isfinite(low) else None,
        high=high if np.isfinite(high) else None,
        confidence=confidence,
        bound=bound,
        standard_uncertainty=spread,
        budget=dict(budget),
    )


def _lost_finding(file: str, key: str, lost: float) -> Finding:
    return Finding(
        "edge-may-leave-sweep",
        "caution",
        f"{file}: within the doubts of the set-up {key.replace('_', ' ')} leaves the sweep in {lost:.0%} of trials, so "
        "it is given as a bound",
        "sweep wider, or narrow the doubts that its budget names",
        file,
    )


def _variances(departures: FloatArray) -> FloatArray:
    """Return the variance of each row, (figures,); trials in which a figure was lost do not count."""
    if np.all(np.isfinite(departures)):
        return np.asarray(np.var(departures, axis=1))
    finite = [row[np.isfinite(row)] for row in departures]
    return np.array([float(np.var(row)) if row.size > 1 else 0.0 for row in finite])


def _shares(variances: Mapping[str, float]) -> dict[str, float]:
    """Return the share of each source in the variance, summing to one, the largest first; empty without variance."""
    total = sum(variances.values())
    if total <= 0.0:
        return {}
    ordered = sorted(variances.items(), key=lambda item: -item[1])
    return {source: part / total for source, part in ordered if part > 0.0}
