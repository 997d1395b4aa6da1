"""From spectrum to picture: what a vibration of the camera shows on the screen, in any mode.

With q = pi f R (f the frequency, R the readout time) a sinusoid's energy inside one frame splits over Legendre terms as
`(2 l + 1) j_l(q)^2`, which sums to 1 (Rayleigh's expansion of a plane wave; DLMF 10.60.7 with 10.60.12; Abramowitz and
Stegun 10.1.47). l = 0 is the whole-picture shift, *shake*; the rest is *jello*; l = 1 is the lean of verticals.
"""

from __future__ import annotations

import numpy as np
from scipy.special import spherical_jn

REFERENCE_WIDTH_PX = 1920


def legendre_share(order: int, frequency_hz: np.ndarray, readout_s: float) -> np.ndarray:
    """Share of a vibration's power in Legendre term `order` of the rows of one frame: `(2 l + 1) j_l(pi f R)^2`.

    Parameters
    ----------
    order : int
        l, 0 for the whole picture.
    frequency_hz : array_like
        Vibration frequency.
    readout_s : float
        First to last row; 0 for a global shutter.

    Returns
    -------
    ndarray
        Between 0 and 1, shape of `frequency_hz`. DLMF 10.60.
    """
    q = np.pi * np.asarray(frequency_hz, float) * readout_s
    return (2 * order + 1) * spherical_jn(order, q) ** 2


def shake_share(frequency_hz: np.ndarray, readout_s: float) -> np.ndarray:
    """Share of a vibration's power that moves the whole picture: `j_0(q)^2`."""
    return legendre_share(0, frequency_hz, readout_s)


def jello_share(frequency_hz: np.ndarray, readout_s: float) -> np.ndarray:
    """Share of a vibration's power that displaces rows against each other: `1 - j_0(q)^2`."""
    return 1.0 - shake_share(frequency_hz, readout_s)


def exposure_gain(frequency_hz: np.ndarray, exposure_s: float) -> np.ndarray:
    """Share of a vibration's *amplitude* that survives averaging over the exposure: `|sinc(f e)|`."""
    return np.abs(np.sinc(np.asarray(frequency_hz, float) * exposure_s))


def smear_px(speed_px_per_s: np.ndarray, exposure_s: float) -> np.ndarray:
    """Blur length of steady motion: speed times exposure time."""
    return np.asarray(speed_px_per_s) * exposure_s


def vibration_smear_px(frequency_hz: np.ndarray, power_px2: np.ndarray, exposure_s: float) -> float:
    """Root-mean-square travel of the picture during the exposure, from the power of its vibration.

    The change of a sinusoid of power P over a time e has mean square `4 P sin(pi f e)^2`; `power_px2` is the *physical*
    power (before averaging over the exposure).
    """
    change = 4 * np.asarray(power_px2) * np.sin(np.pi * np.asarray(frequency_hz) * exposure_s) ** 2
    return float(np.sqrt(np.nansum(change)))


#: Weight of each axis' power in a picture-wide mean square displacement: roll is stated at mid-edge, half a width from
#: the centre, and turns the picture about it.
def axis_weights(width_px: int, height_px: int) -> np.ndarray:
    """Mean square displacement over the picture for unit power of yaw, pitch and roll; shape (3,).

    A roll that moves the middle of the edge by 1 moves a point at radius r by r / (W / 2); the mean of r^2 over the
    picture is (W^2 + H^2) / 12.
    """
    roll = (width_px ** 2 + height_px ** 2) / 12 / (width_px / 2) ** 2
    return np.array([1.0, 1.0, roll])


def to_px1920(px: np.ndarray, width_px: int) -> np.ndarray:
    """Native pixels to pixels of a 1920-wide picture."""
    return np.asarray(px) * (REFERENCE_WIDTH_PX / width_px)


def px_to_mdeg(px: float, focal_px: float) -> float:
    """Pixels at the picture centre to millidegrees of camera rotation, `1000 atan(px / F)` for a small shift."""
    return float(np.degrees(np.arctan2(px, focal_px)) * 1000)


def roll_px_to_mdeg(px: float, width_px: int) -> float:
    """Roll displacement at mid-edge to millidegrees: the lever arm is half the picture's width."""
    return float(np.degrees(px / (width_px / 2)) * 1000)
