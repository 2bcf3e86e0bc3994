"""``quality_mask.h5``: analysed time and vetoes as a 1 Hz bit mask.

Bit 0 is set where the whole second was analysed; the bit of a category or of a veto is
set where any part of the second is vetoed. A second without bit 0 was not judged.
"""

from __future__ import annotations

import io
from pathlib import Path

import h5py
import numpy as np
import pandas as pd

from dq.segments import NS, Segments
from dq.writers.atomic import write_atomically
from dq.writers.segment_files import segments_of

SCHEMA = 1

#: Bits of one mask word; vetoes beyond go into further words.
WORD_BITS = 32

_FIXED = (
    ("ANALYSED", "the whole second was analysed; without it, it was not judged"),
    ("CATEGORY_1", "data cannot be used in part of the second"),
    ("CATEGORY_2", "a safe witness with an understood coupling was active"),
    ("CATEGORY_3", "a statistical association, or a family of the strain itself"),
)


def touched_seconds(segments: Segments, start_s: int, count: int) -> np.ndarray:
    """Say which whole seconds from ``start_s`` on the segments touch."""
    whole = segments.round_outward(NS)
    edges = np.zeros(count + 1, dtype=np.int64)
    first = np.clip(whole.starts // NS - start_s, 0, count)
    last = np.clip(whole.ends // NS - start_s, 0, count)
    np.add.at(edges, first, 1)
    np.add.at(edges, last, -1)
    return np.cumsum(edges[:-1]) > 0


def write_quality_mask(
    path: str | Path,
    *,
    start_ns: int,
    end_ns: int,
    analysed: Segments,
    vetoes: pd.DataFrame,
) -> None:
    """Write the mask over the whole seconds that the requested range touches.

    Parameters
    ----------
    path : str or Path
    start_ns, end_ns : int
        Requested range.
    analysed : Segments
    vetoes : pandas.DataFrame
        ``dq.tables.VETOES``.

    Notes
    -----
    Dataset ``mask`` has one uint32 per second, or shape (n_seconds, n_words) when the
    vetoes need more than 32 bits; ``bit_names`` and ``bit_meanings`` list the bits in
    order, word after word.
    """
    start_s, end_s = start_ns // NS, -(-end_ns // NS)
    count = end_s - start_s
    outside = analysed.complement(start_s * NS, end_s * NS)
    columns = [~touched_seconds(outside, start_s, count)]
    for category in (1, 2, 3):
        rows = vetoes[vetoes["category"] == category]
        columns.append(touched_seconds(segments_of(rows), start_s, count))
    names = [n for n, _ in _FIXED]
    meanings = [m for _, m in _FIXED]
    for name, rows in vetoes.groupby("veto", sort=False):
        columns.append(touched_seconds(segments_of(rows), start_s, count))
        names.append(str(name))
        meanings.append(f"veto {name}, category {rows['category'].iloc[0]}")
    words = -(-len(columns) // WORD_BITS)
    mask = np.zeros((count, words), dtype=np.uint32)
    for bit, column in enumerate(columns):
        mask[:, bit // WORD_BITS] |= column.astype(np.uint32) << np.uint32(
            bit % WORD_BITS
        )
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as file:
        file.attrs["schema"] = SCHEMA
        data = file.create_dataset(
            "mask", data=mask[:, 0] if words == 1 else mask, track_times=False
        )
        data.attrs["gps_start"] = start_s
        data.attrs["sample_rate"] = 1.0
        text = h5py.string_dtype()
        for key, values in (("bit_names", names), ("bit_meanings", meanings)):
            file.create_dataset(key, data=values, dtype=text, track_times=False)
    write_atomically(path, buffer.getvalue())
