"""Transients: tiles above threshold, placed in time and gathered into clusters."""

from dq.transients.cluster import (
    LINK,
    Marks,
    label_marks,
    label_transients,
    split_finished,
    summarise,
)
from dq.transients.islands import equivalent_energy
from dq.transients.place import place_runs
from dq.transients.search import search_tiles
from dq.transients.transforms import Transforms

__all__ = [
    "LINK",
    "Marks",
    "Transforms",
    "equivalent_energy",
    "label_marks",
    "label_transients",
    "place_runs",
    "search_tiles",
    "split_finished",
    "summarise",
]
