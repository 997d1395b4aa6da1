"""Synthetic flights: ground truth for everything that estimates.

Renders a textured world through a rolling shutter from a small TOML recipe, and writes the true motion beside the
clip. It shares no code with the estimators, so that an error in one cannot hide in the other.
"""

from .clock import Schedule, schedule
from .motion import exposure_factor, pose, position, transmissibility
from .recipe import Flight, FlightError, flight_from_dict, load_flight
from .rendering import render
from .truth import Truth, load_truth, row_signals, truth_of

__all__ = [
    "Flight", "FlightError", "Schedule", "Truth", "exposure_factor", "flight_from_dict", "load_flight", "load_truth",
    "pose", "position", "render", "row_signals", "schedule", "transmissibility", "truth_of",
]
