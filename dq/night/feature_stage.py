"""The night's stage between transients and witnesses: features, then families.

Features need the strain's data once more, so they are kept in the state folder under
the key of everything they depend on; families need only the features and the model.
"""

from __future__ import annotations

import logging
from collections import Counter
from dataclasses import replace
from pathlib import Path

import pandas as pd

from dq.config import Config
from dq.errors import DqError, InputError
from dq.features import NAMES
from dq.night.code import ENGINE, code_digest
from dq.night.folder import NightFolder
from dq.night.judge import transient_ids
from dq.night.ledger import FAMILY_COLUMNS, FEATURE_COLUMNS, Ledger
from dq.night.plan import NightPlan, sha256_of
from dq.night.strain_features import FeatureTable, measure_transients
from dq.tables import conform, csv_table, csv_text
from dq.writers import write_atomically

log = logging.getLogger(__name__)


def wants_features(config: Config) -> bool:
    """Say whether the night measures the strain's features."""
    return config.families.features or config.families.model is not None


def with_families(plan: NightPlan, folder: NightFolder, ledger: Ledger) -> Ledger:
    """Add features and, with a model, families to a night's ledger.

    Parameters
    ----------
    plan : NightPlan
    folder : NightFolder
        Its state folder keeps the features.
    ledger : Ledger

    Returns
    -------
    Ledger
        The same one unless the configuration wants features.

    Raises
    ------
    InputError
        The model cannot be used.
    """
    config = plan.inputs.config
    if not wants_features(config):
        return ledger
    features = _kept_features(plan, folder, ledger)
    if config.families.model is None:
        return replace(ledger, features=features)
    model = config.path(config.families.model)
    families = sort_features(features, model)
    sorting = _look(features, families, ledger, model)
    return replace(ledger, features=features, families=families, sorting=sorting)


def planted_sorter(config: Config, among: pd.DataFrame, **options):
    """Give what sorts transients of planted data; None without a model.

    Parameters
    ----------
    config : Config
    among : pandas.DataFrame
        The night's own transients, whose neighbourhood is a feature.
    **options
        As :func:`dq.night.strain_features.measure_transients` takes them.
    """
    if config.families.model is None:
        return None

    def sort(transients: pd.DataFrame, data) -> list[str]:
        found = measure_transients(
            data, transients, config=config, among=among, **options
        )
        table = feature_table(transients, found)
        families = sort_features(table, config.path(config.families.model))
        return families["family"].tolist()

    return sort


def feature_table(transients: pd.DataFrame, found: FeatureTable) -> pd.DataFrame:
    """Put the transients' names before their features."""
    table = found.table.assign(transient_id=transient_ids(transients))
    return conform(table.reset_index(drop=True), FEATURE_COLUMNS)


def sort_features(features: pd.DataFrame, model: Path) -> pd.DataFrame:
    """Sort transients into families: the one place where the sorter is called.

    Parameters
    ----------
    features : pandas.DataFrame
        ``FEATURE_COLUMNS``; rows without features stay ``unsorted``.
    model : Path

    Returns
    -------
    pandas.DataFrame
        ``FAMILY_COLUMNS``, rows in the same order.

    Raises
    ------
    InputError
        The model cannot be used.
    """
    from dq.families import sort_transients

    known = features[list(NAMES)].notna().all(axis=1).to_numpy()
    table = pd.DataFrame({"family": ["unsorted"] * len(features)})
    table = conform(table, FAMILY_COLUMNS)
    if known.any():
        names = [c.name for c in FAMILY_COLUMNS]
        measured = features.loc[known, list(NAMES)].reset_index(drop=True)
        found = conform(sort_transients(measured, model)[names], FAMILY_COLUMNS)
        for name in names:
            table.loc[known, name] = found[name].to_numpy()
    return table


def check_model(model: Path) -> None:
    """Refuse a model that cannot be used, before the work is done.

    Raises
    ------
    InputError
        The file is missing or damaged, or was trained with other features or by
        another version.
    """
    from dq.families import load_model

    if not model.is_file():
        raise InputError(
            f"model {str(model)!r} is no file; train one or correct its path"
        )
    load_model(model, features=list(NAMES))


def _look(features: pd.DataFrame, families: pd.DataFrame, ledger: Ledger, model: Path):
    """Group the unknown transients and compare the night with the training set."""
    from dq.families import UNKNOWN, drift, drift_text, group_unknowns, load_model

    sorter, _ = load_model(model, features=list(NAMES))
    known = features[list(NAMES)].notna().all(axis=1).to_numpy()
    measured = features.loc[known, list(NAMES)]
    unknown = (families["family"] == UNKNOWN).to_numpy(bool)
    analysed = ledger.time("analysed")[ledger.strain]
    groups = group_unknowns(
        features.loc[unknown, list(NAMES)].to_numpy(float),
        sorter,
        live_time_s=analysed.total_s,
    )
    moved = drift_text(
        drift(measured, sorter),
        declined=int(unknown.sum()),
        total=len(measured),
        reject=sorter.reject,
    )
    names = features.loc[unknown, "transient_id"].to_numpy(object)
    table = [
        {
            "count": int(row.count_),
            "per_hour": round(float(row.per_hour), 3),
            "typical": str(names[row.typical]),
            "nearest": str(row.nearest),
        }
        for row in groups.table.rename(columns={"count": "count_"}).itertuples()
    ]
    log.info("%s", groups.text)
    if moved:
        log.warning("%s", moved)
    return {"unknowns": groups.text, "groups": table, "drift": moved}


def _kept_features(plan: NightPlan, folder: NightFolder, ledger: Ledger):
    """Take the features from the state folder, or measure and keep them."""
    transients = ledger.transients[ledger.strain]
    path = folder.state / f"features-{features_key(plan)[:16]}.csv"
    if path.exists():
        try:
            kept = csv_table(path.read_text(encoding="utf-8"), FEATURE_COLUMNS)
        except (InputError, OSError, UnicodeDecodeError):
            kept = None
        if kept is not None and list(kept["transient_id"]) == transient_ids(transients):
            log.info("features of %d transients are kept from before", len(kept))
            return kept
    row = plan.inputs.strain
    try:
        found = measure_transients(
            plan.inputs.store.channel(row.name),
            transients,
            ready=plan.inputs.wanted,
            config=plan.inputs.config,
            f_low_hz=row.f_low_hz,
            f_high_hz=row.f_high_hz,
        )
    except OSError as error:
        raise DqError(
            f"strain {row.name!r} cannot be read for its features: {error}; bring its "
            "files back and run the same command"
        ) from error
    for reason, count in sorted(Counter(found.left_out.values()).items()):
        log.warning("no features for %d transients: %s", count, reason)
    for old in folder.state.glob("features-*.csv"):
        old.unlink()
    text = csv_text(feature_table(transients, found), FEATURE_COLUMNS)
    write_atomically(path, text)
    # what a later run reads back, so that families cannot depend on the interruption
    return csv_table(text, FEATURE_COLUMNS)


def features_key(plan: NightPlan) -> str:
    """Give the digest of everything that the strain's features depend on."""
    strain = plan.inputs.strain.name
    task = next(t for t in plan.tasks if t.channel == strain)
    code = code_digest(*ENGINE, "features")
    return sha256_of(code, task.key, plan.inputs.config.site.mains_hz)
