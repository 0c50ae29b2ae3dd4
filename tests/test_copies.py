"""Copies of a trace, as coefficients of its fits, against the same copies written out sample by sample."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.copies import TraceCopies, TraceModel
from benchtool.fitting import fit_curve
from benchtool.noise import NoiseModel

F = np.linspace(19e6, 24e6, 201)
RESONANCE = 20.0 / (1.0 + 24j * (F / 21.4e6 - 21.4e6 / F))
MATCH = 0.4 + 0.3 * RESONANCE / 20.0
NOISE = NoiseModel(1e-2, 1e-3)
COPIES = 400


def fits_of(trace, noise=NOISE):
    curves = [fit_curve(F, trace, low, high, noise) for low, high in ((20.8e6, 22.0e6), (21.3e6, 21.7e6))]
    return [fit for curve in curves for fit in curve.fits]


def sizes(rng, count, size):
    return [size * np.exp(2j * np.pi * rng.uniform(size=COPIES)) for _ in range(count)]


def copies(model, scale, drawn=(), added=()):
    return TraceCopies(model, np.random.default_rng(1), scale, drawn, added, {})


@pytest.fixture
def rng():
    return np.random.default_rng(4)


def test_joints_and_scale_are_those_of_the_samples(rng):
    fits = fits_of(RESONANCE)
    assert all(fit.inverse for fit in fits)
    joints = [[MATCH], [MATCH, RESONANCE / 20.0]]
    model = TraceModel(RESONANCE, fits, joints, (), {})
    scale, (a, b, c) = 1.0 + sizes(rng, 1, 0.05)[0], sizes(rng, 3, 0.02)
    product = (1 + a[:, None] * MATCH) * (1 + b[:, None] * MATCH + c[:, None] * RESONANCE / 20.0)
    written = scale[:, None] * RESONANCE * product
    for fit in fits:
        exact = fit.coefficients(written)
        moved = np.abs(exact - fit.coefficients(RESONANCE))
        # What is left out is of third order: 0.02 twice over, in units of how far a copy moves.
        left_out = np.abs(copies(model, scale, [a, b, c]).coefficients(fit) - exact)
        assert np.max(left_out) < 2e-3 * np.max(moved)


def test_a_fit_of_s_itself_is_exact(rng):
    trace = 0.3 * np.exp(-2j * np.pi * F * 40e-9) * (1.0 + 0.1 * np.cos((F - 21e6) / 8e5))
    fits = fits_of(trace, NoiseModel(0.08, 0.0))
    assert not any(fit.inverse for fit in fits)
    model = TraceModel(trace, fits, [[MATCH], [RESONANCE / 20.0]], (), {})
    scale, (a, b) = 1.0 + sizes(rng, 1, 0.2)[0], sizes(rng, 2, 0.3)
    written = scale[:, None] * trace * (1 + a[:, None] * MATCH) * (1 + b[:, None] * RESONANCE / 20.0)
    for fit in fits:
        assert_allclose(
            copies(model, scale, [a, b]).coefficients(fit), fit.coefficients(written), rtol=1e-10, atol=1e-12
        )


@pytest.mark.parametrize("noise", [NOISE, NoiseModel(0.08, 0.0)], ids=["1/S and S", "S"])
def test_vectors_added_to_a_reflection_are_exact(rng, noise):
    # A vector as long as the reflection: no sum of small parts would do.
    fits = fits_of(MATCH, noise)
    terms = [np.ones_like(F, dtype=complex), MATCH**2]
    model = TraceModel(MATCH, fits, (), terms, {})
    scale, (a, b) = 1.0 + sizes(rng, 1, 0.05)[0], sizes(rng, 2, 0.4)
    written = scale[:, None] * MATCH + a[:, None] + b[:, None] * MATCH**2
    for fit in fits:
        found = copies(model, scale, (), [a, b]).coefficients(fit)
        assert_allclose(found, fit.coefficients(written), rtol=1e-9, atol=1e-11)


def test_a_vector_added_to_a_fit_of_1_over_s_is_drawn_by_samples():
    model = TraceModel(RESONANCE, fits_of(RESONANCE), (), [np.ones_like(F, dtype=complex)], {})
    assert model.by_samples
    assert not TraceModel(RESONANCE, fits_of(RESONANCE), [[MATCH]], (), {}).by_samples


def test_noise_of_the_coefficients_has_the_covariance_of_the_samples():
    # U_y = C U_x C^H (JCGM 102:2011, clause 6.2, from memory), for all fits together since they share samples.
    fits = fits_of(RESONANCE)
    sigma = NOISE.sigma(np.abs(RESONANCE))
    model = TraceModel(RESONANCE, fits, (), (), {"noise": sigma})
    bases = model.noise_bases("noise")
    found = np.concatenate([bases[fit] for fit in fits], axis=1)
    derivative = []
    for fit in fits:
        inside = np.zeros((F.size, fit.degree + 1), complex)
        turned = fit.turn * RESONANCE[fit.start : fit.stop]
        inside[fit.start : fit.stop] = (-fit.turn / turned**2)[:, None] * fit.solve.T
        derivative.append(inside)
    expected = np.concatenate(derivative, axis=1) * sigma[:, None]
    covariance = expected.conj().T @ expected
    assert_allclose(found.conj().T @ found, covariance, rtol=0, atol=1e-12 * np.max(np.abs(covariance)))


def test_noise_spreads_a_level_as_noise_in_the_samples_does():
    curve = fit_curve(F, RESONANCE, 20.8e6, 22.0e6, NOISE)
    sigma = NoiseModel(0.3, 0.01).sigma(np.abs(RESONANCE))
    model = TraceModel(RESONANCE, curve.fits, (), (), {"noise": sigma})
    count, rng = 4000, np.random.default_rng(2)
    drawn = TraceCopies(model, rng, np.ones(count, complex), (), (), {"noise": np.ones(count)})
    hiss = (rng.normal(size=(count, F.size)) + 1j * rng.normal(size=(count, F.size))) * sigma / np.sqrt(2.0)
    by_coefficients, by_samples = curve.level_on_grid(drawn), curve.level_on_grid(RESONANCE + hiss)
    middle = curve.grid_hz.size // 2
    # A standard deviation of n draws is known to 1/√(2n), 1.1 %; four of these for the quotient of two.
    assert_allclose(np.std(by_coefficients[:, middle]) / np.std(by_samples[:, middle]), 1.0, rtol=0, atol=0.065)


def test_a_source_that_stands_still_draws_nothing():
    fits = fits_of(RESONANCE)
    model = TraceModel(RESONANCE, fits, (), (), {"noise": NOISE.sigma(np.abs(RESONANCE))})
    still = copies(model, np.ones(5, complex))
    for fit in fits:
        assert_allclose(still.coefficients(fit), np.tile(fit.coefficients(RESONANCE), (5, 1)), rtol=1e-12, atol=0)
