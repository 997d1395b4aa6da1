"""The one place that holds the version; `run.json` and resume compare it."""

__version__ = "0.1.0"
