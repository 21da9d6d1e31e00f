"""The demo laboratory as a fixture: people, projects, 66 bottles, all by the real services."""

from dataclasses import dataclass, field
from typing import Any

from django.test import Client

from inventory.models import Bottle, Movement, Reservation
from labplan.base import outbox
from labplan.base.models import Membership, Person, Project
from labplan.base.rights import Actor
from labplan.base.tokens import create_token
from labplan.procedures.demo import scenario as demo_scenario
from labplan.procedures.models import Document, Procedure
from tests.targets import OCTYL_GLUCOSIDE

PROCEDURES = "/api/v1/procedures/"
ROUTES = "/api/v1/routes/"


@dataclass
class Laboratory:
    """Handles on the laboratory that tests use; all state is in the database."""

    tokens: dict[str, str] = field(default_factory=dict)

    def actor(self, code: str = "MIRA") -> Actor:
        return demo_scenario.actor_of(code)

    def project(self, code: str = "LECTIN-07") -> Project:
        return Project.objects.get(code=code)

    def bottle(self, code: str) -> Bottle:
        return Bottle.objects.select_related("balance", "form__substance").get(code=code)

    def client(self, code: str = "MIRA", *, scope: str = "write") -> "ApiTestClient":
        key = f"{code} {scope}"
        if key not in self.tokens:
            self.tokens[key] = create_token(person_code=code, name="test", scope=scope)
        return ApiTestClient(self.tokens[key])

    def stranger(self) -> "ApiTestClient":
        """A valid token of a person who belongs to no project."""
        if not Person.objects.filter(code="STRANGER").exists():
            Person.objects.create_user("STRANGER")
        return self.client("STRANGER")

    def add_member(self, code: str, role: str, project: str = "LECTIN-07") -> None:
        person, _ = Person.objects.get_or_create(code=code)
        Membership.objects.create(person=person, project=self.project(project), role=role)

    def run_outbox(self) -> int:
        """Deliver what waits; return how many messages were run."""
        return outbox.deliver_waiting()

    def counts(self) -> tuple[int, ...]:
        """Procedures, documents, reservations, movements: to show that nothing changed."""
        kinds = (Procedure, Document, Reservation, Movement)
        return tuple(kind.objects.count() for kind in kinds)


class ApiTestClient:
    """Django's test client with a token, JSON bodies and a new Idempotency-Key a request."""

    def __init__(self, token: str | None) -> None:
        self._client = Client()
        self._headers = {"Authorization": f"Bearer {token}"} if token else {}
        self._number = 0

    def get(self, path: str, **headers: str) -> Any:
        return self._client.get(path, headers={**self._headers, **_dashes(headers)})

    def post(self, path: str, body: Any = None, *, key: str | None = None, **headers: str) -> Any:
        self._number += 1
        sent = {
            "Idempotency-Key": key or f"{id(self):x}-{self._number:08d}",
            **self._headers,
            **_dashes(headers),
        }
        return self._client.post(
            path,
            data={} if body is None else body,
            content_type="application/json",
            headers=sent,
        )

    def post_raw(self, path: str, body: bytes, content_type: str = "application/json") -> Any:
        sent = {"Idempotency-Key": "raw-body-key", **self._headers}
        return self._client.post(path, data=body, content_type=content_type, headers=sent)

    def request(self, method: str, path: str) -> Any:
        return self._client.generic(method, path, headers=self._headers)


def _dashes(headers: dict[str, str]) -> dict[str, str]:
    return {name.replace("_", "-"): value for name, value in headers.items()}


def octyl_order(**changes: Any) -> dict[str, Any]:
    """A request for 2.000 g of the octyl glucoside, with fields replaced or (None) left out."""
    order = {
        "project": "LECTIN-07",
        "target_smiles": OCTYL_GLUCOSIDE,
        "product_mass_g": "2.000",
        **changes,
    }
    return {name: value for name, value in order.items() if value is not None}


def open_laboratory() -> Laboratory:
    scenario = demo_scenario.read_scenario()
    demo_scenario.load_people(scenario)
    demo_scenario.load_stock(scenario)
    return Laboratory()
