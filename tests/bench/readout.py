"""Campaign of `framegrade readout`: rendered cameras, measured from the files, against what they were rendered with.

Run from the project's top folder (about half an hour on two cores)::

    python -m tests.bench.readout             # writes tests/bench/readout.csv and readout.md
    python -m tests.bench.readout --only turn # cases whose name contains "turn"

Every clip is seeded, rendered to a temporary folder and deleted when measured. Each row of readout.csv is one clip:
what was true, what was told, the stated 95 % half-width, or why the clip could not tell.
"""

from __future__ import annotations

import argparse
import os
import tempfile
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np
import pandas as pd

from framegrade.readout import clip as clips
from framegrade.readout.estimate import CannotTell
from framegrade.simulate import flight_from_dict, render

HERE = Path(__file__).parent
#: Width, height, frame rate, and range of readout times in milliseconds.
MODES = {
    "720p60": (1280, 720, 60, (5.0, 16.0)),
    "1080p30": (1920, 1080, 30, (5.0, 32.0)),
    "360p60": (640, 360, 60, (5.0, 16.0)),
}
AXES = ("yaw", "pitch", "roll")


def recipe(mode: str, seed: int, readout_ms: float, **tables) -> dict:
    """A flight recipe of a mode; `tables` are merged over its defaults."""
    width, height, rate, _ = MODES[mode]
    made = {
        "seed": seed,
        "camera": {"width_px": width, "height_px": height, "frame_rate": rate, "readout_ms": round(readout_ms, 3),
                   "exposure_ms": 1.0, "hfov_deg": 80.0},
        "flight": {"duration_s": 4.0, "height_m": 9.0, "tilt_deg": 30.0},
        "encode": {"codec": "h264", "bits_per_pixel": 0.2},
    }
    for name, table in tables.items():
        made[name] = {**made[name], **table} if isinstance(table, dict) and name in made else table
    return made


def hand(rms_deg: float, high_hz: float = 12.0, low_hz: float = 1.0) -> list[dict]:
    """The tremor of a hand about all axes."""
    return [{"axis": axis, "low_hz": low_hz, "high_hz": high_hz, "rms_deg": rms_deg} for axis in AXES]


def swing(mode: str, seed: int, readout_ms: float, rng: np.random.Generator) -> dict:
    """A camera swung by hand: 2.5 to 5 degrees at 1 to 3 Hz, with what goes along about the other axes."""
    size, speed = rng.uniform(2.5, 5.0), rng.uniform(1.0, 3.0)
    sway = [
        {"axis": "yaw", "frequency_hz": speed, "amplitude_deg": size},
        {"axis": "yaw", "frequency_hz": speed * rng.uniform(0.3, 0.6), "amplitude_deg": size * rng.uniform(0.1, 0.4)},
        {"axis": "pitch", "frequency_hz": speed * rng.uniform(0.5, 1.2), "amplitude_deg": rng.uniform(0.2, 1.0)},
        {"axis": "roll", "frequency_hz": speed * rng.uniform(0.5, 1.2), "amplitude_deg": rng.uniform(0.2, 1.0)},
    ]
    scene = {"kind": "backdrop", "distance_m": 12.0} if seed % 4 == 3 else {"kind": "ground"}
    scene["pattern"] = ("soil", "grass", "paving")[seed % 3]
    return recipe(mode, seed, readout_ms, sway=sway, broadband=hand(rng.uniform(0.01, 0.04)), scene=scene,
                  camera={"hfov_deg": rng.uniform(60, 105), "exposure_ms": rng.uniform(0.5, 4.0)},
                  flight={"tilt_deg": rng.uniform(10, 40)}, encode={"bits_per_pixel": rng.uniform(0.12, 0.3)})


def lamp(mode: str, seed: int, readout_ms: float, rng: np.random.Generator) -> dict:
    """A plain wall under a lamp, the camera held by hand."""
    return recipe(
        mode,
        seed,
        readout_ms,
        lamp={"flicker_hz": 100.0 * rng.uniform(0.999, 1.001), "depth": rng.uniform(0.05, 0.4)},
        broadband=hand(rng.uniform(0.01, 0.06), 8.0),
        scene={"kind": "backdrop", "distance_m": 2.0, "contrast": rng.uniform(2, 10), "brightness": 150.0},
        camera={"hfov_deg": rng.uniform(60, 105), "exposure_ms": rng.uniform(0.3, 3.0)},
        flight={"tilt_deg": 0.0, "duration_s": 2.5},
        encode={"bits_per_pixel": rng.uniform(0.1, 0.3)},
    )


SWAY = [
    {"axis": "yaw", "frequency_hz": 0.8, "amplitude_deg": 0.4},
    {"axis": "pitch", "frequency_hz": 1.7, "amplitude_deg": 0.2},
    {"axis": "roll", "frequency_hz": 1.2, "amplitude_deg": 0.15},
]


def cases() -> list[tuple[str, dict]]:
    """Name and recipe of every clip; the name begins with the way it is measured."""
    rng = np.random.default_rng(31)
    out: list[tuple[str, dict]] = []
    for i in range(20):
        mode = "720p60" if i % 2 == 0 else "1080p30"
        low, high = MODES[mode][3]
        readout = low + (high - low) * (i // 2) / 9
        out.append((f"swing {mode} {i:02d}", swing(mode, 400 + i, readout, rng)))
        out.append((f"flicker {mode} {i:02d}", lamp(mode, 500 + i, readout, rng)))
    for i, mode in enumerate(("720p60", "1080p30") * 2):
        thin = swing(mode, 430 + i, (8.0, 12.0, 14.0, 26.0)[i], rng)
        thin["encode"]["bits_per_pixel"] = 0.06
        out.append((f"thin swing {mode} {i}", thin))
    out.append(("swing global 720p60", swing("720p60", 420, 0.0, rng)))
    out.append(("flicker global 1080p30", lamp("1080p30", 520, 0.0, rng)))

    ahead = {"speed_mps": 4.0}
    big = [{**entry, "amplitude_deg": 4 * entry["amplitude_deg"]} for entry in SWAY]
    turning = [{"axis": "heading", "rate_deg_per_s": 25.0, "start_s": 1.0, "stop_s": 2.5, "ramp_s": 0.3},
               {"axis": "heading", "rate_deg_per_s": -25.0, "start_s": 2.5, "stop_s": 4.0, "ramp_s": 0.3}]
    for mode, readout in (("720p60", 14.0), ("1080p30", 24.0)):
        seed = 600 if mode == "720p60" else 610
        out.append(
            (f"refuse flight {mode}", recipe(mode, seed, readout, flight=ahead, sway=SWAY, broadband=hand(0.01)))
        )
        out.append(
            (f"refuse rough flight {mode}", recipe(mode, seed + 1, readout, flight={"speed_mps": 7.0}, sway=big))
        )
        out.append(
            (f"refuse turning flight {mode}", recipe(mode, seed + 2, readout, flight=ahead, sway=SWAY, pan=turning))
        )
        out.append((f"refuse hover {mode}", recipe(mode, seed + 3, readout, sway=SWAY)))
        out.append(
            (f"refuse still, cars {mode}", recipe(mode, seed + 4, readout, cars=[{"count": 25, "direction": "both"}]))
        )

    for i in range(4):
        readout = float(rng.uniform(6, 15))
        base = {"flight": {**ahead, "duration_s": 8.0}, "sway": SWAY, "camera": {"exposure_ms": 0.5}}
        turn_hz = float(rng.uniform(90, 190))
        motors = [
            {
                "count": 4,
                "axis": "yaw",
                "frequency_hz": turn_hz,
                "spread_pct": 8.0,
                "wander_pct": 0.5,
                "amplitude_deg": 0.05,
            }
        ]
        out.append((f"vibration motors {i}", recipe("360p60", 700 + i, readout, motors=motors, **base)))
        tone = [
            {"axis": "pitch", "frequency_hz": turn_hz, "amplitude_deg": 0.08, "wander_pct": 4.0, "wander_time_s": 3.0}
        ]
        out.append((f"vibration throttle {i}", recipe("360p60", 710 + i, readout, tone=tone, **base)))
        shaft = [{"axis": "yaw", "frequency_hz": turn_hz * order, "amplitude_deg": 0.05 / order} for order in (1, 2)]
        out.append((f"vibration shaft {i}", recipe("360p60", 720 + i, readout, tone=shaft, **base)))

    for i in range(8):
        mode = ("360p60", "720p60")[i % 2]
        rate = float(rng.uniform(28, 45)) * (-1) ** i
        took = 372 / abs(rate)
        pan = [{"axis": "heading", "rate_deg_per_s": rate, "start_s": 0.4, "stop_s": 0.4 + took, "ramp_s": 0.3}]
        out.append((f"turn {mode} {i}", recipe(
            mode, 800 + i, 10.0, pan=pan, broadband=hand(0.05, 6.0, 0.3), encode={"bits_per_pixel": 0.12},
            camera={"hfov_deg": float(rng.uniform(45, 110)), "frame_rate": 30},
            flight={"duration_s": round(took + 0.8, 2), "tilt_deg": float(rng.uniform(5, 35)), "height_m": 8.0})))
    half = [{"axis": "heading", "rate_deg_per_s": 35.0, "start_s": 0.4, "stop_s": 6.0, "ramp_s": 0.3}]
    out.append(
        ("refuse half a turn", recipe("360p60", 820, 10.0, pan=half, flight={"duration_s": 6.5, "tilt_deg": 15.0}))
    )
    return out


def run_case(job: tuple[str, dict, str]) -> dict:
    """Render and measure one clip; its row of readout.csv."""
    name, made, folder = job
    path = Path(folder) / f"{name.replace(' ', '_').replace(',', '')}.mp4"
    render(flight_from_dict(made), path)
    camera = made["camera"]
    true, told, ci, why = camera["readout_ms"], np.nan, np.nan, ""
    try:
        if "turn" in name.split()[:1] or name == "refuse half a turn":
            true = camera["hfov_deg"]
            view = clips.turn_field_of_view(path, threads=1)
            told, ci = view.hfov_deg, view.hfov_ci_deg
        else:
            if name.startswith(("swing", "thin swing")):
                readout = clips.swing_readout(clips.read_motion(path, threads=1))
            elif name.startswith("flicker"):
                readout = clips.flicker_readout(path, 100.0, threads=1)
            elif name.startswith("vibration"):
                motion = clips.read_motion(path, threads=1)
                readout = clips.vibration_readout(clips.vibration_lines(motion), motion.interval_s)
            else:
                readout = clips.automatic_readout(clips.read_motion(path, threads=1))[0]
            told, ci = readout.readout_s * 1e3, readout.ci_s * 1e3
    except CannotTell as error:
        why = error.cause
    finally:
        for left in path.parent.glob(path.stem + ".*"):
            left.unlink()
    return {"case": name, "true": true, "told": told, "ci95": ci, "why": why}


def summary(table: pd.DataFrame) -> str:
    """The table of `readout.md`."""
    lines = ["| what | clips | could not tell | worst error | median error | widest 95 % interval | truth inside it |",
             "|---|---|---|---|---|---|---|"]
    groups = [("swing clip of 4 s, " + m, f"swing {m}") for m in ("720p60", "1080p30")]
    groups += [("flicker clip of 2.5 s, " + m, f"flicker {m}") for m in ("720p60", "1080p30")]
    groups += [("swing clip of 0.06 bits per pixel, " + m, f"thin swing {m}") for m in ("720p60", "1080p30")]
    groups += [
        ("vibration: four motors of unlike speed", "vibration motors"),
        ("vibration: changing throttle", "vibration throttle"),
        ("vibration: two harmonics of one steady shaft", "vibration shaft"),
        ("field of view, full turn", "turn"),
    ]
    for label, start in groups:
        rows = table[table.case.str.startswith(start)]
        good = rows[rows.told.notna()]
        error, wide = 100 * (good.told / good.true - 1).abs(), 100 * good.ci95 / good.true
        inside = int(((good.told - good.true).abs() <= good.ci95).sum())
        figures = (
            f"{error.max():.2f} % | {error.median():.2f} % | {wide.max():.2f} % | {inside} of {len(good)}"
            if len(good)
            else " | | | "
        )
        lines.append(f"| {label} | {len(rows)} | {len(rows) - len(good)} | {figures} |")
    for label, start in (
        ("global shutter by swing, ms", "swing global"),
        ("global shutter by flicker, ms", "flicker global"),
    ):
        rows = table[table.case.str.startswith(start)]
        for _, row in rows.iterrows():
            lines.append(f"| {label} | 1 | {int(np.isnan(row.told))} | {abs(row.told):.3f} | | {row.ci95:.3f} | "
                         f"{int(abs(row.told) <= row.ci95)} of 1 |")
    refused = table[table.case.str.startswith("refuse")]
    lines.append(f"| flights and other clips to refuse | {len(refused)} | {int(refused.told.isna().sum())} | | | | |")
    return "\n".join(lines)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--only", default="", help="cases whose name contains this")
    parser.add_argument("--jobs", type=int, default=os.cpu_count())
    args = parser.parse_args()
    chosen = [(name, made) for name, made in cases() if args.only in name]
    rows: list[dict] = []
    with tempfile.TemporaryDirectory() as folder, ProcessPoolExecutor(args.jobs) as pool:
        for row in pool.map(run_case, [(name, made, folder) for name, made in chosen]):
            rows.append(row)
            print(
                f"{row['case']}: {row['true']:.4g} -> {row['told']:.5g} +- {row['ci95']:.2g} {row['why']}", flush=True
            )
    table = pd.DataFrame(rows)
    text = summary(table)
    print(text)
    if not args.only:
        table.round(5).to_csv(HERE / "readout.csv", index=False)
        (HERE / "readout.md").write_text(
            "# Readout and field-of-view campaign, latest result\n\n"
            "Made by `python -m tests.bench.readout`: rendered clips, H.264, "
            "0.1 to 0.3 bits per pixel.\n\n" + text + "\n",
            encoding="utf-8",
        )


if __name__ == "__main__":
    main()
