"""A drive table in; how likely each explanation of its gain changes is, as models that were fitted to it, out.

Each rival says what sweep k should read at node j: y = g_j - D_kj + b_k + n_kj, with the device's own gain g_j free,
the flat doubts b (reading, mismatch, pads within tolerance and shared by sweeps) and the node noise n as priors.

* clean: D = 0;
* output-limited, input-limited, receiver-overload: D is a law of limiting over the level at the device's output, at its
  input, at port 2; the level of the 1 dB point is equally likely at every decibel of a reach (for the receiver normal
  round its stated level), Rapp's p in its logarithm, and the strongest node must have dropped by 0.2 dB;
* pad-value: D = 0, one pad off by a normal offset far beyond its tolerance;
* not-repeating: D = 0, one sweep (or every one) off by a normal offset, with or without a shift in tuning.

Rivals are compared by their marginal likelihood (:mod:`benchtool.evidence`), in which a model with more freedom pays
for it. The integral over b is exact, that over g_j is taken at its best value, those over the law are sums on a grid
that closes in on the likely part; a law that cannot catch up with the best any more is not looked at more closely.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np

from benchtool.drive_table import DriveTable
from benchtool.evidence import Integrated, normal_equations, prior_precision
from benchtool.law_search import PRIOR, Cause, Doubts, Weighed, flat_precision, merge, weigh_limiting
from benchtool.model import FloatArray

__all__ = ["Cause", "Rival", "log_evidence", "rivals"]

_OFFSETS_DB: Final = ((1.5, 0.8), (6.0, 0.2))
"""Standard deviations, and their shares, of what a wrong pad or a sweep that does not repeat is off by: a value that is
not right, or another pad altogether."""
_RESTLESS_DB: Final = 0.7
_RESTLESS_TUNING: Final = 1.0
_TUNING: Final = 3.0
"""Standard deviation of a shift in tuning, in hundredths of the span of the nodes."""


@dataclass(frozen=True)
class Rival:
    """One explanation: its cause, what in particular (a pad, a sweep), its probability and what it estimates.

    `value` with standard uncertainty `u`: for a limiting rival the 1 dB point in dBm at its own place, for a pad what
    it truly loses beyond its stated value, for a sweep how far its gain reads high, dB. `chi2` is the misfit at the
    best point, `freedom` the number of readings it had to explain.
    """

    cause: Cause
    about: str
    probability: float
    value: float | None
    u: float | None
    chi2: float
    freedom: int


def rivals(table: DriveTable) -> tuple[Rival, ...]:
    """Return every explanation of the table, most likely first; probabilities sum to one."""
    # By the logarithm: probabilities of all but the best may be too small to tell apart.
    weighed = sorted(_weighed(table), key=lambda each: -each.log_weight)
    total = np.logaddexp.reduce([each.log_weight for each in weighed])
    freedom = (table.sweeps - 1) * table.frequency_hz.size
    return tuple(
        Rival(w.cause, w.about, float(np.exp(w.log_weight - total)), w.value, w.u, w.chi2, freedom) for w in weighed
    )


def log_evidence(table: DriveTable) -> float:
    """Return how likely the readings of a table are by all explanations together, as a logarithm.

    It compares tables of as many sweeps with the same lines.
    """
    return float(np.logaddexp.reduce([each.log_weight for each in _weighed(table)]))


def _weighed(table: DriveTable) -> list[Weighed]:
    doubts = Doubts.of(table)
    lawless = _Lawless(table, doubts)
    return [
        lawless.weigh("clean", "", []),
        *weigh_limiting(table, doubts),
        *_pad_values(table, lawless),
        *_not_repeating(table, lawless),
    ]


@dataclass(frozen=True, eq=False)
class _Extra:
    """A freedom beyond the doubts: how far it reaches into each sweep, (k,), along which pattern, and its spread."""

    reach: FloatArray
    along: Literal["flat", "slope", "bend"]
    u: float
    pad: str = ""
    """The pad whose tolerance this freedom replaces."""


class _Lawless:
    """Explanations in which no gain drops: their normal equations are made once, and each takes its own freedoms."""

    def __init__(self, table: DriveTable, doubts: Doubts) -> None:
        self.table, self._doubts = table, doubts
        patterns = doubts.patterns
        columns = np.concatenate([patterns, [table.slope_db, table.bend_db]])
        self._place = {"flat": 0, "slope": len(patterns), "bend": len(patterns) + 1}
        gain, weight = table.gain_db[None], 1.0 / table.noise_db[None] ** 2
        left = gain - np.sum(weight * gain, axis=1, keepdims=True) / np.sum(weight, axis=1, keepdims=True)
        every = np.repeat(columns[None, :, None], table.sweeps, axis=2)
        self._equations = normal_equations(weight, np.ones_like(gain), left, every)
        self._size = len(columns)
        self._settled: dict[str, Integrated] = {}

    def _but_for(self, pad: str) -> Integrated:
        """Return what the doubts leave, the tolerance of one pad not being among them."""
        if pad not in self._settled:
            doubts = self._doubts.precisions
            flat = flat_precision(self.table, pad) if pad else doubts[0]
            self._settled[pad] = self._equations.integrated(prior_precision([flat, *doubts[1:]]))
        return self._settled[pad]

    def weigh(self, cause: Cause, about: str, extras: Sequence[_Extra], share: float = 1.0) -> Weighed:
        """Return one explanation; the first of its extras is what it estimates."""
        columns = np.zeros((self._size, self.table.sweeps, len(extras)))
        for index, extra in enumerate(extras):
            columns[self._place[extra.along], :, index] = extra.reach
        doubts = self._but_for(next((extra.pad for extra in extras if extra.pad), ""))
        spread = np.array([extra.u for extra in extras])
        wanted = columns.reshape(self._size * self.table.sweeps, len(extras))
        log, chi2, mean, covariance = doubts.with_extras(wanted, spread)
        value, u = (float(mean[0]), float(np.sqrt(covariance[0, 0]))) if extras else (None, None)
        return Weighed(cause, about, log + float(np.log(PRIOR[cause] * share)), value, u, chi2)

    def offset(
        self, cause: Cause, about: str, reach: FloatArray, share: float, others: tuple[_Extra, ...] = (), pad: str = ""
    ) -> Weighed:
        """Return the rival in which something is off by a small or, less likely, a large offset."""
        parts = [
            self.weigh(cause, about, [_Extra(reach, "flat", spread, pad), *others], share * of_them)
            for spread, of_them in _OFFSETS_DB
        ]
        return merge(cause, about, parts)


def _pad_values(table: DriveTable, lawless: _Lawless) -> Iterator[Weighed]:
    """Yield one rival for each pad that the sweeps could show to be off."""
    visible = [pad for pad in table.pads if np.ptp(pad.reads) > 0.0]
    for pad in visible:
        yield lawless.offset("pad-value", pad.name, pad.reads, 1.0 / len(visible), pad=pad.name)


def _not_repeating(table: DriveTable, lawless: _Lawless) -> Iterator[Weighed]:
    """Yield the ways in which a device may have changed between sweeps: one sweep off, tuned off, or all restless."""
    each = np.eye(table.sweeps)
    for alone, file in zip(each, table.files, strict=True):
        yield lawless.offset("not-repeating", file, alone, 0.4 / table.sweeps)
        shift = _Extra(alone, "slope", _TUNING)
        yield lawless.offset("not-repeating", file, alone, 0.3 / table.sweeps, (shift,))
    restless = [_Extra(alone, "flat", _RESTLESS_DB) for alone in each]
    restless += [_Extra(alone, "slope", _RESTLESS_TUNING) for alone in each]
    restless += [_Extra(alone, "bend", _RESTLESS_TUNING) for alone in each]
    yield lawless.weigh("not-repeating", "", restless, 0.3)
