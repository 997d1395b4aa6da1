"""A measurement that needs no picture: what a "clip" says in its text is what comes out of measuring it.

Used by the tests of the pipeline and of the command. At module level, because worker processes import it.

A clip holds lines `word value`: `grade keep`, `score 91`, `reason ...`, or what is to go wrong: `fail CAUSE`,
`raise TEXT`, `signal N`, `exit N`, `wait SECONDS`, `interrupt 1`. `once PATH` makes the trouble happen only while
PATH does not exist, and makes it.
"""

from __future__ import annotations

import os
import signal
import time
from pathlib import Path

import numpy as np
import pandas as pd

from framegrade import records
from framegrade.footage import FootageError
from framegrade.records import TakeRecord

LOG = "FAKE_TAKE_LOG"


def clip_text(**lines) -> str:
    """The text of a clip."""
    return "".join(f"{word} {value}\n" for word, value in lines.items())


def make_record(clip="a.mp4", grade="keep", score=91.25, reason="jello 0.1234 px1920", rows=3, notes=(), extra=None,
                **figures) -> TakeRecord:
    """A record with every table filled, with missing figures in all of them."""
    take = dict.fromkeys(records.TAKE_COLUMNS, np.nan) | {
        "clip": clip, "status": "graded", "grade": grade, "score": score, "reason": reason, "duration_s": 4.0166667,
        "width_px": 1280, "height_px": 720, "frame_rate_hz": 60000 / 1001, "mode": "1280x720@59.94", "codec": "h264",
        "bit_rate_mbps": 8.123456, "readout_ms": 14.0, "readout_source": "given", "jello_px1920": 0.12345678,
        "shake_px1920": 0.456789, "strongest_hz": 137.3042, "strongest_px": 0.4512345, "measured_pct": 93.0,
    } | figures
    count = np.arange(rows)

    def table(columns, **given):
        frame = pd.DataFrame({column: given.get(column, 0.5 + count / 3) for column in columns}, index=count)
        if rows:
            frame.loc[rows - 1, columns[-1]] = np.nan
        return frame

    axes = np.resize(np.array(records.AXES), rows)
    density = pd.DataFrame({"axis": axes, "frequency_hz": 10.0 + count, "level_px2_per_hz": 1e-7 / (1 + count),
                            "floor_px2_per_hz": np.full(rows, np.nan), "observable": count % 2 == 0})
    return TakeRecord(
        take=take,
        tones=table(records.TONE_COLUMNS, clip=clip, axis=axes, frequency_hz=137.3042 + count),
        spectrum=table(records.SPECTRUM_COLUMNS, clip=clip, axis=axes, band_hz=np.full(rows, 31.5)),
        ranges=table(records.RANGE_COLUMNS, clip=clip, in_timecode="00:00:01:12", out_timecode="00:00:02:00"),
        motion=table(records.MOTION_COLUMNS, frame=count, time_s=count * 1001 / 60000, repeated=0),
        windows=table(records.WINDOW_COLUMNS, component="jello", reason="jello, at last, 1.2 px", usable=count > 0),
        density=density, wobble_px=np.linspace(-1, 1, rows * 4).reshape(rows, 4), wobble_time_s=count / 60,
        notes=tuple(notes), extra={"candidates_hz": [77.3, 137.3]} if extra is None else extra,
    )


def measure(path: Path, settings, progress) -> TakeRecord:
    """Do what the clip says."""
    if LOG in os.environ:
        with open(os.environ[LOG], "a", encoding="utf-8") as log:
            log.write(f"{path.name}\n")
    try:
        text = path.read_text(encoding="utf-8")
    except OSError as error:
        raise FootageError(path, f"cannot be opened: {error.strerror}") from None
    said = dict(line.split(" ", 1) for line in text.splitlines() if " " in line)
    progress(0.5)
    trouble = True
    if "once" in said:
        trouble = not os.path.exists(said["once"])
        Path(said["once"]).touch()
    if trouble:
        _trouble(path, said)
    progress(1.0)
    print("a library that prints")
    return make_record(path.name, said.get("grade", "keep"), float(said.get("score", 91)),
                       said.get("reason", "jello 0.12 px1920"), notes=[said["note"]] if "note" in said else (),
                       extra={"text": text, "readout_s": settings.readout_s})


def _trouble(path: Path, said: dict[str, str]) -> None:
    if "wait" in said:
        time.sleep(float(said["wait"]))
    if "fail" in said:
        raise FootageError(path, said["fail"])
    if "raise" in said:
        raise ValueError(said["raise"])
    if "interrupt" in said:
        raise KeyboardInterrupt
    if "signal" in said:
        signal.signal(int(said["signal"]), signal.SIG_DFL) if int(said["signal"]) != signal.SIGKILL else None
        os.kill(os.getpid(), int(said["signal"]))
        time.sleep(5)
    if "exit" in said:
        os._exit(int(said["exit"]))


def plot(record: TakeRecord, folder: Path) -> list[Path]:
    """Three files in place of pictures."""
    files = [folder / name for name in ("motion.png", "spectrum.png", "wobble.png")]
    for path in files:
        path.write_bytes(b"picture")
    return files


def broken_plot(record: TakeRecord, folder: Path) -> list[Path]:
    """Fails as a fault in the drawing would, half way."""
    (folder / "motion.png").write_bytes(b"half")
    raise ValueError("no such colour")


def full_disk_plot(record: TakeRecord, folder: Path) -> list[Path]:
    """No room left for clips called "big": the real error of the kernel, from the device that is always full."""
    if "big" in record.take["clip"]:
        with open("/dev/full", "wb", buffering=0) as file:
            file.write(b"picture")
    return plot(record, folder)
