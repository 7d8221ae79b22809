"""Behaviour of the whole test run."""

from __future__ import annotations

import os

import pytest


@pytest.hookimpl(hookwrapper=True)
def pytest_runtest_makereport(item, call):
    """Turn skips into failures where every tool is promised to be there."""
    outcome = yield
    report = outcome.get_result()
    if report.skipped and os.environ.get("LEARNCLOSURE_REQUIRE_TOOLS") == "1":
        report.outcome = "failed"
        report.longrepr = f"{item.nodeid} was skipped although every tool must be present"
