"""The thread from POST to document, over HTTP."""

from tests.laboratory import PROCEDURES, Laboratory, octyl_order


def test_a_request_is_accepted_planned_and_shown(live_lab: Laboratory) -> None:
    client = live_lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    assert accepted.status_code == 202
    body = accepted.json()
    assert body["state"] == "queued"
    assert accepted["Location"] == body["links"]["self"]
    assert live_lab.run_outbox() == 1
    shown = client.get(accepted["Location"]).json()
    assert shown["state"] == "planned"
    charges = {c["key"]: c for c in shown["document"]["route"]["stages"][0]["charges"]}
    assert {charges[k]["bottle"] for k in ("donor", "acceptor", "promoter", "solvent")} == {
        "GPA-1",
        "OCT-1",
        "BFE-1",
        "DCM-1",
    }
