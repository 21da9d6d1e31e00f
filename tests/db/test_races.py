"""Many at once, each thread on its own connection: sums stay exact and nobody waits for ever."""

from collections import Counter
from collections.abc import Callable
from decimal import Decimal
from typing import Any

import pytest
from django.db import transaction

from inventory.errors import StockShort
from inventory.models import Balance, Hold, Movement, Reservation
from inventory.services import HoldLine, hold_lines, release_reservation
from labplan.base import clock, outbox
from labplan.base.models import OutboxMessage
from labplan.procedures.models import Document, Procedure
from labplan.procedures.services import ProcedureOrder, request_procedure
from tests.db.bench import Shelf, at_once, make_shelf
from tests.laboratory import OCTYL_GLUCOSIDE, PROCEDURES, Laboratory, octyl_order

THREADS = 8


def _sums(code: str) -> tuple[int, int, int]:
    """What the rows of one bottle add up to, beside what its balance says."""
    movements = Movement.objects.filter(bottle__code=code)
    holds = Hold.objects.filter(bottle__code=code, state="open")
    return (
        sum(movements.values_list("on_hand_change", flat=True)),
        sum(movements.values_list("held_change", flat=True)),
        sum(holds.values_list("amount", flat=True)),
    )


@pytest.mark.django_db(transaction=True)
def test_a_bottle_is_never_oversold() -> None:
    """80 mg can be used; eight threads want 15 mg twice each: five get it."""
    shelf = make_shelf(A=100_000)

    def want() -> list[str]:
        return [_try_to_hold(shelf, ("A", 15_000)) for _ in range(2)]

    outcomes = Counter(outcome for results in at_once(*[want] * THREADS) for outcome in results)
    assert outcomes == {"held": 5, "short": 11}
    assert shelf.balance("A") == (100_000, 75_000, 6)
    assert _sums("A") == (100_000, 75_000, 75_000)
    seqs = Movement.objects.order_by("seq").values_list("seq", flat=True)
    assert list(seqs) == [1, 2, 3, 4, 5, 6]
    assert Reservation.objects.count() == 5


def _try_to_hold(shelf: Shelf, *lines: tuple[str, int]) -> str:
    try:
        shelf.hold(*lines)
    except StockShort:
        return "short"
    return "held"


@pytest.mark.django_db(transaction=True)
def test_overlapping_bottles_in_opposite_orders_do_not_deadlock() -> None:
    shelf = make_shelf(A=1_000_000, B=1_000_000, C=1_000_000, D=1_000_000)
    orders = ["ABCD", "DCBA", "BADC", "CDAB", "ABC", "CBA", "BCD", "DCB"]
    rounds = 6

    def want(order: str) -> Callable[[], int]:
        def run() -> int:
            for _ in range(rounds):
                shelf.hold(*[(code, 1_000) for code in order])
            return rounds

        return run

    assert at_once(*[want(order) for order in orders]) == [rounds] * len(orders)
    for code in "ABCD":
        lines = rounds * sum(code in order for order in orders)
        assert shelf.balance(code) == (1_000_000, lines * 1_000, lines + 1)
        assert _sums(code) == (1_000_000, lines * 1_000, lines * 1_000)


@pytest.mark.django_db(transaction=True)
def test_holds_and_releases_together_end_where_they_should() -> None:
    shelf = make_shelf(A=1_000_000, B=1_000_000)

    def come_and_go(order: str) -> Callable[[], str]:
        def run() -> str:
            for _ in range(4):
                made = shelf.hold(*[(code, 1_000) for code in order])
                with transaction.atomic():
                    release_reservation(actor=shelf.actor(), code=made.code, reason="back")
            return "done"

        return run

    assert at_once(*[come_and_go(order) for order in ("AB", "BA", "AB", "BA")]) == ["done"] * 4
    for code in "AB":
        assert shelf.balance(code) == (1_000_000, 0, 33)
    assert set(Hold.objects.values_list("state", flat=True)) == {"released"}


@pytest.mark.django_db(transaction=True)
def test_a_reservation_is_released_once_by_two_at_once() -> None:
    shelf = make_shelf(A=100_000)
    code = shelf.hold(("A", 5_000)).code

    def release() -> str:
        with transaction.atomic():
            release_reservation(actor=shelf.actor(), code=code, reason="back")
        return "released"

    results = at_once(release, release, release)
    assert sorted(type(r).__name__ if isinstance(r, Exception) else r for r in results) == [
        "StateForbids",
        "StateForbids",
        "released",
    ]
    assert shelf.balance("A") == (100_000, 0, 3)


def _leave_for_one_request_and_a_half(lab: Laboratory, code: str) -> int:
    """Hold what is free of a bottle but for one and a half times what one request takes."""
    request_procedure(actor=lab.actor(), order=_order())
    assert lab.run_outbox() == 1
    first = Procedure.objects.get()
    assert first.state == "planned"
    need = Hold.objects.get(reservation__code=first.reservation_code, bottle__code=code).amount
    with transaction.atomic():
        release_reservation(
            actor=lab.actor(), code=first.reservation_code, reason="only to see the amount"
        )
    bottle = lab.bottle(code)
    left = bottle.balance.on_hand - bottle.balance.held - bottle.heel
    _hold(lab, code, left - need * 3 // 2)
    return int(need)


def _hold(lab: Laboratory, code: str, amount: int) -> None:
    with transaction.atomic():
        hold_lines(
            actor=lab.actor("INES"), project_id=lab.project().pk, purpose="the rest",
            expires_on=clock.today(), lines=[HoldLine(code, amount, str(amount), "nL")],
        )  # fmt: skip


def _order() -> ProcedureOrder:
    return ProcedureOrder("LECTIN-07", OCTYL_GLUCOSIDE, product_mass_mg=Decimal(2000))


def test_of_two_requests_for_the_last_amount_one_is_planned_and_one_is_short(
    live_lab: Laboratory,
) -> None:
    need = _leave_for_one_request_and_a_half(live_lab, "OCT-1")
    held_before = live_lab.bottle("OCT-1").balance.held
    made = at_once(*[lambda: request_procedure(actor=live_lab.actor(), order=_order())] * 2)
    assert at_once(*[lambda: outbox.deliver_waiting(limit=1)] * 2) == [1, 1]
    ends = Procedure.objects.filter(pk__in=[p.pk for p in made])
    assert sorted(ends.values_list("state", flat=True)) == ["planned", "short"]
    winner, loser = ends.get(state="planned"), ends.get(state="short")
    assert live_lab.bottle("OCT-1").balance.held == held_before + need
    assert loser.reservation_code is None
    assert '"short"' in loser.reasons
    assert Reservation.objects.filter(code=winner.reservation_code, state="open").exists()
    assert (winner.attempt, loser.attempt) == (1, 1)
    assert Document.objects.filter(procedure__in=[winner, loser]).count() == 2
    assert set(OutboxMessage.objects.values_list("state", flat=True)) == {"done"}


def test_one_key_from_two_threads_at_once_makes_one_procedure(live_lab: Laboratory) -> None:
    client = live_lab.client()

    def post() -> Any:
        return client.post(PROCEDURES, octyl_order(), key="one-key-for-both")

    answers = [_until_answered(post, first) for first in at_once(*[post] * 4)]
    assert [answer.status_code for answer in answers] == [202] * 4
    assert len({answer.content for answer in answers}) == 1
    assert len({answer["Location"] for answer in answers}) == 1
    replayed = [answer.get("Idempotency-Replayed") for answer in answers]
    assert Counter(replayed) == {None: 1, "true": 3}
    assert Procedure.objects.count() == 1
    assert OutboxMessage.objects.count() == 1


def _until_answered(post: Callable[[], Any], first: Any) -> Any:
    """A 409 "still running" may be repeated, as its Retry-After says; it must then be answered."""
    assert not isinstance(first, Exception), first
    if first.status_code == 409:
        assert first.json()["code"] == "request_running"
        return post()
    return first


def test_different_keys_at_once_make_as_many_procedures(live_lab: Laboratory) -> None:
    client = live_lab.client()
    posts = [
        lambda number=number: client.post(PROCEDURES, octyl_order(), key=f"key-number-{number}")
        for number in range(4)
    ]
    answers = at_once(*posts)
    assert [answer.status_code for answer in answers] == [202] * 4
    assert len({answer.json()["code"] for answer in answers}) == 4
    assert at_once(*[lambda: outbox.deliver_waiting(limit=2)] * 2) == [2, 2]
    assert set(Procedure.objects.values_list("state", flat=True)) == {"planned"}
    held = Balance.objects.get(bottle__code="OCT-1").held
    assert held == sum(Hold.objects.filter(bottle__code="OCT-1").values_list("amount", flat=True))
