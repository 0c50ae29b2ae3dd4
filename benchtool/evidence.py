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
from numpy.typing import NDArray

from benchtool.model import FloatArray

__all__ = ["Integrated", "NormalEquations", "normal_equations", "prior_precision"]

_GUARD: Final = 1e-9
"""Added to the misfit before the factor is taken, and subtracted after: a perfect fit must not fail by rounding."""


@dataclass(frozen=True, eq=False)
class NormalEquations:
    """Readings against the freedoms of every sweep, with g_j eliminated, for G copies.

    `gram` (G, m, m) and `pull` (G, m) with m = k·c, the freedoms of a sweep side by side; `chi2` (G,) the misfit before
    any freedom is used; `log_normal` (G,) the logarithm of what the noise alone contributes to the evidence.
    """

    gram: FloatArray
    pull: FloatArray
    chi2: FloatArray
    log_normal: FloatArray

    def only(self, freedoms: NDArray[np.intp]) -> NormalEquations:
        """Return the equations of some of the freedoms."""
        return NormalEquations(
            self.gram[:, freedoms[:, None], freedoms], self.pull[:, freedoms], self.chi2, self.log_normal
        )

    def log_evidence(self, prior: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the log evidence and the misfit that is left, (G,) each, for a prior precision (m, m)."""
        copies, m = self.pull.shape
        bordered = np.empty((copies, m + 1, m + 1))
        bordered[:, :m, :m] = self.gram + prior
        bordered[:, m, :m] = self.pull
        bordered[:, m, m] = self.chi2 + _GUARD
        diagonal = np.diagonal(np.linalg.cholesky(bordered), axis1=1, axis2=2)
        chi2 = diagonal[:, m] ** 2 - _GUARD
        occam = 0.5 * float(np.linalg.slogdet(prior)[1]) - np.sum(np.log(diagonal[:, :m]), axis=1)
        return self.log_normal + occam - 0.5 * chi2, chi2

    def integrated(self, freedoms: NDArray[np.intp], prior: FloatArray) -> Integrated:
        """Return the first copy with some freedoms integrated over, whose prior precision is (m', m')."""
        factor = np.linalg.cholesky(self.gram[0][np.ix_(freedoms, freedoms)] + prior)
        bordered = np.column_stack([self.gram[0][freedoms], self.pull[0, freedoms]])
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
    columns : (G, k, c, j), or (1, k, c, j) where all copies share them: what one unit of each freedom adds
    """
    copies, sweeps, nodes = left.shape
    c = columns.shape[2]
    moves = weight * slope
    root = 1.0 / np.sqrt(np.sum(moves * slope, axis=1))
    weighted = weight[:, :, None] * columns
    shared = ((moves * root[:, None])[:, :, None] * columns).reshape(copies, sweeps * c, nodes)
    own = np.sum(moves * left, axis=1) * root
    gram = -(shared @ np.swapaxes(shared, 1, 2))
    blocks = weighted @ np.swapaxes(columns, 2, 3)
    for k in range(sweeps):
        mine = slice(k * c, (k + 1) * c)
        gram[:, mine, mine] += blocks[:, k]
    pull = (weighted @ left[..., None]).reshape(copies, -1) - (shared @ own[..., None])[..., 0]
    chi2 = np.sum(weight * left**2, axis=(1, 2)) - np.sum(own**2, axis=1)
    # The part of the normalisation that g_j takes is left at its value without a law: a saturated device, whose
    # readings say nothing of g_j, must not be the more likely for it.
    log_normal = 0.5 * (np.sum(np.log(weight), axis=(1, 2)) - np.sum(np.log(np.sum(weight, axis=1)), axis=1))
    return NormalEquations(gram, pull, chi2, log_normal)


def prior_precision(precisions: Sequence[FloatArray]) -> FloatArray:
    """Return the prior precision (k·c, k·c) of c freedoms a sweep; the precision (k, k) of each is between sweeps."""
    sweeps, c = precisions[0].shape[0], len(precisions)
    whole = np.zeros((sweeps, c, sweeps, c))
    for index, precision in enumerate(precisions):
        whole[:, index, :, index] = precision
    return whole.reshape(sweeps * c, sweeps * c)
