"""How long the witness search takes, and how it grows.

``python tests/benchmarks/witness_speed.py [CHANNELS [TRANSIENTS [ROWS]]]`` makes tables
of a day (by default 2000 channels of 10 000 rows and 10 000 strain transients in five
families), selects witnesses without slides and with 100, and prints wall time, memory,
and the time at half the channels and half the transients.
"""

from __future__ import annotations

import resource
import sys
import time

import numpy as np
import pandas as pd

from dq.config import Witnesses
from dq.segments import Segments
from dq.witnesses import find_witnesses

GPS, DAY = 1_420_000_000, 86400
WHOLE = Segments.from_seconds([GPS], [GPS + DAY])


def table(times, snr) -> pd.DataFrame:
    """Give activity of a twentieth of a second."""
    order = np.argsort(times)
    times = GPS + times[order]
    columns = {"gps_time": times, "gps_start": times - 0.025, "gps_end": times + 0.025}
    return pd.DataFrame(columns | {"snr": snr[order]})


def night(channels: int, transients: int, rows: int, seed: int = 1):
    """Give strain and channels; one channel in a hundred is coupled to a family."""
    rng = np.random.default_rng(seed)
    times = rng.uniform(0, DAY, transients)
    family = rng.integers(0, 5, transients)
    names = np.array([f"family-{k}" for k in range(5)], dtype=object)
    order = np.argsort(times)
    strain = table(times, 5.5 + rng.exponential(4, transients))
    strain = strain.assign(family=names[family[order]])
    others = {}
    for k in range(channels):
        at = rng.uniform(0, DAY, rows)
        if k % 100 == 0:
            heard = times[family == (k // 100) % 5][: rows // 5]
            at[: len(heard)] = heard
        others[f"OV-{k:05d}"] = table(at, 5.5 + rng.exponential(6, rows))
    return strain, others


def seconds(strain, others, slides: int) -> tuple[float, int]:
    """Give the wall time of a selection and the number of accepted rows."""
    begin = time.perf_counter()
    out = find_witnesses(
        strain,
        others,
        analysed=WHOLE,
        auxiliary_analysed=dict.fromkeys(others, WHOLE),
        safety={},
        settings=Witnesses(),
        slides=slides,
    )
    return time.perf_counter() - begin, int(out["accepted"].sum())


def main(channels: int = 2000, transients: int = 10_000, rows: int = 10_000) -> None:
    """Print the figures."""
    seconds(*night(4, 200, 100), slides=2)  # loads the inner loops
    strain, others = night(channels, transients, rows)
    plain, accepted = seconds(strain, others, 0)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(
        f"{channels} channels x {rows} rows, {transients} strain transients: selection "
        f"{plain:.1f} s, {accepted} accepted, peak {peak:.0f} MiB with the tables"
    )
    slid, _ = seconds(strain, others, 100)
    print(f"100 slides: {slid - plain:.1f} s more")
    half = dict(list(others.items())[: channels // 2])
    print(f"half the channels: {seconds(strain, half, 0)[0]:.1f} s")
    print(f"half the transients: {seconds(strain[::2], others, 0)[0]:.1f} s")


if __name__ == "__main__":
    main(*(int(word) for word in sys.argv[1:]))
