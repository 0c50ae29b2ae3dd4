"""A drive table in; how likely it is that its gain changes are limiting, and where the 1 dB point then lies, out.

Limiting at the output, at the input or in the receiver is a law of limiting over the level there (see
:mod:`benchtool.rivals` for the whole model). The evidence is a sum over the 1 dB point and, for Rapp's law, over p on a
grid that closes in on the likely part; a law that cannot catch up with the best any more is not looked at more closely.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final, Literal, TypeAlias

import numpy as np

from benchtool.drive_table import DriveTable, MismatchDoubt
from benchtool.evidence import NormalEquations, normal_equations, prior_precision
from benchtool.limiting import HARDEST_P, SOFTEST_P, Law, rapp_drop_and_slope
from benchtool.model import FloatArray

__all__ = ["PRIOR", "Cause", "Doubts", "Weighed", "flat_precision", "merge", "weigh_limiting"]

Cause: TypeAlias = Literal[
    "clean", "output-limited", "input-limited", "receiver-overload", "pad-value", "not-repeating"
]

PRIOR: Final[Mapping[Cause, float]] = {
    "clean": 0.4,
    "output-limited": 0.15,
    "input-limited": 0.1,
    "receiver-overload": 0.15,
    "pad-value": 0.1,
    "not-repeating": 0.1,
}
"""How likely each cause is before anything was measured (a judgement, no source)."""
_REACH_BELOW_DB: Final = 25.0
_REACH_ABOVE_DB: Final = 6.0
"""How far below and above the strongest level the 1 dB point may lie."""
_LEAST_DROP_DB: Final = 0.2
"""A drop that is worth a cause."""
_LAW_DOUBT: Final = 0.02
_LAW_ROUGHNESS: Final = 0.005
"""Share of a drop by which real devices stray from every law: alike over one sweep, and from node to node."""
_DETUNING: Final = 0.1
"""Standard deviation of how far limiting tunes a device off, in hundredths of the span of the nodes for each dB."""
_DETUNES_SHARE: Final = 0.3
"""Share of belief that it does so at all."""
_RECEIVER_AT_DB: Final = 1.0
_RECEIVER_SPREAD_DB: Final = 3.0
"""The 1 dB point of the receiver over the level from which it is stated to compress: mean and standard deviation."""
_RECEIVER_UNSTATED: Final = (0.0, 7.0)
"""The 1 dB point in dBm of a low-cost receiver of which nothing is stated: mean and standard deviation (common
practice, no source)."""
_LEAST_U_DB: Final = 0.005
_SMALL_DB: Final = 0.015
"""A form of mismatch that reaches no further than this, less than the doubt of a node, counts as flat."""
_LAWS: Final = ((Law("tanh"), 0.1), (Law("cubic"), 0.1), (None, 0.8))
"""Laws with their shares of belief; None is Rapp's, over every p."""
_GRIDS: Final = ((16, 5), (13, 7), (14, 9))
"""Places of the 1 dB point, and values of Rapp's p, that each look takes in."""
_NEWTON_STEPS: Final = 6
_STILL_DB: Final = 0.01
"""A step of Newton's method smaller than this is the last: what is left is the square of it."""
_MATTERS: Final = 12.0
_HOPELESS: Final = 30.0
"""Logarithm of how much less likely than the best a law may be and still be looked at more closely."""


@dataclass(frozen=True)
class Weighed:
    """A rival with the logarithm of prior times evidence, before all are normalised."""

    cause: Cause
    about: str
    log_weight: float
    value: float | None
    u: float | None
    chi2: float


def flat_precision(table: DriveTable, but_for: str = "") -> FloatArray:
    """Return the precision (k, k) of the flat doubts of the sweeps: readings, pads but for one, small mismatch."""
    covariance = np.diag(table.reading_u_db**2 + _LEAST_U_DB**2)
    for form in table.mismatch:
        if _is_small(form):
            covariance = covariance + form.between * np.mean(form.pattern**2)
    for pad in table.pads:
        if pad.name == but_for:
            continue
        reads = pad.reads - pad.reads[0]
        covariance = covariance + pad.u_db**2 * np.outer(reads, reads)
    return np.asarray(np.linalg.inv(covariance))


def _is_small(form: MismatchDoubt) -> bool:
    """Whether a form of mismatch reaches so little far that its pattern over the nodes could not be told."""
    return bool(np.max(np.abs(form.between)) * np.max(form.pattern**2) < _SMALL_DB**2)


@dataclass(frozen=True, eq=False)
class Doubts:
    """What flat doubts, first, and the forms of mismatch add to the nodes of a sweep, and their precisions."""

    patterns: FloatArray
    """(c, j)."""
    precisions: tuple[FloatArray, ...]
    """(k, k) each, between the sweeps."""

    @classmethod
    def of(cls, table: DriveTable) -> Doubts:
        """Return the doubts of a drive table."""
        patterns, precisions = [np.ones(table.frequency_hz.size)], [flat_precision(table)]
        for form in table.mismatch:
            # What equal lines have in common goes with the gain of the device, which is free.
            between = form.between
            if not _is_small(form):
                patterns.append(form.pattern)
                precisions.append(
                    np.asarray(np.linalg.inv(between + _LEAST_U_DB**2 * np.eye(table.sweeps)), np.float64)
                )
        return cls(np.array(patterns), tuple(precisions))


def weigh_limiting(table: DriveTable, doubts: Doubts) -> list[Weighed]:
    """Return the rivals in which gain drops with the level at the output, at the input, and at port 2."""
    causes: tuple[Cause, ...] = ("output-limited", "input-limited", "receiver-overload")
    # With the same output pads throughout, the levels at port 2 and at the output differ by one number only.
    alike = bool(np.ptp(table.output_loss_db) == 0.0)
    sought: list[tuple[Cause, ...]] = [causes[::2], causes[1:2]] if alike else [(cause,) for cause in causes]
    searches = [_LevelSearch(table, doubts, some) for some in sought]
    for number, (places, shapes) in enumerate(_GRIDS):
        for search in searches:
            search.look(places, shapes, first=number == 0)
        top = max(law.log_best for search in searches for law in search.laws)
        for search in searches:
            search.live = [law for law in search.live if law.log_best + law.between > top - _HOPELESS]
    found = [weighed for search in searches for law in search.laws for weighed in law.found]
    return [merge(cause, "", [weighed for weighed in found if weighed.cause == cause]) for cause in causes]


def merge(cause: Cause, about: str, parts: Sequence[Weighed]) -> Weighed:
    """Return variants of one rival as one: weights added, the estimate a mixture."""
    parts = [part for part in parts if part.value is not None]
    if not parts:
        return Weighed(cause, about, -np.inf, None, None, float("inf"))
    total = float(np.logaddexp.reduce([part.log_weight for part in parts]))
    belief = np.exp([part.log_weight - total for part in parts])
    places, spreads = np.array([part.value for part in parts]), np.array([part.u for part in parts])
    value = float(belief @ places)
    u = float(np.sqrt(belief @ (spreads**2 + (places - value) ** 2)))
    return Weighed(cause, about, total, value, u, min(part.chi2 for part in parts))


def _log_level_prior(table: DriveTable, cause: Cause, p1db: FloatArray) -> FloatArray:
    """Return the logarithm of the density of the 1 dB point, per dB."""
    if cause != "receiver-overload" or not table.levels_known:
        return np.full(p1db.shape, -np.log(_REACH_BELOW_DB + _REACH_ABOVE_DB))
    stated = table.port2_compression_dbm
    mean, spread = _RECEIVER_UNSTATED if stated is None else (stated + _RECEIVER_AT_DB, _RECEIVER_SPREAD_DB)
    spread = float(np.hypot(spread, table.source_half_width_db))
    return np.asarray(-0.5 * ((p1db - mean) / spread) ** 2 - np.log(spread * np.sqrt(2 * np.pi)))


@dataclass(frozen=True)
class _Way:
    """One way for a cause to act, with its share of belief; the level at its place is `shift_db` over the search's."""

    cause: Cause
    share: float
    detunes: bool
    shift_db: float


class _LawRange:
    """Where the 1 dB point by one law may lie and, where `law` is None, which of Rapp's p it may have.

    A knee of another p that fits as well has its 1 dB point elsewhere: the likely part is a ridge that runs slantwise,
    and the grid follows it. `found` is what the last look made of each way, `log_best` the best log weight that it saw,
    `between` how much better a point between the nodes may be.
    """

    def __init__(self, law: Law | None, share: float, low: float, high: float) -> None:
        self.law, self.share = law, share
        self._soft, self._hard = float(np.log(SOFTEST_P)), float(np.log(HARDEST_P))
        self._ridge = np.array([self._soft]), np.array([0.5 * (low + high)])
        self._below, self._above = 0.5 * (low - high), 0.5 * (high - low)
        self.found: list[Weighed] = []
        self.log_best, self.between = -np.inf, 0.0
        self._score = np.zeros((0, 0))

    def grid(self, places: int, shapes: int) -> tuple[FloatArray, FloatArray]:
        """Return 1 dB points and logarithms of p, (n,) each, the latter running fastest."""
        self._shape = np.linspace(self._soft, self._hard, shapes) if self.law is None else np.array([self._soft])
        self._offset = np.linspace(self._below, self._above, places)
        self._p1db = self._offset[:, None] + np.interp(self._shape, *self._ridge)
        return self._p1db.ravel(), np.tile(self._shape, places)

    def take(self, ways: Sequence[tuple[Cause, FloatArray, FloatArray, FloatArray]]) -> None:
        """Take the log weight, level and misfit of each cause's ways on the grid, (n,) each."""
        places, shapes = self._p1db.shape
        # The trapezoidal rule: what lies at the ends of p has half a cell.
        share = np.full(places, self._offset[1] - self._offset[0])
        share[[0, -1]] *= 0.5
        of_shape = np.ones(shapes)
        if self.law is None:
            of_shape *= float(self._shape[1] - self._shape[0]) / float(np.log(HARDEST_P / SOFTEST_P))
            of_shape[[0, -1]] *= 0.5
        cells = np.outer(share, of_shape).ravel()
        self.found, self.log_best, self.between = [], -np.inf, 0.0
        score = np.full((places, shapes), -np.inf)
        for cause, log, level, chi2 in ways:
            best = float(np.max(log))
            if best == -np.inf:
                continue
            self.found.append(_summed(cause, log, level, chi2, cells))
            grid = log.reshape(score.shape)
            np.maximum(score, grid - best, out=score)
            if best > self.log_best:
                self.log_best, self.between = best, _between(grid)
        self._score = score

    def close_in(self) -> None:
        """Keep what matters of the last grid, and learn the ridge."""
        score = self._score
        if not self.found:
            return
        step = self._offset[1] - self._offset[0]
        row, lift, slack = _tops(score)
        top = self._p1db[0] + row * step
        matters = np.flatnonzero(lift + slack > -_MATTERS)
        self._ridge = self._shape[matters], top[matters]
        near = score[:, matters] > -_MATTERS
        # At least the node of the top itself, and a step beyond what matters either way.
        near[np.rint(row[matters]).astype(np.intp), np.arange(matters.size)] = True
        first, last = np.argmax(near, axis=0), len(near) - 1 - np.argmax(near[::-1], axis=0)
        self._below = float(np.min(first - 1 - row[matters])) * step
        self._above = float(np.max(last + 1 - row[matters])) * step
        if self.law is None:
            self._soft = float(self._shape[max(int(matters[0]) - 1, 0)])
            self._hard = float(self._shape[min(int(matters[-1]) + 1, self._shape.size - 1)])


class _LevelSearch:
    """The evidence of causes that follow the same level but for one number, summed over laws and 1 dB points.

    Each look takes in a grid for every law and closes in on its likely part.
    """

    def __init__(self, table: DriveTable, doubts: Doubts, causes: Sequence[Cause]) -> None:
        self.table = table
        self._follows_gain = "input-limited" not in causes
        loss = table.output_loss_db if causes == ("receiver-overload",) else np.zeros(table.sweeps)
        # Level less the gain that it follows, (k, j).
        self._offset = table.drive_dbm - loss[:, None]
        self._ways: list[_Way] = []
        for cause in causes:
            shift = float(loss[0] - table.output_loss_db[0]) if cause == "receiver-overload" else 0.0
            # A tuned output that limits may also be pulled in tune; that is one of two ways, not a freedom for all.
            detuned = _DETUNES_SHARE if cause == "output-limited" else 0.0
            self._ways += [_Way(cause, 1.0 - detuned, False, shift)]
            self._ways += [_Way(cause, detuned, True, shift)] if detuned else []
        strongest = float(np.max(self._offset + (table.gain_db if self._follows_gain else 0.0)))
        self._reach = strongest - _REACH_BELOW_DB, strongest + _REACH_ABOVE_DB
        self.laws = [_LawRange(law, share, *self._reach) for law, share in _LAWS]
        self.live = self.laws
        self._patterns = doubts.patterns
        law_out, detuning = (np.eye(table.sweeps) / spread**2 for spread in (_LAW_DOUBT, _DETUNING))
        plain = [*doubts.precisions, law_out]
        self._detunes = any(way.detunes for way in self._ways)
        self._prior = prior_precision([*plain, detuning] if self._detunes else plain)
        self._plain = len(plain) * table.sweeps

    def look(self, places: int, shapes: int, *, first: bool = False) -> None:
        """Weigh a grid of so many 1 dB points, and values of p, for each law that is still live.

        The nodes of the first look lie further apart than a hard knee is wide. There each stands for its cell: how
        far the drop changes within it counts as noise, or all nodes might miss what lies between them.
        """
        if not self.live:
            return
        for law in self.live:
            law.close_in()
        grids = [law.grid(places, shapes) for law in self.live]
        ends = np.cumsum([place.size for place, _ in grids])
        parts = [slice(int(end) - place.size, int(end)) for end, (place, _) in zip(ends, grids, strict=True)]
        p1db, log_p = (np.concatenate(column) for column in zip(*grids, strict=True))
        blur = (self._reach[1] - self._reach[0]) / (places - 1) / np.sqrt(12.0) if first else 0.0
        left, slope, rate, drop = self._fit_gain(p1db, log_p, parts)
        seen = np.max(drop, axis=(1, 2)) >= _LEAST_DROP_DB
        seen &= (p1db >= self._reach[0]) & (p1db <= self._reach[1])
        # With all freedoms, and with those that every way has.
        whole, plain = self._equations(left, slope, drop, blur * rate).log_evidence(self._prior, self._plain)
        weighed: list[tuple[Cause, FloatArray, FloatArray, FloatArray]] = []
        for way in self._ways:
            log, chi2 = whole if way.detunes else plain
            level = p1db + way.shift_db
            prior = _log_level_prior(self.table, way.cause, level) + np.log(way.share * PRIOR[way.cause])
            weighed.append((way.cause, np.where(seen, log + prior, -np.inf), level, chi2))
        for law, part in zip(self.live, parts, strict=True):
            belief = float(np.log(law.share))
            law.take([(cause, log[part] + belief, level[part], chi2[part]) for cause, log, level, chi2 in weighed])

    def _equations(self, left: FloatArray, slope: FloatArray, drop: FloatArray, blur_db: FloatArray) -> NormalEquations:
        """Return the equations with the doubts, how far the law may be out and, where a way has it, detuning."""
        c = len(self._patterns)
        columns = np.empty((len(drop), c + 1 + self._detunes, *drop.shape[1:]))
        columns[:, :c] = self._patterns[:, None]
        columns[:, c] = drop
        if self._detunes:
            columns[:, c + 1] = np.max(drop, axis=2)[..., None] * self.table.slope_db
        weight = 1.0 / (self.table.noise_db**2 + (_LAW_ROUGHNESS * drop) ** 2 + blur_db**2)
        return normal_equations(weight, slope, left, columns)

    def _fit_gain(
        self, p1db: FloatArray, log_p: FloatArray, parts: Sequence[slice]
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Return what is left of the gain after the drop, its slope with g_j, the drop's rate with level, and the drop.

        All (G, k, j).
        """
        p = np.exp(log_p)[:, None, None]

        def drop_of(excess: FloatArray) -> tuple[FloatArray, FloatArray]:
            drop, rate = np.empty_like(excess), np.empty_like(excess)
            for law, part in zip(self.live, parts, strict=True):
                if law.law is None:
                    drop[part], rate[part] = rapp_drop_and_slope(excess[part], p[part])
                else:
                    drop[part], rate[part] = law.law.drop_and_slope_past_p1db(excess[part])
            return drop, rate

        gain, weight = self.table.gain_db[None], 1.0 / self.table.noise_db[None] ** 2
        base = self._offset[None] - p1db[:, None, None]
        if not self._follows_gain:
            # The level is the same at every node but for a tilt of the source, and does not depend on g_j.
            drop, rate = drop_of(base)
            raised = gain + drop
            own = np.sum(weight * raised, axis=1, keepdims=True) / np.sum(weight, axis=1, keepdims=True)
            return raised - own, np.ones_like(drop), rate, drop
        own = np.repeat(np.max(gain, axis=1, keepdims=True), p1db.size, axis=0)
        for _ in range(_NEWTON_STEPS):
            drop, rate = drop_of(base + own)
            slope = np.clip(1.0 - rate, 0.05, 1.0)
            moves = weight * slope
            move = np.sum(moves * (gain - own + drop), axis=1, keepdims=True)
            move = np.clip(move / np.sum(moves * slope, axis=1, keepdims=True), -5.0, 5.0)
            own = own + move
            if np.max(np.abs(move)) < _STILL_DB:
                # So little that the drop follows in a straight line.
                drop += rate * move
                break
        else:
            drop, rate = drop_of(base + own)
            slope = np.clip(1.0 - rate, 0.05, 1.0)
        return gain - own + drop, slope, rate, drop


def _summed(cause: Cause, log: FloatArray, p1db: FloatArray, chi2: FloatArray, cells: FloatArray) -> Weighed:
    """Return the sum of a grid of log weights (G,), with mean and spread of the 1 dB point over it."""
    best = float(np.max(log))
    belief = np.exp(log - best) * cells
    total = float(np.sum(belief))
    belief /= total
    value = float(belief @ p1db)
    u = float(np.sqrt(belief @ (p1db - value) ** 2))
    return Weighed(cause, "", best + float(np.log(total)), value, u, float(chi2[int(np.argmax(log))]))


def _tops(score: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return row and height of the highest point of each column, by the parabola through three nodes, and its slack.

    Where nodes lie far apart the column is no parabola: the top may stand higher by as much as one may rise at the most
    between two nodes, an eighth of the second difference.
    """
    row, columns = np.argmax(score, axis=0), np.arange(score.shape[1])
    middle = np.clip(row, 1, len(score) - 2)
    early, top, late = (score[middle + k, columns] for k in (-1, 0, 1))
    with np.errstate(divide="ignore", invalid="ignore"):
        slope, bend = 0.5 * (late - early), early - 2.0 * top + late
        shift = -slope / bend
        inside = (middle == row) & (bend < 0.0) & np.isfinite(bend)
        height = top + 0.5 * slope * shift
    slack = np.where(inside, -0.125 * bend, 0.0)
    return np.where(inside, row + shift, row), np.where(inside, height, score[row, columns]), slack


def _between(grid: FloatArray) -> float:
    """Return how far the peak between the nodes may stand above the largest node of a grid of logarithms.

    For a parabola that is an eighth of the second difference at most; the first differences are taken whole.
    """
    row, column = np.unravel_index(int(np.argmax(grid)), grid.shape)
    rise = 0.0
    for line, at in ((grid[:, column], int(row)), (grid[row], int(column))):
        steps = [line[at] - line[near] for near in (at - 1, at + 1) if 0 <= near < line.size]
        rise += max(steps, default=0.0)
    return float(rise)
