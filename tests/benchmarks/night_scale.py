"""A scaled night with two workers, and what it says about a thousand channels.

``python tests/benchmarks/night_scale.py [--short]`` runs 40 auxiliary channels (256 to
4096 Hz, 1024 Hz on average, compressed) and a strain of 16384 Hz over an hour, then
half the channels, half the time and twice the time, and prints the seconds of each
stage. The extrapolation to 1000 channels x 24 h takes the channels' stage as start-up,
strain hours and channel hours, and the rest as a constant and channel hours; the CPU
time, which other programs change little, as a constant, strain hours and channel hours.
"""

from __future__ import annotations

import argparse
import tempfile
from pathlib import Path

import numpy as np
from many_channels import CHUNK_S, MIXED, write_channels
from two_cores import one_night, start_up

#: Channels and hours of the runs; all but the first show the linearity.
RUNS = ((40, 1.0), (20, 1.0), (40, 0.5), (40, 2.0))


def one_run(channels: int, hours: float, *, strain_rate: int, rounds: int):
    """Give the seconds by stage of one scaled night, the best of each."""
    seconds = CHUNK_S * round(3600 * hours / CHUNK_S)
    rates = [MIXED[k % len(MIXED)] for k in range(channels)]
    best: dict[str, float] = {}
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        config = write_channels(
            folder / "site", rates=rates, seconds=seconds, strain_rate=strain_rate
        )
        for _ in range(rounds):
            laps = one_night(config, folder / "out", seconds, 2)
            best = {k: min(v, best.get(k, v)) for k, v in laps.items()}
    return best


def measure(*, runs=RUNS, strain_rate=16384, rounds=2, target=(1000, 24.0)) -> dict:
    """Give the runs, the fit and the extrapolation, s."""
    one_run(10, 0.2, strain_rate=strain_rate, rounds=1)  # compiles the inner loops
    found = {r: one_run(*r, strain_rate=strain_rate, rounds=rounds) for r in runs}
    # channels' stage: start-up + a x hours of strain + b x channel hours
    start = start_up()
    terms = np.array([(h, n * h) for n, h in runs])
    seconds = np.array([found[r]["channels"] for r in runs]) - start
    (strain_s, channel_s), *_ = np.linalg.lstsq(terms, seconds, rcond=None)
    n, h = target
    rest_all = np.array([found[r]["all"] - found[r]["channels"] for r in runs])
    terms = np.array([(1.0, k * t) for k, t in runs])
    (constant_s, rest_s), *_ = np.linalg.lstsq(terms, rest_all, rcond=None)
    rest = constant_s + rest_s * target[0] * target[1]
    cpu = np.array([found[r]["cpu"] for r in runs])
    terms = np.array([(1.0, t, k * t) for k, t in runs])
    (cpu_s, *per_hour), *_ = np.linalg.lstsq(terms, cpu, rcond=None)
    cpu_all = cpu_s + per_hour[0] * h + per_hour[1] * n * h
    channels = start + strain_s * h + channel_s * n * h
    return {
        "runs": found,
        "start-up s": start,
        "strain hour s": float(strain_s),
        "channel hour s": float(channel_s),
        "channels h": float(channels) / 3600,
        "rest h": float(rest) / 3600,
        "CPU h over two": float(cpu_all) / 3600 / 2,
        "night h": float(channels + rest) / 3600,
    }


def lines(found: dict) -> list[str]:
    """Give the runs and the extrapolation as text."""
    out = []
    for (channels, hours), laps in found["runs"].items():
        stages = ", ".join(f"{k} {v:.2f}" for k, v in laps.items() if v >= 0.01)
        out.append(f"{channels} channels x {hours:g} h: {stages} s")
    out += [f"{k:16s} {v:9.3f}" for k, v in found.items() if k != "runs"]
    return out


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--short", action="store_true")
    options = {}
    if parser.parse_args().short:
        runs = ((10, 0.2), (10, 0.4), (20, 0.2))
        options = {"runs": runs, "strain_rate": 4096, "rounds": 1}
    print("\n".join(lines(measure(**options))))
