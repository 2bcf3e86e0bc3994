"""The invented site's night, written to a folder."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path

import h5py

from dq.errors import InputError, OutputError
from dq.observatory import listing
from dq.observatory.channels import FILE_SHARE, UNSAFE, ChannelSpec
from dq.observatory.recording import (
    COUNTS,
    plateaus,
    record_auxiliary,
    record_strain,
    write_channel,
    write_strain,
)
from dq.observatory.schedule import Night, plan_night
from dq.observatory.settings import SiteSettings

#: The family sorter that comes with the site, trained from ``training_sets/orrin_vale``
#: (its README says how).
MODEL = Path(__file__).with_name("families.model")

Progress = Callable[[int, int, str], None]


def make_site(
    directory: str | Path,
    *,
    seed: int = 0,
    start: int = 1_420_000_037,
    duration_s: int = 3600,
    settings: SiteSettings | None = None,
    progress: Progress | None = None,
) -> Path:
    """Make a night of the invented site Orrin Vale.

    Parameters
    ----------
    directory : str or Path
        Created when absent. An older invented site is replaced; a folder that holds
        anything else is refused.
    seed, start, duration_s : int, optional
        Random seed, GPS second of the first sample, length in s.
    settings : SiteSettings, optional
        All of the night's parameters; seed, start and duration are then taken from it.
    progress : callable, optional
        Called with the steps done, their number, and what was done.

    Returns
    -------
    Path
        The configuration file, ``dq.toml``. It is written last: where it exists, the
        site is complete.

    Raises
    ------
    InputError
        A setting is out of its bounds, or the folder holds something else.
    OutputError
        The folder cannot be written.
    """
    if settings is None:
        settings = replace(
            SiteSettings(), seed=seed, start=start, duration_s=duration_s
        )
    directory = Path(directory)
    try:
        return _make(directory, settings, progress or (lambda done, total, what: None))
    except OSError as error:
        raise OutputError(
            f"cannot write the site to {str(directory)!r}: "
            f"{error.strerror or error}; free space or choose another folder"
        ) from error


def _clear(directory: Path) -> None:
    """Make the folder ready for a new site, without losing anybody's data."""
    readme = directory / "README.txt"
    if directory.exists() and any(directory.iterdir()):
        ours = readme.is_file() and readme.read_bytes().startswith(listing.INVENTED)
        if not ours:
            raise InputError(
                f"folder {str(directory)!r} holds something that is no invented site; "
                "choose an empty folder"
            )
    (directory / "dq.toml").unlink(missing_ok=True)
    for folder in (directory / "raw", directory / "truth"):
        folder.mkdir(parents=True, exist_ok=True)
    for old in (directory / "raw").glob("*.h5"):
        old.unlink()


def _make(directory: Path, settings: SiteSettings, progress: Progress) -> Path:
    raw, config = directory / "raw", directory / "dq.toml"
    _clear(directory)
    night = plan_night(settings)
    (directory / "README.txt").write_text(listing.readme_text(night), encoding="utf-8")
    total = len(night.channels) + 2
    progress(1, total, "plan")
    strain, error, saturations = record_strain(night)
    write_strain(raw, night, strain)
    del strain
    progress(2, total, "strain")
    done = 2
    for group, specs in _groups(night).items():
        with ExitStack() as stack:
            files = _open_group(stack, raw, group, settings)
            for spec in specs:
                values = error if spec.name == UNSAFE else record_auxiliary(night, spec)
                write_channel(files, night, spec, values)
                if spec.dtype == "int16":
                    low, high = COUNTS
                    saturations += plateaus(
                        values, low=low, high=high, channel=spec.name
                    )
                done += 1
                progress(done, total, spec.name)
    texts = {
        "channels.csv": listing.channel_list(night),
        "ready.txt": listing.ready_list(night),
        "injections.csv": listing.injection_list(night),
        "labels.csv": listing.label_list(night),
        "truth/transients.csv": listing.transient_truth(night),
        "truth/own_glitches.csv": listing.own_truth(night),
        "truth/couplings.csv": listing.coupling_truth(night),
        "truth/faults.csv": listing.fault_truth(night, saturations),
        "dq.toml": listing.config_text(night),
    }
    # the configuration names the model, so the model stands there first
    shutil.copyfile(MODEL, directory / MODEL.name)
    for name, text in texts.items():
        (directory / name).write_text(text, encoding="utf-8")
    return config


def _groups(night: Night) -> dict[str, list[ChannelSpec]]:
    groups: dict[str, list[ChannelSpec]] = {}
    for spec in night.channels:
        groups.setdefault(spec.group, []).append(spec)
    return groups


def _open_group(
    stack: ExitStack, raw: Path, group: str, settings: SiteSettings
) -> list[tuple[h5py.File, int, int]]:
    length = max(1, round(FILE_SHARE.get(group, 1.0) * settings.duration_s))
    files = []
    for first in range(0, settings.duration_s, length):
        path = raw / f"{group}-{settings.start + first}.h5"
        file = stack.enter_context(h5py.File(path, "w"))
        files.append((file, first, min(first + length, settings.duration_s)))
    return files
