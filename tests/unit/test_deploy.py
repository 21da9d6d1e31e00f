"""The operator's page, the units, the containers and the proxy agree with the code."""

import configparser
import re
from pathlib import Path
from typing import Any

import pytest
import yaml
from django.core.management import get_commands

from labplan.base.outbox import QUEUES
from labplan.operations import programs

ROOT = Path(__file__).resolve().parents[2]
DEPLOY = ROOT / "deploy"
PAGE = (ROOT / "docs" / "operating.md").read_text(encoding="utf-8")
UNITS = sorted((DEPLOY / "systemd").glob("*.service"))
# whoever reads the environment
READERS = [*ROOT.glob("labplan/**/*.py"), DEPLOY / "gunicorn.conf.py"]
VARIABLE = r"(?:LABPLAN|DATABASE|REDIS|PROMETHEUS|FORWARDED)_[A-Z_]+"


def variables_of_the_page() -> set[str]:
    table = PAGE[PAGE.index("## Variables") : PAGE.index("## People and tokens")]
    return set(re.findall(rf"^\| `({VARIABLE})`", table, flags=re.M))


def test_every_variable_that_is_read_stands_in_the_one_table_and_no_other() -> None:
    read = {
        name
        for path in READERS
        for name in re.findall(rf'"({VARIABLE})"', path.read_text(encoding="utf-8"))
    }
    assert read == variables_of_the_page()


def test_what_the_deployment_sets_is_in_the_table() -> None:
    told = (DEPLOY / "labplan.env.example").read_text() + "".join(u.read_text() for u in UNITS)
    named = set(re.findall(rf"\b({VARIABLE})=", told))
    composed = compose()["x-labplan"]["environment"]
    assert named | set(composed) <= variables_of_the_page()


def compose() -> dict[str, Any]:
    loaded: dict[str, Any] = yaml.safe_load((DEPLOY / "compose.yaml").read_text())
    return loaded


@pytest.mark.parametrize("unit", UNITS, ids=lambda unit: unit.stem)
def test_a_unit_starts_what_there_is(unit: Path) -> None:
    read = configparser.ConfigParser(strict=False, interpolation=None)
    read.optionxform = str  # type: ignore[assignment, method-assign]
    read.read_string(unit.read_text())
    command = read["Service"]["ExecStart"]
    assert read["Service"]["EnvironmentFile"] == "/etc/labplan/labplan.env"
    assert unit.name in (DEPLOY / "systemd" / "labplan.target").read_text()
    if "manage.py" in command:
        assert command.split("manage.py ")[1].split()[0] in get_commands()
    if "celery" in command:
        assert "--app labplan.celery" in command
    if "gunicorn" in command:
        assert "--config deploy/gunicorn.conf.py" in command


def test_every_program_of_serve_has_a_unit_and_a_container() -> None:
    here = Path("/run")
    names = {
        program.name
        for program in (
            programs.web(here, processes=1), programs.waiting("", here, ""), programs.relay(),
            programs.worker(processes=1), programs.scheduler(here),
        )
    }  # fmt: skip
    assert {unit.stem.removeprefix("labplan-") for unit in UNITS} == names
    assert names <= set(compose()["services"])


def test_workers_listen_to_every_queue_wherever_they_are_started() -> None:
    worker_unit = (DEPLOY / "systemd" / "labplan-worker.service").read_text()
    for words in (
        " ".join(programs.worker(processes=1).arguments), worker_unit,
        " ".join(compose()["services"]["worker"]["command"]),
    ):  # fmt: skip
        [queues] = re.findall(r"--queues (\S+)", words)
        assert set(queues.split(",")) == set(QUEUES)


def test_the_proxy_keeps_the_metrics_inside_and_sends_who_waits_to_the_waiting_service() -> None:
    proxy = (DEPLOY / "nginx.conf").read_text()
    for address in ("/metrics", "/api/v1/metrics"):
        assert re.search(rf"location = {address}\s+{{ deny all; }}", proxy)
    [pattern] = re.findall(r'"~\*(.*?)"\s+labplan_waiting', proxy)
    route = re.compile(pattern.replace('\\"', '"'), re.IGNORECASE)
    for said in ("GET wait=5", "GET respond-async, wait=10", 'GET WAIT = "3"'):
        assert route.search(said), said
    for said in ("POST wait=5", "GET return=minimal", "GET "):
        assert not route.search(said), said
