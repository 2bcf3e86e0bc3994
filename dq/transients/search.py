"""From whitened spectra to marks: tiles scanned, placed, linked, sharpened, summed."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from dq.tiles import TilePlan, scan_tiles
from dq.tiles.footprint import footprint_energy
from dq.transients.cluster import (
    HALF_EXTENT,
    LINK,
    Marks,
    cluster_scores,
    label_marks,
    label_transients,
)
from dq.transients.islands import (
    BRIGHT,
    find_islands,
    loudest_islands,
    needed_score,
)
from dq.transients.place import place_bright, place_runs
from dq.transients.sharpen import sharpen_peaks
from dq.transients.transforms import Transforms

#: Bright tiles of a row make one run where their stretched rectangles touch, sigma_t.
GAP = 2.0 * LINK * HALF_EXTENT


def search_tiles(
    transforms: Transforms,
    plan: TilePlan,
    *,
    threshold: float,
    q_range: tuple[float, float],
) -> Marks:
    """Find what stands out of some transforms, as runs of tiles placed in time.

    Parameters
    ----------
    transforms : Transforms
    plan : TilePlan
    threshold : float
        Normalised energy that makes a transient of a tile; an island of bright tiles
        needs the score that is as rare in noise.
    q_range : tuple of float
        Lowest and highest Q.

    Returns
    -------
    Marks
        Peaks of the clusters that may become transients are sharpened and their
        energies summed.
    """
    runs, lit = scan_tiles(
        transforms.spectra,
        plan,
        level=transforms.level,
        start_s=transforms.low_s,
        end_s=transforms.high_s,
        threshold=threshold,
        bright=BRIGHT,
        gap_sigmas=GAP,
    )
    island, score = find_islands(lit, plan, origin_s=transforms.origin_s)
    kept = loudest_islands(island, score)
    lit, score = lit.take(kept), score[kept]
    where = {"origin_s": transforms.origin_s, "noise": transforms.noise}
    marks = Marks.join(
        [place_runs(runs, plan, **where), place_bright(lit, score, plan, **where)]
    )
    if len(marks) == 0:
        return marks
    labels = label_transients(marks, label_marks(marks))
    total, plane, loud = cluster_scores(marks, labels)
    chosen = loud | (total >= needed_score(threshold))
    came = {
        "item": np.append(runs.item, lit.item),
        "row": np.append(runs.row, lit.row),
    }
    marks = sharpen_peaks(
        marks, labels, chosen, transforms, plan, q_range=q_range, **came
    )
    best = chosen[labels] & (marks.plane == plane[labels])
    return sum_energies(marks, labels, best, transforms, plan, **came)


def sum_energies(
    marks: Marks,
    labels: np.ndarray,
    best: np.ndarray,
    transforms: Transforms,
    plan: TilePlan,
    *,
    item: np.ndarray,
    row: np.ndarray,
) -> Marks:
    """Sum the energy of clusters over all tiles around some of their marks.

    Parameters
    ----------
    marks : Marks
    labels : ndarray of int, shape (n_marks,)
        Cluster of each mark.
    best : ndarray of bool, shape (n_marks,)
        The marks around which to sum, of one plane in each cluster.
    transforms : Transforms
    plan : TilePlan
    item, row : ndarray of int, shape (n_marks,)
        Where each mark's tiles come from.

    Returns
    -------
    Marks
        With ``summed`` at one mark of each cluster and transform.
    """
    summed = np.zeros(len(marks))
    for group in _groups(best, labels, item):
        k = item[group[0]]
        summed[group[0]] = footprint_energy(
            transforms.spectra[k],
            plan,
            row=row[group],
            start_s=marks.start[group] - transforms.origin_s[k],
            end_s=marks.end[group] - transforms.origin_s[k],
            level=transforms.level[k],
            within_s=(float(transforms.low_s[k]), float(transforms.high_s[k])),
        )
    return replace(marks, summed=summed)


def _groups(own, labels, item) -> list[np.ndarray]:
    """Give the indices of some marks, those of one cluster and item together."""
    index = np.flatnonzero(own)
    index = index[np.lexsort((item[index], labels[index]))]
    changes = np.diff(labels[index]) | np.diff(item[index])
    return np.split(index, np.flatnonzero(changes) + 1) if len(index) else []
