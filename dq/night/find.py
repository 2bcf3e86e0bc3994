"""The transients of one channel, outside a night."""

from __future__ import annotations

import logging
from pathlib import Path

from dq.config import Config, parse_config
from dq.errors import ChannelError, InputError, NoDataError, OutputError
from dq.night.channel import ChannelResult
from dq.night.inputs import check_range, nearest, read_inputs
from dq.night.usable import usable_result

log = logging.getLogger(__name__)


def find_in_channel(
    config: Config,
    channel: str,
    *,
    start,
    end,
    snr_threshold: float | None = None,
) -> ChannelResult:
    """Find one channel's transients in a range.

    Parameters
    ----------
    config : Config
    channel : str
        A channel of the data files; it need not be on the channel list.
    start, end : int, str, Decimal or float
        Range in GPS seconds, half-open.
    snr_threshold : float, optional
        By default the configuration's.

    Returns
    -------
    ChannelResult

    Raises
    ------
    InputError
        The range or the configuration cannot be used.
    NoDataError, ChannelError
        The channel is unknown, has no data, or is unusable.
    """
    start_ns, end_ns = check_range(start, end)
    if snr_threshold is not None:
        raw = config.model_dump()
        raw["transients"]["snr_threshold"] = snr_threshold
        config = parse_config(raw, base=config.base, where="--snr")
    inputs = read_inputs(config)
    if channel not in inputs.store.channels:
        raise NoDataError(
            f"channel {channel!r} is in none of the data files; check its name"
            + nearest(channel, inputs.store.channels)
        )
    row = next((c for c in inputs.channels if c.name == channel), None)
    data = inputs.store.channel(channel)
    try:
        result = usable_result(
            data,
            ready=inputs.wanted,
            start_ns=start_ns,
            end_ns=end_ns,
            config=config,
            f_low_hz=row.f_low_hz if row else None,
            f_high_hz=row.f_high_hz if row else None,
        )
    except OSError as error:
        raise ChannelError(f"channel {channel!r} cannot be read: {error}") from error
    for name in ("missing", "unjudged"):
        if time := getattr(result, name):
            log.info("%s: %.3f s %s", channel, time.total_s, name)
    for kind, time in result.faults.items():
        if time:
            log.warning("%s: %.3f s of %s", channel, time.total_s, kind)
    for note in result.notes:
        log.info("%s: %s", channel, note)
    return result


def write_found(path: Path, result: ChannelResult) -> None:
    """Write a channel's transients to a ``.csv`` or ``.h5`` file.

    Raises
    ------
    InputError
        The folder does not exist.
    OutputError
        The file cannot be written.
    """
    from dq.tables import TRANSIENTS
    from dq.writers import write_table, write_transients_h5

    check_target(path)
    try:
        if path.suffix == ".csv":
            write_table(path, result.transients, TRANSIENTS)
            return
        attributes = {
            "sample_rate_hz": result.sample_rate,
            "f_low_hz": result.f_low_hz,
            "f_high_hz": result.f_high_hz,
            "analysed_s": result.analysed.total_s,
        }
        write_transients_h5(path, {result.channel: (result.transients, attributes)})
    except OSError as error:
        raise OutputError(f"cannot write {str(path)!r}: {error.strerror}") from error


def check_target(path: Path) -> None:
    """Refuse a file that cannot be written, before the work is done.

    Raises
    ------
    InputError
    """
    if not path.parent.is_dir():
        raise InputError(
            f"folder {str(path.parent)!r} of --out does not exist; make it first"
        )
    if path.is_dir():
        raise InputError(f"--out {str(path)!r} is a folder; give a file")
    if path.suffix not in (".csv", ".h5"):
        raise InputError(f"--out {str(path)!r} must end in .csv or .h5")
