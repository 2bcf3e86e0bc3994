"""Report: the page for people, and the answer about one time."""

from dq.report.explain import explain
from dq.report.page import write_page

__all__ = ["explain", "write_page"]
