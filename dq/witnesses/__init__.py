"""Witnesses: which auxiliary channels explain the strain's transients."""

from dq.witnesses.rank import find_witnesses
from dq.witnesses.windows import veto_windows, windows_of

__all__ = ["find_witnesses", "veto_windows", "windows_of"]
