"""Which order of which shaft speed: lines weighed against each other.

Given a shaft speed, lines are expected with an intensity over frequency that is a sum: a narrow hump at every order of
the shaft; wider ones around it where the other motors' lines fall; humps at known resonances; the slow oscillation; and
a low plain of lines without a cause in the file. An order that should show and does not counts against a speed, as much
as finding none is unlikely; where the take is blind it does not count. The speed itself is unknown within the reachable
range, near hover more likely. Summed over all speeds, the shares of the humps at a line are the probabilities of its
causes.

Sources
-------
Streit (2010), Poisson Point Processes, ch. 2: intensities that superpose; the chance of finding none is exp(-expected).
Bretthorst (1988), Bayesian Spectrum Analysis and Parameter Estimation: nuisance parameters summed out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import logsumexp
from scipy.stats import norm

from framegrade.airframe import Airframe
from framegrade.sources.causes import (
    EXPECTED_OTHER, EXPECTED_OTHER_SLOW, SLOW_HIGH_HZ, SLOW_LOW_HZ, UNNAMED_RESONANCE, Order, Swing, orders_of,
    swings_of,
)
from framegrade.sources.lines import Line, View

#: Steps of the shaft speed, natural logarithm: finer than a line's least spread.
SPEED_STEP = 0.0004
#: Standard deviations (logarithm) of the motors' speeds around each other in flight, in calm hover and with trim, wind
#: or an uneven load; each half of the time.
MOTOR_SPREADS = (0.012, 0.045)
#: Lines of other motors near an order, for each further motor, as a share of the order's own; of once per turn and of
#: the higher orders, which other motors show less often than their unbalance.
OTHER_MOTORS_ONCE, OTHER_MOTORS_HIGHER, MOST_OTHER_MOTORS = 0.3, 0.15, 3
#: Standard deviations (logarithm) of the speed in a take around a known hover speed, in flight and on the ground or
#: under full power, and how often; and around the usual share of full speed where hover is not known. The rest of the
#: belief is spread evenly over the reachable range.
HOVER_SPREADS = ((0.15, 0.75), (0.45, 0.2))
USUAL_SHARE_OF_FULL, USUAL_SPREADS = 0.62, ((0.35, 0.8),)
#: A speed beyond what a loaded propeller reaches, though below the no-load limit, is this much less likely.
BEYOND_LOADED = 0.2
#: Strengths, as a share x of the strongest line above the slow ones, are taken to be distributed as a x^(a - 1):
#: unbalance tends to be the strongest line, harmonics and lines without a cause in the file are rather weak, resonances
#: are any.
STRENGTH_ONCE, STRENGTH_HIGHER, STRENGTH_OTHER = 1.5, 0.8, 0.6
#: How much less likely a cause is that ought to do the other thing while the throttle changes: a resonance that
#: follows, an order that stays (one motor may stay while others change), a resonance that drifts.
FOLLOWING_SWING, STAYING_ORDER, DRIFTING_SWING = 0.02, 0.1, 0.2


@dataclass(frozen=True)
class Share:
    """Probability of one cause of a line.

    Attributes
    ----------
    cause : Order, Swing or None
        None: no cause in the file.
    frequency_hz : float
        The line's, or the one of its candidates that this cause goes with.
    probability : float
    """

    cause: Order | Swing | None
    frequency_hz: float
    probability: float


@dataclass(frozen=True)
class Inference:
    """What the lines say together.

    Attributes
    ----------
    log_evidence : float
        Natural logarithm of the likelihood of the lines, shaft speed summed out.
    speed_hz, belief : ndarray, shape (speeds,)
        Shaft speeds in turns a second, and the probability of each.
    shares : tuple of tuple of Share
        Of each line, likeliest first; they sum to 1.
    """

    log_evidence: float
    speed_hz: np.ndarray
    belief: np.ndarray
    shares: tuple[tuple[Share, ...], ...]


def speed_prior(airframe: Airframe) -> tuple[np.ndarray, np.ndarray]:
    """Shaft speeds within reach, and how likely each is before any line is seen.

    Parameters
    ----------
    airframe : Airframe

    Returns
    -------
    speed_hz, probability : ndarray, shape (speeds,)
    """
    reach = airframe.reach
    ends = np.log([reach.lowest_rpm / 60, reach.highest_rpm / 60])
    count = max(2, int(np.ceil((ends[1] - ends[0]) / SPEED_STEP)))
    log_speed = np.linspace(*ends, count)
    even = np.full(count, 1.0 / count)
    if airframe.hover_rpm is not None:
        middle, spreads = airframe.hover_rpm / 60, HOVER_SPREADS
    else:
        middle, spreads = USUAL_SHARE_OF_FULL * reach.loaded_rpm / 60, USUAL_SPREADS
    prior = (1 - sum(share for _, share in spreads)) * even
    for spread, share in spreads:
        hump = norm.pdf(log_speed, np.log(middle), spread)
        prior = prior + share * hump / max(hump.sum(), 1e-300)
    prior = np.where(np.exp(log_speed) * 60 > reach.loaded_rpm, BEYOND_LOADED, 1.0) * prior
    return np.exp(log_speed), prior / prior.sum()


def reachable(airframe: Airframe, multiple: int, low_hz: float, high_hz: float) -> bool:
    """Whether a shaft within reach turns at a line's whole range over an order.

    Parameters
    ----------
    airframe : Airframe
    multiple : int
    low_hz, high_hz : float
        The line's range; the same for a steady line.
    """
    return airframe.reach.holds(60 * low_hz / multiple) and airframe.reach.holds(60 * high_hz / multiple)


def infer(lines: Sequence[Line], airframe: Airframe, view: View) -> Inference:
    """Weigh the causes of all lines together.

    Parameters
    ----------
    lines : sequence of Line
        A line with several candidate frequencies is taken for one of them, unknown which.
    airframe : Airframe
    view : View

    Returns
    -------
    Inference
        An order whose speed is out of reach has no share.
    """
    orders, swings = orders_of(airframe), swings_of(airframe)
    speed, prior = speed_prior(airframe)
    log_belief = np.log(prior)
    strongest = max((line.amplitude_px for line in lines if max(line.frequency_hz) > SLOW_HIGH_HZ), default=0.0)
    parts = [_parts(line, airframe, orders, swings, speed, strongest) for line in lines]
    for causes in parts:
        log_belief = log_belief + np.log(sum(intensity for _, _, intensity in causes))
    for order in orders:
        log_belief = log_belief + _worth_of_absence(order, parts, speed, view)
    evidence = float(logsumexp(log_belief))
    belief = np.exp(log_belief - evidence)
    return Inference(evidence, speed, belief, tuple(_shares(causes, belief) for causes in parts))


def _other_motors(airframe: Airframe, multiple: int) -> float:
    share = OTHER_MOTORS_ONCE if multiple == 1 else OTHER_MOTORS_HIGHER
    return share * min(airframe.motors - 1, MOST_OTHER_MOTORS)


def _worth_of_absence(order: Order, parts, speed: np.ndarray, view: View) -> np.ndarray:
    """Logarithm of the chance that a visible order shows no line, where none is its, else 0; shape as `speed`."""
    none_is = np.ones(len(speed))
    for causes in parts:
        total = sum(intensity for _, _, intensity in causes)
        none_is = none_is * (1 - sum(intensity for cause, _, intensity in causes if cause is order) / total)
    shows = 1 - np.exp(-order.expected)
    return np.log(1 - shows * view.sees(order.multiple * speed) * none_is)


def _parts(line: Line, airframe: Airframe, orders: Sequence[Order], swings: Sequence[Swing], speed: np.ndarray,
           strongest_px: float):
    """Intensities, per hertz, that make up a line: list of (cause, frequency, ndarray over the speeds or float)."""
    turning = {None: 1.0, "follows": 1.0, "drifts": 1.0, "stays": STAYING_ORDER}[line.throttle]
    swinging = {None: 1.0, "follows": FOLLOWING_SWING, "drifts": DRIFTING_SWING, "stays": 1.0}[line.throttle]
    strength = min(1.0, line.amplitude_px / strongest_px) if strongest_px > 0 else 1.0
    found = []
    for f in line.frequency_hz:
        low, high = (line.low_hz, line.high_hz) if line.known else (f, f)
        for order in orders:
            k = order.multiple
            if not reachable(airframe, k, low, high):
                continue
            own = norm.pdf(f, k * speed, line.sigma_hz)
            off = np.log(f / (k * speed))
            others = _other_motors(airframe, k) / f * sum(norm.pdf(off, 0, spread) for spread in MOTOR_SPREADS) / 2
            marked = _strength_density(strength, STRENGTH_ONCE if k == 1 else STRENGTH_HIGHER)
            found.append((order, f, turning * marked * order.expected * (own + others)))
        for swing in swings:
            found.append((swing, f, swinging * swing.expected * _swing_density(swing, f)))
        other = EXPECTED_OTHER_SLOW if SLOW_LOW_HZ <= f <= SLOW_HIGH_HZ else EXPECTED_OTHER
        # what stays while the throttle changes is a resonance, in the file or not
        unknown = UNNAMED_RESONANCE if line.throttle == "stays" else None
        found.append((unknown, f, swinging * _strength_density(strength, STRENGTH_OTHER) * other / f))
    return found


def _strength_density(strength: float, a: float) -> float:
    return a * max(strength, 0.01) ** (a - 1)


def _swing_density(swing: Swing, frequency_hz: float) -> float:
    off = np.log(frequency_hz / swing.frequency_hz)
    if swing.kind == "slow":
        return float(abs(off) <= swing.spread) / (2 * swing.spread * frequency_hz)
    return float(norm.pdf(off, 0.0, swing.spread)) / frequency_hz


def _shares(causes, belief: np.ndarray) -> tuple[Share, ...]:
    total = sum(intensity for _, _, intensity in causes)
    shares = [Share(cause, f, float(np.sum(belief * intensity / total))) for cause, f, intensity in causes]
    return tuple(sorted(shares, key=lambda share: -share.probability))
