r"""Real records for a night: the seismometers that the obspy package ships.

Four stations of one network recorded local earthquakes on 27 May 2010 (230 s at 50 and
100 Hz). The script writes them in the tool's layout, with one station as the main
channel and the others as auxiliary ones::

    python tests/real/seismometers.py earthquakes
    dq night earthquakes/dq.toml --start 959012658 --end 959012890 \
        --out earthquakes/night
"""

from __future__ import annotations

import sys
import warnings
from pathlib import Path

import h5py
import numpy as np

#: GPS - UTC on that day was 15 s; GPS started at this Unix time.
GPS_ZERO_UNIX, LEAP_SECONDS = 315_964_800, 15

#: Onsets of the local earthquakes, s after the start of the records (by eye).
EARTHQUAKES_S = (30.0, 84.0, 179.0, 207.0)

MAIN = "BW.UH1.SHZ"

CONFIG = """# Seismometer records of 27 May 2010: UH1 is the main channel.
[site]
name = "Seismometers"
strain = "BW.UH1.SHZ"

[data]
files = ["raw/*.h5"]
channels = "channels.csv"

# Four minutes hold few coincidences, so few trials are made: seismic waves of 3 to
# 6 km/s cross a network of some kilometres within 2 s.
[witnesses]
snr_thresholds = [7.0, 10.0]
half_windows_s = [1.0, 2.0]
slow_max_rate_hz = 0                # four minutes have no running level to rise above
false_alarm_probability = 0.05

[vetoes]
max_dead_time = 0.4                 # four earthquakes in four minutes
"""


def load() -> list:
    """Give the vertical records as obspy traces."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import obspy

        folder = Path(obspy.__file__).parent / "signal" / "tests" / "data"
        names = ["UH1._.SHZ", "UH2._.SHZ", "UH3._.SHZ", "UH4._.EHZ"]
        paths = [folder / f"BW.{n}.D.2010.147.cut.slist.gz" for n in names]
        return [obspy.read(str(p))[0] for p in paths]


def write(directory: Path) -> tuple[int, int]:
    """Write the records and a config; give GPS start and end in whole seconds."""
    (directory / "raw").mkdir(parents=True, exist_ok=True)
    rows = ["channel,role,sample_rate,safe,quantity,unit,description"]
    starts, ends = [], []
    for trace in load():
        name = f"BW.{trace.stats.station}.{trace.stats.channel}"
        start = trace.stats.starttime.ns / 1e9 - GPS_ZERO_UNIX + LEAP_SECONDS
        rate = trace.stats.sampling_rate
        with h5py.File(directory / "raw" / f"{name}.h5", "w") as file:
            data = file.create_dataset(name, data=trace.data.astype(np.float64))
            data.attrs["gps_start"] = start
            data.attrs["sample_rate"] = rate
            data.attrs["unit"] = "count"
        role = "strain" if name == MAIN else "auxiliary"
        rows.append(f"{name},{role},{rate:g},,velocity,count,vertical")
        starts.append(start)
        ends.append(start + trace.stats.npts / rate)
    (directory / "channels.csv").write_text("\n".join(rows) + "\n")
    (directory / "dq.toml").write_text(CONFIG)
    return int(min(starts)), int(np.ceil(max(ends)))


if __name__ == "__main__":
    print(*write(Path(sys.argv[1])))
