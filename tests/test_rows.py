"""Band signals from exact pinhole projection (numpy), and the slow filter against a plain local polynomial fit."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from framegrade.motion import PairMotion, make_grid
from framegrade.rows import (
    band_mean, band_signals, cut, fit_block, focal_length_px, join, remove_slow, rotation_basis, slow_half_width,
    slow_part,
)

GRID = make_grid(1280, 720)
FOCAL_PX = 640 / np.tan(np.radians(80) / 2)  # 80 degrees: the wide lens of the design note
RATE_HZ = 60.0


# --- the camera ------------------------------------------------------------------------------------------------------


def turn(yaw, pitch, roll):
    """Rotation matrix: yaw moves the picture right, pitch down, roll clockwise (x right, y down, z forward)."""
    (sy, cy), (sp, cp), (sr, cr) = ((np.sin(a), np.cos(a)) for a in (yaw, pitch, roll))
    about_y = np.array([[cy, 0, sy], [0, 1, 0], [-sy, 0, cy]])
    about_x = np.array([[1, 0, 0], [0, cp, sp], [0, -sp, cp]])
    about_z = np.array([[cr, -sr, 0], [sr, cr, 0], [0, 0, 1]])
    return about_z @ about_x @ about_y


def projected_flow(angle_px, grid=GRID, focal=FOCAL_PX):
    """Exact displacement of every cell centre, each band turned by its own angles (pixels at centre or mid-edge)."""
    flow = np.empty((grid.bands, grid.columns, 2))
    for b, (yaw, pitch, roll) in enumerate(np.broadcast_to(angle_px, (grid.bands, 3))):
        ray = np.stack([grid.x_px, np.full(grid.columns, grid.y_px[b]), np.full(grid.columns, focal)])
        seen = turn(yaw / focal, pitch / focal, roll / (grid.width_px / 2)) @ ray
        flow[b] = (focal * seen[:2] / seen[2] - ray[:2]).T
    return flow


def pair(n, flow, grid=GRID, information=400.0):
    return PairMotion(
        time_s=n / RATE_HZ, next_time_s=(n + 1) / RATE_HZ, flow_px=flow.astype(np.float32),
        information=np.broadcast_to(np.array([information, 0, information], np.float32), flow.shape[:2] + (3,)).copy(),
        frozen=np.zeros(flow.shape[:2], bool), change_level=3.0, sharpness=1.0,
    )


def random_steps(pairs, seed=0, size_px=0.5, bands=GRID.bands):
    return size_px * np.random.default_rng(seed).normal(size=(pairs, bands, 3))


def noise(rng, sigma_px, grid=GRID):
    return sigma_px * rng.normal(size=(grid.bands, grid.columns, 2))


def pairs_of(steps, grid=GRID):
    return [pair(n, projected_flow(step, grid)) for n, step in enumerate(steps)]


def fast(steps):
    return remove_slow(steps, None, slow_half_width(1 / RATE_HZ))


def test_focal_length():
    # the pinhole camera: half the width is seen under half the field of view
    focal = focal_length_px(1280, 80.0)
    assert np.degrees(2 * np.arctan(640 / focal)) == pytest.approx(80.0, rel=1e-12)


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_rotation_basis_is_the_slope_of_the_projection(axis):
    """Central difference of the exact projection, at every cell, against Longuet-Higgins and Prazdny's terms."""
    step = np.zeros(3)
    step[axis] = 0.01
    slope = (projected_flow(step) - projected_flow(-step)) / 0.02
    np.testing.assert_allclose(rotation_basis(GRID, FOCAL_PX)[..., axis], slope, atol=1e-6)


def test_a_wide_lens_is_read_at_the_picture_centre():
    # design note: averaged over the width a wide lens would read 10 to 25 % high; here every cell's share is known
    steps = np.zeros((40, GRID.bands, 3))
    steps[:, :, 0] = 0.4 * (-1.0) ** np.arange(40)[:, None]
    flows = pairs_of(steps)
    plain = np.mean([np.abs(p.flow_px[..., 0]).mean() for p in flows])
    assert plain / 0.4 > 1.15
    found = fit_block(flows, GRID, FOCAL_PX).fast_px[..., 0]
    np.testing.assert_allclose(found, fast(steps)[..., 0], atol=1e-3)


def test_yaw_pitch_and_roll_of_every_band():
    """Every band turned by its own angles: the fit's error is that of independent least squares on the cells' noise."""
    rng = np.random.default_rng(12)
    steps, sigma = random_steps(60), 0.01
    flows = [pair(n, projected_flow(step) + noise(rng, sigma), information=sigma ** -2) for n, step in enumerate(steps)]
    signals = fit_block(flows, GRID, FOCAL_PX)
    assert signals.fast_px.shape == (60, GRID.bands, 3)
    error = signals.fast_px - fast(steps)
    # numpy's pseudo-inverse of the true projection's slope at each cell gives the covariance of least squares
    slope = np.stack([(projected_flow(d) - projected_flow(-d)) / 0.02 for d in 0.01 * np.eye(3)], -1)
    expected = np.array([np.diag(np.linalg.pinv(row.reshape(-1, 3).T @ row.reshape(-1, 3))) for row in slope]).mean(0)
    # the biweight keeps 95 % of the efficiency (Beaton and Tukey), the slow filter takes a few per cent of the noise
    np.testing.assert_allclose(np.sqrt((error ** 2).mean((0, 1))), sigma * np.sqrt(expected), rtol=0.12)
    assert np.abs(error.mean((0, 1))).max() < 5e-4
    np.testing.assert_allclose(signals.height, GRID.height)
    np.testing.assert_allclose(signals.time_s, np.arange(60) / RATE_HZ)
    assert (signals.measured > 0.97).all()


def test_whole_picture_motion_and_rise():
    """The same angles in every band: the whole picture's motion, slow part included, and how far content climbs."""
    rng = np.random.default_rng(5)
    n = np.arange(100)
    angle = np.stack([3 + 2 * np.sin(n / 25), 1.5 * np.cos(n / 17), 0.8 * np.sin(n / 11)], 1)
    angle += 0.2 * rng.normal(size=angle.shape)
    steps = np.broadcast_to(angle[:, None], (100, GRID.bands, 3))
    signals = fit_block(pairs_of(steps), GRID, FOCAL_PX)
    np.testing.assert_allclose(signals.whole_px, angle, atol=0.01)
    down = np.array([projected_flow(a)[..., 1].mean(1) for a in angle]) / GRID.height_px
    np.testing.assert_allclose(signals.rise, down, atol=2e-5)


@pytest.mark.parametrize(("width", "height"), [(1920, 1080), (640, 272), (176, 144)])
def test_other_picture_sizes(width, height):
    grid, focal = make_grid(width, height), width / 1.4
    rng = np.random.default_rng(3)
    steps = random_steps(20, seed=2, size_px=width / 6400, bands=grid.bands)
    flows = [pair(n, projected_flow(step, grid, focal) + noise(rng, 0.002, grid), grid, 2.5e5)
             for n, step in enumerate(steps)]
    found = fit_block(flows, grid, focal).fast_px
    np.testing.assert_allclose(found, fast(steps), atol=0.01)


# --- noise, gaps, moving objects -------------------------------------------------------------------------------------


def test_reported_variance_is_that_of_the_noise():
    """White noise on the cells of the size their information states: empirical variance over time against the report.

    Half a window of a local quadratic costs a few per cent of the degrees of freedom, so 15 % is the tolerance.
    """
    rng = np.random.default_rng(8)
    sigma = 0.05
    flows = [pair(n, noise(rng, sigma), information=sigma ** -2) for n in range(140)]
    signals = fit_block(flows, GRID, FOCAL_PX)
    empirical = signals.fast_px.var(axis=(0, 1))
    np.testing.assert_allclose(np.median(signals.variance_px2, axis=(0, 1)), empirical, rtol=0.15)


def scattered(n):
    return np.random.default_rng(0).uniform(size=(GRID.bands, GRID.columns)) < 0.2


def columns(first):
    mask = np.zeros((GRID.bands, GRID.columns), bool)
    mask[:, first:first + 3] = True
    return mask


@pytest.mark.parametrize(("place", "steady"), [
    pytest.param(scattered, False, id="scattered"),
    pytest.param(lambda n: columns(6), False, id="middle"),
    pytest.param(lambda n: columns(2), True, id="steady"),
    pytest.param(lambda n: columns((n // 30 * 3) % (GRID.columns - 3)), True, id="driving across"),
    pytest.param(lambda n: columns(0), False, id="edge"),
    pytest.param(lambda n: columns((n // 10) % (GRID.columns - 3)), False, id="across unsteadily"),
])
def test_moving_objects_over_a_fifth_of_the_cells(place, steady):
    """A fifth of the cells (three of sixteen columns, or scattered ones) moves on its own by up to 2.7 px a frame.

    The change of the band signals is compared with the same clip without the objects: rms over pairs and bands.
    """
    rng = np.random.default_rng(1)
    sigma = 0.02
    still, crossed = [], []
    for n, step in enumerate(random_steps(60, seed=3, size_px=0.3)):
        flow = projected_flow(step) + noise(rng, sigma)
        still.append(pair(n, flow, information=sigma ** -2))
        across = 2.0 if steady else 1.5 + 1.2 * np.sin(0.9 * n + np.arange(GRID.bands)[:, None] / 4)
        down = 0.0 if steady else 0.7 * np.cos(1.1 * n)
        own = np.stack(np.broadcast_arrays(across, np.full((GRID.bands, GRID.columns), down)), -1)
        crossed.append(pair(n, flow + own * place(n)[..., None], information=sigma ** -2))
    plain, disturbed = (fit_block(flows, GRID, FOCAL_PX) for flows in (still, crossed))
    assert np.isfinite(disturbed.fast_px).mean() > 0.99
    change = np.sqrt(np.nanmean((disturbed.fast_px - plain.fast_px) ** 2, axis=(0, 1)))
    assert (change < 0.02).all(), change


def test_cells_without_texture_do_not_count():
    """Sky: the upper third says nothing; those bands are unknown (not zero) and the others keep their values."""
    steps = random_steps(40, seed=6)
    sky = GRID.bands // 3
    rng, flows = np.random.default_rng(6), []
    for p in pairs_of(steps):
        p = replace(p, flow_px=p.flow_px + 0.002 * rng.normal(size=p.flow_px.shape).astype(np.float32))
        information, flow = p.information.copy(), p.flow_px.copy()
        information[:sky], flow[:sky] = 0, 0
        flows.append(replace(p, information=information, flow_px=flow))
    signals = fit_block(flows, GRID, FOCAL_PX)
    assert np.isnan(signals.fast_px[:, :sky]).all() and np.isinf(signals.variance_px2[:, :sky]).all()
    np.testing.assert_allclose(signals.fast_px[:, sky:], fast(steps)[:, sky:], atol=0.01)
    assert signals.measured == pytest.approx(1 - sky / GRID.bands, abs=0.02)


def test_frozen_cells_do_not_count():
    """Skipped blocks of the encoder: a quarter of the cells claims not to have moved."""
    steps = random_steps(60, seed=7)
    rng = np.random.default_rng(2)
    flows = []
    for p in pairs_of(steps):
        frozen = rng.uniform(size=p.frozen.shape) < 0.25
        flow = np.where(frozen[..., None], 0, p.flow_px)
        flows.append(replace(p, frozen=frozen, flow_px=flow))
    signals = fit_block(flows, GRID, FOCAL_PX)
    known = np.isfinite(signals.fast_px)
    assert known.mean() > 0.9
    error = np.abs(signals.fast_px - fast(steps))[known]
    # a cell's own gaps make its slow part differ from that of the whole band: a small share of the 0.5 px of motion
    assert np.sqrt(np.mean(error ** 2)) < 0.05
    assert signals.frozen == pytest.approx(0.25, abs=0.1)


def test_parallax_that_is_smooth_in_time_is_no_vibration():
    """Forward flight: every cell has its own flow, growing towards the bottom and the sides and changing slowly."""
    steps = random_steps(120, seed=9, size_px=0.3)
    x, y = np.meshgrid(GRID.x_px / 640, GRID.y_px / 360)
    flows = []
    for n, step in enumerate(steps):
        depth = (3.0 + 0.5 * np.sin(2 * np.pi * 0.2 * n / RATE_HZ)) * (1 + y)
        flows.append(pair(n, projected_flow(step) + np.stack([depth * x, depth * (0.4 + 0.5 * y)], -1)))
    found = fit_block(flows, GRID, FOCAL_PX).fast_px
    inner = slice(24, -24)
    assert np.sqrt(np.nanmean((found - fast(steps))[inner] ** 2)) < 0.005


@pytest.mark.parametrize("share", [
    pytest.param(0.7, id="mostly there"),
    pytest.param(0.1, id="mostly not"),
])
def test_cells_that_come_and_go_still_tell_the_pan(share):
    """A pan of 3 px a frame over sparse scenery: each cell is measured in runs of ten pairs, at `share` of the time."""
    rng = np.random.default_rng(15)
    there = np.repeat(rng.uniform(size=(10, GRID.bands, GRID.columns)) < share, 10, axis=0)
    flows = []
    for n in range(100):
        p = pair(n, projected_flow([3.0, 0.5, 0.0]) + noise(rng, 0.01), information=1e4)
        mask = there[n][..., None]
        flows.append(replace(p, information=p.information * mask, flow_px=p.flow_px * mask))
    signals = fit_block(flows, GRID, FOCAL_PX)
    assert np.abs(signals.whole_px - [3.0, 0.5, 0.0]).max() < 0.1


# --- blocks ----------------------------------------------------------------------------------------------------------


def test_seams_of_blocks_do_not_show():
    """Blocks of 64 pairs against one block for the whole clip of 420."""
    grid = make_grid(640, 360, bands=10, columns=8)
    rng = np.random.default_rng(14)
    n = np.arange(420)
    slow = np.stack([4 * np.sin(n / 40), 2 * np.cos(n / 31), np.sin(n / 23)], 1)
    steps = random_steps(420, seed=4, size_px=0.3, bands=grid.bands) + slow[:, None]
    flows = [pair(n, projected_flow(step, grid) + noise(rng, 0.01, grid), grid, 1e4)
             for n, step in enumerate(steps)]
    whole = fit_block(flows, grid, FOCAL_PX)
    blocks = band_signals(iter(flows), grid, FOCAL_PX, block=64)
    assert blocks.pairs == whole.pairs == 420
    np.testing.assert_array_equal(blocks.time_s, whole.time_s)
    np.testing.assert_allclose(blocks.fast_px, whole.fast_px, atol=1e-3)
    np.testing.assert_allclose(blocks.whole_px, whole.whole_px, atol=1e-3)
    np.testing.assert_allclose(blocks.rise, whole.rise, atol=1e-5)


@pytest.mark.parametrize("count", [1, 2, 5, 63, 64, 65])
def test_short_clips_lose_no_pair(count):
    grid = make_grid(320, 180)
    flows = pairs_of(random_steps(count, seed=count, size_px=0.1, bands=grid.bands), grid)
    signals = band_signals(flows, grid, FOCAL_PX, block=64)
    np.testing.assert_array_equal(signals.time_s, [p.time_s for p in flows])


def test_a_clip_of_one_frame_has_no_pair():
    with pytest.raises(ValueError, match="no pair"):
        band_signals([], GRID, FOCAL_PX)


def test_cut_and_join():
    signals = fit_block(pairs_of(random_steps(12)), GRID, FOCAL_PX)
    again = join([cut(signals, 0, 5), cut(signals, 5, 12)])
    for name in ("time_s", "next_time_s", "fast_px", "variance_px2", "whole_px", "rise", "measured", "frozen"):
        np.testing.assert_array_equal(getattr(again, name), getattr(signals, name))


def test_band_mean():
    values = np.array([[[1.0], [3.0], [np.nan]], [[np.nan], [np.nan], [np.nan]]])
    np.testing.assert_array_equal(band_mean(values), [[2.0], [np.nan]])


# --- the slow filter -------------------------------------------------------------------------------------------------


def local_quadratic(values, valid, half_width):
    """Independent: numpy.polyfit of degree 2 around every sample; Hann weights that end one sample beyond the window.
    """
    count = len(values)
    window = np.hanning(2 * half_width + 3)[1:-1]
    out = np.empty(count)
    for n in range(count):
        taps = np.arange(max(0, n - half_width), min(count, n + half_width + 1))
        taps = taps[valid[taps]]
        weight = window[taps - n + half_width]
        out[n] = np.polyfit(taps - n, values[taps], 2, w=np.sqrt(weight))[-1]
    return out


@pytest.mark.parametrize("half_width", [2, 6, 24])
def test_slow_part_is_a_local_polynomial_fit(half_width):
    rng = np.random.default_rng(half_width)
    values = np.cumsum(rng.normal(size=150))
    valid = np.ones(150, bool)
    expected = local_quadratic(values, valid, half_width)
    np.testing.assert_allclose(slow_part(values, None, half_width), expected, atol=1e-8)  # ends included
    np.testing.assert_allclose(slow_part(values, valid, half_width), expected, atol=1e-8)
    np.testing.assert_allclose(remove_slow(values, None, half_width), values - expected, atol=1e-8)


def test_slow_part_with_gaps_and_ends():
    rng = np.random.default_rng(3)
    values = np.cumsum(rng.normal(size=200))
    valid = rng.uniform(size=200) > 0.2
    valid[90:104] = False  # a gap shorter than the window is bridged
    valid[:5] = valid[-3:] = False
    garbage = np.where(valid, values, np.nan)
    np.testing.assert_allclose(slow_part(garbage, valid, 24), local_quadratic(values, valid, 24), atol=1e-7)


def test_slow_part_of_several_series_and_complex_ones():
    rng = np.random.default_rng(11)
    values = rng.normal(size=(80, 3, 2)) + 1j * rng.normal(size=(80, 3, 2))
    together = slow_part(values, None, 10)
    one = slow_part(values[:, 1, 0].real, None, 10) + 1j * slow_part(values[:, 1, 0].imag, None, 10)
    np.testing.assert_allclose(together[:, 1, 0], one, atol=1e-12)


def test_a_quadratic_is_slow_to_the_very_ends():
    n = np.arange(100.0)
    np.testing.assert_allclose(remove_slow(3 - 0.7 * n + 0.02 * n ** 2, None, 24), 0, atol=1e-7)


def test_the_filter_parts_travel_from_shake():
    """What the docstring promises: below about 2 Hz is slow, 3 Hz and up stays. Brute force on sines, mid-record."""
    half = slow_half_width(1 / RATE_HZ)
    time = np.arange(1200) / RATE_HZ

    def kept(frequency_hz):
        return np.abs(remove_slow(np.exp(2j * np.pi * frequency_hz * time), None, half))[300:900].mean()

    assert kept(0.5) < 0.02 and kept(1.0) < 0.2
    assert all(0.95 < kept(f) < 1.15 for f in (5.0, 8.0, 15.0, 29.0))
