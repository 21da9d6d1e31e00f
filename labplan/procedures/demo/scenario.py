"""Fill an empty database with the invented scenario of fixtures/demo/."""

import json
from datetime import datetime, timedelta
from typing import Any

from django.db import transaction

from inventory.services import HoldLine, hold_lines, import_stock
from inventory.services.importing import ImportResult
from inventory.services.stock_row import UNITS
from labplan import datafiles
from labplan.base import clock
from labplan.base.models import Membership, Person, PersonName, Project
from labplan.base.rights import Actor, actor_for

FOLDER = datafiles.FOLDER / "demo"


def read_scenario() -> dict[str, Any]:
    scenario: dict[str, Any] = json.loads((FOLDER / "scenario.json").read_text())
    return scenario


def starting_instant(scenario: dict[str, Any]) -> datetime:
    return datetime.fromisoformat(scenario["starts_at"])


def load_people(scenario: dict[str, Any]) -> None:
    """People, projects and memberships, in one transaction."""
    with transaction.atomic(durable=True):
        for row in scenario["people"]:
            person = Person.objects.create_user(row["code"])
            PersonName.objects.create(person=person, full_name=row["full_name"])
        for row in scenario["projects"]:
            Project.objects.create(created_at=clock.now(), **row)
        for row in scenario["memberships"]:
            Membership.objects.create(
                person=Person.objects.get(code=row["person"]),
                project=Project.objects.get(code=row["project"]),
                role=row["role"],
            )


def load_stock(scenario: dict[str, Any]) -> ImportResult:
    """The stock by the import that users have, then what others hold already."""
    keeper = next(m["person"] for m in scenario["memberships"] if m["role"] == "stock_keeper")
    result = import_stock(
        actor=actor_of(keeper),
        bottles_file=FOLDER / "stock.csv",
        places_file=FOLDER / "places.csv",
    )
    for hold in scenario["holds"]:
        _hold(hold)
    return result


def actor_of(code: str) -> Actor:
    return actor_for(Person.objects.get(code=code))


def _hold(hold: dict[str, str]) -> None:
    _, factor = UNITS[hold["unit"]]
    line = HoldLine(
        hold["bottle"], round(float(hold["amount"]) * factor), hold["amount"], hold["unit"]
    )
    with transaction.atomic(durable=True):
        hold_lines(
            actor=actor_of(hold["person"]),
            project_id=Project.objects.get(code=hold["project"]).pk,
            purpose=hold["purpose"],
            expires_on=clock.today() + timedelta(days=14),
            lines=[line],
        )
