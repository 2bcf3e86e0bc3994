"""File headers: which stretches of which channels a file holds.

Nothing but headers is read here. What cannot be understood becomes a ``Problem`` that
names the file and, where it is known, the channel; it never stops the scan.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

import h5py
import numpy as np

from dq.errors import DqError
from dq.segments import to_ns
from dq.store.channels import NAME

#: Highest believable rate, Hz: above any digitiser of the trade (common practice).
MAX_RATE = 1e6


@dataclass(frozen=True)
class Problem:
    """Something in the files that cannot be used: where, whose, and what."""

    where: str
    channel: str | None
    text: str


@dataclass(frozen=True)
class Stretch:
    """One dataset: contiguous samples of one channel.

    ``start_ns`` is the time of the first sample, ``rate`` exact in Hz, ``file`` the
    number of the file in the store.
    """

    channel: str
    file: int
    dataset: str
    start_ns: int
    rate: Fraction
    samples: int
    dtype: str
    unit: str

    @property
    def end_ns(self) -> int:
        """Time just past the last sample."""
        return self.start_ns + round(Fraction(self.samples * 1_000_000_000) / self.rate)


@dataclass(frozen=True)
class MaskStretch:
    """One piece of a 1 Hz mask: whole seconds and which of them are ready."""

    start_ns: int
    ready: np.ndarray


class HeaderError(ValueError):
    """A header value that cannot be right; the text says which."""


def scan_file(path: Path, number: int, layout, ready_mask):
    """Scan one file.

    Parameters
    ----------
    path : Path
    number : int
        Number of the file in the store.
    layout : dq.config.Layout or None
    ready_mask : dq.config.ReadyMask or None

    Returns
    -------
    stretches : list of Stretch
    masks : list of MaskStretch
    problems : list of Problem
    """
    stretches, masks, problems = [], [], []
    try:
        with h5py.File(path, "r") as file:
            if layout is not None and layout.dataset in file:
                _scan_layout(file, number, layout, stretches, problems, path)
            else:
                _scan_native(file, number, stretches, problems, path)
            if ready_mask is not None and ready_mask.dataset in file:
                _scan_mask(file, layout, ready_mask, masks, problems, path)
    except (OSError, RuntimeError, KeyError) as error:
        text = " ".join(str(error).split())
        problems.append(Problem(str(path), None, f"unreadable file: {text}"))
    return stretches, masks, problems


def _scan_native(file, number, stretches, problems, path) -> None:
    def visit(name, item):
        if not isinstance(item, h5py.Dataset):
            return
        attributes = item.attrs
        channel = name.rsplit("/", 1)[-1]
        marks = [a for a in ("gps_start", "sample_rate") if a in attributes]
        if not marks:
            return  # no channel: other people's tables may lie beside ours
        try:
            if not NAME.fullmatch(channel):
                raise HeaderError("its name is not allowed for a channel")
            start = number_attribute(attributes, "gps_start")
            rate = exact_rate(number_attribute(attributes, "sample_rate"))
            stretches.append(_stretch(channel, number, item, start, rate))
        except HeaderError as error:
            problems.append(Problem(f"{path}:{name}", channel, str(error)))

    file.visititems(visit)


def _scan_layout(file, number, layout, stretches, problems, path) -> None:
    item = file[layout.dataset]
    channel = layout.channel or layout.dataset.rsplit("/", 1)[-1]
    try:
        start = _find(item, layout.start_attribute)
        if layout.step_attribute is not None:
            rate = rate_of_step(_find(item, layout.step_attribute))
        else:
            rate = exact_rate(_find(item, layout.rate_attribute))
        stretches.append(_stretch(channel, number, item, start, rate))
    except HeaderError as error:
        problems.append(Problem(f"{path}:{layout.dataset}", channel, str(error)))


def _scan_mask(file, layout, ready_mask, masks, problems, path) -> None:
    item = file[ready_mask.dataset]
    name = layout.start_attribute if layout else "gps_start"
    try:
        if item.ndim != 1 or item.dtype.kind not in "iu":
            raise HeaderError("the mask must be one-dimensional integers at 1 Hz")
        if name in item.attrs or layout is None:
            start = number_attribute(item.attrs, name)
        else:
            start = _find(file[layout.dataset], name)
        wanted = sum(1 << b for b in set(ready_mask.bits))
        ready = (item[:].astype(np.int64) & wanted) == wanted
        masks.append(MaskStretch(_start_ns(start), ready))
    except (HeaderError, KeyError) as error:
        where = f"{path}:{ready_mask.dataset}"
        problems.append(Problem(where, None, f"mask: {error}"))


def _find(item, name: str) -> float:
    """Look an attribute up on the dataset, then on the groups above it."""
    holder = item
    while True:
        if name in holder.attrs:
            return number_attribute(holder.attrs, name)
        if holder.name == "/":
            raise HeaderError(f"attribute {name!r} is missing")
        holder = holder.parent


def _stretch(channel, number, item, start, rate: Fraction) -> Stretch:
    if item.ndim != 1:
        raise HeaderError(f"{item.ndim} dimensions; samples must have one")
    if item.dtype.kind not in "iuf":
        raise HeaderError(f"type {item.dtype}; samples must be real numbers")
    unit = item.attrs.get("unit", "")
    unit = unit.decode(errors="replace") if isinstance(unit, bytes) else str(unit)
    return Stretch(
        channel=channel,
        file=number,
        dataset=item.name,
        start_ns=_start_ns(start),
        rate=rate,
        samples=int(item.shape[0]),
        dtype=str(item.dtype),
        unit=unit,
    )


def number_attribute(attributes, name: str) -> float | int:
    """Read a numeric attribute: a scalar, or an array of one.

    Raises
    ------
    HeaderError
        It is missing, or no finite real number.
    """
    if name not in attributes:
        raise HeaderError(f"attribute {name!r} is missing")
    value = np.asarray(attributes[name])
    if value.size != 1 or value.dtype.kind not in "iuf":
        raise HeaderError(f"attribute {name!r} = {attributes[name]!r} is no number")
    value = value.reshape(()).item()
    if not math.isfinite(value):
        raise HeaderError(f"attribute {name!r} = {value} is not finite")
    return value


def _start_ns(start) -> int:
    try:
        return to_ns(start)
    except DqError as error:
        raise HeaderError(str(error)) from error


def exact_rate(rate) -> Fraction:
    """Turn a rate in Hz into an exact fraction.

    Raises
    ------
    HeaderError
        The rate is not within (0, 1e6] Hz.
    """
    if not 0 < rate <= MAX_RATE:
        raise HeaderError(f"sample_rate = {rate:g} Hz must lie within (0, 1e6] Hz")
    exact = Fraction(rate).limit_denominator(1_000_000)
    if exact <= 0:
        raise HeaderError(f"sample_rate = {rate:g} Hz is too small to be a rate")
    return exact


def rate_of_step(step) -> Fraction:
    """Turn seconds per sample into an exact rate; errors as ``exact_rate``."""
    if not step > 0:
        raise HeaderError(f"seconds per sample = {step:g} must be positive")
    near = exact_rate(1.0 / step)
    # a step written with few digits (0.0002441) still means the whole rate nearby
    whole = Fraction(round(near)) if near >= 1 else near
    return whole if abs(float(near / whole) - 1) < 1e-9 else near
