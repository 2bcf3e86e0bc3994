"""Families: a sorter that learns from hand labels and knows when it does not know.

``FamilySorter`` is the estimator; ``labels`` and ``groups`` prepare what it is trained
on, ``replant`` and ``guard`` add examples, ``validation`` and ``curves`` measure it,
``proposals`` and ``drift`` look at a night, ``model_store`` keeps it.
"""

from dq.families.drift import drift, drift_text
from dq.families.groups import time_groups
from dq.families.guard import CHIRP_LIKE, UNKNOWN, UNSORTED, draw_chirps
from dq.families.labels import labeller_agreement, match_labels
from dq.families.model_store import load_model, save_model, sort_transients
from dq.families.proposals import group_unknowns
from dq.families.replant import draw_snrs, faded_snippet, replant
from dq.families.report import TrainingReport, make_report
from dq.families.sorter import FamilySorter

__all__ = [
    "CHIRP_LIKE",
    "UNKNOWN",
    "UNSORTED",
    "FamilySorter",
    "TrainingReport",
    "draw_chirps",
    "draw_snrs",
    "drift",
    "drift_text",
    "faded_snippet",
    "group_unknowns",
    "labeller_agreement",
    "load_model",
    "make_report",
    "match_labels",
    "replant",
    "save_model",
    "sort_transients",
    "time_groups",
]
