"""The operator's commands: what they refuse in one sentence, and what they make."""

import json
import os
import subprocess
import sys
from datetime import timedelta
from io import StringIO
from pathlib import Path
from typing import Any

import pytest
from django.core.management import CommandError, call_command
from django.db import OperationalError

from labplan.base import clock
from labplan.base.commands import LabCommand, checked_code, checked_text
from labplan.base.models import ApiToken, Event, Membership, Person
from labplan.settings.environment import known_time_zone
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

ROOT = Path(__file__).resolve().parents[2]
DEFAULT_SETTINGS = "labplan.settings.default"


@pytest.mark.parametrize("code", ["", "a b", "x" * 25, "-A", "KIM\u202e", "<b>"])
def test_a_code_that_could_not_stand_in_a_record_is_refused(code: str) -> None:
    with pytest.raises(CommandError, match="is no code"):
        checked_code(code)


@pytest.mark.parametrize("text", ["", "  ", "x" * 121, "a\x1bb", "a\u202eb"])
def test_a_name_that_cannot_be_printed_is_refused(text: str) -> None:
    with pytest.raises(CommandError, match="printable"):
        checked_text(text, 120)


def test_people_and_projects_are_made_and_found_again(transactional_db: None) -> None:
    call_command("create_person", "KIM", name="Kim Doe", administrator=True)
    call_command("create_project", "PROBES-1", title="Probes", member=["KIM:lead"])
    assert Person.objects.get(code="KIM").site_role == "administrator"
    assert Membership.objects.get(person__code="KIM").role == "lead"
    with pytest.raises(CommandError, match="already"):
        call_command("create_person", "KIM", name="Kim Doe")


def test_a_token_lives_between_a_day_and_ten_years(lab: Laboratory) -> None:
    for days in (0, -1, 3651):
        with pytest.raises(CommandError, match="1 to 3650 days"):
            call_command("create_token", "MIRA", name="x", days=days)
    call_command("create_token", "MIRA", name="x", days=2)
    assert ApiToken.objects.get(name="x").expires_at == clock.now() + timedelta(days=2)


def test_a_database_without_tables_is_said_in_one_sentence() -> None:
    class Command(LabCommand):
        requires_system_checks: list[str] = []

        def handle(self, *args: object, **options: object) -> None:
            raise OperationalError("no such table: inventory_bottle")

    with pytest.raises(CommandError, match=r"run 'manage\.py migrate' first"):
        call_command(Command())


def test_a_time_zone_that_does_not_exist_is_refused_at_start() -> None:
    from django.core.exceptions import ImproperlyConfigured

    assert known_time_zone("Europe/Berlin") == "Europe/Berlin"
    for name in ("Mars/Base", "../etc", "Europe/Berlin "):
        with pytest.raises(ImproperlyConfigured, match="LABPLAN_TIME_ZONE"):
            known_time_zone(name)


def test_a_folder_that_cannot_be_written_is_refused_at_start(tmp_path: Path) -> None:
    from django.core.exceptions import ImproperlyConfigured

    from labplan.settings.secret import read_or_make_secret_key

    blocked = tmp_path / "file"
    blocked.write_text("not a folder")
    with pytest.raises(ImproperlyConfigured, match="LABPLAN_DATA_DIR"):
        read_or_make_secret_key(blocked / "data")


def _said(command: str, *arguments: str) -> str:
    said = StringIO()
    call_command(command, *arguments, stdout=said)
    return said.getvalue()


def test_a_member_is_added_changed_and_taken_out_with_a_line_in_the_log(lab: Laboratory) -> None:
    Person.objects.create_user("LEA")
    path = f"/api/v1/projects/{lab.project().code}/"
    assert lab.client("LEA").get(path).status_code == 404
    assert _said("set_member", "LECTIN-07", "LEA", "chemist") == (
        "LEA in LECTIN-07: chemist (was none).\n"
    )
    assert lab.client("LEA").get(path).status_code == 200
    assert "viewer (was chemist)" in _said("set_member", "LECTIN-07", "LEA", "viewer")
    assert "viewer (was viewer)" in _said("set_member", "LECTIN-07", "LEA", "viewer")
    assert "none (was viewer)" in _said("set_member", "LECTIN-07", "LEA", "none")
    assert lab.client("LEA").get(path).status_code == 404
    events = Event.objects.filter(kind="project.member_set").order_by("id")
    assert [json.loads(event.detail)["after"] for event in events] == [
        {"LEA": "chemist"}, {"LEA": "viewer"}, {"LEA": None},
    ]  # fmt: skip
    for project, person in (("NO-1", "LEA"), ("LECTIN-07", "NOBODY")):
        with pytest.raises(CommandError, match="There is nothing with the code"):
            _said("set_member", project, person, "chemist")


def test_who_is_retired_is_let_in_no_more_and_stays_in_the_records(lab: Laboratory) -> None:
    client = lab.client("MIRA")
    asked = client.post(PROCEDURES, octyl_order()).json()["code"]
    assert "1 token(s) ended" in _said("retire_person", "MIRA")
    assert "0 token(s) ended" in _said("retire_person", "MIRA")
    assert client.get(PROCEDURES).status_code == 401
    with pytest.raises(CommandError, match="no active person"):
        _said("create_token", "MIRA", "--name", "again")
    shown = lab.client("INES").get(f"{PROCEDURES}{asked}/").json()
    assert shown["requested_by"] == "MIRA"
    assert Event.objects.filter(kind="person.retired", subject="person MIRA").count() == 1


class _Away(LabCommand):
    def handle(self, *args: Any, **options: Any) -> None:
        raise OperationalError("unable to open database file")


def test_a_database_that_does_not_answer_is_said_in_a_sentence() -> None:
    with pytest.raises(CommandError, match="unable to open database file\nIs it running"):
        call_command(_Away())


@pytest.mark.parametrize(
    ("variable", "value"),
    [
        ("REDIS_URL", "http://x"), ("LABPLAN_HOSTS", "a b"), ("LABPLAN_HOSTS", "*"),
        ("LABPLAN_TIME_ZONE", "Mars/Olympus"), ("LABPLAN_DATA_DIR", "/proc/nope"),
    ],
)  # fmt: skip
def test_a_setting_without_meaning_is_refused_in_one_line(variable: str, value: str) -> None:
    environment = {**os.environ, variable: value, "DJANGO_SETTINGS_MODULE": DEFAULT_SETTINGS}
    for name in ("DATABASE_URL", "LABPLAN_SECRET_KEY", "LABPLAN_SEAL_KEY"):
        environment.pop(name, None)
    ended = subprocess.run(
        [sys.executable, "manage.py", "outbox", "status"], cwd=ROOT, env=environment, text=True,
        capture_output=True, check=False,
    )  # fmt: skip
    assert ended.returncode == 1
    assert value in ended.stderr or variable in ended.stderr
    assert len(ended.stderr.splitlines()) == 1
