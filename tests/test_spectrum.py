"""Tones, levels and blind intervals on row signals made without pictures (see `signals.py`).

Outside sources: Astropy's Lomb-Scargle periodogram, scipy.stats, the Cramer-Rao bound of Rife and Boorstyn 1974, exact
sums of sinusoids by numpy, and the simulator's own wandering rotors (which share no code with the estimators).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from astropy.timeseries import LombScargle
from scipy import stats

from framegrade.rows import remove_slow, slow_half_width
from framegrade.simulate import flight_from_dict, row_signals as simulated_rows, truth_of
from framegrade.spectrum.bands import band_power, third_octave_bands
from framegrade.spectrum.folded import candidates, find_folded_tones
from framegrade.spectrum.levels import measure_levels
from framegrade.spectrum.response import (
    difference_gain, difference_response, exposure_clock, filter_gain, highest_frequency_hz, observable,
)
from framegrade.spectrum.tones import Periodogram, axis_data, detection_ratio, find_tones
from tests import signals as made

READOUT_S = 0.014      # of a frame interval of 16.7 ms
SLOW_READOUT_S = 0.020  # of a frame interval of 33.3 ms
PER_1920 = 1280 / 1920


def tones_in(signals, readout_s, axis=0, px_per_1920=PER_1920):
    clock = exposure_clock(signals, readout_s)
    highest = min(1000.0, highest_frequency_hz(clock, len(signals.height)))
    data = axis_data(signals, axis, clock)
    return find_tones(data, axis, Periodogram(clock, data.duration_s, highest), px_per_1920)[0]


def levels_in(signals, readout_s, axis=0):
    clock = exposure_clock(signals, readout_s)
    return measure_levels(signals, axis, clock, min(1000.0, highest_frequency_hz(clock, len(signals.height))))


# --- the exposure clock and its response -----------------------------------------------------------------------------


def test_the_clock_of_a_known_camera():
    # Davis and others 2014, The Visual Microphone: 1280 x 720 at 60 frames/s, 16 us a row: about 30 % of samples
    # are missing
    readout = 720 * 16e-6
    signals = made.row_signals(made.still, made.frame_times(60, 1), readout, bands=720)
    clock = exposure_clock(signals, readout)
    assert 1 - clock.readout_s / clock.interval_s == pytest.approx(0.30, abs=0.015)
    assert clock.band_s == pytest.approx(16e-6)
    # design note, section 3: row at height v of frame n is exposed at pts_n + (v - 1/2) R
    assert clock.start_s[7, 0] == pytest.approx(7 / 60 - readout / 2 + 8e-6)
    assert clock.end_s[7, -1] == pytest.approx(8 / 60 + readout / 2 - 8e-6)


@pytest.mark.parametrize("frequency_hz", [11.0, 44.0, 96.1, 137.3, 333.0])
def test_response_by_brute_force(frequency_hz):
    """The response to exp(2 pi i f t) is what the signals of a cosine and of a sine hold, high-pass included."""
    times = made.frame_times(60, 1.5)
    cosine, sine = (made.row_signals(made.tone(frequency_hz, 1.0, phase), times, READOUT_S)
                    for phase in (0.0, -np.pi / 2))
    seen = cosine.fast_px[..., 0] + 1j * sine.fast_px[..., 0]
    np.testing.assert_allclose(difference_response(frequency_hz, exposure_clock(cosine, READOUT_S)), seen, atol=2e-4)


def test_response_with_rising_content():
    """Content that climbs down is found at a later row of the next frame, so at a later time."""
    times = made.frame_times(60, 1.5)
    rise = 0.02 * np.sin(np.arange(len(times) - 1) / 5)[:, None] * np.ones(made.BANDS)
    signals = made.row_signals(made.tone(137.3, 1.0, 0.0), times, READOUT_S, rise=rise)
    fitted = difference_response(137.3, exposure_clock(signals, READOUT_S)).real
    np.testing.assert_allclose(signals.fast_px[..., 0], fitted, atol=2e-4)
    without = difference_response(137.3, exposure_clock(replace(signals, rise=0 * rise), READOUT_S)).real
    assert np.abs(signals.fast_px[..., 0] - without).max() > 0.1


def test_gain_by_brute_force():
    """Amplitude of the filtered difference mid-record over that of the vibration."""
    times = made.frame_times(60, 4)
    frequency = np.array([5.0, 20.0, 44.0, 96.1, 137.3, 333.0])
    for f in frequency:
        cosine, sine = (made.row_signals(made.tone(f, 1.0, phase), times, READOUT_S) for phase in (0.0, -np.pi / 2))
        seen = np.abs(cosine.fast_px[..., 0] + 1j * sine.fast_px[..., 0])[60:-60].mean()
        clock = exposure_clock(cosine, READOUT_S)
        assert difference_gain(np.array([f]), clock)[0] == pytest.approx(seen, rel=2e-3)


def test_filter_gain_against_numpy_fft():
    half = slow_half_width(1 / 60)
    impulse = np.zeros(512)
    impulse[256] = 1
    expected = np.abs(np.fft.rfft(remove_slow(impulse, None, half)))
    clock = exposure_clock(made.row_signals(made.still, made.frame_times(60, 4), READOUT_S), READOUT_S)
    np.testing.assert_allclose(filter_gain(np.fft.rfftfreq(512, 1 / 60), clock), expected, atol=1e-9)


def test_highest_frequency():
    signals = made.row_signals(made.still, made.frame_times(60, 1), READOUT_S)
    # 30 bands in 14 ms are 2143 samples a second: their Nyquist frequency is 1071 Hz, four fifths of it are used
    assert highest_frequency_hz(exposure_clock(signals, READOUT_S), 30) == pytest.approx(0.8 * 1071.4, rel=1e-3)
    assert highest_frequency_hz(exposure_clock(signals, 0.0), 30) == pytest.approx(30.0)


@pytest.mark.parametrize("rate_hz", [30.0, 60.0, 120.0])
def test_blind_intervals_lie_at_multiples_of_the_frame_rate(rate_hz):
    readout = 0.8 / rate_hz
    clock = exposure_clock(made.row_signals(made.still, made.frame_times(rate_hz, 3), readout), readout)
    k = np.arange(0, 5)
    assert not observable(k * rate_hz, clock).any()
    assert observable((k + 0.5) * rate_hz, clock).all()
    for offset in (0.5, 1.0, 2.0):
        assert not observable(k[1:] * rate_hz + offset, clock).any()
    grid = np.linspace(1, 4.5 * rate_hz, 5000)
    seen = observable(grid, clock)
    # never divided by a gain near zero: 2 |sin(pi f T)| from the design note's measuring model
    assert (2 * np.abs(np.sin(np.pi * grid / rate_hz))[seen] > 0.3).all()
    assert 0.6 < seen.mean() < 0.95


# --- tones -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("frequency_hz", "amplitude_px", "rate_hz", "readout_s", "axis"), [
    (137.3, 0.40, 60, READOUT_S, 0),
    (137.3, 0.40, 30, SLOW_READOUT_S, 0),
    (44.0, 0.20, 60, READOUT_S, 1),
    (311.7, 0.15, 60, READOUT_S, 2),
    (12.6, 0.50, 30, SLOW_READOUT_S, 1),
    (512.3, 0.30, 120, 0.007, 0),
])
def test_one_tone(frequency_hz, amplitude_px, rate_hz, readout_s, axis):
    signals = made.row_signals(made.tone(frequency_hz, amplitude_px, 1.1), made.frame_times(rate_hz, 3), readout_s,
                               noise_px=0.03, axis=axis)
    (found,) = tones_in(signals, readout_s, axis)
    assert found.axis == axis
    assert found.frequency_hz == pytest.approx(frequency_hz, abs=0.01)
    assert found.amplitude_px == pytest.approx(amplitude_px, rel=0.03)
    assert found.frequency_ci_hz < 0.01 and found.wander_hz == 0
    for other in {0, 1, 2} - {axis}:
        assert tones_in(signals, readout_s, other) == []


@pytest.mark.parametrize(("strong_hz", "weak_hz"), [
    (137.3, 96.1),
    (137.3, 139.1),            # five resolution cells apart
    (137.3, 162.7),            # the mirror image of the strong one about 150 Hz: both have an alias of 17.3 Hz
    (71.6, 166.2),
    (251.0, 17.5),
])
def test_two_tones_the_weaker_a_third(strong_hz, weak_hz):
    motion = made.tones((strong_hz, 0.45, 0.3), (weak_hz, 0.15, 2.0))
    found = tones_in(made.row_signals(motion, made.frame_times(60, 3), READOUT_S, noise_px=0.03), READOUT_S)
    assert len(found) == 2
    assert found[0].frequency_hz == pytest.approx(strong_hz, abs=0.01)
    assert found[1].frequency_hz == pytest.approx(weak_hz, abs=0.02)
    assert [t.amplitude_px for t in found] == pytest.approx([0.45, 0.15], rel=0.04)


@pytest.mark.parametrize("wander_pct", [0.3, 0.7, 1.2])
def test_a_wandering_tone(wander_pct):
    """rms of the frequency, and the amplitude of the motion: root 2 times its rms, whatever the frequency does."""
    # whole periods of the wander, so that the mean frequency is the nominal one
    motion = made.wandering_tone(137.3, 0.4, wander_pct, period_s=1.5)
    found = tones_in(made.row_signals(motion, made.frame_times(60, 3), READOUT_S, noise_px=0.03), READOUT_S)
    assert len(found) == 1
    assert found[0].amplitude_px == pytest.approx(0.4, rel=0.05)
    assert found[0].frequency_hz == pytest.approx(137.3, abs=min(0.5, found[0].frequency_ci_hz))
    assert found[0].wander_hz == pytest.approx(wander_pct / 100 * 137.3, rel=0.3)


def test_four_steady_motors():
    parts = [(131.2, 0.30, 0.3), (134.9, 0.30, 1.0), (140.4, 0.25, 2.0), (145.8, 0.25, 4.0)]
    found = tones_in(made.row_signals(made.tones(*parts), made.frame_times(60, 3), READOUT_S, noise_px=0.03), READOUT_S)
    found = sorted(found, key=lambda t: t.frequency_hz)
    assert [t.frequency_hz for t in found] == pytest.approx([f for f, _, _ in parts], abs=0.02)
    assert [t.amplitude_px for t in found] == pytest.approx([a for _, a, _ in parts], rel=0.04)


def test_four_wandering_motors_of_the_simulator():
    """Rotors of the simulator on yaw: summed power and power-weighted frequency against its truth file's facts."""
    flight = flight_from_dict({
        "seed": 5,
        "camera": {"width_px": 1280, "height_px": 720, "frame_rate": 60, "readout_ms": 14.0, "exposure_ms": 0.5},
        "flight": {"duration_s": 4.0},
        "motors": [{"count": 4, "axis": "yaw", "frequency_hz": 140.0, "spread_pct": 2.0, "wander_pct": 0.4,
                    "amplitude_px": 0.3}],
    })
    times, _, angle = simulated_rows(flight, 30 * 4)
    signals = made.from_angles(times, angle[..., 0] * flight.camera.focal_px, 4, noise_px=0.03)
    facts = [t for t in truth_of(flight).facts["tones"] if t["axis"] == "yaw"]
    assert len(facts) == 4
    power = sum(t["rms_over_clip_px"] ** 2 for t in facts)
    mean = np.average([t["mean_frequency_hz"] for t in facts], weights=[t["rms_over_clip_px"] ** 2 for t in facts])
    found = [t for t in tones_in(signals, READOUT_S) if 130 < t.frequency_hz < 150]
    total = sum(t.amplitude_px ** 2 / 2 for t in found)
    assert 10 * np.log10(total / power) == pytest.approx(0, abs=0.5)
    middle = np.average([t.frequency_hz for t in found], weights=[t.amplitude_px ** 2 for t in found])
    assert middle == pytest.approx(mean, abs=0.5)


def test_a_global_shutter_sees_up_to_half_the_frame_rate():
    motion = made.tones((17.3, 0.4, 0.3), (23.9, 0.15, 1.0))
    found = tones_in(made.row_signals(motion, made.frame_times(60, 4), 0.0, noise_px=0.03), 0.0)
    assert [t.frequency_hz for t in found] == pytest.approx([17.3, 23.9], abs=0.01)
    assert [t.amplitude_px for t in found] == pytest.approx([0.4, 0.15], rel=0.03)


@pytest.mark.parametrize("kind", ["doubled intervals", "jittered", "three two"])
def test_variable_frame_rate(kind):
    rng = np.random.default_rng(2)
    if kind == "doubled intervals":
        interval = rng.choice([1 / 60, 1 / 60, 1 / 60, 1 / 30], 150)
    elif kind == "jittered":
        interval = 1 / 60 + 0.001 * rng.normal(size=150)
    else:
        interval = np.tile([1 / 50, 1 / 75], 60)
    signals = made.row_signals(made.tone(137.3, 0.4), np.cumsum(interval), 0.012, noise_px=0.03, bands=20)
    found = tones_in(signals, 0.012)
    assert len(found) == 1
    assert found[0].frequency_hz == pytest.approx(137.3, abs=0.01)
    assert found[0].amplitude_px == pytest.approx(0.4, rel=0.04)


def test_gaps_and_unmeasured_bands():
    """A tenth of the pairs and the upper five bands (sky) are missing."""
    signals = made.row_signals(made.tone(137.3, 0.4), made.frame_times(60, 3), READOUT_S, noise_px=0.03)
    fast, variance = signals.fast_px.copy(), signals.variance_px2.copy()
    gone = np.random.default_rng(0).uniform(size=len(fast)) < 0.1
    fast[gone], variance[gone] = np.nan, np.inf
    fast[:, :5], variance[:, :5] = np.nan, np.inf
    (found,) = tones_in(replace(signals, fast_px=fast, variance_px2=variance), READOUT_S)
    assert found.frequency_hz == pytest.approx(137.3, abs=0.01)
    assert found.amplitude_px == pytest.approx(0.4, rel=0.03)


def test_mismatches_do_not_hide_a_tone():
    """One sample in a hundred is off by several pixels."""
    signals = made.row_signals(made.tone(137.3, 0.2), made.frame_times(60, 3), READOUT_S, noise_px=0.03)
    rng = np.random.default_rng(1)
    fast = signals.fast_px.copy()
    wrong = rng.uniform(size=fast.shape[:2]) < 0.01
    fast[wrong] += 5 * rng.normal(size=(wrong.sum(), 3))
    found = tones_in(replace(signals, fast_px=fast), READOUT_S)
    assert len(found) == 1
    assert found[0].frequency_hz == pytest.approx(137.3, abs=0.01)
    assert found[0].amplitude_px == pytest.approx(0.2, rel=0.04)


def test_too_little_data_gives_nothing():
    signals = made.row_signals(made.tone(137.3, 0.4), made.frame_times(60, 0.1), READOUT_S, noise_px=0.03)
    assert axis_data(signals, 0, exposure_clock(signals, READOUT_S)) is None
    empty = replace(signals, fast_px=np.full_like(signals.fast_px, np.nan))
    assert axis_data(empty, 0, exposure_clock(empty, READOUT_S)) is None


def test_a_tone_at_the_frame_rate_is_blind_and_not_guessed():
    for frequency in (60.0, 120.0, 121.0, 180.0):
        signals = made.row_signals(made.tone(frequency, 0.5), made.frame_times(60, 3), READOUT_S, noise_px=0.03)
        assert tones_in(signals, READOUT_S) == []


# --- intervals and false alarms --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def many_tones():
    """40 records of a random tone in white noise: truth and what was found."""
    rng = np.random.default_rng(21)
    times, bands = made.frame_times(60, 2), 20
    clock = exposure_clock(made.row_signals(made.still, times, READOUT_S, bands=bands), READOUT_S)
    out = []
    for seed in range(40):
        frequency = rng.uniform(8, 400)
        while not observable(np.array([frequency]), clock)[0] or abs(frequency - 60 * round(frequency / 60)) < 5:
            frequency = rng.uniform(8, 400)
        amplitude = rng.uniform(0.1, 0.3)
        signals = made.row_signals(made.tone(frequency, amplitude, rng.uniform(0, 6)), times, READOUT_S, noise_px=0.15,
                                   seed=seed, bands=bands)
        out.append((frequency, amplitude, tones_in(signals, READOUT_S), clock))
    return out


def test_intervals_hold_the_truth(many_tones):
    """95 % intervals over 40 tones in white noise: at least 90 % hold the truth."""
    held_f, held_a = [], []
    for frequency, amplitude, found, _ in many_tones:
        assert len(found) == 1
        held_f.append(abs(found[0].frequency_hz - frequency) <= found[0].frequency_ci_hz)
        held_a.append(abs(found[0].amplitude_px - amplitude) <= found[0].amplitude_ci_px)
    assert np.mean(held_f) >= 0.9
    assert np.mean(held_a) >= 0.9


def test_frequency_errors_meet_the_cramer_rao_bound(many_tones):
    """Rife and Boorstyn 1974: var(f) >= 2 s^2 / ((2 pi A g)^2 sum (t - mean)^2), g the gain of the frame difference.

    Errors over the bound's deviation, by their median (1.4826 of it for normal numbers), are near 1. The reported
    intervals are never narrower than the bound's, and their median is not three times wider: footage scatters more than
    rows do.
    """
    error, stated = [], []
    for frequency, amplitude, found, clock in many_tones:
        gain = difference_gain(np.array([frequency]), clock)[0]
        times = 0.5 * (clock.start_s + clock.end_s)
        bound = np.sqrt(2 * 0.15 ** 2 / ((2 * np.pi * amplitude * gain) ** 2 * np.sum((times - times.mean()) ** 2)))
        error.append((found[0].frequency_hz - frequency) / bound)
        stated.append(found[0].frequency_ci_hz / 1.96 / bound)
    assert 1.4826 * np.median(np.abs(error)) == pytest.approx(1.0, abs=0.4)
    assert np.min(stated) > 0.8 and 1.0 < np.median(stated) < 3.0


def test_amplitudes_are_not_biased(many_tones):
    ratio = [found[0].amplitude_px / amplitude for _, amplitude, found, _ in many_tones]
    assert np.mean(ratio) == pytest.approx(1.0, abs=0.015)


def test_a_steady_tone_does_not_wander(many_tones):
    assert all(found[0].wander_hz == 0 for _, _, found, _ in many_tones)


def test_noise_holds_no_tone():
    """40 records of white noise at a false-alarm rate of 1 %: at most 2 with a tone (P > 0.99 by scipy.stats.binom).

    The floor on a tone's amplitude is put out of action, so that only significance decides.
    """
    assert stats.binom.cdf(2, 40, 0.01) > 0.99
    times = made.frame_times(60, 2)
    records = [made.row_signals(made.still, times, READOUT_S, noise_px=0.1, seed=seed, bands=20) for seed in range(40)]
    assert sum(bool(tones_in(record, READOUT_S, px_per_1920=1e-6)) for record in records) <= 2


def test_a_weak_but_significant_trace_is_not_called_a_tone():
    # the floor of 0.03 px of a 1920-wide picture: in 1280 pixels 0.02
    times = made.frame_times(60, 4)
    assert tones_in(made.row_signals(made.tone(137.3, 0.015), times, READOUT_S, noise_px=0.02), READOUT_S) == []
    assert len(tones_in(made.row_signals(made.tone(137.3, 0.03), times, READOUT_S, noise_px=0.02), READOUT_S)) == 1


@pytest.mark.parametrize(("searched", "alarm", "cells"), [(1000, 0.01, 16), (2500, 0.05, 16), (300, 0.01, 60)])
def test_detection_ratio_against_scipy(searched, alarm, cells):
    """One ordinate over the mean of `cells` others is F(2, 2 cells) for noise: scipy.stats.f's survival function."""
    ratio = detection_ratio(searched, alarm, cells)
    assert stats.f.sf(ratio, 2, 2 * cells) * searched == pytest.approx(alarm, rel=1e-6)


def test_detection_ratio_tends_to_scargle():
    # Scargle 1982: with the noise known, z0 = ln(N / alarm)
    assert detection_ratio(1000, 0.01, 1e7) == pytest.approx(np.log(1000 / 0.01), rel=1e-5)


@pytest.mark.parametrize(("low_hz", "high_hz"), [(80.0, 160.0), (20.0, 400.0)])
def test_a_flat_broad_band_is_no_tone(low_hz, high_hz):
    times = made.frame_times(60, 2)
    records = [made.row_signals(made.broadband(low_hz, high_hz, 0.5, seed=seed), times, READOUT_S, noise_px=0.05,
                                seed=seed, bands=20) for seed in range(3)]
    assert sum(bool(tones_in(record, READOUT_S)) for record in records) == 0


# --- against Astropy -------------------------------------------------------------------------------------------------


def test_matched_filter_against_lomb_scargle():
    """One band, one instant a frame, even frames: the exposure clock's matched filter is the classical periodogram, and
    at the Fourier frequencies that of Lomb and Scargle (astropy) too (Scargle 1982)."""
    motion = made.tones((17.3, 0.2, 0.3), (8.1, 0.1, 1.0))
    signals = made.row_signals(motion, made.frame_times(60, 4), 0.0, noise_px=0.05, bands=1)
    values = signals.fast_px[..., 0]
    periodogram = Periodogram(exposure_clock(signals, 0.0), 4.0, 29.0)
    mid = 0.5 * (signals.time_s + signals.next_time_s)
    own = periodogram.power(values, np.ones_like(values))
    plain = np.abs(np.exp(-2j * np.pi * np.outer(periodogram.frequency_hz, mid)) @ values[:, 0]) ** 2 / len(values)
    np.testing.assert_allclose(own, plain, rtol=1e-3, atol=1e-5 * plain.max())
    series = LombScargle(mid, values[:, 0], fit_mean=False, center_data=False, normalization="psd")
    reference = series.power(periodogram.frequency_hz, method="slow")
    # between Fourier frequencies the two differ by the imbalance of cosines and sines, 1 in the number of cycles
    np.testing.assert_allclose(own, reference, rtol=0.05, atol=0.01 * reference.max())


def test_one_band_of_a_global_shutter_against_lomb_scargle():
    """Where nothing but frames are sampled, the frame difference is a plain series at the frames' mid-times.

    Its Lomb-Scargle peak (astropy) has the tone's frequency; its height, as an amplitude, is the tone's times the gain
    2 sin(pi f T).
    """
    signals = made.row_signals(made.tone(17.3, 0.4), made.frame_times(60, 4), 0.0, noise_px=0.03, bands=1)
    mid = 0.5 * (signals.time_s + signals.next_time_s)
    series = LombScargle(mid, signals.fast_px[:, 0, 0], fit_mean=False, center_data=False, normalization="psd")
    frequency = np.arange(4, 29.5, 1e-3)
    power = series.power(frequency)
    peak = frequency[np.argmax(power)]
    amplitude = 2 * np.sqrt(power.max() / len(mid)) / (2 * np.sin(np.pi * peak / 60))
    (found,) = tones_in(signals, 0.0)
    assert found.frequency_hz == pytest.approx(peak, abs=2e-3)
    assert found.amplitude_px == pytest.approx(amplitude, rel=0.02)


def test_rows_as_uneven_samples_against_lomb_scargle():
    """Every band of every pair is a sample at its own time: astropy takes them as an unevenly sampled series."""
    times = made.frame_times(60, 3)
    signals = made.row_signals(made.tones((137.3, 0.45, 0.3), (251.0, 0.15, 1.0)), times, READOUT_S, noise_px=0.03)
    mid = (signals.time_s + signals.next_time_s)[:, None] / 2 + (signals.height - 0.5) * READOUT_S
    series = LombScargle(mid.ravel(), signals.fast_px[..., 0].ravel(), fit_mean=False, center_data=False,
                         normalization="psd")
    found = tones_in(signals, READOUT_S)
    whole = np.arange(4, 500, 0.1)
    assert whole[np.argmax(series.power(whole))] == pytest.approx(found[0].frequency_hz, abs=0.1)
    fine = np.arange(136.5, 138.1, 2e-3)
    power = series.power(fine)
    peak = fine[np.argmax(power)]
    # the average over a band's rows (numpy.sinc) and the frame difference, both by formula
    gain = 2 * np.abs(np.sin(np.pi * peak / 60)) * np.sinc(peak * READOUT_S / made.BANDS)
    assert found[0].frequency_hz == pytest.approx(peak, abs=0.01)
    assert found[0].amplitude_px == pytest.approx(2 * np.sqrt(power.max() / mid.size) / gain, rel=0.03)


# --- levels ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("rate_hz", "readout_s", "duration_s"), [(60, READOUT_S, 4), (30, SLOW_READOUT_S, 5)])
def test_broadband_levels(rate_hz, readout_s, duration_s):
    """Flat from 80 to 160 Hz: whole and by one-third octaves (IEC 61260-1) within 1.5 dB, and little beside it."""
    rms = 0.5
    signals = made.row_signals(made.broadband(80, 160, rms, seed=3), made.frame_times(rate_hz, duration_s), readout_s,
                               noise_px=0.03)
    levels = levels_in(signals, readout_s)
    step = levels.frequency_hz[1] - levels.frequency_hz[0]
    true_density = rms ** 2 / 80
    inside = levels.observable & (levels.frequency_hz > 80) & (levels.frequency_hz < 160)
    whole = np.sum(levels.density[inside]) * step
    assert 10 * np.log10(whole / (true_density * step * inside.sum())) == pytest.approx(0, abs=1.5)
    for nominal in (100.0, 125.0):
        band = next(band for band in third_octave_bands(500) if band.nominal_hz == nominal)
        power, seen = band_power(levels.frequency_hz, levels.density, levels.observable, band)
        assert seen > 0.5
        true_power = true_density * (band.high_hz - band.low_hz) * seen
        assert 10 * np.log10(power / true_power) == pytest.approx(0, abs=1.5), nominal
    for low, high in ((10, 55), (200, 290), (310, 400)):
        beside = levels.observable & (levels.frequency_hz > low) & (levels.frequency_hz < high)
        assert levels.density[beside].mean() < 0.05 * true_density, (low, high)


def test_levels_hold_the_power_of_tones():
    """Power of a tone is A^2 / 2, wherever it stands between two blind intervals."""
    for frequency in (44.0, 96.1, 137.3, 207.0):
        signals = made.row_signals(made.tone(frequency, 0.4), made.frame_times(60, 3), READOUT_S, noise_px=0.03)
        levels = levels_in(signals, READOUT_S)
        step = levels.frequency_hz[1] - levels.frequency_hz[0]
        near = levels.observable & (np.abs(levels.frequency_hz - frequency) < 4)
        assert 10 * np.log10(levels.density[near].sum() * step / (0.4 ** 2 / 2)) == pytest.approx(0, abs=0.5), frequency


def test_levels_and_tones_agree_on_the_power_of_a_mixture():
    motion = made.tones((137.3, 0.45, 0.3), (96.1, 0.25, 1.0), (251.0, 0.2, 4.0))
    signals = made.row_signals(motion, made.frame_times(60, 3), READOUT_S, noise_px=0.03)
    levels = levels_in(signals, READOUT_S)
    step = levels.frequency_hz[1] - levels.frequency_hz[0]
    from_tones = sum(t.amplitude_px ** 2 / 2 for t in tones_in(signals, READOUT_S))
    from_levels = np.nansum(np.where(levels.observable, levels.density, 0)[levels.frequency_hz > 10]) * step
    assert 10 * np.log10(from_levels / from_tones) == pytest.approx(0, abs=0.8)


def test_levels_are_unknown_in_blind_intervals():
    signals = made.row_signals(made.broadband(20, 400, 0.5), made.frame_times(60, 3), READOUT_S, noise_px=0.03)
    levels = levels_in(signals, READOUT_S)
    for multiple in (60, 120, 180, 240):
        at = np.argmin(np.abs(levels.frequency_hz - multiple))
        assert not levels.observable[at] and np.isnan(levels.density[at]) and np.isnan(levels.local[:, at]).all()
    assert np.isfinite(levels.density[levels.observable]).all() and (levels.density[levels.observable] >= 0).all()
    band = next(band for band in third_octave_bands(500) if band.nominal_hz == 63.0)
    _, seen = band_power(levels.frequency_hz, levels.density, levels.observable, band)
    assert 0.2 < seen < 0.8


def test_levels_of_noise_stay_near_their_floor():
    """White measuring noise alone: the third-octave levels are at most a little above what the floor says."""
    over = []
    for seed in range(3):
        signals = made.row_signals(made.still, made.frame_times(60, 3), READOUT_S, noise_px=0.05, seed=seed)
        levels = levels_in(signals, READOUT_S)
        for band in third_octave_bands(400)[6:]:
            power, seen = band_power(levels.frequency_hz, levels.density, levels.observable, band)
            floor, _ = band_power(levels.frequency_hz, levels.floor, levels.observable, band)
            if seen > 0.5:
                over.append(power / floor)
    assert np.median(over) < 1.0 and np.max(over) < 2.5


def test_floor_by_the_noise_of_the_bands():
    """The floor is the density whose power through the gain equals the noise of the mean over the bands.

    White noise of s^2 a band and pair: mean of B bands s^2 / B, spread over the frame rate two-sided, over gain^2.
    """
    sigma, bands = 0.05, made.BANDS
    signals = made.row_signals(made.still, made.frame_times(60, 4), READOUT_S, noise_px=sigma)
    levels = levels_in(signals, READOUT_S)
    clock = exposure_clock(signals, READOUT_S)
    expected = 2 * sigma ** 2 / bands / 60 / difference_gain(levels.frequency_hz, clock) ** 2
    ratio = (levels.floor / expected)[levels.observable]
    assert np.median(ratio) == pytest.approx(1.0, abs=0.25)


def test_levels_follow_time():
    """The vibration starts half way: windows before it hold next to nothing, those after it hold all."""
    steady = made.broadband(80, 110, 0.4, seed=5)
    signals = made.row_signals(lambda t: steady(t) * (t > 3.0), made.frame_times(60, 6), READOUT_S, noise_px=0.02)
    levels = levels_in(signals, READOUT_S)
    step = levels.frequency_hz[1] - levels.frequency_hz[0]
    near = levels.observable & (levels.frequency_hz > 75) & (levels.frequency_hz < 115)
    power = levels.local[:, near].sum(1) * step
    quiet, loud = power[levels.window_s < 2.4], power[levels.window_s > 3.6]
    assert len(quiet) >= 3 and len(loud) >= 3
    assert quiet.max() < 0.05 * loud.mean()
    assert 10 * np.log10(loud.mean() / 0.4 ** 2) == pytest.approx(0, abs=1.5)


# --- no readout time -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("frequency_hz", "rate_hz", "readout_s"), [
    (137.3, 60, 0.014), (96.1, 60, 0.010),
    (137.3, 30, 0.022),
])
def test_without_a_readout_the_candidates_hold_the_truth(frequency_hz, rate_hz, readout_s):
    signals = made.row_signals(made.tone(frequency_hz, 0.4), made.frame_times(rate_hz, 3), readout_s, noise_px=0.03)
    found = find_folded_tones(signals, 0, exposure_clock(signals, 0.0), PER_1920)
    alias = frequency_hz % rate_hz
    sign = 1 if alias <= rate_hz / 2 else -1
    assert found[0].alias_hz == pytest.approx(min(alias, rate_hz - alias), abs=0.02)
    assert found[0].cycles_per_frame == pytest.approx(sign * frequency_hz * readout_s, abs=0.02)
    assert found[0].amplitude_px == pytest.approx(0.4, rel=0.05)
    nearest = int(np.argmin(np.abs(np.array(found[0].candidates_hz) - frequency_hz)))
    assert found[0].candidates_hz[nearest] == pytest.approx(frequency_hz, abs=0.05)
    assert found[0].candidate_readout_s[nearest] == pytest.approx(readout_s, rel=0.02)
    assert len(found[0].candidates_hz) > 1
    assert len(found) == 1


def test_candidates_by_arithmetic():
    """1.9 cycles in a frame at an alias of 17.3 Hz, 60 frames/s: f = |17.3 + 60 k|, R = 1.9 / f up to 1/60 s."""
    frequency, readout = candidates(17.3, 1.9, 1 / 60)
    expected = [17.3 + 60 * k for k in range(2, 40) if 1.9 / (17.3 + 60 * k) >= 0.1 / 60]
    assert list(frequency) == pytest.approx(expected)
    np.testing.assert_allclose(np.array(frequency) * np.array(readout), 1.9)
    assert max(readout) <= 1 / 60


def test_noise_without_a_readout_holds_no_tone():
    times = made.frame_times(60, 2)
    count = 0
    for seed in range(10):
        record = made.row_signals(made.still, times, READOUT_S, noise_px=0.1, seed=seed, bands=20)
        count += bool(find_folded_tones(record, 0, exposure_clock(record, 0.0), 1e-6))
    assert count <= 1
