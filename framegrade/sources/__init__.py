"""What turns, or swings, at the frequencies a take holds: causes of tones, ranked and with their reasons.

A finished take and an airframe in, causes out; nothing here looks at pictures.
"""

from framegrade.sources.trace import Candidate, Shaft, TakeTrace, ToneTrace, trace_take
from framegrade.sources.wording import GROUND_RUN_CAUTIONS

__all__ = ["GROUND_RUN_CAUTIONS", "Candidate", "Shaft", "TakeTrace", "ToneTrace", "trace_take"]
