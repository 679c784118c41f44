"""What holds for all tests."""

from __future__ import annotations

import pytest

from fieldmover.report.summary import STEP_SUMMARY


@pytest.fixture(autouse=True)
def _no_step_summary(monkeypatch):
    """A CI service that runs the tests shall not show the summaries of their jobs as its own."""
    monkeypatch.delenv(STEP_SUMMARY, raising=False)
