"""The arithmetic of soft mounts and of balancing: what a spring passes on, and how much unbalance a rotor may keep.

Sources
-------
Harris' Shock and Vibration Handbook, ch. 30 (theory of vibration isolation); Ogata, System Dynamics, eq. 9-14: the
single-degree-of-freedom isolator with viscous damping.
ISO 2017-1 and the ASHRAE handbook (Applications): natural frequency from static deflection.
ISO 21940-11 (formerly ISO 1940-1): permissible residual unbalance of rigid rotors.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.constants import g as STANDARD_GRAVITY_MPS2

#: Frequency ratio above which an isolator isolates, and below which it amplifies, whatever its damping.
CROSSOVER_RATIO = math.sqrt(2.0)
RPM_PER_HZ = 60.0


def _positive(**values: float) -> None:
    for name, value in values.items():
        if not (np.all(np.isfinite(value)) and np.all(np.asarray(value) > 0)):
            raise ValueError(f"{name} must be above 0, not {value}")


def natural_frequency_from_sag(sag_mm: float) -> float:
    """Natural frequency of a load on springs from how far the springs give under its weight.

    `f = sqrt(g / sag) / (2 pi)`, which is `15.76 / sqrt(sag in mm)` hertz (ASHRAE handbook, Applications; ISO 2017-1).
    It holds for springs whose stiffness does not depend on load or frequency; rubber is stiffer when it vibrates than
    under a dead weight, so that its true natural frequency is higher.

    Parameters
    ----------
    sag_mm : float or ndarray
        Static deflection under the load, millimetres.

    Returns
    -------
    float or ndarray
        Hertz.

    Raises
    ------
    ValueError
        Unless the sag is above 0.
    """
    _positive(sag_mm=sag_mm)
    return np.sqrt(STANDARD_GRAVITY_MPS2 / (sag_mm * 1e-3)) / (2 * np.pi)


def sag_from_natural_frequency(frequency_hz: float) -> float:
    """Static deflection in millimetres that a natural frequency needs: the inverse of `natural_frequency_from_sag`.

    Parameters
    ----------
    frequency_hz : float or ndarray

    Returns
    -------
    float or ndarray
        Millimetres.

    Raises
    ------
    ValueError
        Unless the frequency is above 0.
    """
    _positive(frequency_hz=frequency_hz)
    return 1e3 * STANDARD_GRAVITY_MPS2 / (2 * np.pi * frequency_hz) ** 2


def natural_frequency_from_stiffness(stiffness_n_per_m: float, mass_kg: float) -> float:
    """Undamped natural frequency of a mass on springs, `sqrt(k / m) / (2 pi)` (Harris, ch. 30).

    Parameters
    ----------
    stiffness_n_per_m : float or ndarray
        Of all springs together, in the direction that counts.
    mass_kg : float or ndarray
        What hangs on them.

    Returns
    -------
    float or ndarray
        Hertz.

    Raises
    ------
    ValueError
        Unless both are above 0.
    """
    _positive(stiffness_n_per_m=stiffness_n_per_m, mass_kg=mass_kg)
    return np.sqrt(stiffness_n_per_m / mass_kg) / (2 * np.pi)


def transmissibility(frequency_hz, natural_frequency_hz: float, damping_ratio: float):
    """Share of a vibration that an isolator passes on: amplitude of the load over amplitude of the base.

    `T = sqrt((1 + (2 z r)^2) / ((1 - r^2)^2 + (2 z r)^2))` with `r = f / fn` (Harris, ch. 30; Ogata, eq. 9-14). Above
    `r = sqrt 2` it isolates (T < 1), below it amplifies, and at `sqrt 2` it passes on what comes in, for every damping.

    Parameters
    ----------
    frequency_hz : array_like
        At least 0.
    natural_frequency_hz : float
        Undamped.
    damping_ratio : float
        z, at least 0; 1 is critical.

    Returns
    -------
    float or ndarray of the shape of `frequency_hz`
        Infinite at resonance without damping.

    Raises
    ------
    ValueError
        For a natural frequency that is not above 0, a negative damping or a negative frequency.
    """
    _positive(natural_frequency_hz=natural_frequency_hz)
    ratio = np.asarray(frequency_hz, float) / natural_frequency_hz
    if not damping_ratio >= 0 or not np.all(ratio >= 0):
        raise ValueError(f"frequency_hz and damping_ratio must be at least 0, not {frequency_hz} and {damping_ratio}")
    damper = (2 * damping_ratio * ratio) ** 2
    with np.errstate(divide="ignore"):
        return np.sqrt((1 + damper) / ((1 - ratio ** 2) ** 2 + damper))[()]


def crossover_frequency(natural_frequency_hz: float) -> float:
    """Frequency above which an isolator isolates: `sqrt 2` times its natural frequency, whatever its damping.

    Parameters
    ----------
    natural_frequency_hz : float or ndarray

    Returns
    -------
    float or ndarray
        Hertz.
    """
    _positive(natural_frequency_hz=natural_frequency_hz)
    return CROSSOVER_RATIO * natural_frequency_hz


def peak_frequency(natural_frequency_hz: float, damping_ratio: float) -> float:
    """Frequency at which an isolator passes on most.

    Parameters
    ----------
    natural_frequency_hz : float
    damping_ratio : float
        At least 0.

    Returns
    -------
    float
        Hertz; a little below the natural frequency.

    Notes
    -----
    The zero of the derivative of T with respect to r: `r^2 = (sqrt(1 + 8 z^2) - 1) / (4 z^2)`, here in a form that
    holds for z = 0 too.
    """
    _positive(natural_frequency_hz=natural_frequency_hz)
    return natural_frequency_hz * math.sqrt(2 / (math.sqrt(1 + 8 * damping_ratio ** 2) + 1))


def isolation_db(transmitted):
    """Isolation in decibels, `-20 lg T`; negative where the isolator amplifies.

    Parameters
    ----------
    transmitted : array_like
        Transmissibility.

    Returns
    -------
    float or ndarray
    """
    with np.errstate(divide="ignore"):
        return (-20 * np.log10(np.asarray(transmitted, float)))[()]


def permissible_eccentricity_mm(balance_grade_mm_per_s: float, speed_rpm: float) -> float:
    """How far a rotor's centre of mass may lie off its axis, `e = G / omega` (ISO 21940-11).

    Parameters
    ----------
    balance_grade_mm_per_s : float
        Balance quality grade G: 6.3 for fans and general machinery.
    speed_rpm : float
        Highest service speed.

    Returns
    -------
    float
        Millimetres, which is also g mm per gram of rotor.

    Raises
    ------
    ValueError
        Unless both are above 0.
    """
    _positive(balance_grade_mm_per_s=balance_grade_mm_per_s, speed_rpm=speed_rpm)
    return balance_grade_mm_per_s / (2 * np.pi * speed_rpm / RPM_PER_HZ)


def permissible_unbalance_g_mm(balance_grade_mm_per_s: float, mass_kg: float, speed_rpm: float) -> float:
    """Permissible residual unbalance of a rotor, `U = 9549 G M / n` (ISO 21940-11); 9549 is `60 000 / (2 pi)`.

    Parameters
    ----------
    balance_grade_mm_per_s : float
        Balance quality grade G.
    mass_kg : float
        Rotor mass M.
    speed_rpm : float
        Highest service speed n.

    Returns
    -------
    float
        Gram millimetres.

    Raises
    ------
    ValueError
        Unless all are above 0.
    """
    _positive(mass_kg=mass_kg)
    return 1e3 * mass_kg * permissible_eccentricity_mm(balance_grade_mm_per_s, speed_rpm)
