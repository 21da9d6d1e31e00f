"""Random commands from several processes that are killed as they go, replayed and compared.

LABPLAN_SOAK=1 runs a million commands; LABPLAN_SEED repeats a run's commands (how the
processes interleave is up to the machine).
"""

import json
import os
import secrets
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from inventory.models import Place
from tests.db.bench import database_address, make_shelf
from tests.simulation import replay

ROOT = Path(__file__).resolve().parents[2]
IS_SOAK = os.environ.get("LABPLAN_SOAK") == "1"
COMMANDS = int(os.environ.get("LABPLAN_SIMULATION_COMMANDS") or ("1000000" if IS_SOAK else "10000"))
WORKERS = 4
BOTTLES = 12
# a process is killed after about so many commands of all
KILL_EVERY = 2_000 if IS_SOAK else 200
# a bound for a machine that hangs, not a measurement
LIMIT_S = 24 * 3600 if IS_SOAK else 600


def run_nursery(folder: Path, seed: int) -> dict[str, Any]:
    environment = {
        **os.environ,
        "DATABASE_URL": database_address(),
        "DJANGO_SETTINGS_MODULE": "labplan.settings.test",
    }
    ended = subprocess.run(
        [sys.executable, "-m", "tests.simulation.nursery", str(folder), str(seed), str(WORKERS),
         str(COMMANDS // WORKERS), str(KILL_EVERY), str(LIMIT_S)],
        cwd=ROOT, env=environment, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert ended.returncode == 0, ended.stdout[-2000:] + ended.stderr[-4000:]
    said: dict[str, Any] = json.loads(ended.stdout.splitlines()[-1])
    return said


@pytest.mark.django_db(transaction=True)
def test_the_stock_is_what_the_model_says(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    seed = int(os.environ.get("LABPLAN_SEED") or secrets.randbelow(10**9))
    make_shelf(**{f"B{number:02d}": 5_000_000 for number in range(BOTTLES)})
    Place.objects.create(code="S2", name="Another shelf")
    told = f"seed {seed}: set LABPLAN_SEED={seed} to draw the same commands"
    try:
        said = run_nursery(tmp_path, seed)
        found = replay.check(tmp_path)
    except Exception as error:
        raise AssertionError(f"{told}\n{error}") from error
    assert found["commands"] == COMMANDS // WORKERS * WORKERS, told
    assert found["written"] > COMMANDS // 3, told
    if COMMANDS >= 10_000:  # or nothing was shown
        assert said["kills"] > 0, told
        assert found["holds cancelled"] > 0, told
        assert found["retried"] > 0, told
    with capsys.disabled():
        print(f"\nsimulation, seed {seed}: {found | said}")
