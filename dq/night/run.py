"""The nightly batch: every channel, then witnesses, vetoes, cost, files and page."""

from __future__ import annotations

import logging
import os
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING

from dq.config import Config
from dq.errors import NoDataError
from dq.night.channel import ChannelResult
from dq.night.feature_stage import check_model, planted_sorter, with_families
from dq.night.folder import STATE, NightFolder, check_folder
from dq.night.inputs import Inputs, check_range, read_inputs
from dq.night.ledger import make_ledger
from dq.night.outputs import finished_as, new_manifest, write_night
from dq.night.plan import NightPlan, plan_night
from dq.night.pool import make_pool, run_tasks
from dq.night.products import product_rows
from dq.night.state import load_state

if TYPE_CHECKING:
    import pandas as pd

log = logging.getLogger(__name__)

#: ``progress(done, total, what)``: channels done, channels in all, last one done.
Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class NightOutcome:
    """How a night went.

    Attributes
    ----------
    exit_code : int
        0, or 3 when channels or time were left out.
    directory : Path
    left_out : dict of str to str
        Channels and files that were left out, with the reason.
    faulty : dict of str to float
        Analysed channels with faults, and the seconds these took.
    seconds : dict of str to float
        Wall time by stage.
    nothing_to_do : bool
        The folder already held this very night.
    """

    exit_code: int
    directory: Path
    left_out: dict[str, str] = field(default_factory=dict)
    faulty: dict[str, float] = field(default_factory=dict)
    seconds: dict[str, float] = field(default_factory=dict)
    nothing_to_do: bool = False


def run_night(
    config: Config,
    *,
    start,
    end,
    out: str | Path,
    jobs: int | None = None,
    progress: Progress | None = None,
) -> NightOutcome:
    """Run or resume a night.

    Parameters
    ----------
    config : Config
    start, end : int, str, Decimal or float
        Range in GPS seconds, half-open.
    out : str or Path
        Output folder: new, empty, or a night's. What a killed run finished there is
        kept where its settings and inputs are still the same.
    jobs : int, optional
        Channels worked on at a time; by default the number of processors. It does not
        change the tables.
    progress : callable, optional
        Called as ``progress(done, total, what)`` after each channel.

    Returns
    -------
    NightOutcome

    Raises
    ------
    InputError
        The input or the range cannot be used; nothing was written.
    OutputError
        The disk is full or a worker was killed; the same call resumes.
    """
    start_ns, end_ns = check_range(start, end)
    out = Path(out)
    check_folder(out)
    clock = _Clock()
    inputs = read_inputs(config)
    if config.families.model is not None:
        check_model(config.path(config.families.model))
    plan = plan_night(inputs, start_ns, end_ns, out / STATE)
    clock.lap("headers")
    with NightFolder(out) as folder:
        done = finished_as(out, plan)
        if done is not None:
            log.info("nothing to do: %s holds this very night", out)
            return _outcome(out, done, clock, nothing_to_do=True)
        results, failed = _channels(plan, folder, jobs or _processors(), progress)
        clock.lap("channels")
        left_out = plan.left_out | failed
        left_out |= _problems(inputs, left_out)
        for name, reason in sorted(left_out.items()):
            log.warning("left out: %s: %s", name, reason)
        rows = [inputs.strain, *inputs.auxiliary, *product_rows(inputs)]
        ledger = make_ledger(rows, results, left_out)
        ledger = replace(ledger, injections=inputs.injections)
        ledger = with_families(plan, folder, ledger)
        clock.lap("features")
        manifest = new_manifest(plan, ledger, left_out)
        planted = _planted(plan, results[config.site.strain])
        clock.lap("planted signals")
        write_night(out, config, ledger, manifest, planted=planted, lap=clock.lap)
        return _outcome(out, manifest, clock)


def _channels(
    plan: NightPlan, folder: NightFolder, jobs: int, progress: Progress | None
) -> tuple[dict[str, ChannelResult], dict[str, str]]:
    """Analyse what has no valid state yet; give all results and the failures."""
    strain = plan.inputs.config.site.strain
    results = {t.channel: load_state(t.state, t.key) for t in plan.tasks}
    open_tasks = [t for t in plan.tasks if results[t.channel] is None]
    total, done = len(plan.tasks), len(plan.tasks) - len(open_tasks)
    if results[strain] is not None:
        folder.start_log()
        log.info("%d of %d channels are kept from before", done, total)
    failed: dict[str, str] = {}
    if open_tasks:
        folder.state  # noqa: B018  makes the folder before workers write there
        for task in open_tasks:
            folder.will_write(task.state)
        jobs = min(jobs, len(open_tasks))
        with make_pool(jobs) as pool:
            for outcome in run_tasks(open_tasks, pool, jobs):
                done += 1
                if outcome.error:
                    failed[outcome.channel] = outcome.error
                if outcome.channel == strain:
                    if outcome.error:
                        raise NoDataError(
                            f"strain {strain!r} cannot be used: {outcome.error}"
                        )
                    folder.start_log()
                log.debug("%s: %s", outcome.channel, outcome.error or "done")
                if progress:
                    progress(done, total, outcome.channel)
    for task in open_tasks:
        if task.channel not in failed:
            results[task.channel] = load_state(task.state, task.key)
    return {k: v for k, v in results.items() if v is not None}, failed


def _planted(plan: NightPlan, strain: ChannelResult) -> pd.DataFrame | None:
    """Plant signals where vetoes rest on the strain itself; None elsewhere."""
    inputs, settings = plan.inputs, plan.inputs.config.vetoes
    if not settings.strain_families or not settings.signal_loss_plants:
        return None
    from dq.night.planting import plant_signals

    row = inputs.strain
    options = {
        "ready": inputs.wanted,
        "f_low_hz": row.f_low_hz,
        "f_high_hz": row.f_high_hz,
    }
    sort = planted_sorter(inputs.config, strain.transients, **options)
    data = inputs.store.channel(row.name)
    return plant_signals(data, strain, config=inputs.config, sort=sort, **options)


def _problems(inputs: Inputs, left_out: dict[str, str]) -> dict[str, str]:
    """Give the files and datasets that could not be used, with the reason.

    A channel that is left out altogether has its reason already; what is wrong with
    channels that are not on the list costs nothing.
    """
    used = {inputs.strain.name, *(c.name for c in inputs.auxiliary)} - set(left_out)
    return {
        where: text
        for where, channel, text in inputs.problems
        if channel is None or channel in used
    }


def _outcome(
    out: Path, manifest: dict, clock: _Clock, *, nothing_to_do: bool = False
) -> NightOutcome:
    return NightOutcome(
        exit_code=manifest["exit_code"],
        directory=out,
        left_out=manifest["left_out"],
        faulty=manifest["faulty"],
        seconds=clock.seconds,
        nothing_to_do=nothing_to_do,
    )


def _processors() -> int:
    # what this process may use, which in a container is not what the machine has
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


class _Clock:
    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._last = time.perf_counter()

    def lap(self, stage: str) -> None:
        now = time.perf_counter()
        self.seconds[stage] = self.seconds.get(stage, 0.0) + now - self._last
        self._last = now
