"""Requests come in while all that plans them is broken at random; none is lost, none held twice.

LABPLAN_REQUESTS sets their number (300; `make soak`: 2,000), LABPLAN_SEED repeats a run's choices.
SQLite has no server whose connections could be cut; there the rest is broken all the same.
"""

import json
import os
import random
import threading
import uuid
from collections import Counter
from datetime import UTC, datetime
from typing import Any

from django.db import DatabaseError, InterfaceError, connections

from inventory.models import Balance, Hold, Movement, Reservation
from inventory.services.verify import verify_ledger
from labplan.base.canonical import sha256_hex
from labplan.base.models import OutboxMessage
from labplan.procedures.models import Document, Procedure
from tests.api.targets import ALPHA_OCTYL
from tests.laboratory import OCTYL_GLUCOSIDE, PROCEDURES, Laboratory
from tests.services.live_work import live_work
from tests.simulation.chaos import Chaos
from tests.targets import CRASHING

NOON = datetime(2026, 12, 1, 12, tzinfo=UTC)
REQUESTS = int(os.environ.get("LABPLAN_REQUESTS", "300"))
SEED = int(os.environ.get("LABPLAN_SEED", "20261201"))
# grams of what, how often: planned, short (more than the shelf has), refused, crashing
ORDERS = (
    (OCTYL_GLUCOSIDE, "0.050", 80), (OCTYL_GLUCOSIDE, "900", 8), (ALPHA_OCTYL, "0.100", 10),
    (CRASHING, "0.050", 2),
)  # fmt: skip
ENDS = {"planned", "short", "refused", "failed"}
FAILURES = {"engine_crashed", "planning_given_up"}


class Customer(threading.Thread):
    """Asks over the API, and asks again with the same key when there was no answer."""

    def __init__(self, lab: Laboratory, seed: int, number: int) -> None:
        super().__init__(daemon=True)
        self._client = lab.client()
        self._rng = random.Random(seed)
        self._number = number
        self.codes: list[str] = []
        self.asked_again = 0

    def run(self) -> None:
        for _ in range(self._number):
            [(smiles, grams, _)] = self._rng.choices(ORDERS, weights=[o[2] for o in ORDERS])
            body = {"project": "LECTIN-07", "target_smiles": smiles, "product_mass_g": grams}
            self.codes.append(self._ask(body, str(uuid.UUID(int=self._rng.getrandbits(128)))))
        connections.close_all()

    def _ask(self, body: dict[str, Any], key: str) -> str:
        for _ in range(100):
            try:
                answer = self._client.post(PROCEDURES, body, key=key)
            except (DatabaseError, InterfaceError):  # the connection was cut: a 500 over HTTP
                connections.close_all()
                self.asked_again += 1
                continue
            if answer.status_code == 202:
                return str(answer.json()["code"])
            assert answer.status_code in {409, 503}, answer.content
            # What a web server does at the end of a request, and Django's test client does not.
            connections.close_all()
            self.asked_again += 1
        raise AssertionError("a hundred times without an answer")


def all_ended() -> bool:
    try:
        return not Procedure.objects.filter(state="queued").exists()
    except (DatabaseError, InterfaceError):
        connections.close_all()
        return False


def test_every_request_ends_once_whatever_breaks(live_lab: Laboratory) -> None:
    print(f"seed {SEED}, {REQUESTS} requests")  # shown when it fails
    before = Reservation.objects.count()
    customers = [Customer(live_lab, SEED + n, REQUESTS // 2) for n in range(2)]
    with live_work(NOON, limit_s=3) as work:
        chaos = Chaos(work, random.Random(SEED))
        for customer in customers:
            customer.start()

        def over() -> bool:
            asking = any(customer.is_alive() for customer in customers)
            if asking or not all_ended():
                chaos.act_when_due()
                return False
            return True

        work.until(over, seconds=60 + REQUESTS)
        # In peace what is left of messages closes too.
        work.until(lambda: not OutboxMessage.objects.filter(state__in=["new", "sent"]).exists())
    codes = [code for customer in customers for code in customer.codes]
    assert len(set(codes)) == len(codes) == REQUESTS // 2 * 2
    assert sum(chaos.done.values()) > 5, chaos.done
    ends = Counter(Procedure.objects.values_list("state", flat=True))
    print(dict(ends), dict(chaos.done), [customer.asked_again for customer in customers])
    assert set(ends) <= ENDS
    assert sum(ends.values()) == len(codes)
    assert {"planned", "short", "refused"} <= set(ends)
    _assert_failures_say_why()
    _assert_one_set_of_holds_each(before)
    assert verify_ledger().faults == ()


def _assert_failures_say_why() -> None:
    for procedure in Procedure.objects.exclude(state="planned"):
        reasons = json.loads(procedure.reasons)
        assert reasons, procedure.code
        if procedure.state == "failed":
            assert {reason["code"] for reason in reasons} <= FAILURES


def _assert_one_set_of_holds_each(others: int) -> None:
    planned = Procedure.objects.filter(state="planned").select_related("document")
    assert Reservation.objects.count() == others + planned.count()
    for procedure in planned:
        document = procedure.document
        assert isinstance(document, Document)
        assert sha256_hex(bytes(document.body)) == document.sha256
        stages = json.loads(bytes(document.body))["route"]["stages"]
        wanted = Counter(c["bottle"] for stage in stages for c in stage["charges"] if c["bottle"])
        holds = Hold.objects.filter(reservation__code=procedure.reservation_code)
        assert Counter(holds.values_list("bottle__code", flat=True)) == wanted
        assert Movement.objects.filter(hold__in=holds).count() == holds.count()
    held = Counter[int]()
    for bottle, amount in Hold.objects.filter(state="open").values_list("bottle", "amount"):
        held[bottle] += amount
    assert {b.pk: b.held for b in Balance.objects.all() if b.held} == dict(held)
