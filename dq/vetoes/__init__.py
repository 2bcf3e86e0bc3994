"""Vetoes: segments from faults, witnesses and families, chosen within a budget."""

from dq.vetoes.build import build_vetoes, file_safe
from dq.vetoes.choose import Choice, choose_vetoes

__all__ = ["Choice", "build_vetoes", "choose_vetoes", "file_safe"]
