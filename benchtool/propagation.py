"""Sources of doubt in, intervals out: Monte Carlo propagation (JCGM 101:2008) and coverage intervals.

:func:`propagate` draws, evaluates and stops when the interval's ends have settled (JCGM 101, clause 7.9).
"""

from __future__ import annotations

from collections.abc import Callable, Collection
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.model import FloatArray

__all__ = [
    "BATCH",
    "BLOCK",
    "MOST_TRIALS",
    "Interval",
    "coverage_interval",
    "interval_about",
    "mismatch_limits_db",
    "mismatch_u_db",
    "propagate",
    "rectangular_u",
    "run_blocks",
    "settled",
]

BLOCK: Final = 2048
"""Trials drawn at a time: enough to make the calls cheap, few enough to stay in a processor's cache."""
BATCH: Final = 256
"""Trials whose interval counts as one look at the ends, when it is asked whether they have settled. Trials that are
spread evenly are spread over one batch, so that batches stay independent of each other."""
MOST_TRIALS: Final = 4096
_FEWEST_TRIALS: Final = 1024
_SETTLED: Final = 0.08
"""Ends of an interval have settled when they are known to this share of the standard uncertainty, as twice their own:
what 4,500 independent trials of a normal quantity give."""


@dataclass(frozen=True)
class Interval:
    """A coverage interval with the standard uncertainty and the number of trials behind it."""

    low: float
    high: float
    standard_uncertainty: float
    trials: int


def coverage_interval(values: FloatArray, confidence: float, *, shortest: bool = False) -> tuple[float, float]:
    """Return the interval that holds a share `confidence` of trials, probabilistically symmetric or the shortest one.

    Source: JCGM 101:2008, clauses 7.7.2 and 5.3.3 to 5.3.4.
    """
    first, last = _held(values.size, confidence)
    if shortest:
        ordered, held = np.sort(values), last - first
        first = int(np.argmin(ordered[held:] - ordered[: values.size - held]))
        last = first + held
    else:
        ordered = np.partition(values, (first, last))
    return float(ordered[first]), float(ordered[last])


def _held(count: int, confidence: float) -> tuple[int, int]:
    """Return the ranks between which a share `confidence` of so many trials lies, with as many left out either side."""
    held = min(max(round(confidence * count), 1), count - 1) if count > 1 else 0
    first = (count - held) // 2
    return first, min(first + held, count - 1)


def interval_about(value: float, values: FloatArray, confidence: float) -> tuple[float, float]:
    """Return the coverage interval of possible values of what was read as `value`, which it always holds.

    Near a limit of what is possible, or where a cause is all but sure, the doubts may all point one way; what was read
    is never ruled out by them.
    """
    low, high = coverage_interval(values, confidence)
    return min(low, value), max(high, value)


def propagate(
    model: Callable[[np.random.Generator, int], FloatArray],
    confidence: float,
    *,
    trials: int | None = None,
    seed: int = 0,
    shortest: bool = False,
) -> Interval:
    """Return the interval of a quantity from trials of its model.

    Parameters
    ----------
    model : takes a generator and a number of trials, returns that many values of the quantity
    confidence : coverage probability, between 0 and 1
    trials : how many; None runs blocks until both ends are known to 8 % of the standard uncertainty
    seed : of numpy's PCG64; the same seed gives the same interval
    shortest : the shortest interval instead of the probabilistically symmetric one
    """
    rng = np.random.default_rng(seed)

    def block(count: int) -> dict[str, FloatArray]:
        return {"": model(rng, count)}

    values = run_blocks(block, confidence, trials=trials, deciding=[""])[""]
    low, high = coverage_interval(values, confidence, shortest=shortest)
    return Interval(low, high, float(np.std(values, ddof=1)), values.size)


def run_blocks(
    block: Callable[[int], dict[str, FloatArray]],
    confidence: float,
    *,
    trials: int | None,
    deciding: Collection[str],
    size: int = BLOCK,
    most: int = MOST_TRIALS,
) -> dict[str, FloatArray]:
    """Return trials of several quantities made together, each (trials,), run block after block.

    Parameters
    ----------
    block : takes a number of trials, returns that many values of each quantity
    trials : how many in all; None stops when the intervals of the `deciding` quantities have settled,
        or at `most`, which a normal quantity reaches first
    size : trials of one block, which bounds the memory
    """
    wanted = most if trials is None else trials
    done: list[dict[str, FloatArray]] = []
    count = 0
    while count < wanted:
        step = min(size, wanted - count)
        done.append(block(step))
        count += step
        enough = trials is None and count >= _FEWEST_TRIALS
        if enough and all(settled(np.concatenate([b[key] for b in done]), confidence) for key in deciding):
            break
    return {key: np.concatenate([b[key] for b in done]) for key in done[0]}


def settled(values: FloatArray, confidence: float) -> bool:
    """Whether the ends of the interval, as means over batches of trials, are known well enough (JCGM 101, 7.9.4).

    Trials that did not show the quantity (NaN) never settle it, nor do fewer than three batches.
    """
    if values.size < 3 * BATCH or np.isnan(values).any():
        return False
    batches = values[: values.size - values.size % BATCH].reshape(-1, BATCH)
    first, last = _held(BATCH, confidence)
    ends = np.partition(batches, (first, last), axis=1)[:, [first, last]]
    spread = np.std(ends, axis=0, ddof=1) / np.sqrt(len(batches))
    return bool(np.all(2.0 * spread <= _SETTLED * np.std(values, ddof=1) + 1e-300))


def rectangular_u(half_width: float) -> float:
    """Return the standard uncertainty of a quantity known to lie within ± `half_width` (JCGM 100:2008, 4.3.7)."""
    return half_width / float(np.sqrt(3.0))


def mismatch_limits_db(first: float, second: float) -> tuple[float, float]:
    """Return the limits 20 log10(1 ± |Γ1 Γ2|) in dB of the error at a joint of two reflections.

    Source: EA-4/02 M:2022, example S7; the form is that of JCGM 100 for a known magnitude and an unknown phase.
    """
    product = abs(first * second)
    return float(20 * np.log10(1 - product)), float(20 * np.log10(1 + product))


def mismatch_u_db(first: float, second: float) -> float:
    """Return the standard uncertainty 8.686 |Γ1 Γ2|/√2 in dB of the error at a joint: U-shaped, phase unknown."""
    return float(20 / np.log(10) * abs(first * second) / np.sqrt(2.0))
