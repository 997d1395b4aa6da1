"""Speed and memory, as ratios against decoding alone in the same run.

Run from the project's top folder on an otherwise idle machine::

    python -m tests.bench.speed            # a minute of 1080p: time ratios; writes tests/bench/speed.md
    python -m tests.bench.speed --memory   # ten minutes of 1080p as well: peak memory

A rendered clip is repeated packet by packet to the wanted length, so decoding is real and rendering does not count. Each
figure comes from a process of its own; the median of the rounds is quoted.
"""

from __future__ import annotations

import argparse
import json
import os
import subprocess
import sys
import tempfile
from pathlib import Path

import av
import numpy as np

from framegrade.simulate import flight_from_dict, render
from tests.truth import flight

HERE = Path(__file__).parent
DECODE = """
import json, resource, sys, time
from framegrade.footage import read_frames
start = time.perf_counter()
count = sum(1 for _ in read_frames(sys.argv[1], threads=int(sys.argv[2])))
print(json.dumps({"wall_s": time.perf_counter() - start, "frames": count,
                  "peak_mb": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024}))
"""
MEASURE = """
import json, resource, sys, time
from pathlib import Path
from framegrade.measure import MeasureSettings, measure_clip
from framegrade.report.plots import write_plots
settings = MeasureSettings(readout_s=0.024, hfov_deg=80.0, exposure_s=0.001, threads=int(sys.argv[2]))
start = time.perf_counter()
record = measure_clip(Path(sys.argv[1]), settings)
measured = time.perf_counter()
write_plots(record, Path(sys.argv[3]))
print(json.dumps({"wall_s": measured - start, "plots_s": time.perf_counter() - measured,
                  "peak_mb": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024}))
"""


def repeat(source: Path, target: Path, seconds: float) -> None:
    """Write `source` end to end until `target` lasts `seconds`; packets are copied, not encoded again."""
    with av.open(str(source)) as first, av.open(str(target), "w") as out:
        stream = first.streams.video[0]
        copy = out.add_stream_from_template(stream)
        packets = [(bytes(p), p.pts, p.dts, p.duration, p.is_keyframe) for p in first.demux(stream) if p.dts is not None]
        span = max(p[1] + p[3] for p in packets) - min(p[1] for p in packets)
        for turn in range(int(np.ceil(seconds / float(span * stream.time_base)))):
            for data, pts, dts, duration, key in packets:
                packet = av.Packet(data)
                packet.pts, packet.dts, packet.duration = pts + turn * span, dts + turn * span, duration
                packet.time_base, packet.stream, packet.is_keyframe = stream.time_base, copy, key
                out.mux(packet)


def timed(script: str, *arguments: str) -> dict:
    done = subprocess.run([sys.executable, "-c", script, *arguments], capture_output=True, text=True, check=True)
    return json.loads(done.stdout.splitlines()[-1])


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--memory", action="store_true", help="also measure ten minutes of 1080p")
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--bits-per-pixel", type=float, default=0.3)
    args = parser.parse_args()
    cores = os.cpu_count() or 1
    with tempfile.TemporaryDirectory() as folder:
        short, minute = Path(folder) / "short.mp4", Path(folder) / "minute.mp4"
        tone = [{"axis": "yaw", "frequency_hz": 137.3, "amplitude_deg": 0.03}]
        render(flight_from_dict(flight(1920, 1080, 30.0, 24.0, seed=1, tones=tone, bits_per_pixel=args.bits_per_pixel)), short)
        repeat(short, minute, 60.0)
        ratios, walls, plots = [], [], []
        for _ in range(args.rounds):
            alone = timed(DECODE, str(minute), str(cores))
            whole = timed(MEASURE, str(minute), str(cores), folder)
            ratios.append(whole["wall_s"] / alone["wall_s"])
            walls.append((1e3 * alone["wall_s"] / alone["frames"], 1e3 * whole["wall_s"] / alone["frames"]))
            plots.append(whole["plots_s"])
            print(f"decoding alone {walls[-1][0]:.1f} ms a frame, measuring {walls[-1][1]:.1f} ms, ratio {ratios[-1]:.2f}, "
                  f"plots {plots[-1]:.1f} s, peak {whole['peak_mb']:.0f} MB", flush=True)
        lines = [
            "# Speed and memory, latest result", "",
            f"Made by `python -m tests.bench.speed{' --memory' if args.memory else ''}` on {cores} cores: 60 s of 1080p30 H.264 at "
            f"{args.bits_per_pixel:g} bits per pixel.", "",
            "| what | figure |", "|---|---|",
            f"| measuring over decoding alone, wall time, median of {args.rounds} | {np.median(ratios):.2f} |",
            f"| decoding alone, ms a frame | {np.median([w[0] for w in walls]):.1f} |",
            f"| measuring, ms a frame | {np.median([w[1] for w in walls]):.1f} |",
            f"| the three plots, s a clip | {np.median(plots):.2f} |",
        ]
        if args.memory:
            long = Path(folder) / "long.mp4"
            repeat(short, long, 600.0)
            whole = timed(MEASURE, str(long), str(cores), folder)
            lines.append(f"| peak memory, ten minutes of 1080p30 with plots, MB | {whole['peak_mb']:.0f} |")
        text = "\n".join(lines) + "\n"
        print(text)
        (HERE / "speed.md").write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
