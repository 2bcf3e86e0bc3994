"""The whole night: every stage over every channel, in processes, resumable.

A night reads its inputs (``inputs``), plans one task per channel (``plan``), works
through them in worker processes (``pool``, ``channel``), keeps each result (``state``)
in the output folder (``folder``), gathers them into tables (``ledger``), judges the
strain (``judge``) and writes the files (``outputs``); ``run`` puts these in order and
``check`` looks at the inputs alone.

The names below are fetched when first used: a verb that needs the folder alone does not
wait for the engine.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_FACES = {
    "NightOutcome": "dq.night.run",
    "read_inputs": "dq.night.inputs",
    "report_again": "dq.night.outputs",
    "run_night": "dq.night.run",
    "veto_again": "dq.night.outputs",
}

__all__ = list(_FACES)


def __getattr__(name: str) -> Any:
    """Fetch a public name from its module on first use (PEP 562)."""
    if name not in _FACES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    globals()[name] = value = getattr(import_module(_FACES[name]), name)
    return value
