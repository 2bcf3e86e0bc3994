"""Products of two channels as channels of their own: ``FAST@product-SLOW``.

A product is read like any channel, at the fast one's rate, so the finder, the state
files and the statistics need to know nothing about it.
"""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from typing import TYPE_CHECKING

import numpy as np

from dq.errors import ChannelError, InputError, NoDataError
from dq.motion import detrended, interpolated
from dq.motion.product import INTERPOLATION_HALF
from dq.night.inputs import Inputs, nearest
from dq.segments import Segments
from dq.store import Channel
from dq.tables import recordings_of

if TYPE_CHECKING:
    from dq.store import ChannelData
    from dq.store.reader import Series

_NS = 1_000_000_000

#: The slow channel's drift is the line through the medians of blocks of this length on
#: a GPS grid, s (own choice: motion of up to two minutes stays, the night's goes).
DRIFT_BLOCK_S = 256


def product_name(fast: str, slow: str) -> str:
    """Name a product; ``@`` occurs in no channel's name."""
    return f"{fast}@product-{slow}"


def product_rows(inputs: Inputs) -> list[Channel]:
    """Give a row for every product that the configuration names.

    A product is unsafe if one of its channels is, and safe if both are.

    Raises
    ------
    InputError
        A pair names a channel that is not an auxiliary one of the list.
    """
    known = {row.name: row for row in inputs.auxiliary}
    rows = []
    for pair in inputs.config.witnesses.products:
        for which in ("fast", "slow"):
            name = getattr(pair, which)
            if name not in known:
                raise InputError(
                    f"witnesses.products: {which} = {name!r} is no auxiliary channel "
                    f"of the list{nearest(name, list(known))}; correct the name"
                )
        fast, slow = known[pair.fast], known[pair.slow]
        both = {fast.safe, slow.safe}
        safe = "no" if "no" in both else "yes" if both == {"yes"} else ""
        name = product_name(fast.name, slow.name)
        rows.append(replace(fast, name=name, safe=safe, quantity="", unit=""))
    return rows


def product_data(inputs: Inputs, name: str) -> ProductData:
    """Give the samples of a product.

    Raises
    ------
    NoDataError
        One of its channels has no data.
    ChannelError
        The rates of one change, or the fast one's is not the higher.
    """
    parts = recordings_of(name)
    for part in parts:
        if part not in inputs.store.channels:
            raise NoDataError(f"{part!r}: {inputs.why_absent(part)}")
    return ProductData(name, *(inputs.store.channel(part) for part in parts))


class ProductData:
    """The product of two channels, with the face of ``dq.store.ChannelData``.

    Parameters
    ----------
    name : str
    fast, slow : ChannelData

    Raises
    ------
    ChannelError
        The fast channel's rate is not the higher one.
    """

    def __init__(self, name: str, fast: ChannelData, slow: ChannelData):
        if fast.rate <= slow.rate:
            raise ChannelError(
                f"product of {fast.name!r} and {slow.name!r}: the fast channel's rate, "
                f"{float(fast.rate):g} Hz, must be above the slow one's, "
                f"{float(slow.rate):g} Hz; exchange them"
            )
        self.name = name
        self.fast, self.slow = fast, slow
        self.rate: Fraction = fast.rate
        self._margin_ns = round((INTERPOLATION_HALF + 1) * _NS / slow.rate)
        self.recorded: Segments = fast.recorded & slow.recorded.pad(-self._margin_ns)
        self.problems: list[str] = []
        self._medians: dict[int, float | None] = {}

    @property
    def read_problems(self) -> list[str]:
        """What reading either channel met."""
        return [*self.fast.read_problems, *self.slow.read_problems]

    def read(self, start_ns: int, end_ns: int) -> list[Series]:
        """Read the product where both channels are finite; as ``ChannelData.read``."""
        if end_ns <= start_ns:
            return []
        low, high = start_ns - self._margin_ns, end_ns + self._margin_ns
        knots, medians = self._drift(low, high)
        slow = [
            self._without_drift(s, knots, medians) for s in self.slow.read(low, high)
        ]
        return [
            part
            for series in self.fast.read(start_ns, end_ns)
            for values, start in slow
            if (part := self._multiplied(series, values, start)) is not None
        ]

    def _without_drift(self, series: Series, knots, medians):
        time = np.arange(len(series.values)) / float(self.slow.rate)
        origin = (knots - series.start_ns) / _NS
        values = series.values.astype(np.float64)
        return detrended(values, time, origin, medians), series.start_ns

    def _multiplied(self, fast: Series, slow: np.ndarray, start_ns: int):
        step = self.slow.rate / self.rate
        zero = Fraction(fast.start_ns - start_ns) * self.slow.rate / _NS
        least, most = INTERPOLATION_HALF, len(slow) - 1 - INTERPOLATION_HALF
        first = max(-((zero - least) // step), 0)
        stop = min((most - zero) // step + 1, len(fast.values))
        if stop <= first:
            return None
        first, stop = int(first), int(stop)
        position = float(zero) + np.arange(first, stop) * float(step)
        values = fast.values[first:stop] * interpolated(slow, position)
        return replace(fast, start_ns=fast.time_ns(first), values=values)

    def _drift(self, low_ns: int, high_ns: int) -> tuple[np.ndarray, np.ndarray]:
        """Give middles (nanoseconds) and medians of the blocks around a range."""
        block = DRIFT_BLOCK_S * _NS
        first, last = low_ns // block - 1, high_ns // block + 1
        for k in range(first, last + 1):
            if k not in self._medians:
                parts = self.slow.read(k * block, (k + 1) * block)
                values = [s.values for s in parts]
                self._medians[k] = (
                    float(np.median(np.concatenate(values))) if values else None
                )
        known = [k for k in range(first, last + 1) if self._medians[k] is not None]
        # a range holds data only if one of its blocks does
        known = known or [first]
        knots = np.array([k * block + block // 2 for k in known], dtype=np.int64)
        return knots, np.array([self._medians[k] or 0.0 for k in known])

    def close(self) -> None:
        """Close the files that are open."""
        self.fast.close()
        self.slow.close()
