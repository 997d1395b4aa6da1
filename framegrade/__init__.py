"""framegrade: score the stability of recorded video and name the vibration behind it."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from framegrade.version import __version__

if TYPE_CHECKING:
    from framegrade.pipeline import grade, grade_all

__all__ = ["__version__", "grade", "grade_all"]


def __getattr__(name: str) -> Any:
    # On demand: `import framegrade` must not wait for numerical libraries.
    if name in ("grade", "grade_all"):
        from framegrade import pipeline

        return getattr(pipeline, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
