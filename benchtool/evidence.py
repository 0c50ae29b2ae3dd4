"""Readings over sweeps and frequency nodes, and what may have moved them, in; how likely that makes them, out.

The model is linear: what is left of the readings, (k, j) over k sweeps and j nodes, is s·g_j plus per-sweep columns
times freedoms with a normal prior, plus node noise. The gain g_j of the device at each node has no prior and is
eliminated first; the integral over the freedoms is exact. D. J. C. MacKay, "Bayesian interpolation", Neural
Computation 4(3), 1992, 415-447.

Many copies (other laws, other levels) are weighed at once along the first axis, G. A freedom bears on one sweep alone,
so that the normal matrix is a block for each sweep less what the shared g_j take up; one Cholesky factor of that
matrix, bordered by the pull of the readings, gives both its determinant and the misfit.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchtool.model import FloatArray

__all__ = ["Integrated", "NormalEquations", "normal_equations", "prior_precision"]

_GUARD: Final = 1e-9
"""Added to the misfit before the factor is taken, and subtracted after: a perfect fit must not fail by rounding."""


@dataclass(frozen=True, eq=False)
class NormalEquations:
    """Readings against the freedoms of every sweep, with g_j eliminated, for G copies.

    `gram` (G, m, m) and `pull` (G, m) with m = c·k, each freedom of all sweeps side by side; `chi2` (G,) the misfit
    before any freedom is used; `log_normal` (G,) the logarithm of what the noise alone contributes to the evidence.
    """

    gram: FloatArray
    pull: FloatArray
    chi2: FloatArray
    log_normal: FloatArray

    def log_evidence(self, prior: FloatArray, *fewer: int) -> list[tuple[FloatArray, FloatArray]]:
        """Return log evidence and misfit that is left, (G,) each, for a prior precision (m, m), which is in blocks.

        And then again with only so many of the first freedoms, for each of `fewer`: the factor of all has theirs in it.
        """
        copies, m = self.pull.shape
        bordered = np.empty((copies, m + 1, m + 1))
        bordered[:, :m, :m] = self.gram + prior
        bordered[:, m, :m] = self.pull
        bordered[:, m, m] = self.chi2 + _GUARD
        factor = np.linalg.cholesky(bordered)
        log_diagonal = np.log(np.diagonal(factor, axis1=1, axis2=2)[:, :m])
        last = factor[:, m] ** 2
        found = []
        for size in (m, *fewer):
            chi2 = np.sum(last[:, size:], axis=1) - _GUARD
            occam = 0.5 * float(np.linalg.slogdet(prior[:size, :size])[1]) - np.sum(log_diagonal[:, :size], axis=1)
            found.append((self.log_normal + occam - 0.5 * chi2, chi2))
        return found

    def integrated(self, prior: FloatArray) -> Integrated:
        """Return the first copy with its first freedoms integrated over, those that have a prior precision (m', m')."""
        size = len(prior)
        factor = np.linalg.cholesky(self.gram[0, :size, :size] + prior)
        bordered = np.column_stack([self.gram[0, :size], self.pull[0, :size]])
        taken = np.linalg.solve(factor, bordered)
        left = np.append(self.pull[0], self.chi2[0]) - taken.T @ taken[:, -1]
        occam = 0.5 * float(np.linalg.slogdet(prior)[1]) - float(np.sum(np.log(np.diagonal(factor))))
        gram = self.gram[0] - taken[:, :-1].T @ taken[:, :-1]
        return Integrated(float(self.log_normal[0]) + occam, float(left[-1]), gram, left[:-1])


@dataclass(frozen=True, eq=False)
class Integrated:
    """Readings with some freedoms integrated over, and what is left for others: `gram` (m, m) and `pull` (m,).

    `log_rest` is the log evidence but for the misfit `chi2`.
    """

    log_rest: float
    chi2: float
    gram: FloatArray
    pull: FloatArray

    def with_extras(self, columns: FloatArray, u: FloatArray) -> tuple[float, float, FloatArray, FloatArray]:
        """Return log evidence and misfit with e further freedoms, and the mean (e,) and covariance (e, e) of these.

        Parameters
        ----------
        columns : (m, e) each a combination of the freedoms of the equations
        u : (e,) their standard deviations before the readings were seen
        """
        if u.size == 0:
            return self.log_rest - 0.5 * self.chi2, self.chi2, np.zeros(0), np.zeros((0, 0))
        precision = columns.T @ self.gram @ columns + np.diag(u**-2.0)
        pull = self.pull @ columns
        covariance = np.asarray(np.linalg.inv(precision), np.float64)
        mean = covariance @ pull
        chi2 = self.chi2 - float(pull @ mean)
        occam = -float(np.sum(np.log(u))) - 0.5 * float(np.linalg.slogdet(precision)[1])
        return self.log_rest + occam - 0.5 * chi2, chi2, mean, covariance


def normal_equations(weight: FloatArray, slope: FloatArray, left: FloatArray, columns: FloatArray) -> NormalEquations:
    """Return the normal equations of G copies.

    Parameters
    ----------
    weight : (G, k, j) one over the variance of each reading
    slope : (G, k, j) how far a reading moves with the gain g_j of its node
    left : (G, k, j) what is to be explained
    columns : (G, c, k, j), or (1, c, k, j) where all copies share them: what one unit of each freedom adds
    """
    copies, sweeps, nodes = left.shape
    moves = weight * slope
    root = 1.0 / np.sqrt(np.sum(moves * slope, axis=1))
    weighted = weight[:, None] * columns
    shared = ((moves * root[:, None])[:, None] * columns).reshape(copies, -1, nodes)
    own = np.sum(moves * left, axis=1) * root
    gram = -(shared @ np.swapaxes(shared, 1, 2))
    for k in range(sweeps):
        gram[:, k::sweeps, k::sweeps] += weighted[:, :, k] @ np.swapaxes(columns[:, :, k], 1, 2)
    pull = np.sum(weighted * left[:, None], axis=3).reshape(copies, -1) - (shared @ own[..., None])[..., 0]
    chi2 = np.sum(weight * left**2, axis=(1, 2)) - np.sum(own**2, axis=1)
    # The part of the normalisation that g_j takes is left at its value without a law: a saturated device, whose
    # readings say nothing of g_j, must not be the more likely for it.
    log_normal = 0.5 * (np.sum(np.log(weight), axis=(1, 2)) - np.sum(np.log(np.sum(weight, axis=1)), axis=1))
    return NormalEquations(gram, pull, chi2, log_normal)


def prior_precision(precisions: Sequence[FloatArray]) -> FloatArray:
    """Return the prior precision (c·k, c·k) of c freedoms a sweep; the precision (k, k) of each is between sweeps."""
    sweeps = len(precisions[0])
    whole = np.zeros((sweeps * len(precisions),) * 2)
    for index, precision in enumerate(precisions):
        mine = slice(index * sweeps, (index + 1) * sweeps)
        whole[mine, mine] = precision
    return whole
