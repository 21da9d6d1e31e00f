"""A request sent twice does its work once."""

from typing import Any

import pytest

from labplan.base.models import Event, Membership, OutboxMessage, Project, RememberedAnswer
from labplan.procedures.models import Procedure
from tests.api.problems import assert_problem, error_codes
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

KEY = "5b0c8a4e-6c1b-4f6e-9a53-0d3f5a0f2f11"


def cancel_path(response: Any) -> str:
    return response["Location"] + "cancel/"


def test_the_same_request_twice_is_one_procedure_with_one_answer(lab: Laboratory) -> None:
    client = lab.client()
    first = client.post(PROCEDURES, octyl_order(), key=KEY)
    second = client.post(PROCEDURES, octyl_order(), key=KEY)
    assert (first.status_code, second.status_code) == (202, 202)
    assert second.content == first.content
    for header in ("Location", "ETag", "Retry-After", "Content-Type"):
        assert second[header] == first[header]
    assert "Idempotency-Replayed" not in first
    assert second["Idempotency-Replayed"] == "true"
    assert Procedure.objects.count() == 1
    assert OutboxMessage.objects.count() == 1
    assert Event.objects.filter(kind="procedure.requested").count() == 1


def test_the_answer_is_the_first_one_even_when_the_procedure_has_moved_on(lab: Laboratory) -> None:
    client = lab.client()
    first = client.post(PROCEDURES, octyl_order(), key=KEY)
    assert lab.run_outbox() == 1
    before = lab.counts()
    again = client.post(PROCEDURES, octyl_order(), key=KEY)
    assert again.content == first.content
    assert again.json()["state"] == "queued"
    assert client.get(again["Location"]).json()["state"] == "planned"
    assert lab.counts() == before


def test_fields_in_another_order_are_the_same_request(lab: Laboratory) -> None:
    client = lab.client()
    order = octyl_order()
    first = client.post(PROCEDURES, order, key=KEY)
    second = client.post(PROCEDURES, dict(reversed(order.items())), key=KEY)
    assert second.content == first.content
    assert Procedure.objects.count() == 1


@pytest.mark.parametrize("change", [{"product_mass_g": "2.001"}, {"target_smiles": "CCO"}])
def test_the_same_key_with_another_body_is_refused(change: dict[str, str], lab: Laboratory) -> None:
    client = lab.client()
    client.post(PROCEDURES, octyl_order(), key=KEY)
    before = lab.counts()
    second = client.post(PROCEDURES, octyl_order(**change), key=KEY)
    body = assert_problem(second, 422, "idempotency_key_reused")
    assert "make a new key" in body["detail"]
    assert lab.counts() == before
    assert OutboxMessage.objects.count() == 1


def test_a_missing_key_is_asked_for(lab: Laboratory) -> None:
    client = lab.client()
    before = lab.counts()
    response = client.post(PROCEDURES, octyl_order(), Idempotency_Key="")
    body = assert_problem(response, 400, "idempotency_key_missing")
    assert "Idempotency-Key" in body["detail"]
    assert lab.counts() == before


@pytest.mark.parametrize(
    "key",
    ["short-7", '"short-7"', "x" * 129, "has a space in it", "tab\tinside-it", "näh-nicht-so"],
)
def test_a_key_that_is_no_key_is_refused(key: str, lab: Laboratory) -> None:
    before = lab.counts()
    assert_problem(lab.client().post(PROCEDURES, octyl_order(), key=key), 400, "malformed_request")
    assert lab.counts() == before
    assert RememberedAnswer.objects.count() == 0


@pytest.mark.parametrize("key", ["eight-88", "x" * 128])
def test_the_shortest_and_the_longest_key_are_taken(key: str, lab: Laboratory) -> None:
    assert lab.client().post(PROCEDURES, octyl_order(), key=key).status_code == 202
    assert RememberedAnswer.objects.get().key == key


def test_a_quoted_key_is_the_same_key(lab: Laboratory) -> None:
    client = lab.client()
    first = client.post(PROCEDURES, octyl_order(), key=KEY)
    second = client.post(PROCEDURES, octyl_order(), key=f'"{KEY}"')
    assert second["Idempotency-Replayed"] == "true"
    assert second.content == first.content
    assert Procedure.objects.count() == 1


def test_another_person_with_the_same_key_is_independent(lab: Laboratory) -> None:
    mine = lab.client("MIRA").post(PROCEDURES, octyl_order(), key=KEY)
    theirs = lab.client("INES").post(PROCEDURES, octyl_order(), key=KEY)
    assert theirs.status_code == 202
    assert "Idempotency-Replayed" not in theirs
    assert theirs.json()["code"] != mine.json()["code"]
    assert set(Procedure.objects.values_list("requested_by", flat=True)) == {"MIRA", "INES"}


def test_a_refused_request_does_not_use_the_key_up(lab: Laboratory) -> None:
    client = lab.client()
    refused = client.post(PROCEDURES, octyl_order(target_smiles="CCO"), key=KEY)
    assert error_codes(assert_problem(refused, 422, "invalid_value")) == [
        ("target_smiles", "no_sugar")
    ]
    assert RememberedAnswer.objects.count() == 0
    mended = client.post(PROCEDURES, octyl_order(), key=KEY)
    assert mended.status_code == 202
    assert "Idempotency-Replayed" not in mended


def test_a_cancel_repeated_with_its_key_gives_the_first_answer(lab: Laboratory) -> None:
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    lab.run_outbox()
    etag = client.get(accepted["Location"])["ETag"]
    first = client.post(cancel_path(accepted), key=KEY, If_Match=etag)
    before = lab.counts()
    second = client.post(cancel_path(accepted), key=KEY, If_Match=etag)
    assert (first.status_code, second.status_code) == (200, 200)
    assert second.content == first.content
    assert second["ETag"] == first["ETag"]
    assert second["Idempotency-Replayed"] == "true"
    assert lab.counts() == before
    assert Event.objects.filter(kind="procedure.cancelled").count() == 1


def test_a_cancel_needs_a_key(lab: Laboratory) -> None:
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    response = client.post(cancel_path(accepted), Idempotency_Key="", If_Match="*")
    assert_problem(response, 400, "idempotency_key_missing")
    assert Procedure.objects.get().state == "queued"


def test_a_cancel_with_the_key_of_another_cancel_is_refused(lab: Laboratory) -> None:
    client = lab.client()
    one, two = (client.post(PROCEDURES, octyl_order()) for _ in range(2))
    assert client.post(cancel_path(one), key=KEY, If_Match="*").status_code == 200
    response = client.post(cancel_path(two), key=KEY, If_Match="*")
    assert_problem(response, 422, "idempotency_key_reused")
    assert client.get(two["Location"]).json()["state"] == "queued"


def test_the_key_of_a_request_may_be_used_for_its_cancel(lab: Laboratory) -> None:
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order(), key=KEY)
    response = client.post(cancel_path(accepted), key=KEY, If_Match="*")
    assert response.status_code == 200
    assert response.json()["state"] == "cancelled"


def test_a_refused_cancel_does_not_use_the_key_up(lab: Laboratory) -> None:
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    assert_problem(client.post(cancel_path(accepted), key=KEY), 428, "precondition_missing")
    assert client.post(cancel_path(accepted), key=KEY, If_Match="*").status_code == 200


def test_a_remembered_answer_is_not_for_a_token_that_may_only_read(lab: Laboratory) -> None:
    """The same person, key and request, by another token."""
    writing, reading = lab.client("MIRA"), lab.client("MIRA", scope="read")
    accepted = writing.post(PROCEDURES, octyl_order(), key=KEY)
    cancelled = writing.post(cancel_path(accepted), key=KEY, If_Match="*")
    assert (accepted.status_code, cancelled.status_code) == (202, 200)
    for response in (
        reading.post(PROCEDURES, octyl_order(), key=KEY),
        reading.post(cancel_path(accepted), key=KEY, If_Match="*"),
    ):
        body = assert_problem(response, 403, "not_allowed")
        assert body["detail"] == "This token may only read; make one with scope write."
        assert accepted.json()["code"] not in response.content.decode()


def test_who_has_left_the_project_gets_what_a_first_request_would_get(lab: Laboratory) -> None:
    client = lab.client("MIRA")
    accepted = client.post(PROCEDURES, octyl_order(), key=KEY)
    assert client.post(cancel_path(accepted), key=KEY, If_Match="*").status_code == 200
    Membership.objects.filter(person__code="MIRA").delete()
    for key in (KEY, "another-key"):
        again = client.post(PROCEDURES, octyl_order(), key=key)
        assert error_codes(assert_problem(again, 422, "invalid_value")) == [
            ("project", "unknown_project")
        ]
        assert_problem(client.post(cancel_path(accepted), key=key, If_Match="*"), 404, "not_found")


def test_who_has_become_a_viewer_gets_what_a_first_request_would_get(lab: Laboratory) -> None:
    client = lab.client("MIRA")
    accepted = client.post(PROCEDURES, octyl_order(), key=KEY)
    assert client.post(cancel_path(accepted), key=KEY, If_Match="*").status_code == 200
    Membership.objects.filter(person__code="MIRA").update(role="viewer")
    for key in (KEY, "another-key"):
        assert_problem(client.post(PROCEDURES, octyl_order(), key=key), 403, "not_allowed")
        again = client.post(cancel_path(accepted), key=key, If_Match="*")
        assert_problem(again, 403, "not_allowed")


def test_a_project_closed_meanwhile_does_not_hide_what_was_answered(lab: Laboratory) -> None:
    """Closing takes nobody's right away: who asked learns that it was taken."""
    client = lab.client("MIRA")
    accepted = client.post(PROCEDURES, octyl_order(), key=KEY)
    Project.objects.filter(code="LECTIN-07").update(is_open=False)
    again = client.post(PROCEDURES, octyl_order(), key=KEY)
    assert (again.status_code, again.content) == (202, accepted.content)
    assert_problem(client.post(PROCEDURES, octyl_order()), 403, "not_allowed")
