"""Witnesses: which auxiliary channels explain the strain's transients."""

from typing import Any

from dq.witnesses.windows import veto_windows, windows_of

__all__ = ["find_witnesses", "veto_windows", "windows_of"]


def __getattr__(name: str) -> Any:
    """Fetch the search on first use: its compiled loops take a second to load."""
    if name == "find_witnesses":
        from dq.witnesses.rank import find_witnesses

        return find_witnesses
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
