"""A pytest plugin that writes how many tests passed, failed and were skipped, as JSON.

Loaded by run_tests.py with -p; it takes the file's name from the variable LABPLAN_TEST_COUNTS. A
test counts once, by the worst that happened to it: a failing teardown after a passing body is a
failure. A file that cannot be collected counts as one failure.
"""

import json
import os
from collections import Counter
from pathlib import Path

import pytest

WORST_FIRST = ("failed", "skipped", "passed")


class TestCounter:
    def __init__(self) -> None:
        self.outcomes: dict[str, str] = {}

    def record(self, name: str, outcome: str) -> None:
        earlier = self.outcomes.get(name, "passed")
        self.outcomes[name] = min(earlier, outcome, key=WORST_FIRST.index)

    def pytest_runtest_logreport(self, report: pytest.TestReport) -> None:
        self.record(report.nodeid, report.outcome)

    def pytest_collectreport(self, report: pytest.CollectReport) -> None:
        if report.outcome != "passed":
            self.record(report.nodeid, report.outcome)

    def pytest_sessionfinish(self) -> None:
        counts = Counter(self.outcomes.values())
        text = json.dumps({outcome: counts[outcome] for outcome in WORST_FIRST})
        Path(os.environ["LABPLAN_TEST_COUNTS"]).write_text(text, encoding="utf-8")


def pytest_configure(config: pytest.Config) -> None:
    config.pluginmanager.register(TestCounter(), "labplan-test-counter")
