"""The reference sweep of a device and its doubts in; intervals, budgets and trial values of every figure out.

Each trial is a copy of the sweep as it might have been read (:mod:`benchtool.doubts`), measured by the very code that
measured the sweep itself. Noise makes a maximum read high, and trials that add noise to a noisy sweep read it higher
still, by as much again: that bias, the departure of the trials' median from the value, is taken out of both.

A trial in which a figure is lost (an edge leaves the sweep) is never dropped: it counts as beyond every limit on the
side where the figure went. Where more than a hundredth are lost the figure becomes a bound.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Final, Protocol

import numpy as np

from benchtool.compression import MeasuredSweep
from benchtool.doubts import Draws, SweepDoubts
from benchtool.model import Bound, Figure, Finding, FloatArray
from benchtool.pads import PadBank
from benchtool.propagation import BLOCK, coverage_interval, run_blocks

__all__ = ["FigureTrials", "figure_trials"]

_BUDGET_TRIALS: Final = 200
_MAY_BE_LOST: Final = 0.01
_BLOCK_BYTES: Final = 48e6
"""Memory that one block of perturbed copies may take."""
_PLAUSIBLE_BIAS: Final = 0.6
"""Largest bias that noise is taken to give a figure, as a share of its standard uncertainty."""
_LOST_SIDE: Final[Mapping[str, float]] = {"lower_edge": -1.0, "upper_edge": 1.0, "bandwidth": 1.0, "loaded_q": -1.0}
"""Where a figure goes when a half-power edge leaves the sweep: up (+1) or down (-1)."""


class _Block(Protocol):
    """Makes trials of every figure, with all sources of doubt or only one."""

    def __call__(self, count: int, only: str | None = None) -> dict[str, FloatArray]: ...


@dataclass(frozen=True, eq=False)
class FigureTrials:
    """Figures with intervals and budgets, the values they may truly have, and what was found on the way."""

    figures: Mapping[str, Figure]
    values: Mapping[str, FloatArray]
    """Possible true values of each figure, (trials,); infinite where a figure was lost."""
    trials: int
    findings: tuple[Finding, ...]


def _block_size(points: int) -> int:
    return int(max(16, min(BLOCK, _BLOCK_BYTES / (4 * 16 * points))))


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
    rng = np.random.default_rng(seed)
    known = [key for key, figure in figures.items() if figure.value is not None]

    def block(count: int, only: str | None = None) -> dict[str, FloatArray]:
        copies = Draws(rng, count, bank, only).perturb(sweep, plan, doubts)
        found = plan.extract(copies)
        return {key: found[key] for key in known if key in found}

    size = _block_size(sweep.frequency_hz.size)
    raw = run_blocks(block, confidence, trials=trials, deciding=[key for key in deciding if key in known], size=size)
    budgets = _budgets(block, doubts, figures, raw, size)
    finished: dict[str, Figure] = {}
    values: dict[str, FloatArray] = {}
    findings: list[Finding] = []
    for key, figure in figures.items():
        if figure.value is None or key not in raw:
            finished[key] = figure
            continue
        values[key] = _possible_values(figure, raw[key])
        finished[key] = _with_interval(figure, values[key], confidence, budgets.get(key, {}))
        lost = float(np.mean(~np.isfinite(values[key])))
        if figure.bound is None and finished[key].bound is not None:
            findings.append(_lost_finding(measured.file, key, lost))
    return FigureTrials(
        MappingProxyType(finished), values, next(iter(raw.values())).size if raw else 0, tuple(findings)
    )


def _possible_values(figure: Figure, trial: FloatArray) -> FloatArray:
    """Return the values a figure may truly have, from trials of it; lost trials lie beyond every limit."""
    assert figure.value is not None
    departure = trial - figure.value
    if figure.unit == "deg" and figure.id == "phase":
        departure = 180.0 - np.mod(180.0 - departure, 360.0)
    lost = np.isnan(departure)
    if lost.all():
        return np.full(departure.shape, _LOST_SIDE.get(figure.id, 1.0) * np.inf)
    bias, spread = float(np.median(departure[~lost])), float(np.std(departure[~lost]))
    if abs(bias) > _PLAUSIBLE_BIAS * spread:
        # The trials sit elsewhere than the value, as when two humps vie for the peak: both stay possible.
        bias = 0.0
    side = _LOST_SIDE.get(figure.id, 1.0)
    return np.where(lost, side * np.inf, figure.value + departure - 2.0 * bias)


def _with_interval(figure: Figure, values: FloatArray, confidence: float, budget: Mapping[str, float]) -> Figure:
    low, high = coverage_interval(values, confidence)
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
        budget=MappingProxyType(dict(budget)),
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


def _budgets(
    block: _Block, doubts: SweepDoubts, figures: Mapping[str, Figure], raw: Mapping[str, FloatArray], size: int
) -> dict[str, dict[str, float]]:
    """Return the share of each source in the variance of each figure, from trials with that source alone."""
    variances: dict[str, dict[str, float]] = {key: {} for key in raw}
    for source in doubts.sources:
        parts = [block(min(size, _BUDGET_TRIALS), source) for _ in range(max(1, -(-_BUDGET_TRIALS // size)))]
        for key in raw:
            values = _possible_values(figures[key], np.concatenate([part[key] for part in parts]))
            finite = values[np.isfinite(values)]
            variances[key][source] = float(np.var(finite)) if finite.size > 1 else 0.0
    return {key: _shares(variance) for key, variance in variances.items()}


def _shares(variance: Mapping[str, float]) -> dict[str, float]:
    """Return shares that sum to one, the largest first; nothing where there is no variance."""
    total = sum(variance.values())
    if total <= 0.0:
        return {}
    ordered = sorted(variance.items(), key=lambda item: -item[1])
    return {source: part / total for source, part in ordered if part > 0.0}
