"""Keep freed picture buffers for the next frame instead of handing them back to the system.

Measuring a frame takes some twenty arrays of a few megabytes. The C library maps and unmaps each of them afresh by
default, and touching the new pages cost a third of the time of a 1080p frame (3200 page faults a frame; 100 with this).
"""

from __future__ import annotations

import ctypes
import sys

#: mallopt(3) of the GNU C library: parameters M_TRIM_THRESHOLD and M_MMAP_THRESHOLD.
_TRIM_THRESHOLD, _MMAP_THRESHOLD = -1, -3
_BLOCK_BYTES = 12 << 20  # a 1080p picture in single precision is 8 MB; the larger arrays of the analysis come and go
_KEPT_BYTES = 48 << 20


def keep_large_blocks() -> bool:
    """Raise the allocator's limits so that blocks up to 12 MB are reused; returns False where it has no such setting."""
    if not sys.platform.startswith("linux"):
        return False
    try:
        mallopt = ctypes.CDLL(None).mallopt
    except (AttributeError, OSError):
        return False  # another C library
    return bool(mallopt(_MMAP_THRESHOLD, _BLOCK_BYTES)) and bool(mallopt(_TRIM_THRESHOLD, _KEPT_BYTES))


def release_free_memory() -> None:
    """Hand freed memory back to the system: between reading a clip and analysing it, what one kept the other needs not."""
    if not sys.platform.startswith("linux"):
        return
    try:
        ctypes.CDLL(None).malloc_trim(0)
    except (AttributeError, OSError):
        pass  # another C library
