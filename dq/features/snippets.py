"""Stretches of whitened strain around one transient each, in few lengths.

The stretch holds the transient and half a second on each side. Its length is one of a
few, so that many transients go through the same transforms together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

#: Lengths of a stretch, s. A transient that does not fit into the longest with its
#: margins is looked at around its peak only.
LENGTHS_S = (2.0, 4.0, 8.0, 16.0)

#: Margin on each side of the transient, s.
MARGIN_S = 0.5


@dataclass(frozen=True)
class Snippet:
    """Whitened strain around one transient; times in s after the first sample.

    Attributes
    ----------
    values : ndarray of float32, shape (n_samples,)
        Noise has unit variance; 0 where there are no settled data.
    sample_rate : float
        Hz.
    length_s : float
        One of ``LENGTHS_S``.
    start_s, end_s : float
        Extent of the transient, within the stretch less its margins.
    f_low_hz, f_high_hz : float
        Band of the transient's tiles.
    frequency, density : ndarray, shape (n_bins,)
        Coarse frequency grid (Hz) and the mean square that noise has there after
        whitening (near 1); shared by the snippets of a block.
    flat_s : float
        Time within the transient whose recorded samples repeat without reason
        (saturation, flat line), s.
    """

    values: np.ndarray
    sample_rate: float
    length_s: float
    start_s: float
    end_s: float
    f_low_hz: float
    f_high_hz: float
    frequency: np.ndarray
    density: np.ndarray
    flat_s: float = 0.0


def stretch_around(
    peak_s: float, start_s: float, end_s: float
) -> tuple[float, float, float, float]:
    """Choose the stretch for a transient.

    Parameters
    ----------
    peak_s, start_s, end_s : float
        s, on any clock.

    Returns
    -------
    first_s, length_s : float
        Where the stretch begins, and how long it is.
    start_s, end_s : float
        The transient's extent, cut where it does not fit.
    """
    longest = LENGTHS_S[-1]
    room = longest - 2 * MARGIN_S
    start_s, end_s = min(start_s, peak_s), max(end_s, peak_s)
    if end_s - start_s > room:
        start_s = max(start_s, peak_s - room / 2)
        end_s = min(end_s, start_s + room)
    need = end_s - start_s + 2 * MARGIN_S
    length = next((x for x in LENGTHS_S if x >= need - 1e-9), longest)
    return 0.5 * (start_s + end_s) - 0.5 * length, length, start_s, end_s


def cut_snippet(
    series: np.ndarray,
    *,
    sample_rate: float,
    settled_s: tuple[float, float],
    peak_s: float,
    start_s: float,
    end_s: float,
    f_low_hz: float,
    f_high_hz: float,
    frequency: np.ndarray,
    density: np.ndarray,
    flat_s: float = 0.0,
) -> Snippet:
    """Cut the stretch around a transient out of a whitened block.

    Parameters
    ----------
    series : ndarray, shape (n,)
        Whitened samples of the block, noise of unit variance.
    sample_rate : float
        Hz.
    settled_s : tuple of float
        Samples within ``[low, high)`` are settled; others count as 0.
    peak_s, start_s, end_s : float
        The transient, s after the first sample; the peak must be settled.
    f_low_hz, f_high_hz, frequency, density, flat_s
        As in :class:`Snippet`.

    Returns
    -------
    Snippet
    """
    low_s, high_s = settled_s
    start_s, end_s = max(start_s, low_s), min(end_s, high_s)
    first_s, length, start_s, end_s = stretch_around(peak_s, start_s, end_s)
    samples = round(length * sample_rate)
    first = round(first_s * sample_rate)
    low = max(int(np.ceil(low_s * sample_rate)), 0)
    high = min(int(np.floor(high_s * sample_rate)), len(series))
    begin, end = max(first, low), min(first + samples, high)
    values = np.zeros(samples, dtype=np.float32)
    if end > begin:
        values[begin - first : end - first] = series[begin:end]
    origin = first / sample_rate
    return Snippet(
        values=values,
        sample_rate=sample_rate,
        length_s=length,
        start_s=start_s - origin,
        end_s=end_s - origin,
        f_low_hz=f_low_hz,
        f_high_hz=f_high_hz,
        frequency=frequency,
        density=density,
        flat_s=flat_s,
    )
