"""Behaviour of the whole test run."""

from __future__ import annotations

import os

import pytest

from ensemble_files import QUICK, run_command, write_members, write_study


@pytest.fixture(scope="session")
def finished(tmp_path_factory):
    """Run a study over two training regions and a held-out one, once for all tests."""
    folder = tmp_path_factory.mktemp("whole")
    for number, name in enumerate(("north", "south", "west")):
        write_members(folder / name, members=5, rows=16, columns=20, seed=number)
    study = write_study(folder, "north", "south", "west", west="test", extra=QUICK)
    assert run_command("run", study) == 0
    return folder


@pytest.hookimpl(hookwrapper=True)
def pytest_runtest_makereport(item, call):
    """Turn skips into failures where every tool is promised to be there."""
    outcome = yield
    report = outcome.get_result()
    if report.skipped and os.environ.get("LEARNCLOSURE_REQUIRE_TOOLS") == "1":
        report.outcome = "failed"
        report.longrepr = f"{item.nodeid} was skipped although every tool must be present"
