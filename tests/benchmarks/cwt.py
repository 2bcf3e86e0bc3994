"""Tiles a second against the coefficients a second of two wavelet libraries.

``python tests/benchmarks/cwt.py [--short]`` runs, in alternation and with one thread,
the search of all tiles of the plan (transform, energies, threshold) on eight blocks,
PyWavelets' and ssqueezepy's continuous transforms on one block of the same length over
the same band, and prints the best rate of each. ``tiles`` counts the tiles that were
searched, ``transformed`` only those that an inverse FFT gave (tiles between them are
interpolated where they can matter): the stricter count. ssqueezepy is measured as it
is called by default, and with its wavelets kept from call to call, single precision and
no padding, the fastest it can.
"""

from __future__ import annotations

import os

# before numpy and ssqueezepy read them
os.environ["OMP_NUM_THREADS"] = "1"
os.environ["OPENBLAS_NUM_THREADS"] = "1"
os.environ["NUMBA_NUM_THREADS"] = "1"
os.environ["SSQ_PARALLEL"] = "0"

import argparse
import time
import warnings

import numpy as np
import scipy.fft

from dq.tiles import plan_tiles, tile_runs

RATE = 4096
F_LOW, F_HIGH = 10.0, 1400.0
SCALES = 64
THRESHOLD = 1 + 0.5 * 5.5**2


def _ours(rng, seconds: int, items: int):
    plan = plan_tiles(float(RATE), seconds * RATE, f_low=F_LOW)
    bins = plan.samples // 2 + 1
    parts = rng.standard_normal((items, 2 * bins), dtype=np.float32)
    spectra = parts.view(np.complex64) * np.float32(np.sqrt(0.5))
    level = np.ones((items, len(plan.q)))
    start, end = np.zeros(items), np.full(items, float(seconds))

    def run():
        tile_runs(
            spectra, plan, level=level, start_s=start, end_s=end, threshold=THRESHOLD
        )

    counts = items * int(plan.tiles.sum()), items * int(plan.coarse.sum())
    return run, counts


def _pywavelets(x: np.ndarray):
    import pywt

    wavelet = "cmor1.5-1.0"
    frequency = np.geomspace(F_LOW, F_HIGH, SCALES)
    scales = pywt.frequency2scale(wavelet, frequency / RATE)

    def run():
        pywt.cwt(x, scales, wavelet, method="fft")

    return run, SCALES * len(x)


def _ssqueezepy(x: np.ndarray):
    """Give its transform as it is called by default, and in its fastest setting."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            import ssqueezepy
    except ImportError:
        return {}
    # the band lies between these scales of its Morlet wavelet, whose centre is at
    # mu = 13.4 radians per sample and scale
    frequency = np.geomspace(F_HIGH, F_LOW, SCALES)
    scales = (13.4 / (2 * np.pi) * RATE / frequency).astype(np.float32)
    wavelet = ssqueezepy.Wavelet("morlet", dtype="float32")

    def default():
        ssqueezepy.cwt(x, "morlet", scales=scales, fs=RATE)

    def fastest():
        ssqueezepy.cwt(x, wavelet, scales=scales, padtype=None, cache_wavelet=True)

    count = SCALES * len(x)
    return {"ssqueezepy": (default, count), "ssqueezepy cached": (fastest, count)}


def _seconds(run) -> float:
    begin = time.process_time()
    run()
    return time.process_time() - begin


def measure(*, seconds: int = 64, items: int = 8, rounds: int = 5) -> dict[str, float]:
    """Give the rates per second of CPU time and the ratios."""
    assert scipy.fft.next_fast_len(seconds * RATE, real=True) == seconds * RATE
    rng = np.random.default_rng(5)
    x = rng.standard_normal(seconds * RATE).astype(np.float32)
    ours, (tiles, transformed) = _ours(rng, seconds, items)
    runs = {"ours": ours}
    counts = {"tiles": tiles, "transformed": transformed}
    others = {"PyWavelets": _pywavelets(x)} | _ssqueezepy(x)
    for name, (run, count) in others.items():
        runs[name], counts[name] = run, count
    for run in runs.values():
        run()  # compiles, plans, caches
    best = dict.fromkeys(runs, np.inf)
    for _ in range(rounds):
        for name, run in runs.items():
            best[name] = min(best[name], _seconds(run))
    rates = {k: n / best.get(k, best["ours"]) for k, n in counts.items()}
    found = {f"{k} a second": v for k, v in rates.items()}
    for name in others:
        found[f"tiles over {name}"] = rates["tiles"] / rates[name]
        found[f"transformed over {name}"] = rates["transformed"] / rates[name]
    return found


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--short", action="store_true")
    short = parser.parse_args().short
    found = measure(**({"items": 2, "rounds": 1} if short else {}))
    for name, value in found.items():
        print(f"{name:32s} {value:14.3g}")
    if "ssqueezepy a second" not in found:
        print("ssqueezepy: not installed")
