"""Lazy reading of one channel: contiguous, finite stretches of a time range."""

from __future__ import annotations

import errno
import logging
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

import h5py
import numpy as np

from dq.errors import ChannelError
from dq.segments import NS, Segments, seconds_text
from dq.store.headers import Stretch

log = logging.getLogger(__name__)

#: Stretches fit together when their samples meet within this fraction of a sample.
#: Float GPS starts are good to 0.24 us, 1.6 % of a sample at 65 kHz.
TOLERANCE = Fraction(1, 20)

#: Errors that say the file system is gone, not that a chunk is damaged.
_GONE = {errno.EIO, errno.ENOENT, errno.ESTALE, errno.ENODEV, errno.ENXIO, errno.EACCES}


@dataclass(frozen=True)
class Series:
    """Contiguous samples.

    Attributes
    ----------
    start_ns : int
        GPS time of the first sample.
    rate : Fraction
        Hz.
    values : ndarray, shape (n_samples,)
        float32 or float64, finite.
    """

    start_ns: int
    rate: Fraction
    values: np.ndarray

    def time_ns(self, index: int) -> int:
        """Give the time of a sample; the index may lie outside."""
        return self.start_ns + round(Fraction(index * NS) / self.rate)

    @property
    def end_ns(self) -> int:
        """Time just past the last sample."""
        return self.time_ns(len(self.values))

    def index_at_or_after(self, time_ns: int) -> int:
        """Give the first sample at or after a time."""
        return index_from(self.start_ns, self.rate, time_ns)


def index_from(start_ns: int, rate: Fraction, time_ns: int) -> int:
    """Give the first sample at or after a time, within ``TOLERANCE`` of a sample."""
    exact = Fraction(time_ns - start_ns) * rate / NS - TOLERANCE
    return -((-exact.numerator) // exact.denominator)


class ChannelData:
    """One channel over all files; files are opened when samples are asked for.

    Parameters
    ----------
    name : str
    stretches : list of Stretch
        All of one rate.
    paths : dict of int to Path
        Files by number.

    Raises
    ------
    ChannelError
        The stretches differ in rate.
    """

    def __init__(self, name: str, stretches: list[Stretch], paths: dict[int, Path]):
        self.name = name
        order = sorted(stretches, key=lambda s: (s.start_ns, s.end_ns, s.file))
        self._stretches = order
        self._paths = {s.file: paths[s.file] for s in order}
        self.rate = order[0].rate
        for stretch in order:
            if stretch.rate != self.rate:
                raise ChannelError(
                    f"channel {name!r}: rate changes from {float(self.rate):g} Hz to "
                    f"{float(stretch.rate):g} Hz in {paths[stretch.file]} at GPS "
                    f"{seconds_text(stretch.start_ns)}; give the pieces different names"
                )
        self.unit = next((s.unit for s in order if s.unit), "")
        self.dtype = order[0].dtype
        # a gap shorter than the tolerance is rounding, not missing time
        self.recorded = Segments.of((s.start_ns, s.end_ns) for s in order)
        self._fuse_rounding()
        self.problems: list[str] = self._header_problems()
        self.read_problems: list[str] = []
        self._open: tuple[int, h5py.File] | None = None

    def _fuse_rounding(self) -> None:
        slack = int(TOLERANCE * NS / self.rate)
        starts, ends = self.recorded.starts.copy(), self.recorded.ends.copy()
        close = starts[1:] - ends[:-1] <= slack
        ends[:-1][close] = starts[1:][close]
        self.recorded = Segments(starts, ends)

    def _header_problems(self) -> list[str]:
        units = sorted({s.unit for s in self._stretches})
        found = []
        if len(units) > 1:
            found.append(
                f"unit changes between stretches: {', '.join(map(repr, units))}"
            )
        empty = sum(s.samples == 0 for s in self._stretches)
        if empty:
            found.append(f"{empty} datasets without samples")
        return found

    def __getstate__(self):
        return {**self.__dict__, "_open": None}

    def read(self, start_ns: int, end_ns: int) -> list[Series]:
        """Read the finite samples whose times lie in ``[start_ns, end_ns)``.

        Parameters
        ----------
        start_ns, end_ns : int

        Returns
        -------
        list of Series
            Sorted, disjoint; NaN and infinite samples part them.

        Raises
        ------
        ChannelError
            Stretches overlap with different samples or between samples.
        """
        joined: list[Series] = []
        for stretch in self._stretches:
            if stretch.end_ns <= start_ns or stretch.start_ns >= end_ns:
                continue
            first = max(index_from(stretch.start_ns, stretch.rate, start_ns), 0)
            stop = index_from(stretch.start_ns, stretch.rate, end_ns)
            for low, values in self._samples(
                stretch, first, min(stop, stretch.samples)
            ):
                at = stretch.start_ns + round(Fraction(low * NS) / stretch.rate)
                self._join(joined, Series(at, self.rate, values))
        return [part for series in joined for part in _finite_parts(series)]

    def _join(self, joined: list[Series], new: Series) -> None:
        if not joined:
            joined.append(new)
            return
        last = joined[-1]
        shared = Fraction(last.end_ns - new.start_ns) * self.rate / NS
        if shared < -TOLERANCE:
            joined.append(new)
            return
        count = round(shared)
        if abs(shared - count) > TOLERANCE:
            raise ChannelError(
                f"channel {self.name!r}: stretches overlap between samples at GPS "
                f"{seconds_text(new.start_ns)} (by {float(shared):.3f} samples); "
                "correct gps_start or remove one"
            )
        both = min(count, len(new.values))
        offset = len(last.values) - count
        old, fresh = last.values[offset : offset + both], new.values[:both]
        differ = ~((old == fresh) | (np.isnan(old) & np.isnan(fresh)))
        if differ.any():
            at = new.time_ns(int(np.argmax(differ)))
            raise ChannelError(
                f"channel {self.name!r}: stretches overlap with different samples from "
                f"GPS {seconds_text(at)}; remove the wrong one"
            )
        if both < len(new.values):
            values = np.concatenate([last.values, new.values[both:]])
            joined[-1] = Series(last.start_ns, self.rate, values)

    def _samples(self, stretch: Stretch, first: int, stop: int):
        """Yield (index, values); damaged parts are left out, to a second."""
        if stop <= first:
            return
        try:
            dataset = self._file(stretch.file)[stretch.dataset]
            yield first, _as_float(dataset[first:stop])
        except (OSError, RuntimeError) as error:
            if getattr(error, "errno", None) in _GONE:
                raise
            if stop - first <= max(float(self.rate), 1.0):
                self._note_damage(stretch, first, error)
                return
            middle = (first + stop) // 2
            yield from self._samples(stretch, first, middle)
            yield from self._samples(stretch, middle, stop)

    def _note_damage(self, stretch: Stretch, first: int, error: Exception) -> None:
        text = f"damaged samples in {self._paths[stretch.file]}: {error}"
        text = " ".join(text.split())
        if text not in self.read_problems:
            self.read_problems.append(text)
            log.warning("%s: %s", self.name, text)

    def _file(self, number: int) -> h5py.File:
        if self._open is None or self._open[0] != number:
            self.close()
            self._open = (number, h5py.File(self._paths[number], "r"))
        return self._open[1]

    def close(self) -> None:
        """Close the file that is open, if any; reading opens it again."""
        if self._open is not None:
            self._open[1].close()
            self._open = None


def _as_float(values: np.ndarray) -> np.ndarray:
    """Give float32 or float64 that hold every stored value exactly."""
    kind, size = values.dtype.kind, values.dtype.itemsize
    if kind == "f" and size in (4, 8):
        return values.astype(values.dtype.newbyteorder("="), copy=False)
    exact32 = (kind == "f" and size == 2) or (kind in "iu" and size <= 2)
    return values.astype(np.float32 if exact32 else np.float64)


def _finite_parts(series: Series) -> list[Series]:
    finite = np.isfinite(series.values)
    if finite.all():
        return [series] if len(series.values) else []
    edges = np.flatnonzero(np.diff(finite, prepend=False, append=False))
    return [
        Series(series.time_ns(int(a)), series.rate, series.values[a:b])
        for a, b in zip(edges[::2], edges[1::2], strict=True)
    ]
