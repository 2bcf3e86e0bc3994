"""Which parts of a frame's periodograms a disturbance fills.

A median shrugs off a few disturbed segments, not a burst every few seconds: with one
segment in ten disturbed it rises by a sixth, and every SNR falls by a twelfth. Cells
of segment by band are therefore compared with the frame's own median, at several band
widths, and the ones that noise would not reach are left out of the spectrum.

The mean of g neighbouring bins of one periodogram follows, in noise, a gamma law of
mean 1 and shape g / c, where c = N sum(w^4) / sum(w^2)^2 counts how many bins the
window w correlates (power correlations add up; Parseval).

What disturbs two fifths of a frame's segments or more in some band is no transient but
how the noise behaves, and stays in.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

#: Bins of the narrowest band. 8 bins of 0.25 Hz are as narrow as a tile of Q 60 at the
#: lower end of the band is wide.
GROUP = 8

#: Widths of the bands in groups: bursts of high Q stand out in the first, short clicks
#: of low SNR in the last (own choice, factors of 4).
WIDTHS = (1, 4, 16)

#: Chance of noise to reach the bound in one cell. With neighbours left out too, three
#: widths take one cell in two hundred, which lowers the spectrum by a fifth of a
#: percent.
CHANCE = 3e-4

#: Share of disturbed segments from which on a band keeps all of them.
MOST = 0.4

#: With fewer segments the median itself is too uncertain to compare with (own choice).
FEWEST = 8


@lru_cache(maxsize=64)
def cell_bound(bins: int, correlated: float) -> float:
    """Give the mean over ``bins`` bins that noise exceeds with ``CHANCE``.

    Parameters
    ----------
    bins : int
    correlated : float
        Bins that the window correlates, c of the module docstring.

    Examples
    --------
    >>> round(cell_bound(1, 1.0), 3)
    8.112
    """
    from scipy.special import gammainccinv

    shape = bins / correlated
    return float(gammainccinv(shape, CHANCE) / shape)


def undisturbed(power: np.ndarray, *, correlated: float) -> np.ndarray | None:
    """Say which groups of bins of each segment may be used.

    Parameters
    ----------
    power : ndarray, shape (n_segments, n_bins)
        Periodograms of one frame.
    correlated : float
        Bins that the window correlates.

    Returns
    -------
    ndarray of bool, shape (n_segments, n_bins // GROUP), or None
        None: all may be used. Bins beyond the last whole group always may.
    """
    segments, bins = power.shape
    groups = bins // GROUP
    if segments < FEWEST or groups == 0:
        return None
    mean = power[:, : groups * GROUP].reshape(segments, groups, GROUP).mean(axis=2)
    middle = np.median(mean, axis=0)
    middle[middle == 0.0] = np.inf
    ratio = mean / (middle / _group_median(correlated))
    used = np.ones((segments, groups), dtype=bool)
    for width in WIDTHS:
        count = groups // width
        if count:
            wide = ratio[:, : count * width].reshape(segments, count, width)
            loud = wide.mean(axis=2) > cell_bound(GROUP * width, correlated)
            spread = loud.copy()
            spread[:, 1:] |= loud[:, :-1]
            spread[:, :-1] |= loud[:, 1:]
            used[:, : count * width] &= ~np.repeat(spread, width, axis=1)
    used |= np.count_nonzero(~used, axis=0) >= MOST * segments
    return None if used.all() else used


@lru_cache(maxsize=8)
def _group_median(correlated: float) -> float:
    """Give the median of the mean over a group, in units of its mean."""
    from scipy.special import gammainccinv

    shape = GROUP / correlated
    return float(gammainccinv(shape, 0.5) / shape)
