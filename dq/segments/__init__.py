"""Half-open segments in integer nanoseconds: algebra, face and text."""

from dq.segments.clock import NS, seconds_text, to_ns, to_ns_array, to_ns_list
from dq.segments.segments import Segments
from dq.segments.text import format_segments, parse_segments

__all__ = [
    "NS",
    "Segments",
    "format_segments",
    "parse_segments",
    "seconds_text",
    "to_ns",
    "to_ns_array",
    "to_ns_list",
]
