"""The closing line of `make test` counts every test once, and is never green by accident."""

import json
import os
import subprocess
import sys
from collections import Counter
from pathlib import Path

import pytest

from tools.run_tests import NOTHING_COLLECTED, Pass, closing_line, report

ROOT = Path(__file__).parents[2]
SUITE = """
import pytest

@pytest.fixture
def breaks_after():
    yield
    raise RuntimeError("teardown")

def test_passes(): pass
def test_fails(): assert 1 == 2
def test_passes_but_its_teardown_fails(breaks_after): pass
def test_fails_and_its_teardown_too(breaks_after): assert 1 == 2
def test_is_skipped(): pytest.skip("no reason")
@pytest.mark.parametrize("number", [1, 2])
def test_twice(number): pass
"""


def counts_of(folder, suite):
    """What the plugin counts when pytest runs this suite."""
    (folder / "test_suite.py").write_text(suite)
    counts = folder / "counts.json"
    subprocess.run(
        [
            *(sys.executable, "-m", "pytest", "-p", "tools.count_tests"),
            *("-p", "no:django", "-p", "no:cacheprovider", "-c", os.devnull),
            *(f"--rootdir={folder}", str(folder)),
        ],
        cwd=ROOT,
        env=dict(os.environ, LABPLAN_TEST_COUNTS=str(counts)),
        stdout=subprocess.DEVNULL,
        check=False,
    )
    return json.loads(counts.read_text())


def test_each_test_counts_once_by_its_worst_outcome(tmp_path):
    assert counts_of(tmp_path, SUITE) == {"passed": 3, "failed": 3, "skipped": 1}


def test_a_file_that_cannot_be_read_is_a_failure(tmp_path):
    assert counts_of(tmp_path, "import no_such_module") == {"passed": 0, "failed": 1, "skipped": 0}


@pytest.mark.parametrize(
    ("counts", "line"),
    [
        ({"passed": 3, "failed": 0, "skipped": 0}, "3 passed, 0 failed"),
        ({"passed": 3, "failed": 1, "skipped": 2}, "3 passed, 1 failed, 2 skipped"),
    ],
)
def test_closing_line(counts, line):
    assert closing_line(Counter(counts)) == line


class Ended:
    """A process that has ended with this exit code."""

    def __init__(self, exit_code):
        self.exit_code = exit_code

    def wait(self):
        return self.exit_code


@pytest.mark.parametrize(
    ("runs", "arguments_given", "outcome"),
    [
        ([(0, 5), (0, 3)], False, ("8 passed, 0 failed", 0)),
        ([(0, 5), (NOTHING_COLLECTED, 0)], True, ("5 passed, 0 failed", 0)),
        ([(0, 5), (NOTHING_COLLECTED, 0)], False, ("5 passed, 1 failed", 1)),
        ([(NOTHING_COLLECTED, 0), (NOTHING_COLLECTED, 0)], True, ("0 passed, 2 failed", 1)),
        ([(0, 5), (-11, None)], False, ("5 passed, 1 failed", 1)),
        ([(3, 5), (0, 3)], False, ("8 passed, 1 failed", 1)),
    ],
)
def test_the_report_is_green_only_when_both_passes_came_to_their_end(
    capsys, tmp_path, runs, arguments_given, outcome
):
    passes = []
    for number, (code, passed) in enumerate(runs):
        file = tmp_path / f"{number}.json"
        if passed is not None:
            file.write_text(json.dumps({"passed": passed, "failed": 0, "skipped": 0}))
        passes.append(Pass("Database", Ended(code), file))
    exit_code = report(passes, arguments_given)
    assert (capsys.readouterr().out.splitlines()[-1], exit_code) == outcome
