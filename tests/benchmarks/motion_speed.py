"""CPU time of the derived channels over the transient finder's on the same channel.

``python tests/benchmarks/motion_speed.py [RATE ...]`` prints, for each sample rate, the
CPU time of levels and fringe frequencies and that of the finder. Both take the same
samples, so reading counts for neither.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

import numpy as np
from memory_channel import NS, MemoryChannel

from dq.config import parse_config
from dq.night.channel import analyse_channel
from dq.night.motion_plan import plan_motion
from dq.store import Channel

GPS = 1_420_000_000 - 1_420_000_000 % 1024


def measure(rate: int, seconds: int, rounds: int = 3) -> tuple[float, float]:
    """Give CPU seconds of the finder alone and with derived channels, best of each."""
    config = parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
        }
    )
    row = Channel("OV-A", "auxiliary", quantity="displacement", unit="nm")
    values = np.random.default_rng(rate).standard_normal(seconds * rate)
    motion = plan_motion(row, rate, "", config, 10.0)
    took: dict[bool, list[float]] = {True: [], False: []}
    for _ in range(rounds):
        for derive in (False, True):
            data = MemoryChannel("OV-A", rate, GPS * NS, values.astype(np.float32))
            begin = time.process_time()
            analyse_channel(
                data,
                ready=None,
                start_ns=GPS * NS,
                end_ns=(GPS + seconds) * NS,
                config=config,
                motion=motion if derive else None,
            )
            took[derive].append(time.process_time() - begin)
    return min(took[False]), min(took[True])


if __name__ == "__main__":
    measure(64, 1024, 1)  # compiles or loads the inner loops
    for rate in [int(r) for r in sys.argv[1:]] or [32, 64, 128, 256]:
        length = 43200 if rate >= 128 else 86400
        finder, both = measure(rate, length)
        per_hour = 3600 / length * 1e3
        print(
            f"{rate:4d} Hz: finder {finder * per_hour:7.2f} ms CPU an hour, derived "
            f"channels {(both - finder) * per_hour:6.2f} ms, share "
            f"{both / finder - 1:.1%}"
        )
