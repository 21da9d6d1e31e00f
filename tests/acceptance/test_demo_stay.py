"""The demo that stays: Ctrl-C ends it, wherever the signal arrives."""

import os
import signal
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]


def test_ctrl_c_ends_the_demo_that_stays(tmp_path: Path) -> None:
    environment = {
        **{name: value for name, value in os.environ.items() if name != "DATABASE_URL"},
        "DJANGO_SETTINGS_MODULE": "labplan.settings.demo", "LABPLAN_DATA_DIR": str(tmp_path),
        "PYTHONUNBUFFERED": "1",
    }  # fmt: skip
    with subprocess.Popen(
        [sys.executable, "manage.py", "demo", "--stay"], cwd=ROOT, env=environment, text=True,
        stdout=subprocess.PIPE, stderr=subprocess.STDOUT, start_new_session=True,
    ) as demo:  # fmt: skip
        assert demo.stdout is not None
        for line in demo.stdout:
            if "TOKEN=" in line:
                break
        os.killpg(demo.pid, signal.SIGINT)
        assert demo.wait(timeout=60) == 0
        assert demo.stdout.read().endswith("Stopped.\n")
