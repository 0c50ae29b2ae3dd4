"""Quantities with one reading are read, all others refused; level arithmetic against closed forms."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from benchtool.units import (
    HALF_POWER_DB,
    dbm_to_volts,
    format_si,
    from_db,
    parse_quantity,
    to_db,
    volts_to_dbm,
    wrap_degrees,
)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("21.4 MHz", "Hz", 21.4e6),
        ("150kHz", "Hz", 150e3),
        ("2.4 GHz", "Hz", 2.4e9),
        (10_700_000, "Hz", 10.7e6),
        ("95 ps", "s", 95e-12),
        ("1.5 µs", "s", 1.5e-6),
        ("1.5 us", "s", 1.5e-6),
        ("300 ohm", "ohm", 300.0),
        ("300 Ω", "ohm", 300.0),
        ("1.2 kΩ", "ohm", 1200.0),
    ],
)
def test_reads(text, unit, value):
    assert_allclose(parse_quantity(text, unit), value, rtol=1e-15, atol=0)


@pytest.mark.parametrize(
    "text", ["21,4 MHz", "21.4 mhz", "21.4", "MHz", "", "21.4 ps", "nan Hz", "inf Hz", "1_0 Hz", True, float("nan")]
)
def test_refuses_what_has_no_single_reading(text):
    with pytest.raises(ValueError, match="frequency"):
        parse_quantity(text, "Hz")


def test_half_power_is_not_three():
    assert_allclose(HALF_POWER_DB, 3.0102999566398120, rtol=1e-15, atol=0)


@pytest.mark.parametrize(
    ("ohm", "zero_dbm_mv", "microvolt_dbm"),
    [(50, 223.607, -106.990), (75, 273.861, -108.751), (300, 547.723, -114.771)],
)
def test_level_arithmetic(ohm, zero_dbm_mv, microvolt_dbm):
    # Closed form: V = sqrt(P R).
    assert_allclose(dbm_to_volts(0.0, ohm) * 1e3, zero_dbm_mv, rtol=0, atol=6e-4)
    assert_allclose(volts_to_dbm(1e-6, ohm), microvolt_dbm, rtol=0, atol=6e-4)


def test_levels_of_the_trade():
    # Common practice, no source: -110 dBm in 50 ohm is 0.7 µV, -10 dBm is 70 mV.
    assert round(dbm_to_volts(-110.0) * 1e6, 1) == 0.7
    assert round(dbm_to_volts(-10.0) * 1e3) == 71
    assert_allclose(dbm_to_volts(-10.0), 70e-3, rtol=0.02, atol=0)


def test_decibels_go_both_ways():
    ratio = np.array([1e-6, 0.5, 1.0, 40.0])
    assert_allclose(from_db(to_db(ratio)), ratio, rtol=1e-14, atol=0)
    assert to_db(np.array([0.0]))[0] == -np.inf


@pytest.mark.parametrize(("angle", "wrapped"), [(190.0, -170.0), (-180.0, 180.0), (540.0, 180.0), (0.0, 0.0)])
def test_wrap(angle, wrapped):
    assert wrap_degrees(angle) == wrapped


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [(21.4e6, "Hz", "21.4 MHz"), (1.48743e-6, "s", "1.487 µs"), (95e-12, "s", "95 ps"), (0.0, "Hz", "0 Hz")],
)
def test_format_si(value, unit, text):
    assert format_si(value, unit) == text
