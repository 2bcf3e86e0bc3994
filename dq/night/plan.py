"""What a night has to do: one task per channel, each with the key of its result."""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass, field
from pathlib import Path

from dq.config import digest
from dq.errors import DqError, NoDataError
from dq.night.code import ENGINE, code_digest
from dq.night.inputs import Inputs, check_strain_time
from dq.night.motion_plan import MotionPlan, plan_motion, strain_edge
from dq.night.pool import Task
from dq.night.products import product_data, product_rows
from dq.night.state import state_path
from dq.segments import Segments
from dq.store import Channel
from dq.tables import recordings_of

_NS = 1_000_000_000

#: Ready time and data this far outside the range can reach the range's results through
#: the spectrum's span and the batches of blocks; the bounds of the configuration keep
#: both below it. s.
_REACH_S = 8192


@dataclass
class NightPlan:
    """A night before it runs.

    Attributes
    ----------
    inputs : Inputs
    start_ns, end_ns : int
    tasks : list of Task
        Strain first, then by the number of samples, largest first: the last channels
        to end are then short ones.
    left_out : dict of str to str
        Channels that cannot be analysed, with the reason.
    request : str
        sha256 of everything the night's tables depend on.
    inputs_sha256 : str
        sha256 of the content of the inputs, wherever they lie.
    """

    inputs: Inputs
    start_ns: int
    end_ns: int
    tasks: list[Task] = field(default_factory=list)
    left_out: dict[str, str] = field(default_factory=dict)
    request: str = ""
    inputs_sha256: str = ""

    @property
    def span(self) -> Segments:
        """The requested range."""
        return Segments.of([(self.start_ns, self.end_ns)])

    @property
    def reach(self) -> Segments:
        """The time whose data and ready segments can touch the results."""
        return self.span.pad(_REACH_S * _NS)

    @property
    def wanted(self) -> Segments:
        """The ready time of the range."""
        return self.inputs.wanted & self.span


def plan_night(inputs: Inputs, start_ns: int, end_ns: int, state: Path) -> NightPlan:
    """Plan the tasks of a night.

    Parameters
    ----------
    inputs : Inputs
    start_ns, end_ns : int
        The range, GPS nanoseconds.
    state : Path
        Folder of the state files; need not exist.

    Returns
    -------
    NightPlan

    Raises
    ------
    NoDataError
        The strain has no data in the range's ready time.
    """
    check_strain_time(inputs, start_ns, end_ns)
    plan = NightPlan(inputs, start_ns, end_ns)
    strain = inputs.strain
    for row in [strain, *inputs.auxiliary, *product_rows(inputs)]:
        try:
            plan.tasks.append(_task(plan, row, state))
        except DqError as error:
            if row is strain:
                raise NoDataError(
                    f"strain {row.name!r} cannot be used: {error}"
                ) from error
            plan.left_out[row.name] = str(error)
    plan.tasks.sort(key=lambda t: (t.channel != strain.name, -t.weight, t.channel))
    keys = {t.channel: t.key for t in plan.tasks}
    plan.request = sha256_of(
        code_digest(),
        digest(inputs.config),
        inputs.texts,
        [start_ns, end_ns],
        keys,
        plan.left_out,
    )
    contents = {
        name: inputs.store.content_id(name, plan.reach)
        for t in plan.tasks
        for name in recordings_of(t.channel)
    }
    plan.inputs_sha256 = sha256_of(inputs.texts, contents)
    return plan


def _task(plan: NightPlan, row: Channel, state: Path) -> Task:
    inputs = plan.inputs
    if "@" in row.name:
        data, motion = product_data(inputs, row.name), None
    elif row.name in inputs.store.channels:
        data = inputs.store.channel(row.name)
        motion = channel_motion(inputs, row)
    else:
        raise NoDataError(inputs.why_absent(row.name))
    recorded = data.recorded & plan.wanted
    if not recorded:
        raise NoDataError("no data: nothing is recorded in the ready time of the range")
    return Task(
        data=data,
        config=inputs.config,
        ready=inputs.wanted,
        start_ns=plan.start_ns,
        end_ns=plan.end_ns,
        f_low_hz=row.f_low_hz,
        f_high_hz=row.f_high_hz,
        key=_key(plan, row, motion),
        state=state_path(state, row.name),
        weight=float(data.rate) * recorded.total_s,
        motion=motion,
    )


def channel_motion(inputs: Inputs, row: Channel) -> MotionPlan | None:
    """Say what is derived from a recorded channel of the list."""
    data = inputs.store.channel(row.name)
    strain = inputs.strain
    rate = float(inputs.store.channel(strain.name).rate)
    edge = strain_edge(strain, rate, inputs.config)
    return plan_motion(row, float(data.rate), data.unit, inputs.config, edge)


def _key(plan: NightPlan, row: Channel, motion: MotionPlan | None) -> str:
    """Give the digest of everything that a channel's result depends on."""
    inputs, config = plan.inputs, plan.inputs.config
    ready = inputs.wanted & plan.reach
    return sha256_of(
        code_digest(*ENGINE),
        row.name,
        digest(config.conditioning, config.tiles, config.transients),
        [row.f_low_hz, row.f_high_hz],
        [plan.start_ns, plan.end_ns],
        [ready.starts.tolist(), ready.ends.tolist()],
        [inputs.store.fingerprint(n, plan.reach) for n in recordings_of(row.name)],
        motion.key() if motion else None,
    )


def sha256_of(*values) -> str:
    """Give the sha256 of values that JSON can hold."""
    text = json.dumps(values, sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()
