"""The store: all channels in all files, known by their headers."""

from __future__ import annotations

import glob
import hashlib
import json
import os
from dataclasses import astuple
from pathlib import Path

import numpy as np

from dq.errors import InputError
from dq.segments import NS, Segments
from dq.store.headers import MaskStretch, Problem, Stretch, scan_file
from dq.store.reader import ChannelData


class Store:
    """Channels by name.

    Attributes
    ----------
    channels : list of str
        Names that have at least one usable stretch, sorted.
    problems : list of Problem
        Files and headers that cannot be used.
    """

    def __init__(
        self,
        base: Path,
        paths: list[Path],
        stretches: list[Stretch],
        masks: list[MaskStretch],
        problems: list[Problem],
        *,
        has_mask: bool,
    ):
        self._base = base
        self._paths = dict(enumerate(paths))
        self._by_channel: dict[str, list[Stretch]] = {}
        for stretch in stretches:
            self._by_channel.setdefault(stretch.channel, []).append(stretch)
        self._masks = masks
        self._has_mask = has_mask
        self._stats: dict[int, os.stat_result] = {}
        self.channels = sorted(self._by_channel)
        self.problems = problems

    def channel(self, name: str) -> ChannelData:
        """Give one channel.

        Raises
        ------
        ChannelError
            Its stretches differ in rate.
        KeyError
            The store does not hold it.
        """
        return ChannelData(name, self._by_channel[name], self._paths)

    def ready(self) -> Segments | None:
        """Give the seconds whose mask has all required bits; None without a mask."""
        if not self._has_mask:
            return None
        starts, ends = [np.zeros(0, np.int64)], [np.zeros(0, np.int64)]
        for mask in self._masks:
            edges = np.flatnonzero(np.diff(mask.ready, prepend=False, append=False))
            starts.append(mask.start_ns + edges[::2] * NS)
            ends.append(mask.start_ns + edges[1::2] * NS)
        return Segments(np.concatenate(starts), np.concatenate(ends))

    def fingerprint(self, name: str, span: Segments | None = None) -> str:
        """Give a digest that changes when the channel's files change.

        Sizes, modification times and headers go in, samples do not: reading a night
        twice only to see that nothing changed would double its cost.

        Parameters
        ----------
        name : str
        span : Segments, optional
            Only what is recorded between its first start and last end counts; without
            it, everything does. Files that arrive later for other times then change
            nothing.
        """
        return self._digest(name, span, with_time=True)

    def content_id(self, name: str, span: Segments | None = None) -> str:
        """Give the same digest without modification times: copies are equal."""
        return self._digest(name, span, with_time=False)

    def _digest(self, name: str, span: Segments | None, *, with_time: bool) -> str:
        rows = []
        low, high = (span.starts[0], span.ends[-1]) if span else (-(2**63), 2**63)
        for stretch in sorted(self._by_channel[name], key=astuple):
            if stretch.end_ns <= low or stretch.start_ns >= high:
                continue
            path = self._paths[stretch.file]
            status = self._status(stretch.file)
            row = [_relative(path, self._base), status.st_size, str(stretch.rate)]
            row += [stretch.dataset, stretch.start_ns, stretch.samples, stretch.dtype]
            rows.append([*row, status.st_mtime_ns] if with_time else row)
        return hashlib.sha256(json.dumps(rows).encode()).hexdigest()

    def _status(self, file: int) -> os.stat_result:
        # thousands of channels share a file
        if file not in self._stats:
            self._stats[file] = self._paths[file].stat()
        return self._stats[file]


def _relative(path: Path, base: Path) -> str:
    try:
        return path.relative_to(base.resolve()).as_posix()
    except ValueError:
        return path.as_posix()


def open_store(patterns, *, base: Path, layout=None, ready_mask=None) -> Store:
    """Find the files and read their headers.

    Parameters
    ----------
    patterns : list of str
        Paths or globs, relative to ``base``.
    base : Path
    layout : dq.config.Layout, optional
        Files that hold its dataset are read by it, others in the native layout.
    ready_mask : dq.config.ReadyMask, optional

    Returns
    -------
    Store

    Raises
    ------
    InputError
        A pattern matches no file, or names a folder.
    """
    paths = find_files(patterns, Path(base))
    stretches, masks, problems = [], [], []
    for number, path in enumerate(paths):
        found = scan_file(path, number, layout, ready_mask)
        for whole, part in zip((stretches, masks, problems), found, strict=True):
            whole.extend(part)
    return Store(
        Path(base),
        paths,
        stretches,
        masks,
        problems,
        has_mask=ready_mask is not None,
    )


def find_files(patterns, base: Path) -> list[Path]:
    """Give the files that the patterns match, each once, sorted by name."""
    found: set[Path] = set()
    for pattern in patterns:
        matches = [Path(p) for p in glob.glob(str(base / pattern), recursive=True)]
        files = {p.resolve() for p in matches if p.is_file()}
        if not matches:
            raise InputError(
                f"data.files: {pattern!r} matches no file in {str(base)!r}; check the "
                "pattern"
            )
        if not files:
            raise InputError(
                f"data.files: {pattern!r} names a folder; add a pattern such as "
                f"{pattern.rstrip('/')}/*.h5"
            )
        found |= files
    return sorted(found)
