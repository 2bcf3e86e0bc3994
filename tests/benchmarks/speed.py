"""Speed of the finder as ratios, measured in alternation in one process.

``python tests/benchmarks/speed.py [RATE ...]`` prints, for each sample rate, the CPU
time of the whole ``find`` (reading, conditioning, tiles, clusters, writing) over the
CPU time of the bare inverse FFTs of the same plan.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import math
import sys
import tempfile
import time
from pathlib import Path

import h5py
import numpy as np
import scipy.fft

from dq.tiles.plan import band_rows, tiles_in_row

GPS = 1_420_000_000 - 1_420_000_000 % 512
BLOCK_S = 64.0


def write_noise(directory: Path, rate: int, seconds: int, *, compress=None) -> Path:
    """Write white noise as one channel and a config; give the config's path."""
    rng = np.random.default_rng(rate)
    (directory / "raw").mkdir(parents=True, exist_ok=True)
    with h5py.File(directory / "raw" / "noise.h5", "w") as file:
        data = file.create_dataset(
            "OV-STRAIN",
            shape=(rate * seconds,),
            dtype="f4",
            compression=compress,
            chunks=(rate * 16,) if compress else None,
        )
        for k in range(0, seconds, 64):
            n = min(64, seconds - k) * rate
            data[k * rate : k * rate + n] = rng.standard_normal(n, dtype=np.float32)
        data.attrs["gps_start"] = GPS
        data.attrs["sample_rate"] = rate
    (directory / "channels.csv").write_text("channel,role\nOV-STRAIN,strain\n")
    config = directory / "dq.toml"
    config.write_text(
        '[site]\nname = "Orrin Vale"\nstrain = "OV-STRAIN"\n'
        '[data]\nfiles = ["raw/*.h5"]\nchannels = "channels.csv"\n'
        "[tiles]\nf_low_hz = 10.0\n"
    )
    return config


def bare_rows(rate: float) -> list[int]:
    """Give the row lengths of the plan over a block, as products of small primes."""
    q, f, _ = band_rows(
        rate,
        f_low=10.0,
        f_high=None,
        q_min=4.0,
        q_max=64.0,
        mismatch=0.2,
        max_settling_s=math.inf,
    )
    return [
        scipy.fft.next_fast_len(tiles_in_row(a, b, BLOCK_S, 0.2))
        for a, b in zip(q, f, strict=True)
    ]


def bare_seconds(rows: list[int], batch: int, rng) -> float:
    """Give the CPU time per block of the inverse FFTs alone."""
    total = 0.0
    for n in rows:
        x = rng.standard_normal((batch, 2 * n), dtype=np.float32).view(np.complex64)
        begin = time.process_time()
        scipy.fft.ifft(x, axis=1, overwrite_x=True, workers=1)
        total += time.process_time() - begin
    return total / batch


def find_seconds(config: Path, seconds: int, out: Path) -> float:
    """Give the CPU time of one find, start-up left out."""
    from dq.config import load_config
    from dq.night.find import find_in_channel, write_found

    begin = time.process_time()
    settings = load_config(config)
    write_found(
        out, find_in_channel(settings, "OV-STRAIN", start=GPS, end=GPS + seconds)
    )
    return time.process_time() - begin


def ratio(rate: int, seconds: int, rounds: int = 3) -> tuple[float, float, float]:
    """Give (find, bare, ratio) with CPU seconds per block, the best of each."""
    rng = np.random.default_rng(1)
    rows = bare_rows(float(rate))
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        config = write_noise(folder, rate, seconds)
        out = folder / "out.csv"
        find_seconds(config, 128, out)  # compiles or loads the inner loops
        finds, bares = [], []
        for _ in range(rounds):
            bares += [bare_seconds(rows, b, rng) for b in (1, 8, 16)]
            finds.append(find_seconds(config, seconds, out) / (seconds / BLOCK_S))
    return min(finds), min(bares), min(finds) / min(bares)


if __name__ == "__main__":
    rates = [int(r) for r in sys.argv[1:]] or [1024, 4096, 16384]
    for rate in rates:
        length = {1024: 16384, 4096: 8192}.get(rate, 2048)
        find, bare, quotient = ratio(rate, length)
        print(
            f"{rate:6d} Hz: find {find * 1e3:8.2f} ms per 64 s block, bare inverse "
            f"FFTs {bare * 1e3:8.2f} ms, ratio {quotient:.2f}, "
            f"{BLOCK_S / find:.0f} x real time"
        )
