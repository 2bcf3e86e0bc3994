"""A stand-in for the family sorter, for tests of what surrounds it."""

import sys
import types

import pandas as pd


def install(monkeypatch, sort_transients) -> None:
    """Put a module in the sorter's place that sorts as told and sees nothing odd."""
    module = types.ModuleType("dq.families")
    module.UNKNOWN = "unknown"
    module.sort_transients = sort_transients
    module.load_model = lambda path, features=None: (
        types.SimpleNamespace(reject=0.025),
        {},
    )
    module.drift = lambda features, sorter: None
    module.drift_text = lambda table, **told: ""
    columns = ["group", "count", "per_hour", "typical", "nearest"]
    module.group_unknowns = lambda X, sorter, live_time_s: types.SimpleNamespace(
        text=f"{len(X)} unknowns", table=pd.DataFrame(columns=columns)
    )
    monkeypatch.setitem(sys.modules, "dq.families", module)
