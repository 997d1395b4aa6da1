"""Tracing: tones followed over time, causes ranked, and the command; against constructed and simulated truth."""

from __future__ import annotations

import dataclasses
import itertools
import json

import numpy as np
import pandas as pd
import pytest

from framegrade import cli, records
from framegrade.airframe import Airframe, Mount, Resonance
from framegrade.isolator import transmissibility
from framegrade.report import tables
from framegrade.simulate import flight_from_dict, row_signals
from framegrade.simulate.motion import seen_tones
from framegrade.sources import trace_take
from framegrade.sources.causes import orders_of
from framegrade.sources.lines import lines_of, view_of
from framegrade.sources.throttle import follow_throttle, passed_resonance
from framegrade.spectrum.folded import candidates as folded_candidates
from framegrade.spectrum.response import exposure_clock
from framegrade.spectrum.tracks import Track, best_path, track_tones, tracks_from_extra, tracks_to_extra
from framegrade.trace_command import TRACE_COLUMNS
from tests import signals as made
from tests.bench import trace as bench
from tests.fake_take import make_record

READOUT_S = 0.014

QUAD = Airframe(motors=4, blades=2, kv_rpm_per_volt=920, volts=16.8, magnet_poles=14, idle_rpm=1900, hover_rpm=8300,
                full_rpm=11800)


def take(*tones, extra=None, duration_s=4.0, wander=None, clip="a.mp4"):
    """A take at 60 frames/s with tones (axis, frequency_hz, amplitude_px), measured to 0.01 Hz; readout 14 ms."""
    rows = [(clip, axis, f, 0.01, a, 0.05 * a, np.nan, f * READOUT_S) for axis, f, a in tones]
    f = np.arange(0.5, 850, 0.5)
    density = pd.DataFrame({"axis": "yaw", "frequency_hz": f, "level_px2_per_hz": 0.0, "floor_px2_per_hz": 0.0,
                            "observable": np.abs(f - 60 * np.round(f / 60)) >= 3})
    known = {"readout_s": READOUT_S, "wander_hz": wander or [0.0] * len(tones)}
    return dataclasses.replace(
        make_record(clip, rows=0, frame_rate_hz=60.0, duration_s=duration_s), density=density,
        tones=pd.DataFrame(rows, columns=list(records.TONE_COLUMNS)), extra=known | (extra or {}))


def only(traced):
    assert len(traced.tones) == 1
    return traced.tones[0]


def at(traced, frequency_hz):
    """The traced tone nearest to a frequency."""
    return min(traced.tones, key=lambda tone: abs(tone.frequency_hz - frequency_hz))


# --- tracks ----------------------------------------------------------------------------------------------------------


def simulated(tones, duration_s=5.0, noise_px=0.03):
    """Yaw band signals of a simulated flight and the flight."""
    flight = flight_from_dict({
        "seed": 5, "flight": {"duration_s": duration_s}, "tone": tones,
        "camera": {"width_px": 1280, "height_px": 720, "frame_rate": 60, "readout_ms": 1e3 * READOUT_S,
                   "exposure_ms": 0.0},
    })
    pts, _, angle = row_signals(flight, 60)
    return made.from_angles(pts, angle[..., 0] * flight.camera.focal_px, 2, noise_px=noise_px), flight


def test_track_follows_the_simulator():
    """A tone whose speed wanders by several percent, and a steady one, against the simulator's own frequencies."""
    signals, flight = simulated([
        {"axis": "yaw", "frequency_hz": 150.0, "amplitude_px": 0.6, "wander_pct": 6.0, "wander_time_s": 6.0},
        {"axis": "yaw", "frequency_hz": 41.0, "amplitude_px": 0.5},
    ])
    found = track_tones(signals, exposure_clock(signals, READOUT_S), 0, 500.0, least_px=0.02)
    assert len(found) == 2
    moving = max(found, key=lambda t: np.nanmedian(t.frequency_hz))
    steady = min(found, key=lambda t: np.nanmedian(t.frequency_hz))
    # a window states the mean over its Hann taper
    offsets = np.linspace(-0.25, 0.25, 51)
    true = np.average(seen_tones(flight)[0].frequency(moving.time_s[:, None] + offsets), axis=1,
                      weights=np.cos(2 * np.pi * offsets) ** 2)
    assert np.ptp(true) > 0.05 * 150  # the truth does move
    seen = np.isfinite(moving.frequency_hz)
    assert seen.mean() > 0.8
    assert np.nanmax(np.abs(moving.frequency_hz / true - 1)) < 0.01
    assert np.nanmedian(np.abs(moving.frequency_hz / true - 1)) < 0.002
    assert np.nanmedian(moving.amplitude_px) == pytest.approx(0.6, rel=0.05)
    assert np.nanmax(np.abs(steady.frequency_hz - 41.0)) < 0.6
    assert np.nanmedian(steady.amplitude_px) == pytest.approx(0.5, rel=0.05)


@pytest.mark.parametrize("rate, readout", [(60.0, 0.014), (60.0, 0.005), (30.0, 0.024)])
def test_tracks_of_a_throttle_change(rate, readout):
    """A shaft that speeds up by 40 % in two seconds, with its second order, through blind intervals and aliases."""
    turns = bench.throttle(115.0, 165.0, 1.5, 3.5)

    def motion(t):
        return 0.6 * np.cos(2 * np.pi * turns(t)) + 0.25 * np.cos(4 * np.pi * turns(t) + 1)

    signals = made.row_signals(motion, made.frame_times(rate, 5.0), readout, noise_px=0.05)
    clock = exposure_clock(signals, readout)
    found = sorted(track_tones(signals, clock, 0, 600.0, least_px=0.02), key=lambda t: np.nanmedian(t.frequency_hz))
    assert len(found) == 2
    for order, track in zip((1, 2), found):
        half = 1e-4
        true = order * (turns(track.time_s + half) - turns(track.time_s - half)) / (2 * half)
        assert np.isfinite(track.frequency_hz).mean() > 0.5
        assert np.nanmedian(np.abs(track.frequency_hz / true - 1)) < 0.002
        assert np.nanmax(np.abs(track.frequency_hz / true - 1)) < 0.02
    assert track_tones(signals, clock, 1, 600.0) == ()  # pitch holds noise only


def test_tracks_do_not_change_over_to_an_alias():
    """With a readout of 3 ms at 60 frames/s aliases look nearly as strong as the tones they are of."""
    turns = bench.throttle(100.0, 130.0, 1.5, 3.5)

    def motion(t):
        return 0.5 * np.cos(2 * np.pi * turns(t)) + 0.45 * np.cos(2 * np.pi * 47.0 * t)

    signals = made.row_signals(motion, made.frame_times(60.0, 6.0), 0.003, noise_px=0.05)
    found = track_tones(signals, exposure_clock(signals, 0.003), 0, 600.0, least_px=0.02)
    steady, moving = sorted(found, key=lambda t: np.nanmedian(t.frequency_hz))
    true = (turns(moving.time_s + 1e-4) - turns(moving.time_s - 1e-4)) / 2e-4
    assert np.nanmax(np.abs(steady.frequency_hz - 47.0)) < 1.5 and np.isfinite(steady.frequency_hz).mean() > 0.5
    assert np.nanmax(np.abs(moving.frequency_hz / true - 1)) < 0.02 and np.isfinite(moving.frequency_hz).mean() > 0.5


@pytest.mark.parametrize("frequency", [123.4, 550.0])
def test_track_amplitude(frequency):
    """Beside a blind interval, and where a band of rows averages over a quarter of a cycle (to 90 %)."""
    signals = made.row_signals(made.tone(frequency, 0.5), made.frame_times(60.0, 5.0), READOUT_S, noise_px=0.01)
    found, = track_tones(signals, exposure_clock(signals, READOUT_S), 0, 600.0, least_px=0.02)
    assert np.nanmedian(found.amplitude_px) == pytest.approx(0.5, rel=0.04)


@pytest.mark.parametrize("seed", range(4))
def test_no_track_in_noise(seed):
    signals = made.row_signals(made.still, made.frame_times(60.0, 4.0), READOUT_S, noise_px=0.1, seed=seed)
    assert track_tones(signals, exposure_clock(signals, READOUT_S), 0, 600.0) == ()


def test_short_takes_have_no_tracks():
    signals = made.row_signals(made.tone(100.0, 0.5), made.frame_times(60.0, 0.7), READOUT_S, noise_px=0.02)
    assert track_tones(signals, exposure_clock(signals, READOUT_S), 0, 600.0) == ()


def test_best_path_is_the_best():
    """Forney 1973: dynamic programming finds what trying every path finds."""
    rng = np.random.default_rng(8)
    for _ in range(20):
        worth, glide = rng.normal(size=(4, 5)), 0.02 * rng.normal(size=(4, 5))

        def total(path):
            bends = [abs((b - a) * 0.0025 - 0.25 * (glide[w, a] + glide[w + 1, b]) / 2)
                     for w, (a, b) in enumerate(zip(path, path[1:]))]
            length = sum(abs(b - a) for a, b in zip(path, path[1:])) * 0.0025
            return sum(worth[w, j] for w, j in enumerate(path)) - sum(bends) / 0.02 - length / 0.05

        best = max(itertools.product(range(5), repeat=4), key=total)
        assert best_path(worth, glide, 0.25).tolist() == list(best)


def test_tracks_survive_json():
    track = Track(2, np.array([0.25, 0.5, 0.75]), np.array([91.25, np.nan, 92.0]), np.array([0.5, np.nan, 0.25]))
    back, = tracks_from_extra(json.loads(json.dumps(tracks_to_extra([track]), allow_nan=False)))
    assert back.axis == 2
    for name in ("time_s", "frequency_hz", "amplitude_px"):
        np.testing.assert_array_equal(getattr(back, name), getattr(track, name))


# --- throttle --------------------------------------------------------------------------------------------------------

TIME_S = np.arange(0.25, 6.0, 0.25)
RAMP = 100.0 * (1 + 0.4 * np.clip((TIME_S - 1.5) / 3, 0, 1))


def track_of(frequency_hz, amplitude_px=0.5, axis=0):
    frequency_hz = np.broadcast_to(frequency_hz, TIME_S.shape).astype(float)
    return Track(axis, TIME_S, frequency_hz, np.broadcast_to(amplitude_px, TIME_S.shape).astype(float))


def test_follows_and_stays():
    rng = np.random.default_rng(1)
    jitter = 1 + 0.002 * rng.normal(size=(3, len(TIME_S)))
    found = follow_throttle((track_of(RAMP * jitter[0]), track_of(3 * RAMP * jitter[1], 0.2),
                             track_of(48.0 * jitter[2], 0.4), track_of(np.sqrt(RAMP) * 20, 0.2)))
    assert [f.throttle for f in found] == ["follows", "follows", "stays", "drifts"]
    assert found[1].frequency_hz / found[0].frequency_hz == pytest.approx(3.0, rel=0.002)
    assert found[2].frequency_hz == pytest.approx(48.0, rel=0.002)
    assert found[0].low_hz == pytest.approx(100, abs=2) and found[0].high_hz == pytest.approx(140, abs=2)


def test_wandering_propellers_are_no_throttle_change():
    """A percent or two of wander is steady flight (common practice)."""
    wander = 1 + 0.012 * np.sin(TIME_S)
    assert follow_throttle((track_of(140 * wander), track_of(48.0))) == ()


def test_weak_or_short_tracks_do_not_set_the_reference():
    short = np.where(TIME_S < 2.5, RAMP, np.nan)
    assert follow_throttle((track_of(140.0), track_of(RAMP, 0.1))) == ()
    assert follow_throttle((track_of(140.0), track_of(np.where(TIME_S > 2.6, RAMP, np.nan)), track_of(short))) == ()


def test_resonance_passed_by_a_shaft():
    """Unbalance grows with speed squared and swells where an isolator's transmissibility peaks (Harris, ch. 30)."""
    amplitude = (RAMP / 100) ** 2 * transmissibility(RAMP, 122.0, 0.03)
    assert passed_resonance(track_of(RAMP, amplitude)) == pytest.approx(122.0, rel=0.04)
    assert passed_resonance(track_of(RAMP, (RAMP / 100) ** 2)) is None


# --- causes ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("blades, poles, multiples", [
    (2, None, [1, 2, 3, 4]), (3, 14, [1, 2, 3, 4, 6, 7]), (4, 12, [1, 2, 3, 4, 6, 8]), (1, None, [1, 2, 3, 4]),
])
def test_orders(blades, poles, multiples):
    """Blade pass is blades x the shaft, electrical order pole pairs x the shaft (definitions)."""
    airframe = dataclasses.replace(QUAD, blades=blades, magnet_poles=poles)
    orders = {order.multiple: order.name for order in orders_of(airframe)}
    assert sorted(orders) == multiples
    if blades > 1:
        assert "blade pass" in orders[blades] and "twice the blade pass" in orders[2 * blades]
    if poles:
        assert "electrical" in orders[poles // 2]
    assert "once per turn" in orders[1] and "twice per turn" in orders[2]


def test_once_per_turn():
    """137.3 turns a second are 8238 rpm."""
    tone = only(trace_take(take(("yaw", 137.3, 0.5)), QUAD))
    first = tone.candidates[0]
    assert (first.order, tone.confidence) == (1, "named")
    assert first.shaft_rpm == pytest.approx(8238, abs=1)
    assert "8238 rpm" in first.reason and "hover" in tone.why
    assert tone.frequency_hz == pytest.approx(137.3) and tone.frequency_ci_hz == pytest.approx(0.01)


def test_family_is_joined():
    """f, 2 f and 3 f of one shaft with three blades; hover speed is not known, so the family has to tell."""
    airframe = dataclasses.replace(QUAD, blades=3, hover_rpm=None)
    traced = trace_take(take(("yaw", 95.5, 0.4), ("pitch", 286.52, 0.2), ("roll", 191.0, 0.1)), airframe)
    assert [tone.candidates[0].order for tone in traced.tones] == [1, 3, 2]
    assert {tone.confidence for tone in traced.tones} == {"named"}
    shaft, = traced.shafts
    assert shaft.orders == (1, 2, 3) and shaft.speed_rpm == pytest.approx(5730, abs=3)
    assert "95.5 Hz (1 a turn)" in at(traced, 286.52).candidates[0].reason


@pytest.mark.parametrize("hover_hz, order", [(150.0, 1), (50.0, 3)])
def test_hover_speed_decides(hover_hz, order):
    """A lone tone of 150 Hz and three blades: unbalance at a hover of 150 turns/s, blade pass at one of 50."""
    airframe = dataclasses.replace(QUAD, blades=3, hover_rpm=60 * hover_hz, idle_rpm=900)
    assert only(trace_take(take(("yaw", 150.0, 0.3)), airframe)).candidates[0].order == order


def test_what_is_hidden_does_not_count():
    """Blade pass alone: less likely where once per turn would show (75 Hz) than where it is blind (61 Hz)."""
    airframe = dataclasses.replace(QUAD, blades=3, hover_rpm=None, full_rpm=60 * 130.0, magnet_poles=None)

    def blade_pass(f):
        shares = {c.order: c.probability for c in only(trace_take(take(("yaw", f, 0.3)), airframe)).candidates}
        return shares[3], shares[2]

    (hidden, hidden_twice), (shown, shown_twice) = blade_pass(3 * 61.0), blade_pass(3 * 75.0)
    assert hidden / hidden_twice > 3 * shown / shown_twice


def test_reach_rules_out():
    """At full speed 5000 rpm, 150 Hz cannot be once per turn (9000 rpm): it is the next that is within reach."""
    airframe = dataclasses.replace(QUAD, blades=3, hover_rpm=3100, full_rpm=5000, idle_rpm=900)
    tone = only(trace_take(take(("yaw", 150.0, 0.3)), airframe))
    assert tone.candidates[0].order == 3
    assert any("once per turn would need 9000 rpm, above 5000 rpm (full speed)" in text for text in tone.ruled_out)


def test_no_load_limit_holds_without_full_speed():
    """Speed constant x volts is the no-load limit (common practice): 920 x 16.8 = 15 456 rpm, 257.6 turns/s."""
    airframe = dataclasses.replace(QUAD, full_rpm=None, hover_rpm=None)
    assert any(c.order == 1 for c in only(trace_take(take(("yaw", 250.0, 0.3)), airframe)).candidates)
    assert all(c.order != 1 for c in only(trace_take(take(("yaw", 260.0, 0.3)), airframe)).candidates)


def test_nothing_fits():
    """Between idle and hover only, 30 Hz is nothing's order and nothing's resonance."""
    tone = only(trace_take(take(("yaw", 30.0, 0.3)), dataclasses.replace(QUAD, magnet_poles=None)))
    assert tone.confidence == "unexplained" and tone.candidates == () and tone.shaft is None
    assert "nothing in the airframe file fits" in tone.why
    assert "stays is a resonance" in tone.advice


def test_resonances_and_slow_oscillation():
    airframe = dataclasses.replace(QUAD, mount=Mount(resonance_hz=46.0, isolator_hz=22.0),
                                   resonances=(Resonance("landing gear", 71.0),))
    traced = trace_take(take(("yaw", 137.3, 0.5), ("yaw", 8.0, 0.6), ("pitch", 23.5, 0.3), ("roll", 45.5, 0.2),
                             ("yaw", 71.6, 0.1)), airframe)
    names = [at(traced, f).candidates[0].cause for f in (137.3, 8.0, 23.5, 45.5, 71.6)]
    assert names == ["once per turn", "slow oscillation", "isolator resonance", "mount resonance",
                     "resonance: landing gear"]
    assert at(traced, 8.0).confidence == "likely"  # nothing but its frequency speaks for it
    assert "gains" in at(traced, 8.0).candidates[0].parts and at(traced, 8.0).candidates[0].order is None
    assert at(traced, 71.6).confidence == "named"
    # Harris, ch. 30: an isolator amplifies below sqrt 2 times its natural frequency, 31.1 Hz here
    assert at(traced, 23.5).isolator_gain > 1 > at(traced, 45.5).isolator_gain
    assert "31.1 Hz" in at(traced, 23.5).isolator


def test_motors_told_apart():
    """Two of four motors, 3 Hz apart, each with its own unbalance."""
    traced = trace_take(take(("yaw", 137.0, 0.5), ("roll", 140.0, 0.3)), QUAD)
    assert [round(shaft.speed_rpm) for shaft in traced.shafts] == [8220, 8400]
    assert any("2 of 4 motors stand apart, at 8220, 8400 rpm" in note for note in traced.notes)


@pytest.mark.parametrize("duration, resolution", [(2.0, "0.5 Hz (30 rpm)"), (5.0, "0.2 Hz (12 rpm)")])
def test_motors_that_cannot_be_told_apart(duration, resolution):
    """Lines closer than 1 / duration run together (the Fourier limit; Rife and Boorstyn 1974)."""
    traced = trace_take(take(("yaw", 137.0, 0.5), duration_s=duration), QUAD)
    assert any("cannot be told" in note and f"closer than {resolution}" in note for note in traced.notes)


def test_one_motor_needs_no_telling():
    assert trace_take(take(("yaw", 137.0, 0.5)), dataclasses.replace(QUAD, motors=1)).notes == ()


def test_axes_are_joined():
    traced = trace_take(take(("yaw", 137.30, 0.3), ("pitch", 137.33, 0.4), ("pitch", 210.0, 0.2)), QUAD)
    assert len(traced.tones) == 2
    assert at(traced, 137.3).axes == ("pitch", "yaw")
    assert at(traced, 137.3).amplitude_px == pytest.approx(0.5)


def test_no_tones():
    traced = trace_take(take(), QUAD)
    assert traced.tones == () and "no tone" in traced.notes[0]


def test_never_out_of_reach():
    """Random tones and airframes: no candidate, however unlikely, needs a speed beyond the limits."""
    rng = np.random.default_rng(12)
    for _ in range(60):
        idle, full = sorted(rng.uniform(1000, 15000, 2))
        airframe = dataclasses.replace(
            QUAD, blades=int(rng.integers(1, 6)), idle_rpm=idle if rng.random() < 0.7 else None, hover_rpm=None,
            full_rpm=full if rng.random() < 0.7 else None)
        tones = [("yaw", float(f), float(a)) for f, a in zip(rng.uniform(4, 800, 5), rng.uniform(0.05, 1, 5))]
        traced = trace_take(take(*tones), airframe)
        speeds = [c.shaft_rpm for tone in traced.tones for c in tone.candidates if c.order is not None]
        speeds += [shaft.speed_rpm for shaft in traced.shafts]
        assert all(airframe.reach.lowest_rpm <= s <= airframe.reach.highest_rpm for s in speeds)


def test_campaign():
    """The right order first for the strongest shaft tone of nine airframes in ten; the full run is in tests/bench."""
    table = bench.run(50, seed=21)
    first = bench.strongest_turning(table)
    assert len(first) >= 48 and set(first.blades) == {2, 3, 4}
    assert bench.right(first).mean() >= 0.9
    assert table.outside_reach.sum() == 0
    assert (table.truth == "mount").any()  # resonances are mixed in


# --- without a readout, and with a global shutter --------------------------------------------------------------------


def folded_take(*tones, readout_s=READOUT_S, rate=60.0):
    rows = []
    for axis, f, amplitude in tones:
        alias, cycles = f % rate, f * readout_s
        if alias > rate / 2:
            alias, cycles = rate - alias, -cycles
        frequency, readout = folded_candidates(alias, cycles, 1 / rate)
        rows.append({"axis": axis, "alias_hz": alias, "cycles_per_frame": cycles, "amplitude_px": amplitude,
                     "candidates_hz": list(frequency), "readout_s": list(readout)})
    return take(extra={"readout_s": None, "candidates": rows})


def test_unknown_readout_is_implied():
    """A shaft's family picks its frequencies among their aliases, and so the readout; it is never more than likely."""
    record = folded_take(("yaw", 137.3, 0.5), ("pitch", 274.6, 0.2))
    assert len(record.extra["candidates"][0]["candidates_hz"]) > 3
    traced = trace_take(record, QUAD)
    for tone, f, order in zip(traced.tones, (137.3, 274.6), (1, 2)):
        first = tone.candidates[0]
        assert (first.order, tone.confidence) == (order, "likely")
        assert first.frequency_hz == pytest.approx(f) and first.readout_s == pytest.approx(READOUT_S)
        assert np.isnan(tone.frequency_hz)  # the tone itself has no single frequency
    assert any("14.0 ms" in note and "not known" in note for note in traced.notes)


def test_one_readout_for_all_tones():
    """197.3 Hz would be the hover speed, at 7.0 ms; but a known resonance at 46 Hz shows that the readout is 10 ms."""
    airframe = dataclasses.replace(QUAD, hover_rpm=60 * 197.3, full_rpm=15000, mount=Mount(resonance_hz=46.0))
    shaft, resonance = ("yaw", 137.3, 0.5), ("roll", 46.0, 0.3)
    alone = only(trace_take(folded_take(shaft, readout_s=0.010), airframe)).candidates[0]
    assert alone.frequency_hz == pytest.approx(197.3) and 1e3 * alone.readout_s == pytest.approx(6.96, abs=0.01)
    both = trace_take(folded_take(shaft, resonance, readout_s=0.010), airframe)
    first = [tone.candidates[0] for tone in both.tones]
    assert [round(c.frequency_hz, 1) for c in first] == [137.3, 46.0]
    assert {round(1e3 * c.readout_s, 2) for c in first} == {10.0}


def test_unknown_readout_out_of_reach():
    """Candidates no shaft can turn at are filtered out: at a full speed of 60 turns/s 137.3 Hz is no once per turn."""
    airframe = dataclasses.replace(QUAD, idle_rpm=1200, hover_rpm=2700, full_rpm=3600)
    tone = only(trace_take(folded_take(("yaw", 137.3, 0.5)), airframe))
    assert all(20 <= c.frequency_hz / c.order <= 60 for c in tone.candidates if c.order)


def test_global_shutter_claims_little():
    """One folded tone has many candidates; hover speed prefers one, without certainty."""
    record = take(extra={"readout_s": 0.0, "candidates": [
        {"axis": "yaw", "alias_hz": 17.3, "cycles_per_frame": 0.0, "amplitude_px": 0.4, "readout_s": [0.0] * 6,
         "candidates_hz": [17.3, 42.7, 77.3, 102.7, 137.3, 162.7]}]})
    tone = only(trace_take(record, QUAD))
    assert tone.candidates[0].frequency_hz == 137.3 and tone.candidates[0].order == 1
    assert tone.confidence != "named" and np.isnan(tone.candidates[0].readout_s)


# --- throttle changes ------------------------------------------------------------------------------------------------


def throttled_take():
    tracks = (track_of(RAMP), track_of(3 * RAMP, 0.2, axis=1), track_of(48.0, 0.3, axis=2))
    # what a gliding shaft leaves in the table of tones: smears along its way, here near hover and at a wrong place
    return take(("yaw", 104.0, 0.3), ("yaw", 131.0, 0.3), ("roll", 48.0, 0.3),
                extra={"tracks": tracks_to_extra(tracks)})


def test_throttle_change_names_turning_and_resonance():
    airframe = dataclasses.replace(QUAD, blades=3, hover_rpm=None)
    traced = trace_take(throttled_take(), airframe)
    assert len(traced.tones) == 3
    shaft, blade, resonance = at(traced, 118.0), at(traced, 354.0), at(traced, 48.0)
    assert (shaft.candidates[0].order, blade.candidates[0].order, resonance.candidates[0].order) == (1, 3, None)
    assert [t.throttle for t in (shaft, blade, resonance)] == ["follows", "follows", "stays"]
    assert {t.confidence for t in (shaft, blade, resonance)} == {"named"}
    assert "follows the throttle" in shaft.candidates[0].reason
    assert any("throttle changed" in note for note in traced.notes)


def test_swept_range_must_be_within_reach():
    """354 Hz on average over 1 is reachable here, but not all of its way up to 420 Hz."""
    airframe = dataclasses.replace(QUAD, blades=3, hover_rpm=None, full_rpm=60 * 400.0, kv_rpm_per_volt=2000)
    tone = at(trace_take(throttled_take(), airframe), 354.0)
    assert all(c.order != 1 for c in tone.candidates)
    assert any("once per turn would need" in text for text in tone.ruled_out)


def test_measured_throttle_change():
    """From row signals: tracks found and read as the shaft and the resonance they are."""
    rows = pd.DataFrame(bench.score_throttled(0, np.random.default_rng(31)))
    assert bench.right(rows).all() and rows.throttle.tolist() == ["follows", "follows", "stays"]


def test_lines_of_a_steady_take_ignore_tracks():
    record = take(("yaw", 137.3, 0.5), extra={"tracks": tracks_to_extra([track_of(137.3)])})
    lines, followed = lines_of(record, view_of(record))
    assert followed == () and len(lines) == 1 and lines[0].throttle is None


# --- the command -----------------------------------------------------------------------------------------------------

AIRFRAME = """[airframe]
name = "bench quad"
motors = 4
blades = 2
kv_rpm_per_volt = 920
cells = 4
idle_rpm = 1900
hover_rpm = 8300
full_rpm = 11800
rotor_mass_g = 42
"""


def results(tmp_path, *takes):
    """A results folder, written as `framegrade grade` does."""
    out = tmp_path / "out"
    rows, parts, clips = [], {}, []
    for number, record in enumerate(takes):
        clip = record.take["clip"]
        folder = out / "clips" / f"take{number}"
        folder.mkdir(parents=True)
        stamp = {"version": "1", "source": clip, "fingerprint": {}, "settings": {}}
        tables.seal_take(record, folder, tables.write_tables(record, folder), stamp)
        rows.append(tables.take_row(record.take))
        parts[clip] = {name: getattr(record, name) for name in tables.GATHERED_TABLES}
        clips.append({"clip": clip, "folder": f"clips/take{number}", "notes": []})
    out.mkdir(exist_ok=True)
    tables.write_run(out, tables.gather(rows, parts), {"version": "1", "clips": clips})
    return out


@pytest.fixture
def airframe_file(tmp_path):
    path = tmp_path / "airframe.toml"
    path.write_text(AIRFRAME, encoding="utf-8")
    return path


def test_command(tmp_path, airframe_file, capsys):
    out = results(tmp_path, take(("yaw", 137.3, 0.5), ("pitch", 274.6, 0.2), ("roll", 8.0, 0.1), ("yaw", 30.0, 0.05)))
    assert cli.main(["trace", str(out), "--airframe", str(airframe_file)]) == 0
    shown = capsys.readouterr()
    text = " ".join(shown.out.split())
    assert "once per turn, 8238 rpm" in text and "blade pass or twice per turn (2 per turn), 8238 rpm" in text
    assert "slow oscillation" in text and "unexplained" in text
    # the cautions for ground runs with propellers
    for words in ("tie the aircraft down", "eye protection", "Take the propellers off", "local rules", "hands, hair"):
        assert words in text
    assert "G 6.3 (ISO 21940-11) leaves 0.21 g mm" in text  # 9549 x 6.3 x 0.042 / 11800
    assert shown.err == ""
    table = tables.read_csv(out / "trace.csv")
    assert tuple(table.columns) == TRACE_COLUMNS
    first = table[table["rank"] == 1].set_index("frequency_hz")
    assert first.loc[137.3, "order_per_turn"] == 1 and first.loc[274.6, "order_per_turn"] == 2
    assert first.loc[137.3, "shaft_rpm"] == pytest.approx(8238, abs=1) and first.loc[274.6, "shaft"] == 1
    assert np.isnan(first.loc[8.0, "shaft_rpm"]) and np.isnan(first.loc[8.0, "order_per_turn"])
    nothing = table[table.frequency_hz == 30.0].iloc[0]
    assert nothing.confidence == "unexplained" and np.isnan(nothing["rank"]) and pd.isna(nothing.cause)
    assert table.readout_ms.isna().all() and table.throttle.isna().all()


def test_command_json(tmp_path, airframe_file, capsys):
    out = results(tmp_path, take(("yaw", 137.3, 0.5)), take(("yaw", 91.0, 0.5), clip="b.mp4"))
    assert cli.main(["trace", str(out), "--airframe", str(airframe_file), "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert sorted(one["clip"] for one in said["takes"]) == ["a.mp4", "b.mp4"]
    tone = next(one for one in said["takes"] if one["clip"] == "a.mp4")["tones"][0]
    assert tone["candidates"][0]["order"] == 1 and tone["candidates"][0]["readout_s"] is None
    assert said["airframe"]["highest_rpm"] == 11800 and len(said["cautions"]) == 5


def test_command_with_broken_clip(tmp_path, airframe_file, capsys):
    out = results(tmp_path, take(("yaw", 137.3, 0.5)), take(("yaw", 91.0, 0.5), clip="b.mp4"))
    (out / "clips" / "take1" / "density.csv").unlink()
    assert cli.main(["trace", str(out), "--airframe", str(airframe_file)]) == 1
    shown = capsys.readouterr()
    assert "density.csv" in shown.err and shown.err.count("\n") == 1
    assert set(tables.read_csv(out / "trace.csv")["clip"]) == {"a.mp4"}


def test_command_with_broken_tracks(tmp_path, airframe_file, capsys):
    out = results(tmp_path, take(("yaw", 137.3, 0.5), extra={"tracks": [{"axis": "up"}]}))
    assert cli.main(["trace", str(out), "--airframe", str(airframe_file)]) == 1
    assert "grade a.mp4 again" in capsys.readouterr().err


@pytest.mark.parametrize("spoil, words", [
    (lambda out, file: file.write_text(AIRFRAME.replace("blades = 2", "blades = 0")), "line 4"),
    (lambda out, file: file.unlink(), "no such file"),
    (lambda out, file: (out / "run.json").unlink(), "run.json is missing"),
    (lambda out, file: out.rename(out.parent / "elsewhere"), "not a folder with results"),
])
def test_command_wrong_use(tmp_path, airframe_file, capsys, spoil, words):
    out = results(tmp_path, take(("yaw", 137.3, 0.5)))
    spoil(out, airframe_file)
    assert cli.main(["trace", str(out), "--airframe", str(airframe_file)]) == 2
    shown = capsys.readouterr()
    assert words in shown.err and shown.err.startswith("framegrade trace: ") and shown.err.count("\n") == 1
    assert shown.out == ""


def test_command_needs_an_airframe(tmp_path, capsys):
    assert cli.main(["trace", str(tmp_path)]) == 2
    assert "--airframe" in capsys.readouterr().err


def test_names_are_shown_safely(tmp_path, airframe_file, capsys):
    out = results(tmp_path, take(("yaw", 137.3, 0.5), clip="=evil\x1b[2J.mp4"))
    assert cli.main(["trace", str(out), "--airframe", str(airframe_file)]) == 0
    assert "\x1b" not in capsys.readouterr().out
    assert (out / "trace.csv").read_text(encoding="utf-8").splitlines()[1].startswith("'=evil")
