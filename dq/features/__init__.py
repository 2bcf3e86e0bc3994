"""Features of transients: numbers from which a sorter can tell families apart."""

from dq.features.measuring import measure
from dq.features.registry import FEATURES, NAMES
from dq.features.snippets import MARGIN_S, Snippet, cut_snippet, stretch_around
from dq.features.spec import Feature

__all__ = [
    "FEATURES",
    "MARGIN_S",
    "NAMES",
    "Feature",
    "Snippet",
    "cut_snippet",
    "measure",
    "stretch_around",
]
