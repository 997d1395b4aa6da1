"""framegrade: score the stability of recorded video and name the vibration behind it."""

from framegrade.version import __version__

__all__ = ["__version__"]
