"""``summary.json``: the night in numbers, for programs."""

from __future__ import annotations

import json
import math
from pathlib import Path

from dq.errors import OutputError
from dq.writers.atomic import write_atomically

SCHEMA = 1

KEYS = (
    "schema",
    "requested_s",
    "recorded_s",
    "analysed_s",
    "missing",
    "strain_transients",
    "families",
    "untraced_fraction",
    "untraced_interval",
    "vetoes",
    "dead_time_s",
    "dead_time_fraction",
    "efficiency",
    "volume_time_ratio",
    "channels",
    "settings_sha256",
    "inputs_sha256",
    "sorting",
    "test_signals",
)


def write_summary(path: str | Path, values: dict) -> None:
    """Write the summary with exactly the agreed keys, in their order.

    Numbers that are not finite become ``null``: JSON has no word for them.

    Raises
    ------
    OutputError
        A key is missing or unknown, or the file cannot be written.
    """
    values = {"schema": SCHEMA, **values}
    odd = set(KEYS) ^ set(values)
    if odd:
        raise OutputError(f"summary keys missing or unknown: {', '.join(sorted(odd))}")
    ordered = {key: _plain(values[key]) for key in KEYS}
    write_atomically(path, json.dumps(ordered, indent=2, allow_nan=False) + "\n")


def _plain(value):
    if isinstance(value, dict):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in value]
    if hasattr(value, "item"):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
