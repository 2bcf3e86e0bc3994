"""Speed of the witness search on synthetic tables, and how it grows.

``python tests/benchmarks/witness_speed.py`` prints seconds for 500 channels of 5000
transients against 2000 strain transients in a day, then with half of each.
"""

from __future__ import annotations

import time

import numpy as np
import pandas as pd

from dq.config import Witnesses
from dq.segments import Segments
from dq.witnesses import find_witnesses

GPS, DAY = 1_420_000_000, 86_400
COUPLED, SHARED = 20, 50


def table(rng, times) -> pd.DataFrame:
    """Make transients with a steep law of SNR."""
    times = np.sort(times)
    snr = 5.5 * (1 + rng.pareto(2.0, len(times)))
    return pd.DataFrame({"gps_time": GPS + times, "snr": snr})


def seconds(channels: int, transients: int, strain: int) -> tuple[float, int]:
    """Give the time of one search and the number of accepted witnesses."""
    rng = np.random.default_rng(1)
    seen = rng.uniform(0, DAY, strain)
    auxiliary = {}
    for k in range(channels):
        times = rng.uniform(0, DAY, transients)
        if k < COUPLED:
            times[:SHARED] = seen[:SHARED]
        auxiliary[f"OV-{k:04d}"] = table(rng, times)
    day = Segments.from_seconds([GPS], [GPS + DAY])
    begin = time.perf_counter()
    out = find_witnesses(
        table(rng, seen),
        auxiliary,
        analysed=day,
        auxiliary_analysed=dict.fromkeys(auxiliary, day),
        safety={},
        settings=Witnesses(),
    )
    return time.perf_counter() - begin, int(out.accepted.sum())


if __name__ == "__main__":
    for case in (
        (500, 5000, 2000),
        (250, 5000, 2000),
        (500, 2500, 2000),
        (500, 5000, 1000),
    ):
        took, accepted = seconds(*case)
        print(
            f"{case[0]} channels x {case[1]} transients, {case[2]} in the strain: "
            f"{took:.1f} s, {accepted} accepted ({COUPLED} planted)"
        )
