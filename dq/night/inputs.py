"""Everything a night reads before it starts: lists, segments, file headers.

Only headers are read here; a mistake in any of these is found before anything is
written.
"""

from __future__ import annotations

import difflib
import hashlib
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from dq.config import Config
from dq.errors import InputError, NoDataError
from dq.segments import Segments, to_ns

if TYPE_CHECKING:
    import pandas as pd

    from dq.store import Channel, Store

_NS = 1_000_000_000

#: Longest range of one night, days: a month; longer runs are asked for night by night
#: (own choice, so a mistyped year fails at once).
MAX_SPAN_DAYS = 31

#: All time that a recording can lie in, where no ready list narrows it.
ALL_TIME = Segments.of([(0, 9_223_372_036 * _NS)])


@dataclass(frozen=True)
class Inputs:
    """What the configuration names, read and checked.

    Attributes
    ----------
    config : Config
    channels : list of Channel
        The channel list, in its order.
    ready : Segments or None
        None when the configuration names no ready time: all time is wanted.
    injections : pandas.DataFrame or None
    store : Store
    texts : dict of str to str
        sha256 of the small input files, by their key in the configuration.
    """

    config: Config
    channels: list[Channel]
    ready: Segments | None
    injections: pd.DataFrame | None
    store: Store
    texts: dict[str, str] = field(default_factory=dict)

    @property
    def strain(self) -> Channel:
        """The list's row of the strain channel."""
        return next(c for c in self.channels if c.name == self.config.site.strain)

    @property
    def auxiliary(self) -> list[Channel]:
        """The list's auxiliary channels."""
        return [c for c in self.channels if c.role == "auxiliary"]

    @property
    def problems(self) -> list[tuple[str, str | None, str]]:
        """What is wrong in the files: where (relative), whose channel, and what."""
        base = f"{self.config.base.resolve()}/"
        return [
            (str(p.where).removeprefix(base), p.channel, p.text)
            for p in self.store.problems
        ]

    def why_absent(self, name: str) -> str:
        """Say why a channel is not in the store."""
        for where, channel, text in self.problems:
            if channel == name:
                return f"{text} ({where})"
        return "no data: it is in none of the data files"

    @property
    def wanted(self) -> Segments:
        """The time that is wanted at all."""
        return ALL_TIME if self.ready is None else self.ready


def read_inputs(config: Config) -> Inputs:
    """Read the channel list, ready segments, injections and all file headers.

    Parameters
    ----------
    config : Config

    Returns
    -------
    Inputs

    Raises
    ------
    InputError
        A file is missing or malformed, or the strain channel is not on the list.
    """
    from dq.store import open_store, read_channel_list, read_injections, read_ready

    data = config.data
    channels = read_channel_list(config.path(data.channels))
    _check_strain(config, channels)
    ready = None if data.ready is None else read_ready(config.path(data.ready))
    injections = None
    if data.injections is not None:
        injections = read_injections(config.path(data.injections))
    store = open_store(
        data.files, base=config.base, layout=data.layout, ready_mask=data.ready_mask
    )
    if data.ready_mask is not None:
        ready = store.ready()
    texts = {
        key: file_digest(config.path(name))
        for key in ("channels", "ready", "injections")
        if (name := getattr(data, key)) is not None
    }
    model = config.families.model
    if model is not None and config.path(model).is_file():
        texts["model"] = file_digest(config.path(model))
    return Inputs(config, channels, ready, injections, store, texts)


def file_digest(path: Path) -> str:
    """Give the sha256 of a file's bytes."""
    return hashlib.sha256(path.read_bytes()).hexdigest()


def check_range(start, end) -> tuple[int, int]:
    """Turn a range in GPS seconds into nanoseconds; refuse an impossible one.

    Raises
    ------
    InputError
        End is not after start, the range is longer than 31 days, or a time is no
        number within 0..9223372036.
    """
    start_ns, end_ns = to_ns(start), to_ns(end)
    if end_ns <= start_ns:
        raise InputError(f"end {end} must lie after start {start} (GPS seconds)")
    if start_ns < 0 or end_ns > ALL_TIME.ends[-1]:
        raise InputError(
            f"range {start} to {end} must lie within 0..9223372036 GPS seconds"
        )
    days = (end_ns - start_ns) / (86400 * _NS)
    if days > MAX_SPAN_DAYS:
        raise InputError(
            f"range {start} to {end} spans {days:.4g} days; the bound is "
            f"{MAX_SPAN_DAYS}; ask for shorter nights"
        )
    return start_ns, end_ns


def check_strain_time(inputs: Inputs, start_ns: int, end_ns: int) -> None:
    """Make sure that the strain has recorded, ready time in the range.

    Raises
    ------
    NoDataError
        It has none; the message says which part is missing.
    """
    name = inputs.config.site.strain
    span = f"{start_ns / _NS:.10g}..{end_ns / _NS:.10g}"
    if name not in inputs.store.channels:
        raise NoDataError(
            f"strain {name!r}: {inputs.why_absent(name)}; check data.files and "
            f"site.strain{nearest(name, inputs.store.channels)}"
        )
    wanted = inputs.wanted.clip(start_ns, end_ns)
    if not wanted:
        raise NoDataError(
            f"no ready time in {span}; check the range and the ready segments"
        )
    recorded = inputs.store.channel(name).recorded
    if not recorded:
        raise NoDataError(f"strain {name!r} has no samples; check the data files")
    if not wanted & recorded:
        first, last = recorded.starts[0] / _NS, recorded.ends[-1] / _NS
        raise NoDataError(
            f"strain {name!r} has no data in the ready time of {span}; it is recorded "
            f"within {first:.10g}..{last:.10g}"
        )


def nearest(name: str, known: list[str]) -> str:
    """Give a hint that names the nearest known name, or nothing."""
    near = [k for k in known if k.lower() == name.lower()]
    near = near or difflib.get_close_matches(name, known, n=1)
    return f"; nearest is {near[0]!r}" if near else ""


def _check_strain(config: Config, channels: list[Channel]) -> None:
    name = config.site.strain
    row = next((c for c in channels if c.name == name), None)
    if row is None:
        raise InputError(
            f"strain {name!r} is not in {config.data.channels!r}; add it with role "
            f"strain, or correct site.strain"
            + nearest(name, [c.name for c in channels])
        )
    if row.role != "strain":
        raise InputError(
            f"{config.data.channels!r} gives {name!r} the role {row.role!r}, but it is "
            "site.strain; make the role strain"
        )
