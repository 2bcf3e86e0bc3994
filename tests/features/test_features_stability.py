"""The same waveform in other noise: features at SNR 8 against those at SNR 80.

Allowed: no feature drifts by more than 0.2 of its ranks from one end to the other, and
it moves by less than 0.9 of what lies between families, or by less than 0.15. Polarity
is noise where a waveform has none, and the context is that of other transients; both
may do what they like. Forty features move by less than 0.6.
"""

import numpy as np
import planted
import pytest
from scipy.stats import rankdata

from dq.features import FEATURES

LEVELS = (8.0, 80.0)
EACH = 6


@pytest.fixture(scope="module")
def levels():
    """Measure the same waveforms with loudest tiles of SNR 8 and of SNR 80."""
    sources = planted.draw_sources(3, EACH)
    tile = np.full(len(sources), LEVELS[-1])
    snrs, out, kept = tile, {}, []
    for seed, level in ((21, None), (22, LEVELS[0]), (23, LEVELS[1])):
        if level is not None:
            snrs = LEVELS[-1] * level / tile
        data, times = planted.plant(sources, snrs, seed=seed)
        table = planted.find(data)
        rows = planted.loudest_near(table, sources, times)
        found = np.array([r is not None for r in rows])
        # near the threshold a few are lost; they are left out at both levels
        assert found.mean() > 0.8
        rows = [r or 0 for r in rows]
        if level is None:
            tile = np.where(found, table.snr[rows], LEVELS[-1])
            continue
        kept.append(found)
        out[level] = planted.measured(data, table).loc[rows].reset_index(drop=True)
    both = kept[0] & kept[1]
    families = np.array([name for name, _ in sources])[both]
    return {level: table[both] for level, table in out.items()}, families


def test_features_hold_from_snr_8_to_snr_80(levels):
    tables, families = levels
    who = np.tile(families, 2)
    other = who[:, None] != who[None, :]
    ratios = {}
    for feature in FEATURES:
        low, high = (tables[level][feature.name].to_numpy() for level in LEVELS)
        ranks = rankdata(np.concatenate([low, high])) / (2 * len(low))
        step = ranks[len(low) :] - ranks[: len(low)]
        apart = np.abs(ranks[:, None] - ranks[None, :])[other].mean()
        assert abs(step.mean()) <= 0.2, feature.name
        move = np.abs(step).mean()
        ratios[feature.name] = move / apart if apart else 0.0
        if move < 0.15:
            ratios[feature.name] = min(ratios[feature.name], 0.9)
    free = {"polarity", *(f.name for f in FEATURES if f.group == "context")}
    assert {k: v for k, v in ratios.items() if v > 0.95 and k not in free} == {}
    assert sum(v <= 0.6 for v in ratios.values()) >= 40


def test_loudness_cannot_be_read_off(levels):
    # a rule that tells SNR 8 from SNR 80 by one threshold on one feature: by chance
    # half are right, and 0.5 + 0.5 sqrt(ln(200) / 80) = 0.63 with the best of 200 tries
    tables, _ = levels
    low, high = (tables[level] for level in LEVELS)
    for feature in FEATURES:
        values = np.concatenate([low[feature.name], high[feature.name]])
        loud = np.repeat([False, True], len(low))
        right = [
            np.mean((values > cut) == loud) for cut in np.quantile(values, [0.25, 0.5])
        ]
        assert max(abs(r - 0.5) for r in right) < 0.25, feature.name
