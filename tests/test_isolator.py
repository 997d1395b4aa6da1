"""Isolators and balancing against handbook values, worked examples and an independent solution of the motion."""

import math

import numpy as np
import pytest
from scipy.signal import TransferFunction, freqresp

from framegrade import isolator
from framegrade.simulate import transmissibility as simulated_transfer


def test_sag_example():
    """ASHRAE handbook (Applications) and ISO 2017-1, isolator selection: 25.0 mm of sag gives 3.15 Hz."""
    assert isolator.natural_frequency_from_sag(25.0) == pytest.approx(3.15, abs=0.005)


def test_sag_constant():
    """The rule of those handbooks, `15.76 / sqrt(mm)`: four figures, over the range of real mounts."""
    sag = np.array([0.1, 1.0, 4.0, 25.0, 100.0])
    assert isolator.natural_frequency_from_sag(sag) * np.sqrt(sag) == pytest.approx(15.76, abs=0.005)


def test_sag_is_weight_over_stiffness():
    """Hooke: k x sag = m g, so both ways to the natural frequency agree; standard gravity of CGPM 1901."""
    mass, sag = 0.120, 0.9
    stiffness = mass * 9.80665 / (sag * 1e-3)
    assert isolator.natural_frequency_from_stiffness(stiffness, mass) == pytest.approx(
        isolator.natural_frequency_from_sag(sag), rel=1e-9)


def test_stiffness_of_one_hertz():
    """A mass of 1 kg on (2 pi)^2 N/m swings once a second (definition, Harris ch. 30)."""
    assert isolator.natural_frequency_from_stiffness((2 * math.pi) ** 2, 1.0) == pytest.approx(1.0, rel=1e-12)


@pytest.mark.parametrize("frequency", [0.5, 3.15, 40.0])
def test_sag_inverse(frequency):
    sag = isolator.sag_from_natural_frequency(frequency)
    assert isolator.natural_frequency_from_sag(sag) == pytest.approx(frequency, rel=1e-12)


def test_transmissibility_example():
    """Isolator selection example (ASHRAE Applications, ISO 2017-1): 25.0 mm, 25 Hz, z = 0.05: r = 7.93, T = 0.0206."""
    natural = isolator.natural_frequency_from_sag(25.0)
    assert 25.0 / natural == pytest.approx(7.93, abs=0.005)
    assert isolator.transmissibility(25.0, natural, 0.05) == pytest.approx(0.0206, abs=0.00005)


@pytest.mark.parametrize("damping", [0.0, 0.05, 0.2, 0.5, 1.0, 3.0])
def test_crossover(damping):
    """Harris, ch. 30: T = 1 at r = sqrt 2 for every damping; more below, less above."""
    at = isolator.crossover_frequency(10.0)
    assert at == pytest.approx(14.1421356)
    assert isolator.transmissibility(at, 10.0, damping) == pytest.approx(1.0, abs=1e-12)
    assert isolator.transmissibility(0.95 * at, 10.0, damping) > 1 > isolator.transmissibility(1.05 * at, 10.0, damping)


@pytest.mark.parametrize("damping", [0.02, 0.1, 0.7])
def test_transmissibility_against_transfer_function(damping):
    """Ogata, System Dynamics, eq. 9-14 is |(c s + k) / (m s^2 + c s + k)| on the imaginary axis: here by scipy."""
    mass, natural = 0.3, 17.0
    stiffness = mass * (2 * math.pi * natural) ** 2
    damper = 2 * damping * math.sqrt(stiffness * mass)
    frequency = np.linspace(1, 200, 300)
    _, response = freqresp(TransferFunction([damper, stiffness], [mass, damper, stiffness]), 2 * np.pi * frequency)
    assert isolator.transmissibility(frequency, natural, damping) == pytest.approx(np.abs(response), rel=1e-9)


def test_transmissibility_against_simulator():
    """Second opinion: the simulator's own complex transfer, which shares no code."""
    frequency = np.linspace(0, 300, 500)
    assert isolator.transmissibility(frequency, 12.0, 0.15) == pytest.approx(
        np.abs(simulated_transfer(frequency, 12.0, 0.15)), rel=1e-12)


def test_undamped_resonance_is_infinite():
    assert isolator.transmissibility(10.0, 10.0, 0.0) == math.inf


@pytest.mark.parametrize("damping", [0.0, 0.03, 0.1, 0.4])
def test_peak_frequency(damping):
    """The peak is where a fine search finds the largest T."""
    frequency = np.linspace(5.0, 11.0, 60001)
    found = frequency[np.argmax(isolator.transmissibility(frequency, 10.0, damping))]
    assert isolator.peak_frequency(10.0, damping) == pytest.approx(found, abs=2e-4)


def test_isolation_db():
    """A tenth passed on is 20 dB (definition of the decibel, IEC 60027-3); twice is -6.02 dB."""
    assert isolator.isolation_db(0.1) == pytest.approx(20.0)
    assert isolator.isolation_db(2.0) == pytest.approx(-6.0206, abs=1e-4)


def test_permissible_unbalance_example():
    """ISO 21940-11 (formerly ISO 1940-1), worked example of a catalogue: G 6.3, 2 kg, 10 000 rpm: 12 g mm."""
    assert isolator.permissible_unbalance_g_mm(6.3, 2.0, 10_000) == pytest.approx(12.0, abs=0.05)
    assert isolator.permissible_unbalance_g_mm(6.3, 2.0, 10_000) == pytest.approx(9549 * 6.3 * 2.0 / 10_000, rel=5e-5)


def test_permissible_eccentricity():
    """ISO 21940-11, e = G / omega: 6.3 mm/s at 3000 rpm is 20 um, as its chart reads (chart value from memory)."""
    assert 1e3 * isolator.permissible_eccentricity_mm(6.3, 3000) == pytest.approx(20.0, abs=0.1)


@pytest.mark.parametrize("call", [
    lambda: isolator.natural_frequency_from_sag(0.0),
    lambda: isolator.natural_frequency_from_sag(-1.0),
    lambda: isolator.natural_frequency_from_stiffness(100.0, 0.0),
    lambda: isolator.natural_frequency_from_stiffness(float("nan"), 1.0),
    lambda: isolator.transmissibility(10.0, 0.0, 0.1),
    lambda: isolator.transmissibility(10.0, 10.0, -0.1),
    lambda: isolator.transmissibility(-10.0, 10.0, 0.1),
    lambda: isolator.permissible_unbalance_g_mm(6.3, 1.0, 0.0),
    lambda: isolator.permissible_unbalance_g_mm(6.3, -1.0, 1000.0),
])
def test_nonsense_is_refused(call):
    with pytest.raises(ValueError, match="must be"):
        call()
