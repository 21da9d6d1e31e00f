"""Runs the test suite on SQLite and on PostgreSQL, and ends with one line for both.

    python tools/run_tests.py [arguments for pytest]

Both run at the same time. SQLite's output is shown as it comes; PostgreSQL's is kept until then and
shown in one piece. Tests that need no database (marker "unit") run once, with SQLite.

DATABASE_URL may name a PostgreSQL to use; the tests make a database of their own in it. Without it
a server is started for the run and thrown away.
"""

import contextlib
import json
import os
import signal
import subprocess
import sys
import tempfile
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import IO

ROOT = Path(__file__).resolve().parents[1]
STOP_LIMIT_S = 5
NOTHING_COLLECTED = 5


@dataclass
class Pass:
    """The suite on one database."""

    name: str
    process: subprocess.Popen[bytes]
    counts_file: Path

    @property
    def exit_code(self) -> int:
        return self.process.wait()

    def counts(self) -> Counter[str]:
        """Outcomes of this pass; empty when pytest did not come to its end."""
        if not self.counts_file.exists():
            return Counter()
        return Counter(json.loads(self.counts_file.read_text(encoding="utf-8")))


@contextlib.contextmanager
def postgres_address() -> Iterator[str]:
    """The caller's PostgreSQL, else one of our own for as long as the block lasts."""
    given = os.environ.get("DATABASE_URL", "")
    if given.startswith(("postgres://", "postgresql://")):
        yield given
        return
    from tests.services.postgres import running_postgres

    with running_postgres() as address:
        yield address


def start_pass(
    name: str,
    folder: Path,
    pytest_arguments: list[str],
    database_url: str | None,
    output: IO[bytes] | None,
) -> Pass:
    """Start pytest; its output goes to the given file, or straight to ours."""
    counts_file = folder / f"{name}.json"
    environment = dict(os.environ, LABPLAN_TEST_COUNTS=str(counts_file))
    environment.pop("DATABASE_URL", None)
    if database_url is not None:
        environment["DATABASE_URL"] = database_url
    if sys.stdout.isatty() and output is not None:
        environment.setdefault("FORCE_COLOR", "1")
    process = subprocess.Popen(
        [sys.executable, "-m", "pytest", "-p", "tools.count_tests", *pytest_arguments],
        cwd=ROOT,
        env=environment,
        stdin=None if output is None else subprocess.DEVNULL,
        stdout=output,
        stderr=None if output is None else subprocess.STDOUT,
    )
    return Pass(name, process, counts_file)


def run_both(folder: Path, arguments: list[str]) -> list[Pass]:
    """Run the suite on both databases at once; shows SQLite's output, then PostgreSQL's."""
    passes: list[Pass] = []
    with postgres_address() as address, (folder / "output").open("w+b") as output:
        try:
            print("On SQLite:", flush=True)
            passes.append(start_pass("SQLite", folder, arguments, None, None))
            # Its own folder for "last failed", or the two runs would overwrite each other's.
            again = ["-m", "not unit", "-o", "cache_dir=.pytest_cache/postgresql", *arguments]
            passes.append(start_pass("PostgreSQL", folder, again, address, output))
            passes[0].process.wait()
            passes[1].process.wait()
        except SystemExit:  # told to end by SIGTERM, which unlike Ctrl-C has not reached these two
            for started in passes:
                started.process.terminate()
            raise
        finally:
            for started in passes:
                stop(started.process)
        print("On PostgreSQL:", flush=True)
        output.seek(0)
        sys.stdout.buffer.write(output.read())
        sys.stdout.flush()
    return passes


def stop(process: subprocess.Popen[bytes]) -> None:
    """End a pytest that still runs, leaving it time for its teardown.

    Ctrl-C reaches it from the terminal, so at first it is only waited for: a second interrupt would
    cut its teardown short.
    """
    for urge in (lambda: None, lambda: process.send_signal(signal.SIGINT), process.kill):
        urge()
        with contextlib.suppress(subprocess.TimeoutExpired):
            process.wait(timeout=STOP_LIMIT_S)
            return


def problem_of(run: Pass, nothing_is_fine: bool) -> str:
    """What went wrong with a pass beyond failing tests; empty when nothing did."""
    counts = run.counts()
    if run.exit_code == NOTHING_COLLECTED:
        return "" if nothing_is_fine else "no test was found"
    if run.exit_code != 0 and not counts["failed"]:
        return f"pytest ended with exit code {run.exit_code}"
    return ""


def closing_line(totals: Counter[str]) -> str:
    line = f"{totals['passed']} passed, {totals['failed']} failed"
    return line + (f", {totals['skipped']} skipped" if totals["skipped"] else "")


def report(passes: list[Pass], arguments_given: bool) -> int:
    """Print what both passes came to; returns the exit code."""
    totals: Counter[str] = Counter()
    found_any = any(run.exit_code != NOTHING_COLLECTED for run in passes)
    for run in passes:
        totals.update(run.counts())
        problem = problem_of(run, nothing_is_fine=arguments_given and found_any)
        if problem:
            print(f"{run.name}: {problem}, which counts as one failure.")
            totals["failed"] += 1
    print(closing_line(totals), flush=True)
    return 1 if totals["failed"] else 0


def main(arguments: list[str]) -> int:
    sys.path.insert(0, str(ROOT))  # started as a file, Python looks beside the file only
    from tests.services.postgres import PostgresUnavailableError

    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
    try:
        with tempfile.TemporaryDirectory(prefix="labplan-tests-") as folder:
            passes = run_both(Path(folder), arguments)
            return report(passes, arguments_given=bool(arguments))
    except PostgresUnavailableError as error:
        print(f"{error}\nNo test was run, which counts as one failure.")
        print(closing_line(Counter(failed=1)), flush=True)
        return 1
    except KeyboardInterrupt:
        print("Stopped by you.")
        return 130


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
