"""A planned procedure whose material is gone says so; its state is for people to change."""

import json

import pytest

from labplan.base.models import Event, OutboxMessage
from labplan.procedures.models import Procedure
from tests.laboratory import PROCEDURES, Laboratory, octyl_order


@pytest.fixture
def planned(lab: Laboratory) -> str:
    path: str = lab.client().post(PROCEDURES, octyl_order())["Location"]
    lab.run_outbox()
    return path


def _stop(lab: Laboratory, bottle: str) -> None:
    response = lab.client().post(
        f"/api/v1/bottles/{bottle}/status/", {"status": "quarantined", "reason": "brown"},
        If_Match="*",
    )  # fmt: skip
    assert response.status_code == 200


def test_a_cancelled_hold_is_shown_on_its_procedure(lab: Laboratory, planned: str) -> None:
    mira = lab.client()
    before = mira.get(planned)
    assert before.json()["lost_holds"] == []
    held = mira.get(f"/api/v1/reservations/{before.json()['reservation']}/").json()["holds"]
    [hold] = [hold for hold in held if hold["bottle"] == "GPA-1"]
    _stop(lab, "GPA-1")
    assert lab.run_outbox() == 1
    shown = mira.get(planned)
    assert shown.json()["state"] == "planned"
    assert shown.json()["lost_holds"] == [
        {"line": hold["line"], "bottle": "GPA-1", "amount": f"{hold['mass_mg']} mg",
         "why": "it is quarantined"},
    ]  # fmt: skip
    assert shown["ETag"] != before["ETag"]
    assert shown.json()["document"] == before.json()["document"]
    assert Event.objects.filter(kind="procedure.holds_lost").count() == 1
    [notice] = mira.get("/api/v1/notices/").json()["results"]
    assert f"set aside for procedure {shown.json()['code']}" in notice["detail"]
    cancelled = mira.post(planned + "cancel/", If_Match=shown["ETag"])
    assert cancelled.json()["state"] == "cancelled"


def test_a_message_delivered_twice_is_noted_once(lab: Laboratory, planned: str) -> None:
    _stop(lab, "GPA-1")
    message = OutboxMessage.objects.get(topic="stock.holds_cancelled")
    for _ in range(2):
        OutboxMessage.objects.filter(pk=message.pk).update(state="new")
        assert lab.run_outbox() == 1
    procedure = Procedure.objects.get()
    assert len(json.loads(procedure.lost_holds)) == 1
    message.refresh_from_db()
    assert message.state == "done"


def test_a_reservation_of_nobody_s_procedure_is_left_alone(lab: Laboratory, planned: str) -> None:
    version = Procedure.objects.get().version
    body = {"project": "LECTIN-07", "purpose": "p", "lines": [{"bottle": "OCT-1", "volume_ml": 1}]}
    assert lab.client().post("/api/v1/reservations/", body).status_code == 201
    Procedure.objects.update(reservation_code=None, state="failed", document=None)
    _stop(lab, "OCT-1")
    lab.run_outbox()
    assert Procedure.objects.get().version == version
    assert set(OutboxMessage.objects.values_list("state", flat=True)) == {"done"}


def test_what_is_given_back_by_hand_is_shown_too_and_the_rest_can_be_cancelled(
    lab: Laboratory, planned: str
) -> None:
    mira = lab.client()
    shown = mira.get(planned).json()
    path = f"/api/v1/reservations/{shown['reservation']}/"
    held = mira.get(path).json()["holds"]
    assert mira.post(path + "release/", {"reason": "oops"}, If_Match="*").status_code == 200
    lab.run_outbox()
    after = mira.get(planned)
    assert after.json()["state"] == "planned"
    lost = after.json()["lost_holds"]
    assert [hold["bottle"] for hold in lost] == [hold["bottle"] for hold in held]
    assert {hold["why"] for hold in lost} == {"it was given back"}
    before = lab.counts()
    cancelled = mira.post(planned + "cancel/", If_Match=after["ETag"])
    assert (cancelled.status_code, cancelled.json()["state"]) == (200, "cancelled")
    assert lab.counts() == before
