"""Runs every check on the source, a line each; shows the output of those that fail.

python tools/run_checks.py
"""

import os
import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
PROGRAMS = Path(sys.executable).parent
PYTHON = sys.executable
CHECKS = {
    "ruff check": [PYTHON, "-m", "ruff", "check", "."],
    "ruff format": [PYTHON, "-m", "ruff", "format", "--check", "."],
    "types (mypy)": [PYTHON, "-m", "mypy"],
    "imports (lint-imports)": [str(PROGRAMS / "lint-imports")],
    "migrations are complete": [PYTHON, "manage.py", "makemigrations", "--check", "--dry-run"],
    "OpenAPI file is current, no warnings": [
        PYTHON,
        str(Path("tools", "make_openapi.py")),
        "--check",
    ],
    "nothing of this machine in the tree": [PYTHON, str(Path("tools", "check_tree.py"))],
}


def run_check(command: list[str]) -> tuple[bool, str]:
    """Run one check; (whether it passed, what it said)."""
    environment = dict(os.environ, DJANGO_SETTINGS_MODULE="labplan.settings.test")
    environment.pop("DATABASE_URL", None)  # the checks need no server
    ended = subprocess.run(
        command,
        cwd=ROOT,
        env=environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        errors="replace",
        check=False,
    )
    return ended.returncode == 0, ended.stdout


def main() -> int:
    failed = []
    for heading, command in CHECKS.items():
        started = time.monotonic()
        passed, said = run_check(command)
        word = "ok" if passed else "FAILED"
        print(f"{heading:<37} {word} ({time.monotonic() - started:.1f} s)", flush=True)
        if not passed:
            failed.append(heading)
            print(said.rstrip(), flush=True)
    if failed:
        print(f"{len(failed)} of {len(CHECKS)} checks failed: {', '.join(failed)}")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
