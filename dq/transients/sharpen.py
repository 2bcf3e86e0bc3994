"""The loudest tile of each cluster moved to the maximum beside it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from dq.tiles import TilePlan, TileRuns, climb_from
from dq.transients.cluster import Marks, label_marks


def sharpen_peaks(
    marks: Marks,
    runs: TileRuns,
    spectra: np.ndarray,
    plan: TilePlan,
    *,
    origin_s: np.ndarray,
    level: np.ndarray,
    q_range: tuple[float, float],
) -> Marks:
    """Give the marks with each cluster's loudest tile moved to its maximum.

    Parameters
    ----------
    marks, runs : Marks, TileRuns
        The same runs, placed and not.
    spectra : ndarray of complex64, shape (n_items, n_bins)
    plan : TilePlan
    origin_s : ndarray, shape (n_items,)
        Time of each transform's first sample, s, as the marks count it.
    level : ndarray, shape (n_items, n_rows)
        Mean energy of each row in noise.
    q_range : tuple of float
        Lowest and highest Q.

    Returns
    -------
    Marks
        Energy, time, frequency and Q of the peaks are changed, extents are not. An
        energy is never lowered.
    """
    if len(marks) == 0:
        return marks
    labels = label_marks(marks)
    order = np.lexsort((-marks.energy, labels))
    peaks = order[np.append(True, np.diff(labels[order]) > 0)]
    columns = ("energy", "time", "frequency", "q")
    moved = {name: getattr(marks, name).copy() for name in columns}
    for k in peaks:
        item = runs.item[k]
        energy, time_s, frequency, q = climb_from(
            spectra[item],
            plan,
            time_s=marks.time[k] - origin_s[item],
            frequency=marks.frequency[k],
            q=marks.q[k],
            q_range=q_range,
        )
        energy /= level[item, runs.row[k]]
        if energy > marks.energy[k]:
            found = (energy, time_s + origin_s[item], frequency, q)
            for name, value in zip(columns, found, strict=True):
                moved[name][k] = value
    return replace(marks, **moved)
