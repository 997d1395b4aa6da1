"""What measuring a camera yields: a figure with its interval, or one sentence on why the clip cannot tell."""

from __future__ import annotations

from dataclasses import dataclass

#: The two-sided 95 % point of the normal distribution.
NORMAL_95 = 1.96


class CannotTell(Exception):
    """A clip that does not hold the figure asked for: one sentence with the cause and what to film instead.

    Parameters
    ----------
    cause : str
        What is wrong with the clip, without the file's name and without a closing full stop.
    instead : str
        What to film instead, in the imperative, without a closing full stop; may be empty.
    """

    def __init__(self, cause: str, instead: str = "") -> None:
        super().__init__(cause, instead)
        self.cause = cause
        self.instead = instead

    def __str__(self) -> str:
        return f"{self.cause}; {self.instead}" if self.instead else self.cause


@dataclass(frozen=True)
class Readout:
    """A measured readout time.

    Attributes
    ----------
    readout_s : float
        Seconds from the first to the last row. As estimated: it may be slightly negative for a global shutter.
    ci_s : float
        95 % half-width, seconds.
    method : str
        "swing", "flicker" or "vibration".
    frame_interval_s : float
        Typical time from frame to frame.
    basis : str
        What the figure rests on, in a few words for the screen.
    """

    readout_s: float
    ci_s: float
    method: str
    frame_interval_s: float
    basis: str = ""

    @property
    def global_shutter(self) -> bool:
        """True when the interval holds 0: all rows are exposed at the same time as far as the clip can tell."""
        return abs(self.readout_s) <= self.ci_s
