"""Readout time and field of view: exact projections, lamps, tones and turns made here, without the simulator's code.

The swing's truth is scipy's rotation of directions; the lamp's is its light curve summed over each row; the turn's is a
panorama projected by cv2.remap. The many rendered clips are in tests/bench/readout.py.
"""

from __future__ import annotations

import tomllib
from dataclasses import replace

import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from framegrade import cli
from framegrade.camera import Camera, CameraMode, load_camera, save_camera
from framegrade.footage import probe
from framegrade.motion import PairMotion, make_grid
from framegrade.readout import command
from framegrade.readout.bands import BandMotion, band_motion, rotation_shape_px
from framegrade.readout.estimate import CannotTell, Readout
from framegrade.readout.field_of_view import FieldOfView, measure_turn
from framegrade.readout.flicker import measure_flicker, row_brightness
from framegrade.readout.swing import measure_swing
from framegrade.readout.vibration import Line, measure_vibration, spectral_lines, weigh_readouts
from framegrade.simulate import flight_from_dict, render
from tests import media
from tests import signals as made

# -------------------------------------------------------------------------------------------------------------- swing

WIDTH, HEIGHT, HFOV_DEG = 640, 360, 75.0
FOCAL = WIDTH / 2 / np.tan(np.radians(HFOV_DEG / 2))


def turned(time_s: np.ndarray, size_deg: float, speed_hz: float) -> Rotation:
    """World to camera: a hand's swing about the vertical, with what goes along about the other axes and a tremor."""
    w = 2 * np.pi * time_s
    yaw = size_deg * np.sin(speed_hz * w) + 0.2 * size_deg * np.sin(0.45 * speed_hz * w + 1) + 0.02 * np.sin(7.3 * w)
    pitch = 0.15 * size_deg * np.sin(0.8 * speed_hz * w + 2) + 0.02 * np.sin(9.1 * w + 1)
    roll = 0.1 * size_deg * np.sin(0.6 * speed_hz * w + 3)
    return Rotation.from_euler("yxz", np.stack([yaw, pitch, roll], -1), degrees=True)


def swung_pairs(
    readout_s: float,
    rate: float = 30.0,
    duration_s: float = 4.0,
    *,
    size_deg: float = 3.5,
    speed_hz: float = 1.7,
    noise_px: float = 0.03,
    seed: int = 0,
):
    """Cell motion of far scenery seen by a swung rolling-shutter camera.

    Every cell is a direction at the moment its row is exposed; where it lands in the next frame, and so when, is found
    by fixed-point iteration. A frame's pictures of the cells are displaced by noise, part of it common to the frame.
    """
    rng = np.random.default_rng(seed)
    grid = make_grid(WIDTH, HEIGHT)
    x, y = np.meshgrid(grid.x_px, grid.y_px)
    rays = np.stack([x / FOCAL, y / FOCAL, np.ones_like(x)], -1).reshape(-1, 3)
    times = np.arange(round(rate * duration_s)) / rate
    error = noise_px * (rng.normal(size=(len(times), *x.shape, 2)) + 0.5 * rng.normal(size=(len(times), 1, 1, 2)))
    pairs = []
    for n, (now, later) in enumerate(zip(times[:-1], times[1:])):
        world = turned(now + (y.ravel() / HEIGHT) * readout_s, size_deg, speed_hz).inv().apply(rays)
        at = np.stack([x.ravel(), y.ravel()], -1)
        for _ in range(3):
            seen = turned(later + at[:, 1] / HEIGHT * readout_s, size_deg, speed_hz).apply(world)
            at = FOCAL * seen[:, :2] / seen[:, 2:]
        flow = at.reshape(*x.shape, 2) - np.stack([x, y], -1) + error[n + 1] - error[n]
        inside = (np.abs(at[:, 0]) < WIDTH / 2) & (np.abs(at[:, 1]) < HEIGHT / 2)
        information = np.zeros((*x.shape, 3))
        information[..., 0] = information[..., 2] = inside.reshape(x.shape) / max(noise_px, 1e-3) ** 2 / 2
        pairs.append(PairMotion(time_s=now, next_time_s=later, flow_px=flow.astype(np.float32),
                                information=information.astype(np.float32), frozen=np.zeros(x.shape, bool),
                                change_level=3.0, sharpness=1.0))
    return pairs, grid


def swing_bands(*args, **kwargs) -> BandMotion:
    pairs, grid = swung_pairs(*args, **kwargs)
    return band_motion(pairs, grid, rotation_shape_px(pairs, grid))


@pytest.mark.parametrize("readout_ms, rate", [(5.0, 60.0), (16.0, 60.0), (5.0, 30.0), (32.0, 30.0)])
def test_a_swing_tells_the_readout_time_within_two_per_cent(readout_ms, rate):
    found = measure_swing(swing_bands(readout_ms / 1e3, rate))
    assert found.readout_s * 1e3 == pytest.approx(readout_ms, rel=0.02)
    assert abs(found.readout_s - readout_ms / 1e3) <= found.ci_s < 0.3e-3
    assert not found.global_shutter and found.method == "swing"


def test_the_interval_of_a_swing_holds_the_truth_in_18_of_20():
    held, readouts = 0, np.linspace(5, 32, 20) / 1e3
    for seed, readout in enumerate(readouts):
        pairs, grid = swung_pairs(readout, seed=seed, duration_s=2.0, noise_px=0.1, size_deg=2.5 + 0.1 * seed,
                                  speed_hz=1.1 + 0.09 * seed)
        found = measure_swing(band_motion(pairs, grid, FOCAL))
        held += abs(found.readout_s - readout) <= found.ci_s
    assert held >= 18


def test_the_field_of_view_assumed_does_not_matter_because_the_swing_shows_it():
    pairs, grid = swung_pairs(0.02, duration_s=2.0)
    hfov = 2 * np.degrees(np.arctan(WIDTH / 2 / rotation_shape_px(pairs, grid)))
    assert hfov == pytest.approx(HFOV_DEG, abs=1.0)


def test_all_rows_at_once_is_a_global_shutter():
    found = measure_swing(swing_bands(0.0))
    assert found.global_shutter and found.ci_s < 0.5e-3


def test_a_picture_turned_over_is_refused_not_measured_backwards():
    with pytest.raises(CannotTell, match="bottom to top"):
        measure_swing(swing_bands(-0.02))


def test_too_little_motion_is_refused_with_what_to_film():
    with pytest.raises(CannotTell, match="hardly moves.*swing the camera left and right"):
        measure_swing(replace(swing_bands(0.02), motion_px=0.01 * swing_bands(0.02).motion_px))
    with pytest.raises(CannotTell, match="moves too little.*good to .* ms only"):
        measure_swing(swing_bands(0.02, size_deg=0.3))


def test_a_short_clip_and_a_bare_scene_are_refused():
    with pytest.raises(CannotTell, match="only 1 s can be measured"):
        measure_swing(swing_bands(0.02, duration_s=1.03))
    bare = swing_bands(0.02, duration_s=2.0)
    bare.known[:, 8:] = False
    with pytest.raises(CannotTell, match="of the picture's height has texture"):
        measure_swing(bare)


def test_scenery_that_flows_past_is_refused():
    flown = swing_bands(0.02, duration_s=2.0, size_deg=0.5)
    flown.motion_px[..., 1] += 4.0 * flown.height  # nearer ground, lower in the picture, moves faster
    with pytest.raises(CannotTell, match="the camera travels"):
        measure_swing(flown)


def test_something_big_that_moves_of_its_own_does_not_pass_for_a_readout():
    """The lower half swings like the upper, a twentieth of a second later: no single readout makes that."""
    moved = swing_bands(0.02, rate=60.0, duration_s=3.0)
    lower = moved.height > 0.5
    moved.motion_px[3:, lower] = moved.motion_px[:-3, lower]
    with pytest.raises(CannotTell):
        measure_swing(moved)


def test_gaps_and_mismatched_bands_do_no_harm():
    motion = swing_bands(0.024, duration_s=4.0)
    motion.known[10:14] = False
    motion.motion_px[10:14] = 1e3
    motion.known[60, :20] = False
    motion.motion_px[80, 25] += 7.0
    motion.motion_px[30:33, 3, 1] -= 5.0
    found = measure_swing(motion)
    assert found.readout_s == pytest.approx(0.024, rel=0.01)
    assert found.ci_s < 0.02 * 0.024


# ------------------------------------------------------------------------------------------------------------ flicker


def lamp_frames(
    readout_s: float,
    rate: float,
    flicker_hz: float,
    *,
    depth: float = 0.2,
    rectified: bool = False,
    count: int = 120,
    rows: int = 240,
    noise: float = 1.0,
    exposure_s: float = 1e-3,
    seed: int = 0,
):
    """Pictures of a wall under a lamp; the light of each row is the lamp's light curve averaged over its exposure.

    `rectified` makes the light the squared current's: |sin|, which has harmonics (Fourier: 4 / pi / (4 k^2 - 1)).
    """
    rng = np.random.default_rng(seed)
    wall = 120 + 8 * np.sin(np.arange(rows) / 31)[:, None] + 3 * rng.normal(size=(rows, 64))
    height = (np.arange(rows) + 0.5) / rows - 0.5
    parts = (np.arange(16) + 0.5) / 16 - 0.5
    for n in range(count):
        t = n / rate + height[:, None] * readout_s + parts * exposure_s
        light = (
            np.abs(np.sin(np.pi * flicker_hz * t))
            if rectified
            else 1 + depth * np.cos(2 * np.pi * flicker_hz * t + 0.7)
        )
        light = (1 - depth + depth * light if rectified else light).mean(1)
        picture = wall * light[:, None] + noise * rng.normal(size=wall.shape)
        yield n / rate, np.clip(np.rint(picture), 0, 255).astype(np.uint8)


@pytest.mark.parametrize(
    "readout_ms, rate, flicker_hz",
    [
        (5.0, 60.0, 100.0),
        (14.0, 60.0, 100.0),
        (16.0, 60.0, 100.0),
        (8.0, 30.0, 100.0),
        (32.0, 30.0, 100.0),
        (12.0, 50.0, 120.0),
        (18.0, 30000 / 1001, 100.0),
        (10.0, 60.0, 1000.0),
    ],
)
def test_bands_of_a_lamp_tell_the_readout_time_within_one_per_cent(readout_ms, rate, flicker_hz):
    found = measure_flicker(
        row_brightness(lamp_frames(readout_ms / 1e3, rate, flicker_hz, exposure_s=0.3 / flicker_hz)), flicker_hz
    )
    assert found.readout_s * 1e3 == pytest.approx(readout_ms, rel=0.01)
    assert abs(found.readout_s - readout_ms / 1e3) <= found.ci_s


def test_light_that_is_no_sinusoid_and_a_lamp_a_little_off_its_frequency():
    """A rectified sine has a second harmonic a fifth of the first: Fourier series of |sin|."""
    frames = lamp_frames(0.014, 60.0, 100.2, depth=0.4, rectified=True)
    found = measure_flicker(row_brightness(frames), 100.0)
    assert found.readout_s == pytest.approx(0.014, rel=0.005)
    assert "100.2" in found.basis


def test_the_interval_of_a_flicker_clip_holds_the_truth():
    held = 0
    for seed in range(20):
        readout = (5 + 11 * seed / 19) / 1e3
        frames = lamp_frames(readout, 60.0, 100.0, depth=0.01, noise=6.0, rows=90, seed=seed)
        found = measure_flicker(row_brightness(frames), 100.0)
        held += abs(found.readout_s - readout) <= found.ci_s
    assert held >= 18


def test_a_global_shutter_flickers_as_a_whole():
    found = measure_flicker(row_brightness(lamp_frames(0.0, 60.0, 100.0)), 100.0)
    assert found.global_shutter and found.ci_s < 0.1e-3


def test_ten_bit_pictures_are_scaled():
    frames = [(t, luma.astype(np.uint16) * 4) for t, luma in lamp_frames(0.014, 60.0, 100.0, count=90)]
    assert measure_flicker(row_brightness(frames, 0.25), 100.0).readout_s == pytest.approx(0.014, rel=0.01)


@pytest.mark.parametrize("kwargs, asked_hz, words", [
    ({"flicker_hz": 120.0}, 120.0, "stand still"),                          # twice the frame rate
    ({"flicker_hz": 100.0, "depth": 0.0}, 100.0, "no bands of a 100 Hz flicker"),
    ({"flicker_hz": 100.0}, 50.0, "twice the mains frequency: try --flicker-hz 100"),
    ({"flicker_hz": 100.0, "count": 30}, 100.0, "at least 1 s"),
])
def test_clips_without_bands_to_count_are_refused(kwargs, asked_hz, words):
    with pytest.raises(CannotTell, match=words):
        measure_flicker(row_brightness(lamp_frames(0.014, 60.0, **kwargs)), asked_hz)


def test_bands_that_run_against_the_rows_are_refused():
    with pytest.raises(CannotTell, match="against the rows' order"):
        measure_flicker(row_brightness(lamp_frames(-0.014, 60.0, 100.0)), 100.0)


# ---------------------------------------------------------------------------------------------------------- vibration

RATE, BANDS_READOUT = 60.0, 0.014


def rotor_signals(
    *parts, duration_s: float = 6.0, readout_s: float = BANDS_READOUT, noise_px: float = 0.03, axis: int = 0
):
    motion = made.tones(*parts)
    return made.row_signals(motion, made.frame_times(RATE, duration_s), readout_s, noise_px=noise_px, axis=axis)


def test_a_line_is_known_by_its_alias_and_its_cycles():
    """137.3 Hz at 60 frames/s folds to 17.3 Hz; 137.3 x 0.014 s = 1.922 cycles."""
    (*_, line) = sorted(spectral_lines(rotor_signals((137.3, 0.5, 0.2)), 1 / 3), key=lambda one: one.amplitude_px)
    assert line.alias_hz == pytest.approx(17.3, abs=0.2)
    assert line.cycles == pytest.approx(137.3 * BANDS_READOUT, abs=4 * line.cycles_sigma + 0.003)


def test_rotors_of_unlike_speed_tell_the_readout_time():
    lines = spectral_lines(rotor_signals((131.0, 0.4, 0.1), (144.1, 0.4, 1.0), (152.7, 0.3, 2.0)), 1 / 3)
    found = measure_vibration(lines, 1 / RATE)
    assert found.readout_s == pytest.approx(BANDS_READOUT, rel=0.01)
    assert abs(found.readout_s - BANDS_READOUT) <= found.ci_s


def test_a_changing_speed_tells_the_readout_time():
    motion = made.wandering_tone(140.0, 0.6, 4.0)
    signals = made.row_signals(motion, made.frame_times(RATE, 8.0), BANDS_READOUT, noise_px=0.03)
    assert measure_vibration(spectral_lines(signals, 1 / 3), 1 / RATE).readout_s == pytest.approx(
        BANDS_READOUT, rel=0.015
    )


def test_harmonics_of_one_steady_shaft_leave_exactly_the_rivals_of_the_fold():
    """Raise the shaft by the frame rate: aliases stay, so do the ratios of the cycles. R f / (f + k F) all fit."""
    shaft = 107.3
    lines = spectral_lines(rotor_signals((shaft, 0.5, 0.1), (2 * shaft, 0.4, 1.0)), 1 / 3)
    expected = [BANDS_READOUT * shaft / (shaft + k * RATE) for k in range(6)]
    rivals = [r.readout_s for r in weigh_readouts(lines, 1 / RATE)]
    for readout in expected:
        assert min(abs(r / readout - 1) for r in rivals) < 0.01
    with pytest.raises(CannotTell, match="fit several readout times: .* 13.99"):
        measure_vibration(lines, 1 / RATE)


def test_flights_together_decide_what_none_does_alone():
    flights = [spectral_lines(rotor_signals((speed, 0.5, 0.1)), 1 / 3) for speed in (126.9, 137.3, 146.0)]
    for alone in flights:
        with pytest.raises(CannotTell, match="several readout times"):
            measure_vibration(alone, 1 / RATE)
    assert measure_vibration(sum(flights, ()), 1 / RATE).readout_s == pytest.approx(BANDS_READOUT, rel=0.01)


def test_vibration_in_step_over_the_height_is_a_global_shutter():
    lines = spectral_lines(rotor_signals((137.3, 0.5, 0.2), (151.0, 0.4, 1.0), readout_s=0.0), 1 / 3)
    assert measure_vibration(lines, 1 / RATE).global_shutter


def test_slow_shaking_that_hardly_leans_over_the_height_is_refused():
    """5 to 9 Hz are a tenth of a cycle a frame height: the least fault of the cycles is a large one of the readout."""
    lines = spectral_lines(rotor_signals((5.2, 0.8, 0.1), (7.1, 0.8, 1.0), (9.0, 0.8, 2.0)), 1 / 3)
    assert len(lines) >= 3
    with pytest.raises(CannotTell):
        measure_vibration(lines, 1 / RATE)


def test_no_vibration_is_refused():
    with pytest.raises(CannotTell, match="hardly any vibration"):
        measure_vibration(spectral_lines(rotor_signals((137.3, 0.0, 0.0)), 1 / 3), 1 / RATE)


def test_random_shafts_never_give_a_certain_false_answer():
    """Steady single shafts of any speed, with harmonics: never told, whatever the noise."""
    rng = np.random.default_rng(4)
    for _ in range(20):
        shaft, readout = rng.uniform(70, 200), rng.uniform(6, 15.5) / 1e3
        if abs(shaft - 30 * round(shaft / 30)) < 5:
            continue
        lines = spectral_lines(
            rotor_signals(
                (shaft, 0.4, 0.3), (2 * shaft, 0.2, 1.0), (3 * shaft, 0.1, 2.0), duration_s=4.0, readout_s=readout
            ),
            1 / 3,
        )
        try:
            found = measure_vibration(lines, 1 / RATE)
        except CannotTell:
            continue
        assert abs(found.readout_s - readout) <= found.ci_s


# ------------------------------------------------------------------------------------------------------ field of view

PAN_WIDTH, PAN_HEIGHT = 320, 180


@pytest.fixture(scope="module")
def panorama() -> np.ndarray:
    """Smooth random texture around a sphere: azimuth x elevation, a tenth of a degree a pixel."""
    rng = np.random.default_rng(8)
    texture = sum(
        cv2.GaussianBlur(rng.normal(size=(1400, 3600)), (0, 0), s, borderType=cv2.BORDER_REFLECT) * s
        for s in (3, 6, 14)
    )
    texture[:, -80:] += (texture[:, :80] - texture[:, -80:]) * np.linspace(0, 1, 80)  # no seam where the turn closes
    return np.clip(128 + 45 * texture / texture.std(), 0, 255).astype(np.float32)


def turn_frames(
    panorama,
    hfov_deg: float,
    degrees: float,
    *,
    tilt_deg: float = 0.0,
    count: int = 150,
    direction: int = 1,
    wobble_deg: float = 0.6,
):
    """Pictures of a pinhole camera turned about the vertical, with a little wobble, looked up in the panorama."""
    focal = PAN_WIDTH / 2 / np.tan(np.radians(hfov_deg / 2))
    x, y = np.meshgrid(np.arange(PAN_WIDTH) + 0.5 - PAN_WIDTH / 2, np.arange(PAN_HEIGHT) + 0.5 - PAN_HEIGHT / 2)
    rays = np.stack([x, y, np.full_like(x, focal)], -1).reshape(-1, 3)
    for n in range(count):
        share = n / (count - 1)
        wobble = wobble_deg * np.sin(2 * np.pi * 3.3 * share)
        turn = Rotation.from_euler("xzy", [-tilt_deg + wobble, wobble, direction * degrees * share], degrees=True)
        world = turn.inv().apply(rays)
        azimuth = np.degrees(np.arctan2(world[:, 0], world[:, 2])) % 360
        elevation = np.degrees(np.arcsin(world[:, 1] / np.linalg.norm(world, axis=1)))
        sample = cv2.remap(
            panorama,
            (azimuth * 10).reshape(x.shape).astype(np.float32),
            (elevation * 10 + 700).reshape(x.shape).astype(np.float32),
            cv2.INTER_LINEAR,
            borderMode=cv2.BORDER_WRAP,
        )
        yield n / 30, np.rint(sample).astype(np.uint8)


@pytest.mark.parametrize("hfov_deg, tilt_deg, direction", [(55.0, 0.0, 1), (80.0, 20.0, -1), (105.0, 8.0, 1)])
def test_a_full_turn_tells_the_field_of_view(panorama, hfov_deg, tilt_deg, direction):
    view = measure_turn(turn_frames(panorama, hfov_deg, 368, tilt_deg=tilt_deg, direction=direction))
    assert view.hfov_deg == pytest.approx(hfov_deg, rel=0.01)
    assert abs(view.hfov_deg - hfov_deg) <= view.hfov_ci_deg
    assert view.focal_px == pytest.approx(PAN_WIDTH / 2 / np.tan(np.radians(hfov_deg / 2)), rel=0.01)


def test_a_turn_that_does_not_close_is_refused(panorama):
    with pytest.raises(CannotTell, match="not closed.*turn the camera once around"):
        measure_turn(turn_frames(panorama, 70.0, 250))


def test_a_false_return_is_seen_by_the_shape_of_the_motion(panorama):
    """Scenery that repeats after half a turn closes early; the picture then bends as through another lens."""
    twice = np.hstack([panorama[:, :1800]] * 2)
    twice[:, 1720:1800] += (twice[:, :80] - twice[:, 1720:1800]) * np.linspace(0, 1, 80)
    twice[:, 3520:] = twice[:, 1720:1800]
    with pytest.raises(CannotTell, match="more or less than once"):
        measure_turn(turn_frames(twice, 80.0, 368, wobble_deg=0.0))


# ------------------------------------------------------------------------------------------------------------ command


def told(name: str, figure, info) -> command.Measured:
    return command.Measured(name, info, figure)


@pytest.fixture(scope="module")
def lamp_clip(tmp_path_factory):
    """A clip of a lamp: 60 frames/s, 14 ms."""
    frames = [np.tile(luma, (1, 4)) for _, luma in lamp_frames(0.014, 60.0, 100.0, count=80, noise=0.5)]
    return media.write_clip(tmp_path_factory.mktemp("lamp") / "lamp.mp4", frames, rate=60, options={"crf": "12"})


def test_the_command_writes_and_updates_a_camera_file(lamp_clip, tmp_path, capsys):
    out = tmp_path / "camera.toml"
    kept = CameraMode(1920, 1080, 30.0, readout_s=0.024, hfov_deg=90.0, note="indoors")
    old = CameraMode(256, 240, 60.0, readout_s=0.010, exposure_s=0.001, hfov_deg=70.0)
    save_camera(Camera("nose", (kept, old)), out)
    assert cli.main(["readout", str(lamp_clip), "--flicker-hz", "100", "-o", str(out)]) == 0
    printed = capsys.readouterr().out
    assert (
        "lamp.mp4: 256x240@60: readout 14.0" in printed
        and "+-" in printed
        and "differs from the camera file's readout of 10 ms" in printed
    )
    camera = load_camera(out)
    assert camera.name == "nose" and camera.modes[0] == kept
    assert camera.modes[1].readout_s == pytest.approx(0.014, rel=0.01)
    assert (camera.modes[1].hfov_deg, camera.modes[1].exposure_s) == (70.0, 0.001)
    assert camera.modes[1].readout_ci_ms > 0


def test_a_rendered_swing_from_file_to_camera_file(tmp_path, capsys):
    """The simulator's rolling shutter, which shares no code with the estimator."""
    recipe = {
        "seed": 5, "camera": {"width_px": 480, "height_px": 270, "frame_rate": 30, "readout_ms": 24.0, "hfov_deg": 75.0},
        "flight": {"duration_s": 3.0, "tilt_deg": 20.0}, "encode": {"codec": "h264", "bits_per_pixel": 0.5},
        "scene": {"kind": "backdrop", "distance_m": 12.0, "pattern": "paving"},
        "sway": [{"axis": "yaw", "frequency_hz": 1.9, "amplitude_deg": 4.0, "phase_deg": 20.0},
                 {"axis": "pitch", "frequency_hz": 1.3, "amplitude_deg": 0.6, "phase_deg": 70.0}],
    }
    clip, out = tmp_path / "swing.mp4", tmp_path / "camera.toml"
    render(flight_from_dict(recipe), clip)
    assert cli.main(["readout", str(clip), "-o", str(out)]) == 0
    (mode,) = load_camera(out).modes
    assert mode.readout_s == pytest.approx(0.024, rel=0.02)
    assert abs(mode.readout_s - 0.024) <= mode.readout_ci_ms / 1e3
    assert "(swing: " in capsys.readouterr().out


def test_a_turn_from_file_to_camera_file(panorama, tmp_path, capsys):
    frames = [luma for _, luma in turn_frames(panorama, 80.0, 366)]
    clip = media.write_clip(tmp_path / "turn.mp4", frames, rate=30, options={"crf": "20"})
    out = tmp_path / "camera.toml"
    save_camera(Camera("nose", (CameraMode(PAN_WIDTH, PAN_HEIGHT, 30.0, readout_s=0.02, hfov_deg=95.0),)), out)
    assert cli.main(["readout", "--pan-turn", str(clip), "-o", str(out)]) == 0
    (mode,) = load_camera(out).modes
    assert mode.hfov_deg == pytest.approx(80.0, rel=0.02) and mode.readout_s == 0.02
    assert "differs from the camera file's field of view of 95 degrees" in capsys.readouterr().out


def test_a_new_file_and_its_name(lamp_clip, tmp_path, capsys):
    out = tmp_path / "new.toml"
    assert cli.main(["readout", str(lamp_clip), "--flicker-hz", "100", "-o", str(out), "--camera-name", "tail"]) == 0
    text = tomllib.loads(out.read_text(encoding="utf-8"))
    assert text["camera"]["name"] == "tail" and text["mode"][0]["width_px"] == 256
    assert "written" in capsys.readouterr().out


def test_a_clip_that_cannot_tell_is_exit_1_and_writes_nothing(tmp_path, capsys):
    clip = media.write_clip(tmp_path / "still.mp4", media.moving_texture(60, 320, 240, shift_px=1), rate=30)
    out = tmp_path / "camera.toml"
    assert cli.main(["readout", str(clip), "-o", str(out)]) == 1
    captured = capsys.readouterr()
    assert not out.exists() and "written" not in captured.out
    assert (
        captured.err.count("\n") == 1 and "still.mp4: as a swing clip" in captured.err and "as a flight" in captured.err
    )


@pytest.mark.parametrize("arguments, words", [
    (["--method", "flicker"], "needs the lamp's flicker frequency"),
    (["--method", "swing", "--flicker-hz", "100"], "does not go with"),
    (["--pan-turn", "--method", "swing"], "goes with neither"),
    (["--camera-name", "x"], "add -o FILE"),
    (["--flicker-hz", "3"], "10 to 5000"),
    (["--method", "magic"], "invalid choice"),
])
def test_wrong_use_is_exit_2_in_one_sentence(lamp_clip, arguments, words, capsys):
    assert cli.main(["readout", str(lamp_clip), *arguments]) == 2
    error = capsys.readouterr().err
    assert words in error and error.count("\n") == 1


def test_no_clip_and_a_broken_camera_file_are_exit_2(tmp_path, lamp_clip, capsys):
    assert cli.main(["readout", str(tmp_path / "none.mp4")]) == 2
    broken = tmp_path / "camera.toml"
    broken.write_text("[camera]\nname = 3\n", encoding="utf-8")
    assert cli.main(["readout", str(lamp_clip), "--flicker-hz", "100", "-o", str(broken)]) == 2
    assert "camera.toml" in capsys.readouterr().err
    assert broken.read_text(encoding="utf-8") == "[camera]\nname = 3\n"


def test_clips_of_one_mode_are_joined_or_contradict(lamp_clip):
    info = probe(lamp_clip)
    agree = [
        told("a", Readout(0.0140, 1e-4, "swing", 1 / 60), info),
        told("b", Readout(0.0141, 1e-4, "swing", 1 / 60), info),
    ]
    (mode,) = command.combine(agree)
    assert mode.readout_s == pytest.approx(0.01405) and mode.readout_ci_ms == pytest.approx(0.1)
    with pytest.raises(CannotTell, match="a gives 14.000 and c 15.000 ms"):
        command.combine([agree[0], told("c", Readout(0.0150, 1e-4, "swing", 1 / 60), info)])


def test_a_global_shutter_is_written_as_0_and_a_full_frame_is_no_longer_than_it(lamp_clip):
    info = probe(lamp_clip)
    (mode,) = command.combine([told("a", Readout(-2e-5, 1e-4, "swing", 1 / 60), info)])
    assert mode.readout_s == 0.0 and mode.readout_ci_ms == pytest.approx(0.12)
    (mode,) = command.combine([told("a", Readout(0.01675, 2e-4, "swing", 1 / 60), info)])
    assert mode.readout_s == pytest.approx(1 / 60, rel=1e-4)


def test_the_field_of_view_is_compared_with_the_file(lamp_clip):
    info = probe(lamp_clip)
    modes = command.combine([told("a", FieldOfView(300.0, 80.1, 0.4, 12.0, 0.1), info)])
    near = Camera("c", (CameraMode(256, 240, 60.0, hfov_deg=80.0),))
    far = Camera("c", (CameraMode(256, 240, 60.0, hfov_deg=90.0),))
    assert "agrees with the camera file's field of view of 80" in command._comparison(near, modes)[0]
    assert "differs from the camera file's field of view of 90 degrees (-11.0 %)" in command._comparison(far, modes)[0]
    assert command.update(far, modes, None).modes[0].hfov_deg == pytest.approx(80.1)
    assert command.update(None, modes, None).name == "camera"


def test_lines_are_plain_data():
    """What several flights are weighed by is independent of the clip it came from."""
    line = Line(0, 17.3, 1.922, 0.004, 0.5, 60.0)
    other = Line(0, 24.0, 144.0 * 0.014, 0.004, 0.5, 60.0)
    (best, *_) = weigh_readouts([line, other], 1 / 60)
    assert best.readout_s == pytest.approx(0.014, rel=0.01)
