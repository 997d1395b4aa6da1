"""The promises of accuracy, each in a small sharp case: rendered flights, measured end to end, against the simulator's truth.

Pictures are small and takes short here; the full-size campaign is `python -m tests.bench.accuracy`.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.bench.accuracy import truth_band
from tests.truth import below, dense_motion, flight, measure, true_figures

SMALL_60 = (640, 360, 60.0, 14.0)
QUICK_60 = (640, 360, 60.0, 6.0)
SMALL_30 = (640, 360, 30.0, 24.0)
#: One vibration for both modes, clear of the multiples of 30 Hz. Degrees: 0.068 deg is 0.45 px in this picture.
SHAKEN = [
    {"axis": "yaw", "frequency_hz": 137.3, "amplitude_deg": 0.070, "phase_deg": 20.0},
    {"axis": "yaw", "frequency_hz": 104.1, "amplitude_deg": 0.0235, "phase_deg": 110.0},
    {"axis": "pitch", "frequency_hz": 71.6, "amplitude_deg": 0.048, "phase_deg": 200.0},
    {"axis": "roll", "frequency_hz": 166.2, "amplitude_deg": 0.050, "phase_deg": 70.0},
    {"axis": "yaw", "frequency_hz": 6.3, "amplitude_deg": 0.06, "phase_deg": 0.0},
]


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("flights")


@pytest.fixture(scope="module")
def fast_mode(folder):
    return measure(flight(*QUICK_60, seed=1, duration_s=4.0, tones=SHAKEN, bits_per_pixel=0.4), folder / "fast.mp4")


@pytest.fixture(scope="module")
def slow_mode(folder):
    return measure(flight(*SMALL_30, seed=2, duration_s=4.0, tones=SHAKEN, bits_per_pixel=0.4), folder / "slow.mp4")


@pytest.fixture(scope="module")
def calm(folder):
    return measure(flight(*SMALL_60, seed=3, duration_s=3.0, bits_per_pixel=0.4), folder / "calm.mp4")


@pytest.fixture(scope="module")
def noisy(folder):
    return measure(flight(
        *SMALL_60, seed=4, duration_s=4.0, bits_per_pixel=0.4,
        broadband=[{"axis": "yaw", "low_hz": 80.0, "high_hz": 160.0, "rms_deg": 0.045}],
        motors=[{"count": 4, "axis": "pitch", "frequency_hz": 140.0, "spread_pct": 1.5, "wander_pct": 1.0, "amplitude_deg": 0.03}],
    ), folder / "noisy.mp4")


def _found(record, axis, frequency_hz):
    near = record.tones[(record.tones.axis == axis) & ((record.tones.frequency_hz - frequency_hz).abs() < 1)]
    assert len(near) == 1, f"expected one {axis} tone near {frequency_hz} Hz, found:\n{record.tones}"
    return near.iloc[0]


@pytest.mark.parametrize("mode", ["fast_mode", "slow_mode"])
def test_tones_come_back_with_frequency_and_amplitude(mode, request):
    record, rendered = request.getfixturevalue(mode)
    for tone in rendered.truth.facts["tones"]:
        if tone["frequency_hz"] < 20:
            continue
        found = _found(record, tone["axis"], tone["frequency_hz"])
        assert found.frequency_hz == pytest.approx(tone["frequency_hz"], abs=0.2)
        limit = 0.08 if tone["axis"] == "roll" else 0.06 if tone["amplitude_px"] >= 0.3 else 0.12
        assert found.amplitude_px == pytest.approx(tone["amplitude_px"], rel=limit)
        assert found.amplitude_mdeg == pytest.approx(tone["amplitude_mdeg"], rel=limit)
        readout_s = rendered.truth.facts["camera"]["readout_ms"] / 1e3
        assert found.cycles_per_frame == pytest.approx(tone["frequency_hz"] * readout_s, abs=0.01)


def test_nothing_else_is_called_a_tone(fast_mode):
    record, rendered = fast_mode
    true = [(t["axis"], t["frequency_hz"]) for t in rendered.truth.facts["tones"]]
    false = [row for row in record.tones.itertuples()
             if not any(row.axis == axis and abs(row.frequency_hz - f) < 1 for axis, f in true)]
    assert all(row.amplitude_px < 0.04 for row in false), false


@pytest.mark.parametrize("mode", ["fast_mode", "slow_mode"])
def test_sway_shake_and_jello_follow_the_true_path(mode, request):
    record, rendered = request.getfixturevalue(mode)
    true = true_figures(rendered)
    assert true["jello"] > 0.3 and true["shake"] > 0.5 and true["sway"] > 1
    for name in ("sway", "shake", "jello"):
        assert record.take[f"{name}_px1920"] == pytest.approx(true[name], rel=0.10), name


def test_same_vibration_in_two_modes_is_the_same_rotation_but_other_jello(fast_mode, slow_mode):
    (fast, rendered), (slow, other) = fast_mode, slow_mode
    assert fast.take["vibration_mdeg"] == pytest.approx(slow.take["vibration_mdeg"], rel=0.10)
    assert fast.take["vibration_mdeg"] == pytest.approx(true_figures(rendered)["vibration_mdeg"], rel=0.10)
    # the true jello differs between the modes, and the measured one by the same ratio
    ratio = true_figures(other)["jello"] / true_figures(rendered)["jello"]
    assert abs(ratio - 1) > 0.05
    assert slow.take["jello_px1920"] / fast.take["jello_px1920"] == pytest.approx(ratio, rel=0.10)


def test_a_flight_with_sway_only_has_no_tone(calm):
    record, rendered = calm
    assert not (record.tones.amplitude_px > 0.04).any()
    assert record.take["sway_px1920"] == pytest.approx(true_figures(rendered)["sway"], rel=0.10)


def test_broadband_levels(noisy):
    record, rendered = noisy
    checked = 0
    for row in record.spectrum[record.spectrum.axis == "yaw"].itertuples():
        true = truth_band(rendered, "yaw", row.low_hz, row.high_hz)
        if row.observable_pct > 95 and 80 < row.low_hz and row.high_hz < 200 and true > 0.02:
            assert 20 * np.log10(row.level_px / true) == pytest.approx(0, abs=1.5)
            checked += 1
    assert checked >= 1
    assert not (record.tones.axis == "yaw").any(), "a flat broad band is no tone"


def test_four_wandering_motors_are_found_and_summed(noisy):
    record, rendered = noisy
    pitch = record.tones[record.tones.axis == "pitch"]
    motors = [t for t in rendered.truth.facts["tones"] if t["motor"]]
    # the four beat against each other: what they add up to in this take, from the true motion, not from the sum of powers
    time, motion = dense_motion(rendered)
    together = (motion - below(motion, 20.0, 1 / (time[1] - time[0])))[:, 1].std()
    middle = np.average([t["mean_frequency_hz"] for t in motors], weights=[t["rms_over_clip_px"] ** 2 for t in motors])
    assert np.sqrt((pitch.amplitude_px ** 2 / 2).sum()) == pytest.approx(together, rel=0.10)
    assert np.average(pitch.frequency_hz, weights=pitch.amplitude_px ** 2) == pytest.approx(middle, abs=1.5)
    low, high = 112.2, 177.8
    bands = record.spectrum[(record.spectrum.axis == "pitch") & (record.spectrum.low_hz > low - 1) & (record.spectrum.high_hz < high + 1)]
    level = np.sqrt((bands.level_px ** 2).sum())
    assert 20 * np.log10(level / truth_band(rendered, "pitch", low, high)) == pytest.approx(0, abs=1.5)


def test_global_shutter_shows_shake_and_no_jello(folder):
    tone = [{"axis": "yaw", "frequency_hz": 137.3, "amplitude_deg": 0.07}]
    record, rendered = measure(flight(640, 360, 60.0, 0.0, seed=5, duration_s=3.0, tones=tone, bits_per_pixel=0.4), folder / "global.mp4")
    assert record.take["shake_px1920"] == pytest.approx(true_figures(rendered)["shake"], rel=0.10)
    assert record.take["jello_px1920"] <= record.extra["jello_floor_px1920"] * (1 + 1e-9)
    assert any("below the floor" in note for note in record.notes)
    # one figure in hertz would be a guess: the candidates hold the truth
    assert record.tones.frequency_hz.isna().all()
    assert np.min(np.abs(np.array(record.extra["candidates"][0]["candidates_hz"]) - 137.3)) < 0.2


def test_moving_objects_before_a_still_camera_are_no_vibration(folder):
    record, _ = measure(flight(*SMALL_60, seed=6, duration_s=3.0, still=True, cars=25), folder / "cars.mp4")
    assert not len(record.tones)
    assert record.take["jello_px1920"] < 0.05
    assert record.take["measured_pct"] < 97


def test_without_a_readout_the_candidates_hold_the_truth(folder, fast_mode):
    recipe = flight(*SMALL_60, seed=1, duration_s=3.0, tones=SHAKEN[:1], bits_per_pixel=0.4)
    record, rendered = measure(recipe, folder / "unknown.mp4", readout_s=None)
    assert record.take["readout_source"] == "none" and np.isnan(record.take["readout_ms"])
    assert record.tones.frequency_hz.isna().all()
    strongest = record.tones.iloc[0]
    assert strongest.cycles_per_frame == pytest.approx(137.3 * 0.014, abs=0.05)
    assert strongest.amplitude_px == pytest.approx(rendered.truth.facts["tones"][0]["amplitude_px"], rel=0.08)
    assert np.min(np.abs(np.array(record.extra["candidates"][0]["candidates_hz"]) - 137.3)) < 0.2
    assert record.take["jello_px1920"] == pytest.approx(true_figures(rendered)["jello"], rel=0.35)
