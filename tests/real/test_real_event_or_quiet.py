"""Real earthquakes and real quiet told apart by the tool's own features."""

import event_or_quiet
import pytest


@pytest.mark.slow
@pytest.mark.reference
def test_windows_of_unseen_records_are_sorted():
    right, total, confusion = event_or_quiet.score()
    assert total > 150
    # saying quiet always would be right in nine of ten
    assert right / total > 0.93
    assert confusion.loc["event", "event"] >= 8
    assert confusion.loc["quiet"].get("event", 0) <= 6
