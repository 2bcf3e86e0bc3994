"""The night in numbers, for ``summary.json``."""

from __future__ import annotations

import numpy as np
import pandas as pd

from dq.cost import actuated_words, losing_vetoes, volume_sentence
from dq.counting import clopper_pearson
from dq.night.honest import total_row
from dq.night.judge import Verdict
from dq.night.ledger import Ledger
from dq.segments import NS, to_ns

#: What no stage can tell yet; a program finds the key, and null.
_UNKNOWN = None


def summarise_night(ledger: Ledger, verdict: Verdict, manifest: dict) -> dict:
    """Give the values of the summary.

    Parameters
    ----------
    ledger : Ledger
    verdict : Verdict
    manifest : dict

    Returns
    -------
    dict
        Keys of ``dq.writers.write_summary``; ``missing`` lists ``[start, end)`` of the
        strain in GPS seconds, ``channels.ok`` counts.
    """
    start_ns, end_ns = to_ns(manifest["gps_start"]), to_ns(manifest["gps_end"])
    missing = ledger.time("missing")[ledger.strain]
    total = _total_row(verdict.cost)
    strain = verdict.strain
    traced = strain["witness"].fillna("") != ""
    return {
        "requested_s": (end_ns - start_ns) / NS,
        "recorded_s": manifest["recorded_s"],
        "analysed_s": verdict.analysed.total_s,
        "missing": [[low / NS, high / NS] for low, high in missing],
        "strain_transients": len(strain),
        "families": {
            str(name): int(count)
            for name, count in strain["family"].value_counts().sort_index().items()
        },
        "untraced_fraction": float(1 - traced.mean()) if len(strain) else _UNKNOWN,
        "untraced_interval": _interval(len(strain) - int(traced.sum()), len(strain)),
        "sorting": manifest.get("sorting", {}),
        "vetoes": list(dict.fromkeys(verdict.vetoes["veto"])),
        "dead_time_s": total["dead_time_s"],
        "dead_time_fraction": total["dead_time_fraction"],
        "efficiency": {
            "all": total["efficiency"],
            "snr8": total["efficiency_snr8"],
            "snr20": total["efficiency_snr20"],
        },
        "volume_time_ratio": verdict.volume | {"words": _words(verdict)},
        "test_signals": _test_signals(verdict.cost),
        "channels": {
            "ok": sum("@" not in name for name in ledger.transients),
            "left_out": manifest["left_out"],
        },
        "settings_sha256": manifest["settings_sha256"],
        "inputs_sha256": manifest["inputs_sha256"],
    }


def _words(verdict: Verdict) -> list[str]:
    return [volume_sentence(verdict.volume), *losing_vetoes(verdict.cost)]


def _test_signals(cost: pd.DataFrame) -> dict | None:
    """Give what the vetoes take of the test signals; None where none are listed."""
    row = total_row(cost)
    if pd.isna(row["test_signals"]):
        return _UNKNOWN
    count = int(row["test_signals"])
    return {
        "analysed": count,
        "vetoed": int(row["test_signals_vetoed"]),
        "expected_by_dead_time": count * float(row["dead_time_fraction"]),
        "low": float(row["test_signals_low"]),
        "high": float(row["test_signals_high"]),
        "p_value": float(row["test_signals_p_value"]),
        "words": actuated_words(cost),
    }


def _interval(count: int, trials: int) -> list[float] | None:
    return list(clopper_pearson(count, trials)) if trials else _UNKNOWN


def _total_row(cost: pd.DataFrame) -> dict[str, float]:
    row = total_row(cost)
    names = ("dead_time_s", "dead_time_fraction")
    names += ("efficiency", "efficiency_snr8", "efficiency_snr20")
    return {n: np.nan if pd.isna(row[n]) else float(row[n]) for n in names}
