r"""Transients that Gaussian noise raises, against what theory allows.

``python tests/benchmarks/false_alarms.py [HOURS]`` prints the rate above SNR 5.5, 6 and
6.5 with its exact Poisson interval, beside two derived rates:

* lower: every plane of the plan holds B T independent tiles (its bandwidth times the
  time) and each exceeds z with probability exp(-z);
* upper: all local maxima of the continuous field over time, frequency and Q. Tiles
  under the bisquare window w(x) = (1 - x^2)^2, x = (nu - f) / (sqrt(11) sigma) with
  sigma = f / Q, lose the fraction

      4 pi^2 sigma^2 dt^2 + a df^2 / sigma^2 + b (df / f - dQ / Q)^2

  of their energy, where a = int w'^2 / (11 int w^2) = 3 / 11 and
  b = int (x w' + w / 2)^2 / int w^2 = 3 / 4 (for a Gaussian window 1 / 4 and 1 / 2, the
  metric of Chatterji et al. 2004). Its volume element is 2 pi sqrt(a b) / Q dt df dQ.
  The expected number of maxima of a chi-squared field of two degrees of freedom above
  t = 2 z is V (t^{3/2} - 3 t^{1/2}) exp(-t / 2) / (2 pi)^{3/2} in the inside and
  A (t - 1) exp(-t / 2) / (2 pi) / 2 on the faces of lowest and highest Q and frequency
  (Worsley 1994, Adv. Appl. Prob. 26 13, from memory).

A plan of finite mismatch sees fewer maxima than the continuous field, and gathers
neighbouring ones, so the rate must lie between the two.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from accuracy import GPS, RATE, config
from memory_channel import NS, MemoryChannel
from noise_model import LINES_HZ, make_noise

from dq.counting import garwood
from dq.night.channel import analyse_channel
from dq.tiles.plan import Q_MIN, bisquare, highest_frequency, plane_qs

LADDER = (5.5, 6.0, 6.5)


def lower_rate(snr: float, f_low: float = 10.0) -> float:
    """Give the rate of independent tiles above an SNR, 1/s."""
    z = 1 + snr**2 / 2
    bands = [highest_frequency(q, RATE) - f_low for q in plane_qs(4, 64, 0.2)]
    return float(sum(bands) * np.exp(-z))


def window_metric() -> tuple[float, float]:
    """Give what the bisquare window loses to a shift and to a stretch, a and b."""
    x = np.linspace(-1, 1, 20001)
    w = bisquare(x)
    slope = np.gradient(w, x)
    norm = np.trapezoid(w**2, x)
    shift = np.trapezoid(slope**2, x) / norm / Q_MIN**2
    return shift, np.trapezoid((x * slope + w / 2) ** 2, x) / norm


def upper_rate(snr: float, f_low: float = 10.0) -> float:
    """Give the rate of maxima of the continuous field above an SNR, 1/s."""
    t = 2 + snr**2
    a, b = window_metric()
    q = np.geomspace(4, 64, 4001)
    top = np.array([highest_frequency(x, RATE) for x in q])
    volume = np.trapezoid(2 * np.pi * np.sqrt(a * b) / q * (top - f_low), q)
    inside = volume * (t**1.5 - 3 * t**0.5) * np.exp(-t / 2) / (2 * np.pi) ** 1.5
    # area elements sqrt(g_tt g_ff) dt df and sqrt(g_tt g_QQ) dt dQ
    area = sum(
        2 * np.pi * np.sqrt(a + b / x**2) * (f - f_low)
        for x, f in ((q[0], top[0]), (q[-1], top[-1]))
    )
    area += np.trapezoid(2 * np.pi * np.sqrt(b) * (top + f_low) / q**2, q)
    faces = area / 2 * (t - 1) * np.exp(-t / 2) / (2 * np.pi)
    return float(inside + faces)


def measure(hours: int):
    """Give counts above the ladder, near lines and elsewhere, and the time in s."""
    counts = dict.fromkeys(LADDER, 0)
    near_lines, share, seconds = 0, 0.0, 0.0
    for hour in range(hours):
        x = make_noise(np.random.default_rng(77 + hour), RATE, 3600)
        data = MemoryChannel("OV-STRAIN", RATE, GPS * NS, x)
        result = analyse_channel(
            data,
            ready=None,
            start_ns=GPS * NS,
            end_ns=(GPS + 3600) * NS,
            config=config(),
        )
        seconds += result.analysed.total_s
        table = result.transients
        for snr in LADDER:
            counts[snr] += int((table.snr >= snr).sum())
        f = table.frequency_hz.to_numpy()
        near = np.zeros(len(f), bool)
        for line in LINES_HZ:
            near |= np.abs(f / line - 1) < 0.02
        near_lines += int(near.sum())
        # tiles are spread evenly in frequency: their number per Hz is constant
        covered = sum(0.04 * line for line in LINES_HZ)
        share = covered / (highest_frequency(16, RATE) - 10)
    return counts, near_lines, share, seconds


if __name__ == "__main__":
    counts, near, share, seconds = measure(int(sys.argv[1]) if len(sys.argv) > 1 else 4)
    for snr, count in counts.items():
        low, high = (x / seconds * 3600 for x in garwood(count))
        print(
            f"SNR >= {snr}: {count} in {seconds / 3600:.2f} h, {low:.2f} to {high:.2f} "
            f"per hour; theory {3600 * lower_rate(snr):.2f} to "
            f"{3600 * upper_rate(snr):.2f}"
        )
    total = counts[LADDER[0]]
    low, high = garwood(near)
    print(
        f"near lines (2 %): {near} of {total} ({low:.1f} to {high:.1f}); an even "
        f"spread over frequency puts {share * total:.1f} there"
    )
