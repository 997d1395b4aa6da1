"""The airframe file: what turns on an aircraft and what its camera hangs on.

::

    [airframe]
    name = "survey quad"
    motors = 4
    blades = 2
    kv_rpm_per_volt = 920
    cells = 4               # or volts = 16.8, the battery fully charged
    magnet_poles = 14
    idle_rpm = 1800
    hover_rpm = 8200
    full_rpm = 12000
    rotor_mass_g = 45       # one propeller with the motor's bell

    [mount]
    gimbal = false
    resonance_hz = 33.0
    camera_mass_g = 130
    isolator_sag_mm = 1.6   # or isolator_stiffness_n_per_mm = 0.8
    isolator_damping_ratio = 0.1

    [[resonance]]
    part = "landing gear"
    frequency_hz = 21.0

Of `[airframe]` the motors, blades, speed constant and battery are needed; all else may be left out.

Sources
-------
Speed constant x voltage is the no-load limit; loaded, a propeller reaches about 75 to 85 % of it: common practice.
"""

from __future__ import annotations

import os
from dataclasses import dataclass

from framegrade import isolator
from framegrade.settings_file import Field, Settings, Table, read_settings

#: Voltage of one lithium-polymer cell fully charged, which sets the no-load limit, and its nominal voltage, which packs
#: are sold by (common practice). Other chemistries: give `volts`.
CELL_FULL_V = 4.2
CELL_NOMINAL_V = 3.7
#: Share of the no-load speed that a loaded propeller reaches at full throttle (common practice).
LOADED_SHARE = (0.75, 0.85)
#: Slowest share of the no-load speed taken as reachable when `idle_rpm` is not given: controllers idle at a few percent
#: of throttle, and turn somewhat faster than in proportion (common practice, from memory).
IDLE_SHARE = 0.05
#: Damping ratio assumed where none is given: soft rubber has about 0.05 to 0.15 (common practice, from memory).
ASSUMED_DAMPING_RATIO = 0.1


@dataclass(frozen=True)
class Resonance:
    """A part known to swing by itself.

    Attributes
    ----------
    part : str
    frequency_hz : float
    """

    part: str
    frequency_hz: float


@dataclass(frozen=True)
class Mount:
    """What the camera hangs on. A value that is not known is None.

    Attributes
    ----------
    gimbal : bool
        A powered gimbal steadies the camera.
    resonance_hz : float or None
        Measured resonance of the mount.
    camera_mass_g : float or None
        Everything that hangs on the isolator.
    isolator_hz : float or None
        Natural frequency of the isolator, from its sag or from stiffness and mass.
    isolator_damping_ratio : float
    damping_given : bool
        False when `isolator_damping_ratio` is the assumed one.
    """

    gimbal: bool = False
    resonance_hz: float | None = None
    camera_mass_g: float | None = None
    isolator_hz: float | None = None
    isolator_damping_ratio: float = ASSUMED_DAMPING_RATIO
    damping_given: bool = False


@dataclass(frozen=True)
class Reach:
    """Shaft speeds that an airframe can turn at.

    Attributes
    ----------
    lowest_rpm, highest_rpm : float
    loaded_rpm : float
        What a propeller under load hardly exceeds; the same as `highest_rpm` where full speed is given.
    lowest_words, highest_words : str
        What the limits are, for a sentence: "idle speed", "no-load limit, 920 rpm/V x 16.8 V".
    """

    lowest_rpm: float
    highest_rpm: float
    loaded_rpm: float
    lowest_words: str
    highest_words: str

    def holds(self, speed_rpm: float) -> bool:
        """Whether a speed lies within the limits."""
        return self.lowest_rpm <= speed_rpm <= self.highest_rpm

    def words(self) -> str:
        """The range as text: "1800 rpm (idle speed) to 12000 rpm (full speed)"."""
        return f"{self.lowest_rpm:.0f} rpm ({self.lowest_words}) to {self.highest_rpm:.0f} rpm ({self.highest_words})"


@dataclass(frozen=True)
class Airframe:
    """What turns on an aircraft. A value that is not known is None.

    Attributes
    ----------
    motors : int
    blades : int
        Of one propeller.
    kv_rpm_per_volt : float
        Speed constant.
    volts : float
        Battery fully charged.
    name : str or None
    magnet_poles : int or None
        Of one motor; half of them are pole pairs.
    idle_rpm, hover_rpm, full_rpm : float or None
        Speeds with the propellers on.
    rotor_mass_g : float or None
        One propeller with its bell.
    mount : Mount
    resonances : tuple of Resonance
    """

    motors: int
    blades: int
    kv_rpm_per_volt: float
    volts: float
    name: str | None = None
    magnet_poles: int | None = None
    idle_rpm: float | None = None
    hover_rpm: float | None = None
    full_rpm: float | None = None
    rotor_mass_g: float | None = None
    mount: Mount = Mount()
    resonances: tuple[Resonance, ...] = ()

    @property
    def no_load_rpm(self) -> float:
        """Speed constant x full voltage: faster than this no shaft can turn."""
        return self.kv_rpm_per_volt * self.volts

    @property
    def doubt(self) -> str | None:
        """A sentence when the voltage looks like what packs are sold by, not what they have fully charged."""
        cells = round(self.volts / CELL_NOMINAL_V)
        if cells < 2 or abs(self.volts - cells * CELL_NOMINAL_V) > 0.01:
            return None
        return (f"{self.volts:g} V is the nominal voltage of {cells} lithium-polymer cells; fully charged they have "
                f"{cells * CELL_FULL_V:.1f} V: if so, write cells = {cells}, or the fastest speeds are missed")

    @property
    def pole_pairs(self) -> int | None:
        """Electrical turns for each turn of the shaft."""
        return None if self.magnet_poles is None else self.magnet_poles // 2

    @property
    def reach(self) -> Reach:
        """The reachable speeds, from the figures given or from common practice."""
        limit = f"no-load limit, {self.kv_rpm_per_volt:g} rpm/V x {self.volts:.4g} V"
        lowest, lowest_words = self.idle_rpm, "idle speed"
        if lowest is None:
            lowest, lowest_words = IDLE_SHARE * self.no_load_rpm, f"{100 * IDLE_SHARE:g} % of the no-load limit"
        if self.full_rpm is not None:
            return Reach(lowest, self.full_rpm, self.full_rpm, lowest_words, "full speed")
        return Reach(lowest, self.no_load_rpm, LOADED_SHARE[1] * self.no_load_rpm, lowest_words, limit)


_RPM = {"low": 0, "high": 300_000, "open_range": True}
_SCHEMA = {
    "airframe": Table(
        {
            "name": Field("text", "what you call the aircraft"),
            "motors": Field("integer", "number of motors", required=True, low=1, high=64),
            "blades": Field("integer", "blades of one propeller", required=True, low=1, high=12),
            "kv_rpm_per_volt": Field(
                "number", "speed constant, rpm per volt", required=True, low=0, high=50_000, open_range=True
            ),
            "cells": Field("integer", "lithium-polymer cells in series", low=1, high=30),
            "volts": Field("number", "voltage of the battery fully charged", low=0, high=1000, open_range=True),
            "magnet_poles": Field("integer", "magnets of one motor's bell, an even number", low=2, high=200),
            "idle_rpm": Field("number", "idle speed, rpm", **_RPM),
            "hover_rpm": Field("number", "speed in hover, rpm", **_RPM),
            "full_rpm": Field("number", "speed at full throttle with the propeller on, rpm", **_RPM),
            "rotor_mass_g": Field("number", "propeller and bell, grams", low=0, high=100_000, open_range=True),
        },
        required=True,
    ),
    "mount": Table(
        {
            "gimbal": Field("flag", "whether a powered gimbal steadies the camera"),
            "resonance_hz": Field("number", "measured resonance, hertz", low=0, high=2000, open_range=True),
            "camera_mass_g": Field("number", "what hangs on the isolator, grams", low=0, high=100_000, open_range=True),
            "isolator_sag_mm": Field(
                "number", "how far the isolator gives under the camera's weight, millimetres", low=0, high=500,
                open_range=True,
            ),
            "isolator_stiffness_n_per_mm": Field(
                "number", "stiffness of the whole isolator, newtons per millimetre", low=0, high=10_000, open_range=True
            ),
            "isolator_damping_ratio": Field("number", "1 is critical", low=0, high=2),
        }
    ),
    "resonance": Table(
        {
            "part": Field("text", "what swings", required=True),
            "frequency_hz": Field("number", "hertz", required=True, low=0, high=2000, open_range=True),
        },
        many=True,
    ),
}


def load_airframe(path: str | os.PathLike[str]) -> Airframe:
    """Read an airframe file.

    Parameters
    ----------
    path : str or path-like

    Returns
    -------
    Airframe

    Raises
    ------
    SettingsError
        For a file that cannot be read or holds a mistake: the sentence names the line.
    """
    settings = read_settings(path, _SCHEMA)
    row = settings.table("airframe")
    airframe = Airframe(
        motors=row["motors"], blades=row["blades"], kv_rpm_per_volt=row["kv_rpm_per_volt"], volts=_volts(settings),
        name=row.get("name"), magnet_poles=row.get("magnet_poles"), idle_rpm=row.get("idle_rpm"),
        hover_rpm=row.get("hover_rpm"), full_rpm=row.get("full_rpm"), rotor_mass_g=row.get("rotor_mass_g"),
        mount=_mount(settings), resonances=tuple(Resonance(**one) for one in settings.tables["resonance"]),
    )
    _check_poles(settings, airframe)
    _check_speeds(settings, airframe)
    return airframe


def _volts(settings: Settings) -> float:
    row = settings.table("airframe")
    if ("cells" in row) == ("volts" in row):
        if "cells" in row:
            raise settings.error('"cells" and "volts" are both given: keep one', "airframe", "volts")
        raise settings.error('the battery is missing in [airframe]: give "cells" or "volts"', "airframe")
    return row["volts"] if "volts" in row else CELL_FULL_V * row["cells"]


def _check_poles(settings: Settings, airframe: Airframe) -> None:
    if airframe.magnet_poles is not None and airframe.magnet_poles % 2:
        raise settings.error(f'"magnet_poles" = {airframe.magnet_poles} is odd: north and south poles come in pairs',
                             "airframe", "magnet_poles")


def _check_speeds(settings: Settings, airframe: Airframe) -> None:
    limit = airframe.no_load_rpm
    for key in ("idle_rpm", "hover_rpm", "full_rpm"):
        speed = getattr(airframe, key)
        if speed is not None and speed > limit:
            raise settings.error(
                f'"{key}" = {speed:g} cannot be reached: the no-load limit is {airframe.kv_rpm_per_volt:g} rpm/V x '
                f"{airframe.volts:.4g} V = {limit:.0f} rpm", "airframe", key)
    given = [(key, getattr(airframe, key)) for key in ("idle_rpm", "hover_rpm", "full_rpm")
             if getattr(airframe, key) is not None]
    for (slow, slow_rpm), (fast, fast_rpm) in zip(given, given[1:]):
        if slow_rpm >= fast_rpm:
            cause = f'"{fast}" = {fast_rpm:g} must be faster than "{slow}" = {slow_rpm:g}'
            raise settings.error(cause, "airframe", fast)
    lowest = airframe.reach.lowest_rpm
    if airframe.idle_rpm is None and given and given[0][1] <= lowest:
        key, speed = given[0]
        raise settings.error(
            f'"{key}" = {speed:g} is below {lowest:.0f} rpm, {100 * IDLE_SHARE:g} % of the no-load limit: correct '
            'it, or give "idle_rpm" as well', "airframe", key)


def _mount(settings: Settings) -> Mount:
    row = settings.table("mount")
    sag, stiffness = row.get("isolator_sag_mm"), row.get("isolator_stiffness_n_per_mm")
    mass = row.get("camera_mass_g")
    if sag is not None and stiffness is not None:
        raise settings.error('"isolator_sag_mm" and "isolator_stiffness_n_per_mm" are both given: keep the one you '
                             "measured", "mount", "isolator_stiffness_n_per_mm")
    if stiffness is not None and mass is None:
        raise settings.error('"isolator_stiffness_n_per_mm" needs "camera_mass_g" too', "mount",
                             "isolator_stiffness_n_per_mm")
    natural = None
    if sag is not None:
        natural = float(isolator.natural_frequency_from_sag(sag))
    elif stiffness is not None:
        natural = float(isolator.natural_frequency_from_stiffness(1e3 * stiffness, 1e-3 * mass))
    damping = row.get("isolator_damping_ratio")
    if damping is not None and natural is None:
        raise settings.error('"isolator_damping_ratio" needs "isolator_sag_mm" or "isolator_stiffness_n_per_mm" too',
                             "mount", "isolator_damping_ratio")
    return Mount(
        gimbal=row.get("gimbal", False), resonance_hz=row.get("resonance_hz"), camera_mass_g=mass, isolator_hz=natural,
        isolator_damping_ratio=ASSUMED_DAMPING_RATIO if damping is None else damping, damping_given=damping is not None,
    )
