"""Labelled examples planted again, quieter, in noise from elsewhere in their channel.

A few loud labels say little about how a family looks near the threshold. Copies go
through the same measurement as the examples; they belong to their parent's side of
every split.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd

from dq.config import Config
from dq.families import draw_snrs, faded_snippet, replant
from dq.features import NAMES, Snippet, measure
from dq.features.snippets import LENGTHS_S, MARGIN_S
from dq.night.strain_features import BlockCutter, FeaturePass, low_edge, walk
from dq.segments import NS, Segments, to_ns_array

#: The quietest copy, SNR: a little above the finder's default threshold, below which
#: the finder would not show it to anybody.
LOWEST_SNR = 6.0

#: Noise stretches kept of each length; later ones replace the oldest.
_KEPT = 8

#: Noise keeps this far from any transient, s.
_CLEAR_S = 0.5


class CopyPass(FeaturePass):
    """Snippets of examples in, features of their copies out.

    Parameters
    ----------
    per_example : int
        Copies of each example.
    """

    def __init__(self, transients, among, config: Config, f_low: float, *, per_example):
        super().__init__(transients, among, config, f_low)
        self.per_example = per_example
        self.tables: list[pd.DataFrame] = []
        self.noise: dict[int, list[np.ndarray]] = {}
        starts, ends = (
            to_ns_array(self.options["among"][c].to_numpy(float))
            for c in ("gps_start", "gps_end")
        )
        clear = round(_CLEAR_S * NS)
        self.busy = Segments.from_arrays(starts - clear, ends + clear)

    def see(self, cutter: BlockCutter) -> None:
        """Keep quiet stretches of a block as noise."""
        low, high = (cutter.origin_ns + round(t * NS) for t in cutter.settled)
        for start, end in Segments.of([(low, high)]) - self.busy:
            for length in LENGTHS_S:
                samples = round(length * cutter.rate)
                first = int(np.ceil((start - cutter.origin_ns) / NS * cutter.rate))
                if (end - start) / NS >= length + 0.1:
                    kept = self.noise.setdefault(samples, [])
                    kept.append(cutter.series[first : first + samples].copy())
                    del kept[:-_KEPT]

    def flush(self) -> None:
        """Plant and measure the copies of what waits."""
        copies, rows, snrs = [], [], []
        for i in sorted(self.waiting):
            row = self.transients.iloc[i]
            seed = [round(row["gps_time"] * 1e6), self.per_example]
            rng = np.random.default_rng(seed)
            noise = self.noise.get(len(self.waiting[i].values))
            if not noise:
                continue
            parent = float(row["snr"])
            for snr in draw_snrs(parent, self.per_example, lowest=LOWEST_SNR, rng=rng):
                other = noise[int(rng.integers(len(noise)))]
                copies.append(_copy(self.waiting[i], other, parent, float(snr)))
                rows.append(i)
                snrs.append(float(snr))
        if copies:
            where = self.transients.iloc[rows]
            found = measure(copies, where, **self.options).reset_index(drop=True)
            self.tables.append(found.assign(parent=rows, snr=snrs))
        self.waiting, self.samples = {}, 0


def _copy(snippet: Snippet, noise: np.ndarray, parent: float, snr: float) -> Snippet:
    half = len(snippet.values) // 2
    taper = round(0.5 * MARGIN_S * snippet.sample_rate)
    own, fade = faded_snippet(snippet.values, centre=half, half=half, taper=taper)
    values = replant(own, fade, noise, at=half, parent_snr=parent, snr=snr)
    return replace(snippet, values=values.astype(np.float32), flat_s=0.0)


def measure_copies(
    data,
    examples: pd.DataFrame,
    *,
    per_example: int,
    ready: Segments | None,
    config: Config,
    f_low_hz: float | None = None,
    f_high_hz: float | None = None,
    among: pd.DataFrame | None = None,
) -> pd.DataFrame:
    """Give the features of quieter copies of some transients.

    Parameters
    ----------
    data : dq.store.ChannelData
    examples : pandas.DataFrame
        Columns of ``dq.tables.TRANSIENTS``.
    per_example : int
    ready, config, f_low_hz, f_high_hz, among
        As :func:`dq.night.strain_features.measure_transients` takes them.

    Returns
    -------
    pandas.DataFrame
        Columns ``dq.features.NAMES``, ``parent`` (position among the examples) and
        ``snr``. Examples below twice ``LOWEST_SNR`` have no copies, nor have those for
        whose length no quiet stretch was found.
    """
    edge = low_edge(data, config, f_low_hz)
    work = CopyPass(examples, among, config, edge, per_example=per_example)
    walk(
        data,
        work,
        ready=ready,
        config=config,
        f_low_hz=f_low_hz,
        f_high_hz=f_high_hz,
    )
    if not work.tables:
        return pd.DataFrame(columns=[*NAMES, "parent", "snr"], dtype=float)
    table = pd.concat(work.tables, ignore_index=True)
    return table[table[list(NAMES)].notna().all(axis=1)].reset_index(drop=True)
