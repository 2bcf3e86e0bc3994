"""Segments as two-column text: start and end in GPS seconds, ``#`` comments."""

from __future__ import annotations

from dq.errors import SegmentError
from dq.segments.clock import seconds_text, to_ns
from dq.segments.segments import Segments


def parse_segments(text: str, *, where: str = "segments") -> Segments:
    r"""Read two columns; columns may be parted by blanks or a comma.

    Parameters
    ----------
    text : str
    where : str
        Name of the source, for messages.

    Raises
    ------
    SegmentError
        A line does not hold two times, or ends before it starts; the message names
        the line.

    Examples
    --------
    >>> parse_segments("# ready\n10 20\n20 25.5\n")
    Segments([10, 25.5))
    """
    pairs = []
    for number, line in enumerate(text.splitlines(), start=1):
        cells = line.split("#", 1)[0].replace(",", " ").split()
        if not cells:
            continue
        if len(cells) != 2:
            raise SegmentError(
                f"{where} line {number}: {line.strip()!r} holds {len(cells)} columns; "
                "give two, start and end"
            )
        try:
            start, end = to_ns(cells[0]), to_ns(cells[1])
        except SegmentError as error:
            raise SegmentError(f"{where} line {number}: {error}") from error
        if end < start:
            raise SegmentError(
                f"{where} line {number}: end {cells[1]} lies before start {cells[0]}; "
                "swap or remove them"
            )
        pairs.append((start, end))
    return Segments.of(pairs)


def format_segments(segments: Segments, *, header: str = "") -> str:
    """Write two columns with exact decimals; header lines become comments."""
    lines = [f"# {line}".rstrip() for line in header.splitlines()]
    lines += [f"{seconds_text(s)} {seconds_text(e)}" for s, e in segments]
    return "".join(f"{line}\n" for line in lines)
