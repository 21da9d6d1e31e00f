"""Cancelling a procedure: on the version that was read, by who may, and what it held goes back."""

import json
from typing import Any

import pytest

from inventory.models import Balance, Hold, Movement, Reservation
from labplan.base.models import Event
from labplan.procedures import life
from labplan.procedures.models import Procedure
from tests.api.problems import assert_problem
from tests.api.url_map import EXPECTED
from tests.laboratory import PROCEDURES, ApiTestClient, Laboratory, octyl_order


def queued(lab: Laboratory, client: ApiTestClient | None = None) -> Any:
    """The answer to a new request."""
    return (client or lab.client()).post(PROCEDURES, octyl_order())


def planned(lab: Laboratory) -> Any:
    accepted = queued(lab)
    assert lab.run_outbox() == 1
    return accepted


def cancel(client: ApiTestClient, accepted: Any, **headers: str) -> Any:
    return client.post(accepted["Location"] + "cancel/", **headers)


def balances() -> dict[str, tuple[int, int]]:
    rows = Balance.objects.values_list("bottle__code", "on_hand", "held")
    return {code: (on_hand, held) for code, on_hand, held in rows}


def test_a_queued_procedure_is_cancelled_and_never_planned(lab: Laboratory) -> None:
    client, accepted = lab.client(), queued(lab)
    before = lab.counts()
    response = cancel(client, accepted, If_Match=accepted["ETag"])
    assert response.status_code == 200
    body = response.json()
    assert (body["state"], body["actions"], body["reservation"]) == ("cancelled", {}, None)
    assert lab.run_outbox() == 1
    assert client.get(accepted["Location"]).json()["state"] == "cancelled"
    assert lab.counts() == before


def test_what_a_planned_procedure_held_goes_back_in_full(lab: Laboratory) -> None:
    client = lab.client()
    at_first = balances()
    accepted = planned(lab)
    shown = client.get(accepted["Location"])
    held = Movement.objects.filter(kind="hold", project__code="LECTIN-07")
    bottles = set(held.values_list("bottle__code", flat=True))
    assert {"GPA-1", "OCT-1", "BFE-1", "DCM-1"} < bottles
    changed = {code for code, pair in balances().items() if pair != at_first[code]}
    assert changed == bottles

    response = cancel(client, accepted, If_Match=shown["ETag"])
    assert response.status_code == 200
    assert response.json()["state"] == "cancelled"
    assert balances() == at_first
    released = Movement.objects.filter(kind="release")
    assert sorted(released.values_list("bottle__code", "held_change")) == sorted(
        (code, -change) for code, change in held.values_list("bottle__code", "held_change")
    )
    assert {line.reason for line in released} == {f"{shown.json()['code']} cancelled"}
    assert {line.actor_code for line in released} == {"MIRA"}
    reservation = Reservation.objects.get(code=shown.json()["reservation"])
    assert reservation.state == "closed"
    assert set(reservation.holds.values_list("state", flat=True)) == {"released"}
    for hold in Hold.objects.filter(reservation=reservation):
        assert (hold.used, hold.given_back) == (0, hold.amount)


def test_the_free_amount_is_seen_to_come_back(lab: Laboratory) -> None:
    client = lab.client()
    usable = client.get("/api/v1/bottles/GPA-1/").json()["usable_mass_mg"]
    accepted = planned(lab)
    held = client.get("/api/v1/bottles/GPA-1/").json()["usable_mass_mg"]
    assert (usable, held) == ("99980", "97126")
    cancel(client, accepted, If_Match="*")
    assert client.get("/api/v1/bottles/GPA-1/").json()["usable_mass_mg"] == usable


def test_a_cancelled_procedure_keeps_its_document(lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    before = client.get(accepted["Location"] + "document/").content
    cancel(client, accepted, If_Match="*")
    assert client.get(accepted["Location"] + "document/").content == before
    assert "(cancelled)" in client.get(accepted["Location"] + "sheet.html").content.decode()


def test_it_is_written_down_who_cancelled_what(lab: Laboratory) -> None:
    accepted = planned(lab)
    cancel(lab.client("INES"), accepted, If_Match="*")
    event = Event.objects.get(kind="procedure.cancelled")
    assert (event.actor_code, event.subject) == ("INES", f"procedure {accepted.json()['code']}")
    assert event.detail == '{"after": "cancelled", "before": "planned"}'


def assert_untouched(lab: Laboratory, before: tuple[int, ...], state: str) -> None:
    assert lab.counts() == before
    assert Procedure.objects.get().state == state


def test_without_if_match_nothing_is_cancelled(lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    before, etag = lab.counts(), client.get(accepted["Location"])["ETag"]
    body = assert_problem(cancel(client, accepted), 428, "precondition_missing")
    assert etag in body["detail"]
    assert_untouched(lab, before, "planned")


@pytest.mark.parametrize("kind", ["stale", "weak", "unquoted", "of another", "empty list"])
def test_a_tag_that_is_not_the_present_one_cancels_nothing(kind: str, lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    before, etag = lab.counts(), client.get(accepted["Location"])["ETag"]
    given = {
        "stale": accepted["ETag"],  # of the time when it was queued
        "weak": f"W/{etag}",
        "unquoted": etag.strip('"'),
        "of another": '"procedure-P-22222222-v2"',
        "empty list": ",",
    }[kind]
    body = assert_problem(cancel(client, accepted, If_Match=given), 412, "stale_copy")
    assert etag in body["detail"]
    assert_untouched(lab, before, "planned")


@pytest.mark.parametrize("pattern", ["*", "{etag}", '"something", {etag}'])
def test_a_star_or_a_list_with_the_present_tag_cancels(pattern: str, lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    etag = client.get(accepted["Location"])["ETag"]
    response = cancel(client, accepted, If_Match=pattern.format(etag=etag))
    assert (response.status_code, response.json()["state"]) == (200, "cancelled")


def test_the_etag_changes_with_the_state(lab: Laboratory) -> None:
    client, accepted = lab.client(), queued(lab)
    tags = [accepted["ETag"], client.get(accepted["Location"])["ETag"]]
    lab.run_outbox()
    tags.append(client.get(accepted["Location"])["ETag"])
    tags.append(cancel(client, accepted, If_Match=tags[-1])["ETag"])
    tags.append(client.get(accepted["Location"])["ETag"])
    code = accepted.json()["code"]
    endings = ("v1", "v1+waiting-0", "v2", "v3", "v3")
    assert tags == [f'"procedure-{code}-{ending}"' for ending in endings]


def test_who_has_the_present_version_gets_no_body_again(lab: Laboratory) -> None:
    client, path = lab.client(), queued(lab)["Location"]
    etag = client.get(path)["ETag"]
    same = client.get(path, If_None_Match=etag)
    assert (same.status_code, same.content, same["ETag"]) == (304, b"", etag)
    assert client.get(path, If_None_Match=f"W/{etag}").status_code == 304
    lab.run_outbox()
    changed = client.get(path, If_None_Match=etag)
    assert (changed.status_code, changed.json()["state"]) == (200, "planned")


def test_cancelling_twice_is_refused_the_second_time(lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    assert cancel(client, accepted, If_Match="*").status_code == 200
    before = lab.counts()
    body = assert_problem(cancel(client, accepted, If_Match="*"), 409, "state_forbids")
    assert "cancelled cannot be changed by 'cancel'; possible: nothing" in body["detail"]
    assert lab.counts() == before


@pytest.mark.parametrize(
    "state", ["refused", "short", "contended", "failed", "lapsed", "finished", "abandoned"]
)
def test_what_has_ended_is_not_cancelled(state: str, lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    Procedure.objects.update(state=state)
    before, held = lab.counts(), balances()
    body = assert_problem(cancel(client, accepted, If_Match="*"), 409, "state_forbids")
    assert f"that is {state}" in body["detail"]
    assert_untouched(lab, before, state)
    assert balances() == held


def test_what_is_running_is_not_cancelled_but_may_be_abandoned(lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    Procedure.objects.update(state=life.RUNNING)
    before, held = lab.counts(), balances()
    body = assert_problem(cancel(client, accepted, If_Match="*"), 409, "state_forbids")
    assert body["detail"].endswith("possible: abandon, finish.")
    assert_untouched(lab, before, "running")
    assert balances() == held


@pytest.mark.parametrize("role", ["viewer", "stock_keeper", "approver"])
def test_a_role_that_only_looks_cancels_nothing(role: str, lab: Laboratory) -> None:
    accepted = planned(lab)
    lab.add_member("GUEST", role)
    before = lab.counts()
    body = assert_problem(cancel(lab.client("GUEST"), accepted, If_Match="*"), 403, "not_allowed")
    assert "chemist, lead" in body["detail"]
    assert_untouched(lab, before, "planned")


def test_a_stranger_is_told_that_there_is_no_such_procedure(lab: Laboratory) -> None:
    accepted = planned(lab)
    before = lab.counts()
    refused = cancel(lab.stranger(), accepted, If_Match="*")
    body = assert_problem(refused, 404, "not_found")
    assert body["detail"] == f"There is no procedure {accepted.json()['code']}."
    assert_untouched(lab, before, "planned")


def test_the_state_is_not_told_before_the_right_is_checked(lab: Laboratory) -> None:
    """A viewer without If-Match gets 403, not 428 with the present version."""
    accepted = planned(lab)
    lab.add_member("GUEST", "viewer")
    assert_problem(cancel(lab.client("GUEST"), accepted), 403, "not_allowed")


@pytest.mark.parametrize("body", [[], "cancel", 0, False, [{}]])
def test_a_cancel_takes_no_body_but_an_object(body: Any, lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    before = lab.counts()
    response = client._client.post(
        accepted["Location"] + "cancel/", data=json.dumps(body),
        content_type="application/json",
        headers={**client._headers, "Idempotency-Key": "cancel-key-1", "If-Match": "*"},
    )  # fmt: skip
    assert_problem(response, 400, "malformed_request")
    assert_untouched(lab, before, "planned")


def test_a_cancel_takes_no_field(lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    before = lab.counts()
    response = client.post(accepted["Location"] + "cancel/", {"reason": "rain"}, If_Match="*")
    assert_problem(response, 400, "unknown_field")
    assert_untouched(lab, before, "planned")


def test_a_cancel_without_any_body_is_enough(lab: Laboratory) -> None:
    client, accepted = lab.client(), planned(lab)
    response = client._client.generic(
        "POST", accepted["Location"] + "cancel/", content_type="",
        headers={**client._headers, "Idempotency-Key": "cancel-key-2", "If-Match": "*"},
    )  # fmt: skip
    assert (response.status_code, response.json()["state"]) == (200, "cancelled")


def test_what_may_be_done_is_told_with_its_address_and_only_what_is_served(
    lab: Laboratory,
) -> None:
    client, accepted = lab.client(), queued(lab)
    path = accepted["Location"]
    assert accepted.json()["actions"] == {"cancel": path + "cancel/"}
    lab.run_outbox()
    shown = client.get(path)
    served = {name.removeprefix("procedure-") for name in EXPECTED}
    assert "cancel" in served
    assert set(shown.json()["actions"]) == {"approve", "cancel"} & served
    told = client.post(shown.json()["actions"]["cancel"], If_Match=shown["ETag"])
    assert (told.status_code, told.json()["actions"]) == (200, {})
    again = assert_problem(client.post(path + "cancel/", If_Match="*"), 409, "state_forbids")
    assert again["detail"].endswith("possible: nothing any more.")
