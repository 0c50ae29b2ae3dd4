"""Evidence of limiting summed over laws and 1 dB points, against a dense sum over densities written out in full."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.drive_table import DriveTable, PadDoubt
from benchtool.law_search import PRIOR, Doubts, flat_precision, weigh_limiting

NODES = np.linspace(20.4e6, 22.4e6, 3)
SHAPE_DB = np.array([20.0, 30.0, 20.0])
REACH_DB = (-25.0, 6.0)
LAW_DOUBT, ROUGHNESS, LEAST_DROP_DB = 0.02, 0.005, 0.2


def rapp_drop_db(excess_db, p):
    """Rapp's law over the 1 dB point, written out again."""
    knee = (10.0 ** (p / 10.0) - 1.0) * 10.0 ** (p * excess_db / 10.0)
    return 10.0 / p * np.log10(1.0 + knee)


def tanh_drop_db(excess_db, _p):
    theta = (np.arange(200) + 0.5) * np.pi / 400
    drive = 0.7126899 * 10.0 ** (excess_db / 20.0)  # half of 1.42538 VT, where the fundamental is 1 dB down
    fundamental = np.mean(np.tanh(drive[..., None] * np.cos(theta)) * np.cos(theta), axis=-1)
    return -20.0 * np.log10(2.0 * fundamental / drive)


def cubic_drop_db(excess_db, _p):
    share = (1.0 - 10.0**-0.05) * np.minimum(10.0 ** (excess_db / 10.0), (1.0 / 3.0) / (1.0 - 10.0**-0.05))
    beyond = np.maximum(excess_db - 10.0 * np.log10((1.0 / 3.0) / (1.0 - 10.0**-0.05)), 0.0)
    return -20.0 * np.log10(1.0 - share) + beyond


def table(drives, drop_db, u_db=0.05, noise_db=0.02):
    k = len(drives)
    gain = SHAPE_DB - np.asarray(drop_db)[:, None] * np.ones(NODES.size)
    drive = np.repeat(np.array(drives, float)[:, None], NODES.size, axis=1)
    return DriveTable(
        files=tuple(f"s{i}.s2p" for i in range(k)),
        lines=tuple((-8.0, (f"{d:g}",), ()) for d in drives),
        at_hz=21.4e6,
        frequency_hz=NODES,
        gain_db=gain,
        noise_db=np.full(gain.shape, noise_db),
        buried=np.zeros(k),
        drive_dbm=drive,
        output_loss_db=np.zeros(k),
        design_gain_db=gain[:, 1],
        design_noise_db=np.full(k, noise_db),
        design_phase_deg=np.zeros(k),
        reading_u_db=np.full(k, u_db),
        pads=(PadDoubt("a20", 20.0, 0.3 / np.sqrt(3.0), -np.eye(k)[0], -np.eye(k)[0]),),
        source_half_width_db=0.5,
        port2_compression_dbm=30.0,
        levels_known=True,
    )


def log_density(seen, drop_db):
    """Log density of the readings for drops (G, k), every node alike, with the gain of each node flat: (G,)."""
    k, j = seen.gain_db.shape
    flat = np.kron(np.linalg.inv(flat_precision(seen)), np.ones((j, j)))
    eye = np.eye(k * j)
    noise = seen.noise_db.ravel() ** 2 + (ROUGHNESS * np.repeat(drop_db, j, axis=1)) ** 2
    law = np.einsum("gk,kl->gkl", (LAW_DOUBT * drop_db) ** 2, np.eye(k))
    inverse = np.linalg.inv(noise[:, :, None] * eye + flat + np.kron(law, np.ones((1, j, j))))
    gains = np.tile(np.eye(j), (k, 1))
    left = (seen.gain_db + drop_db[:, :, None]).reshape(len(drop_db), -1)
    normal = gains.T @ inverse @ gains
    best = np.linalg.solve(normal, gains.T @ inverse @ left[:, :, None])
    rest = left - (gains @ best)[:, :, 0]
    chi2 = np.einsum("gi,gij,gj->g", rest, inverse, rest)
    return 0.5 * (np.linalg.slogdet(inverse)[1] - np.linalg.slogdet(normal)[1] - chi2)


def dense(seen):
    """Log weight, mean and standard deviation of the 1 dB point of a device that limits at its input."""
    drive = seen.drive_dbm[:, 0]
    p1db = np.linspace(drive[-1] + REACH_DB[0], drive[-1] + REACH_DB[1], 1241)
    every, places = [], []
    shapes = np.geomspace(0.7, 5.0, 41)
    even = np.full(41, 1.0 / 40.0)
    even[[0, -1]] /= 2.0
    laws = [(rapp_drop_db, p, 0.8 * share) for p, share in zip(shapes, even, strict=True)]
    for law, p, share in [*laws, (tanh_drop_db, 0.0, 0.1), (cubic_drop_db, 0.0, 0.1)]:
        drop = law(drive - p1db[:, None], p)
        log = log_density(seen, drop) + np.log(share * (p1db[1] - p1db[0]) / (REACH_DB[1] - REACH_DB[0]))
        every.append(np.where(drop.max(axis=1) >= LEAST_DROP_DB, log, -np.inf))
        places.append(p1db)
    log, place = np.concatenate(every), np.concatenate(places)
    weight = np.exp(log - log.max())
    mean = np.average(place, weights=weight)
    spread = np.sqrt(np.average((place - mean) ** 2, weights=weight))
    return log.max() + np.log(weight.sum() * PRIOR["input-limited"]), mean, spread


DRIVES = {"two": (-38.0, -18.0), "three": (-38.0, -24.0, -18.0), "four": (-38.0, -28.0, -23.0, -18.0)}


@pytest.mark.parametrize("drives", DRIVES)
@pytest.mark.parametrize("p1db", [-28.0, -20.0, -17.0])
@pytest.mark.parametrize("p", [0.8, 2.0, 4.5])
def test_sum_over_laws_and_levels(drives, p1db, p):
    at = np.array(DRIVES[drives])
    seen = table(at, rapp_drop_db(at - p1db, p))
    found = next(w for w in weigh_limiting(seen, Doubts.of(seen)) if w.cause == "input-limited")
    log, mean, spread = dense(seen)
    # Two drives say nothing of p: all of its range counts, and its ends half.
    assert_allclose(found.log_weight, log, rtol=0, atol=0.08 if drives == "two" else 0.2)
    assert_allclose((found.value - mean) / spread, 0.0, rtol=0, atol=0.25)
    assert_allclose(found.u, spread, rtol=0.2, atol=0)


@pytest.mark.parametrize("p1db", [-13.5, -12.5])
def test_a_1_db_point_beyond_the_reach_does_not_count(p1db):
    at = np.array(DRIVES["four"])
    seen = table(at, rapp_drop_db(at - p1db, 0.75), u_db=0.01, noise_db=0.01)
    seen = replace(seen, pads=())
    found = next(w for w in weigh_limiting(seen, Doubts.of(seen)) if w.cause == "input-limited")
    log, mean, spread = dense(seen)
    assert_allclose(found.log_weight, log, rtol=0, atol=0.2)
    assert_allclose((found.value - mean) / spread, 0.0, rtol=0, atol=0.25)


def test_where_nothing_drops_no_law_has_weight():
    at = np.array(DRIVES["three"])
    seen = table(at, np.zeros(3))
    found = next(w for w in weigh_limiting(seen, Doubts.of(seen)) if w.cause == "input-limited")
    log, _, _ = dense(seen)
    assert_allclose(found.log_weight, log, rtol=0, atol=0.3)
    clean = log_density(seen, np.zeros((1, 3)))[0] + np.log(PRIOR["clean"])
    assert found.log_weight < clean - 3.0


def test_readings_alone_decide_not_the_place_of_the_drives():
    at = np.array(DRIVES["four"])
    seen = table(at, rapp_drop_db(at + 22.0, 2.0))
    shifted = replace(seen, drive_dbm=seen.drive_dbm + 7.3)
    one, other = (weigh_limiting(each, Doubts.of(each))[1] for each in (seen, shifted))
    assert_allclose(other.log_weight, one.log_weight, rtol=0, atol=1e-6)
    assert_allclose(other.value - one.value, 7.3, rtol=0, atol=1e-6)
