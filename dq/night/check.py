"""What a night would meet: facts from the lists and the file headers alone."""

from __future__ import annotations

from dataclasses import dataclass, field

from dq.errors import DqError, NoDataError
from dq.night.inputs import Inputs, nearest
from dq.night.plan import channel_motion
from dq.night.products import product_data, product_rows
from dq.segments import Segments, seconds_text
from dq.store import Channel

#: Largest relative difference of a listed and a recorded rate that is no remark; rates
#: of clocks differ by parts in a million (common practice).
_RATE_TOLERANCE = 1e-4

#: Channels or gaps that one line may name; the rest is counted.
_NAMED = 8


@dataclass
class Findings:
    """What ``dq check`` says.

    Attributes
    ----------
    facts : list of (str, str)
        What was found, in the order of reading.
    odd : list of str
        Usable, but perhaps not meant so.
    unusable : list of str
        What a night would leave out.
    """

    facts: list[tuple[str, str]] = field(default_factory=list)
    odd: list[str] = field(default_factory=list)
    unusable: list[str] = field(default_factory=list)

    def text(self) -> str:
        """Give the findings as lines of text."""
        width = max(len(name) for name, _ in self.facts)
        lines = [f"{name.ljust(width)}  {value}" for name, value in self.facts]
        lines += [f"odd: {text}" for text in self.odd]
        lines += [f"unusable: {text}" for text in self.unusable]
        if not self.odd and not self.unusable:
            lines.append("nothing odd")
        return "\n".join(lines)


def check_inputs(inputs: Inputs) -> Findings:
    """Look for what is missing, odd or unusable, without reading a sample.

    Parameters
    ----------
    inputs : Inputs

    Returns
    -------
    Findings

    Raises
    ------
    NoDataError
        The strain has no usable data: no night can run.
    """
    found = Findings()
    store, strain = inputs.store, inputs.strain
    recorded = _strain_recorded(inputs)
    listed = [strain, *inputs.auxiliary]
    present = [c for c in listed if c.name in store.channels]
    found.facts += [
        ("site", inputs.config.site.name),
        ("strain", f"{strain.name}, {float(store.channel(strain.name).rate):g} Hz"),
        ("channels on the list", str(len(inputs.channels))),
        ("channels with data", str(len(present))),
        ("channels in files", str(len(store.channels))),
        ("strain recorded", _time(recorded)),
        ("gaps in the strain", _gaps(recorded)),
    ]
    _check_ready(found, inputs, recorded)
    if inputs.injections is not None:
        found.facts.append(("test signals", str(len(inputs.injections))))
    names = {c.name for c in listed}
    for where, channel, text in inputs.problems:
        if channel is None or channel in names:
            found.unusable.append(f"{where}: {text}")
        else:
            found.odd.append(f"{where}: {text}; the channel is not on the list")
    for row in listed:
        _check_channel(found, inputs, row)
    _check_motion(found, inputs, present)
    _check_unused(found, inputs)
    return found


def _strain_recorded(inputs: Inputs) -> Segments:
    name, store = inputs.strain.name, inputs.store
    if name not in store.channels:
        raise NoDataError(
            f"strain {name!r}: {inputs.why_absent(name)}; check data.files and "
            f"site.strain{nearest(name, store.channels)}"
        )
    try:
        recorded = store.channel(name).recorded
    except DqError as error:
        raise NoDataError(f"strain {name!r} cannot be used: {error}") from error
    if not recorded & inputs.wanted:
        raise NoDataError(
            f"strain {name!r} has no data in the ready time; check the files and the "
            "ready segments"
        )
    return recorded


def _check_ready(found: Findings, inputs: Inputs, recorded: Segments) -> None:
    if inputs.ready is None:
        found.facts.append(("ready", "all recorded time"))
        return
    found.facts.append(("ready", _time(inputs.ready)))
    found.facts.append(("ready and recorded", _time(inputs.ready & recorded)))
    outside = inputs.ready - recorded
    if outside:
        found.odd.append(
            f"{outside.total_s:.3f} s of ready time have no strain; a night lists them "
            "as missing"
        )


def _check_channel(found: Findings, inputs: Inputs, row: Channel) -> None:
    if row.name not in inputs.store.channels:
        text = inputs.why_absent(row.name)
        found.unusable.append(f"{row.name}: {text}")
        return
    try:
        data = inputs.store.channel(row.name)
        rate = float(data.rate)
    except DqError as error:
        found.unusable.append(f"{row.name}: {error}")
        return
    found.odd += [f"{row.name}: {text}" for text in data.problems]
    if not data.recorded & inputs.wanted:
        found.unusable.append(f"{row.name}: no data in the ready time")
    if row.sample_rate and abs(rate / row.sample_rate - 1) > _RATE_TOLERANCE:
        found.odd.append(
            f"{row.name}: recorded at {rate:g} Hz, listed as {row.sample_rate:g} Hz; "
            "the recording counts"
        )
    if row.f_high_hz and row.f_high_hz > rate / 2:
        found.odd.append(
            f"{row.name}: f_high_hz = {row.f_high_hz:g} is above half the rate, "
            f"{rate / 2:g} Hz"
        )


def _check_motion(found: Findings, inputs: Inputs, present: list[Channel]) -> None:
    """Say which channels get slow and derived witnesses."""
    levels, fringes, count = [], [], 0
    for row in present:
        try:
            motion = channel_motion(inputs, row)
        except DqError:
            continue
        if motion is None:
            continue
        if motion.bands:
            levels.append(row.name)
        if motion.source:
            fringes.append(row.name)
        count += len(motion.names(row.name))
        found.odd += [f"{row.name}: {note}" for note in motion.notes]
    products = product_rows(inputs)
    for row in products:
        try:
            product_data(inputs, row.name)
        except DqError as error:
            found.unusable.append(f"{row.name}: {error}")
    names = [f"{len(levels)}: {_some(levels)}" if levels else "none"]
    names += [f"{len(fringes)}: {_some(fringes)}" if fringes else "none"]
    found.facts += [
        ("level in octave bands", names[0]),
        ("fringe frequency", names[1]),
        ("products", _some([row.name for row in products]) or "none"),
        ("derived witnesses", str(count + len(products))),
    ]


def _check_unused(found: Findings, inputs: Inputs) -> None:
    listed = {c.name for c in inputs.channels}
    unused = [name for name in inputs.store.channels if name not in listed]
    if unused:
        found.odd.append(f"in the files, not on the list: {_some(unused)}")
    strains = [c.name for c in inputs.channels if c.role == "strain"]
    others = [name for name in strains if name != inputs.strain.name]
    if others:
        found.odd.append(
            f"role strain, but not site.strain, so not used: {_some(others)}"
        )


def _some(names: list[str]) -> str:
    rest = len(names) - _NAMED
    return ", ".join(names[:_NAMED]) + (f" and {rest} more" if rest > 0 else "")


def _time(segments: Segments) -> str:
    if not segments:
        return "none"
    first, last = seconds_text(segments.starts[0]), seconds_text(segments.ends[-1])
    return f"{segments.total_s:.3f} s within {first}..{last}"


def _gaps(recorded: Segments) -> str:
    gaps = recorded.complement(int(recorded.starts[0]), int(recorded.ends[-1]))
    if not gaps:
        return "none"
    first = [f"{seconds_text(low)}..{seconds_text(high)}" for low, high in gaps]
    return f"{len(gaps)}, {gaps.total_s:.3f} s: {_some(first)}"
