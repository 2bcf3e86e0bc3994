"""Cost: what any veto segments remove, take away and bring to a search."""

from dq.cost.actuated import actuated_losses
from dq.cost.cost import ALL, cost_of, measure, union_of, veto_segments
from dq.cost.held_out import Selection, alternate_blocks, held_out
from dq.cost.signal_loss import random_times, signal_losses
from dq.cost.volume import Background, VolumeTime, volume_time, volume_time_columns
from dq.cost.words import actuated_words, losing_vetoes, volume_sentence

__all__ = [
    "ALL",
    "Background",
    "Selection",
    "VolumeTime",
    "actuated_losses",
    "actuated_words",
    "alternate_blocks",
    "cost_of",
    "held_out",
    "losing_vetoes",
    "measure",
    "random_times",
    "signal_losses",
    "union_of",
    "veto_segments",
    "volume_sentence",
    "volume_time",
    "volume_time_columns",
]
