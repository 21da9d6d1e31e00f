"""Every operation over HTTP x everybody x both scopes of a token, against a table by hand.

The rows of the table are what is served; the columns are the roles in the project that everything
belongs to, the same roles in another project, and nobody, an administrator and an auditor, who
are in none. What crosses from another project stands in the middle: the stock as such, and the
whole book of a bottle for whoever keeps stock anywhere.
"""

from typing import Any

import pytest
from django.db import transaction

from inventory.models import Quota, Substance
from labplan.base import clock
from labplan.base.models import Membership, Person
from tests.api import targets
from tests.api.url_map import EXPECTED, Planted, plant_procedure
from tests.laboratory import PROCEDURES, ROUTES, ApiTestClient, Laboratory, octyl_order

ROLES = ("viewer", "chemist", "stock_keeper", "approver", "lead")
HERE, ELSEWHERE = "LECTIN-07", "GLYCAN-12"
PEOPLE = (
    *[(role, HERE) for role in ROLES],
    *[(role, ELSEWHERE) for role in ROLES],
    ("none", ""), ("administrator", ""), ("auditor", ""),
)  # fmt: skip

# x: seen or done. o: a list without anything of the project. h: hidden, answered 404.
# -: refused, 403. u: no such project for him, 422. b: let in, and only then the empty body is
# refused, 422: what a sound body does is tested with the operation itself.
#                             in the project  in another one  none admin auditor
#                             v  c  k  a  l   v  c  k  a  l   n  A  U
TABLE = {
    "GET project-list":         "x x x x x      o o o o o      o x x",
    "GET project-detail":       "x x x x x      h h h h h      h x x",
    "GET substance-list":       "x x x x x      x x x x x      x x x",
    "GET substance-detail":     "x x x x x      x x x x x      x x x",
    "GET bottle-list":          "x x x x x      x x x x x      x x x",
    "GET bottle-detail":        "x x x x x      x x x x x      x x x",
    "GET place-list":           "x x x x x      x x x x x      x x x",
    "GET movement-list":        "x x x x x      o o x o o      o x x",
    "GET reservation-list":     "x x x x x      o o o o o      o x x",
    "GET reservation-detail":   "x x x x x      h h h h h      h x x",
    "GET procedure-list":       "x x x x x      o o o o o      o x x",
    "GET procedure-detail":     "x x x x x      h h h h h      h x x",
    "GET procedure-document":   "x x x x x      h h h h h      h x x",
    "GET procedure-sheet-html": "x x x x x      h h h h h      h x x",
    "GET procedure-sheet-pdf":  "x x x x x      h h h h h      h x x",
    "GET token-list":           "x x x x x      x x x x x      x x x",
    "POST route-preview":       "x x x x x      x x x x x      x x x",
    "POST procedure-list":      "- x - - x      u u u u u      u - -",
    "POST procedure-cancel":    "- x - - x      h h h h h      h - -",
    "POST token-list":          "x x x x x      x x x x x      x x x",
    "POST token-revoke":        "x x x x x      x x x x x      x x x",
    "GET reading-list":         "x x x x x      x x x x x      x x x",
    "GET quota-list":           "x x x x x      o o o o o      o x x",
    # a notice is for the one person whose hold it is about, and she is none of these
    "GET notice-list":          "o o o o o      o o o o o      o o o",
    "POST notice-read":         "h h h h h      h h h h h      h h h",
    "POST quota-list":          "- - b - -      - - b - -      - b -",
    "POST substance-minimum":   "- - b - -      - - b - -      - b -",
    "POST stock-count":         "- - b - -      - - b - -      - b -",
    "POST bottle-list":         "- - b - -      - - b - -      - b -",
    "POST movement-list":       "- b b - b      - b b - b      - b -",
    "POST reading-list":        "- b b - b      - b b - b      - b -",
    "POST bottle-decant":       "- b b - b      - b b - b      - b -",
    "POST bottle-status":       "- b b - b      - b b - b      - b -",
    "POST reservation-list":    "- x - - x      u u u u u      u - -",
    "POST reservation-use":     "- b b - b      h h h h h      h - -",
    "POST reservation-release": "- x x - x      h h h h h      h - -",
    "POST reservation-extend":  "- b - - b      h h h h h      h - -",
}  # fmt: skip
# The same with a token of scope read, where it differs: what writes is refused to everybody.
WITH_READ_TOKEN = {
    "POST procedure-list":      "- - - - -      u u u u u      u - -",
    "POST procedure-cancel":    "- - - - -      h h h h h      h - -",
    "POST token-list":          "- - - - -      - - - - -      - - -",
    "POST token-revoke":        "- - - - -      - - - - -      - - -",
    "POST quota-list":          "- - - - -      - - - - -      - - -",
    "POST substance-minimum":   "- - - - -      - - - - -      - - -",
    "POST stock-count":         "- - - - -      - - - - -      - - -",
    "POST bottle-list":         "- - - - -      - - - - -      - - -",
    "POST movement-list":       "- - - - -      - - - - -      - - -",
    "POST reading-list":        "- - - - -      - - - - -      - - -",
    "POST bottle-decant":       "- - - - -      - - - - -      - - -",
    "POST bottle-status":       "- - - - -      - - - - -      - - -",
    "POST reservation-list":    "- - - - -      u u u u u      u - -",
    "POST reservation-use":     "- - - - -      h h h h h      h - -",
    "POST reservation-release": "- - - - -      h h h h h      h - -",
    "POST reservation-extend":  "- - - - -      h h h h h      h - -",
}  # fmt: skip
NAMING_A_PROJECT = {"POST procedure-list", "POST reservation-list"}
LISTS_OF_A_PROJECT = {
    "quota-list",
    "notice-list",
    "project-list",
    "movement-list",
    "reservation-list",
    "procedure-list",
}


@pytest.fixture
def planted(lab: Laboratory) -> Planted:
    Quota.objects.create(
        project=lab.project(HERE), substance=Substance.objects.get(code="1-octanol"), amount=10**9,
        measured_by="volume", starts_on="2026-12-01", ends_on="2026-12-31", actor_code="JONAS",
        created_at=clock.now(),
    )  # fmt: skip
    return plant_procedure(lab)


def test_the_table_has_a_row_for_all_that_is_served() -> None:
    served = {
        f"{method} {name}"
        for name, expected in EXPECTED.items()
        if expected.sees not in ("public", "door")
        for method in set(expected.methods) - {"HEAD", "OPTIONS"}
    }
    assert set(TABLE) == served
    assert set(WITH_READ_TOKEN) <= {row for row in served if row.startswith("POST")}
    assert {len(row.split()) for row in (*TABLE.values(), *WITH_READ_TOKEN.values())} == {13}
    assert set(ROLES) == set(Membership.Role.values)


def person_of(lab: Laboratory, role: str, project: str) -> str:
    code = f"{role[:9]}-{project or 'site'}".upper()
    if Person.objects.filter(code=code).exists():
        return code
    if project:
        lab.add_member(code, role, project)
    else:
        Person.objects.create_user(code, site_role=role)
    return code


def ask(client: ApiTestClient, row: str, planted: Planted) -> Any:
    """One valid request; whatever it does is for the caller to take back."""
    method, _, name = row.partition(" ")
    if row == "POST token-revoke":
        # a token of his own, but not the one he asks with
        rows = client.get("/api/v1/tokens/").json()["results"]
        number = next(r["id"] for r in rows if not r["is_current"])
        return client.post(f"/api/v1/tokens/{number}/revoke/")
    path = planted.path(name)
    if method == "GET":
        return client.get(path)
    body = {
        PROCEDURES: octyl_order(),
        ROUTES: {"target_smiles": targets.ALPHA_MANNOSIDE},
        "/api/v1/tokens/": {"name": "another"},
    }.get(path, EXPECTED[name].body or {})
    return client.post(path, body, If_Match="*")


def mark_of(response: Any, row: str) -> str:
    status = response.status_code
    if status in (200, 201, 202):
        name = row.partition(" ")[2]
        if row.startswith("GET") and name in LISTS_OF_A_PROJECT:
            return "x" if HERE in response.content.decode() else "o"
        return "x"
    if status == 422:
        return "u" if row in NAMING_A_PROJECT else "b"
    return {403: "-", 404: "h"}.get(status, str(status))


@pytest.mark.parametrize("scope", ["write", "read"])
@pytest.mark.parametrize("row", TABLE)
def test_who_may_do_what_is_what_the_table_says(
    row: str, scope: str, lab: Laboratory, planted: Planted
) -> None:
    expected = TABLE[row] if scope == "write" else WITH_READ_TOKEN.get(row, TABLE[row])
    before, found = lab.counts(), []
    for role, project in PEOPLE:
        back_to = transaction.savepoint()
        code = person_of(lab, role, project)
        client = lab.client(code, scope=scope)
        lab.client(code, scope="read" if scope == "write" else "write")  # another one to revoke
        found.append(mark_of(ask(client, row, planted), row))
        transaction.savepoint_rollback(back_to)
        lab.tokens.clear()
    assert found == expected.split()
    assert lab.counts() == before
