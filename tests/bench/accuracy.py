"""Accuracy campaign: rendered flights, measured end to end, against the simulator's own truth.

Run from the project's top folder (about a quarter of an hour on two cores)::

    python -m tests.bench.accuracy            # writes tests/bench/accuracy.csv and accuracy.md
    python -m tests.bench.accuracy --only two # cases whose name contains "two"

Every flight is seeded. Clips are rendered to a temporary folder, one process per core. Each row of accuracy.csv is one
checked figure: case, what, true value, measured value, stated 95 % half-width.
"""

from __future__ import annotations

import argparse
import os
import tempfile
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np
import pandas as pd

from tests.truth import dense_motion, flight, measure, true_figures

HERE = Path(__file__).parent
MODES = {"720p60": (1280, 720, 60.0, 14.0), "1080p30": (1920, 1080, 30.0, 24.0)}


def _clear(rng: np.random.Generator, low: float, high: float, rate: float) -> float:
    """A frequency outside the blind intervals of both modes (multiples of 30 Hz)."""
    while True:
        f = rng.uniform(low, high)
        if abs(f - 30 * round(f / 30)) > 4.0:
            return float(f)


def cases() -> list[tuple[str, dict]]:
    """Name and flight recipe of every case."""
    rng = np.random.default_rng(20)
    out: list[tuple[str, dict]] = []
    for i in range(20):
        mode = "720p60" if i % 2 == 0 else "1080p30"
        small = [0.15, 0.2, 0.3, 0.45, 0.8][i // 4]
        tones = [
            {"axis": "yaw", "frequency_hz": _clear(rng, 60, 250, 30), "amplitude_px": small, "phase_deg": float(rng.uniform(0, 360))},
            {"axis": "pitch", "frequency_hz": _clear(rng, 60, 250, 30), "amplitude_px": small * float(rng.uniform(1, 1.5)),
             "phase_deg": float(rng.uniform(0, 360))},
        ]
        out.append((f"tone {mode} {i:02d}", flight(*MODES[mode], seed=100 + i, tones=tones)))
    for i, mode in enumerate(MODES):
        a, b = _clear(rng, 60, 250, 30), _clear(rng, 60, 250, 30)
        tones = [{"axis": "yaw", "frequency_hz": a, "amplitude_px": 0.6}, {"axis": "yaw", "frequency_hz": b, "amplitude_px": 0.2}]
        out.append((f"two {mode}", flight(*MODES[mode], seed=200 + i, tones=tones)))
        roll = [{"axis": "roll", "frequency_hz": _clear(rng, 60, 250, 30), "amplitude_deg": 0.05}]
        out.append((f"roll {mode}", flight(*MODES[mode], seed=210 + i, tones=roll)))
        out.append((f"calm {mode}", flight(*MODES[mode], seed=220 + i)))
        band = [{"axis": "yaw", "low_hz": 80.0, "high_hz": 160.0, "rms_deg": 0.0225}]
        out.append((f"broadband {mode}", flight(*MODES[mode], seed=230 + i, broadband=band)))
        same = [{"axis": "yaw", "frequency_hz": 137.3, "amplitude_deg": 0.034}, {"axis": "pitch", "frequency_hz": 96.4, "amplitude_deg": 0.02}]
        out.append((f"same {mode}", flight(*MODES[mode], seed=240, tones=same)))
        motors = [{"count": 4, "axis": "yaw", "frequency_hz": 137.0, "spread_pct": 1.5, "wander_pct": 1.0, "amplitude_deg": 0.018}]
        out.append((f"motors {mode}", flight(*MODES[mode], seed=250 + i, motors=motors)))
        wander = [{"axis": "pitch", "frequency_hz": 165.0, "amplitude_deg": 0.03, "wander_pct": 1.5}]
        out.append((f"wander {mode}", flight(*MODES[mode], seed=260 + i, tones=wander)))
        shaky = [{"axis": "yaw", "frequency_hz": 5.3, "amplitude_deg": 0.08}, {"axis": "pitch", "frequency_hz": 8.1, "amplitude_deg": 0.05},
                 {"axis": "roll", "frequency_hz": 6.2, "amplitude_deg": 0.08}]
        out.append((f"shaky {mode}", flight(*MODES[mode], seed=270 + i, tones=shaky)))
    w, h, rate, _ = MODES["720p60"]
    tone = [{"axis": "yaw", "frequency_hz": 137.3, "amplitude_px": 0.45}]
    out.append(("global 720p60", flight(w, h, rate, 0.0, seed=300, tones=tone)))
    out.append(("cars 720p60", flight(*MODES["720p60"], seed=310, still=True, cars=25)))
    return out


def run_case(job: tuple[str, dict, str]) -> list[dict]:
    """Render, measure and compare one case; rows of accuracy.csv."""
    name, recipe, folder = job
    clip = Path(folder) / f"{name.replace(' ', '_')}.mp4"
    record, rendered = measure(recipe, clip)
    clip.unlink()
    rows = []

    def row(what: str, true: float, measured: float, ci: float = np.nan) -> None:
        rows.append({"case": name, "what": what, "true": true, "measured": measured, "ci95": ci})

    figures = true_figures(rendered)
    for what in ("sway", "shake", "jello"):
        row(f"{what}_px1920", figures[what], record.take[f"{what}_px1920"])
    row("vibration_mdeg", figures["vibration_mdeg"], record.take["vibration_mdeg"])
    steady = [t for t in rendered.truth.facts["tones"] if t["frequency_sd_hz"] < 1e-6 and t["frequency_hz"] > 20]
    left = record.tones.copy()
    for tone in steady if not name.startswith("global") else ():  # a global shutter's tone has candidates, not a figure
        near = left[(left.axis == tone["axis"]) & ((left.frequency_hz - tone["frequency_hz"]).abs() < 1.0)]
        best = near.iloc[0] if len(near) else None
        get = (lambda column: float(best[column])) if best is not None else (lambda column: np.nan)
        row(f"{tone['axis']} tone frequency_hz", tone["frequency_hz"], get("frequency_hz"), get("frequency_ci_hz"))
        row(f"{tone['axis']} tone amplitude_px", tone["amplitude_px"], get("amplitude_px"), get("amplitude_ci_px"))
        if best is not None:
            left = left.drop(best.name)
    if not name.startswith(("shaky", "motors", "wander", "broadband", "global")):
        row("strongest false tone px", 0.0, float(left.amplitude_px.max()) if len(left) else 0.0)
    if name.startswith(("motors", "wander", "broadband")):
        axis = "pitch" if name.startswith("wander") else "yaw"
        for low, high in ((70.8, 89.1), (89.1, 112.2), (112.2, 141.3), (141.3, 177.8)):
            band = record.spectrum[(record.spectrum.axis == axis) & ((record.spectrum.low_hz - low).abs() < 0.1)]
            true = truth_band(rendered, axis, low, high)
            if true > 0.02:
                row(f"{axis} band {low:g}-{high:g} level_px (seen {float(band.observable_pct.iloc[0]):.0f} %)", true,
                    float(band.level_px.iloc[0]))
    return rows


def truth_band(rendered, axis: str, low_hz: float, high_hz: float) -> float:
    """Level of the true, exposure-averaged motion in a band, native px rms, from its own dense time series."""
    t, px = dense_motion(rendered)
    series = px[:, ("yaw", "pitch", "roll").index(axis)]
    spectrum = np.abs(np.fft.rfft((series - series.mean()) * np.hanning(len(series)))) ** 2
    frequency = np.fft.rfftfreq(len(series), t[1] - t[0])
    inside = (frequency >= low_hz) & (frequency < high_hz)
    return float(np.sqrt(2 * spectrum[inside].sum() / (np.hanning(len(series)) ** 2).sum() / len(series)))


def summary(table: pd.DataFrame) -> str:
    """The table of `accuracy.md`."""
    lines = ["| what | cases | worst error | within stated 95 % interval |", "|---|---|---|---|"]

    def add(label: str, rows: pd.DataFrame, relative: bool) -> None:
        if not len(rows):
            return
        error = rows.measured - rows.true
        missing = int(rows.measured.isna().sum())
        worst = (100 * (error / rows.true).abs()).max() if relative else error.abs().max()
        unit = " %" if relative else ""
        inside = (error.abs() <= rows.ci95).sum()
        within = f"{inside} of {len(rows)}" if rows.ci95.notna().any() else ""
        lines.append(f"| {label} | {len(rows)}{f' ({missing} not found)' if missing else ''} | {worst:.3g}{unit} | {within} |")

    tone = table[table.case.str.startswith("tone")]
    amplitude, frequency = tone[tone.what.str.endswith("amplitude_px")], tone[tone.what.str.endswith("frequency_hz")]
    add("single tones: frequency, Hz", frequency, False)
    add("single tones of 0.3 px and more: amplitude", amplitude[amplitude.true >= 0.29], True)
    add("single tones of 0.15 to 0.29 px: amplitude", amplitude[amplitude.true < 0.29], True)
    for prefix in ("two", "roll", "same"):
        part = table[table.case.str.startswith(prefix)]
        add(f"{prefix}: tone frequency, Hz", part[part.what.str.endswith("frequency_hz")], False)
        add(f"{prefix}: tone amplitude", part[part.what.str.endswith("amplitude_px")], True)
    add("same vibration, two modes: vibration_mdeg", table[table.case.str.startswith("same") & (table.what == "vibration_mdeg")], True)
    false = table[table.what == "strongest false tone px"]
    add("strongest false tone, px", false, False)
    for prefix in ("broadband", "motors", "wander"):
        part = table[table.case.str.startswith(prefix) & table.what.str.contains("band ")].copy()
        if len(part):
            decibel = 20 * np.log10(part.measured / part.true)
            lines.append(f"| {prefix}: band levels | {len(part)} | {decibel.abs().max():.2f} dB | |")
    jello = table[(table.what == "jello_px1920") & (table.true >= 0.3)]
    add("jello_px1920 from 0.3 px up", jello, True)
    add("sway_px1920 from 1 px up", table[(table.what == "sway_px1920") & (table.true >= 1)], True)
    add("shake_px1920 from 0.5 px up", table[(table.what == "shake_px1920") & (table.true >= 0.5)], True)
    add("cars, static camera: jello_px1920", table[table.case.str.startswith("cars") & (table.what == "jello_px1920")], False)
    add("global shutter: jello_px1920", table[table.case.str.startswith("global") & (table.what == "jello_px1920")], False)
    return "\n".join(lines)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--only", default="", help="cases whose name contains this")
    parser.add_argument("--jobs", type=int, default=os.cpu_count())
    args = parser.parse_args()
    chosen = [(name, recipe) for name, recipe in cases() if args.only in name]
    rows: list[dict] = []
    with tempfile.TemporaryDirectory() as folder, ProcessPoolExecutor(args.jobs) as pool:
        for (name, _), part in zip(chosen, pool.map(run_case, [(n, r, folder) for n, r in chosen])):
            print(name, "; ".join(f"{r['what']} {r['true']:.4g} -> {r['measured']:.4g}" for r in part), flush=True)
            rows += part
    table = pd.DataFrame(rows)
    text = summary(table)
    print(text)
    if not args.only:
        table.round(5).to_csv(HERE / "accuracy.csv", index=False)
        (HERE / "accuracy.md").write_text("# Accuracy campaign, latest result\n\nMade by `python -m tests.bench.accuracy`: rendered flights of "
                                          "4 s at 0.3 bits per pixel.\n\n" + text + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
