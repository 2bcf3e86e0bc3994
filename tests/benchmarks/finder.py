"""The whole table of the transient finder's figures, with the machine's facts.

``python tests/benchmarks/finder.py [--short] [PART ...]`` runs the parts (all by
default) and prints one Markdown table. Ratios are measured in alternation within one
run. ``--short`` only checks that every part runs: its figures mean nothing. Parts:
accuracy, noise, shapes, speed, cwt, memory, night, cores.
"""

from __future__ import annotations

import os

# before any library reads them
os.environ["OMP_NUM_THREADS"] = "1"
os.environ["OPENBLAS_NUM_THREADS"] = "1"
os.environ["NUMBA_NUM_THREADS"] = "1"
os.environ["SSQ_PARALLEL"] = "0"

import argparse
import datetime
import platform
from importlib import metadata
from pathlib import Path

LIBRARIES = ("numpy", "scipy", "numba", "h5py", "PyWavelets", "ssqueezepy")

Row = tuple[str, str, str]


def machine() -> list[str]:
    """Give the facts that figures depend on: date, processor, cores, versions."""
    model = platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        names = [x for x in info.read_text().splitlines() if x.startswith("model name")]
        model = names[0].split(":", 1)[1].strip() if names else model
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else "?"
    versions = []
    for name in LIBRARIES:
        try:
            versions.append(f"{name} {metadata.version(name)}")
        except metadata.PackageNotFoundError:
            versions.append(f"{name} not installed")
    load = f"load {os.getloadavg()[0]:.1f} at the start"
    return [
        f"{datetime.date.today()}, {model}, {cores} cores, {load}",
        f"Python {platform.python_version()}, " + ", ".join(versions),
    ]


def accuracy_rows(short: bool) -> list[Row]:
    """Planted sine-Gaussians against a matched filter."""
    from accuracy import measure

    found = measure(1 if short else 3)
    return [
        (
            f"{found['planted']:.0f} sine-Gaussians of SNR 10-30 in noise with lines "
            "and drift: found / doubles",
            f"{100 * found['found']:.2f} % / {found['double']:.0f}",
            ">= 99.5 % / 0",
        ),
        (
            "loudest tile over the matched filter's SNR, median / 5th percentile",
            f"{found['filter median']:.3f} / {found['filter 5 %']:.3f}",
            ">= 0.96 / 0.90",
        ),
        (
            "loudest tile over the true SNR, median",
            f"{found['truth median']:.3f}",
            "0.96-1.04",
        ),
        (
            "median error of time / of frequency",
            f"{found['time error / sigma_t']:.2f} sigma_t / "
            f"{found['frequency error / row spacing']:.2f} row spacings",
            "<= 0.2 / 0.5",
        ),
    ]


def noise_rows(short: bool) -> list[Row]:
    """Rates in Gaussian noise against theory."""
    from false_alarms import LADDER, lower_rate, measure, upper_rate

    from dq.counting import garwood

    counts, near, share, seconds = measure(1 if short else 4)
    rows = []
    for snr in LADDER:
        low, high = (x / seconds * 3600 for x in garwood(counts[snr]))
        rows.append(
            (
                f"noise above SNR {snr}, {seconds / 3600:.1f} h, per hour",
                f"{counts[snr] / seconds * 3600:.2f} ({low:.2f}-{high:.2f})",
                f"{3600 * lower_rate(snr):.2f}-{3600 * upper_rate(snr):.2f}",
            )
        )
    low, high = garwood(near)
    expected = share * counts[LADDER[0]]
    rows.append(
        (
            "of these within 2 % of lines",
            f"{near} ({low:.1f}-{high:.1f})",
            f"{expected:.1f}",
        )
    )
    return rows


def shapes_rows(short: bool) -> list[Row]:
    """Shapes that spread over many tiles, and how much of their SNR is summed."""
    from shapes import FAMILIES, shapes, summary

    found = shapes(1 if short else 40)
    return [
        (
            f"{family}, SNR 6-20: found by the loudest tile / cluster / either; "
            "median summed over optimal SNR from 10 on",
            summary(found, family),
            "0.9-1.1",
        )
        for family in FAMILIES
    ]


def speed_rows(short: bool) -> list[Row]:
    """CPU time of find over the bare inverse FFTs."""
    from speed import BLOCK_S, ratio

    rows = []
    for rate, bar in ((1024, 2.0), (4096, 2.0), (16384, 1.6)):
        if short and rate > 1024:
            break
        length = {1024: 16384, 4096: 8192}.get(rate, 2048)
        find, bare, quotient = ratio(rate, 1024 if short else length)
        rows.append(
            (
                f"CPU of find over bare inverse FFTs, {rate} Hz (per 64 s block)",
                f"{quotient:.2f} ({1e3 * find:.1f} / {1e3 * bare:.1f} ms; "
                f"{BLOCK_S / find:.0f} x real time)",
                f"<= {bar}",
            )
        )
    return rows


def cwt_rows(short: bool) -> list[Row]:
    """Tiles a second over wavelet coefficients a second."""
    from cwt import measure

    found = measure(**({"items": 2, "rounds": 1} if short else {}))
    rows = []
    for name in ("PyWavelets", "ssqueezepy", "ssqueezepy cached"):
        if f"{name} a second" not in found:
            rows.append((f"tiles a second over {name}", "not installed", ""))
            continue
        ours, theirs = found["tiles a second"], found[f"{name} a second"]
        rows.append(
            (
                f"tiles a second over coefficients of {name} (transformed tiles alone)",
                f"{found[f'tiles over {name}']:.1f} "
                f"({found[f'transformed over {name}']:.1f}); "
                f"{ours / 1e6:.0f} / {theirs / 1e6:.0f} million",
                "" if "cached" in name else ">= 8",
            )
        )
    return rows


def cores_rows(short: bool) -> list[Row]:
    """Two workers against one."""
    from two_cores import measure

    found = measure(**({"channels": 4, "seconds": 640, "rounds": 1} if short else {}))
    return [
        (
            "two cores over one, 24 channels of 1024 Hz x 6 h, channels / whole night",
            f"{found['channels ratio']:.2f} / {found['night ratio']:.2f} "
            f"({found['channels 1']:.1f}, {found['channels 2']:.1f} s; start of a "
            f"worker {found['start']:.1f} s; others {found['others 1']:.2f}, "
            f"{found['others 2']:.2f} processors; CPU {found['cpu 1']:.1f}, "
            f"{found['cpu 2']:.1f} s)",
            ">= 1.85",
        )
    ]


def memory_rows(short: bool) -> list[Row]:
    """Peak memory of one worker."""
    from memory import measure

    hour, day = measure(**({"rate": 1024, "hour_s": 600, "hours": 3} if short else {}))
    return [
        (
            "peak memory of find at 16384 Hz, 1 h / 24 h",
            f"{hour:.0f} / {day:.0f} MiB",
            "<= 600, equal",
        )
    ]


def night_rows(short: bool) -> list[Row]:
    """Scaled nights, and what they say about a thousand channels."""
    from night_scale import measure

    options = {}
    if short:
        runs = ((10, 0.2), (10, 0.4), (20, 0.2))
        options = {"runs": runs, "strain_rate": 4096, "rounds": 1}
    found = measure(**options)
    rows = [
        (
            f"night of {n} channels x {h:g} h and a 16384 Hz strain, two workers",
            f"{laps['all']:.1f} s (channels {laps['channels']:.1f} s, others "
            f"{laps['others']:.2f} processors; CPU {laps['cpu']:.1f} s)",
            "",
        )
        for (n, h), laps in found["runs"].items()
    ]
    rows.append(
        (
            "extrapolated to 1000 channels x 24 h",
            f"{found['night h']:.2f} h (channels {found['channels h']:.2f} h, rest "
            f"{found['rest h']:.2f} h); CPU time over two: "
            f"{found['CPU h over two']:.2f} h",
            "<= 4 h",
        )
    )
    return rows


PARTS = {
    "accuracy": accuracy_rows,
    "noise": noise_rows,
    "shapes": shapes_rows,
    "speed": speed_rows,
    "cwt": cwt_rows,
    "memory": memory_rows,
    "night": night_rows,
    "cores": cores_rows,
}


def main() -> None:
    """Run the parts and print the table, row by row as it comes."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--short", action="store_true")
    parser.add_argument("parts", nargs="*", choices=[[], *PARTS], metavar="PART")
    chosen = parser.parse_args()
    print("\n".join(machine()))
    print("\n| what | figure | bar |\n|---|---|---|", flush=True)
    for part in chosen.parts or PARTS:
        for row in PARTS[part](chosen.short):
            print("| " + " | ".join(row) + " |", flush=True)


if __name__ == "__main__":
    main()
