"""Speed of the features and their stability from SNR 8 to 80.

``python tests/benchmarks/features.py [EACH]`` prints the CPU time per transient at
4096 and 16384 Hz, maps included, and for every feature how far it moves between
SNR 8 and SNR 80 of the same waveform in other noise, against how far it differs
between families. Differences are of ranks among all that was measured, so that no unit
and no outlier counts; 0 is no move, 1 as far as between two families.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd
from scipy.stats import rankdata

sys.path.insert(0, str(Path(__file__).parents[1]))

import planted

from dq.features import FEATURES, NAMES, measure

#: SNR of the loudest tile that the waveforms are brought to.
LEVELS = (8.0, 20.0, 80.0)


def level_tables(sources, *, seed: int) -> list[pd.DataFrame]:
    """Measure the same waveforms at each level; rows without a find are NaN."""
    loud, times = planted.plant(sources, np.full(len(sources), 120.0), seed=seed)
    table = planted.find(loud)
    rows = planted.loudest_near(table, sources, times)
    tile = np.array([120.0 if r is None else table.snr[r] for r in rows])
    out = []
    for number, level in enumerate(LEVELS):
        # the loudest tile's SNR squared is the waveform's part in it
        snrs = 120.0 * level / tile
        data, times = planted.plant(sources, snrs, seed=seed + 1 + number)
        table = planted.find(data)
        rows = planted.loudest_near(table, sources, times)
        features = planted.measured(data, table)
        found = [r if r is not None else -1 for r in rows]
        features.loc[-1] = np.nan
        out.append(features.loc[found].reset_index(drop=True))
    return out


def stability(tables: list[pd.DataFrame], families: np.ndarray) -> pd.DataFrame:
    """Give each feature's move from the lowest to the highest level.

    Returns
    -------
    pandas.DataFrame
        Indexed by feature: ``drift`` (mean rank difference from the lowest to the
        highest level), ``move`` (mean of its modulus), ``apart`` (mean rank difference
        of waveforms of different families) and ``ratio`` of the latter two.
    """
    known = ~np.any([t.isna().any(axis=1) for t in tables], axis=0)
    who = np.tile(families[known], len(tables))
    other = who[:, None] != who[None, :]
    rows = {}
    for feature in NAMES:
        values = [t[feature].to_numpy()[known] for t in tables]
        ranks = rankdata(np.concatenate(values)).reshape(len(tables), -1)
        ranks /= ranks.size
        step = ranks[-1] - ranks[0]
        every = np.concatenate(ranks)
        apart = np.abs(every[:, None] - every[None, :])[other].mean()
        move = np.abs(step).mean()
        rows[feature] = (step.mean(), move, apart, move / apart if apart > 0 else 0.0)
    columns = ["drift", "move", "apart", "ratio"]
    return pd.DataFrame.from_dict(rows, orient="index", columns=columns)


def speed(rate: int, each: int) -> dict[str, float]:
    """Give transients per second of CPU time: maps and features, and the whole pass."""
    sources = planted.draw_sources(7, each)
    snrs = np.full(len(sources), 25.0)
    data, _ = planted.plant(sources, snrs, seed=5, spacing_s=6.0, rate=rate)
    table = planted.find(data)
    kept = []

    def keep(snippets, rows, **options):
        kept.append((snippets, rows, options))
        return measure(snippets, rows, **options)

    from dq.night import strain_features

    strain_features.measure = keep
    begin = time.process_time()
    planted.measured(data, table)
    whole = time.process_time() - begin
    strain_features.measure = measure
    best = np.inf
    for _ in range(3):
        begin = time.process_time()
        for snippets, rows, options in kept:
            measure(snippets, rows, **options)
        best = min(best, time.process_time() - begin)
    return {"maps": len(table) / best, "all": len(table) / whole, "n": len(table)}


if __name__ == "__main__":
    number = int(sys.argv[1]) if len(sys.argv) > 1 else 12
    for rate in (4096, 16384):
        found = speed(rate, number)
        print(
            f"{rate:6d} Hz: {found['maps']:.0f} transients/s with maps and features, "
            f"{found['all']:.0f}/s with reading and whitening too ({found['n']:.0f})"
        )
    drawn = planted.draw_sources(11, number)
    result = stability(level_tables(drawn, seed=40), np.array([n for n, _ in drawn]))
    result["group"] = [f.group for f in FEATURES]
    print(result.round(3).to_string())
