"""One bottle received: in one transaction, once, whoever else receives at the same moment."""

import uuid
from collections import Counter
from typing import Any

import pytest

from inventory.models import Bottle, Form, Movement, Substance
from inventory.services import move_bottle, receive_bottle
from inventory.services.bottles import MovementOrder
from labplan.base.errors import InvalidValue, NotAllowed, StateForbids
from labplan.base.models import Event
from tests.db.bench import Shelf, at_once, codes_of, make_shelf, received_stock
from tests.db.test_import import SOUND
from tests.laboratory import ApiTestClient, Laboratory

THREADS = 6
# neither the substance nor its form is there before
NEW = {**SOUND, "substance": "A new alcohol", "smiles": "C#CCCCCCCCCO", "unit": "g"}


def receive(shelf: Shelf, fields: dict[str, str], **more: Any) -> str:
    return receive_bottle(actor=shelf.actor("stock_keeper"), fields=fields, **more)


@pytest.mark.django_db(transaction=True)
@pytest.mark.parametrize("is_known", [False, True])
def test_of_many_at_once_with_one_code_one_is_received(is_known: bool) -> None:
    shelf = make_shelf(A=100_000)
    if is_known:  # then they meet at the bottle, else at the substance
        receive(shelf, {**NEW, "code": "T-0"})
    results = at_once(*[lambda: receive(shelf, NEW)] * THREADS)
    refused = [result for result in results if isinstance(result, InvalidValue)]
    assert [result for result in results if result not in refused] == ["T-1"]
    assert [codes_of(error.errors) for error in refused] == [[("code", "bottle_exists")]] * (
        THREADS - 1
    )
    assert shelf.balance("T-1") == (1_000_000, 0, 1)
    assert Event.objects.filter(subject="bottle T-1").count() == 1


@pytest.mark.django_db(transaction=True)
def test_many_at_once_of_a_new_substance_share_it() -> None:
    shelf = make_shelf(A=100_000)
    codes = [f"T-{number}" for number in range(THREADS)]
    results = at_once(*[lambda code=code: receive(shelf, {**NEW, "code": code}) for code in codes])
    assert results == codes
    [made] = Substance.objects.exclude(code="powder")
    assert Form.objects.filter(substance=made).count() == 1
    assert Bottle.objects.filter(form__substance=made).count() == THREADS


def test_two_requests_at_once_with_one_key_are_one_bottle(live_lab: Laboratory) -> None:
    header = live_lab.client("JONAS")._headers["Authorization"].split()[1]
    answers = at_once(
        *[lambda: ApiTestClient(header).post("/api/v1/bottles/", NEW, key="the-very-same")] * 4
    )
    assert Counter(answer.status_code for answer in answers) == {201: 4}
    assert len({answer.content for answer in answers}) == 1
    assert Movement.objects.filter(bottle__code="T-1").count() == 1


@pytest.mark.django_db(transaction=True)
def test_an_operation_id_is_received_once() -> None:
    shelf, operation = make_shelf(A=100_000), uuid.uuid4()
    assert receive(shelf, SOUND, operation_id=operation) == "T-1"
    before = received_stock()
    assert receive(shelf, SOUND, operation_id=operation) == "T-1"
    assert received_stock() == before


@pytest.mark.django_db(transaction=True)
def test_the_id_of_another_operation_is_refused() -> None:
    shelf, operation = make_shelf(A=100_000), uuid.uuid4()
    move_bottle(
        actor=shelf.actor("stock_keeper"), bottle_code="A", order=MovementOrder("disposal"),
        operation_id=operation,
    )  # fmt: skip
    before = received_stock()
    with pytest.raises(StateForbids, match="something else"):
        receive(shelf, SOUND, operation_id=operation)
    assert received_stock() == before


@pytest.mark.django_db(transaction=True)
def test_what_a_refusal_has_made_so_far_is_gone() -> None:
    """The substance of the row is made before the error in it is found."""
    shelf = make_shelf(A=100_000)
    before = received_stock()
    with pytest.raises(InvalidValue) as refused:
        receive(shelf, {**NEW, "opened_on": "2026-06-14"})
    assert codes_of(refused.value.errors) == [("opened_on", "before_receipt")]
    with pytest.raises(NotAllowed, match="stock_keeper"):
        receive_bottle(actor=shelf.actor("lead"), fields=NEW)
    assert received_stock() == before
