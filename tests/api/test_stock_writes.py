"""What moves the stock, over HTTP: each as described, once for each key, refused in full."""

import re
from typing import Any

import pytest

from inventory.models import Bottle, Notice
from tests.api.openapi import assert_described
from tests.api.problems import assert_problem, error_codes
from tests.api.url_map import served_patterns
from tests.laboratory import ApiTestClient, Laboratory

API = "/api/v1"
RESERVATIONS = f"{API}/reservations/"
GPA = f"{API}/bottles/GPA-1/"


@pytest.fixture(scope="module")
def document() -> dict[str, Any]:
    served: dict[str, Any] = ApiTestClient(None).get(f"{API}/openapi.json").json()
    return served


def post(
    client: ApiTestClient, document: dict[str, Any], path: str, body: Any, status: int = 200,
    **headers: str,
) -> Any:  # fmt: skip
    """POST, check the status and hold the answer against the description."""
    response = client.post(path, body, **headers)
    assert response.status_code == status, response.content
    routes = ["/" + re.sub(r"<(?:\w+:)?(\w+)>", r"{\1}", r) for r, _ in served_patterns()]
    [route] = [r for r in routes if re.fullmatch(re.sub(r"{\w+}", "[^/]+", r), path)]
    assert_described(document, route, "post", response)
    return response


def order(*lines: dict[str, Any], **more: Any) -> dict[str, Any]:
    return {"project": "LECTIN-07", "purpose": "a test", "lines": list(lines), **more}


def test_a_reservation_from_making_to_release(lab: Laboratory, document: dict[str, Any]) -> None:
    mira = lab.client()
    body = order(
        {"bottle": "GPA-1", "mass_mg": "500.125"},
        {"substance": "dichloromethane", "volume_ml": "25", "water_ppm_max": 30},
    )
    made = post(mira, document, RESERVATIONS, body, 201, key="the-same-key")
    shown = made.json()
    assert (shown["shortfalls"], shown["is_firm"], shown["state"]) == ([], False, "open")
    assert shown["holds"][0]["bottle"] == "GPA-1"
    assert shown["holds"][0]["mass_mg"] == "500.125"
    again = post(mira, document, RESERVATIONS, body, 201, key="the-same-key")
    assert (again["Idempotency-Replayed"], again.json()) == ("true", shown)
    path = made["Location"]
    assert mira.get(path)["ETag"] == made["ETag"]
    assert mira.get(path, If_None_Match=made["ETag"]).status_code == 304

    used = post(mira, document, path + "use/", {"lines": [{"line": 1, "mass_mg": 490}]})
    assert used.json()["cancelled_holds"] == 0
    assert used.json()["holds"][0]["used_mass_mg"] == "490"
    assert used.json()["holds"][0]["given_back_mass_mg"] == "10.125"
    stale = mira.post(path + "extend/", {"expires_on": "2026-12-24"}, If_Match=made["ETag"])
    assert_problem(stale, 412, "stale_copy")
    assert_problem(mira.post(path + "extend/", {"expires_on": "2026-12-24"}), 428,
                   "precondition_missing")  # fmt: skip
    longer = post(
        mira, document, path + "extend/", {"expires_on": "2026-12-24"}, If_Match=used["ETag"]
    )
    assert longer.json()["expires_on"] == "2026-12-24"
    gone = post(mira, document, path + "release/", {}, If_Match=longer["ETag"])
    assert gone.json()["state"] == "closed"
    assert_problem(mira.post(path + "release/", {}, If_Match="*"), 409, "state_forbids")
    # the use of what is not held any more is a fact all the same
    post(mira, document, path + "use/", {"lines": [{"line": 1, "mass_mg": "1"}]})


@pytest.mark.parametrize(
    ("body", "status", "code", "lines"),
    [
        (order({"bottle": "GPA-1", "mass_mg": 1}, colour=1), 400, "unknown_field", "colour"),
        (order({"bottle": "GPA-1", "mass": 1}), 400, "unknown_field", "lines[0].mass"),
        (order("GPA-1"), 400, "malformed_request", None),
        (order(), 422, "invalid_value", "lines"),
        ({"project": "LECTIN-07", "purpose": "p"}, 422, "invalid_value", "lines"),
        (order({"bottle": "GPA-1"}), 422, "invalid_value", "lines[0].mass_mg"),
        (order({"bottle": "GPA-1", "mass_mg": "0.0001"}), 422, "invalid_value",
         "lines[0].mass_mg"),
        (order({"bottle": "GPA-1", "mass_mg": 1, "pieces": 1}), 422, "invalid_value",
         "lines[0].mass_mg"),
        (order({"mass_mg": 1}), 422, "invalid_value", "lines[0].bottle"),
        (order({"bottle": "GPA-1", "mass_mg": 1, "water_ppm_max": 5}), 422, "invalid_value",
         "lines[0]"),
        (order({"bottle": "NO-SUCH", "mass_mg": 1}), 422, "invalid_value", "lines[0].bottle"),
        (order({"bottle": "GPA-1", "volume_ml": 1}), 422, "not_convertible", "lines[0]"),
        (order({"bottle": "GPA-1", "mass_mg": 10**8}), 409, "stock_short", "lines[0]"),
        (order({"substance": "no-such", "mass_mg": 1}), 409, "stock_short", "lines[0]"),
        (order({"bottle": "GPA-1", "mass_mg": 1}, project="NOT-MINE"), 422, "invalid_value",
         "project"),
        (order({"bottle": "GPA-1", "mass_mg": 1}, expires_on="2026-11-30"), 422,
         "invalid_value", "expires_on"),
        (order({"bottle": "GPA-1", "mass_mg": 1}, expires_on="soon"), 422, "invalid_value",
         "expires_on"),
    ],
)  # fmt: skip
def test_what_cannot_be_set_aside_says_why_and_changes_nothing(
    body: Any, status: int, code: str, lines: str | None, lab: Laboratory
) -> None:
    before = lab.counts()
    problem = assert_problem(lab.client().post(RESERVATIONS, body), status, code)
    if lines is not None:
        assert lines in [field for field, _ in error_codes(problem)]
    assert lab.counts() == before


def test_what_there_is_is_taken_when_asked_for(lab: Laboratory, document: dict[str, Any]) -> None:
    body = order({"bottle": "GPA-1", "mass_mg": 10**7}, takes_what_there_is=True)
    shown = post(lab.client(), document, RESERVATIONS, body, 201).json()
    assert shown["holds"][0]["mass_mg"] == "99980"
    assert shown["shortfalls"] == [
        {"line": 1, "detail": "GPA-1: 10000000 mg needed, 99980 mg can be used."}
    ]


def test_moles_are_reckoned_with_the_label_of_the_bottle(lab: Laboratory) -> None:
    body = order({"bottle": "LAC-1", "amount_mmol": "10"})
    made = lab.client().post(RESERVATIONS, body)
    assert made.status_code == 201
    assert made.json()["holds"][0]["mass_mg"] == "3639.515"  # 360.312 g/mol at 99.0 %


def test_a_fact_tells_whom_it_hits(lab: Laboratory, document: dict[str, Any]) -> None:
    ines, mira = lab.client("INES"), lab.client("MIRA")
    post(ines, document, RESERVATIONS, order({"bottle": "GPA-1", "mass_mg": 90_000}), 201)
    body = {"kind": "use", "project": "LECTIN-07", "mass_mg": "20000", "reason": "spill"}
    moved = post(mira, document, GPA + "movements/", body, 201)
    assert (moved.json()["cancelled_holds"], moved.json()["on_hand_mass_mg"]) == (1, "80000")
    assert mira.get(f"{API}/notices/").json()["results"] == []
    [notice] = ines.get(f"{API}/notices/?unread=true").json()["results"]
    assert (notice["bottle"], notice["line"], notice["read_at"]) == ("GPA-1", 1, None)
    path = f"{API}/notices/{notice['id']}/read/"
    assert_problem(mira.post(path), 404, "not_found")
    assert post(ines, document, path, {}).json()["read_at"] is not None
    assert ines.get(f"{API}/notices/?unread=true").json()["results"] == []
    assert len(ines.get(f"{API}/notices/?unread=false").json()["results"]) == 1
    assert Notice.objects.count() == 1


@pytest.mark.parametrize(
    ("body", "field"),
    [
        ({"kind": "use", "mass_mg": 1}, "project"),
        ({"kind": "use", "project": "LECTIN-07"}, "mass_mg"),
        ({"kind": "gift", "mass_mg": 1}, "kind"),
        ({"kind": "transfer"}, "place"),
        ({"kind": "transfer", "place": "NOWHERE"}, "place"),
        ({"kind": "return", "project": "LECTIN-07", "mass_mg": 1, "is_broken": True}, "is_broken"),
        ({"kind": "loss", "is_broken": True, "mass_mg": 1}, "amount"),
        ({"kind": "loss", "mass_mg": 1, "booked_on": "2026-12-02"}, "booked_on"),
    ],
)
def test_a_movement_that_says_too_little_is_refused(body: Any, field: str, lab: Laboratory) -> None:
    before = lab.counts()
    problem = assert_problem(lab.client().post(GPA + "movements/", body), 422, "invalid_value")
    assert field in [name for name, _ in error_codes(problem)]
    assert lab.counts() == before


def test_transfer_loss_and_disposal(lab: Laboratory, document: dict[str, Any]) -> None:
    mira, keeper = lab.client("MIRA"), lab.client("JONAS")
    moves = GPA + "movements/"
    moved = post(mira, document, moves, {"kind": "transfer", "place": "DB"}, 201).json()
    assert moved["place"] == "DB"
    post(mira, document, moves, {"kind": "loss", "mass_mg": "5", "reason": "spilt"}, 201)
    assert_problem(mira.post(moves, {"kind": "disposal"}), 403, "not_allowed")
    gone = post(keeper, document, moves, {"kind": "disposal", "reason": "old"}, 201).json()
    assert (gone["on_hand_mass_mg"], gone["status"]) == ("0", "disposed")
    kinds = [row["kind"] for row in keeper.get(moves).json()["results"]]
    assert kinds == ["disposal", "loss", "transfer", "receipt"]


def test_quarantine_looks_at_the_version(lab: Laboratory, document: dict[str, Any]) -> None:
    mira, body = lab.client(), {"status": "quarantined", "reason": "brown"}
    etag = mira.get(GPA)["ETag"]
    mira.post(RESERVATIONS, order({"bottle": "GPA-1", "mass_mg": 1}))
    assert_problem(mira.post(GPA + "status/", body), 428, "precondition_missing")
    assert_problem(mira.post(GPA + "status/", body, If_Match=etag), 412, "stale_copy")
    changed = post(mira, document, GPA + "status/", body, If_Match=mira.get(GPA)["ETag"])
    assert (changed.json()["status"], changed.json()["cancelled_holds"]) == ("quarantined", 1)
    free = {"status": "usable", "reason": "tested"}
    assert_problem(mira.post(GPA + "status/", free, If_Match="*"), 403, "not_allowed")
    post(lab.client("JONAS"), document, GPA + "status/", free, If_Match=changed["ETag"])


def test_a_dried_solvent_over_http(lab: Laboratory, document: dict[str, Any]) -> None:
    mira, path = lab.client(), f"{API}/bottles/DCM-2/decant/"
    body = {
        "code": "DCM-2D", "volume_ml": "100", "place": "S1", "tare_mg": "120000",
        "preparation": "dried over 3A sieves for 48 h", "form": "neat", "stabiliser": "none",
        "water_ppm": "6",
    }  # fmt: skip
    made = post(mira, document, path, body, 201, key="one-decant-only")
    shown = made.json()
    assert (shown["parent"], shown["preparation"]) == ("DCM-2", body["preparation"])
    assert (shown["stabiliser"], shown["on_hand_volume_ml"]) == ("none", "100")
    assert mira.get(made["Location"]).json() == shown
    again = post(mira, document, path, body, 201, key="one-decant-only")
    assert again.json() == shown
    listed = mira.get(f"{API}/bottles/?parent=DCM-2").json()["results"]
    assert [bottle["code"] for bottle in listed] == ["DCM-2D"]
    [water] = mira.get(f"{API}/bottles/DCM-2D/readings/").json()["results"]
    assert (water["kind"], water["value"]) == ("water_ppm", "6")
    for wrong, field in (
        ({"water_ppm": ...}, "water_ppm"), ({"form": "hydrate"}, "hydrate_water"),
        ({"preparation": ...}, "form"), ({"code": "DCM-2D"}, "code"), ({"code": "a b"}, "code"),
        ({"volume_ml": "0.01"}, "amount"),
    ):  # fmt: skip
        bad = {**body, "code": "DCM-9", **wrong}
        bad = {name: value for name, value in bad.items() if value is not ...}
        problem = assert_problem(mira.post(path, bad), 422, "invalid_value")
        assert field in [name for name, _ in error_codes(problem)]
    assert_problem(mira.post(path, {**body, "code": "D3", "volume_ml": 10**6}), 409, "stock_short")


def test_readings_over_http(lab: Laboratory, document: dict[str, Any]) -> None:
    mira, path = lab.client(), f"{API}/bottles/DCM-2/readings/"
    body = {"kind": "water_ppm", "value": "45.5", "read_on": "2026-12-01", "method": "KF"}
    read = post(mira, document, path, body, 201).json()
    assert (read["value"], read["method"]) == ("45.5", "KF")
    assert Bottle.objects.get(code="DCM-2").status == "usable"
    post(mira, document, path, {**body, "has_failed": True}, 201)
    assert Bottle.objects.get(code="DCM-2").status == "quarantined"
    late = mira.post(path, {**body, "read_on": "2026-12-02"})
    assert error_codes(assert_problem(late, 422, "invalid_value")) == [("read_on", "in_the_future")]


def test_counts_over_http(lab: Laboratory, document: dict[str, Any]) -> None:
    keeper = lab.client("JONAS")
    body = {
        "lines": [
            {"bottle": "GPA-1", "gross_mg": "146500", "tare_mg": "46500"},
            {"bottle": "OCT-1", "volume_ml": "400"},
            {"bottle": "CGG-1", "pieces": 1},
        ]
    }
    counted = post(keeper, document, f"{API}/counts/", body).json()
    assert [(line["bottle"], line["verdict"]) for line in counted["lines"]] == [
        ("GPA-1", "agrees"), ("OCT-1", "corrected"), ("CGG-1", "corrected"),
    ]  # fmt: skip
    assert counted["lines"][1]["found_volume_ml"] == "400"
    assert keeper.get(GPA).json()["tare_mg"] == "46500"
    before = lab.counts()
    wrong = {"lines": [{"bottle": "GPA-1", "gross_mg": 1}, {"bottle": "NO", "pieces": 1}]}
    problem = assert_problem(keeper.post(f"{API}/counts/", wrong), 422, "invalid_value")
    assert error_codes(problem) == [
        ("lines[0].gross_mg", "below_tare"), ("lines[1].bottle", "unknown_bottle"),
    ]  # fmt: skip
    assert lab.counts() == before


def test_quotas_over_http(lab: Laboratory, document: dict[str, Any]) -> None:
    keeper, mira = lab.client("JONAS"), lab.client()
    substance = lab.bottle("GPA-1").form.substance.code
    body = {
        "project": "LECTIN-07", "substance": substance, "starts_on": "2026-01-01",
        "ends_on": "2026-12-31", "mass_mg": "1000",
    }  # fmt: skip
    post(keeper, document, f"{API}/quotas/", body)
    assert_problem(mira.post(f"{API}/quotas/", body), 403, "not_allowed")
    assert mira.post(RESERVATIONS, order({"bottle": "GPA-1", "mass_mg": 600})).status_code == 201
    over = mira.post(RESERVATIONS, order({"bottle": "GPA-1", "mass_mg": 500}))
    problem = assert_problem(over, 422, "quota_exceeded")
    assert "400 mg of 1000 mg are left" in problem["detail"]
    [shown] = mira.get(f"{API}/quotas/?project=LECTIN-07").json()["results"]
    assert (shown["claimed_mass_mg"], shown["left_mass_mg"]) == ("600", "400")
    turned = {**body, "ends_on": "2025-12-31"}
    problem = assert_problem(keeper.post(f"{API}/quotas/", turned), 422, "invalid_value")
    assert error_codes(problem) == [("ends_on", "before_start")]


def test_what_a_stockroom_asks(lab: Laboratory, document: dict[str, Any]) -> None:
    keeper = lab.client("JONAS")

    def found(query: str) -> set[str]:
        page = keeper.get(f"{API}/bottles/?page_size=200&{query}").json()
        return {bottle["code"] for bottle in page["results"]}

    Bottle.objects.filter(code="DCM-2").update(expires_on="2026-12-31")
    assert "DCM-2" in found("expires_from=2026-12-01&expires_until=2026-12-31")
    assert "DCM-2" not in found("expires_until=2026-12-30")
    assert "DCM-2" not in found("expires_from=2027-01-01")
    wet = {"kind": "water_ppm", "value": "50", "read_on": "2026-12-01"}
    keeper.post(f"{API}/bottles/DCM-2/readings/", wet)
    assert "DCM-2" in found("water_ppm_above=49.9")
    assert "DCM-2" not in found("water_ppm_above=50")
    keeper.post(f"{API}/bottles/DCM-2/readings/", {**wet, "value": "5"})
    assert "DCM-2" not in found("water_ppm_above=49.9")

    path = f"{API}/substances/dichloromethane/"
    etag = keeper.get(path)["ETag"]
    lower = {"volume_ml": "100"}
    post(keeper, document, path + "minimum/", lower, If_Match=etag)
    assert found("under_minimum=true") == set()
    assert_problem(keeper.post(path + "minimum/", lower, If_Match=etag), 412, "stale_copy")
    shown = post(keeper, document, path + "minimum/", {"mass_mg": 10**8}, If_Match="*").json()
    assert shown["minimum"] == {"mass_mg": "100000000"}
    assert "DCM-2" in found("under_minimum=true")
    few = keeper.get(f"{API}/substances/?under_minimum=true").json()["results"]
    assert [substance["code"] for substance in few] == ["dichloromethane"]
    post(keeper, document, path + "minimum/", {"has_none": True}, If_Match="*")
    assert found("under_minimum=true") == set()

    for query, code in (
        ("expires_from=soon", "not_a_date"), ("expires_until=2026-13-01", "not_a_date"),
        ("water_ppm_above=wet", "not_a_number"), ("under_minimum=yes", "unknown_value"),
    ):  # fmt: skip
        refused = assert_problem(keeper.get(f"{API}/bottles/?{query}"), 422, "invalid_value")
        assert error_codes(refused)[0][1] == code
    assert_problem(keeper.get(f"{API}/bottles/?expires=2026"), 400, "unknown_field")


def test_who_of_my_project_holds_this(lab: Laboratory) -> None:
    mira, ines = lab.client("MIRA"), lab.client("INES")
    mine = mira.post(RESERVATIONS, order({"bottle": "GPA-1", "mass_mg": 5})).json()["code"]

    def found(client: ApiTestClient, query: str) -> list[str]:
        return [row["code"] for row in client.get(RESERVATIONS + "?" + query).json()["results"]]

    assert found(mira, "bottle=GPA-1") == [mine]
    assert found(ines, "bottle=GPA-1&actor=MIRA&project=LECTIN-07&state=open") == [mine]
    assert found(mira, "bottle=LOA-1") == []  # held by GLYCAN-12, which is not hers
    assert len(found(ines, "bottle=LOA-1")) == 1
    assert found(mira, "bottle=GPA-1&expires_until=2026-12-14") == []
    assert found(mira, "expires_from=2026-12-15&expires_until=2026-12-15") == [mine]
    substance = lab.bottle("GPA-1").form.substance.code
    assert found(mira, f"substance={substance}") == [mine]
    mira.post(f"{RESERVATIONS}{mine}/release/", {}, If_Match="*")
    assert found(mira, "bottle=GPA-1") == []
    assert_problem(mira.get(RESERVATIONS + "?bottel=GPA-1"), 400, "unknown_field")
    assert_problem(mira.get(RESERVATIONS + "?state=gone"), 422, "invalid_value")
