"""The text files of an invented site: lists for the user, truth for the tests."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable

import numpy as np

from dq.observatory import bilinear
from dq.observatory.channels import DEAD, STRAIN, ChannelSpec
from dq.observatory.noise import stream
from dq.observatory.recording import sample_ns
from dq.observatory.schedule import Fault, Night
from dq.observatory.settings import SATURATION, TEST_SIGNAL
from dq.segments import seconds_text

#: The invented people who labelled the night, the share of the night that each
#: looked at, and how often each picked a wrong family.
LABELLERS = {"analyst-1": (0.6, 0.04), "analyst-2": (0.4, 0.08)}

#: First words of a site's README.txt, by which an older site is recognised.
INVENTED = b"Orrin Vale is an invented observatory."

#: Nobody labels what hardly shows.
_LABEL_SNR = 12.0


def csv_lines(header: str, rows: Iterable[Iterable]) -> str:
    """Give CSV text with a header of comma-parted names."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(header.replace(" ", "").split(","))
    writer.writerows(rows)
    return out.getvalue()


def channel_list(night: Night) -> str:
    """Write ``channels.csv``."""
    rows = [
        (
            STRAIN,
            "strain",
            night.settings.strain_rate,
            "",
            10,
            "",
            "strain",
            "strain",
            "calibrated strain",
        )
    ]
    rows += [_channel_row(c) for c in night.channels]
    return csv_lines(
        "channel, role, sample_rate, safe, f_low_hz, f_high_hz, quantity, unit, "
        "description",
        rows,
    )


def _channel_row(spec: ChannelSpec) -> tuple:
    return (
        spec.name,
        "auxiliary",
        spec.rate,
        spec.safe,
        f"{spec.f_low_hz:g}",
        "",
        spec.quantity,
        spec.unit,
        spec.description,
    )


def ready_list(night: Night) -> str:
    """Write ``ready.txt``."""
    start = night.settings.start
    lines = ["# ready time of the invented site, GPS seconds"]
    lines += [f"{start + a:.0f} {start + b:.0f}" for a, b in night.ready_s]
    return "\n".join(lines) + "\n"


def injection_list(night: Night) -> str:
    """Write ``injections.csv``; the time is that of coalescence."""
    start = night.settings.start
    rows = [(_gps(start, t), "chirp", f"{snr:.3f}") for t, snr in night.injections]
    return csv_lines("gps_time, kind, snr", rows)


def transient_truth(night: Night) -> str:
    """Write ``truth/transients.csv``: every transient of the strain.

    ``snr`` is the optimal one against the true spectrum; ``witness`` is the family's
    first witness, ``witnessed`` says whether it saw this event, ``seen_by`` names all
    channels that did, and ``event`` joins the arches of one epoch.
    """
    start = night.settings.start
    rows = []
    for t in night.transients:
        m = t.measured
        witnessed = "yes" if t.witness and t.witness in t.seen_by else "no"
        rows.append(
            (
                _gps(start, m.peak_s),
                _gps(start, m.start_s),
                _gps(start, m.end_s),
                t.family,
                f"{m.snr:.4f}",
                f"{m.frequency_hz:.3f}",
                t.witness,
                witnessed,
                ";".join(t.seen_by),
                t.event,
            )
        )
    return csv_lines(
        "gps_time, gps_start, gps_end, family, snr, frequency_hz, witness, witnessed, "
        "seen_by, event",
        rows,
    )


def own_truth(night: Night) -> str:
    """Write ``truth/own_glitches.csv``: what stays in single auxiliary channels."""
    start = night.settings.start
    rows = [
        (
            g.channel,
            _gps(start, g.measured.peak_s),
            f"{g.measured.snr:.4f}",
            f"{g.measured.frequency_hz:.3f}",
            g.family,
        )
        for g in night.own
    ]
    return csv_lines("channel, gps_time, snr, frequency_hz, looks_like", rows)


def coupling_truth(night: Night) -> str:
    """Write ``truth/couplings.csv``; delay is strain time minus witness time."""
    scale = night.settings.coupling_scale
    rows = [
        (c.family, c.witness, f"{c.delay_s:g}", f"{min(1.0, c.probability * scale):g}")
        for c in night.settings.couplings
    ]
    if night.settings.pitch_bursts_per_hour:
        rows.append((bilinear.FAMILY, bilinear.PRODUCT, "0", "1"))
    return csv_lines("family, witness, delay_s, probability", rows)


def fault_truth(night: Night, saturations: list[Fault]) -> str:
    """Write ``truth/faults.csv``: exact times of every planted fault."""
    settings = night.settings
    rates = {c.name: c.rate for c in night.channels} | {STRAIN: settings.strain_rate}
    dead = Fault(DEAD, "dead", 0, settings.duration_s * rates[DEAD])
    planted = [night.gap, night.strain_nan, night.auxiliary_nan, dead]
    rows = []
    for f in [*(p for p in planted if p is not None), *saturations]:
        times = (
            sample_ns(settings.start, i, rates[f.channel]) for i in (f.first, f.end)
        )
        rows.append((f.channel, f.kind, *map(seconds_text, times)))
    return csv_lines("channel, kind, gps_start, gps_end", rows)


def label_list(night: Night) -> str:
    """Write ``labels.csv``: what invented people called the louder transients.

    Times are theirs, within 20 ms; some were looked at twice, some wrongly named.
    """
    rng = stream(night.settings.seed, "labels")
    families = sorted({f.family for f in night.settings.families})
    rows = []
    for t in night.transients:
        if t.family == bilinear.FAMILY:
            # new to the site: nobody knows it, and the others' draws stay as they are
            continue
        skip = t.family in (SATURATION, TEST_SIGNAL)
        for name, (share, wrong) in LABELLERS.items():
            looked, erred, offset, sure = rng.uniform(size=4)
            other = str(rng.choice(families))
            if skip or t.measured.snr < _LABEL_SNR or looked >= share:
                continue
            family = other if erred < wrong else t.family
            time = t.measured.peak_s + 0.04 * (offset - 0.5)
            confidence = f"{np.round(0.5 + 0.5 * sure, 1):g}"
            row = (
                _gps(night.settings.start, time),
                STRAIN,
                family,
                name,
                "",
                confidence,
            )
            rows.append(row)
    return csv_lines("gps_time, channel, family, labeller, comment, confidence", rows)


def config_text(night: Night) -> str:
    """Write ``dq.toml``."""
    settings = night.settings
    products = ""
    if settings.pitch_bursts_per_hour:
        products = (
            "\n[[witnesses.products]]\n"
            f'fast = "{bilinear.PITCH}"\n'
            f'slow = "{bilinear.SPOT}"\n'
        )
    return (
        f"# Orrin Vale is invented. Recorded: GPS {settings.start} to "
        f"{settings.start + settings.duration_s}.\n"
        "[site]\n"
        'name = "Orrin Vale"\n'
        f'strain = "{STRAIN}"\n\n'
        "[data]\n"
        'files = ["raw/*.h5"]\n'
        'channels = "channels.csv"\n'
        'ready = "ready.txt"\n'
        'injections = "injections.csv"\n\n'
        "[families]\n"
        'model = "families.model"  # trained on other nights of this site\n\n'
        "[vetoes]\n"
        "max_dead_time = 0.05  # fraction of analysed time\n" + products
    )


def readme_text(night: Night) -> str:
    """Write ``README.txt``."""
    settings = night.settings
    return (
        f"{INVENTED.decode()} Everything in this folder was computed "
        f"from seed {settings.seed};\nno instrument, place or person stands behind it."
        "\n\n"
        f"GPS {settings.start} to {settings.start + settings.duration_s}, "
        f"{len(night.channels)} auxiliary channels.\n\n"
        "raw/            channels as HDF5\n"
        "channels.csv    the channel list\n"
        "ready.txt       when the detector was ready\n"
        "injections.csv  actuated test signals\n"
        "labels.csv      what invented people called some transients\n"
        "families.model  a family sorter, trained on other nights\n"
        "dq.toml         the configuration\n"
        "truth/          what was planted; for tests, never an input\n"
    )


def _gps(start: int, seconds: float) -> str:
    micro = round(seconds * 1e6)
    return f"{start + micro // 1_000_000}.{micro % 1_000_000:06d}"
