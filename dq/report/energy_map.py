"""One energy map as a PNG, the table's transients marked in it."""

from __future__ import annotations

import io

import matplotlib as mpl
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import LogNorm
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator

#: Transients whose SNR is written beside their cross: more labels hide the map.
LABELS = 12

_STYLE = {"font.family": "DejaVu Sans", "font.size": 10}


def draw_energy_map(
    time_s: np.ndarray,
    frequency: np.ndarray,
    energy: np.ndarray,
    *,
    channel: str,
    reference: str,
    peak_time_s: np.ndarray,
    peak_frequency: np.ndarray,
    peak_snr: np.ndarray,
) -> bytes:
    """Draw tile energies over time and frequency.

    Parameters
    ----------
    time_s : ndarray, shape (n_times + 1,)
        Edges of the pixels, s after the reference.
    frequency : ndarray, shape (n_frequencies + 1,)
        Edges of the pixels, Hz.
    energy : ndarray, shape (n_frequencies, n_times)
        Normalised; NaN where nothing was judged, which is left grey.
    channel : str
    reference : str
        GPS time that times count from, as text.
    peak_time_s, peak_frequency, peak_snr : ndarray, shape (n_transients,)
        The table's peaks, times after the reference.

    Returns
    -------
    bytes
        PNG; equal input gives equal bytes.
    """
    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(9.0, 5.0), layout="constrained")
        axes = figure.subplots()
        axes.set_facecolor("#c8ccd0")
        finite = energy[np.isfinite(energy)]
        top = max(float(finite.max(initial=0.0)), 20.0)
        mesh = axes.pcolormesh(
            time_s,
            frequency,
            np.ma.masked_invalid(energy),
            cmap="cividis",
            norm=LogNorm(1.0, top, clip=True),
            rasterized=True,
        )
        figure.colorbar(mesh, ax=axes, label="normalised tile energy", pad=0.01)
        _mark(axes, peak_time_s, peak_frequency, peak_snr)
        axes.set_yscale("log")
        axes.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
        axes.yaxis.set_major_formatter(FuncFormatter(lambda f, _: f"{f:g}"))
        axes.yaxis.set_minor_formatter(FuncFormatter(lambda f, _: ""))
        axes.set_xlim(time_s[0], time_s[-1])
        axes.set_ylim(frequency[0], frequency[-1])
        axes.set_xlabel(f"time after GPS {reference} (s)")
        axes.set_ylabel("frequency (Hz)")
        axes.set_title(channel, loc="left")
        buffer = io.BytesIO()
        FigureCanvasAgg(figure)
        figure.savefig(buffer, format="png", dpi=130, metadata={"Software": None})
        return buffer.getvalue()


def _mark(axes, time_s, frequency, snr) -> None:
    """Put a cross on every peak, and its SNR beside the loudest."""
    # white under black is seen on any colour of the map
    for colour, width in (("white", 3.5), ("black", 1.4)):
        axes.plot(
            time_s, frequency, "x", color=colour, markersize=9, markeredgewidth=width
        )
    left, right = axes.get_xlim()
    for k in np.argsort(-np.asarray(snr), kind="stable")[:LABELS]:
        # near the right edge the label stands on the left
        inward = time_s[k] < left + 0.8 * (right - left)
        axes.annotate(
            f"SNR {snr[k]:.3g}",
            (time_s[k], frequency[k]),
            xytext=(8 if inward else -8, 6),
            textcoords="offset points",
            ha="left" if inward else "right",
            fontsize=8,
            bbox={"boxstyle": "round,pad=0.15", "fc": "white", "ec": "none"},
        )
