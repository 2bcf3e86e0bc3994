"""From snippets to the feature table."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from dq.errors import InputError
from dq.features.comb import measure_comb
from dq.features.context import measure_context
from dq.features.decay import measure_decay
from dq.features.energy import measure_energy
from dq.features.extent import measure_extent
from dq.features.registry import NAMES
from dq.features.ridge import measure_ridge
from dq.features.scene import MAP_LOW_HZ, make_scene
from dq.features.shape import measure_shape
from dq.features.snippets import Snippet
from dq.features.spectrum import measure_spectrum

#: Samples that go through the transforms together: bounds the memory at some ten times
#: as many bytes, and shares the cost of a row's calls among the transients.
BATCH_SAMPLES = 2**19


def measure(
    snippets: Sequence[Snippet | None],
    transients: pd.DataFrame,
    *,
    among: pd.DataFrame | None = None,
    mains_hz: float = 50.0,
    f_low_hz: float = MAP_LOW_HZ,
) -> pd.DataFrame:
    """Measure every feature of some transients.

    Parameters
    ----------
    snippets : sequence of Snippet or None
        Whitened strain around each transient; None where there is none.
    transients : pandas.DataFrame
        One row per snippet; ``gps_time`` and ``frequency_hz`` are used.
    among : pandas.DataFrame, optional
        All transients of the channel, whose neighbourhood is counted; by default
        ``transients`` themselves.
    mains_hz : float
        Fundamental of the mains, Hz.
    f_low_hz : float
        Lowest frequency of the energy maps, Hz.

    Returns
    -------
    pandas.DataFrame
        Columns ``FEATURES``, float64, rows in the order of ``transients`` with its
        index. A row without a snippet is NaN throughout; others hold no NaN.

    Raises
    ------
    InputError
        Snippets and transients differ in number.
    """
    if len(snippets) != len(transients):
        raise InputError(
            f"{len(snippets)} snippets for {len(transients)} transients; give one each"
        )
    out = np.full((len(transients), len(NAMES)), np.nan)
    known = np.array([s is not None for s in snippets], dtype=bool)
    for batch in _batches(snippets):
        scene = make_scene([snippets[i] for i in batch], f_low_hz=f_low_hz)
        found = {
            **measure_extent(scene),
            **measure_spectrum(scene),
            **measure_energy(scene),
            **measure_ridge(scene),
            **measure_decay(scene),
            **measure_comb(scene, mains_hz=mains_hz),
            **measure_shape(scene),
        }
        for column, name in enumerate(NAMES):
            if name in found:
                out[batch, column] = found[name]
    every = transients if among is None else among
    around = measure_context(
        *(transients[c].to_numpy(float)[known] for c in ("gps_time", "frequency_hz")),
        *(every[c].to_numpy(float) for c in ("gps_time", "frequency_hz")),
    )
    for name, values in around.items():
        out[known, NAMES.index(name)] = values
    return pd.DataFrame(out, columns=list(NAMES), index=transients.index)


def _batches(snippets):
    """Give the positions of snippets that go together: one rate, one length."""
    kinds: dict[tuple[float, float], list[int]] = {}
    for i, snippet in enumerate(snippets):
        if snippet is not None:
            kinds.setdefault((snippet.sample_rate, snippet.length_s), []).append(i)
    for rate, length in sorted(kinds):
        at = kinds[rate, length]
        # transients of like bands share the rows of the map that they need
        at.sort(key=lambda i: (snippets[i].f_high_hz, i))
        size = max(int(BATCH_SAMPLES / (rate * length)), 1)
        yield from (at[k : k + size] for k in range(0, len(at), size))
