"""Sentences: why a cause is likely, what to do about it, and what to mind when propellers turn on the ground."""

from __future__ import annotations

import math
from collections.abc import Sequence

from framegrade import isolator
from framegrade.airframe import Airframe
from framegrade.sources.causes import Order, Swing

#: Balance grade that ISO 21940-11 lists for fans and for machinery in general.
BALANCE_GRADE_MM_PER_S = 6.3
#: Nearer to hover speed than this a take's speed is called close to it.
NEAR_HOVER = 0.15

GROUND_RUN_CAUTIONS = (
    "Take the propellers off for every check that does not need them.",
    "With propellers on, tie the aircraft down so that it cannot lift, tip or slide, and keep the throttle well under "
    "lift-off, about 30 %.",
    "Keep everybody, hands, hair and loose things out of the propellers' plane and the space in front of it; wear eye "
    "protection; have a second person at the switch.",
    "Disconnect the battery before touching a propeller or a motor.",
    "Follow the maker's instructions and the local rules; where they ask for licensed or trained people, leave it to "
    "them.",
)


def percent(probability: float) -> str:
    """A probability in whole percent that never claims all or nothing."""
    if probability < 0.01:
        return "under 1 %"
    return "over 99 %" if probability > 0.99 else f"{100 * probability:.0f} %"


def speed_words(airframe: Airframe, speed_rpm: float) -> str:
    """Where a speed lies: against hover if that is known, else within reach."""
    reach = airframe.reach
    if speed_rpm > reach.loaded_rpm:
        return f"above {reach.loaded_rpm:.0f} rpm, what a loaded propeller usually reaches"
    if airframe.hover_rpm is not None:
        off = 100 * (speed_rpm / airframe.hover_rpm - 1)
        if abs(off) < 1:
            return "just hover speed"
        return f"{abs(off):.0f} % {'above' if off > 0 else 'below'} hover speed"
    return f"within reach ({reach.lowest_rpm:.0f} to {reach.highest_rpm:.0f} rpm)"


def order_reason(
    airframe: Airframe, order: Order, frequency_hz: float, family: Sequence[tuple[float, int]],
    missing_hz: float | None, throttle: str | None, swept_rpm: tuple[float, float] | None,
) -> str:
    """Why an order of a shaft may be a line's cause.

    Parameters
    ----------
    airframe : Airframe
    order : Order
    frequency_hz : float
    family : sequence of (float, int)
        Other lines of the same shaft: frequency in hertz and order.
    missing_hz : float or None
        Where the shaft's once-per-turn line should be and is not seen.
    throttle : str or None
        See `lines.Line`.
    swept_rpm : (float, float) or None
        Range of shaft speed during the take.
    """
    rpm = 60 * frequency_hz / order.multiple
    over = "" if order.multiple == 1 else f" over {order.multiple}"
    if swept_rpm is not None:
        parts = [f"its range{over} is {swept_rpm[0]:.0f} to {swept_rpm[1]:.0f} rpm, all within reach"]
    else:
        parts = [f"{frequency_hz:.1f} Hz{over} is {rpm:.0f} rpm, {speed_words(airframe, rpm)}"]
    if family:
        listed = " and ".join(f"{f:.1f} Hz ({multiple} a turn)" for f, multiple in family)
        parts.append(f"{listed} {'fits' if len(family) == 1 else 'fit'} the same shaft")
    if missing_hz is not None:
        parts.append(f"but nothing shows at once per turn, {missing_hz:.1f} Hz")
    if throttle == "follows":
        parts.append("it follows the throttle")
    elif throttle == "drifts":
        parts.append("it moves, though not with the other tones")
    elif throttle == "stays":
        parts.append("but it stays where it is while the throttle changes")
    return "; ".join(parts)


def swing_reason(airframe: Airframe, swing: Swing, frequency_hz: float, throttle: str | None) -> str:
    """Why a resonance or a slow oscillation may be a line's cause; arguments as of `order_reason`."""
    if swing.kind == "slow":
        parts = [f"{frequency_hz:.1f} Hz lies between 3 and 20 Hz, where controllers and loose mounts swing"]
    elif swing.kind == "isolator":
        natural = airframe.mount.isolator_hz
        parts = [f"the isolator's sag or stiffness gives {natural:.1f} Hz, and rubber swings rather higher"]
    elif swing.kind == "unnamed":
        parts = ["no known part and no speed in the airframe file needs to explain it"]
    else:
        off = 100 * (frequency_hz / swing.frequency_hz - 1)
        near = "" if abs(off) < 1 else f"{abs(off):.0f} % {'above' if off > 0 else 'below'} "
        parts = [f"{frequency_hz:.1f} Hz is {near}the {swing.frequency_hz:.1f} Hz in the airframe file"]
    if throttle == "stays":
        parts.append("it stays while the throttle changes")
    elif throttle is not None:
        parts.append("but it moves with time, which a resonance does not")
    return "; ".join(parts)


def out_of_reach_words(airframe: Airframe, order: Order, low_hz: float, high_hz: float) -> str:
    """Why an order is ruled out: "twice per turn would need 2059 rpm, below idle speed (2500 rpm)"."""
    reach, slow, fast = airframe.reach, 60 * low_hz / order.multiple, 60 * high_hz / order.multiple
    if slow < reach.lowest_rpm:
        return f"{order.name} would need {slow:.0f} rpm, below {reach.lowest_rpm:.0f} rpm ({reach.lowest_words})"
    return f"{order.name} would need {fast:.0f} rpm, above {reach.highest_rpm:.0f} rpm ({reach.highest_words})"


def isolator_words(airframe: Airframe, passed: float) -> str | None:
    """What the isolator does, from its transmissibility at a frequency; None where that is NaN."""
    if math.isnan(passed):
        return None
    natural = airframe.mount.isolator_hz
    if passed >= 1:
        crossover = float(isolator.crossover_frequency(natural))
        return (f"the isolator ({natural:.1f} Hz) makes it {passed:.2g} times larger: it isolates above "
                f"{crossover:.1f} Hz only")
    return f"the isolator ({natural:.1f} Hz) lets {100 * passed:.2g} % of it through"


def advice(airframe: Airframe, cause: Order | Swing | None) -> str:
    """What to do about a cause, in a few sentences.

    Parameters
    ----------
    airframe : Airframe
    cause : Order, Swing or None
        None: no cause in the file.
    """
    if cause is None:
        return ("Film again at clearly lower and higher throttle in one take: a tone that moves with it turns, one "
                "that stays is a resonance. Tap the mount, the arms and the landing gear and listen or film for this "
                "frequency.")
    if isinstance(cause, Swing):
        return _swing_advice(airframe, cause)
    if cause.multiple == 1:
        return _unbalance_advice(airframe)
    if cause.multiple == airframe.pole_pairs and cause.multiple not in (2, airframe.blades):
        return ("Run one motor at a time without its propeller: a motor that makes this tone alone has a damaged "
                "winding or magnet, or a controller with unsuited timing. Swap the motor to see which.")
    if cause.multiple in (airframe.blades, 2 * airframe.blades) and airframe.blades > 1:
        also = "; check for a bent shaft too" if cause.multiple == 2 else ""
        return (f"Look for a chipped, twisted or unlike blade and replace the propeller{also}. What remains is air "
                "load on the arms: more distance between propeller and arm, or a softer isolator.")
    if cause.multiple == 2:
        return "Take the propellers off and look for a bent shaft, a loose hub or a propeller that does not sit flat."
    return "Deal with the shaft's once-per-turn tone first: this harmonic goes with it."


def _unbalance_advice(airframe: Airframe) -> str:
    motors = "Run one motor after the other to find which one it is" if airframe.motors > 1 else "Run the motor"
    text = (f"{motors}, restrained and under lift-off; then turn its propeller on the shaft in steps of about 90 "
            "degrees and keep the quietest, or balance or replace it. If it stays with the propeller off, it is the "
            "bell or shaft.")
    if airframe.rotor_mass_g is not None:
        fastest = airframe.reach.loaded_rpm  # the standard goes by the highest service speed
        allowed = isolator.permissible_unbalance_g_mm(BALANCE_GRADE_MM_PER_S, airframe.rotor_mass_g * 1e-3, fastest)
        text += (f" Balance grade G {BALANCE_GRADE_MM_PER_S:g} (ISO 21940-11) leaves {allowed:.2g} g mm to a rotor of "
                 f"{airframe.rotor_mass_g:g} g that turns up to {fastest:.0f} rpm.")
    return text


def _swing_advice(airframe: Airframe, swing: Swing) -> str:
    if swing.kind == "slow":
        gains = "of the flight controller and of the gimbal" if airframe.mount.gimbal else "of the flight controller"
        return (f"Tighten the camera's mount first and film again; if it stays, lower the gains {gains} in small "
                "steps, and look for this frequency in the flight log.")
    if swing.kind == "isolator":
        crossover = float(isolator.crossover_frequency(airframe.mount.isolator_hz))
        return (f"The isolator amplifies what is slower than {crossover:.1f} Hz. Give it more damping, or a stiffness "
                "that moves its resonance away from what excites it; it must not touch its stops.")
    if swing.kind == "unnamed":
        return ("Tap the mount, the arms and the landing gear and listen or film for this frequency; stiffen or damp "
                "the part that answers, and add it to the airframe file as a [[resonance]].")
    return ("Stiffen or damp the part so that its resonance leaves the range of what turns nearby; a shaft speed that "
            "crosses it will always shake.")
