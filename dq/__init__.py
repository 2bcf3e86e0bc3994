"""Nightly data quality for laser-interferometer observatories.

The stages in the order in which data flow:

segments      half-open time segments in exact nanoseconds
store         HDF5 channels, the channel list, ready segments
conditioning  noise spectrum, whitening, data faults
tiles         multi-Q tile plan and normalised tile energies
transients    loud tiles gathered into transients
features      numbers that tell families of transients apart
families      a sorter that learns noise families from hand labels
motion        slow motion: levels in octave bands, fringe frequency, products
witnesses     which auxiliary channels saw the strain's transients, beyond chance
vetoes        faults and witnesses turned into segments under a dead-time budget
cost          what a set of veto segments removes, and for how much time
writers       files for programs: CSV, HDF5, segment lists, bit mask, summary
report        the page for people, and the answer about one time
night         every stage over every channel, resumable
cli           the command line: parses, calls, prints

Beside the flow: ``config``, ``tables``, ``counting``, ``gps`` and ``errors`` are the
ground that every stage stands on; ``observatory`` makes the invented site and is
imported by no stage.

``import dq`` loads no stage; a public name is fetched when it is first used.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

#: Public name -> module that defines it, in flow order.
_FACES = {
    "load_config": "dq.config",
    "Segments": "dq.segments",
    "parse_segments": "dq.segments",
    "format_segments": "dq.segments",
    "open_store": "dq.store",
    "read_channel_list": "dq.store",
    "analyse_channel": "dq.night.channel",
    "measure": "dq.features",
    "fringe_frequency": "dq.motion",
    "band_rms": "dq.motion",
    "FamilySorter": "dq.families",
    "load_model": "dq.families",
    "find_witnesses": "dq.witnesses",
    "build_vetoes": "dq.vetoes",
    "choose_vetoes": "dq.vetoes",
    "cost_of": "dq.cost",
    "write_page": "dq.report",
    "explain": "dq.report",
    "run_night": "dq.night",
}

__all__ = ["__version__", *_FACES]


def __getattr__(name: str) -> Any:
    """Fetch a public name from its stage on first use (PEP 562)."""
    if name == "__version__":
        from importlib.metadata import version

        value: Any = version("dq")
    elif name in _FACES:
        value = getattr(import_module(_FACES[name]), name)
    else:
        raise AttributeError(f"module 'dq' has no attribute {name!r}")
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(set(globals()) | set(__all__))
