"""Transients: tiles above threshold, placed in time and gathered into clusters."""

from dq.transients.cluster import (
    LINK,
    Marks,
    label_marks,
    split_finished,
    summarise,
)
from dq.transients.place import place_runs
from dq.transients.sharpen import sharpen_peaks

__all__ = [
    "LINK",
    "Marks",
    "label_marks",
    "place_runs",
    "sharpen_peaks",
    "split_finished",
    "summarise",
]
