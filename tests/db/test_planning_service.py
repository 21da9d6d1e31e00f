"""Planning on a shelf that moves: look again, look while it stands still, or say so."""

import hashlib
import json
import os
import pickle
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator
from datetime import date
from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest
import rfc8785
from django.db import OperationalError, connection, connections, transaction

from inventory.locks import lock_balances
from inventory.models import Hold, Movement, Reservation
from inventory.selectors import shelf_snapshot
from inventory.services import HoldLine, hold_lines, release_reservation
from labplan.base import clock
from labplan.base.models import Membership, OutboxMessage, Person, Project
from labplan.planning.plan import wanted_from_shelf
from labplan.procedures import engine
from labplan.procedures.models import Document, Procedure
from labplan.procedures.services import ProcedureOrder, planning, request_procedure
from tests.db.bench import ON_POSTGRESQL, at_once, run_sql
from tests.laboratory import OCTYL_GLUCOSIDE, Laboratory

ROOT = Path(__file__).resolve().parents[2]


def _request(lab: Laboratory) -> Procedure:
    order = ProcedureOrder("LECTIN-07", OCTYL_GLUCOSIDE, product_mass_mg=Decimal(2000))
    return request_procedure(actor=lab.actor(), order=order)


def _planned_with(procedure: Procedure) -> dict[str, int]:
    holds = Hold.objects.filter(reservation__code=procedure.reservation_code)
    return dict(holds.values_list("bottle__code", "amount"))


class Rival:
    """Somebody else at the same bottles, on a connection of his own."""

    def __init__(self, lab: Laboratory) -> None:
        self.lab = lab
        self.held: Any = None

    def take_all_of(self, code: str) -> None:
        self._do(lambda: self._take(code))

    def give_back(self) -> None:
        self._do(self._give_back)

    def _do(self, act: Callable[[], None]) -> None:
        [result] = at_once(act)
        assert result is None, result

    def _take(self, code: str) -> None:
        bottle = self.lab.bottle(code)
        free = bottle.balance.on_hand - bottle.balance.held - bottle.heel
        with transaction.atomic():
            self.held = hold_lines(
                actor=self.lab.actor("INES"), project_id=self.lab.project("GLYCAN-12").pk,
                purpose="a rival", expires_on=clock.today(),
                lines=[HoldLine(code, free, str(free), "base unit")],
            ).code  # fmt: skip

    def _give_back(self) -> None:
        if self.held is not None:
            with transaction.atomic():
                release_reservation(
                    actor=self.lab.actor("INES"), code=self.held, reason="done with it"
                )
            self.held = None


@pytest.fixture
def looks(monkeypatch: pytest.MonkeyPatch) -> dict[str, Any]:
    """Count the looks at the shelf; `before` and `after` are called with the number of the look."""
    hooks: dict[str, Any] = {"count": 0, "before": lambda n: None, "after": lambda n: None}
    plain = planning.compute_plan

    def watched(attempt: planning.Attempt) -> Any:
        hooks["count"] += 1
        number = hooks["count"]
        hooks["before"](number)
        planned = plain(attempt)
        hooks["after"](number)
        return planned

    monkeypatch.setattr(planning, "compute_plan", watched)
    return hooks


def test_a_bottle_that_went_meanwhile_is_replaced_by_another(
    live_lab: Laboratory, looks: dict[str, Any]
) -> None:
    rival = Rival(live_lab)
    looks["after"] = lambda n: rival.take_all_of("GPA-1") if n == 1 else None
    procedure = _request(live_lab)
    assert live_lab.run_outbox() == 1
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt, looks["count"]) == ("planned", 1, 2)
    taken = _planned_with(procedure)
    assert "GPA-2" in taken
    assert "GPA-1" not in taken
    body = json.loads(bytes(procedure.document.body))  # type: ignore[union-attr]
    charges = {c["bottle"] for c in body["route"]["stages"][0]["charges"] if c["bottle"]}
    assert charges == set(taken)


def test_what_went_meanwhile_and_has_no_other_bottle_is_short(
    live_lab: Laboratory, looks: dict[str, Any]
) -> None:
    rival = Rival(live_lab)
    looks["after"] = lambda n: rival.take_all_of("OCT-1") if n == 1 else None
    procedure = _request(live_lab)
    before = Reservation.objects.count()
    assert live_lab.run_outbox() == 1
    procedure.refresh_from_db()
    assert (procedure.state, looks["count"]) == ("short", 2)
    assert {reason["code"] for reason in json.loads(procedure.reasons)} == {"short"}
    assert Reservation.objects.count() == before + 1  # the rival's
    assert procedure.reservation_code is None
    assert OutboxMessage.objects.get().state == "done"


@pytest.mark.parametrize(("stays", "end"), [(False, "planned"), (True, "short")])
def test_the_third_try_is_made_while_the_rows_stand_still(
    live_lab: Laboratory, looks: dict[str, Any], stays: bool, end: str
) -> None:
    rival = Rival(live_lab)

    def before(number: int) -> None:
        if number <= 2 or (number == 3 and not stays):
            rival.give_back()

    def after(number: int) -> None:
        if number <= planning.FREE_TRIES:
            rival.take_all_of("OCT-1")

    looks["before"], looks["after"] = before, after
    procedure = _request(live_lab)
    assert live_lab.run_outbox() == 1
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt) == (end, 1)
    assert looks["count"] == planning.FREE_TRIES + 2
    assert Document.objects.count() == 1
    assert bool(_planned_with(procedure)) is (end == "planned")


@pytest.fixture
def _impatient() -> Iterator[None]:
    """Let this connection give up on a lock after a fifth of a second."""
    connection.ensure_connection()
    run_sql("SET lock_timeout = '200ms'" if ON_POSTGRESQL else "PRAGMA busy_timeout = 200")
    yield
    run_sql("SET lock_timeout = '3s'" if ON_POSTGRESQL else "PRAGMA busy_timeout = 20000")


@pytest.mark.usefixtures("_impatient")
def test_rows_that_never_stand_still_end_in_contended(
    live_lab: Laboratory, looks: dict[str, Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    rival, bottle = Rival(live_lab), live_lab.bottle("OCT-1").pk
    locked, leave = threading.Event(), threading.Event()

    def sit_on_the_bottle() -> None:
        try:
            with transaction.atomic():
                lock_balances([bottle])
                locked.set()
                leave.wait(timeout=30)
        finally:
            connections.close_all()

    sitter = threading.Thread(target=sit_on_the_bottle, daemon=True)

    def after(number: int) -> None:
        if number <= planning.FREE_TRIES:
            rival.give_back()
            rival.take_all_of("OCT-1")
        else:
            sitter.start()
            assert locked.wait(timeout=30)

    plain = planning._settle_bare

    def settle_when_he_has_left(*values: Any) -> None:
        leave.set()
        sitter.join(timeout=30)
        plain(*values)

    looks["before"] = lambda n: rival.give_back()
    looks["after"] = after
    monkeypatch.setattr(planning, "_settle_bare", settle_when_he_has_left)
    procedure, documents = _request(live_lab), Document.objects.count()
    assert live_lab.run_outbox() == 1
    procedure.refresh_from_db()
    assert procedure.state == "contended"
    assert [reason["code"] for reason in json.loads(procedure.reasons)] == ["stock_contended"]
    assert looks["count"] == planning.FREE_TRIES + 1
    assert (procedure.reservation_code, Document.objects.count()) == (None, documents)
    assert not sitter.is_alive()
    assert OutboxMessage.objects.get().state == "done"


def test_who_lost_his_role_meanwhile_gets_nothing(live_lab: Laboratory) -> None:
    procedure, before = _request(live_lab), live_lab.counts()
    Membership.objects.filter(person__code="MIRA").update(role="viewer")
    assert live_lab.run_outbox() == 1
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt) == ("failed", 1)
    [reason] = json.loads(procedure.reasons)
    assert reason["code"] == "not_allowed"
    assert "chemist, lead" in reason["detail"]
    assert live_lab.counts() == before
    assert (procedure.reservation_code, procedure.document_id) == (None, None)
    assert OutboxMessage.objects.get().state == "done"


def _deactivate() -> None:
    Person.objects.filter(code="MIRA").update(is_active=False)


def _close_the_project() -> None:
    Project.objects.filter(code="LECTIN-07").update(is_open=False)


def _assert_failed(procedure: Procedure, code: str) -> None:
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt) == ("failed", 1)
    [reason] = json.loads(procedure.reasons)
    assert reason["code"] == code
    assert len(reason["detail"]) > 30
    assert (procedure.reservation_code, procedure.document_id) == (None, None)
    assert OutboxMessage.objects.get().state == "done"


AFTER_THE_REQUEST = [
    (_deactivate, "requester_inactive"), (_close_the_project, "project_closed"),
]  # fmt: skip


@pytest.mark.parametrize(("happens", "code"), AFTER_THE_REQUEST)
def test_nothing_is_planned_for_who_or_what_is_gone_by_then(
    live_lab: Laboratory, looks: dict[str, Any], happens: Callable[[], None], code: str
) -> None:
    procedure, before = _request(live_lab), live_lab.counts()
    happens()
    assert live_lab.run_outbox() == 1
    _assert_failed(procedure, code)
    assert looks["count"] == 0
    assert live_lab.counts() == before


@pytest.mark.parametrize("look", [1, planning.FREE_TRIES + 2])
@pytest.mark.parametrize(("happens", "code"), AFTER_THE_REQUEST)
def test_nothing_is_held_for_who_or_what_goes_during_the_planning(
    live_lab: Laboratory,
    looks: dict[str, Any],
    happens: Callable[[], None],
    code: str,
    look: int,
) -> None:
    """At the first look, or at the last one, which is made while the rows stand still."""
    rival = Rival(live_lab)

    def before(number: int) -> None:
        if number > 1:
            rival.give_back()
        if number == look and look > 1:
            happens()

    def after(number: int) -> None:
        if look == 1:
            happens()
        elif number <= planning.FREE_TRIES:
            rival.take_all_of("OCT-1")

    looks["before"], looks["after"] = before, after
    procedure = _request(live_lab)
    assert live_lab.run_outbox() == 1
    _assert_failed(procedure, code)
    assert looks["count"] == look
    held = Reservation.objects.filter(project__code="LECTIN-07", purpose__startswith="procedure")
    assert not held.exists()


def _no_float(text: str) -> float:
    raise AssertionError(f"a float in the document: {text}")


def test_the_stored_bytes_are_canonical_and_hash_to_what_is_stored(live_lab: Laboratory) -> None:
    procedure = _request(live_lab)
    live_lab.run_outbox()
    procedure.refresh_from_db()
    document = Document.objects.get()
    body = bytes(document.body)
    assert hashlib.sha256(body).hexdigest() == document.sha256
    content = json.loads(body, parse_float=_no_float)
    assert rfc8785.dumps(content) == body
    client = live_lab.client()
    served = client.get(
        client.get(f"/api/v1/procedures/{procedure.code}/").json()["links"]["document"]
    )
    assert served.content == body


def test_what_the_book_says_is_what_the_document_says(live_lab: Laboratory) -> None:
    """Line for line: bottle, amount as entered and amount held, in the order of the charges."""
    procedure = _request(live_lab)
    live_lab.run_outbox()
    procedure.refresh_from_db()
    body = json.loads(bytes(Document.objects.get().body))
    charges = [c for stage in body["route"]["stages"] for c in stage["charges"] if c["bottle"]]
    held = Movement.objects.filter(reason=f"procedure {procedure.code}").order_by("hold__line")
    assert [m.bottle.code for m in held.select_related("bottle")] == [c["bottle"] for c in charges]
    factors = {"mg": 1_000, "mL": 1_000_000}
    for movement, charge in zip(held, charges, strict=True):
        unit = "mL" if charge["dispense"] == "volume" else "mg"
        assert movement.entered_unit == unit
        printed = Decimal(str(charge["volume_ml" if unit == "mL" else "mass_mg"]))
        assert Decimal(movement.entered_amount) == printed
        assert movement.held_change == printed * factors[unit]


HASHER = """
import pickle, random, sys
from datetime import date
from labplan.base.canonical import canonical_bytes, sha256_hex
from labplan.chemistry.coupling import read_target
from labplan.planning.document import plan_document
from labplan.planning.plan import make_plan
from labplan.planning.values import Scale
with open(sys.argv[1], "rb") as file:
    shelf = list(pickle.load(file))
random.Random(int(sys.argv[2])).shuffle(shelf)
as_of = date(2026, 12, 1)
plan = make_plan(read_target(sys.argv[3]), Scale(2000.0, None), tuple(shelf), as_of=as_of)
print(sha256_hex(canonical_bytes(plan_document(plan, as_of=as_of))))
"""


def test_another_process_with_another_hash_seed_makes_the_same_bytes(
    live_lab: Laboratory, tmp_path: Path
) -> None:
    target = engine.read_target(OCTYL_GLUCOSIDE)
    wanted = wanted_from_shelf(target)
    snapshot = shelf_snapshot(
        actor=live_lab.actor(),
        inchikeys=wanted.inchikeys,
        inchikey_blocks=wanted.inchikey_blocks,
        substances=wanted.substances,
    )
    assert len(snapshot) > 10
    shelf_file = tmp_path / "shelf.pickle"
    shelf_file.write_bytes(pickle.dumps([engine._for_engine(bottle) for bottle in snapshot]))
    runs = [
        subprocess.Popen(
            [sys.executable, "-c", HASHER, str(shelf_file), seed, OCTYL_GLUCOSIDE],
            cwd=ROOT, env={**os.environ, "PYTHONHASHSEED": seed}, text=True,
            stdout=subprocess.PIPE,
        )
        for seed in ("1", "4711")
    ]  # fmt: skip
    hashes = {run.communicate(timeout=60)[0].strip() for run in runs}
    assert [run.returncode for run in runs] == [0, 0]
    assert clock.today() == date(2026, 12, 1)
    procedure = _request(live_lab)
    live_lab.run_outbox()
    procedure.refresh_from_db()
    assert hashes == {Document.objects.get().sha256}


def test_a_refusal_by_the_rules_of_chemistry_is_no_shortage(live_lab: Laboratory) -> None:
    """A target the one method does not serve: refused, with reasons and a document, no holds."""
    order = ProcedureOrder("LECTIN-07", OCTYL_GLUCOSIDE, product_mass_mg=Decimal(5))
    procedure = request_procedure(actor=live_lab.actor(), order=order)
    movements = Movement.objects.count()
    live_lab.run_outbox()
    procedure.refresh_from_db()
    assert procedure.state == "refused"
    codes = {reason["code"] for reason in json.loads(procedure.reasons)}
    assert codes == {"below_least_weighable"}
    assert Document.objects.get().pk == procedure.document_id
    assert Movement.objects.count() == movements


@pytest.mark.parametrize(("left_ml", "end"), [(201, "planned"), (150, "short")])
def test_one_bottle_for_two_lines_is_counted_for_both(
    live_lab: Laboratory, left_ml: int, end: str
) -> None:
    """73 mL to react in, 3 for the syringe, 110 to extract, 14.6 to rinse: 150 mL hold each."""
    for code, left_nl in (("DCM-3", 1_000), ("DCM-2", 1_000), ("DCM-1", left_ml * 1_000_000)):
        bottle = live_lab.bottle(code)
        free = bottle.balance.on_hand - bottle.balance.held - bottle.heel
        with transaction.atomic():
            hold_lines(
                actor=live_lab.actor("INES"), project_id=live_lab.project().pk, purpose="the rest",
                expires_on=clock.today(), lines=[HoldLine(code, free - left_nl, "rest", "nL")],
            )  # fmt: skip
    before = live_lab.bottle("DCM-1").balance
    procedure = _request(live_lab)
    live_lab.run_outbox()
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt) == (end, 1)
    holds = Hold.objects.filter(reservation__code=procedure.reservation_code, bottle_id=before.pk)
    amounts = list(holds.order_by("line").values_list("amount", flat=True))
    assert amounts == ([73_000_000, 3_000_000, 110_000_000, 14_600_000] if end == "planned" else [])
    after = live_lab.bottle("DCM-1").balance
    assert (after.held - before.held, after.seq - before.seq) == (sum(amounts), len(amounts))


def test_a_lock_that_is_given_up_during_a_free_try_is_waited_out(
    live_lab: Laboratory, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A settling that timed out on a lock has changed nothing and is simply tried again."""
    plain, timeouts = planning.settle_plan, iter([True])

    def settle(*values: Any) -> None:
        if next(timeouts, False):
            raise OperationalError("database is locked")
        plain(*values)

    monkeypatch.setattr(planning, "settle_plan", settle)
    procedure = _request(live_lab)
    assert live_lab.run_outbox() == 1
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt) == ("planned", 1)
