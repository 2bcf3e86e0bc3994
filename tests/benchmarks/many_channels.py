"""A night of many channels on disk, compressed, made quickly.

Each rate has a pool of compressed chunks of white noise with a burst in most; channels
are strings of chunks from the pool, each with its own offset, so that a day of data
costs the disk and not the compressor.
"""

from __future__ import annotations

import zlib
from pathlib import Path

import h5py
import numpy as np

GPS = 1_420_000_000 - 1_420_000_000 % 2048
CHUNK_S = 64
POOL = 23

#: Rates of a group of ten auxiliary channels: 1024 Hz on average.
MIXED = (256, 256, 256, 256, 512, 512, 1024, 1024, 2048, 4096)


def _chunk(rng, rate: int) -> bytes:
    x = rng.standard_normal(CHUNK_S * rate, dtype=np.float32)
    t = np.arange(len(x)) / rate
    f0, t0 = rate * rng.uniform(0.05, 0.2), rng.uniform(1, CHUNK_S - 1)
    burst = np.exp(-(((t - t0) * f0) ** 2)) * np.cos(2 * np.pi * f0 * (t - t0))
    rho = rng.uniform(4, 20)
    x += (rho * burst / np.sqrt(np.sum(burst**2))).astype(np.float32)
    return zlib.compress(x.tobytes(), 4)


def write_channels(
    folder: Path, *, rates: list[int], seconds: int, strain_rate: int
) -> Path:
    """Write a strain and auxiliary channels; give the configuration's path.

    Parameters
    ----------
    folder : Path
    rates : list of int
        One per auxiliary channel, Hz.
    seconds : int
        A multiple of ``CHUNK_S``.
    strain_rate : int
        Hz.

    Returns
    -------
    Path
    """
    (folder / "raw").mkdir(parents=True)
    rng = np.random.default_rng(3)
    pools: dict[int, list[bytes]] = {}
    names = ["OV-STRAIN"] + [f"OV-AUX-{k:04d}" for k in range(len(rates))]
    with h5py.File(folder / "raw" / "night.h5", "w") as file:
        for number, (name, rate) in enumerate(
            zip(names, [strain_rate, *rates], strict=True)
        ):
            if rate not in pools:
                pools[rate] = [_chunk(rng, rate) for _ in range(POOL)]
            data = file.create_dataset(
                name,
                shape=(rate * seconds,),
                dtype="<f4",
                chunks=(rate * CHUNK_S,),
                compression="gzip",
            )
            for k in range(seconds // CHUNK_S):
                raw = pools[rate][(k + 7 * number) % POOL]
                data.id.write_direct_chunk((k * CHUNK_S * rate,), raw)
            data.attrs["gps_start"] = GPS
            data.attrs["sample_rate"] = rate
    rows = [f"{n},{'auxiliary' if k else 'strain'}" for k, n in enumerate(names)]
    (folder / "channels.csv").write_text("\n".join(["channel,role", *rows]) + "\n")
    config = folder / "dq.toml"
    config.write_text(
        '[site]\nname = "Orrin Vale"\nstrain = "OV-STRAIN"\n'
        '[data]\nfiles = ["raw/*.h5"]\nchannels = "channels.csv"\n'
    )
    return config
