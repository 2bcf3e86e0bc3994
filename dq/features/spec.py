"""What is said about each feature: name, group, unit, meaning, source."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Feature:
    """One column of the feature table.

    Attributes
    ----------
    name, group : str
    unit : str
        ``1`` for plain numbers.
    meaning : str
        One sentence; says what the value is where the measure is undefined.
    source : str
        Publication, definition or "own choice".
    """

    name: str
    group: str
    unit: str
    meaning: str
    source: str = "own choice"


def group_of(
    group: str, *rows: tuple[str, str, str] | tuple[str, str, str, str]
) -> tuple[Feature, ...]:
    """Give the features of one group from rows of name, unit, meaning and source."""
    return tuple(Feature(row[0], group, *row[1:]) for row in rows)
