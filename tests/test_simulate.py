"""The simulator is ground truth, so it is checked against other people's code and published formulas.

Registration is scikit-image's, projection and homographies are OpenCV's, decoding is PyAV's; nothing here uses the
project's own estimators.
"""

from __future__ import annotations

import argparse
import json
import math
import subprocess
import sys
import tomllib
from pathlib import Path

import av
import cv2
import numpy as np
import pytest
from skimage.registration import phase_cross_correlation

from framegrade.simulate import (
    FlightError, exposure_factor, flight_from_dict, load_flight, load_truth, pose, position, render, row_signals,
    schedule, transmissibility, truth_of,
)
from framegrade.simulate import command
from framegrade.simulate.motion import broadband_lines, exposure_average, exposure_offsets, seen_tones
from framegrade.simulate.picture import add_noise, exposed_picture, lamp_factor, noise_pool, sub_rows
from framegrade.simulate.scene import build_world
from framegrade.simulate.surface import pattern_surface

DISTANCE_M = 5.0
WALL_HFOV_DEG = 20.0
WALL_FOCAL_PX = 320 / math.tan(math.radians(WALL_HFOV_DEG / 2))
#: A 256 pixel square that holds exactly one tile of the wall, so that registration sees no edges.
SQUARE = np.s_[52:308, 192:448]


def wall(camera=None, flight=None, **tables):
    """A camera before a flat wall whose pattern repeats every 256 pixels; no noise, instantaneous rows."""
    return flight_from_dict({
        "camera": {"width_px": 640, "height_px": 360, "readout_ms": 0.0, "exposure_ms": 0.0,
                   "hfov_deg": WALL_HFOV_DEG, **(camera or {})},
        "scene": {"kind": "backdrop", "distance_m": DISTANCE_M, "tile_m": 256 * DISTANCE_M / WALL_FOCAL_PX},
        "flight": {"tilt_deg": 0.0, "duration_s": 0.5, **(flight or {})},
        "noise": {"read_grey": 0.0, "shot_grey": 0.0},
        **tables,
    })


def picture(flight, time_s):
    return exposed_picture(flight, build_world(flight), time_s)


def shift_px(before, after, place=SQUARE):
    """Displacement (down, right) of the content of a crop, by scikit-image's upsampled cross-correlation."""
    a, b = (part[place].astype(float) for part in (before, after))
    result = phase_cross_correlation(a - a.mean(), b - b.mean(), upsample_factor=500, normalization=None)
    return -result[0]


def decoded(path):
    with av.open(str(path)) as container:
        frames = list(container.decode(video=0))
    times = np.array([float(frame.pts * frame.time_base) for frame in frames])
    # The luma plane as stored: a conversion to grey would stretch its range.
    planes = []
    for frame in frames:
        deep = frame.format.components[0].bits > 8
        values = np.frombuffer(frame.planes[0], dtype="<u2" if deep else np.uint8)
        line = frame.planes[0].line_size // values.itemsize
        planes.append(values.reshape(frame.height, line)[:, : frame.width].astype(float) / (4 if deep else 1))
    return times, planes


SMALL = {
    "seed": 3, "camera": {"width_px": 320, "height_px": 180, "frame_rate": 60},
    "flight": {"duration_s": 0.3, "speed_mps": 4.0},
    "tone": [{"axis": "yaw", "frequency_hz": 137.3, "amplitude_px": 0.5}],
}


# Pictures ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("pixels", [0.05, 0.25, 0.5, 1.25, 3.4])
def test_sub_pixel_translation_is_registered_by_scikit_image(pixels):
    speed = pixels * DISTANCE_M / WALL_FOCAL_PX * 60
    # Flying to the left moves the content to the right.
    flight = wall(flight={"speed_mps": speed, "course_deg": 90.0})
    down, right = shift_px(picture(flight, 0.0), picture(flight, 1 / 60))
    assert right == pytest.approx(pixels, abs=0.006)
    assert down == pytest.approx(0.0, abs=0.006)


@pytest.mark.parametrize(("axis", "component"), [("yaw", 1), ("pitch", 0)])
def test_tone_amplitude_in_pixels_and_sign(axis, component):
    tone = {"axis": axis, "frequency_hz": 10.0, "amplitude_px": 0.5, "phase_deg": 0.0}
    flight = wall(tone=[tone])
    moved = shift_px(picture(flight, 0.0), picture(flight, 0.025))
    # The square reaches 0.07 F from the centre, where a pixel moves 0.5 % more: a third of that on average.
    assert moved[component] == pytest.approx(0.5, abs=0.005)
    assert moved[1 - component] == pytest.approx(0.0, abs=0.005)


def test_roll_turns_clockwise_and_is_stated_at_the_side_edge():
    flight = wall(tone=[{"axis": "roll", "frequency_hz": 10.0, "amplitude_px": 1.0, "phase_deg": 0.0}])
    before, after = picture(flight, 0.0), picture(flight, 0.025)
    columns = np.array([60, 580])
    down = [shift_px(before, after, np.s_[52:308, c - 32 : c + 32])[0] for c in columns]
    # A pixel at the right edge moves down by the stated amplitude, one on the left moves up.
    assert down == pytest.approx((columns - 319.5) / 320 * 1.0, abs=0.02)


def test_rows_skew_in_a_constant_pan_by_focal_length_times_rate_times_readout():
    rate = 20.0
    flight = wall(camera={"readout_ms": 10.0}, pan=[{"axis": "yaw", "rate_deg_per_s": rate}])
    still, panned = picture(wall(), 0.0), picture(flight, 0.0)
    tops = np.arange(20, 340, 32)
    right = [shift_px(still, panned, np.s_[top : top + 32, 192:448])[1] for top in tops]
    slope, middle = np.polyfit((tops + 16) / 360 - 0.5, right, 1)
    expected = WALL_FOCAL_PX * math.radians(rate) * 0.010
    assert slope == pytest.approx(expected, rel=0.005)
    assert middle == pytest.approx(0.0, abs=0.01)
    truth = truth_of(flight)
    lean = (truth.pose_rad[0, -1, 0] - truth.pose_rad[0, 0, 0]) / (truth.heights[-1] - truth.heights[0])
    assert lean * truth.focal_px == pytest.approx(expected, rel=1e-9)


def test_each_row_shows_the_angle_of_its_own_instant():
    readout = 14e-3
    flight = wall(
        camera={"readout_ms": 14.0, "exposure_ms": 1.0},
        tone=[{"axis": "yaw", "frequency_hz": 137.3, "amplitude_px": 0.8, "phase_deg": 40.0}],
    )
    time_s = 5 / 60
    still, shaken = picture(wall(), 0.0), picture(flight, time_s)
    tops = np.arange(12, 344, 12)
    right = [shift_px(still, shaken, np.s_[top : top + 12, 192:448])[1] for top in tops]
    instants = time_s + ((tops + 6) / 360 - 0.5) * readout
    # sinc: numpy's, sin(pi x) / (pi x); the strips' own height averages the wave a little more.
    blur = np.sinc(137.3 * 1e-3) * np.sinc(137.3 * 12 / 360 * readout)
    expected = 0.8 * blur * np.sin(2 * np.pi * 137.3 * instants + math.radians(40))
    assert right == pytest.approx(expected, abs=0.02)
    assert np.dot(right, expected) / np.dot(expected, expected) == pytest.approx(1.0, abs=0.01)


@pytest.mark.parametrize(("cycles", "samples"), [(0.14, 4), (0.5, 4), (0.7, 4), (1.0, 6)])
def test_exposure_averages_a_tone_by_sinc(cycles, samples):
    # A small tone: the blur of a large one would skew the picture, and with it any registration.
    tone = {"axis": "yaw", "frequency_hz": 400.0, "amplitude_px": 0.3, "phase_deg": 90.0}
    flight = wall(camera={"exposure_ms": cycles / 400 * 1e3, "samples": samples}, tone=[tone])
    crest, trough = picture(flight, 0.0), picture(flight, 1 / 800)
    assert shift_px(trough, crest)[1] / 0.6 == pytest.approx(np.sinc(cycles), abs=0.01)
    seen = exposure_average(flight, np.zeros(1))[0, 0] * WALL_FOCAL_PX
    assert seen == pytest.approx(0.3 * np.sinc(cycles), abs=1e-6)
    assert exposure_factor(400.0, cycles / 400) == pytest.approx(abs(np.sinc(cycles)))


@pytest.mark.parametrize(
    ("samples", "nodes"),
    [(4, [0.1875924741, 0.7946544723]), (6, [0.2666354015, 0.4225186538, 0.8662468181])],
)
def test_exposure_samples_are_chebyshevs_equal_weight_nodes(samples, nodes):
    # Abramowitz and Stegun, table 25.5 (from memory; the moments below confirm it).
    offsets = exposure_offsets(2.0, samples)
    assert np.abs(offsets)[samples // 2 :] == pytest.approx(nodes, abs=1e-9)
    for power in range(samples + 2):
        exact = 1 / (power + 1) if power % 2 == 0 else 0.0
        assert np.mean(offsets**power) == pytest.approx(exact, abs=1e-9)


def test_sub_rows_cover_the_pixel_evenly():
    for samples in range(4, 8):
        assert np.sort(sub_rows(samples)) == pytest.approx((np.arange(samples) + 0.5) / samples - 0.5)


def homography(flight, first_s, second_s):
    """Plane-induced homography `K (R - t n^T / d) K^-1`, Hartley and Zisserman, Multiple View Geometry, eq. 13.2."""
    camera = flight.camera
    calibration = np.array([
        [camera.focal_px, 0, (camera.width_px - 1) / 2], [0, camera.focal_px, (camera.height_px - 1) / 2], [0, 0, 1],
    ])

    def attitude(time_s):
        yaw, pitch, roll = pose(flight, [time_s])[0]
        # A rotation vector of OpenCV: pitch > 0 moves content down, that is a negative turn about x.
        own = cv2.Rodrigues(np.array([-pitch, yaw, roll]))[0]
        return own @ cv2.Rodrigues(np.array([math.radians(flight.flight.tilt_deg), 0.0, 0.0]))[0]

    start, end = attitude(first_s), attitude(second_s)
    turn = end @ start.T
    moved = position(flight, [second_s])[0] - position(flight, [first_s])[0]
    normal = start @ np.array([0.0, 1.0, 0.0])
    height = -position(flight, [first_s])[0, 1]
    return calibration @ (turn - np.outer(end @ moved, normal) / height) @ np.linalg.inv(calibration)


def test_ground_moves_as_the_plane_homography_of_opencv_says():
    flight = flight_from_dict({
        "camera": {"width_px": 640, "height_px": 360, "readout_ms": 0.0, "exposure_ms": 0.0},
        "flight": {"speed_mps": 5.0, "height_m": 8.0, "climb_mps": 0.5, "tilt_deg": 40.0, "course_deg": 10.0},
        "sway": [{"axis": axis, "frequency_hz": 2.0, "amplitude_deg": 0.4, "phase_deg": 0.0}
                 for axis in ("yaw", "pitch", "roll")],
        "noise": {"read_grey": 0.0, "shot_grey": 0.0},
    })
    first, second = picture(flight, 0.0), picture(flight, 1 / 30)
    matrix = homography(flight, 0.0, 1 / 30)
    inside = np.s_[80:330, 60:580]

    def misfit(transform):
        warped = cv2.warpPerspective(first, transform, (640, 360), flags=cv2.INTER_CUBIC)
        # Fine structure is resolved a little differently from one distance to another; places are not.
        difference = cv2.GaussianBlur(warped - second, (0, 0), 1.5)
        return float(difference[inside].std())

    right = misfit(matrix)
    assert right < 0.025 * second[inside].std()
    # A tenth of a pixel off must be clearly worse, or the check above would prove little.
    for nudge in ([0.1, 0.0], [0.0, 0.1]):
        shifted = np.array([[1, 0, nudge[0]], [0, 1, nudge[1]], [0, 0, 1.0]])
        assert misfit(shifted @ matrix) > 1.5 * right


def test_panel_stands_where_opencv_projects_it_and_rows_see_it_at_their_own_time():
    tilt = 20.0
    flight = flight_from_dict({
        "camera": {"width_px": 640, "height_px": 360, "readout_ms": 12.0, "exposure_ms": 0.0},
        "flight": {"height_m": 4.0, "tilt_deg": tilt, "speed_mps": 12.0, "course_deg": 90.0},
        "scene": {"contrast": 0.0, "brightness": 40.0},
        "panel": [{"right_m": 3.0, "forward_m": 15.0, "width_m": 1.0, "height_m": 0.5, "bottom_m": 0.3,
                   "brightness": 220.0, "contrast": 0.0}],
        "noise": {"read_grey": 0.0, "shot_grey": 0.0},
    })
    time_s = 0.1
    weight = picture(flight, time_s).astype(float)
    weight = np.where(np.arange(360)[:, None] > 120, weight - 40.0, 0.0)
    weight[np.abs(weight) < 1] = 0
    rows, columns = np.mgrid[:360, :640]
    seen = np.array([(weight * columns).sum(), (weight * rows).sum()]) / weight.sum()
    calibration = np.array([[flight.camera.focal_px, 0, 319.5], [0, flight.camera.focal_px, 179.5], [0, 0, 1.0]])
    instant = time_s + ((seen[1] + 0.5) / 360 - 0.5) * 12e-3
    centre = np.array([[3.0, -0.55, 15.0]]) - position(flight, [instant])
    projected = cv2.projectPoints(centre, np.array([math.radians(tilt), 0, 0]), np.zeros(3), calibration, None)[0]
    assert seen == pytest.approx(projected.ravel(), abs=0.1)
    # Taken at the middle row's time instead, it would be off by a good part of a pixel.
    assert abs(instant - time_s) * 12.0 / 15.0 * flight.camera.focal_px > 0.4


def test_horizon_lies_at_focal_length_times_tangent_of_the_tilt():
    flight = flight_from_dict({
        "camera": {"width_px": 320, "height_px": 180}, "flight": {"tilt_deg": 8.0},
        "scene": {"contrast": 0.0, "brightness": 60.0, "sky_grey": 200.0, "sky_fall": 0.0},
    })
    column = picture(flight, 0.0)[:, 160]
    edge = np.interp(-130.0, -column[:120], np.arange(120.0))
    assert edge == pytest.approx(89.5 - flight.camera.focal_px * math.tan(math.radians(8.0)), abs=0.1)


def test_cars_slide_with_their_speed():
    flight = flight_from_dict({
        "camera": {"width_px": 640, "height_px": 360, "readout_ms": 0.0, "exposure_ms": 0.0},
        "flight": {"height_m": 15.0, "tilt_deg": 90.0}, "scene": {"contrast": 0.0},
        "cars": [{"count": 1, "speed_mps": 3.0, "spread_pct": 0.0, "forward_m": 0.0, "span_right_m": 14.0,
                  "span_forward_m": 2.0}],
    })
    def centre(time_s):
        seen = np.abs(picture(flight, time_s).astype(float) - 118.0) > 5
        return np.argwhere(seen).mean(axis=0)

    moved = centre(0.2) - centre(0.0)
    expected = 3.0 * 0.2 / 15.0 * flight.camera.focal_px
    assert abs(moved[1]) == pytest.approx(expected, rel=0.04)
    assert moved[0] == pytest.approx(0.0, abs=0.3)


def test_lamp_dims_rows_by_its_mean_over_their_exposure():
    lamp = {"flicker_hz": 100.0, "depth": 0.4, "phase_deg": 30.0}
    flight = wall(camera={"readout_ms": 15.0, "exposure_ms": 4.0}, lamp=lamp)
    time_s = 3 / 60
    rows_s = time_s + ((np.arange(360) + 0.5) / 360 - 0.5) * 15e-3
    # Independent of the closed form: a plain average over many instants of the exposure.
    instants = rows_s[:, None] + np.linspace(-2e-3, 2e-3, 4001)
    expected = 1 + 0.4 * np.cos(2 * np.pi * 100 * instants + math.radians(30)).mean(axis=1)
    assert lamp_factor(flight, time_s) == pytest.approx(expected, abs=1e-4)
    lit, plain = picture(flight, time_s), picture(wall(camera={"exposure_ms": 4.0}), time_s)
    assert lit.mean(axis=1) / plain.mean(axis=1) == pytest.approx(expected, rel=1e-4)


def test_noise_has_the_stated_spread_and_is_fresh_each_frame():
    flight = flight_from_dict({"noise": {"read_grey": 1.5, "shot_grey": 2.0}})
    pool = noise_pool(flight)
    grey = np.full((200, 640), 150.0, dtype=np.float32)
    one, two = (add_noise(flight, grey, frame, pool) - grey for frame in (0, 1))
    assert one.std() == pytest.approx(math.sqrt(1.5**2 + 2.0**2 * 1.5), rel=0.01)
    assert abs(np.corrcoef(one.ravel(), two.ravel())[0, 1]) < 0.02
    assert abs(np.corrcoef(one[:-1].ravel(), one[1:].ravel())[0, 1]) < 0.02


def test_texture_levels_hold_little_near_their_texel_rate():
    surface = pattern_surface("soil", 256, 10.0, 118.0, 30.0, 1.0, (1,))
    for level in surface.levels[:6]:
        assert level.mean() == pytest.approx(surface.mean_grey, abs=1.0)
        power = np.abs(np.fft.rfft(level - level.mean(), axis=1)) ** 2
        frequency = np.fft.rfftfreq(level.shape[1])
        assert power[:, frequency > 0.4].sum() < 0.01 * power.sum()


# Clips ---------------------------------------------------------------------------------------------------------


def test_same_recipe_gives_the_same_pictures_bit_for_bit():
    code = (
        "import sys, hashlib, numpy as np\n"
        "from framegrade.simulate import flight_from_dict\n"
        "from framegrade.simulate.picture import add_noise, exposed_picture, noise_pool\n"
        "from framegrade.simulate.scene import build_world\n"
        f"flight = flight_from_dict({SMALL!r})\n"
        "grey = add_noise(flight, exposed_picture(flight, build_world(flight), 0.1), 6, noise_pool(flight))\n"
        "print(hashlib.sha256(np.ascontiguousarray(grey).tobytes()).hexdigest())\n"
        "print(*sorted(name for name in sys.modules if name.startswith('framegrade')))\n"
    )
    runs = [subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True) for _ in range(2)]
    assert runs[0].stdout == runs[1].stdout
    # Ground truth shares no code with the estimators.
    modules = runs[0].stdout.splitlines()[1].split()
    allowed = ("framegrade", "framegrade.version")
    assert [name for name in modules if not name.startswith("framegrade.simulate") and name not in allowed] == []
    other = flight_from_dict({**SMALL, "seed": 4})
    assert not np.array_equal(picture(flight_from_dict(SMALL), 0.1), picture(other, 0.1))


@pytest.mark.parametrize(("codec", "suffix"), [("h264", ".mp4"), ("hevc", ".mp4"), ("mjpeg", ".mov"),
                                              ("prores", ".mov"), ("vp9", ".mp4"), ("av1", ".mp4")])
@pytest.mark.parametrize("rate", [60, "30000/1001"])
def test_timestamps_in_the_container_are_those_of_the_truth(tmp_path, codec, suffix, rate):
    flight = flight_from_dict({
        **SMALL, "camera": {"width_px": 192, "height_px": 108, "frame_rate": rate},
        "encode": {"codec": codec, **({} if codec == "mjpeg" else {"bits_per_pixel": 1.0})},
        "cadence": [] if rate == 60 else [{"fault": "drop", "frames": [3, 4]}, {"fault": "jitter", "jitter_ms": 2.0}],
    })
    path = tmp_path / f"clip{suffix}"
    truth = render(flight, path)
    times, frames = decoded(path)
    assert times == pytest.approx(truth.pts_s, abs=1e-9)
    # The luma plane is the picture itself, not a converted copy.
    expected = picture(flight, float(truth.exposed_s[-1])).ravel()
    slope, level = np.polyfit(cv2.GaussianBlur(expected, (0, 0), 2).ravel() - 118, frames[-1].ravel() - 118, 1)
    assert slope == pytest.approx(1.0, abs=0.08) and level == pytest.approx(0.0, abs=1.0)


def test_decoded_clip_still_shows_the_motion(tmp_path):
    speed = 0.4 * DISTANCE_M / WALL_FOCAL_PX * 60
    flight = wall(flight={"speed_mps": speed, "course_deg": 90.0, "duration_s": 0.2}, encode={"crf": 6.0})
    render(flight, tmp_path / "wall.mp4")
    _, frames = decoded(tmp_path / "wall.mp4")
    assert shift_px(frames[2], frames[7])[1] == pytest.approx(5 * 0.4, abs=0.02)


def test_truth_survives_its_files(tmp_path):
    truth = render(flight_from_dict(SMALL, source="seed = 3"), tmp_path / "clip.mp4")
    again = load_truth(tmp_path / "clip.mp4")
    assert again.pts_s == pytest.approx(truth.pts_s)
    assert again.seen_rad == pytest.approx(truth.seen_rad, abs=1e-8)
    assert again.facts == json.loads(json.dumps(truth.facts))
    assert again.facts["recipe"] == "seed = 3"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["clip.mp4", "clip.truth.json", "clip.truth.npz"]


def test_failed_render_leaves_no_clip_behind(tmp_path):
    def stop(done, total):
        if done == 5:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        render(flight_from_dict(SMALL), tmp_path / "clip.mp4", stop)
    assert list(tmp_path.iterdir()) == []


def test_cadence_faults_are_laid_out_as_asked():
    def frames(*faults):
        return schedule(flight_from_dict({**SMALL, "cadence": list(faults)}))

    plain = frames()
    assert np.diff(plain.pts_s) == pytest.approx(np.full(17, 1 / 60))
    gone = frames({"fault": "drop", "frames": [5, 6]})
    assert gone.dropped == 2 and gone.pts_s == pytest.approx(np.delete(plain.pts_s, [5, 6]))
    twice = frames({"fault": "repeat", "frames": [8]})
    assert twice.pts_s == pytest.approx(plain.pts_s) and twice.exposed_s[8] == twice.exposed_s[7]
    assert np.flatnonzero(twice.repeated).tolist() == [8]
    shaky = frames({"fault": "jitter", "jitter_ms": 1.0})
    assert 0.4e-3 < np.std(shaky.pts_s - shaky.exposed_s) < 1.8e-3
    assert np.diff(shaky.exposed_s) == pytest.approx(np.full(17, 1 / 60))
    uneven = frames({"fault": "variable", "intervals": [1.0, 2.0]})
    assert np.diff(uneven.pts_s)[:4] == pytest.approx(np.array([1, 2, 1, 2]) / 60, abs=2e-5)
    assert uneven.pts_s == pytest.approx(uneven.exposed_s)
    hidden = frames({"fault": "drop", "frames": [5]}, {"fault": "restamp"})
    assert np.diff(hidden.pts_s) == pytest.approx(np.full(16, 1 / 60))
    assert hidden.exposed_s[5] - hidden.exposed_s[4] == pytest.approx(2 / 60)
    many = schedule(flight_from_dict({**SMALL, "flight": {"duration_s": 60.0},
                                      "cadence": [{"fault": "drop", "rate_pct": 10.0}]}))
    assert many.dropped == pytest.approx(360, abs=90)


# Motion --------------------------------------------------------------------------------------------------------


def test_isolator_crosses_unity_at_root_two_whatever_the_damping():
    # Harris' Shock and Vibration Handbook, ch. 30; Ogata, System Dynamics, eq. 9-14.
    for damping in (0.01, 0.05, 0.2, 0.7, 2.0):
        assert abs(transmissibility(math.sqrt(2) * 12.0, 12.0, damping)) == pytest.approx(1.0, abs=1e-12)
        assert abs(transmissibility(1e-6, 12.0, damping)) == pytest.approx(1.0, abs=1e-9)
    ratio = np.array([0.3, 1.0, 3.0])
    damper = (2 * 0.1 * ratio) ** 2
    formula = np.sqrt((1 + damper) / ((1 - ratio**2) ** 2 + damper))
    assert np.abs(transmissibility(ratio * 9.0, 9.0, 0.1)) == pytest.approx(formula)


def test_isolator_selection_example():
    # ASHRAE Applications method and ISO 2017-1: 25 mm of sag, 25 Hz, z = 0.05: T = 0.0206.
    natural = 15.76 / math.sqrt(25.0)
    assert natural == pytest.approx(3.15, abs=0.005)
    assert abs(transmissibility(25.0, natural, 0.05)) == pytest.approx(0.0206, abs=0.0001)


def test_isolator_filters_tones_motors_and_broadband_but_not_sway():
    tables = {
        **SMALL,
        "sway": [{"axis": "pitch", "frequency_hz": 1.0, "amplitude_deg": 0.3}],
        "motors": [{"count": 3, "axis": "roll", "frequency_hz": 150.0, "amplitude_px": 0.2}],
        "broadband": [{"axis": "yaw", "low_hz": 60.0, "high_hz": 240.0, "rms_px": 0.4}],
    }
    bare = flight_from_dict(tables)
    held = flight_from_dict({**tables, "isolator": {"natural_frequency_hz": 30.0, "damping_ratio": 0.12}})
    for before, after in zip(seen_tones(bare), seen_tones(held)):
        gain = abs(transmissibility(before.frequency_hz, 30.0, 0.12))
        assert after.amplitude_rad / before.amplitude_rad == pytest.approx(gain)
        assert after.frequency_hz == before.frequency_hz
    frequency, plain, _ = broadband_lines(bare, 0)
    _, filtered, _ = broadband_lines(held, 0)
    assert filtered / plain == pytest.approx(np.abs(transmissibility(frequency, 30.0, 0.12)))
    assert truth_of(held).facts["sway"] == truth_of(bare).facts["sway"]
    fact = truth_of(held).facts["tones"][0]
    assert fact["amplitude_px"] == pytest.approx(
        0.5 * abs(transmissibility(137.3, 30.0, 0.12)) * np.sinc(137.3e-3), rel=1e-9
    )
    seen_deg = fact["amplitude_mdeg"] / 1e3
    assert fact["amplitude_px"] == pytest.approx(math.radians(seen_deg) * held.camera.focal_px)


def test_isolator_delays_as_the_differential_equation_does():
    # Integrates z'' + 2 z w (x' - u') + w^2 (x - u) = 0 with scipy, an independent road to amplitude and phase.
    from scipy.integrate import solve_ivp

    natural, damping, driven = 2 * np.pi * 20.0, 0.3, 2 * np.pi * 33.0

    def slope(t, state):
        push = natural**2 * np.sin(driven * t) + 2 * damping * natural * driven * np.cos(driven * t)
        return [state[1], push - 2 * damping * natural * state[1] - natural**2 * state[0]]

    late = np.linspace(1.0, 1.1, 200)
    exact = solve_ivp(slope, (0, 1.1), [0, 0], t_eval=late, rtol=1e-9, atol=1e-11).y[0]
    flight = flight_from_dict({
        "tone": [{"axis": "pitch", "frequency_hz": 33.0, "amplitude_deg": 1.0, "phase_deg": 0.0}],
        "isolator": {"natural_frequency_hz": 20.0, "damping_ratio": 0.3},
    })
    assert np.degrees(pose(flight, late)[:, 1]) == pytest.approx(exact, abs=1e-5)


def test_broadband_is_gaussian_flat_and_of_the_stated_rms():
    from scipy.signal import welch
    from scipy.stats import kurtosis

    rate = 500.0
    time_s = np.arange(0, 4, 1 / rate)
    flights = [flight_from_dict({
        "seed": seed, "flight": {"duration_s": 4.0},
        "broadband": [{"axis": "pitch", "low_hz": 80.0, "high_hz": 160.0, "rms_px": 0.3}],
    }) for seed in range(8)]
    signals = np.array([pose(flight, time_s)[:, 1] * flight.camera.focal_px for flight in flights])
    # One clip of band times duration 320 strays by 1 / (2 sqrt(320)) = 2.8 %, eight together by 1 %.
    assert np.sqrt((signals**2).mean()) == pytest.approx(0.3, rel=0.03)
    assert signals.std(axis=1) == pytest.approx(np.full(8, 0.3), rel=0.1)
    assert abs(kurtosis(signals.ravel())) < 0.1
    frequency, density = welch(signals, rate, nperseg=500, detrend=False)
    density = density.mean(axis=0)
    inside = (frequency > 84) & (frequency < 156)
    assert density[inside].mean() == pytest.approx(0.3**2 / 80.0, rel=0.05)
    assert density[inside].std() / density[inside].mean() < 0.15
    assert density[(frequency < 70) | (frequency > 170)].max() < 1e-4 * density[inside].mean()
    flight = flights[0]
    bands = truth_of(flight).facts["broadband"][0]["third_octaves"]
    total = math.sqrt(sum(band["rms_px"] ** 2 for band in bands))
    assert total == pytest.approx(truth_of(flight).facts["broadband"][0]["rms_px"])
    # IEC 61260-1, base ten: 80, 100, 125 and 160 Hz nominal.
    assert [band["exact_hz"] for band in bands] == pytest.approx([79.43, 100.0, 125.89, 158.49], abs=0.01)


def test_wander_has_the_stated_size_and_memory():
    flights = [flight_from_dict({
        "seed": seed, "flight": {"duration_s": 60.0},
        "tone": [{"axis": "yaw", "frequency_hz": 140.0, "amplitude_px": 0.4, "wander_pct": 2.0, "wander_time_s": 1.0}],
    }) for seed in range(12)]
    time_s = np.arange(0, 60, 0.05)
    relative = np.array([seen_tones(flight)[0].frequency(time_s) / 140.0 - 1 for flight in flights])
    assert np.sqrt((relative**2).mean()) == pytest.approx(0.02, rel=0.1)
    # An exponentially correlated process falls to 1/e after its correlation time.
    lagged = (relative[:, 20:] * relative[:, :-20]).mean() / (relative**2).mean()
    assert lagged == pytest.approx(math.exp(-1), abs=0.1)
    tone = seen_tones(flights[0])[0]
    step = 1e-5
    slope = (tone.phase(time_s + step) - tone.phase(time_s - step)) / (2 * step) / (2 * np.pi)
    assert slope == pytest.approx(tone.frequency(time_s), rel=1e-6)


def test_motors_spread_around_their_speed():
    flight = flight_from_dict({"motors": [{"count": 8, "frequency_hz": 140.0, "spread_pct": 2.0, "wander_pct": 0.0,
                                           "amplitude_px": 0.25}]})
    speeds = np.array([tone.frequency_hz for tone in seen_tones(flight)])
    assert speeds.size == 8 and np.unique(speeds).size == 8
    assert np.abs(speeds / 140.0 - 1).max() <= 0.02


def test_onset_and_decay():
    flight = flight_from_dict({"tone": [{"axis": "yaw", "frequency_hz": 50.0, "amplitude_deg": 0.1, "start_s": 1.0,
                                         "stop_s": 3.0, "fade_s": 0.1, "decay_s": 0.5}]})
    level = seen_tones(flight)[0].envelope(np.array([0.5, 1.05, 1.6, 2.1, 3.5]))
    assert level == pytest.approx([0, 0.5 * math.exp(-0.1), math.exp(-1.2), math.exp(-2.2), 0])
    assert np.abs(pose(flight, np.linspace(0, 0.9, 50))).max() == 0


def test_pan_with_ramps_turns_by_rate_times_time():
    pan = {"axis": "heading", "rate_deg_per_s": 30.0, "start_s": 0.5, "stop_s": 2.5, "ramp_s": 0.5}
    flight = flight_from_dict({"flight": {"tilt_deg": 30.0}, "pan": [pan]})
    angles = np.degrees(pose(flight, [0.0, 0.5, 1.5, 2.5, 4.0]))
    turned = np.array([0, 0, 22.5, 45.0, 45.0])
    assert angles[:, 0] == pytest.approx(turned * math.cos(math.radians(30)), abs=1e-9)
    assert angles[:, 2] == pytest.approx(turned * math.sin(math.radians(30)), abs=1e-9)


def test_row_signals_are_the_exposure_average_on_the_row_clock():
    flight = flight_from_dict({**SMALL, "camera": {"exposure_ms": 2.0, "readout_ms": 14.0}})
    pts_s, heights, angle = row_signals(flight, 20)
    assert angle.shape == (pts_s.size, 20, 3)
    instants = pts_s[:, None] + (heights - 0.5) * 14e-3
    expected = pose(flight, instants.ravel())[:, 0].reshape(instants.shape) * np.sinc(137.3 * 2e-3)
    assert angle[..., 0] == pytest.approx(expected, abs=1e-9)
    assert np.all(angle[..., 1:] == 0)


# The small shoot ---------------------------------------------------------------------------------------------------


FIXTURES = Path(__file__).parent.parent / "fixtures"
RECIPES = sorted((FIXTURES / "recipes").glob("*.toml"))


@pytest.mark.parametrize("recipe", RECIPES, ids=[path.stem for path in RECIPES])
def test_shoot_is_what_its_recipes_render(recipe):
    clip = FIXTURES / "clips" / (recipe.stem + ".mp4")
    stored, fresh = load_truth(clip), truth_of(load_flight(recipe))
    assert stored.facts == json.loads(json.dumps(fresh.facts))
    assert stored.seen_rad == pytest.approx(fresh.seen_rad, abs=1e-7)
    with av.open(str(clip)) as container:
        stream = container.streams.video[0]
        times = sorted(float(packet.pts * packet.time_base) for packet in container.demux(stream) if packet.size)
        size = (stream.codec_context.width, stream.codec_context.height)
    assert times == pytest.approx(stored.pts_s, abs=1e-9)
    camera = stored.facts["camera"]
    assert size == (camera["width_px"], camera["height_px"])
    modes = tomllib.loads((FIXTURES / "camera.toml").read_text(encoding="utf-8"))["mode"]
    own = [mode for mode in modes if all(mode[key] == camera[key] for key in mode)]
    assert len(own) == 1


def test_shoot_stays_small_and_holds_a_before_and_an_after():
    assert 8 <= len(RECIPES) <= 12
    assert sum(path.stat().st_size for path in FIXTURES.rglob("*") if path.is_file()) < 15e6
    before, after = (truth_of(load_flight(FIXTURES / "recipes" / name))
                     for name in ("08-mount-rigid.toml", "09-mount-isolated.toml"))
    for first, second in zip(before.facts["tones"], after.facts["tones"]):
        gain = 20 * math.log10(second["amplitude_px"] / first["amplitude_px"])
        # Harris' Shock and Vibration Handbook, ch. 30, at 36 Hz and z = 0.2.
        r = first["frequency_hz"] / 36.0
        formula = 10 * math.log10((1 + (0.4 * r) ** 2) / ((1 - r**2) ** 2 + (0.4 * r) ** 2))
        assert gain == pytest.approx(formula, abs=1e-9)
        assert gain < -10


# Recipes and the command ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(("text", "message"), [
    ("[camera]\nwidth_px = 1280\nreadout_s = 0.014\n", "line 3: [camera] readout_s is not known; did you mean readout"),
    ("[[tone]]\naxis = 'yaw'\nfrequency_hz = 100.0\namplitude_px = 0.5\n[[tone]]\naxis = 'sideways'\n",
     "line 6: [tone] axis is 'sideways' but must be one of yaw, pitch, roll."),
    ("[camera]\nhfov_deg = 170\n", "line 2: [camera] hfov_deg is 170 but must be 1 to 150 degrees."),
    ("[camera]\nwidth_px = 1280.5\n", "line 2: [camera] width_px must be a whole number from 16 to 8192, not 1280.5."),
    ("[camera]\nframe_rate = 60\nreadout_ms = 20\n", "readout_ms is 20 but must be at most the frame interval"),
    ("[camera]\nframe_rate = 'fast'\n", 'frame_rate must be 1 to 1000 frames/s, as a number or "30000/1001"'),
    ("[flight]\nspeed_mps = '5'\n", "line 2: [flight] speed_mps must be a number from -100 to 100 m/s, not '5'."),
    ("[[tone]]\naxis = 'yaw'\n", "line 1: [tone] needs exactly one of amplitude_deg and amplitude_px."),
    ("[tone]\naxis = 'yaw'\n", "may be given several times, so write it [[tone]]."),
    ("[[broadband]]\nlow_hz = 90\nhigh_hz = 80\nrms_px = 1\n", "line 3: [broadband] high_hz must be above low_hz"),
    ("[encode]\ncrf = 20\nbit_rate_mbps = 8\n", "crf cannot go with bit_rate_mbps"),
    ("[encode]\ncodec = 'vp9'\npixel_format = 'yuv422p'\n", "pixel_format is 'yuv422p' but vp9 stores only yuv420p."),
    ("[flight]\nclimb_mps = -3\nheight_m = 8\n", "takes the camera below the ground"),
    ("[[cadence]]\nfault = 'drop'\n", "fault 'drop' needs frames or rate_pct."),
    ("[scene]\npattern = 'photo'\n", "the key photo names no picture file."),
    ("wind = 3\n", "line 1: wind is not known;"),
    ("seed = -1\n", "line 1: seed must be a whole number from 0, not -1."),
    ("seed = \n", "is not valid TOML"),
])
def test_errors_are_one_sentence_with_file_line_and_allowed_values(tmp_path, text, message):
    path = tmp_path / "flight.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(FlightError) as caught:
        load_flight(path)
    assert str(caught.value).startswith(str(path))
    assert message in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_files_are_named(tmp_path):
    with pytest.raises(FlightError, match="none.toml: there is no such file"):
        load_flight(tmp_path / "none.toml")
    flight = flight_from_dict({"scene": {"pattern": "photo", "photo": "none.png"}}, folder=tmp_path)
    with pytest.raises(FlightError, match="none.png: cannot be read as a picture"):
        build_world(flight)
    with pytest.raises(FlightError, match="clip.*mp4: cannot be written, since its folder does not exist"):
        render(flight_from_dict(SMALL), tmp_path / "missing" / "clip.mp4")


def test_photographs_serve_as_ground(tmp_path):
    from skimage import data

    cv2.imwrite(str(tmp_path / "ground.png"), data.camera())
    flight = flight_from_dict(
        {**SMALL, "scene": {"pattern": "photo", "photo": "ground.png", "tile_m": 12.0}}, folder=tmp_path
    )
    assert picture(flight, 0.0).std() > 15


def test_broadcast_rates_are_exact():
    assert flight_from_dict({"camera": {"frame_rate": 29.97}}).camera.frame_rate == \
        flight_from_dict({"camera": {"frame_rate": "30000/1001"}}).camera.frame_rate
    assert flight_from_dict({"camera": {"frame_rate": 25.0}}).camera.frame_rate == 25


def run_command(*words):
    parser = argparse.ArgumentParser(prog="framegrade simulate")
    command.add_arguments(parser)
    return command.run(parser.parse_args([str(word) for word in words]))


def test_command_renders_folders_and_says_what_failed(tmp_path, capsys):
    recipes = tmp_path / "recipes"
    recipes.mkdir()
    good = "seed = 1\n[camera]\nwidth_px = 128\nheight_px = 72\n[flight]\nduration_s = 0.1\n"
    (recipes / "a.toml").write_text(good, encoding="utf-8")
    assert run_command(recipes, "-o", tmp_path / "clips") == 0
    assert {path.name for path in (tmp_path / "clips").iterdir()} == {"a.mp4", "a.truth.json", "a.truth.npz"}
    assert "6 frames (128x72 @ 60, 0.1 s)" in capsys.readouterr().out
    (recipes / "b.toml").write_text("[camera]\nwidth_px = 3\n", encoding="utf-8")
    assert run_command(recipes, "-o", tmp_path / "clips") == 1
    assert "b.toml, line 2: [camera] width_px is 3 but must be 16 to 8192." in capsys.readouterr().err
    assert run_command(recipes, "--check") == 1
    capsys.readouterr()
    assert run_command(recipes / "a.toml", "--check") == 0
    assert "a.toml: can be flown" in capsys.readouterr().out


def test_keys_lists_what_a_recipe_may_hold_with_its_range(capsys):
    assert run_command("--keys") == 0
    text = capsys.readouterr().out
    assert '[[tone]]\n  axis = "yaw"' in text and "[isolator]" in text
    line = next(line for line in text.splitlines() if line.strip().startswith("hfov_deg"))
    assert line.split() == "hfov_deg = 80.0 horizontal field of view; 1 to 150 degrees".split()
    # A key the list names is a key the reader knows: an unknown one would be refused by name.
    table = None
    for line in text.splitlines():
        if line.startswith("["):
            table = line.strip("[]")
        elif line.startswith("  ") and table:
            with pytest.raises(FlightError) as caught:
                value = {line.split()[0]: {"not": "a value"}}
                flight_from_dict({table: value if f"[{table}]" in text and f"[[{table}]]" not in text else [value]})
            assert "is not known" not in str(caught.value) and line.split()[0] in str(caught.value)


def test_command_refuses_wrong_use_with_status_two(tmp_path, capsys):
    assert run_command("-o", tmp_path) == 2
    assert "name at least one recipe" in capsys.readouterr().err
    assert run_command(tmp_path / "a.toml") == 2
    assert "-o OUT_DIR" in capsys.readouterr().err
    assert run_command(tmp_path, "-o", tmp_path / "out") == 2
    assert "holds no recipe" in capsys.readouterr().err
    for folder in ("x", "y"):
        (tmp_path / folder).mkdir()
        (tmp_path / folder / "same.toml").write_text("seed = 1\n", encoding="utf-8")
    assert run_command(tmp_path / "x", tmp_path / "y", "-o", tmp_path / "out") == 2
    assert "would write the same clip" in capsys.readouterr().err
    (tmp_path / "file").write_text("", encoding="utf-8")
    assert run_command(tmp_path / "x", "-o", tmp_path / "file") == 2
    assert "cannot be made a folder" in capsys.readouterr().err


def test_example_in_the_help_can_be_flown():
    lines = [line for line in command.EXAMPLE.splitlines() if line.startswith("  ")]
    text = "\n".join(line.strip() for line in lines if "framegrade simulate" not in line)
    flight = flight_from_dict(tomllib.loads(text))
    assert flight.tone[0].frequency_hz == 137.3
