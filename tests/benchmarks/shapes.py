"""Shapes that spread over many tiles: how many are found, and how much of each.

``python tests/benchmarks/shapes.py [DRAWS]`` plants members of the invented site's
families at optimal SNR 6 to 20 into coloured noise with lines (DRAWS of each family and
SNR, 40 by default) and prints

* the fraction found by the loudest tile alone (its SNR reaches the threshold), by the
  cluster of bright tiles alone (its score is as rare in noise), and by either;
* the median and the quartiles of ``summed_snr`` over the optimal SNR.

``python tests/benchmarks/shapes.py noise [HOURS]`` prints how often Gaussian noise
raises either above a ladder: the rates that make the comparison fair.
"""

from __future__ import annotations

import itertools
import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from accuracy import GPS, RATE, config
from memory_channel import NS, MemoryChannel
from noise_model import density, make_noise

from dq.counting import garwood
from dq.night.channel import analyse_channel
from dq.observatory.families import DRAW, Source
from dq.observatory.schedule import sample

FAMILIES = (
    "scattered_light",
    "beat_note",
    "mains_burst",
    "impact",
    "ground_motion",
    "acoustic",
    "violin_ringdown",
    "short_burst",
    "test_signal",
)
SNRS = (6, 8, 10, 12, 15, 20)
SPACING_S, HOUR_S = 10.0, 3600
THRESHOLD = 5.5


def one_wave(source: Source) -> np.ndarray:
    """Sample a source; of a train of arches, the loudest arch with faded ends."""
    wave, first_s = sample(source, RATE, 0.45 * RATE)
    if not source.cuts_s:
        return wave
    edges = [int((cut - first_s) * RATE) for cut in source.cuts_s]
    parts = [wave[a:b] for a, b in itertools.pairwise(edges)]
    best = max(parts, key=lambda part: np.sum(whitened(part) ** 2))
    fade = np.minimum(np.arange(len(best)) / (0.1 * RATE), 1.0)
    return best * np.sin(0.5 * np.pi * np.minimum(fade, fade[::-1])) ** 2


def whitened(wave: np.ndarray, *, lines: bool = True) -> np.ndarray:
    """Give a waveform over the noise within the band: squares sum to SNR^2."""
    n = 1 << int(np.ceil(np.log2(len(wave) + 8 * RATE)))
    f = np.fft.rfftfreq(n, 1 / RATE)
    gain = np.sqrt(2 / RATE / density(f, lines=lines))
    gain[(f < 10) | (f > 0.45 * RATE)] = 0.0
    return np.fft.irfft(np.fft.rfft(wave, n) * gain, n)


def extent(wave: np.ndarray) -> tuple[float, float]:
    """Give the times between which 98 % of the energy lie, s.

    Over the noise without its lines, whose notches ring for many seconds.
    """
    power = whitened(wave, lines=False)[: len(wave)] ** 2
    share = np.cumsum(power) / np.sum(power)
    return tuple(np.searchsorted(share, (0.01, 0.99)) / RATE)


def search(x: np.ndarray):
    """Give the transients of an hour."""
    data = MemoryChannel("OV-STRAIN", RATE, GPS * NS, x)
    return analyse_channel(
        data,
        ready=None,
        start_ns=GPS * NS,
        end_ns=GPS * NS + len(x) * NS // RATE,
        config=config(THRESHOLD),
    )


def shapes(draws: int) -> dict[tuple[str, int], np.ndarray]:
    """Plant all shapes; give (snr, cluster, summed) of each, 0 where not found."""
    rng = np.random.default_rng(404)
    wanted = [(f, s) for f in FAMILIES for s in SNRS for _ in range(draws)]
    order = rng.permutation(len(wanted))
    found = {key: [] for key in wanted}
    per_hour = int((HOUR_S - 120) / SPACING_S)
    for begin in range(0, len(order), per_hour):
        x = make_noise(rng, RATE, HOUR_S)
        truths = []
        for slot, index in enumerate(order[begin : begin + per_hour]):
            family, snr = wanted[index]
            wave = one_wave(DRAW[family](rng))
            white = whitened(wave)
            start = 60.0 + slot * SPACING_S + rng.uniform(0, 1)
            first = round(start * RATE)
            x[first : first + len(wave)] += wave * snr / np.sqrt(np.sum(white**2))
            low, high = extent(wave)
            truths.append(((family, snr), first / RATE + low, first / RATE + high))
        table = search(x).transients
        begin_s, end_s = (table[c].to_numpy() - GPS for c in ("gps_start", "gps_end"))
        for key, low, high in truths:
            near = table[(begin_s < high + 0.05) & (end_s > low - 0.05)]
            columns = ("snr", "cluster_snr", "summed_snr")
            found[key].append([near[c].max() if len(near) else 0.0 for c in columns])
    return {key: np.array(value) for key, value in found.items()}


def summary(found: dict, family: str) -> str:
    """Put one family into a line."""
    parts, ratios = [], []
    for snr in SNRS:
        tile, cluster, summed = found[family, snr].T
        seen = tile >= THRESHOLD, cluster >= THRESHOLD
        parts.append([p.mean() for p in (*seen, seen[0] | seen[1])])
        if snr >= 10:
            ratios.append(summed[summed > 0] / snr)
    middle = np.median(np.concatenate(ratios))
    return " / ".join(f"{p:.2f}" for p in np.mean(parts, axis=0)) + f"; {middle:.2f}"


def report(found: dict) -> None:
    """Print the table."""
    print("found by the loudest tile / by the cluster / by either")
    print(f"{'':16s}" + "".join(f"   SNR {s:<12d}" for s in SNRS) + " all")
    whole = []
    for family in FAMILIES:
        line, all_of = "", []
        for snr in SNRS:
            tile, cluster, _ = found[family, snr].T
            parts = tile >= THRESHOLD, cluster >= THRESHOLD
            all_of.append([p.mean() for p in (*parts, parts[0] | parts[1])])
            line += "   " + "/".join(f"{p:.2f}" for p in all_of[-1])
        whole.append(np.mean(all_of, axis=0))
        print(f"{family:16s}{line}   " + "/".join(f"{p:.2f}" for p in whole[-1]))
    print("mean of all: " + " / ".join(f"{p:.3f}" for p in np.mean(whole, axis=0)))
    print("\nsummed_snr over the optimal SNR, of the found: quartiles (number)")
    for family in FAMILIES:
        line = ""
        for snr in SNRS:
            ratio = found[family, snr][:, 2] / snr
            ratio = ratio[ratio > 0]
            if len(ratio) < 5:
                line += f"{'-':>22s}"
                continue
            low, middle, high = np.quantile(ratio, (0.25, 0.5, 0.75))
            line += f"   {low:.2f} {middle:.2f} {high:.2f} ({len(ratio):2d})"
        print(f"{family:16s}{line}")


def noise(hours: int) -> None:
    """Print the rates of tiles and clusters in Gaussian noise."""
    ladder = (5.5, 5.75, 6.0, 6.5)
    tile, cluster, seconds = np.zeros(len(ladder)), np.zeros(len(ladder)), 0.0
    for hour in range(hours):
        result = search(make_noise(np.random.default_rng(9100 + hour), RATE, HOUR_S))
        seconds += result.analysed.total_s
        for k, snr in enumerate(ladder):
            tile[k] += np.sum(result.transients.snr >= snr)
            cluster[k] += np.sum(result.transients.cluster_snr >= snr)
    print(f"{seconds / 3600:.2f} h of Gaussian noise, per hour (exact 95 %)")
    for k, snr in enumerate(ladder):
        for name, count in (("loudest tile", tile[k]), ("cluster", cluster[k])):
            low, high = (x / seconds * 3600 for x in garwood(int(count)))
            rate = count / seconds * 3600
            print(
                f"SNR >= {snr:4.2f}  {name:12s} {rate:6.2f} ({low:.2f} to {high:.2f})"
            )


if __name__ == "__main__":
    words = sys.argv[1:]
    if words[:1] == ["noise"]:
        noise(int(words[1]) if len(words) > 1 else 6)
    else:
        report(shapes(int(words[0]) if words else 40))
