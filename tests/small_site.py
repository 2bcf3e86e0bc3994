"""A small invented site that tests write and change."""

import h5py
import numpy as np

SITE_START = 1420000000
SITE_SECONDS = 256
#: Seconds after the start at which the strain and OV-A hold the same loud burst.
SITE_BURSTS = (40.3, 71.7, 97.1, 118.9, 133.3, 161.4, 190.2, 211.6)


def _burst(times, at, *, frequency, sigma):
    return np.exp(-0.5 * ((times - at) / sigma) ** 2) * np.cos(
        2 * np.pi * frequency * (times - at)
    )


def write_site(base, *, dead=True, nan=None, gap=None, edit=None, extra=""):
    """Write a small site into a folder; give the path of its configuration.

    The strain and OV-A share bursts, OV-B is quiet, OV-DEAD is constant. The arguments
    change one thing each, so a test can say what is wrong with its site.
    """
    (base / "raw").mkdir(parents=True)
    noise = np.random.default_rng(7)
    channels = {}
    for name, rate in (("OV-STRAIN", 512), ("OV-A", 256), ("OV-B", 128)):
        times = np.arange(SITE_SECONDS * rate) / rate
        values = noise.standard_normal(len(times))
        if name != "OV-B":
            for at in SITE_BURSTS:
                values += 20 * _burst(times, at, frequency=40.0, sigma=0.04)
        channels[name] = (rate, values)
    if dead:
        channels["OV-DEAD"] = (64, np.full(64 * SITE_SECONDS, 3.0))
    if nan is not None:
        name, low, high = nan
        rate, values = channels[name]
        values[int(low * rate) : int(high * rate)] = np.nan
    if edit is not None:
        edit(channels)
    with h5py.File(base / "raw" / "a.h5", "w") as file:
        for name, (rate, values) in channels.items():
            parts = [(0.0, values)]
            if gap is not None and name == "OV-STRAIN":
                low, high = (int(g * rate) for g in gap)
                parts = [(0.0, values[:low]), (gap[1], values[high:])]
            for number, (offset, part) in enumerate(parts):
                data = file.create_dataset(f"{number}/{name}", data=part)
                data.attrs["gps_start"] = SITE_START + offset
                data.attrs["sample_rate"] = rate
    rows = [f"{n},{'strain' if n == 'OV-STRAIN' else 'auxiliary'}" for n in channels]
    (base / "channels.csv").write_text("\n".join(["channel,role", *rows]) + "\n")
    (base / "dq.toml").write_text(
        '[site]\nname = "Orrin Vale"\nstrain = "OV-STRAIN"\n'
        '[data]\nfiles = ["raw/*.h5"]\nchannels = "channels.csv"\n' + extra
    )
    return base / "dq.toml"
