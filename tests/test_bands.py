"""One-third-octave bands against the values of IEC 61260-1 and ISO 266."""

from __future__ import annotations

import numpy as np
import pytest

from framegrade.spectrum.bands import band_power, third_octave_bands

#: IEC 61260-1:2014 table of base-ten mid-band frequencies (five digits), beside the nominal ones of ISO 266.
MID_HZ = {
    3.15: 3.1623, 4.0: 3.9811, 5.0: 5.0119, 6.3: 6.3096, 8.0: 7.9433, 10.0: 10.0, 12.5: 12.589, 16.0: 15.849,
    20.0: 19.953, 25.0: 25.119, 31.5: 31.623, 40.0: 39.811, 50.0: 50.119, 63.0: 63.096, 80.0: 79.433, 100.0: 100.0,
    125.0: 125.89, 160.0: 158.49, 200.0: 199.53, 250.0: 251.19, 315.0: 316.23, 400.0: 398.11, 500.0: 501.19,
    630.0: 630.96, 800.0: 794.33, 1000.0: 1000.0, 1250.0: 1258.9, 1600.0: 1584.9,
}


def test_nominal_and_exact_mid_bands():
    bands = third_octave_bands(1800.0)
    assert [band.nominal_hz for band in bands] == list(MID_HZ)
    np.testing.assert_allclose([band.mid_hz for band in bands], list(MID_HZ.values()), rtol=5e-5)


def test_base_ten_and_not_base_two():
    # IEC 61260-1: base ten puts the 125 Hz band at 125.89 Hz, 0.7 % above base two's 125.00 Hz
    band = next(band for band in third_octave_bands(200.0) if band.nominal_hz == 125.0)
    assert band.mid_hz == pytest.approx(125.89, abs=0.005)
    assert band.mid_hz / 125.0 - 1 == pytest.approx(0.007, abs=2e-4)


def test_edges():
    # IEC 61260-1: edges are the mid-band frequency times 10^(+-1/20); for 1 kHz 891.25 and 1122.0 Hz
    bands = third_octave_bands(1800.0)
    for band in bands:
        assert band.low_hz == pytest.approx(band.mid_hz * 10 ** -0.05, rel=1e-12)
        assert band.high_hz == pytest.approx(band.mid_hz * 10 ** 0.05, rel=1e-12)
    np.testing.assert_allclose([b.high_hz for b in bands[:-1]], [b.low_hz for b in bands[1:]], rtol=1e-12)
    kilo = next(band for band in bands if band.nominal_hz == 1000.0)
    assert (kilo.low_hz, kilo.high_hz) == pytest.approx((891.25, 1122.0), rel=1e-4)


def test_only_whole_bands_below_the_limit():
    bands = third_octave_bands(158.0)
    # the 125 Hz band ends at 141.25 Hz, the next at 177.8
    assert bands[-1].nominal_hz == 125.0 and bands[-1].high_hz == pytest.approx(141.25, abs=0.01)
    assert bands[0].nominal_hz == 3.15
    assert third_octave_bands(3.0) == ()
    edge = bands[-1].high_hz
    assert third_octave_bands(edge)[-1].nominal_hz == 125.0
    assert third_octave_bands(edge * (1 - 1e-9))[-1].nominal_hz == 100.0


@pytest.mark.parametrize("step_hz", [0.25, 0.5, 1.0, 1.7])
def test_a_flat_density_keeps_its_power(step_hz):
    """White density: each band holds density x width, whatever the cells' width, and the bands add up to the whole."""
    density = 0.02
    frequency = np.arange(1, int(1200 / step_hz) + 1) * step_hz
    usable = np.ones(len(frequency), bool)
    bands = third_octave_bands(frequency[-1])
    powers = [band_power(frequency, np.full(len(frequency), density), usable, band) for band in bands]
    for band, (power, seen) in zip(bands, powers):
        assert power == pytest.approx(density * (band.high_hz - band.low_hz), rel=1e-9)
        assert seen == pytest.approx(1.0, abs=1e-9)
    whole = density * (bands[-1].high_hz - bands[0].low_hz)
    assert sum(power for power, _ in powers) == pytest.approx(whole, rel=1e-9)


def test_a_flat_density_gains_one_tenth_of_a_decade_a_band():
    # a property of constant-percentage bands (IEC 61260-1): white noise rises by 1 dB a one-third octave, base ten
    frequency = np.arange(1, 4000) * 0.25
    bands = third_octave_bands(900.0)
    flat, usable = np.ones(len(frequency)), np.ones(len(frequency), bool)
    powers = np.array([band_power(frequency, flat, usable, band)[0] for band in bands])
    np.testing.assert_allclose(10 * np.diff(np.log10(powers)), 1.0, atol=1e-9)


def test_power_of_a_line_lands_in_its_band():
    frequency = np.arange(1, 1001) * 0.5
    density = np.zeros(1000)
    density[np.argmin(np.abs(frequency - 137.5))] = 0.08 / 0.5  # a sinusoid of 0.4 px peak in one cell of half a hertz
    usable = np.ones(1000, bool)
    found = {band.nominal_hz: band_power(frequency, density, usable, band)[0] for band in third_octave_bands(500.0)}
    assert found.pop(125.0) == pytest.approx(0.4 ** 2 / 2, rel=1e-9)
    assert sum(found.values()) == pytest.approx(0.0, abs=1e-12)


def test_observable_share_counts_the_blind_cells():
    frequency = np.arange(1, 1001) * 0.5
    band = next(band for band in third_octave_bands(500.0) if band.nominal_hz == 63.0)  # 56.23 to 70.79 Hz
    usable = np.abs(frequency - 60.0) > 3.1  # 13 cells of half a hertz, all inside the band
    power, seen = band_power(frequency, np.ones(1000), usable, band)
    width = band.high_hz - band.low_hz
    assert seen == pytest.approx(1 - 6.5 / width, rel=1e-9)
    assert power == pytest.approx(width - 6.5, rel=1e-9)


def test_a_blind_band_is_unknown_and_not_zero():
    frequency = np.arange(1, 1001) * 0.5
    band = third_octave_bands(500.0)[10]
    power, seen = band_power(frequency, np.full(1000, np.nan), np.zeros(1000, bool), band)
    assert np.isnan(power) and seen == 0.0


def test_nan_inside_blind_cells_does_not_spread():
    frequency = np.arange(1, 1001) * 0.5
    density = np.ones(1000)
    usable = np.abs(frequency - 120.0) > 3
    density[~usable] = np.nan
    band = next(band for band in third_octave_bands(500.0) if band.nominal_hz == 125.0)
    power, seen = band_power(frequency, density, usable, band)
    assert np.isfinite(power) and 0 < seen < 1
    assert power == pytest.approx(seen * (band.high_hz - band.low_hz), rel=1e-9)
