"""Counts of several processes, of dead ones, and of processes that have no place to count in."""

import os
import re
import signal
import subprocess
import sys
from pathlib import Path

import pytest
from prometheus_client.mmap_dict import MmapedDict
from prometheus_client.parser import text_string_to_metric_families
from prometheus_client.samples import Sample

from labplan.base import metrics, metrics_files

ROOT = Path(__file__).resolve().parents[2]
COUNT = """
import sys
from labplan.base import metrics
for _ in range(int(sys.argv[1])):
    metrics.count_request("procedure-list", "GET", 200, 0.03)
print("counted", flush=True)
sys.stdin.read()
"""
SHOW = """
from prometheus_client import generate_latest
from labplan.base import metrics
print(generate_latest(metrics.registry_of_all()).decode())
"""
REQUESTS = 'labplan_http_requests_total{method="GET",route="procedure-list",status="200"}'


def run(program: str, *arguments: str, folder: Path | str | None) -> subprocess.Popen[str]:
    environment = {k: v for k, v in os.environ.items() if k != metrics.FOLDER_VARIABLE}
    if folder is not None:
        environment[metrics.FOLDER_VARIABLE] = str(folder)
    return subprocess.Popen(
        [sys.executable, "-c", program, *arguments], cwd=ROOT, env=environment, text=True,
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
    )  # fmt: skip


def counting(times: int, folder: Path | str | None) -> subprocess.Popen[str]:
    """A process that has counted and is still there."""
    process = run(COUNT, str(times), folder=folder)
    assert process.stdout is not None
    assert process.stdout.readline() == "counted\n"
    return process


def kill(process: subprocess.Popen[str]) -> None:
    process.send_signal(signal.SIGKILL)
    process.communicate(timeout=20)
    assert process.returncode == -signal.SIGKILL


def shown(folder: Path | str | None) -> dict[str, float]:
    """The series of a scrape in yet another process."""
    text, trouble = run(SHOW, folder=folder).communicate(timeout=20)
    families = list(text_string_to_metric_families(text))
    assert families, trouble
    return {series(sample): sample.value for family in families for sample in family.samples}


def series(sample: Sample) -> str:
    labels = ",".join(f'{name}="{value}"' for name, value in sorted(sample.labels.items()))
    return f"{sample.name}{{{labels}}}"


def test_two_processes_are_added_up_while_they_live_and_when_they_are_dead(tmp_path: Path) -> None:
    first, second = counting(3, tmp_path), counting(4, tmp_path)
    both_alive = shown(tmp_path)
    assert both_alive[REQUESTS] == 7
    kill(first)
    one_dead = shown(tmp_path)
    assert one_dead[REQUESTS] == 7
    name = metrics_files.name_of_this_process().rpartition("-")[0]
    assert {path.name for path in tmp_path.iterdir()} == {
        f"counter_{name}-folded.db", f"histogram_{name}-folded.db",
        f"counter_{name}-{second.pid}.db", f"histogram_{name}-{second.pid}.db",
    }  # fmt: skip
    kill(second)
    both_dead = shown(tmp_path)
    assert both_alive == one_dead == both_dead
    assert {path.name for path in tmp_path.glob("*.db")} == {
        f"counter_{name}-folded.db", f"histogram_{name}-folded.db",
    }  # fmt: skip


def test_a_histogram_keeps_its_buckets_when_its_process_dies(tmp_path: Path) -> None:
    kill(counting(5, tmp_path))
    found = shown(tmp_path)
    name = "labplan_http_request_duration_seconds"
    labels = 'method="GET",route="procedure-list"'
    buckets = {
        bound: found[f'{name}_bucket{{le="{bound}",{labels}}}']
        for bound in ("0.025", "0.05", "10.0", "+Inf")
    }
    assert buckets == {"0.025": 0, "0.05": 5, "10.0": 5, "+Inf": 5}
    assert found[f"{name}_count{{{labels}}}"] == 5
    assert found[f"{name}_sum{{{labels}}}"] == pytest.approx(0.15)


def test_files_of_the_living_and_of_other_containers_are_left_alone(tmp_path: Path) -> None:
    space = metrics_files.name_of_this_process().rpartition("-")[0]
    other = "ns1" if space != "ns1" else "ns2"
    for name in (f"counter_{space}-{os.getpid()}.db", f"counter_{other}-999999999.db"):
        MmapedDict(str(tmp_path / name)).close()
    before = sorted(tmp_path.iterdir())
    assert metrics_files.fold_dead(tmp_path) == 0
    assert sorted(tmp_path.iterdir()) == before


def test_a_process_that_died_before_its_first_count_is_folded_too(tmp_path: Path) -> None:
    space = metrics_files.name_of_this_process().rpartition("-")[0]
    (tmp_path / f"counter_{space}-999999998.db").touch()
    (tmp_path / f"counter_{space}-999999999.db").write_bytes(b"\xff\xff\x00\x00 half a file")
    assert metrics_files.fold_dead(tmp_path) == 2
    assert list(tmp_path.iterdir()) == []
    assert shown_count_after_folding_twice(tmp_path) == 2


def shown_count_after_folding_twice(folder: Path) -> float:
    kill(counting(2, folder))
    assert metrics_files.fold_dead(folder) == 2
    assert metrics_files.fold_dead(folder) == 0
    return shown(folder)[REQUESTS]


def test_a_folder_is_made_when_it_is_not_there(tmp_path: Path) -> None:
    folder = tmp_path / "run" / "metrics"
    kill(counting(2, folder))
    assert shown(folder)[REQUESTS] == 2


@pytest.mark.parametrize("place", ["a-file/metrics", "a-file"])
def test_a_folder_that_cannot_be_used_is_said_and_each_counts_for_itself(
    place: str, tmp_path: Path
) -> None:
    (tmp_path / "a-file").write_text("in the way")
    process = counting(2, tmp_path / place)
    _, trouble = process.communicate(timeout=20)
    assert process.returncode == 0
    assert "the folder of PROMETHEUS_MULTIPROC_DIR cannot be used" in trouble
    assert "Traceback" not in trouble
    program = COUNT.replace("sys.stdin.read()", "") + SHOW
    text, _ = run(program, "2", folder=tmp_path / place).communicate(timeout=20)
    assert f"{REQUESTS} 2.0" in text


def test_without_a_folder_a_process_counts_for_itself() -> None:
    for folder in (None, ""):
        program = COUNT.replace("sys.stdin.read()", "") + SHOW
        text, trouble = run(program, "2", folder=folder).communicate(timeout=20)
        assert f"{REQUESTS} 2.0" in text
        assert trouble == ""


VANISHES = """
import os, shutil
from labplan.base import metrics
metrics.count_request("a", "GET", 200, 0.1)
shutil.rmtree(metrics.FOLDER)
if os.fork():
    os.wait()
for _ in range(3):
    metrics.count_request("a", "GET", 200, 0.1)
metrics.fold_dead()
print(len(list(metrics.registry_of_all().collect())), flush=True)
"""


def test_a_folder_that_vanishes_stops_no_work(tmp_path: Path) -> None:
    """The parent has its files open still, the child would have to make new ones."""
    process = run(VANISHES, folder=tmp_path / "gone")
    text, trouble = process.communicate(timeout=20)
    assert (process.returncode, text) == (0, "0\n0\n")
    said = [re.sub(r": .*", "", line) for line in trouble.replace("metrics: ", "").splitlines()]
    assert set(said) == {"not counted", "no counts"}
    assert said.count("no counts") == 2


def test_a_process_that_is_just_making_its_file_spoils_no_scrape(tmp_path: Path) -> None:
    kill(counting(2, tmp_path))
    space = metrics_files.name_of_this_process()
    (tmp_path / f"counter_{space}.db").touch()
    assert shown(tmp_path)[REQUESTS] == 2


def test_a_file_that_cannot_be_read_spoils_no_scrape(tmp_path: Path) -> None:
    kill(counting(1, tmp_path))
    (tmp_path / "counter_ns1-1.db").write_bytes(b"\xff\xff\x00\x00 no such file was ever written")
    text, trouble = run(SHOW, folder=tmp_path).communicate(timeout=20)
    assert text.strip() == ""
    assert trouble.startswith("metrics: no counts: ")
    assert "Traceback" not in trouble


# Children take over from the dead, count and die, three at a time, while the parent looks on.
DYING = """
import os, signal
from labplan.base import metrics

def total():
    families = metrics.registry_of_all().collect()
    samples = [sample for family in families for sample in family.samples]
    return sum(s.value for s in samples if s.name == "labplan_http_requests_total")

def count_and_die(times):
    metrics.fold_dead()
    for _ in range(times):
        metrics.count_request("a", "GET", 200, 0.1)
    os.kill(os.getpid(), signal.SIGKILL)

seen, begun, alive = [0.0], 0, set()
while begun < 120 or alive:
    while begun < 120 and len(alive) < 3:
        begun += 1
        child = os.fork()
        if not child:
            count_and_die(begun)
        alive.add(child)
    seen.append(total())
    ended, _ = os.waitpid(-1, os.WNOHANG)
    alive.discard(ended)
print(seen == sorted(seen), int(total()), len(os.listdir(metrics.FOLDER)))
"""


def test_no_look_sees_the_sums_fall_while_processes_die(tmp_path: Path) -> None:
    text, trouble = run(DYING, folder=tmp_path).communicate(timeout=60)
    assert (text, trouble) == (f"True {sum(range(121))} 2\n", "")
