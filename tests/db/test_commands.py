"""The operator's commands: what they refuse in one sentence, and what they make."""

from datetime import timedelta
from pathlib import Path

import pytest
from django.core.management import CommandError, call_command
from django.db import OperationalError

from labplan.base import clock
from labplan.base.commands import LabCommand, checked_code, checked_text
from labplan.base.models import ApiToken, Membership, Person
from labplan.settings.environment import known_time_zone
from tests.laboratory import Laboratory


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
