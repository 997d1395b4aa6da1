"""From a flight to a clip and its truth."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from .clock import schedule
from .encode import ClipWriter
from .picture import add_noise, exposed_picture, noise_pool
from .recipe import Flight
from .scene import build_world
from .truth import Truth, truth_of


def render(flight: Flight, out_path: str | Path, progress: Callable[[int, int], None] | None = None) -> Truth:
    """Render a flight to a video file and write its truth beside it.

    Parameters
    ----------
    flight : Flight
    out_path : str or Path
        Clip to write; the folder must exist. `NAME.truth.json` and `NAME.truth.npz` come beside it.
    progress : callable, optional
        Called with (frames done, frames in all) after each frame.

    Returns
    -------
    Truth

    Raises
    ------
    FlightError
        When a surface picture or the output file cannot be used.
    """
    frames = schedule(flight)
    world = build_world(flight)
    pool = noise_pool(flight)
    out_path = Path(out_path)
    # Half a clip would pass for a whole one, so the clip gets its name only when it is whole.
    part_path = out_path.with_name(f"{out_path.stem}.part{out_path.suffix}")
    writer = ClipWriter(part_path, flight, frames.time_base)
    picture = None
    try:
        for index, exposed_s in enumerate(frames.exposed_s):
            if picture is None or not frames.repeated[index]:
                picture = add_noise(flight, exposed_picture(flight, world, float(exposed_s)), index, pool)
            writer.add(picture, int(frames.pts_ticks[index]))
            if progress is not None:
                progress(index + 1, frames.exposed_s.size)
        writer.close()
    except BaseException:
        writer.abandon()
        part_path.unlink(missing_ok=True)
        raise
    part_path.replace(out_path)
    truth = truth_of(flight, frames)
    truth.save(out_path)
    return truth
