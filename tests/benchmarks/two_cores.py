"""A night over many channels with one worker against two, alternating.

``python tests/benchmarks/two_cores.py [--short]`` prints the wall time of the whole
night and of its channels with ``--jobs`` 1 and 2, what a worker's start costs, and the
ratios, each from the best of several runs. Wall times mean something only on a quiet
machine: ``others`` is the number of processors that other programs kept busy during
the best runs, where the system tells (below 0.05 is quiet). The CPU times say what
working side by side costs, on any machine.
"""

from __future__ import annotations

import argparse
import os
import shutil
import tempfile
import time
from pathlib import Path

from many_channels import GPS, write_channels


def start_up() -> float:
    """Give the wall time until a worker has the engine loaded, s."""
    from dq.night.pool import make_pool

    begin = time.perf_counter()
    with make_pool(1) as pool:
        pool.submit(_load).result()
    return time.perf_counter() - begin


def _load() -> int:
    import dq.night.channel

    return len(dq.night.channel.__name__)


def busy_s() -> float:
    """Give the time that all processors worked since the system started, s."""
    stat = Path("/proc/stat")
    if not stat.exists():
        return float("nan")
    ticks = [int(x) for x in stat.read_text().splitlines()[0].split()[1:]]
    # user, nice, system, idle, waiting, interrupts ...: all but the idle ones
    return (sum(ticks[:8]) - ticks[3] - ticks[4]) / os.sysconf("SC_CLK_TCK")


def own_s() -> float:
    """Give the CPU time of this process and of its children that ended, s."""
    return sum(os.times()[:4])


def one_night(config: Path, out: Path, seconds: int, jobs: int) -> dict[str, float]:
    """Run a night in a new folder; give its seconds by stage and in all."""
    from dq.config import load_config
    from dq.night.run import run_night

    shutil.rmtree(out, ignore_errors=True)
    begin, busy, own = time.perf_counter(), busy_s(), own_s()
    outcome = run_night(
        load_config(config), start=GPS, end=GPS + seconds, out=out, jobs=jobs
    )
    wall, cpu = time.perf_counter() - begin, own_s() - own
    others = max((busy_s() - busy - cpu) / wall, 0.0)
    return outcome.seconds | {"all": wall, "cpu": cpu, "others": others}


def measure(*, channels=23, seconds=21632, rate=1024, rounds=2) -> dict[str, float]:
    """Measure; see the module for what.

    With the strain the channels are 24: an odd number of equal ones would leave one
    worker idle at the end.
    """
    best: dict[str, float] = {}
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        config = write_channels(
            folder / "site", rates=[rate] * channels, seconds=seconds, strain_rate=rate
        )
        one_night(config, folder / "out", 640, 2)  # compiles or loads the inner loops
        for _ in range(rounds):
            found = {"start": start_up()}
            for jobs in (1, 2):
                laps = one_night(config, folder / "out", seconds, jobs)
                found |= {f"channels {jobs}": laps["channels"]}
                found |= {f"night {jobs}": laps["all"], f"cpu {jobs}": laps["cpu"]}
                if laps["channels"] <= best.get(f"channels {jobs}", laps["channels"]):
                    best[f"others {jobs}"] = laps["others"]
            best |= {k: min(v, best.get(k, v)) for k, v in found.items()}
    for what in ("channels", "night"):
        best[f"{what} ratio"] = best[f"{what} 1"] / best[f"{what} 2"]
    return best


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--short", action="store_true")
    short = parser.parse_args().short
    options = {"channels": 4, "seconds": 640, "rounds": 1} if short else {}
    for name, value in measure(**options).items():
        print(f"{name:16s} {value:8.2f}")
