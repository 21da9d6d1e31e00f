"""What a worker's child is held to, in a process of its own."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
EAT = """
import resource
from labplan.base import worker
worker.prepare_child()
assert resource.getrlimit(resource.RLIMIT_AS)[0] == worker.CHILD_ADDRESS_SPACE
try:
    bytearray(worker.CHILD_ADDRESS_SPACE)
except MemoryError:
    print("no more")
"""


@pytest.mark.skipif(sys.platform != "linux", reason="only Linux holds to the limit")
def test_a_child_gets_no_more_memory_than_its_ceiling() -> None:
    environment = {**os.environ, "DJANGO_SETTINGS_MODULE": "labplan.settings.test"}
    ended = subprocess.run(
        [sys.executable, "-c", "import django; django.setup()" + EAT], cwd=ROOT, env=environment,
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert (ended.stdout, ended.returncode) == ("no more\n", 0), ended.stderr
