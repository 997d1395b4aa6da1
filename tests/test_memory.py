"""The allocator's settings: buffers of a picture's size are reused, and what is freed can be handed back."""

from __future__ import annotations

import resource
import subprocess
import sys

import pytest

from framegrade.memory import keep_large_blocks, release_free_memory

# ten turns of an 8 MB array, all its pages touched: mapped afresh each time that is 2048 page faults a turn
TOUCH = """
import resource, sys
import numpy as np
if sys.argv[1] == "keep":
    from framegrade.memory import keep_large_blocks
    if not keep_large_blocks():
        print(-1); raise SystemExit
for turn in range(12):
    if turn == 2:
        start = resource.getrusage(resource.RUSAGE_SELF).ru_minflt
    np.ones(1 << 20)
print((resource.getrusage(resource.RUSAGE_SELF).ru_minflt - start) // 10)
"""


def _faults(mode: str) -> int:
    done = subprocess.run([sys.executable, "-c", TOUCH, mode], capture_output=True, text=True, check=True)
    return int(done.stdout)


def test_freed_buffers_are_used_again():
    kept = _faults("keep")
    if kept < 0:
        pytest.skip("this C library has no such setting")
    assert kept < 200


def test_releasing_is_safe_to_call_at_any_time():
    keep_large_blocks()
    block = bytearray(8 << 20)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    release_free_memory()
    assert len(block) == 8 << 20 and before > 0
