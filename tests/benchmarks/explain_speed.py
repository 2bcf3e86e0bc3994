"""How long ``dq explain`` takes on a day with 500 channels, Python's start included.

``python tests/benchmarks/explain_speed.py DIR`` writes an invented night's folder of
that size into DIR (which must not exist; a few hundred megabytes), then asks about ten
times and prints wall and CPU time of the whole command.
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd

from dq.segments import NS, Segments, to_ns_array
from dq.tables import (
    COVERAGE,
    NIGHT_CHANNELS,
    STRAIN_TRANSIENTS,
    TRANSIENTS,
    VETO_COST,
    VETOES,
    WITNESSES,
    conform,
    empty,
)
from dq.writers import write_table, write_transients_h5

GPS, DAY = 1_420_000_000, 86_400
CHANNELS, EACH, STRAIN, ACCEPTED = 500, 5000, 10_000, 30


def transients(rng: np.random.Generator, count: int) -> pd.DataFrame:
    """Make a channel's table."""
    at = GPS + np.sort(np.round(rng.uniform(0, DAY, count), 6))
    length = rng.exponential(0.1, count)
    frequency = rng.uniform(10, 500, count)
    columns = {
        "gps_time": at,
        "gps_start": at - length,
        "gps_end": at + length,
        "frequency_hz": frequency,
        "f_low_hz": 0.9 * frequency,
        "f_high_hz": 1.1 * frequency,
        "q": 8.0,
        "snr": 5.5 * (1 + rng.pareto(2.0, count)),
        "amplitude": 1e-22,
        "tile_count": 12,
    }
    return conform(pd.DataFrame(columns), TRANSIENTS)


def write_folder(directory: Path) -> None:
    """Write every table that the command reads, at a day's size."""
    rng = np.random.default_rng(5)
    directory.mkdir(parents=True)
    names = [f"OV-AUX-{k:03d}" for k in range(CHANNELS)]
    tables = {n: transients(rng, EACH) for n in names}
    write_transients_h5(
        directory / "transients.h5", {n: (t, {}) for n, t in tables.items()}
    )
    strain = transients(rng, STRAIN).assign(
        transient_id=[str(k) for k in range(STRAIN)],
        family="unsorted",
        witness="",
        veto="",
    )
    write_table(directory / "strain_transients.csv", strain, STRAIN_TRANSIENTS)
    witnesses = pd.DataFrame(
        {
            "order": [k + 1 if k < ACCEPTED else None for k in range(CHANNELS)],
            "channel": names,
            "target": "all",
            "snr_threshold": 7.0,
            "half_window_s": 0.1,
            "p_value": 1e-5,
            "safety": "safe",
            "accepted": [k < ACCEPTED for k in range(CHANNELS)],
            "reason": "",
        }
    )
    write_table(directory / "witnesses.csv", witnesses, WITNESSES)
    parts = []
    for name in names[:ACCEPTED]:
        loud = tables[name][tables[name]["snr"] >= 7.0]
        at = to_ns_array(loud["gps_time"].to_numpy(float))
        time_ = Segments(at - NS // 10, at + NS // 10)
        parts.append(
            pd.DataFrame({"gps_start": time_.starts, "gps_end": time_.ends}).assign(
                veto=f"witness-{name.lower()}",
                category=2,
                source="witness",
                channel=name,
                family="",
            )
        )
    write_table(directory / "vetoes.csv", pd.concat(parts), VETOES)
    write_table(directory / "veto_cost.csv", empty(VETO_COST), VETO_COST)
    every = ["OV-STRAIN", *names]
    coverage = pd.DataFrame(
        {
            "channel": every,
            "kind": "analysed",
            "gps_start": GPS * NS,
            "gps_end": (GPS + DAY) * NS,
        }
    )
    write_table(directory / "coverage.csv", coverage, COVERAGE)
    channels = pd.DataFrame({"channel": every, "role": "auxiliary", "status": "ok"})
    write_table(directory / "channels.csv", channels, NIGHT_CHANNELS)
    manifest = {
        "tool": "dq",
        "schema": 1,
        "state": "finished",
        "gps_start": str(GPS),
        "gps_end": str(GPS + DAY),
        "config": {"site": {"name": "Orrin Vale", "strain": "OV-STRAIN"}},
    }
    (directory / "manifest.json").write_text(json.dumps(manifest))
    (directory / "summary.json").write_text("{}")


if __name__ == "__main__":
    folder = Path(sys.argv[1])
    if not folder.exists():
        write_folder(folder)
    rows = sum(1 for _ in (folder / "vetoes.csv").open()) - 1
    print(f"{CHANNELS} channels x {EACH}, {STRAIN} in the strain, {rows} veto rows")
    wall, used = [], []
    for at in np.linspace(GPS + 100, GPS + DAY - 100, 10):
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        began = time.perf_counter()
        subprocess.run(
            [sys.executable, "-m", "dq", "explain", folder, f"{at:.3f}"],
            check=True,
            capture_output=True,
        )
        wall.append(time.perf_counter() - began)
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        used.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
    print(
        f"dq explain: wall {np.median(wall):.2f} s (worst {max(wall):.2f}), "
        f"CPU {np.median(used):.2f} s"
    )
