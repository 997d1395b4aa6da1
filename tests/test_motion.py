"""Cell motion on photographs moved by known amounts, and on real recordings against scikit-image's registration.

Photographs are those inside the scikit-image wheel. Mirrored to a periodic picture and limited to 0.4 cycles a pixel,
as any lens and sensor do, they can be moved by any amount without a border and without interpolation
(scipy.ndimage.fourier_shift).
"""

from __future__ import annotations

from functools import cache

import av
import numpy as np
import pytest
from scipy.ndimage import fourier_shift
from skimage import data
from skimage.registration import phase_cross_correlation

from framegrade.motion import DERIVE_TAPS, SMOOTH_TAPS, make_grid, measure_motion
from framegrade.rows import fit_block, focal_length_px
from tests.media import real_clips

PHOTOGRAPHS = ("camera", "gravel", "brick", "grass", "moon")
SHIFTS = ((0.03, 0.02), (0.25, -0.1), (0.5, 0.3), (0.73, -0.44), (-3.37, 2.21), (6.8, -1.9))


@cache
def spectrum_of(name):
    """Fourier transform of a photograph, mirrored right and down: 1024 x 1024 and periodic without a step."""
    photo = getattr(data, name)().astype(float)
    photo = np.concatenate([photo, photo[:, ::-1]], 1)
    cycles = np.fft.fftfreq(2 * len(photo))
    return np.fft.fft2(np.concatenate([photo, photo[::-1]], 0)) * (np.hypot(cycles[:, None], cycles) < 0.4)


def moved(name, right_px, down_px, width, height):
    """A window of the photograph whose content moved; repeated where the window is larger than the picture."""
    whole = np.fft.ifft2(fourier_shift(spectrum_of(name), (down_px, right_px))).real
    across, down = -(-width // whole.shape[1]), -(-height // whole.shape[0])
    return np.tile(whole, (down, across))[:height, :width]


def stored(picture, rng=None, noise=0.0):
    """As a clip holds it: with sensor noise, rounded to 8 bits."""
    if noise:
        picture = picture + noise * rng.normal(size=picture.shape)
    return np.clip(np.round(picture), 0, 255).astype(np.uint8)


def motion_of(first, second, luma_scale=1.0):
    grid = make_grid(first.shape[1], first.shape[0])
    (pair,) = measure_motion([(0.0, first), (1 / 60, second)], grid, luma_scale)
    return pair, grid


def cells(pair):
    return pair.information[..., 0] > 0


def covariance(information):
    """Diagonal of the inverse of the 2 x 2 information, (..., 2)."""
    xx, xy, yy = np.moveaxis(information.astype(float), -1, 0)
    return np.stack([yy, xx], -1) / (xx * yy - xy ** 2)[..., None]


# --- filters and grid ------------------------------------------------------------------------------------------------


def test_filter_taps_differentiate():
    """Farid and Simoncelli 2004, table I. The taps are from the paper; what is checked is what they must do: smoothing
    sums to 1, the derivative of a line is its slope, and that of a sinusoid to half the Nyquist frequency is within 2 %
    of i w times the smoothed one."""
    position = np.arange(-2, 3)
    assert SMOOTH_TAPS.sum() == pytest.approx(1.0, abs=1e-4)
    assert np.sum(DERIVE_TAPS * -position) == pytest.approx(1.0, abs=0.02)
    w = np.linspace(0.05, np.pi / 2, 30)
    smooth = (SMOOTH_TAPS * np.exp(-1j * np.outer(w, position))).sum(1)
    derive = (DERIVE_TAPS * np.exp(-1j * np.outer(w, position))).sum(1)
    assert np.abs(derive / (1j * w * smooth) - 1).max() < 0.02


@pytest.mark.parametrize(("width", "height"), [(1280, 720), (1920, 1080), (3840, 2160), (640, 272), (176, 144)])
def test_cells_lie_inside_the_picture_and_centred(width, height):
    grid = make_grid(width, height)
    half_w, half_h = grid.column_width * grid.decimation / 2, grid.band_rows * grid.decimation / 2
    assert grid.x_px[0] - half_w >= -width / 2 and grid.x_px[-1] + half_w <= width / 2
    assert grid.y_px[0] - half_h >= -height / 2 and grid.y_px[-1] + half_h <= height / 2
    assert abs(grid.x_px.mean()) <= grid.decimation and abs(grid.y_px.mean()) <= grid.decimation
    np.testing.assert_allclose(np.diff(grid.height), grid.band_share)
    assert grid.bands * grid.band_share > 0.85


def test_a_tiny_picture_is_refused_in_one_sentence():
    with pytest.raises(ValueError, match="16 x 16 is too small"):
        make_grid(16, 16)


# --- known shifts ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", PHOTOGRAPHS)
def test_known_shifts_of_photographs(name):
    """scipy.ndimage.fourier_shift: the median over the cells is within 0.02 px, for slow and for fast motion."""
    first = stored(moved(name, 0, 0, 960, 540))
    for right, down in SHIFTS:
        pair, _ = motion_of(first, stored(moved(name, right, down, 960, 540)))
        used = cells(pair)
        assert used.mean() > 0.5, (right, down)
        error = pair.flow_px[used] - [right, down]
        assert np.abs(np.median(error, axis=0)).max() < 0.02, (right, down)
        assert np.sqrt(np.mean(error ** 2)) < 0.04, (right, down)  # single cells: a few hundredths of a pixel


def test_known_shifts_of_a_large_picture():
    """1920 x 1080 is measured on a copy of half the size, to 0.02 pixels of that; native pixels come out."""
    first = stored(moved("grass", 0, 0, 1920, 1080))
    for right, down in ((0.5, -0.3), (-5.3, 3.1)):
        pair, grid = motion_of(first, stored(moved("grass", right, down, 1920, 1080)))
        assert grid.decimation == 2
        error = pair.flow_px[cells(pair)] - [right, down]
        assert np.abs(np.median(error, axis=0)).max() < 0.02 * grid.decimation


def test_ten_bits_and_eight_bits_say_the_same():
    first, second = moved("gravel", 0, 0, 640, 360), moved("gravel", 0.4, 0.2, 640, 360)
    ten, _ = motion_of(*(np.round(np.clip(p, 0, 255) * 4).astype(np.uint16) for p in (first, second)), luma_scale=0.25)
    eight, _ = motion_of(stored(first), stored(second))
    both = cells(ten) & cells(eight)
    assert both.mean() > 0.9
    assert np.abs(np.median((ten.flow_px - eight.flow_px)[both], axis=0)).max() < 2e-3
    assert ten.change_level == pytest.approx(eight.change_level, rel=0.02)


def test_rows_that_move_against_each_other():
    """Jello: each row shifted on its own (numpy Fourier phase, row by row) by a wave of 0.4 px, two cycles a frame."""
    first = moved("gravel", 0, 0, 1024, 720)
    wave = 0.4 * np.cos(2 * np.pi * 2 * np.arange(720) / 720 + 0.4)
    k = np.fft.fftfreq(1024)
    second = np.fft.ifft(np.fft.fft(first, axis=1) * np.exp(-2j * np.pi * k * wave[:, None]), axis=1).real
    pair, grid = motion_of(stored(first), stored(second))
    found = np.array([np.median(pair.flow_px[b, cells(pair)[b], 0]) for b in range(grid.bands)])
    expected = np.interp(grid.height * 720 - 0.5, np.arange(720), wave)
    assert np.sum(found * expected) / np.sum(expected ** 2) == pytest.approx(1.0, abs=0.03)
    assert np.abs(found - expected).max() < 0.04


def test_the_same_picture_again():
    first = stored(moved("camera", 0, 0, 640, 360))
    pair, _ = motion_of(first, first.copy())
    assert pair.change_level == 0
    assert np.abs(pair.flow_px[cells(pair)]).max() < 1e-6
    assert not pair.frozen.any()  # nothing moved: nothing is frozen


def test_a_blank_picture_says_nothing():
    blank = np.full((360, 640), 90, np.uint8)
    pair, _ = motion_of(blank, blank.copy())
    assert not cells(pair).any()


def test_blocks_that_an_encoder_skipped_are_frozen():
    first, second = (stored(moved("gravel", shift, 0, 640, 360)) for shift in (0.0, 0.8))
    second[120:240, 160:480] = first[120:240, 160:480]
    pair, grid = motion_of(first, second)
    x, y = np.meshgrid(grid.x_px + 320, grid.y_px + 180)
    inside = (x > 185) & (x < 455) & (y > 130) & (y < 230)
    outside = (x < 135) | (x > 505) | (y < 110) | (y > 250)
    assert pair.frozen[inside].all() and not pair.frozen[outside].any()


def test_unrelated_pictures_give_no_figures_to_trust():
    """A cut: what little claims to be measured has little weight beside a true pair's."""
    true, _ = motion_of(*(stored(moved("gravel", shift, 0, 640, 360)) for shift in (0.0, 0.8)))
    cut, _ = motion_of(stored(moved("gravel", 0, 0, 640, 360)), stored(moved("grass", 0, 0, 640, 360)))
    assert cells(cut).mean() < 0.1
    assert cut.information.sum() < 0.01 * true.information.sum()


# --- noise -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "sigma"), [("gravel", 4.0), ("gravel", 8.0), ("grass", 4.0), ("camera", 4.0)])
def test_noise_adds_no_bias(name, sigma):
    """Robinson and Milanfar 2004: noise in the gradients draws such estimates to zero.

    Slope of measured on true motion, sub-pixel shifts, with noise against without: within 3 %; and without noise within
    3 % of one.
    """
    rng = np.random.default_rng(17)
    true = np.array([-0.45, -0.3, -0.15, 0.15, 0.3, 0.45])
    slopes = []
    for noise in (0.0, sigma):
        found = []
        for right in true:
            pair, _ = motion_of(*(stored(moved(name, shift, 0, 640, 360), rng, noise) for shift in (0.0, right)))
            weight = pair.information[..., 0]
            found.append(np.sum(weight * pair.flow_px[..., 0]) / weight.sum())
        slopes.append(true @ np.array(found) / (true @ true))
    assert slopes[0] == pytest.approx(1.0, abs=0.03)
    assert slopes[1] / slopes[0] == pytest.approx(1.0, abs=0.03)


@pytest.mark.parametrize(("name", "sigma"), [("gravel", 4.0), ("gravel", 8.0), ("grass", 4.0)])
def test_reported_variance_against_repeats_and_the_cramer_rao_bound(name, sigma):
    """Robinson and Milanfar 2004: no unbiased estimate of a shift between two pictures, each with noise s, has less
    variance than the inverse of sum(gradient gradient') / (2 s^2).

    The bound is worked out with the exact gradient (derivative of the Fourier series, numpy.fft) over each cell and the
    two pixels around it that the filters reach into. The empirical variance is that of 30 repeats.
    """
    width, height, reach, repeats = 640, 360, 2, 30
    rng = np.random.default_rng(23)
    wave = 2j * np.pi * np.fft.fftfreq(1024)
    gx, gy = (np.fft.ifft2(spectrum_of(name) * k).real[:height, :width] for k in (wave[None, :], wave[:, None]))
    first, second = (moved(name, right, down, width, height) for right, down in ((0, 0), (0.2, -0.1)))
    pairs = []
    for _ in range(repeats):
        noisy = [(p + sigma * rng.normal(size=p.shape)).astype(np.float32) for p in (first, second)]
        pair, grid = motion_of(*noisy)
        pairs.append(pair)
    bound = np.empty((grid.bands, grid.columns, 2))
    for b in range(grid.bands):
        for c in range(grid.columns):
            top, left = grid.top + b * grid.band_rows, grid.left + c * grid.column_width
            part = np.s_[top - reach:top + grid.band_rows + reach, left - reach:left + grid.column_width + reach]
            products = np.array([np.sum(gx[part] ** 2), np.sum(gx[part] * gy[part]), np.sum(gy[part] ** 2)])
            bound[b, c] = covariance(products / (2 * sigma ** 2))
    always = np.all([cells(p) for p in pairs], axis=0)
    assert always.mean() > 0.5
    reported = np.median([covariance(p.information[always]) for p in pairs], axis=0)
    empirical = np.var([p.flow_px[always] for p in pairs], axis=0, ddof=1)
    assert 0.25 < np.median(reported / empirical) < 4
    assert np.percentile(reported / empirical, 5) > 0.5  # hardly a cell claims to be much better than it is
    assert (reported > bound[always]).all()
    # 30 repeats scatter by a factor of 0.6 to 1.6 (chi-square); the mean over hundreds of cells does not
    assert np.mean(empirical / bound[always]) > 1


# --- real recordings -------------------------------------------------------------------------------------------------


@cache
def recording(name, count):
    """Luma planes of a real clip (PyAV), its cell motion and its whole-picture motion."""
    frames = []
    with av.open(str(real_clips()[name])) as container:
        for frame in container.decode(video=0):
            plane = np.frombuffer(frame.planes[0], np.uint8).reshape(frame.height, -1)
            frames.append(plane[:, :frame.width].copy())
            if len(frames) == count:
                break
    grid = make_grid(frames[0].shape[1], frames[0].shape[0])
    pairs = list(measure_motion(((n / 25, frame) for n, frame in enumerate(frames)), grid))
    return frames, grid, pairs


def registered(first, second, top, left, size):
    """Shift (right, down) of a square by scikit-image, pre-aligned by whole pixels, and its error; None off the edge.
    """
    taper = np.outer(np.hanning(size), np.hanning(size))
    moved_down = moved_right = 0
    for _ in range(3):
        y, x = top + moved_down, left + moved_right
        if y < 0 or x < 0 or y + size > first.shape[0] or x + size > first.shape[1]:
            return None
        a, b = first[top:top + size, left:left + size].astype(float), second[y:y + size, x:x + size].astype(float)
        shift, error, _ = phase_cross_correlation((a - a.mean()) * taper, (b - b.mean()) * taper, upsample_factor=50,
                                                  normalization=None)
        if np.abs(shift).max() <= 0.5:
            break
        moved_down, moved_right = moved_down - round(shift[0]), moved_right - round(shift[1])
    return np.array([moved_right - shift[1], moved_down - shift[0]]), error


def trusted_squares(first, second, size, spacing):
    """Squares that scikit-image registers forward and backward alike and with little left over: (top, left, shift)."""
    out = []
    for top in range(0, first.shape[0] - size + 1, spacing):
        for left in range(0, first.shape[1] - size + 1, spacing):
            if first[top:top + size, left:left + size].std() < 4:
                continue
            forth = registered(first, second, top, left, size)
            if forth is None or forth[1] > 0.15:
                continue
            back = registered(second, first, top, left, size)
            if back is not None and np.abs(forth[0] + back[0]).max() < 0.1:
                out.append((top, left, forth[0]))
    return out


@pytest.mark.parametrize(("name", "count", "size", "spacing", "every"), [
    ("bigbuckbunny", 100, 128, 200, 24),
    ("bikes", 140, 96, 96, 11),
    ("carphone_pristine", 90, 64, 48, 8),
    ("carphone_distorted", 90, 64, 48, 11),
])
def test_real_recordings_against_scikit_image(name, count, size, spacing, every):
    """Square by square, where the registration is trustworthy: median difference of the cells inside under 0.15 px."""
    frames, grid, pairs = recording(name, count)
    height, width = frames[0].shape
    x, y = grid.x_px + width / 2, grid.y_px + height / 2
    margin = size / 5  # the taper hides the square's edge from the registration
    difference = []
    for n in range(0, len(pairs), every):
        for top, left, shift in trusted_squares(frames[n], frames[n + 1], size, spacing):
            rows = (y > top + margin) & (y < top + size - margin)
            columns = (x > left + margin) & (x < left + size - margin)
            inside = np.outer(rows, columns) & cells(pairs[n])
            if inside.sum() >= 3:
                difference.append(np.hypot(*(np.median(pairs[n].flow_px[inside], axis=0) - shift)))
    assert len(difference) >= 15
    assert np.median(difference) < 0.15


@pytest.mark.parametrize(("name", "start", "judged", "size", "spacing"), [
    pytest.param("carphone_pristine", 0, range(0, 89, 4), 64, 56, id="carphone"),
    pytest.param("bikes", 45, range(70, 139, 4), 96, 88, id="bikes, second shot"),
    pytest.param("bikes", 0, range(70, 139, 4), 96, 88, id="bikes, across a cut"),
])
def test_whole_picture_motion_of_real_recordings(name, start, judged, size, spacing):
    """Frames whose trusted squares agree within 0.4 px move as one: the whole-picture motion is the squares' median."""
    frames, grid, pairs = recording(name, judged.stop + 1)
    signals = fit_block(pairs[start:], grid, focal_length_px(grid.width_px, 70.0))
    difference = []
    for n in judged:
        shifts = np.array([shift for _, _, shift in trusted_squares(frames[n], frames[n + 1], size, spacing)])
        if len(shifts) >= 4 and np.ptp(shifts, axis=0).max() < 0.4 and signals.measured[n - start] > 0.1:
            difference.append(np.hypot(*(signals.whole_px[n - start, :2] - np.median(shifts, axis=0))))
    assert len(difference) >= 3
    assert np.median(difference) < 0.15
