"""Writers: the files of a night, each written beside and renamed."""

from dq.writers.atomic import write_atomically, write_table
from dq.writers.quality_mask import write_quality_mask
from dq.writers.segment_files import RESERVED, segments_of, write_segments_folder
from dq.writers.summary import write_summary
from dq.writers.transients_file import read_transients_h5, write_transients_h5

__all__ = [
    "RESERVED",
    "read_transients_h5",
    "segments_of",
    "write_atomically",
    "write_quality_mask",
    "write_segments_folder",
    "write_summary",
    "write_table",
    "write_transients_h5",
]
