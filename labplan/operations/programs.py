"""The programs that make up a running labplan, as `make serve` starts them on one machine."""

import os
import sys
from pathlib import Path

from labplan.operations.supervisor import Program

ROOT = Path(__file__).resolve().parents[2]
QUEUES = "procedures,campaigns,documents,housekeeping"


def web(socket: Path, *, processes: int) -> Program:
    return Program(
        "web",
        [
            sys.executable, "-m", "gunicorn", "--config", str(ROOT / "deploy" / "gunicorn.conf.py"),
            "labplan.wsgi",
        ],
        {
            "LABPLAN_BIND": f"unix:{socket}", "LABPLAN_WEB_WORKERS": str(processes),
            # the waiting service, which stands before it
            "LABPLAN_PROXIES": os.environ.get("LABPLAN_PROXIES") or "1",
        },
    )  # fmt: skip


def waiting(listen: str, web_socket: Path, broker: str) -> Program:
    """The front door: it passes everything on to the web service, and holds whoever waits."""
    return Program(
        "waiting",
        [
            sys.executable, "-m", "labplan.operations.waiting", "--listen", listen,
            "--web", f"unix:{web_socket}", "--broker", broker,
        ],
    )  # fmt: skip


def relay() -> Program:
    return Program("relay", [sys.executable, str(ROOT / "manage.py"), "outbox_relay"])


def worker(*, processes: int, app: str = "labplan.celery") -> Program:
    return Program(
        "worker",
        [
            sys.executable, "-m", "celery", "--quiet", "--app", app, "worker",
            "--pool", "prefork", "--concurrency", str(processes), "--queues", QUEUES,
            "--without-gossip", "--without-mingle", "--loglevel", "INFO",
        ],
    )  # fmt: skip


def scheduler(folder: Path) -> Program:
    return Program(
        "scheduler",
        [
            sys.executable, "-m", "celery", "--quiet", "--app", "labplan.celery", "beat",
            "--schedule", str(folder / "schedule"), "--pidfile", "", "--loglevel", "INFO",
        ],
    )  # fmt: skip


def default_processes() -> int:
    """One worker a core, at least one; the web takes little beside planning."""
    return max(1, os.cpu_count() or 1)
