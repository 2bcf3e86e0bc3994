"""Peak memory of one process that searches a fast channel, for an hour and for a day.

``python tests/benchmarks/memory.py [--short]`` prints the peak resident set of ``find``
at 16384 Hz over 1 h and over 24 h. The day is the hour's file seen 24 times through a
virtual dataset.
"""

from __future__ import annotations

import argparse
import subprocess
import sys
import tempfile
from pathlib import Path

import h5py
import numpy as np

GPS = 1_420_000_000 - 1_420_000_000 % 2048

_CHILD = """
import sys
from dq.cli.main import main
try:
    main(sys.argv[1:])
except SystemExit as end:
    assert end.code in (0, None), end.code
for line in open("/proc/self/status"):
    if line.startswith("VmHWM"):
        print(line.split()[1], file=sys.stderr)
"""


def write_day(folder: Path, *, rate: int, hour_s: int, hours: int) -> Path:
    """Write an hour of noise and a virtual dataset that repeats it."""
    rng = np.random.default_rng(11)
    (folder / "raw").mkdir(parents=True)
    source = folder / "hour.h5"
    with h5py.File(source, "w") as file:
        data = file.create_dataset("x", (rate * hour_s,), "f4", chunks=(rate * 16,))
        for k in range(0, hour_s, 60):
            n = min(60, hour_s - k)
            values = rng.standard_normal(n * rate, dtype=np.float32)
            data[k * rate : (k + n) * rate] = values
    length = rate * hour_s
    layout = h5py.VirtualLayout((length * hours,), "f4")
    for k in range(hours):
        part = h5py.VirtualSource(str(source), "x", (length,))
        layout[k * length : (k + 1) * length] = part
    with h5py.File(folder / "raw" / "day.h5", "w", libver="latest") as file:
        data = file.create_virtual_dataset("OV-STRAIN", layout)
        data.attrs["gps_start"] = GPS
        data.attrs["sample_rate"] = rate
    (folder / "channels.csv").write_text("channel,role\nOV-STRAIN,strain\n")
    config = folder / "dq.toml"
    config.write_text(
        '[site]\nname = "Orrin Vale"\nstrain = "OV-STRAIN"\n'
        '[data]\nfiles = ["raw/*.h5"]\nchannels = "channels.csv"\n'
    )
    return config


def peak_mib(config: Path, seconds: int) -> float:
    """Give the peak resident set of one find in a process of its own, MiB."""
    verb = ["find", str(config), "OV-STRAIN", "--start", str(GPS)]
    verb += ["--end", str(GPS + seconds), "--out", str(config.parent / "out.csv")]
    # the high-water mark is the process's own: exec starts it anew, which the
    # resource usage of children does not
    done = subprocess.run(
        [sys.executable, "-c", _CHILD, *verb],
        capture_output=True,
        text=True,
        check=True,
    )
    return int(done.stderr.split()[-1]) / 1024


def measure(*, rate: int = 16384, hour_s: int = 3600, hours: int = 24):
    """Give the peaks over one hour and over all, MiB."""
    with tempfile.TemporaryDirectory() as name:
        config = write_day(Path(name), rate=rate, hour_s=hour_s, hours=hours)
        return tuple(peak_mib(config, hour_s * n) for n in (1, hours))


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--short", action="store_true")
    short = parser.parse_args().short
    hour, day = measure(**({"rate": 1024, "hour_s": 600, "hours": 3} if short else {}))
    print(f"peak resident set of find: 1 h {hour:.0f} MiB, 24 h {day:.0f} MiB")
