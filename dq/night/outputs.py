"""The files of a night's folder, and the manifest that tells what they rest on."""

from __future__ import annotations

import logging
from collections.abc import Callable
from pathlib import Path

import pandas as pd

from dq.config import Config, digest, parse_config
from dq.errors import InputError
from dq.night.folder import (
    LOG,
    MANIFEST,
    NightFolder,
    read_manifest,
    write_manifest,
)
from dq.night.honest import Search
from dq.night.judge import Verdict, judge
from dq.night.ledger import (
    CHANNELS_FILE,
    COVERAGE_FILE,
    FEATURE_COLUMNS,
    FEATURES_FILE,
    INJECTIONS_FILE,
    PLANTED_FILE,
    STRAIN_FILE,
    TRANSIENTS_FILE,
    Ledger,
    read_ledger,
    read_planted,
    write_optional,
)
from dq.night.plan import NightPlan
from dq.night.summary import summarise_night
from dq.segments import seconds_text, to_ns
from dq.tables import (
    COVERAGE,
    INJECTIONS,
    NIGHT_CHANNELS,
    PLANTED,
    STRAIN_TRANSIENTS,
    VETO_COST,
    VETO_CURVE,
    VETOES,
    WITNESSES,
)

log = logging.getLogger(__name__)

SCHEMA = 1

_DONE, _LEFT_OUT = 0, 3


def new_manifest(plan: NightPlan, ledger: Ledger, left_out: dict[str, str]) -> dict:
    """Describe a night that is about to be written."""
    from dq import __version__

    config = plan.inputs.config
    recorded = plan.inputs.store.channel(ledger.strain).recorded & plan.span
    return {
        "tool": "dq",
        "schema": SCHEMA,
        "dq_version": __version__,
        "state": "running",
        "exit_code": _LEFT_OUT if left_out or ledger.faulty else _DONE,
        "gps_start": seconds_text(plan.start_ns),
        "gps_end": seconds_text(plan.end_ns),
        "recorded_s": recorded.total_s,
        "config": config.model_dump(mode="json"),
        "settings_sha256": digest(config),
        "inputs_sha256": plan.inputs_sha256,
        "request_sha256": plan.request,
        "left_out": dict(sorted(left_out.items())),
        "faulty": ledger.faulty,
        "sorting": ledger.sorting,
        "files": {},
    }


def finished_as(directory: Path, plan: NightPlan) -> dict | None:
    """Give the manifest if the folder holds this very night, whole; else None."""
    if not (directory / MANIFEST).exists():
        return None
    manifest = read_manifest(directory)
    same = (
        manifest.get("state") == "finished"
        and manifest.get("request_sha256") == plan.request
        and manifest.get("files") == _sizes(directory)
    )
    return manifest if same else None


def write_night(
    directory: Path,
    config: Config,
    ledger: Ledger,
    manifest: dict,
    *,
    planted: pd.DataFrame | None = None,
    lap: Callable[[str], None] = lambda stage: None,
) -> Verdict:
    """Write the channels' tables and all that follows from them.

    Raises
    ------
    OutputError
        A file cannot be written; the old one still stands.
    """
    from dq.writers import write_table, write_transients_h5

    manifest["state"] = "running"
    write_manifest(directory, manifest)
    attributes = ledger.channels.set_index("channel")
    write_transients_h5(
        directory / TRANSIENTS_FILE,
        {
            name: (table, _attributes(attributes.loc[name]))
            for name, table in ledger.transients.items()
        },
    )
    write_table(directory / CHANNELS_FILE, ledger.channels, NIGHT_CHANNELS)
    write_table(directory / COVERAGE_FILE, ledger.coverage, COVERAGE)
    _write_features(directory, ledger)
    write_optional(directory / PLANTED_FILE, planted, PLANTED)
    write_optional(directory / INJECTIONS_FILE, ledger.injections, INJECTIONS)
    lap("tables")
    return write_verdict(directory, config, manifest, lap=lap)


def _write_features(directory: Path, ledger: Ledger) -> None:
    """Write features and families where the verdict will read them back."""
    from dq.writers import write_table

    if ledger.features is None:
        (directory / FEATURES_FILE).unlink(missing_ok=True)
        return
    write_table(directory / FEATURES_FILE, ledger.features, FEATURE_COLUMNS)
    strain = ledger.transients[ledger.strain].assign(
        transient_id=ledger.features["transient_id"].array, family="unsorted"
    )
    if ledger.families is not None:
        families = {c: ledger.families[c].array for c in ledger.families}
        strain = strain.assign(**families)
    write_table(directory / STRAIN_FILE, strain, STRAIN_TRANSIENTS)


def _attributes(row) -> dict:
    names = ("sample_rate_hz", "f_low_hz", "f_high_hz", "analysed_s")
    return {name: float(row[name]) for name in names}


def write_verdict(
    directory: Path,
    config: Config,
    manifest: dict,
    *,
    search: Search | None = None,
    lap: Callable[[str], None] = lambda stage: None,
) -> Verdict:
    """Judge a folder's channel tables again and write what follows from them.

    The tables are read back from the folder, also within the night itself: what
    ``dq veto`` does later is then the same by construction.
    """
    from dq.report import write_page
    from dq.writers import write_table

    ledger = read_ledger(directory, config.site.strain)
    planted = read_planted(directory)
    verdict = judge(ledger, config, planted=planted, search=search)
    for name, reason in verdict.choice.refused.items():
        log.info("veto %s not chosen: %s", name, reason)
    lap("witnesses and vetoes")
    for name, table, columns in (
        (STRAIN_FILE, verdict.strain, STRAIN_TRANSIENTS),
        ("witnesses.csv", verdict.witnesses, WITNESSES),
        ("vetoes.csv", verdict.vetoes, VETOES),
        ("veto_cost.csv", verdict.cost, VETO_COST),
        ("veto_curve.csv", verdict.choice.curve, VETO_CURVE),
    ):
        write_table(directory / name, table, columns)
    _write_machine_files(directory, ledger, verdict, manifest)
    lap("files")
    write_page(directory)
    lap("page")
    manifest["state"] = "finished"
    manifest["files"] = _sizes(directory)
    write_manifest(directory, manifest)
    return verdict


def _write_machine_files(
    directory: Path, ledger: Ledger, verdict: Verdict, manifest: dict
) -> None:
    from dq.writers import write_quality_mask, write_segments_folder, write_summary

    write_segments_folder(directory, analysed=verdict.analysed, vetoes=verdict.vetoes)
    write_quality_mask(
        directory / "quality_mask.h5",
        start_ns=to_ns(manifest["gps_start"]),
        end_ns=to_ns(manifest["gps_end"]),
        analysed=verdict.analysed,
        vetoes=verdict.vetoes,
    )
    values = summarise_night(ledger, verdict, manifest)
    write_summary(directory / "summary.json", values)


def _sizes(directory: Path) -> dict[str, int]:
    """Give the size of every output file; state, log and lock are no outputs."""
    patterns = ("*.csv", "*.h5", "*.json", "*.html", "segments/*.txt")
    return {
        str(path.relative_to(directory)): path.stat().st_size
        for pattern in patterns
        for path in sorted(directory.glob(pattern))
        if path.name not in (MANIFEST, LOG)
    }


def finished_night(directory: Path) -> NightFolder:
    """Give the folder of a finished night, to be entered.

    Raises
    ------
    InputError
        There is no night, or it was not finished.
    """
    if read_manifest(directory).get("state") != "finished":
        raise InputError(
            f"the night in {str(directory)!r} is not finished; run dq night again"
        )
    return NightFolder(directory)


def veto_again(
    directory: str | Path,
    *,
    max_dead_time: float | None = None,
    search: Search | None = None,
) -> Verdict:
    """Choose and cost vetoes again from a finished night; no data are read.

    Parameters
    ----------
    directory : str or Path
    max_dead_time : float, optional
        Fraction of the analysed time; by default the night's own.
    search : Search, optional
        The user's search, whose triggers then are the background of the volume-time
        ratio instead of the strain's transients.

    Returns
    -------
    Verdict

    Raises
    ------
    InputError
        The folder holds no finished night; nothing was written.
    """
    directory = Path(directory)
    with finished_night(directory) as folder:
        manifest = folder.manifest()
        settings = manifest["config"]
        if max_dead_time is not None:
            settings["vetoes"]["max_dead_time"] = max_dead_time
        config = parse_config(settings, where=str(directory / MANIFEST))
        read_ledger(directory, config.site.strain)
        folder.start_log()
        if manifest["settings_sha256"] != digest(config) or search is not None:
            # dq night with the file's own settings must notice the difference
            manifest["settings_sha256"] = digest(config)
            manifest["request_sha256"] = ""
        manifest["state"] = "running"
        folder.write_manifest(manifest)
        return write_verdict(directory, config, manifest, search=search)


def report_again(directory: str | Path) -> Path:
    """Write the page of a finished night again from its tables.

    Parameters
    ----------
    directory : str or Path

    Returns
    -------
    Path
        The page.

    Raises
    ------
    InputError
        The folder holds no finished night; nothing was written.
    """
    from dq.report import write_page

    directory = Path(directory)
    with finished_night(directory) as folder:
        manifest = folder.manifest()
        write_page(directory)
        manifest["files"] = _sizes(directory)
        folder.write_manifest(manifest)
    return directory / "index.html"
