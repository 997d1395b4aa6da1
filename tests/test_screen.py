"""From spectrum to picture, checked against scipy, against Legendre projection by numpy, and by brute force."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.polynomial import legendre
from scipy.special import spherical_jn

from framegrade import screen

READOUT_S = 0.016
FREQUENCY_HZ = np.array([0.5, 3.0, 17.0, 44.4, 62.5, 90.0, 137.3, 250.0, 611.0])


@pytest.mark.parametrize("order", [0, 1, 2, 5, 9])
def test_legendre_share_is_the_spherical_bessel_function(order):
    # scipy.special.spherical_jn; (2 l + 1) j_l(q)^2 with q = pi f R (Rayleigh's expansion, DLMF 10.60.7)
    q = np.pi * FREQUENCY_HZ * READOUT_S
    expected = (2 * order + 1) * spherical_jn(order, q) ** 2
    np.testing.assert_allclose(screen.legendre_share(order, FREQUENCY_HZ, READOUT_S), expected, rtol=1e-12)


@pytest.mark.parametrize("frequency_hz", FREQUENCY_HZ)
def test_legendre_share_by_projection_of_the_rows(frequency_hz):
    """Rows of one frame of a sinusoid, projected on numpy.polynomial.legendre, averaged over phase.

    Gauss-Legendre quadrature of 120 nodes is exact for the products at hand; a sinusoid's phase average needs two
    phases a quarter turn apart.
    """
    node, weight = legendre.leggauss(120)  # x = 2 v - 1 over the picture height
    time = node / 2 * READOUT_S
    orders = 8
    power, total = np.zeros(orders), 0.0
    for phase in (0.4, 0.4 + np.pi / 2):
        rows = np.cos(2 * np.pi * frequency_hz * time + phase)
        total += np.sum(weight * rows ** 2) / 2
        for order in range(orders):
            polynomial = legendre.legval(node, np.eye(orders)[order])
            coefficient = np.sum(weight * rows * polynomial) * (2 * order + 1) / 2
            power[order] += coefficient ** 2 / (2 * order + 1)  # mean square of P_l over the rows is 1 / (2 l + 1)
    found = [float(screen.legendre_share(order, frequency_hz, READOUT_S)) for order in range(orders)]
    np.testing.assert_allclose(found, power / total, atol=1e-9)


@pytest.mark.parametrize("q", [0.0, 0.1, 1.0, 4.3, 12.0, 40.0])
def test_shares_sum_to_one(q):
    # DLMF 10.60.12 (Abramowitz and Stegun 10.1.50): sum over l of (2 l + 1) j_l(q)^2 = 1
    frequency = q / np.pi / READOUT_S
    total = sum(screen.legendre_share(order, frequency, READOUT_S) for order in range(int(q) + 40))
    assert total == pytest.approx(1.0, abs=1e-12)


def test_slow_motion_and_a_global_shutter_move_the_whole_picture():
    # DLMF 10.52.1: j_0(q) -> 1 - q^2 / 6 and j_1(q) -> q / 3 as q -> 0, so jello -> q^2 / 3, all of it lean
    q = 1e-3
    frequency = q / np.pi / READOUT_S
    assert screen.jello_share(frequency, READOUT_S) == pytest.approx(q ** 2 / 3, rel=1e-4)
    assert screen.legendre_share(1, frequency, READOUT_S) == pytest.approx(q ** 2 / 3, rel=1e-4)
    np.testing.assert_array_equal(screen.shake_share(FREQUENCY_HZ, 0.0), 1.0)
    np.testing.assert_array_equal(screen.jello_share(FREQUENCY_HZ, 0.0), 0.0)


def test_whole_cycles_a_frame_are_all_jello():
    # j_0(q) = sin(q) / q (DLMF 10.49.3) is zero at q = pi k: a whole number of cycles in the frame averages to nothing
    for cycles in (1, 2, 5):
        assert screen.shake_share(cycles / READOUT_S, READOUT_S) == pytest.approx(0.0, abs=1e-30)
        assert screen.jello_share(cycles / READOUT_S, READOUT_S) == pytest.approx(1.0, abs=1e-15)


def test_shake_share_is_the_mean_over_the_rows():
    """Brute force: the mean of 4000 rows, squared and averaged over 64 phases, over the sinusoid's power 1/2."""
    v = (np.arange(4000) + 0.5) / 4000 - 0.5
    phase = 2 * np.pi * np.arange(64) / 64
    for frequency in (11.0, 80.0, 137.3):
        rows = np.cos(2 * np.pi * frequency * v * READOUT_S + phase[:, None])
        shift = rows.mean(1)
        rest = rows - shift[:, None]
        assert screen.shake_share(frequency, READOUT_S) == pytest.approx(np.mean(shift ** 2) / 0.5, rel=1e-6)
        assert screen.jello_share(frequency, READOUT_S) == pytest.approx(np.mean(rest ** 2) / 0.5, rel=1e-6)


@pytest.mark.parametrize(
    ("frequency_hz", "exposure_s"), [(137.3, 0.004), (137.3, 0.016), (60.0, 1 / 60), (500.0, 0.0005)]
)
def test_exposure_by_averaging(frequency_hz, exposure_s):
    """Brute force: a complex sinusoid averaged over the exposure keeps |sinc(f e)| of its amplitude."""
    inside = ((np.arange(200_000) + 0.5) / 200_000 - 0.5) * exposure_s
    expected = abs(np.mean(np.exp(2j * np.pi * frequency_hz * inside)))
    assert screen.exposure_gain(frequency_hz, exposure_s) == pytest.approx(expected, abs=1e-8)


def test_short_exposure_bound():
    # Davis and others 2014, The Visual Microphone: an exposure of 1/2000 s limits recovery to about 2 kHz (first zero)
    assert screen.exposure_gain(2000.0, 1 / 2000) == pytest.approx(0.0, abs=1e-12)
    assert np.all(np.diff(screen.exposure_gain(np.linspace(0, 2000, 200), 1 / 2000)) < 0)


def test_vibration_smear_by_brute_force():
    """Change of position over the exposure, squared and averaged over the phase, for two vibrations at once."""
    exposure = 0.005
    frequency, amplitude = np.array([60.0, 137.3]), np.array([0.8, 0.5])
    t = np.linspace(0, 40, 1_000_001)
    start = np.array([[0.2], [1.7]])

    def position(time):
        return (amplitude[:, None] * np.cos(2 * np.pi * frequency[:, None] * time + start)).sum(0)

    expected = np.sqrt(np.mean((position(t + exposure) - position(t)) ** 2))
    assert screen.vibration_smear_px(frequency, amplitude ** 2 / 2, exposure) == pytest.approx(expected, rel=1e-4)


def test_smear_of_steady_motion():
    np.testing.assert_allclose(screen.smear_px(np.array([0.0, 500.0]), 0.004), [0.0, 2.0])


@pytest.mark.parametrize(("width", "height"), [(1280, 720), (1920, 1080), (640, 640)])
def test_axis_weights_by_the_mean_over_the_picture(width, height):
    """Brute force: mean square displacement of every pixel when a small roll moves the mid-edge by one pixel."""
    x = np.arange(width) + 0.5 - width / 2
    y = np.arange(height) + 0.5 - height / 2
    angle = 1 / (width / 2)
    square = np.mean((angle * y[:, None]) ** 2 + (angle * x[None, :]) ** 2)
    weights = screen.axis_weights(width, height)
    assert weights.shape == (3,)
    np.testing.assert_allclose(weights, [1.0, 1.0, square], rtol=1e-5)


def test_px1920():
    np.testing.assert_allclose(screen.to_px1920(np.array([1.0, 2.0]), 3840), [0.5, 1.0])
    assert screen.to_px1920(0.7, 1920) == pytest.approx(0.7)


def test_one_pixel_is_about_a_minute_of_arc_on_the_screen():
    # Rec. ITU-R BT.2022 / BT.500: 1920 x 1080 at about 3.1 picture heights. A camera whose field of view is what such a
    # viewer sees turns by 1/60 degree for one pixel.
    hfov = 2 * np.arctan(1920 / 2 / (3.1 * 1080))
    focal = 1920 / 2 / np.tan(hfov / 2)
    assert screen.px_to_mdeg(1.0, focal) == pytest.approx(1000 / 60, rel=0.05)


def test_px_to_mdeg_against_a_projected_rotation():
    """A pinhole camera turned by a known angle (rotation matrix) moves the centre by this many pixels."""
    focal, angle = 1142.7, np.radians(0.0375)
    turn = np.array([[np.cos(angle), 0, np.sin(angle)], [0, 1, 0], [-np.sin(angle), 0, np.cos(angle)]])
    seen = turn @ np.array([0.0, 0.0, 1.0])
    assert screen.px_to_mdeg(focal * seen[0] / seen[2], focal) == pytest.approx(37.5, rel=1e-12)


def test_roll_to_mdeg():
    # half the width is the lever arm: 0.1 degree about the centre of a 1920-wide picture moves the edge by 1.6755 px
    assert screen.roll_px_to_mdeg(960 * np.radians(0.1), 1920) == pytest.approx(100.0, rel=1e-12)


def test_unknown_stays_unknown():
    assert np.isnan(screen.px_to_mdeg(np.nan, 1000.0))
    assert np.isnan(screen.to_px1920(np.nan, 1920))
