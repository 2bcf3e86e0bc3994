"""Channels analysed side by side in worker processes.

One task is one channel. A worker writes the channel's state file itself and hands back
only how it went, so the parent's memory does not grow with the night. Whatever goes
wrong inside one channel costs that channel; a full disk or a dead worker ends the run,
and the same command resumes.
"""

from __future__ import annotations

import contextlib
import logging
import multiprocessing
import os
import signal
import threading
from collections.abc import Iterable, Iterator
from concurrent.futures import (
    FIRST_COMPLETED,
    Executor,
    Future,
    ProcessPoolExecutor,
    wait,
)
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from dq.config import Config
from dq.errors import DqError, OutputError
from dq.night.folder import LOST
from dq.segments import Segments

if TYPE_CHECKING:
    from dq.night.motion_plan import MotionPlan
    from dq.night.products import ProductData
    from dq.store import ChannelData

log = logging.getLogger(__name__)

#: Variables that hold the numerical libraries of a worker to one thread: the channels
#: are the parallelism, and sums must not depend on a thread count.
_ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


@dataclass(frozen=True)
class Task:
    """One channel to analyse, with everything a worker needs."""

    data: ChannelData | ProductData
    config: Config
    ready: Segments
    start_ns: int
    end_ns: int
    f_low_hz: float | None
    f_high_hz: float | None
    key: str
    state: Path
    weight: float
    motion: MotionPlan | None = None

    @property
    def channel(self) -> str:
        """The channel's name."""
        return self.data.name


@dataclass(frozen=True)
class Outcome:
    """How one task went: ``error`` is empty when its state file stands."""

    channel: str
    error: str = ""


def run_task(task: Task) -> Outcome:
    """Analyse one channel and write its state file.

    Raises
    ------
    OutputError
        The state file cannot be written, or a file system went away.
    """
    from dq.night.state import save_state
    from dq.night.usable import usable_result

    try:
        result = usable_result(
            task.data,
            ready=task.ready,
            start_ns=task.start_ns,
            end_ns=task.end_ns,
            config=task.config,
            f_low_hz=task.f_low_hz,
            f_high_hz=task.f_high_hz,
            motion=task.motion,
        )
    except DqError as error:
        return Outcome(task.channel, _line(str(error)))
    except OSError as error:
        if error.errno in LOST:
            raise OutputError(
                f"file system lost while reading {task.channel!r}: {error}; mount it "
                "again and run the same command"
            ) from error
        return Outcome(task.channel, _line(f"cannot be read: {error}"))
    except Exception as error:
        return Outcome(
            task.channel, _line(f"unexpected {type(error).__name__}: {error}")
        )
    save_state(task.state, task.key, result)
    return Outcome(task.channel)


def _line(text: str) -> str:
    return " ".join(text.split())


@contextlib.contextmanager
def make_pool(jobs: int) -> Iterator[Executor]:
    """Start worker processes; they end with the block, or with this process.

    Parameters
    ----------
    jobs : int
        Number of workers. One worker is a process too: it meets the same conditions
        as several, so the results are the same.
    """
    before = {name: os.environ.get(name) for name in _ONE_THREAD}
    # when workers die, the pool's own thread may trip over the table of workers
    hook, threading.excepthook = threading.excepthook, _log_thread_error
    os.environ.update(dict.fromkeys(_ONE_THREAD, "1"))
    pool = ProcessPoolExecutor(
        jobs,
        mp_context=multiprocessing.get_context("spawn"),
        initializer=_begin_worker,
    )
    try:
        yield pool
        pool.shutdown()
    except BaseException:
        _end(pool)
        raise
    finally:
        threading.excepthook = hook
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def _end(pool: Executor) -> None:
    """End the workers now, and wait for the thread that manages them.

    Left to itself, the thread closes its pipe while the interpreter still writes to it
    on the way out, and a traceback comes behind the one line that the user should read.
    """
    for child in multiprocessing.active_children():
        child.terminate()
        child.join()
    pool.shutdown(wait=True, cancel_futures=True)


def _log_thread_error(error: threading.ExceptHookArgs) -> None:
    log.debug("thread %s: %s", error.thread, error.exc_value)


@contextlib.contextmanager
def _uninterrupted() -> Iterator[None]:
    """Hold Ctrl-C back while a worker may be starting.

    The worker inherits the block for good: Ctrl-C reaches the whole process group, and
    what ends is for the parent to decide. In the parent another thread may still take
    the signal, so its handler waits too.
    """
    interrupts: list[int] = []
    in_main = threading.current_thread() is threading.main_thread()
    handler = signal.getsignal(signal.SIGINT)
    if in_main:
        signal.signal(signal.SIGINT, lambda number, frame: interrupts.append(number))
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)
        if in_main:
            signal.signal(signal.SIGINT, handler)
    if interrupts:
        raise KeyboardInterrupt


def _begin_worker() -> None:
    parent = multiprocessing.parent_process()
    threading.Thread(target=_end_with, args=(parent,), daemon=True).start()


def _end_with(parent) -> None:
    # A killed parent leaves workers waiting for ever on a queue that they hold open.
    parent.join()
    os._exit(1)


def run_tasks(tasks: Iterable[Task], pool: Executor, jobs: int) -> Iterator[Outcome]:
    """Run the tasks in their order; give each outcome as it comes.

    Few tasks wait in the pool at a time, so a stop does not find thousands queued.

    Raises
    ------
    OutputError
        A worker was killed or could not write.
    """
    queue = iter(tasks)
    pending: set[Future[Outcome]] = set()
    try:
        while True:
            for task in queue:
                with _uninterrupted():
                    pending.add(pool.submit(run_task, task))
                if len(pending) >= 2 * jobs:
                    break
            if not pending:
                return
            done, pending = wait(pending, return_when=FIRST_COMPLETED)
            for future in done:
                yield future.result()
    except BrokenProcessPool as error:
        raise OutputError(
            "a worker process was killed (out of memory, or by hand); run the same "
            "command to resume, with fewer --jobs if memory was short"
        ) from error
