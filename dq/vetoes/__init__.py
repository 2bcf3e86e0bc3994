"""Vetoes: segments from faults and witnesses, chosen within a dead-time budget."""

from dq.vetoes.build import build_vetoes, file_safe
from dq.vetoes.choose import choose_vetoes

__all__ = ["build_vetoes", "choose_vetoes", "file_safe"]
