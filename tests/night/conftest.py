"""Fixtures of the night's tests."""

import contextlib
from concurrent.futures import Executor, Future

import pytest


class Here(Executor):
    """An executor that runs each task at once, in this process."""

    def submit(self, fn, /, *args, **kwargs):
        """Run the task and give its finished future."""
        future = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


@pytest.fixture
def here(monkeypatch):
    """Run a night's tasks in this process; give the list of the jobs asked for."""
    asked = []

    @contextlib.contextmanager
    def make_pool(jobs):
        asked.append(jobs)
        yield Here()

    monkeypatch.setattr("dq.night.run.make_pool", make_pool)
    return asked
