"""The energy map of one stretch of one channel, from the finder's own transform."""

from __future__ import annotations

from decimal import Decimal
from pathlib import Path

import numpy as np

from dq.config import Config
from dq.errors import InputError
from dq.night.blocks import default_low_edge, plan_blocks
from dq.night.channel import ChannelResult
from dq.night.inputs import read_inputs
from dq.night.whitened import WhitenedBlocks
from dq.segments import Segments
from dq.tiles.energy_map import EnergyMap, add_tiles, empty_map

_NS = 1_000_000_000

#: Longest stretch of one picture, s: more would put thousands of tiles into a pixel.
LONGEST_S = 64

#: Shown on each side of a transient, s (own choice).
MARGIN_S = 0.5


def check_picture(target: Path, start, end, at) -> None:
    """Refuse a picture that cannot be drawn, before the work is done.

    Raises
    ------
    InputError
    """
    if not target.parent.is_dir():
        raise InputError(
            f"folder {str(target.parent)!r} of --picture does not exist; make it first"
        )
    if target.is_dir() or target.suffix != ".png":
        raise InputError(f"--picture {str(target)!r} must be a file that ends in .png")
    if at is None and end - start > LONGEST_S:
        raise InputError(
            f"--picture of {end - start:f} s: one picture holds at most {LONGEST_S} s; "
            "give --at with the GPS time of a transient, or a shorter range"
        )
    if at is not None and not start <= at < end:
        raise InputError(
            f"--at {at:f} lies outside the range [{start:f}, {end:f}); give a time "
            "within it"
        )


def picture_window(result: ChannelResult, start, end, at) -> tuple[int, int]:
    """Choose the stretch to draw.

    Parameters
    ----------
    result : ChannelResult
    start, end : Decimal
        The range that was searched, GPS s.
    at : Decimal or None
        A time within the transient to draw; None: all of the range.

    Returns
    -------
    start_ns, end_ns : int
        The transient with half a second on each side, at most ``LONGEST_S`` around
        its peak.

    Raises
    ------
    InputError
        No transient is active at the time.
    """
    if at is None:
        return int(start * _NS), int(end * _NS)
    table, moment = result.transients, float(at)
    active = table[(table["gps_start"] <= moment) & (table["gps_end"] >= moment)]
    if not len(active):
        near = ""
        if len(table):
            k = (table["gps_time"] - moment).abs().idxmin()
            near = f"; the nearest one peaks at {table['gps_time'][k]:.6f}"
        raise InputError(
            f"no transient of {result.channel} is active at {at:f}{near}: give a time "
            "within one, or draw a range of at most "
            f"{LONGEST_S} s without --at"
        )
    row = active.loc[active["snr"].idxmax()]
    half = 0.5 * LONGEST_S
    low = max(row["gps_start"] - MARGIN_S, row["gps_time"] - half)
    high = min(row["gps_end"] + MARGIN_S, row["gps_time"] + half)
    return round(low * 1000) * 10**6, round(high * 1000) * 10**6


def energy_map(
    data,
    *,
    ready: Segments | None,
    start_ns: int,
    end_ns: int,
    config: Config,
    f_low_hz: float | None = None,
    f_high_hz: float | None = None,
) -> EnergyMap:
    """Compute the energies of all tiles in a stretch, as the finder sees them.

    Parameters
    ----------
    data : ChannelData
    ready : Segments or None
        Data outside are not read; None means all recorded time.
    start_ns, end_ns : int
        GPS nanoseconds.
    config, f_low_hz, f_high_hz
        As :func:`dq.night.channel.analyse_channel` takes them.

    Returns
    -------
    EnergyMap
        Times in s after ``start_ns``.
    """
    tiles = config.tiles
    f_low = f_low_hz or tiles.f_low_hz or default_low_edge(float(data.rate))
    plan = plan_blocks(data.rate, config, f_low, f_high_hz or tiles.f_high_hz)
    ready = data.recorded if ready is None else ready & data.recorded
    blocks = WhitenedBlocks(data, plan, config, ready)
    picture = empty_map(plan.tiles, start_s=0.0, end_s=(end_ns - start_ns) / _NS)
    first = start_ns - start_ns % plan.block_ns
    for block_ns in range(first, end_ns, plan.block_ns):
        blocks.move(block_ns, block_ns + plan.block_ns)
        whitening = blocks.whitening(block_ns)
        if whitening is None:
            continue
        level = plan.weights @ whitening.density
        for piece in blocks.pieces:
            low = max(block_ns, piece.start_ns + plan.pad_ns)
            high = min(block_ns + plan.block_ns, piece.end_ns - plan.pad_ns)
            if max(low, start_ns) >= min(high, end_ns):
                continue
            origin, spectrum = blocks.transform(piece, block_ns, whitening)
            add_tiles(
                picture,
                spectrum,
                plan.tiles,
                level=level,
                origin_s=(origin - start_ns) / _NS,
                low_s=(low - start_ns) / _NS,
                high_s=(high - start_ns) / _NS,
            )
    return picture


def draw_found(
    config: Config, result: ChannelResult, *, start: Decimal, end: Decimal, at
) -> bytes:
    """Draw the energy map around found transients; give the PNG.

    Parameters
    ----------
    config : Config
    result : ChannelResult
        Of :func:`dq.night.find.find_in_channel` over ``[start, end)``.
    start, end, at
        As :func:`picture_window` takes them.

    Raises
    ------
    InputError
        No transient is active at ``at``.
    """
    from dq.report.energy_map import draw_energy_map

    start_ns, end_ns = picture_window(result, start, end, at)
    inputs = read_inputs(config)
    row = next((c for c in inputs.channels if c.name == result.channel), None)
    picture = energy_map(
        inputs.store.channel(result.channel),
        ready=inputs.wanted,
        start_ns=start_ns,
        end_ns=end_ns,
        config=config,
        f_low_hz=row.f_low_hz if row else None,
        f_high_hz=row.f_high_hz if row else None,
    )
    # whole seconds of GPS would cost a float64 its microseconds beside small offsets
    time_s = np.array(
        [(round(t * 1e6) * 1000 - start_ns) / _NS for t in result.transients.gps_time]
    )
    inside = (time_s >= 0) & (time_s < (end_ns - start_ns) / _NS)
    return draw_energy_map(
        picture.time_s,
        picture.frequency,
        picture.energy,
        channel=result.channel,
        reference=f"{Decimal(start_ns) / _NS:f}",
        peak_time_s=time_s[inside],
        peak_frequency=result.transients["frequency_hz"].to_numpy(float)[inside],
        peak_snr=result.transients["snr"].to_numpy(float)[inside],
    )
