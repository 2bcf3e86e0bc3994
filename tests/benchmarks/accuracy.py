"""What the finder recovers, against a matched filter on the same data.

``python tests/benchmarks/accuracy.py [HOURS]`` plants sine-Gaussians of known optimal
SNR in coloured noise with lines and 15 % drift and prints the found fraction, the ratio
of the loudest tile's SNR to the phase-maximised matched filter's and to the true SNR,
double counts and errors of time and frequency.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from memory_channel import NS, MemoryChannel
from noise_model import density, drift, make_noise

from dq.config import parse_config
from dq.night.channel import analyse_channel
from dq.tiles.plan import tile_step

GPS = 1_420_000_000 - 1_420_000_000 % 512
RATE = 4096
SPACING_S = 5.0
WINDOW_S = 64


def config(snr: float = 5.5):
    """Give the default configuration."""
    return parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
            "transients": {"snr_threshold": snr},
        }
    )


class Truth:
    """One planted sine-Gaussian and its matched filter."""

    def __init__(self, rng, t0: float, level: float):
        self.t0 = t0
        self.f0 = 30 * 40 ** rng.random()
        self.q = 4 * 15 ** rng.random()
        self.rho = rng.uniform(10, 30)
        self.phase = rng.uniform(0, 2 * np.pi)
        self.level = level
        n = WINDOW_S * RATE
        self.first = round((t0 - WINDOW_S / 2) * RATE)
        t = (self.first + np.arange(n)) / RATE - t0
        tau = self.q / (2 * np.pi * self.f0)
        wave = np.exp(1j * (2 * np.pi * self.f0 * t + self.phase) - (t / tau) ** 2)
        f = np.fft.rfftfreq(n, 1 / RATE)
        amplitude = np.sqrt(2 / RATE / density(f))
        self.white = [
            np.fft.irfft(np.fft.rfft(part) * amplitude, n)
            for part in (wave.real, wave.imag)
        ]
        norm = np.sqrt(np.sum(self.white[0] ** 2))
        self.wave = wave.real * self.rho * level / norm

    @property
    def sigma_t(self) -> float:
        """Duration of the tile that matches, s."""
        return self.q / (4 * np.pi * self.f0)

    def filtered(self, white: np.ndarray) -> float:
        """Give the matched filter's output at the true time, best of all phases."""
        data = white[self.first : self.first + WINDOW_S * RATE]
        parts = [np.sum(data * w) / np.sqrt(np.sum(w**2)) for w in self.white]
        return float(np.hypot(*parts) / self.level)


def one_hour(seed: int, seconds: int = 3600):
    """Give the transients of an hour and the planted bursts with filter outputs."""
    rng = np.random.default_rng(seed)
    x = make_noise(rng, RATE, seconds)
    x *= drift(np.arange(len(x)) / RATE, seconds)
    truths = []
    for t0 in np.arange(WINDOW_S, seconds - WINDOW_S, SPACING_S):
        t0 = t0 + rng.uniform(-1, 1)
        truth = Truth(rng, t0, float(drift(np.array(t0), seconds)))
        x[truth.first : truth.first + len(truth.wave)] += truth.wave
        truths.append(truth)
    f = np.fft.rfftfreq(len(x), 1 / RATE)
    white = np.fft.irfft(np.fft.rfft(x) * np.sqrt(2 / RATE / density(f)), len(x))
    filtered = [t.filtered(white) for t in truths]
    data = MemoryChannel("OV-STRAIN", RATE, GPS * NS, x)
    table = analyse_channel(
        data,
        ready=None,
        start_ns=GPS * NS,
        end_ns=(GPS + seconds) * NS,
        config=config(),
    ).transients
    return table, truths, np.array(filtered)


def measure(hours: int) -> dict[str, float]:
    """Measure over several hours; see the module for what."""
    found, double, over_filter, over_truth, d_time, d_frequency = [], [], [], [], [], []
    step = tile_step(0.2)
    for hour in range(hours):
        table, truths, filtered = one_hour(1000 + hour)
        start, end = (table[c].to_numpy() - GPS for c in ("gps_start", "gps_end"))
        for truth, output in zip(truths, filtered, strict=True):
            slack = 2 * truth.sigma_t
            near = np.flatnonzero((start < truth.t0 + slack) & (end > truth.t0 - slack))
            found.append(len(near) > 0)
            if not len(near):
                continue
            rows = table.iloc[near]
            best = rows.iloc[int(np.argmax(rows.snr.to_numpy()))]
            # a second transient that noise explains (SNR < 6 anywhere) is no double
            double.append((rows.snr > 6.0).sum() > 1)
            over_filter.append(best.snr / output)
            over_truth.append(best.snr / truth.rho)
            d_time.append(abs(best.gps_time - GPS - truth.t0) / truth.sigma_t)
            spacing = best.frequency_hz * 2 * step / np.sqrt(2 + best.q**2)
            d_frequency.append(abs(best.frequency_hz - truth.f0) / spacing)
    return {
        "planted": len(found),
        "found": np.mean(found),
        "double": float(np.sum(double)),
        "filter median": np.median(over_filter),
        "filter 5 %": np.quantile(over_filter, 0.05),
        "truth median": np.median(over_truth),
        "time error / sigma_t": np.median(d_time),
        "frequency error / row spacing": np.median(d_frequency),
    }


if __name__ == "__main__":
    hours = int(sys.argv[1]) if len(sys.argv) > 1 else 3
    for name, value in measure(hours).items():
        print(f"{name:32s} {value:10.4f}")
