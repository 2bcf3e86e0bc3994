"""From a planned night to samples in files."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
from scipy.signal import lfilter, resample_poly

from dq.observatory.channels import (
    CALIBRATION_TONES,
    DEAD,
    STRAIN,
    STRAIN_MAINS,
    UNSAFE,
    ChannelSpec,
    strain_noise,
)
from dq.observatory.noise import (
    MainsPhase,
    add_mains,
    add_tones,
    coloured_noise,
    stream,
)
from dq.observatory.schedule import Contribution, Fault, Night

#: Volts per strain of the unsafe error point, above its high-pass of 25 Hz.
ERROR_GAIN = 1e21
_ERROR_HIGH_PASS_HZ = 25.0

#: What the unplugged sensor's converter says for ever.
DEAD_VALUE = 1873

#: Rails of a 16-bit converter.
COUNTS = (-32768, 32767)

#: Fewest samples at the rail that count as a planted saturation.
MIN_PLATEAU = 3


def add_contributions(
    values: np.ndarray, *, sample_rate: int, items: list[Contribution]
) -> None:
    """Add sources to a channel's samples in place."""
    for item in items:
        source = item.source
        first = int(np.ceil((item.time_s - source.before_s) * sample_rate))
        last = int(np.floor((item.time_s + source.after_s) * sample_rate)) + 1
        first, last = max(first, 0), min(last, len(values))
        if last <= first:
            continue
        time = np.arange(first, last) / sample_rate - item.time_s
        if item.quantity:
            wave = source.quantity(time)
        else:
            wave = source.wave(time, 0.45 * sample_rate)
        values[first:last] += (item.amplitude * wave).astype(values.dtype)


def record_strain(night: Night) -> tuple[np.ndarray, np.ndarray, list[Fault]]:
    """Make the strain, the unsafe error point, and the strain's saturations.

    Returns
    -------
    strain : ndarray of float64, shape (n_samples,)
        Clipped at the rail, NaN where the night says so; the gap is still filled.
    error : ndarray of float32
        The error point in V, at its own rate. It reads the loop ahead of the
        converter, so it is not clipped.
    saturations : list of Fault
        Runs of at least ``MIN_PLATEAU`` samples at the rail.
    """
    settings = night.settings
    rate = settings.strain_rate
    samples = settings.duration_s * rate
    strain = coloured_noise(
        strain_noise,
        sample_rate=rate,
        samples=samples,
        rng=stream(settings.seed, "noise", STRAIN),
    )
    night.drift.apply(strain, sample_rate=rate)
    add_mains(
        strain,
        sample_rate=rate,
        phase=MainsPhase.of(settings.seed),
        amplitudes=STRAIN_MAINS,
    )
    add_tones(strain, sample_rate=rate, tones=CALIBRATION_TONES)
    items = night.contributions.get(STRAIN, [])
    add_contributions(strain, sample_rate=rate, items=items)
    error = _record_error(night, strain)
    np.clip(strain, -settings.rail, settings.rail, out=strain)
    saturations = plateaus(strain, low=-settings.rail, high=settings.rail)
    if night.strain_nan is not None:
        strain[night.strain_nan.first : night.strain_nan.end] = np.nan
    return strain, error, saturations


def _record_error(night: Night, strain: np.ndarray) -> np.ndarray:
    spec = next(c for c in night.channels if c.name == UNSAFE)
    rate = night.settings.strain_rate
    error = resample_poly(strain, spec.rate, rate)
    pole = np.exp(-2 * np.pi * _ERROR_HIGH_PASS_HZ / spec.rate)
    error = ERROR_GAIN * lfilter([1.0, -1.0], [1.0, -pole], error)
    noise = coloured_noise(
        spec.noise,
        sample_rate=spec.rate,
        samples=len(error),
        rng=stream(night.settings.seed, "noise", spec.name),
        dtype=np.float32,
    )
    noise += error
    return noise


def plateaus(
    values: np.ndarray, *, low: float, high: float, channel: str = STRAIN
) -> list[Fault]:
    """Find the runs of at least ``MIN_PLATEAU`` samples at either rail, in order."""
    found = []
    for level in (low, high):
        edges = np.flatnonzero(np.diff(values == level, prepend=False, append=False))
        for first, end in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
            if end - first >= MIN_PLATEAU:
                found.append(Fault(channel, "saturation", first, end))
    return sorted(found, key=lambda f: f.first)


def record_auxiliary(night: Night, spec: ChannelSpec) -> np.ndarray:
    """Make an auxiliary channel's samples in its storage type."""
    settings = night.settings
    samples = settings.duration_s * spec.rate
    if spec.noise is None:
        return np.full(samples, DEAD_VALUE, dtype=spec.dtype)
    values = coloured_noise(
        spec.noise,
        sample_rate=spec.rate,
        samples=samples,
        rng=stream(settings.seed, "noise", spec.name),
        dtype=np.float64 if spec.dtype == "float64" else np.float32,
    )
    add_mains(
        values,
        sample_rate=spec.rate,
        phase=MainsPhase.of(settings.seed),
        amplitudes=spec.mains,
    )
    items = night.contributions.get(spec.name, [])
    add_contributions(values, sample_rate=spec.rate, items=items)
    if spec.dtype == "int16":
        return np.clip(np.rint(values), *COUNTS).astype(np.int16)
    fault = night.auxiliary_nan
    if fault is not None and fault.channel == spec.name:
        values[fault.first : fault.end] = np.nan
    return values


def sample_ns(start: int, index: int, rate: int) -> int:
    """Give the GPS nanosecond of a sample of a recording that starts at ``start`` s."""
    return start * 1_000_000_000 + (index * 1_000_000_000 + rate // 2) // rate


def stretches(samples: int, file_samples: int, gap: Fault | None):
    """Give (file number, first, end) of the stretches to write, without the gap."""
    for number, first in enumerate(range(0, samples, file_samples)):
        end = min(first + file_samples, samples)
        if gap is None or gap.end <= first or gap.first >= end:
            yield number, first, end
            continue
        if first < gap.first:
            yield number, first, gap.first
        if gap.end < end:
            yield number, gap.end, end


def write_stretch(
    file: h5py.File,
    path: str,
    values: np.ndarray,
    *,
    gps_start: int | float,
    rate: int,
    unit: str,
    compressed: bool = False,
) -> None:
    """Write one dataset with the attributes that say when and how fast it was taken."""
    options = {"compression": "gzip", "compression_opts": 1} if compressed else {}
    data = file.create_dataset(path, data=values, track_times=False, **options)
    data.attrs["gps_start"] = gps_start
    data.attrs["sample_rate"] = float(rate)
    data.attrs["unit"] = unit


def write_strain(directory: Path, night: Night, strain: np.ndarray) -> None:
    """Write the strain's files: abutting, the gap left out, two stretches around it."""
    settings = night.settings
    rate = settings.strain_rate
    files: dict[int, list[tuple[int, int]]] = {}
    pieces = stretches(len(strain), settings.strain_file_s * rate, night.gap)
    for number, first, end in pieces:
        files.setdefault(number, []).append((first, end))
    for number, parts in files.items():
        begin = settings.start + number * settings.strain_file_s
        with h5py.File(directory / f"strain-{begin}.h5", "w") as file:
            for index, (first, end) in enumerate(parts):
                path = STRAIN if len(parts) == 1 else f"part-{index + 1}/{STRAIN}"
                write_stretch(
                    file,
                    path,
                    strain[first:end],
                    gps_start=_seconds(settings.start, first, rate),
                    rate=rate,
                    unit="strain",
                )


def _seconds(start: int, index: int, rate: int) -> int | float:
    return start + index // rate if index % rate == 0 else start + index / rate


def write_channel(
    files: list[tuple[h5py.File, int, int]],
    night: Night,
    spec: ChannelSpec,
    values: np.ndarray,
) -> None:
    """Write one auxiliary channel over its group's files, (file, start s, end s)."""
    for file, start_s, end_s in files:
        write_stretch(
            file,
            spec.name,
            values[start_s * spec.rate : end_s * spec.rate],
            gps_start=night.settings.start + start_s,
            rate=spec.rate,
            unit=spec.unit,
            compressed=spec.compressed or spec.name == DEAD,
        )
