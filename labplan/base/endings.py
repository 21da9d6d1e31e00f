"""How processes end: with the one that started them, and within a few seconds.

As a program (`python endings.py PROGRAM [ARGUMENTS]`) it becomes PROGRAM, tied to its parent.
"""

import contextlib
import ctypes
import os
import signal
import subprocess
import sys
import threading
from collections.abc import Iterator, Sequence
from pathlib import Path

PATIENCE_S = 10.0
_PR_SET_PDEATHSIG = 1


def end_with_parent(how: signal.Signals) -> None:
    """Let the kernel signal this process when its parent dies (Linux; elsewhere it stays)."""
    if sys.platform == "linux":
        ctypes.CDLL(None, use_errno=True).prctl(_PR_SET_PDEATHSIG, how)


def tied(arguments: Sequence[str]) -> list[str]:
    """The same command, ended by SIGTERM when the thread that starts it ends."""
    return [sys.executable, "-I", "-S", str(Path(__file__).resolve()), *arguments]


def end_process(process: subprocess.Popen[bytes], *, patience_s: float = PATIENCE_S) -> None:
    """Ask a process to end, wait, and kill it if it does not."""
    if process.poll() is None:
        process.terminate()
        try:
            process.wait(timeout=patience_s)
        except subprocess.TimeoutExpired:
            process.kill()
    process.wait()


@contextlib.contextmanager
def asked_to_stop_by_signals(event: threading.Event) -> Iterator[None]:
    """Ctrl-C and SIGTERM set the event instead of breaking off.

    Wait for it in short pieces: a signal may reach another thread than the one that waits.
    """
    before = {
        number: signal.signal(number, lambda *_: event.set())
        for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
    }
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


if __name__ == "__main__":
    end_with_parent(signal.SIGTERM)
    os.execvp(sys.argv[1], sys.argv[1:])
