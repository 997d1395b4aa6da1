"""Travel, sway and shake against masks on the Fourier transform (numpy.fft), and the crop against plane geometry."""

from __future__ import annotations

import numpy as np
import pytest

from framegrade.path import crop_needed_pct, split_path

RATE_HZ = 30.0


def sines(time_s, parts, axes=3):
    """Sum of sines (frequency_hz, amplitude_px), another phase for every axis; shape (N, axes)."""
    phase = np.array([0.3, 1.9, 4.0])[:axes]
    return sum(a * np.sin(2 * np.pi * f * time_s[:, None] + phase * (k + 1)) for k, (f, a) in enumerate(parts))


def masked(series, rate_hz, low_hz, high_hz):
    """Part of a periodic series between two frequencies: a mask on numpy's Fourier transform."""
    frequency = np.fft.rfftfreq(len(series), 1 / rate_hz)
    spectrum = np.fft.rfft(series, axis=0)
    spectrum[(frequency < low_hz) | (frequency >= high_hz)] = 0
    return np.fft.irfft(spectrum, len(series), axis=0)


def rms(values):
    return np.sqrt(np.mean(np.square(values)))


@pytest.mark.parametrize("rate_hz", [RATE_HZ, 60.0, 120.0])
def test_split_against_fourier_masks(rate_hz):
    """Periodic over 40 s, each part away from the 0.5 and 3 Hz edges; inner 30 s, so that the ends do not count."""
    time = np.arange(round(40 * rate_hz)) / rate_hz
    parts = [(0.1, 200.0), (0.25, 40.0), (0.9, 12.0), (1.5, 8.0), (2.0, 3.0), (5.0, 2.0), (8.25, 1.5), (12.5, 0.8)]
    position = sines(time, parts)
    path = split_path(time, np.diff(position, axis=0))
    inner = slice(round(5 * rate_hz), round(35 * rate_hz))
    travel = masked(position, rate_hz, 0.0, 0.5) - position[0]
    assert rms((path.travel_px - travel)[inner]) < 0.01 * rms(travel)
    sway = masked(position, rate_hz, 0.5, 3.0)
    assert rms((path.sway_px - sway)[inner]) < 0.06 * rms(sway)
    shake = masked(position, rate_hz, 3.0, np.inf)
    assert rms((path.shake_px - shake)[inner]) < 0.06 * rms(shake)
    np.testing.assert_allclose(path.travel_px + path.sway_px + path.shake_px, position - position[0], atol=1e-9)


@pytest.mark.parametrize(
    ("frequency_hz", "home"), [(0.2, "travel_px"), (1.2, "sway_px"), (6.0, "shake_px"), (11.0, "shake_px")]
)
def test_one_frequency_goes_to_one_part(frequency_hz, home):
    time = np.arange(600) / RATE_HZ
    position = sines(time, [(frequency_hz, 10.0)])
    path = split_path(time, np.diff(position, axis=0))
    inner = slice(150, 450)
    for name in ("travel_px", "sway_px", "shake_px"):
        part = getattr(path, name)[inner]
        size = rms(part - part.mean(0)) / (10 / np.sqrt(2))
        assert size == pytest.approx(1.0, abs=0.03) if name == home else size < 0.03, name


@pytest.mark.parametrize("duration_s", [1.0, 2.0, 6.0])
def test_a_steady_pan_is_travel_to_the_ends(duration_s):
    """A straight line holds no sway, however short the clip (its Fourier mask would: it is not periodic)."""
    time = np.arange(round(duration_s * RATE_HZ)) / RATE_HZ
    position = np.outer(time, [300.0, -35.0, 4.0])
    path = split_path(time, np.diff(position, axis=0))
    np.testing.assert_allclose(path.travel_px, position, atol=1e-6)
    assert rms(path.sway_px) < 1e-6 and rms(path.shake_px) < 1e-6
    np.testing.assert_allclose(path.speed_px_per_s, np.broadcast_to([300.0, -35.0, 4.0], (len(time), 3)), atol=1e-9)


def test_a_pan_does_not_change_the_sway_seen_during_it():
    time = np.arange(90) / RATE_HZ
    position = sines(time, [(1.3, 10.0), (7.0, 1.0)])
    alone = split_path(time, np.diff(position, axis=0))
    panned = split_path(time, np.diff(position + np.outer(time, [300.0, -35.0, 4.0]), axis=0))
    np.testing.assert_allclose(panned.sway_px, alone.sway_px, atol=1e-9)
    np.testing.assert_allclose(panned.shake_px, alone.shake_px, atol=1e-9)


def test_speed_is_the_slope_of_the_path():
    time = np.arange(600) / RATE_HZ
    path = split_path(time, np.diff(sines(time, [(0.7, 10.0)]), axis=0))
    expected = 2 * np.pi * 0.7 * 10 * np.cos(2 * np.pi * 0.7 * time[:, None] + np.array([0.3, 1.9, 4.0]))
    np.testing.assert_allclose(path.speed_px_per_s[1:-1], expected[1:-1], atol=0.004 * 2 * np.pi * 0.7 * 10)


def test_missing_steps_are_bridged_by_their_neighbours():
    time = np.arange(450) / RATE_HZ
    position = sines(time, [(0.2, 60.0), (1.2, 10.0)])
    steps = np.diff(position, axis=0)
    whole = split_path(time, steps)
    steps[100] = steps[200:202] = np.nan
    bridged = split_path(time, steps)
    for name in ("travel_px", "sway_px", "shake_px", "speed_px_per_s"):
        assert np.isfinite(getattr(bridged, name)).all()
    assert np.abs(bridged.sway_px - whole.sway_px).max() < 0.5


def test_an_axis_never_measured_is_unknown_and_not_zero():
    time = np.arange(150) / RATE_HZ
    steps = np.diff(sines(time, [(1.2, 10.0)]), axis=0)
    steps[:, 2] = np.nan
    path = split_path(time, steps)
    for name in ("travel_px", "sway_px", "shake_px", "speed_px_per_s"):
        assert np.isfinite(getattr(path, name)[:, :2]).all() and np.isnan(getattr(path, name)[:, 2]).all(), name


def test_variable_frame_rate():
    """Frames at uneven times see the same camera: the parts at those times are those of the even clip."""
    rng = np.random.default_rng(4)
    even = np.arange(900) / RATE_HZ
    uneven = np.cumsum(rng.choice([1 / 30, 1 / 30, 1 / 15], 700))
    parts = [(0.2, 60.0), (1.1, 10.0), (4.2, 3.0)]
    path = split_path(uneven, np.diff(sines(uneven, parts), axis=0))
    inner = (uneven > 3) & (uneven < uneven[-1] - 3)
    assert rms((path.sway_px - sines(uneven, [(9.9, 0.0), (1.1, 10.0)]))[inner]) < 0.06 * 10 / np.sqrt(2)
    reference = split_path(even, np.diff(sines(even, parts), axis=0))
    assert rms(path.shake_px[inner]) == pytest.approx(rms(reference.shake_px[90:-90]), rel=0.15)
    np.testing.assert_array_equal(path.time_s, uneven)


def test_a_one_second_clip_gives_figures_without_wild_ends():
    time = np.arange(30) / RATE_HZ
    position = sines(time, [(1.2, 10.0), (8.0, 1.0)])
    path = split_path(time, np.diff(position, axis=0))
    total = path.travel_px + path.sway_px + path.shake_px
    np.testing.assert_allclose(total, position - position[0], atol=1e-9)
    assert np.abs(path.shake_px).max() < 2.5 and np.abs(path.travel_px).max() < 25


# --- crop ------------------------------------------------------------------------------------------------------------


def test_crop_of_a_known_shift():
    # 96 px to one side of a 1920-wide picture: 96 px lost on the left or right, and as much kept even on the other side
    shift = np.array([[96.0, 0, 0], [-96.0, 0, 0], [0, 54.0, 0], [0, -108.0, 0], [48.0, 54.0, 0], [0, 0, 0]])
    np.testing.assert_allclose(crop_needed_pct(shift, 1920, 1080), [10.0, 10.0, 10.0, 20.0, 10.0, 0.0])


@pytest.mark.parametrize("deviation", [
    (20.0, -8.0, 0.0), (0.0, 0.0, 12.0), (30.0, 15.0, -9.0), (-5.0, 22.0, 20.0), (60.0, 0.0, 20.0),
])
def test_crop_against_the_corners_of_the_turned_window(deviation):
    """The largest scale at which the window, turned and shifted the other way, has all corners inside the picture.

    Bisection on exact plane rotation; the product's figure is first order in the angle.
    """
    width, height = 1920, 1080
    dx, dy, roll = deviation
    angle = roll / (width / 2)
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    corners = np.array([[x, y] for x in (-width / 2, width / 2) for y in (-height / 2, height / 2)])

    def fits(scale):
        at = scale * corners @ turn.T + [dx, dy]
        return (np.abs(at) <= np.array([width / 2, height / 2]) + 1e-9).all()

    low, high = 0.0, 1.0
    for _ in range(50):
        middle = (low + high) / 2
        low, high = (middle, high) if fits(middle) else (low, middle)
    found = crop_needed_pct(np.array([deviation]), width, height)[0]
    assert found == pytest.approx(100 * (1 - low), rel=0.05)


def test_crop_of_an_unknown_deviation_is_unknown():
    assert np.isnan(crop_needed_pct(np.array([[np.nan, 0.0, 0.0]]), 1920, 1080)[0])
