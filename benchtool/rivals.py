"""A drive table in; how likely each explanation of its gain changes is, as models that were fitted to it, out.

Each rival says what sweep k should read at node j: y = g_j - D_kj + b_k + n_kj, with the device's own gain g_j free,
the flat doubts b (reading, mismatch, pads within tolerance and shared by sweeps) and the node noise n as priors.

* clean: D = 0;
* output-limited, input-limited, receiver-overload: D is a law of limiting over the level at the device's output, at its
  input, at port 2; the level of the 1 dB point is equally likely at every decibel of a reach (for the receiver normal
  round its stated level), Rapp's p in its logarithm, and the strongest node must have dropped by 0.2 dB;
* pad-value: D = 0, one pad off by a normal offset far beyond its tolerance;
* not-repeating: D = 0, one sweep (or every one) off by a normal offset, with or without a shift in tuning.

Rivals are compared by their marginal likelihood (evidence), in which a model with more freedom pays for it: D. J. C.
MacKay, "Bayesian interpolation", Neural Computation 4(3), 1992, 415-447. The integral over b is exact, that over g_j is
taken at its best value, those over the law are sums on a grid that closes in on the likely part.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Final, Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag

from benchtool.drive_table import DriveTable
from benchtool.limiting import HARDEST_P, SOFTEST_P, Law
from benchtool.model import FloatArray

__all__ = ["Cause", "Rival", "rivals"]

Cause: TypeAlias = Literal[
    "clean", "output-limited", "input-limited", "receiver-overload", "pad-value", "not-repeating"
]

_PRIOR: Final[dict[Cause, float]] = {
    "clean": 0.4,
    "output-limited": 0.15,
    "input-limited": 0.1,
    "receiver-overload": 0.15,
    "pad-value": 0.1,
    "not-repeating": 0.1,
}
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
_OFFSETS_DB: Final = ((1.5, 0.8), (6.0, 0.2))
"""Standard deviations, and their shares, of what a wrong pad or a sweep that does not repeat is off by: a value that is
not right, or another pad altogether."""
_RESTLESS_DB: Final = 0.7
_RESTLESS_TUNING: Final = 1.0
_TUNING: Final = 3.0
"""Standard deviation of a shift in tuning, in hundredths of the span of the nodes."""
_LEAST_U_DB: Final = 0.005
_STEPS, _PASSES, _NEWTON_STEPS = 31, 3, 6
_MATTERS: Final = 12.0

Drop: TypeAlias = Callable[[FloatArray], FloatArray]


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


@dataclass(frozen=True)
class _Weighed:
    """A rival with the logarithm of prior times evidence, before all are normalised."""

    cause: Cause
    about: str
    log_weight: float
    value: float | None
    u: float | None
    chi2: float


@dataclass(frozen=True, eq=False)
class _Extra:
    """A freedom beyond the doubts: what it adds to each node, (k, j), for each unit, and its standard deviation."""

    pattern: FloatArray
    u: float
    pad: str = ""
    """The pad whose tolerance this freedom replaces."""


@dataclass(frozen=True, eq=False)
class _Evidence:
    """Log evidence (G,), misfit (G,), and the extras' means and standard uncertainties, (G, extras)."""

    log: FloatArray
    chi2: FloatArray
    mean: FloatArray
    u: FloatArray


def rivals(table: DriveTable) -> tuple[Rival, ...]:
    """Return every explanation of the table, most likely first; probabilities sum to one."""
    weighed = [
        _without_law(table, "clean", "", []),
        _limiting(table, "output-limited"),
        _limiting(table, "input-limited"),
        _limiting(table, "receiver-overload"),
        *_pad_values(table),
        *_not_repeating(table),
    ]
    total = np.logaddexp.reduce([each.log_weight for each in weighed])
    freedom = (table.sweeps - 1) * table.frequency_hz.size
    found = [
        Rival(w.cause, w.about, float(np.exp(w.log_weight - total)), w.value, w.u, w.chi2, freedom) for w in weighed
    ]
    return tuple(sorted(found, key=lambda rival: -rival.probability))


def _flat_covariance(table: DriveTable, but_for: str) -> FloatArray:
    covariance = np.diag(table.reading_u_db**2 + _LEAST_U_DB**2)
    for pad in table.pads:
        if pad.name == but_for:
            continue
        reads = pad.reads - pad.reads[0]
        covariance = covariance + pad.u_db**2 * np.outer(reads, reads)
    return np.asarray(covariance)


def _weigh(
    table: DriveTable,
    left: FloatArray,
    slope: FloatArray,
    drop: FloatArray,
    extras: Sequence[_Extra] = (),
    detunes: bool = False,
) -> _Evidence:
    """Return the evidence of what is `left` (G, k, j) after a drop, whose readings move by `slope` with g_j."""
    weight = 1.0 / (table.noise_db**2 + (_LAW_ROUGHNESS * drop) ** 2)
    moves = weight * slope
    per_node = np.sum(moves * slope, axis=1)
    basis, prior = _freedoms(table, drop, extras, detunes)

    def project(columns: FloatArray) -> FloatArray:
        """Return columns (G, k, j, m) weighted, with what g_j can take up taken out."""
        own = np.einsum("gkj,gkjm->gjm", moves, columns) / per_node[..., None]
        return np.asarray(weight[..., None] * columns - moves[..., None] * own[:, None])

    seen = project(basis)
    shape = (left.shape[0], -1, basis.shape[-1])
    flat, columns, rest = seen.reshape(shape), basis.reshape(shape), left.reshape(left.shape[0], -1, 1)
    curvature = np.swapaxes(columns, 1, 2) @ flat + prior
    pull = (np.swapaxes(flat, 1, 2) @ rest)[..., 0]
    spread = np.linalg.inv(curvature)
    mean = np.einsum("gmn,gn->gm", spread, pull)
    chi2 = np.sum(left * project(left[..., None])[..., 0], axis=(1, 2)) - np.sum(pull * mean, axis=1)
    # The part of the normalisation that g_j takes is left at its value without a law: a saturated device, whose
    # readings say nothing of g_j, must not be the more likely for it.
    normal = 0.5 * np.sum(np.log(weight), axis=(1, 2)) - 0.5 * np.sum(np.log(np.sum(weight, axis=1)), axis=1)
    occam = 0.5 * (np.linalg.slogdet(prior)[1] - np.linalg.slogdet(curvature)[1])
    variance = np.diagonal(spread, axis1=1, axis2=2)
    first = basis.shape[-1] - len(extras)
    return _Evidence(normal + occam - 0.5 * chi2, chi2, mean[:, first:], np.sqrt(variance[:, first:]))


def _freedoms(
    table: DriveTable, drop: FloatArray, extras: Sequence[_Extra], detunes: bool
) -> tuple[FloatArray, FloatArray]:
    """Return what the priors leave free, (G, k, j, m), and its precision, (m, m).

    First the flat doubts of each sweep, then the forms that mismatch may give it, then how far the law may be out in
    each and, if it `detunes`, how far limiting tunes the device off, then the extras.
    """
    trials, k, nodes = drop.shape
    each = np.eye(k)[:, None, :]
    flat = np.broadcast_to(each, (trials, k, nodes, k))
    parts: list[FloatArray] = [flat]
    replaced = next((extra.pad for extra in extras if extra.pad), "")
    known = [np.linalg.inv(_flat_covariance(table, replaced))]
    for form in table.mismatch:
        # What equal lines have in common goes with the gain of the device, which is free.
        if np.max(np.abs(form.between)) > _LEAST_U_DB**2:
            parts.append(np.broadcast_to(form.pattern[:, None] * each, (trials, k, nodes, k)))
            known.append(np.linalg.inv(form.between + _LEAST_U_DB**2 * np.eye(k)))
    widths: list[float] = []
    if np.any(drop):
        parts.append(drop[..., None] * each)
        widths += [_LAW_DOUBT] * k
    if detunes:
        parts.append(np.max(drop, axis=2)[..., None, None] * table.slope_db[:, None] * each)
        widths += [_DETUNING] * k
    parts += [np.broadcast_to(extra.pattern[..., None], (trials, k, nodes, 1)) for extra in extras]
    basis = np.concatenate(parts, axis=-1)
    free = np.array([*widths, *(extra.u for extra in extras)])
    return basis, block_diag(*known, np.diag(free**-2.0)) if free.size else block_diag(*known)


def _without_law(table: DriveTable, cause: Cause, about: str, extras: Sequence[_Extra], share: float = 1.0) -> _Weighed:
    gain = table.gain_db[None]
    weight = 1.0 / table.noise_db**2
    left = gain - np.sum(weight * gain, axis=1, keepdims=True) / np.sum(weight, axis=0)
    evidence = _weigh(table, left, np.ones_like(gain), np.zeros_like(gain), extras)
    value, u = (float(evidence.mean[0, 0]), float(evidence.u[0, 0])) if extras else (None, None)
    log_weight = float(evidence.log[0]) + float(np.log(_PRIOR[cause] * share))
    return _Weighed(cause, about, log_weight, value, u, float(evidence.chi2[0]))


def _offset(
    table: DriveTable, cause: Cause, about: str, flat: _Extra, others: tuple[_Extra, ...], share: float
) -> _Weighed:
    """Return the rival in which something is off by a small or, less likely, a large offset."""
    parts = [
        _without_law(table, cause, about, [replace(flat, u=spread), *others], share * of_them)
        for spread, of_them in _OFFSETS_DB
    ]
    return _merge(cause, about, parts)


def _pad_values(table: DriveTable) -> Iterator[_Weighed]:
    """Yield one rival for each pad that the sweeps could show to be off."""
    visible = [pad for pad in table.pads if np.ptp(pad.reads) > 0.0]
    for pad in visible:
        pattern = np.repeat(pad.reads[:, None], table.frequency_hz.size, axis=1)
        yield _offset(table, "pad-value", pad.name, _Extra(pattern, 1.0, pad.name), (), 1.0 / len(visible))


def _not_repeating(table: DriveTable) -> Iterator[_Weighed]:
    """Yield the ways in which a device may have changed between sweeps: one sweep off, tuned off, or all restless."""
    k, slope = table.sweeps, table.slope_db
    each = [np.outer(np.eye(k)[i], np.ones(slope.size)) for i in range(k)]
    tuned = [np.outer(np.eye(k)[i], slope) for i in range(k)]
    for i, file in enumerate(table.files):
        flat, shift = _Extra(each[i], 1.0), _Extra(tuned[i], _TUNING)
        yield _offset(table, "not-repeating", file, flat, (), 0.4 / k)
        yield _offset(table, "not-repeating", file, flat, (shift,), 0.3 / k)
    widened = [np.outer(np.eye(k)[i], table.bend_db) for i in range(k)]
    restless = [_Extra(pattern, _RESTLESS_DB) for pattern in each]
    restless += [_Extra(pattern, _RESTLESS_TUNING) for pattern in (*tuned, *widened)]
    yield _without_law(table, "not-repeating", "", restless, 0.3)


def _limiting(table: DriveTable, cause: Cause) -> _Weighed:
    """Return the rival in which gain drops with the level at the output, at the input, or at port 2."""
    laws = ((Law("tanh"), 0.1), (Law("cubic"), 0.1), (None, 0.8))
    if cause != "output-limited":
        return _merge(cause, "", [_over_law(table, cause, law, share) for law, share in laws])
    # A tuned output that limits may also be pulled in tune; that is one of two ways, not a freedom for all.
    ways = ((False, 1.0 - _DETUNES_SHARE), (True, _DETUNES_SHARE))
    return _merge(
        cause,
        "",
        [_over_law(table, cause, law, share * way, detunes) for law, share in laws for detunes, way in ways],
    )


def _merge(cause: Cause, about: str, parts: Sequence[_Weighed]) -> _Weighed:
    """Return variants of one rival as one: weights added, the estimate a mixture."""
    parts = [part for part in parts if part.value is not None]
    if not parts:
        return _Weighed(cause, about, -np.inf, None, None, float("inf"))
    total = float(np.logaddexp.reduce([part.log_weight for part in parts]))
    belief = np.exp([part.log_weight - total for part in parts])
    places, spreads = np.array([part.value for part in parts]), np.array([part.u for part in parts])
    value = float(belief @ places)
    u = float(np.sqrt(belief @ (spreads**2 + (places - value) ** 2)))
    return _Weighed(cause, about, total, value, u, min(part.chi2 for part in parts))


def _level_offset(table: DriveTable, cause: Cause) -> FloatArray:
    """Return drive, less output pads where the receiver counts, (k, j): level less the gain that it follows."""
    return table.drive_dbm - (table.output_loss_db[:, None] if cause == "receiver-overload" else 0.0)


def _log_level_prior(table: DriveTable, cause: Cause, p1db: FloatArray) -> FloatArray:
    """Return the logarithm of the density of the 1 dB point, per dB."""
    if cause != "receiver-overload" or not table.levels_known:
        return np.full(p1db.shape, -np.log(_REACH_BELOW_DB + _REACH_ABOVE_DB))
    stated = table.port2_compression_dbm
    mean, spread = _RECEIVER_UNSTATED if stated is None else (stated + _RECEIVER_AT_DB, _RECEIVER_SPREAD_DB)
    spread = float(np.hypot(spread, table.source_half_width_db))
    return np.asarray(-0.5 * ((p1db - mean) / spread) ** 2 - np.log(spread * np.sqrt(2 * np.pi)))


def _over_law(table: DriveTable, cause: Cause, law: Law | None, share: float, detunes: bool = False) -> _Weighed:
    """Return the evidence over the 1 dB point and, where `law` is None, over Rapp's p, on a grid that closes in."""
    offset = _level_offset(table, cause)
    follows = cause != "input-limited"
    strongest = float(np.max(offset + (table.gain_db if follows else 0.0)))
    low, high = strongest - _REACH_BELOW_DB, strongest + _REACH_ABOVE_DB
    soft, hard = np.log(SOFTEST_P), np.log(HARDEST_P)
    for _ in range(_PASSES):
        place = np.linspace(low, high, _STEPS)
        shape = np.linspace(soft, hard, 9) if law is None else np.zeros(1)
        p1db = np.repeat(place, shape.size)
        left, slope, drop = _fit_gain(table, offset, p1db, np.tile(shape, place.size), law, follows)
        evidence = _weigh(table, left, slope, drop, detunes=detunes)
        log = evidence.log + _log_level_prior(table, cause, p1db)
        log = np.where(np.max(drop, axis=(1, 2)) >= _LEAST_DROP_DB, log, -np.inf)
        grid = log.reshape(place.size, shape.size)
        if not np.any(np.isfinite(grid)):
            return _Weighed(cause, "", -np.inf, None, None, float("inf"))
        rows, columns = np.nonzero(grid > np.max(grid) - _MATTERS)
        low, high = _close_in(place, rows)
        if law is None:
            soft, hard = _close_in(shape, columns)
    cell = place[1] - place[0]
    if law is None:
        cell = cell * (shape[1] - shape[0]) / np.log(HARDEST_P / SOFTEST_P)
    total = float(np.logaddexp.reduce(log[np.isfinite(log)]) + np.log(cell) + np.log(share * _PRIOR[cause]))
    belief = np.exp(log - np.max(log))
    belief /= np.sum(belief)
    value = float(np.sum(belief * p1db))
    u = float(np.sqrt(np.sum(belief * (p1db - value) ** 2)))
    return _Weighed(cause, "", total, value, u, float(evidence.chi2[int(np.argmax(log))]))


def _close_in(axis: FloatArray, used: NDArray[np.signedinteger]) -> tuple[float, float]:
    return float(axis[max(int(np.min(used)) - 1, 0)]), float(axis[min(int(np.max(used)) + 1, axis.size - 1)])


def _drop_function(law: Law | None, log_p: FloatArray) -> Drop:
    """Return the drop over the 1 dB point for (G, k, j); Rapp's p differs along the first axis."""
    if law is not None:
        return law.drop_past_p1db
    scale = np.exp(log_p)[:, None, None] * np.log(10.0) / 10.0
    knee = np.log(np.expm1(scale))

    def drop(excess: FloatArray) -> FloatArray:
        return np.asarray(np.logaddexp(0.0, scale * excess + knee) / scale)

    return drop


def _fit_gain(
    table: DriveTable, offset: FloatArray, p1db: FloatArray, log_p: FloatArray, law: Law | None, follows: bool
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return what is left of the gain after the drop, its slope with g_j, and the drop, (G, k, j) each."""
    drop_of, step = _drop_function(law, log_p), 0.01
    gain, weight = table.gain_db[None], 1.0 / table.noise_db[None] ** 2
    base = offset[None] - p1db[:, None, None]
    if not follows:
        # The level is the same at every node but for a tilt of the source, and does not depend on g_j.
        drop = drop_of(base)
        slope = np.ones_like(drop)
        raised = gain + drop
        own = np.sum(weight * raised, axis=1, keepdims=True) / np.sum(weight, axis=1, keepdims=True)
        return raised - own, slope, drop
    own = np.repeat(np.max(gain, axis=1, keepdims=True), p1db.size, axis=0)
    for _ in range(_NEWTON_STEPS):
        drop = drop_of(base + own)
        slope = np.clip(1.0 - (drop_of(base + own + step) - drop) / step, 0.05, 1.0)
        left = gain - own + drop
        move = np.sum(weight * slope * left, axis=1, keepdims=True) / np.sum(weight * slope**2, axis=1, keepdims=True)
        own = own + np.clip(move, -5.0, 5.0)
    drop = drop_of(base + own)
    return gain - own + drop, slope, drop
