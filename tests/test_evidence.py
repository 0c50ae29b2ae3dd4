"""Evidence of linear freedoms against scipy's density of a normal distribution, and what must not matter to it."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.linalg import null_space
from scipy.stats import multivariate_normal

from benchtool.evidence import normal_equations, prior_precision

SWEEPS, NODES, FREEDOMS = 3, 4, 2


@pytest.fixture
def readings():
    rng = np.random.default_rng(5)
    weight = 1.0 / rng.uniform(0.05, 0.3, (1, SWEEPS, NODES)) ** 2
    left = rng.normal(0.0, 0.4, (1, SWEEPS, NODES))
    columns = rng.normal(0.0, 1.0, (1, FREEDOMS, SWEEPS, NODES))
    root = rng.normal(0.0, 0.5, (FREEDOMS, SWEEPS, SWEEPS))
    precisions = [np.linalg.inv(each @ each.T + 0.05 * np.eye(SWEEPS)) for each in root]
    return weight, left, columns, precisions


def design(columns):
    """The matrix (k·j, c·k) from freedoms to readings, written out in full."""
    matrix = np.zeros((SWEEPS, NODES, FREEDOMS, SWEEPS))
    for k in range(SWEEPS):
        matrix[k, :, :, k] = columns[0, :, k].T
    return matrix.reshape(SWEEPS * NODES, -1)


def test_evidence_is_the_density_of_what_the_gains_of_the_nodes_leave(readings):
    # With a flat prior on the gain of each node the evidence is the density of the contrasts between sweeps, which are
    # normal; scipy.stats.multivariate_normal is the reference.
    weight, left, columns, precisions = readings
    equations = normal_equations(weight, np.ones_like(left), left, columns)
    ((found, _),) = equations.log_evidence(prior_precision(precisions))
    matrix, gains = design(columns), np.tile(np.eye(NODES), (SWEEPS, 1))
    prior = np.linalg.inv(prior_precision(precisions))
    covariance = np.diag(1.0 / weight.ravel()) + matrix @ prior @ matrix.T
    contrasts = null_space(gains.T)
    density = multivariate_normal(cov=contrasts.T @ covariance @ contrasts).logpdf(contrasts.T @ left.ravel())
    free = (SWEEPS - 1) * NODES
    expected = density + 0.5 * free * np.log(2 * np.pi) - 0.5 * NODES * np.log(SWEEPS)
    assert_allclose(found[0], expected, rtol=1e-9, atol=0)


def test_misfit_is_that_of_generalised_least_squares(readings):
    weight, left, columns, precisions = readings
    slope = np.linspace(0.2, 1.0, left.size).reshape(left.shape)
    ((_, chi2),) = normal_equations(weight, slope, left, columns).log_evidence(prior_precision(precisions))
    matrix = design(columns)
    prior = np.linalg.inv(prior_precision(precisions))
    inverse = np.linalg.inv(np.diag(1.0 / weight.ravel()) + matrix @ prior @ matrix.T)
    moves = (np.tile(np.eye(NODES), (SWEEPS, 1)) * slope.reshape(-1, 1)).reshape(SWEEPS * NODES, NODES)
    best = np.linalg.solve(moves.T @ inverse @ moves, moves.T @ inverse @ left.ravel())
    rest = left.ravel() - moves @ best
    assert_allclose(chi2[0], rest @ inverse @ rest, rtol=1e-9, atol=0)


def test_a_gain_common_to_all_sweeps_changes_nothing(readings):
    weight, left, columns, precisions = readings
    prior = prior_precision(precisions)
    one = np.ones_like(left)
    shifted = left + np.array([3.0, -2.0, 0.5, 7.0])
    before = normal_equations(weight, one, left, columns).log_evidence(prior)
    after = normal_equations(weight, one, shifted, columns).log_evidence(prior)
    assert_allclose(after[0][0], before[0][0], rtol=1e-7, atol=0)


def test_fewer_freedoms_are_the_equations_without_the_others(readings):
    weight, left, columns, precisions = readings
    one = np.ones_like(left)
    _, (log, chi2) = normal_equations(weight, one, left, columns).log_evidence(prior_precision(precisions), SWEEPS)
    first = normal_equations(weight, one, left, columns[:, :1]).log_evidence(prior_precision(precisions[:1]))[0]
    assert_allclose([log[0], chi2[0]], [first[0][0], first[1][0]], rtol=1e-9, atol=0)


def test_doubts_first_and_extras_after_are_all_freedoms_at_once(readings):
    # The evidence is one integral, whichever part of it is taken first; the whole is checked against scipy above.
    weight, left, columns, precisions = readings
    one, shift = np.ones_like(left), np.linspace(-1.0, 1.0, NODES)
    more = np.concatenate([columns, np.broadcast_to(shift, (1, 1, SWEEPS, NODES))], axis=1)
    reach, u = np.array([[0.5, 0.0], [0.0, 1.0], [2.0, -1.0]]), np.array([0.7, 2.0])
    doubts, every = FREEDOMS * SWEEPS, (FREEDOMS + 1) * SWEEPS
    extras = np.concatenate([np.zeros((doubts, 2)), reach])
    prior = prior_precision(precisions)
    equations = normal_equations(weight, one, left, more)
    log, chi2, mean, covariance = equations.integrated(prior).with_extras(extras, u)
    combined = np.column_stack([np.eye(every)[:, :doubts], extras])
    whole = np.zeros((doubts + 2, doubts + 2))
    whole[:-2, :-2], whole[-2:, -2:] = prior, np.diag(u**-2.0)
    at_once = replace(equations, gram=combined.T @ equations.gram @ combined, pull=equations.pull @ combined)
    ((expected_log, expected_chi2),) = at_once.log_evidence(whole)
    assert_allclose([log, chi2], [expected_log[0], expected_chi2[0]], rtol=1e-9, atol=0)
    spread = np.linalg.inv(at_once.gram[0] + whole)
    assert_allclose(covariance, spread[-2:, -2:], rtol=1e-9, atol=0)
    assert_allclose(mean, (spread @ at_once.pull[0])[-2:], rtol=1e-9, atol=0)
    alone = equations.integrated(prior).with_extras(np.zeros((every, 0)), np.zeros(0))
    ((expected_log, expected_chi2),) = normal_equations(weight, one, left, columns).log_evidence(prior)
    assert_allclose(alone[:2], [expected_log[0], expected_chi2[0]], rtol=1e-9, atol=0)
