"""What can make a tone on an airframe, and how often each is seen: the prior knowledge behind the ranking.

The numbers are judgement, not measurement: how many lines of each kind a take usually shows. They decide between causes
that fit equally well; a fit decides far more than they do. `tests/bench/trace.py` measures what they lead to.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from framegrade.airframe import Airframe

SLOW_LOW_HZ, SLOW_HIGH_HZ = 3.0, 20.0


@dataclass(frozen=True)
class Order:
    """A rate that is a whole multiple of a shaft's.

    Attributes
    ----------
    multiple : int
        Cycles for each turn of the shaft.
    name : str
        "once per turn", "blade pass", ...
    parts : str
        What makes it.
    expected : float
        Lines of this order that a take of one shaft shows, on average.
    """

    multiple: int
    name: str
    parts: str
    expected: float


@dataclass(frozen=True)
class Swing:
    """A cause with a frequency of its own, whatever turns.

    Attributes
    ----------
    kind : {"isolator", "mount", "part", "slow", "unnamed"}
    name, parts : str
        As for `Order`.
    frequency_hz : float
        Centre; of "slow" the geometric middle of its range.
    spread : float
        Standard deviation of the natural logarithm of the frequency: how far from the centre it may be. Of "slow", half
        the range, evenly filled.
    expected : float
        Lines that a take shows, on average.
    """

    kind: str
    name: str
    parts: str
    frequency_hz: float
    spread: float
    expected: float


#: What a tone without a cause in the file is, once it is seen to stay while the throttle changes.
UNNAMED_RESONANCE = Swing("unnamed", "resonance of a part not in the file", "something swings at its own frequency",
                          math.nan, math.nan, 0.0)

_ONCE = "unbalance of a propeller or a motor bell, or a bent shaft"
_TWICE = "a bent shaft, a loose or tilted propeller, or blades that differ"
_BLADE = "air loads of the blades as they pass an arm, or blades that differ"
_ELECTRIC = "magnetic pull of the motor, once for each pole pair: a damaged motor or a badly timed controller"

#: Expected lines by cause, see the head of the file. Unbalance is what cameras see most; a well-balanced propeller's
#: blade pass comes next; what is faster is made less and isolated better.
EXPECTED_ONCE, EXPECTED_TWICE, EXPECTED_BLADE, EXPECTED_BLADE_TWICE = 2.0, 0.4, 0.8, 0.2
EXPECTED_ELECTRIC, EXPECTED_HIGHER = 0.15, 0.06
EXPECTED_RESONANCE, EXPECTED_SLOW = 0.5, 0.9
#: Lines without a cause in the file (an unknown resonance, a fan, a trace of coding), for each e-fold of frequency.
EXPECTED_OTHER, EXPECTED_OTHER_SLOW = 0.3, 0.05
HIGHEST_PLAIN_MULTIPLE = 4


def orders_of(airframe: Airframe) -> tuple[Order, ...]:
    """The orders of an airframe's shafts, lowest first; causes of the same order are one, named together.

    Parameters
    ----------
    airframe : Airframe

    Returns
    -------
    tuple of Order
    """
    blades = airframe.blades
    found = [(1, "once per turn", _ONCE, EXPECTED_ONCE)]
    if blades > 1:
        found.append((blades, "blade pass", _BLADE, EXPECTED_BLADE))
        found.append((2 * blades, "twice the blade pass", _BLADE, EXPECTED_BLADE_TWICE))
    found.append((2, "twice per turn", _TWICE, EXPECTED_TWICE))
    if airframe.pole_pairs is not None:
        found.append((airframe.pole_pairs, "motor electrical order", _ELECTRIC, EXPECTED_ELECTRIC))
    taken = {multiple for multiple, *_ in found}
    found += [(m, f"{m} times per turn", "a higher harmonic of the shaft", EXPECTED_HIGHER)
              for m in range(3, HIGHEST_PLAIN_MULTIPLE + 1) if m not in taken]
    orders = []
    for multiple in sorted({multiple for multiple, *_ in found}):
        same = [one for one in found if one[0] == multiple]
        orders.append(Order(multiple, " or ".join(one[1] for one in same),
                            "; or ".join(dict.fromkeys(one[2] for one in same)), sum(one[3] for one in same)))
    return tuple(orders)


def swings_of(airframe: Airframe) -> tuple[Swing, ...]:
    """What may swing by itself on an airframe.

    Parameters
    ----------
    airframe : Airframe

    Returns
    -------
    tuple of Swing
        The slow oscillation last.
    """
    mount, found = airframe.mount, []
    if mount.isolator_hz is not None:
        # rubber is stiffer in vibration than under a dead weight, so the true frequency is rather higher
        found.append(Swing("isolator", "isolator resonance", "the camera swings on its isolator",
                           1.05 * mount.isolator_hz, 0.12, EXPECTED_RESONANCE))
    if mount.resonance_hz is not None:
        found.append(Swing("mount", "mount resonance", "the mount swings at its own frequency", mount.resonance_hz,
                           0.04, EXPECTED_RESONANCE))
    for one in airframe.resonances:
        found.append(Swing("part", f"resonance: {one.part}", f"{one.part} swings at its own frequency",
                           one.frequency_hz, 0.04, EXPECTED_RESONANCE))
    slow = "gains of the flight controller or the gimbal set too high, or a loose mount" if mount.gimbal else \
        "gains of the flight controller set too high, or a loose mount"
    middle, half = (SLOW_LOW_HZ * SLOW_HIGH_HZ) ** 0.5, (SLOW_HIGH_HZ / SLOW_LOW_HZ) ** 0.5
    found.append(Swing("slow", "slow oscillation", slow, middle, math.log(half), EXPECTED_SLOW))
    return tuple(found)
