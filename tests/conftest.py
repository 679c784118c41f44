"""What holds for all tests."""

from __future__ import annotations

import pytest

from fieldmover.report.summary import STEP_SUMMARY


@pytest.fixture(autouse=True)
def _no_step_summary(monkeypatch):
    """A CI service that runs the tests shall not show the summaries of their jobs as its own."""
    monkeypatch.delenv(STEP_SUMMARY, raising=False)


@pytest.fixture
def no_pictures(monkeypatch):
    """Jobs without their pictures, which cost more than small fields; other tests look at these."""
    monkeypatch.setattr("fieldmover.jobs.run.pictures", lambda *given: [])


@pytest.fixture
def pictures(no_pictures, monkeypatch):
    """With its pictures, for one test of many without."""
    from fieldmover.report.figures import pictures

    monkeypatch.setattr("fieldmover.jobs.run.pictures", pictures)
