"""Where the camera is and where it looks at any instant: the truth behind the pictures.

Conventions. The camera frame is X right, Y down, Z forward. Angles are small, additive and moved by content:

* yaw > 0 moves the picture's content right by `F yaw` pixels,
* pitch > 0 moves it down by `F pitch`,
* roll > 0 turns it clockwise, so a point at x from the centre moves down by `roll x`.

The world frame (heading 0) is X right, Y down, Z forward, with the ground at Y = 0.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass

import numpy as np

from .recipe import AXES, Camera, Flight, Pan, Tone

# One number a kind of entry, so that adding a sway does not change the phases of the tones.
_STREAM = {"sway": 1, "drift": 2, "tone": 3, "motors": 4, "broadband": 5, "cadence": 6, "noise": 7, "scene": 8}
_WANDER_LINES = 64
_BLOCK_VALUES = 1 << 16


def generator(flight: Flight, stream: str, index: int = 0) -> np.random.Generator:
    """Random numbers of one entry of the recipe, independent of all other entries."""
    return np.random.default_rng([flight.seed, _STREAM[stream], index])


def transmissibility(frequency_hz, natural_frequency_hz: float, damping_ratio: float) -> np.ndarray:
    """Complex motion transfer of a damped spring-mass isolator.

    `H = (1 + 2 i z r) / (1 - r^2 + 2 i z r)`, r the ratio of the frequency to the natural frequency; its magnitude is
    the transmissibility of Harris' Shock and Vibration Handbook, ch. 30, and Ogata, System Dynamics, eq. 9-14.

    Parameters
    ----------
    frequency_hz : array_like
        Frequencies in hertz.
    natural_frequency_hz : float
        Undamped natural frequency.
    damping_ratio : float
        Damping ratio z.

    Returns
    -------
    ndarray, complex, of the shape of `frequency_hz`
    """
    ratio = np.asarray(frequency_hz, dtype=float) / natural_frequency_hz
    damper = 2j * damping_ratio * ratio
    return (1 + damper) / (1 - ratio**2 + damper)


def exposure_factor(frequency_hz, exposure_s: float) -> np.ndarray:
    """Share of a sinusoid's amplitude left after averaging over the exposure, `|sinc(f x exposure)|`.

    Parameters
    ----------
    frequency_hz : array_like
        Frequencies in hertz.
    exposure_s : float
        Exposure time in seconds.

    Returns
    -------
    ndarray of the shape of `frequency_hz`
    """
    return np.abs(np.sinc(np.asarray(frequency_hz, dtype=float) * exposure_s))


@dataclass(frozen=True)
class Wander:
    """Slow relative frequency wander as a sum of sinusoids: `w(t) = sum a sin(2 pi rate t + phase)`."""

    amplitude: float
    rate_hz: np.ndarray
    phase_rad: np.ndarray

    def relative(self, time_s: np.ndarray) -> np.ndarray:
        """w(t), shape of `time_s`."""
        angle = 2 * np.pi * self.rate_hz * time_s[..., None] + self.phase_rad
        return self.amplitude * np.sin(angle).sum(axis=-1)

    def delay(self, time_s: np.ndarray) -> np.ndarray:
        """Integral of w from 0 to t in seconds, shape of `time_s`."""
        angle = 2 * np.pi * self.rate_hz * time_s[..., None] + self.phase_rad
        return self.amplitude * ((np.cos(self.phase_rad) - np.cos(angle)) / (2 * np.pi * self.rate_hz)).sum(axis=-1)


@dataclass(frozen=True)
class SeenTone:
    """One tone as the camera (after the isolator) turns: `amplitude_rad x envelope(t) x sin(phase(t))`."""

    axis: str
    frequency_hz: float
    amplitude_rad: float
    driven_rad: float
    phase_rad: float
    wander: Wander | None
    start_s: float | None
    stop_s: float | None
    fade_s: float
    decay_s: float | None
    motor: bool

    @property
    def steady(self) -> bool:
        """True for a pure sinusoid over the whole clip."""
        return self.wander is None and self.start_s is None and self.stop_s is None and self.decay_s is None

    def phase(self, time_s: np.ndarray) -> np.ndarray:
        """Phase in radians at `time_s` (any shape)."""
        run_s = time_s if self.wander is None else time_s + self.wander.delay(time_s)
        return 2 * np.pi * self.frequency_hz * run_s + self.phase_rad

    def frequency(self, time_s: np.ndarray) -> np.ndarray:
        """Instantaneous frequency in hertz at `time_s` (any shape)."""
        if self.wander is None:
            return np.full(np.shape(time_s), self.frequency_hz)
        return self.frequency_hz * (1 + self.wander.relative(time_s))

    def envelope(self, time_s: np.ndarray) -> np.ndarray:
        """Amplitude over `amplitude_rad` at `time_s` (any shape)."""
        level = np.ones(np.shape(time_s))
        if self.start_s is not None:
            level *= _fade((time_s - self.start_s) / self.fade_s)
        if self.stop_s is not None:
            level *= _fade((self.stop_s - time_s) / self.fade_s)
        if self.decay_s is not None:
            level *= np.exp(-np.maximum(time_s - (self.start_s or 0.0), 0.0) / self.decay_s)
        return level


@dataclass(frozen=True)
class Lines:
    """Pure sinusoids `amplitude sin(2 pi f t + phase)` on one column each."""

    column: np.ndarray
    frequency_hz: np.ndarray
    amplitude: np.ndarray
    phase_rad: np.ndarray

    def add_to(self, target: np.ndarray, time_s: np.ndarray) -> None:
        """Add the sinusoids at `time_s` (T,) to `target` (T, columns)."""
        for column in range(target.shape[1]):
            use = self.column == column
            # Blocks that stay in the processor's cache: dense broadband over long clips would fill the memory.
            block = max(1, _BLOCK_VALUES // max(1, int(use.sum())))
            for first in range(0, time_s.size if use.any() else 0, block):
                part = slice(first, first + block)
                turns = np.outer(time_s[part], self.frequency_hz[use]) + self.phase_rad[use] / (2 * np.pi)
                # Whole turns off first: the sine of a small angle is several times faster.
                turns -= np.rint(turns)
                target[part, column] += np.sin(2 * np.pi * turns) @ self.amplitude[use]


@dataclass(frozen=True)
class Motion:
    """The recipe's motion, compiled: what `pose` and `position` evaluate."""

    tones: tuple[SeenTone, ...]
    steady: Lines
    drift: Lines
    highest_hz: float


def _fade(run: np.ndarray) -> np.ndarray:
    return 0.5 - 0.5 * np.cos(np.pi * np.clip(run, 0.0, 1.0))


def _radians(camera: Camera, axis: str, degrees: float | None, pixels: float | None) -> float:
    return math.radians(degrees) if degrees is not None else camera.radians_from_px(axis, pixels)


def _wander(rng: np.random.Generator, wander_pct: float, wander_time_s: float) -> Wander | None:
    """Sinusoids whose rates follow the spectrum of an exponentially correlated process (a half-Cauchy law)."""
    if wander_pct == 0:
        return None
    share = (np.arange(_WANDER_LINES) + rng.random(_WANDER_LINES)) / _WANDER_LINES
    # The last few thousandths of the law's tail would be fast enough to be vibration of their own.
    rate_hz = np.tan(np.pi / 2 * np.clip(share, 1e-3, 0.995)) / (2 * np.pi * wander_time_s)
    amplitude = wander_pct / 100 * math.sqrt(2 / _WANDER_LINES)
    return Wander(amplitude, rate_hz, rng.uniform(0, 2 * np.pi, _WANDER_LINES))


def _seen(flight: Flight, tone: Tone, rng: np.random.Generator, motor: bool) -> SeenTone:
    driven = _radians(flight.camera, tone.axis, tone.amplitude_deg, tone.amplitude_px)
    seeded = rng.uniform(0, 360)
    phase = math.radians(seeded if tone.phase_deg is None else tone.phase_deg)
    transfer = _transfer(flight, tone.frequency_hz)
    return SeenTone(
        axis=tone.axis, frequency_hz=tone.frequency_hz, amplitude_rad=driven * abs(transfer), driven_rad=driven,
        phase_rad=phase + float(np.angle(transfer)), wander=_wander(rng, tone.wander_pct, tone.wander_time_s),
        start_s=tone.start_s, stop_s=tone.stop_s, fade_s=tone.fade_s, decay_s=tone.decay_s, motor=motor,
    )


def _transfer(flight: Flight, frequency_hz):
    if flight.isolator is None:
        return np.ones_like(np.asarray(frequency_hz, dtype=float)).astype(complex)[()]
    return transmissibility(
        frequency_hz, flight.isolator.natural_frequency_hz, flight.isolator.damping_ratio
    )[()]


def seen_tones(flight: Flight) -> tuple[SeenTone, ...]:
    """All tones and motors of a flight after the isolator.

    Parameters
    ----------
    flight : Flight

    Returns
    -------
    tuple of SeenTone
        `[[tone]]` entries first, then the rotors of each `[[motors]]`.
    """
    tones = [_seen(flight, tone, generator(flight, "tone", index), False) for index, tone in enumerate(flight.tone)]
    for index, motors in enumerate(flight.motors):
        rng = generator(flight, "motors", index)
        for _ in range(motors.count):
            rotor = Tone(
                axis=motors.axis, frequency_hz=motors.frequency_hz * (1 + motors.spread_pct / 100 * rng.uniform(-1, 1)),
                amplitude_deg=motors.amplitude_deg, amplitude_px=motors.amplitude_px,
                wander_pct=motors.wander_pct, wander_time_s=motors.wander_time_s,
            )
            tones.append(_seen(flight, rotor, rng, True))
    return tuple(tones)


def broadband_lines(flight: Flight, index: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """The sinusoids that make up one `[[broadband]]` entry, after the isolator.

    At least two lines for each 1/duration, at jittered frequencies, so that the sum does not repeat within the
    clip and is gaussian by the central limit theorem.

    Parameters
    ----------
    flight : Flight
    index : int
        Which `[[broadband]]` entry.

    Returns
    -------
    frequency_hz, amplitude_rad, phase_rad : ndarray, shape (lines,)
    """
    band = flight.broadband[index]
    rng = generator(flight, "broadband", index)
    width = band.high_hz - band.low_hz
    count = max(64, math.ceil(2 * width * flight.flight.duration_s))
    frequency = band.low_hz + width * (np.arange(count) + rng.random(count)) / count
    rms = _radians(flight.camera, band.axis, band.rms_deg, band.rms_px)
    transfer = _transfer(flight, frequency)
    amplitude = rms * math.sqrt(2 / count) * np.abs(transfer)
    return frequency, amplitude, rng.uniform(0, 2 * np.pi, count) + np.angle(transfer)


def _lines(rows: list[tuple[int, float, float, float]]) -> Lines:
    table = np.array(rows, dtype=float).reshape(-1, 4)
    return Lines(table[:, 0].astype(int), table[:, 1], table[:, 2], table[:, 3])


@functools.lru_cache(maxsize=16)
def motion_of(flight: Flight) -> Motion:
    """Compile a flight's motion (cached, since `pose` is called once a frame)."""
    rows = []
    for index, sway in enumerate(flight.sway):
        seeded = generator(flight, "sway", index).uniform(0, 360)
        phase = seeded if sway.phase_deg is None else sway.phase_deg
        amplitude = math.radians(sway.amplitude_deg)
        rows.append((AXES.index(sway.axis), sway.frequency_hz, amplitude, math.radians(phase)))
    tones = seen_tones(flight)
    for tone in tones:
        if tone.steady:
            rows.append((AXES.index(tone.axis), tone.frequency_hz, tone.amplitude_rad, tone.phase_rad))
    for index, band in enumerate(flight.broadband):
        column = AXES.index(band.axis)
        rows.extend((column, *line) for line in zip(*broadband_lines(flight, index)))
    drift = []
    for index, entry in enumerate(flight.drift):
        seeded = generator(flight, "drift", index).uniform(0, 360)
        phase = math.radians(seeded if entry.phase_deg is None else entry.phase_deg)
        column, sign = {"right": (0, 1.0), "up": (1, -1.0), "forward": (2, 1.0)}[entry.direction]
        drift.append((column, entry.frequency_hz, sign * entry.amplitude_m, phase))
    unsteady = tuple(tone for tone in tones if not tone.steady)
    highest = [row[1] for row in rows + drift] + [
        tone.frequency_hz * (1 + 4 * tone.wander.amplitude * math.sqrt(_WANDER_LINES / 2) if tone.wander else 1)
        for tone in unsteady
    ]
    return Motion(unsteady, _lines(rows), _lines(drift), max(highest, default=0.0))


def _turned(pan: Pan, duration_s: float, time_s: np.ndarray) -> np.ndarray:
    """Angle in radians turned by one pan up to each time: the integral of a trapezoid of rate."""
    stop = duration_s if pan.stop_s is None else pan.stop_s
    # An open-ended pan goes on past the last row, and one from time 0 was already under way before the first.
    start = -math.inf if pan.start_s <= 0 and pan.ramp_s == 0 else pan.start_s
    stop = math.inf if pan.stop_s is None and pan.ramp_s == 0 else stop
    rate = math.radians(pan.rate_deg_per_s)
    if pan.ramp_s == 0:
        origin = max(start, 0.0) if math.isinf(start) else start
        return rate * (np.clip(time_s, start, stop) - origin)
    ramp = min(pan.ramp_s, max(stop - start, 1e-9) / 2)

    def rising(run: np.ndarray) -> np.ndarray:
        """Integral of a ramp that rises from 0 to 1 over `ramp` and stays."""
        run = np.maximum(run, 0.0)
        return np.where(run < ramp, run**2 / (2 * ramp), run - ramp / 2)

    return rate * (rising(time_s - start) - rising(time_s - (stop - ramp)))


def heading(flight: Flight, time_s) -> np.ndarray:
    """Turn about the vertical in radians since time 0, positive to the left.

    Parameters
    ----------
    flight : Flight
    time_s : array_like, shape (T,)

    Returns
    -------
    ndarray, shape (T,)
    """
    time_s = np.asarray(time_s, dtype=float)
    total = np.zeros(time_s.shape)
    for pan in flight.pan:
        if pan.axis == "heading":
            total += _turned(pan, flight.flight.duration_s, time_s)
    return total


def camera_angles(flight: Flight, time_s) -> np.ndarray:
    """Angles about the camera's own axes: pans other than heading, sways, tones and broadband.

    Parameters
    ----------
    flight : Flight
    time_s : array_like, shape (T,)

    Returns
    -------
    ndarray, shape (T, 3)
        yaw, pitch, roll in radians.
    """
    time_s = np.asarray(time_s, dtype=float).ravel()
    motion = motion_of(flight)
    angles = np.zeros((time_s.size, 3))
    motion.steady.add_to(angles, time_s)
    for tone in motion.tones:
        angles[:, AXES.index(tone.axis)] += tone.amplitude_rad * tone.envelope(time_s) * np.sin(tone.phase(time_s))
    for pan in flight.pan:
        if pan.axis != "heading":
            angles[:, AXES.index(pan.axis)] += _turned(pan, flight.flight.duration_s, time_s)
    return angles


def pose(flight: Flight, time_s) -> np.ndarray:
    """Camera angles at any instant, everything included.

    A turn about the vertical enters with its components on the camera's tilted axes, `cos(tilt)` on yaw and
    `sin(tilt)` on roll, so that differences of the result are what a picture shows.

    Parameters
    ----------
    flight : Flight
    time_s : array_like, shape (T,)
        Instants in seconds on the clip's clock.

    Returns
    -------
    ndarray, shape (T, 3)
        yaw, pitch, roll in radians.
    """
    angles = camera_angles(flight, time_s)
    turn = heading(flight, np.asarray(time_s, dtype=float).ravel())
    tilt = math.radians(flight.flight.tilt_deg)
    angles[:, 0] += turn * math.cos(tilt)
    angles[:, 2] += turn * math.sin(tilt)
    return angles


def position(flight: Flight, time_s) -> np.ndarray:
    """Camera position at any instant in the world frame.

    Parameters
    ----------
    flight : Flight
    time_s : array_like, shape (T,)

    Returns
    -------
    ndarray, shape (T, 3)
        Right, down (minus the height) and forward, in metres.
    """
    time_s = np.asarray(time_s, dtype=float).ravel()
    path = flight.flight
    course = math.radians(path.course_deg)
    result = np.stack([
        -path.speed_mps * math.sin(course) * time_s,
        -path.height_m - path.climb_mps * time_s,
        path.speed_mps * math.cos(course) * time_s,
    ], axis=1)
    motion_of(flight).drift.add_to(result, time_s)
    return result


def rotations(flight: Flight, time_s) -> np.ndarray:
    """Exact rotation matrices from the world to the camera.

    `Roll Pitch Yaw` of the camera angles times the fixed tilt times the heading.

    Parameters
    ----------
    flight : Flight
    time_s : array_like, shape (T,)

    Returns
    -------
    ndarray, shape (T, 3, 3)
    """
    time_s = np.asarray(time_s, dtype=float).ravel()
    return compose_rotation(flight, camera_angles(flight, time_s), heading(flight, time_s))


def compose_rotation(flight: Flight, angles: np.ndarray, turn: np.ndarray) -> np.ndarray:
    """World-to-camera matrices (T, 3, 3) from camera angles (T, 3) and heading turns (T,), radians."""
    tilt = _pitch_matrix(np.array([-math.radians(flight.flight.tilt_deg)]))
    head = _yaw_matrix(math.radians(flight.flight.heading_deg) + turn)
    own = _roll_matrix(angles[:, 2]) @ _pitch_matrix(angles[:, 1]) @ _yaw_matrix(angles[:, 0])
    return own @ (tilt @ head)


def _yaw_matrix(angle: np.ndarray) -> np.ndarray:
    """x' = x + yaw z for small angles."""
    return _matrix(angle, 0, 2)


def _pitch_matrix(angle: np.ndarray) -> np.ndarray:
    """y' = y + pitch z for small angles."""
    return _matrix(angle, 1, 2)


def _roll_matrix(angle: np.ndarray) -> np.ndarray:
    """y' = y + roll x for small angles."""
    return _matrix(angle, 1, 0)


def _matrix(angle: np.ndarray, moved: int, by: int) -> np.ndarray:
    result = np.zeros((angle.size, 3, 3))
    result[:] = np.eye(3)
    result[:, moved, moved] = result[:, by, by] = np.cos(angle)
    result[:, moved, by] = np.sin(angle)
    result[:, by, moved] = -np.sin(angle)
    return result


def exposure_offsets(exposure_s: float, samples: int) -> np.ndarray:
    """Instants, relative to mid-exposure, whose plain average stands for the exposure.

    Chebyshev's quadrature with equal weights (Abramowitz and Stegun 25.4.28): its nodes are the roots of the
    polynomial whose power sums are the moments of the interval. Four nodes are exact to degree five, so a tone of
    frequency f is averaged to `sinc(f exposure)` within 0.3 % of its amplitude up to `f exposure` = 0.7, and six nodes
    within 0.1 % up to 1.

    Parameters
    ----------
    exposure_s : float
    samples : int
        1 to 7; from eight on such nodes do not exist.

    Returns
    -------
    ndarray, shape (samples,)
        Rising.
    """
    sums = [samples / (power + 1) if power % 2 == 0 else 0.0 for power in range(1, samples + 1)]
    symmetric = [1.0]
    for order in range(1, samples + 1):
        # Newton's identities turn power sums into the coefficients of the polynomial.
        terms = ((-1) ** (k - 1) * symmetric[order - k] * sums[k - 1] for k in range(1, order + 1))
        symmetric.append(sum(terms) / order)
    nodes = np.roots([(-1) ** k * value for k, value in enumerate(symmetric)])
    return exposure_s / 2 * np.sort(nodes.real)


def exposure_average(flight: Flight, time_s: np.ndarray) -> np.ndarray:
    """Pose averaged over the exposure centred on each instant.

    Gauss-Legendre quadrature with enough nodes for the highest frequency of the flight.

    Parameters
    ----------
    flight : Flight
    time_s : ndarray, any shape
        Mid-exposure instants.

    Returns
    -------
    ndarray, shape `time_s.shape + (3,)`
        yaw, pitch, roll in radians.
    """
    exposure = flight.camera.exposure_s
    flat = np.asarray(time_s, dtype=float).ravel()
    if exposure == 0:
        return pose(flight, flat).reshape(*np.shape(time_s), 3)
    order = 6 + math.ceil(4 * exposure * motion_of(flight).highest_hz)
    nodes, weights = np.polynomial.legendre.leggauss(order)
    total = np.zeros((flat.size, 3))
    for node, weight in zip(nodes, weights):
        total += weight / 2 * pose(flight, flat + node * exposure / 2)
    return total.reshape(*np.shape(time_s), 3)
