"""Stops the test server in a folder and deletes the folder, once standard input closes.

Started by postgres.py as `python -I postgres_watchdog.py FOLDER`. Standard input is a pipe that
only the process using the server holds open, so it closes however that process ends, SIGKILL
included. Signals go to the server itself, so that this needs none of PostgreSQL's programs: they
lie in the folder that is about to go.
"""

import os
import shutil
import signal
import sys
import time
from pathlib import Path

PATIENCE_S = 10
STEP_S = 0.02
# PostgreSQL's words for "stop": end the sessions; then without tidying up; then the hard way.
STOP_SIGNALS = (signal.SIGINT, signal.SIGQUIT, signal.SIGKILL)


def server_process(folder: Path) -> int | None:
    """The server's process number, from the file it keeps in its data folder while it runs."""
    try:
        return int((folder / "data" / "postmaster.pid").read_text().split("\n", 1)[0])
    except (FileNotFoundError, ValueError):
        return None


def is_running(folder: Path, process: int) -> bool:
    """The server takes its file away when it ends; a killed one leaves it but has no process."""
    if server_process(folder) != process:
        return False
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    return True


def stop_server(folder: Path) -> None:
    process = server_process(folder)
    for stop_signal in STOP_SIGNALS:
        if process is None or not is_running(folder, process):
            return
        os.kill(process, stop_signal)
        give_up = time.monotonic() + PATIENCE_S
        while is_running(folder, process) and time.monotonic() < give_up:
            time.sleep(STEP_S)


def remove(folder: Path) -> None:
    """Delete the folder, again while something still writes there: a killed test run can leave
    initdb or a starting server behind, and they end once their files are gone."""
    give_up = time.monotonic() + PATIENCE_S
    while folder.exists() and time.monotonic() < give_up:
        stop_server(folder)
        shutil.rmtree(folder, ignore_errors=True)
        time.sleep(STEP_S)


def main(folder: Path) -> None:
    sys.stdin.buffer.read()
    remove(folder)


if __name__ == "__main__":
    main(Path(sys.argv[1]))
