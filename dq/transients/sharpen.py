"""The loudest tile of each cluster moved to the maximum beside it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from dq.tiles import TilePlan, climb_from
from dq.transients.cluster import Marks
from dq.transients.transforms import Transforms


def sharpen_peaks(
    marks: Marks,
    labels: np.ndarray,
    chosen: np.ndarray,
    transforms: Transforms,
    plan: TilePlan,
    *,
    item: np.ndarray,
    row: np.ndarray,
    q_range: tuple[float, float],
) -> Marks:
    """Give the marks with each chosen cluster's loudest tile moved to its maximum.

    Parameters
    ----------
    marks : Marks
    labels : ndarray of int, shape (n_marks,)
        Cluster of each mark.
    chosen : ndarray of bool, shape (n_clusters,)
        Clusters whose peaks are worth the work.
    transforms : Transforms
    plan : TilePlan
    item, row : ndarray of int, shape (n_marks,)
        Where each mark's tiles come from.
    q_range : tuple of float
        Lowest and highest Q.

    Returns
    -------
    Marks
        Energy, time, frequency and Q of the peaks are changed, extents are not. An
        energy is never lowered.
    """
    order = np.lexsort((-marks.energy, ~marks.loud, labels))
    peaks = order[np.append(True, np.diff(labels[order]) > 0)]
    columns = ("energy", "time", "frequency", "q")
    moved = {name: getattr(marks, name).copy() for name in columns}
    for k in peaks[chosen[labels[peaks]]]:
        own = item[k]
        energy, time_s, frequency, q = climb_from(
            transforms.spectra[own],
            plan,
            time_s=marks.time[k] - transforms.origin_s[own],
            frequency=marks.frequency[k],
            q=marks.q[k],
            q_range=q_range,
        )
        energy /= transforms.level[own, row[k]]
        if energy > marks.energy[k]:
            found = (energy, time_s + transforms.origin_s[own], frequency, q)
            for name, value in zip(columns, found, strict=True):
                moved[name][k] = value
    return replace(marks, **moved)
