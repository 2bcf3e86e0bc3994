"""The whole night: every stage over every channel, in processes, resumable.

A night reads its inputs (``inputs``), plans one task per channel (``plan``), works
through them in worker processes (``pool``, ``channel``), keeps each result (``state``)
in the output folder (``folder``), gathers them into tables (``ledger``), judges the
strain (``judge``) and writes the files (``outputs``); ``run`` puts these in order and
``check`` looks at the inputs alone.
"""

from dq.night.inputs import read_inputs
from dq.night.outputs import report_again, veto_again
from dq.night.run import NightOutcome, run_night

__all__ = ["NightOutcome", "read_inputs", "report_again", "run_night", "veto_again"]
