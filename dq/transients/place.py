"""Tiles above threshold placed in time and frequency, with their noise density."""

from __future__ import annotations

import numpy as np

from dq.tiles.bright import BrightRuns
from dq.tiles.plan import TilePlan
from dq.tiles.transform import TileRuns
from dq.transients.cluster import HALF_EXTENT, LINK, Marks


def peak_shift(before: np.ndarray, peak: np.ndarray, after: np.ndarray) -> np.ndarray:
    """Locate the maximum between three equally spaced energies.

    Parameters
    ----------
    before, peak, after : ndarray
        Normalised energies; ``peak`` is the largest.

    Returns
    -------
    ndarray
        Offset from the middle in steps, within [-0.5, 0.5].

    Notes
    -----
    The energy of a Gaussian atom falls as exp(-(2 pi f dt / Q)^2), so its logarithm
    is a parabola and three points find its top exactly.
    """
    floor = 1e-3
    left = np.log(np.maximum(before, floor))
    middle = np.log(np.maximum(peak, floor))
    right = np.log(np.maximum(after, floor))
    bend = left - 2.0 * middle + right
    with np.errstate(divide="ignore", invalid="ignore"):
        shift = 0.5 * (left - right) / bend
    return np.where(bend < 0, np.clip(shift, -0.5, 0.5), 0.0)


def place_runs(
    runs: TileRuns,
    plan: TilePlan,
    *,
    origin_s: np.ndarray,
    noise: np.ndarray,
) -> Marks:
    """Place runs of tiles in absolute time.

    Parameters
    ----------
    runs : TileRuns
    plan : TilePlan
    origin_s : ndarray, shape (n_items,)
        Time of each transform's first sample, s after a common reference.
    noise : ndarray, shape (n_items, n_rows)
        Effective one-sided noise density of each row.

    Returns
    -------
    Marks
    """
    row, item = runs.row, runs.item
    spacing = plan.length_s / plan.tiles[row]
    origin = origin_s[item]
    half_t = HALF_EXTENT * plan.sigma_t[row]
    half_f = HALF_EXTENT * plan.sigma_f[row]
    shift = peak_shift(runs.before, runs.energy, runs.after)
    frequency = plan.frequency[row]
    return Marks(
        start=origin + runs.first * spacing - half_t,
        end=origin + runs.last * spacing + half_t,
        low=np.maximum(frequency - half_f, 0.0),
        high=frequency + half_f,
        time=origin + (runs.peak + shift) * spacing,
        frequency=frequency,
        q=plan.q[row],
        energy=runs.energy,
        noise=noise[item, row],
        count=runs.last - runs.first + 1,
        plane=plan.plane[row],
        loud=np.ones(len(runs), dtype=bool),
        score=np.zeros(len(runs)),
        summed=np.zeros(len(runs)),
        reach_s=(LINK - 1.0) * half_t,
        reach_hz=(LINK - 1.0) * half_f,
    )


def place_bright(
    runs: BrightRuns,
    score: np.ndarray,
    plan: TilePlan,
    *,
    origin_s: np.ndarray,
    noise: np.ndarray,
) -> Marks:
    """Place runs of bright tiles in absolute time.

    Parameters
    ----------
    runs : BrightRuns
    score : ndarray, shape (n_runs,)
        Each run's part of its island's score.
    plan, origin_s, noise
        As of :func:`place_runs`.

    Returns
    -------
    Marks
    """
    row, item = runs.row, runs.item
    spacing = plan.length_s / plan.coarse[row]
    origin, frequency = origin_s[item], plan.frequency[row]
    half_t = HALF_EXTENT * plan.sigma_t[row]
    half_f = HALF_EXTENT * plan.sigma_f[row]
    return Marks(
        start=origin + runs.first * spacing - half_t,
        end=origin + runs.last * spacing + half_t,
        low=np.maximum(frequency - half_f, 0.0),
        high=frequency + half_f,
        time=origin + runs.peak * spacing,
        frequency=frequency,
        q=plan.q[row],
        energy=runs.energy,
        noise=noise[item, row],
        count=runs.count,
        plane=plan.plane[row],
        loud=np.zeros(len(runs), dtype=bool),
        score=score,
        summed=np.zeros(len(runs)),
        reach_s=(LINK - 1.0) * half_t,
        reach_hz=(LINK - 1.0) * half_f,
    )
