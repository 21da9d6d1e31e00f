"""1,000 random tamperings, each alone on a small sealed database: all found, each at its place."""

import random
import re
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import timedelta
from typing import Any

import pytest
from django.conf import settings
from django.db import DataError, IntegrityError, connection, transaction
from django.test import override_settings

from inventory.models import Movement
from inventory.services.holds import release_reservation
from inventory.services.verify import LedgerFault, verify_ledger
from labplan.base import append_only, clock
from labplan.base.events import record_event
from labplan.base.models import Event
from labplan.base.seal import newest_printed, seal_new
from labplan.procedures.models import Document, Procedure
from tests.db.bench import ON_POSTGRESQL, Shelf, drop_trigger, make_shelf, run_sql
from tests.db.tamperings import TAMPERINGS, Found, Tampering

SEED = 20261201
ROUNDS = 1_000


def settle_document(shelf: Shelf, number: int) -> None:
    """A document as planning stores it: it names the newest seal of its moment."""
    procedure = Procedure.objects.create(
        code=f"P-{number}", project=shelf.project, requested_by="LEAD", target_smiles="C",
        product_mass_mg=1, state="queued", created_at=clock.now(),
    )  # fmt: skip
    Document.objects.create(
        procedure=procedure, attempt=1, body=f'{{"n":{number}}}'.encode(), sha256=f"{number:064}",
        seal=newest_printed(), created_at=clock.now(),
    )  # fmt: skip


def sealed_shelf() -> Shelf:
    """Four bottles, some twenty lines, a dozen events, three documents, six seals."""
    shelf = make_shelf(A=100_000, B=200_000, C=300_000, D=400_000)
    for number in range(1, 7):
        held = shelf.hold(("A", 100 * number), ("B", 10 * number))
        if number % 2:
            shelf.hold(("C", 5 * number), ("A", number))
            settle_document(shelf, number)
        else:
            with transaction.atomic():
                release_reservation(actor=shelf.actor(), code=held.code, reason="not needed")
        for kind in ("a.kind", "another.kind"):
            record_event(actor_code="LEAD", kind=kind, subject=f"round {number}")
        assert seal_new() > 0
    return shelf


@contextmanager
def as_owner_of_the_database() -> Iterator[None]:
    """No trigger stands in the way."""
    if ON_POSTGRESQL:
        run_sql("SET CONSTRAINTS ALL IMMEDIATE")
    with append_only.lifted(connection):
        for table in ("base_seal", "base_sealrun", "inventory_movement"):
            drop_trigger(table, f"{table}_carries_on")
        yield


def names(fault: LedgerFault, found: Found) -> bool:
    """Whether a fault names the place; `lines 3 to 5` names line 4 too."""
    if fault.bottle != found.place:
        return False
    word, _, number = found.where.partition(" ")
    if not number:
        return fault.where == found.where
    said = re.fullmatch(rf"{word}s? (\d+)(?: to (\d+))?", fault.where)
    return said is not None and int(said[1]) <= int(number) <= int(said[2] or said[1])


def tamper_and_look(tampering: Tampering, rng: random.Random, newest: str) -> tuple[Any, Any]:
    """Apply, verify and take back; (where it must be found, the report) or (None, None)."""
    key = rng.randbytes(24).hex() if tampering.replaces_key else settings.SEAL_KEY
    try:
        with transaction.atomic():
            found = tampering.apply(rng)
            if ON_POSTGRESQL:
                run_sql("SET CONSTRAINTS ALL IMMEDIATE")
            with override_settings(SEAL_KEY=key):
                report = verify_ledger(newest=newest if tampering.needs_paper else "")
            transaction.set_rollback(True)
    except (IntegrityError, DataError):
        return None, None  # a constraint refused it: nothing was changed
    return found, report if found else None


@pytest.mark.spoils_the_book
@pytest.mark.django_db
def test_seals_cut_off_are_found_by_the_documents_that_name_them() -> None:
    """Without any paper, and even when the rows were sealed anew since."""
    sealed_shelf()
    with as_owner_of_the_database():
        run_sql("DELETE FROM base_sealrun WHERE seal_id >= 4")
        run_sql("DELETE FROM base_seal WHERE number >= 4")
    third = Document.objects.order_by("pk").last()
    assert third is not None
    place = ("documents", f"document {third.pk}")
    [fault] = verify_ledger().faults
    assert (fault.bottle, fault.where) == place
    assert fault.detail == (
        f"the paper names seal {third.seal}, the chain ends at seal 3: it was cut"
    )
    with clock.replaced_by(clock.standing_at(clock.now() + timedelta(seconds=1))):
        assert seal_new() > 0
    [fault] = verify_ledger().faults
    assert (fault.bottle, fault.where) == place
    assert fault.detail.startswith(f"the paper names seal {third.seal}, here it is 4-")


@pytest.mark.spoils_the_book
@pytest.mark.django_db
def test_what_a_false_number_or_amount_of_text_does_not_stop_the_walk() -> None:
    """SQLite keeps text in a column of numbers when its checks are switched off."""
    if ON_POSTGRESQL:
        with pytest.raises(DataError), transaction.atomic():
            run_sql("UPDATE inventory_movement SET seq = 'abc'")
        return
    shelf = sealed_shelf()
    line = Movement.objects.filter(bottle__code="D").get()
    run_sql("PRAGMA ignore_check_constraints = ON")
    with as_owner_of_the_database():
        run_sql("UPDATE inventory_movement SET seq = 'abc' WHERE id = %s", [line.pk])
        run_sql(
            "UPDATE inventory_movement SET held_change = 'x' WHERE seq = 1 AND bottle_id = %s",
            [shelf.bottle("C").pk],
        )
        found = [(f.bottle, f.where, f.detail) for f in verify_ledger().faults]
    run_sql("PRAGMA ignore_check_constraints = OFF")
    assert ("C", "line 1", "has an amount that is no whole number") in found
    assert ("D", "line 1", "is missing (seal 1)") in found
    assert (
        f"bottle {line.bottle_id}", "line 'abc'", "has no number: it was written past labplan"
    ) in found  # fmt: skip


@pytest.mark.spoils_the_book
@pytest.mark.django_db
def test_a_text_that_cannot_be_read_is_a_fault_and_no_breakdown() -> None:
    sealed_shelf()
    if ON_POSTGRESQL:  # which stores no such text
        with pytest.raises(DataError), transaction.atomic():
            run_sql(r"SELECT convert_from('\xff'::bytea, 'UTF8')")
        return
    second = Event.objects.order_by("pk")[1]
    with as_owner_of_the_database():
        run_sql("UPDATE base_event SET kind = CAST(x'ff' AS TEXT) WHERE id = %s", [second.pk])
        faults = verify_ledger().faults
    assert faults[0].bottle == "events"
    assert faults[0].where in ("start", f"events, event {second.pk - 1}")
    assert "what follows cannot be read" in faults[0].detail


@pytest.mark.spoils_the_book
@pytest.mark.django_db
def test_a_thousand_tamperings_are_found_and_their_places_named() -> None:
    sealed_shelf()
    before, newest = verify_ledger(newest=newest_printed()), newest_printed()
    assert (before.faults, before.seals, before.unsealed_rows) == ((), 6, 0)
    rng, applied, drawn = random.Random(SEED), Counter[str](), 0
    with as_owner_of_the_database():
        while applied.total() < ROUNDS:
            tampering = TAMPERINGS[drawn % len(TAMPERINGS)]
            drawn += 1
            found, report = tamper_and_look(tampering, rng, newest)
            if found is None:
                continue
            applied[tampering.name] += 1
            told = f"seed {SEED}, draw {drawn}, {tampering.name}: {found} not in {report.faults}"
            assert any(names(fault, found) for fault in report.faults), told
            assert not tampering.is_one_row or report.found == 1, told
        assert verify_ledger(newest=newest) == before
    assert drawn < 2 * ROUNDS
    assert set(applied) == {tampering.name for tampering in TAMPERINGS}
    assert min(applied.values()) >= 20
