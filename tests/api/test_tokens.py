"""A person's own tokens: made, listed, ended at once; and what the database keeps of them."""

import io
from datetime import timedelta
from typing import Any

import pytest
from django.core.management import CommandError, call_command
from django.db import transaction

from labplan.base import clock, tokens
from labplan.base.models import ApiToken, Event, Membership, Person
from tests.api.problems import assert_problem, error_codes
from tests.db.bench import ON_POSTGRESQL, rows_of, run_sql
from tests.laboratory import ApiTestClient, Laboratory

TOKENS = "/api/v1/tokens/"


def make(client: ApiTestClient, **body: Any) -> dict[str, Any]:
    response = client.post(TOKENS, {"name": "balance", **body})
    assert response.status_code == 201, response.content
    assert response["Cache-Control"] == "no-store"
    made: dict[str, Any] = response.json()
    return made


def revoke(client: ApiTestClient, token_id: int) -> Any:
    return client.post(f"{TOKENS}{token_id}/revoke/")


def test_a_new_token_works_and_its_text_is_nowhere_in_the_database(lab: Laboratory) -> None:
    made = make(lab.client(), scope="read", days=2)
    assert ApiTestClient(made["token"]).get("/api/v1/projects/").status_code == 200
    assert (made["name"], made["scope"], made["is_current"]) == ("balance", "read", False)
    assert made["expires_at"] == (clock.now() + timedelta(days=2)).isoformat()
    for table in ("base_apitoken", "base_event", "base_rememberedanswer"):
        assert made["token"] not in str(rows_of(f"SELECT * FROM {table}"))


def test_a_key_stores_no_answer_with_a_token_in_it(lab: Laboratory) -> None:
    client = lab.client()
    first = client.post(TOKENS, {"name": "a"}, key="the-same-key-again").json()
    second = client.post(TOKENS, {"name": "a"}, key="the-same-key-again").json()
    assert first["id"] != second["id"]
    assert rows_of("SELECT count(*) FROM base_rememberedanswer") == [(0,)]


def test_the_list_shows_ones_own_tokens_without_their_texts(lab: Laboratory) -> None:
    client = lab.client()
    made = make(client)
    lab.client("JONAS").get(TOKENS)
    response = client.get(TOKENS)
    rows = response.json()["results"]
    assert [(row["name"], row["is_current"]) for row in rows] == [
        ("balance", False), ("test", True)
    ]  # fmt: skip
    assert made["token"] not in response.content.decode()
    assert "token" not in rows[0]


def test_a_revoked_token_ends_with_the_next_request(lab: Laboratory) -> None:
    client = lab.client()
    made = make(client)
    user = ApiTestClient(made["token"])
    assert user.get("/api/v1/projects/").status_code == 200
    shown = revoke(client, made["id"]).json()
    assert shown["revoked_at"] == clock.now().isoformat()
    assert_problem(user.get("/api/v1/projects/"), 401, "not_authenticated")
    events = Event.objects.filter(kind="token.revoked")
    assert [(e.actor_code, e.subject) for e in events] == [("MIRA", "person MIRA")]
    # a repeat changes nothing
    assert revoke(client, made["id"]).json() == shown
    assert events.count() == 1


def test_a_token_of_scope_read_ends_itself_and_no_other(lab: Laboratory) -> None:
    full, reading = lab.client(), lab.client(scope="read")
    ids = {row["scope"]: row["id"] for row in full.get(TOKENS).json()["results"]}
    assert_problem(revoke(reading, ids["write"]), 403, "not_allowed")
    assert_problem(reading.post(TOKENS, {"name": "more"}), 403, "not_allowed")
    assert ApiToken.objects.filter(revoked_at__isnull=False).count() == 0
    assert revoke(reading, ids["read"]).status_code == 200
    assert reading.get(TOKENS).status_code == 401


def test_a_token_of_somebody_else_is_answered_like_one_that_is_not_there(lab: Laboratory) -> None:
    made = make(lab.client())
    for who in ("JONAS", "INES"):
        theirs = assert_problem(revoke(lab.client(who), made["id"]), 404, "not_found")
        absent = assert_problem(revoke(lab.client(who), 10**9), 404, "not_found")
        assert theirs == absent
    assert ApiTestClient(made["token"]).get(TOKENS).status_code == 200


def test_an_auditor_has_tokens_of_his_own_but_changes_nothing_else(lab: Laboratory) -> None:
    Person.objects.create_user("AUDIT", site_role="auditor")
    made = make(lab.client("AUDIT"))
    client = ApiTestClient(made["token"])
    assert client.get("/api/v1/projects/").json()["results"] != []
    assert revoke(client, made["id"]).status_code == 200


@pytest.mark.parametrize(
    ("body", "status", "codes"),
    [
        ({}, 422, [("name", "required")]),
        ({"name": ""}, 422, [("name", "blank")]),
        ({"name": "x" * 61}, 422, [("name", "max_length")]),
        ({"name": "a\nb"}, 422, [("name", "invalid")]),
        ({"name": "\ud800"}, 422, [("name", "surrogate_characters_not_allowed")]),
        ({"name": "a", "scope": "root"}, 422, [("scope", "invalid_choice")]),
        ({"name": "a", "days": 0}, 422, [("days", "min_value")]),
        ({"name": "a", "days": 367}, 422, [("days", "max_value")]),
        ({"name": "a", "days": "soon"}, 422, [("days", "invalid")]),
        ({"name": "a", "person": "INES"}, 400, [("person", "unknown_field")]),
    ],
)
def test_a_token_that_cannot_be_is_refused(
    body: dict[str, Any], status: int, codes: list[tuple[str, str]], lab: Laboratory
) -> None:
    client = lab.client()
    before = ApiToken.objects.count(), Event.objects.count()
    response = client.post(TOKENS, body)
    code = "unknown_field" if status == 400 else "invalid_value"
    assert error_codes(assert_problem(response, status, code)) == codes
    assert (ApiToken.objects.count(), Event.objects.count()) == before


def test_the_use_of_a_token_is_noted_once_an_hour(
    lab: Laboratory, django_assert_num_queries: Any
) -> None:
    client = lab.client()
    row = ApiToken.objects.get(person__code="MIRA")
    assert row.last_used_at is None
    for minutes, noted in ((0, 0), (1, 0), (59, 0), (60, 60), (61, 60), (119, 60), (120, 120)):
        instant = clock.now() + timedelta(minutes=minutes)
        with clock.replaced_by(clock.standing_at(instant)):
            assert client.get(TOKENS).status_code == 200
        row.refresh_from_db()
        assert row.last_used_at == clock.now() + timedelta(minutes=noted)
    text = client._headers["Authorization"].split()[1]
    with clock.replaced_by(clock.standing_at(clock.now() + timedelta(minutes=121))):
        tokens.find_actor(text)
        with django_assert_num_queries(2):  # the token with its person, and the roles
            tokens.find_actor(text)


def test_a_database_that_takes_no_writes_refuses_nobody(
    lab: Laboratory, caplog: pytest.LogCaptureFixture
) -> None:
    client = lab.client()
    with transaction.atomic():
        run_sql("SET TRANSACTION READ ONLY" if ON_POSTGRESQL else "PRAGMA query_only = ON")
        shown = client.get(TOKENS).json()["results"]
        transaction.set_rollback(True)
    if not ON_POSTGRESQL:
        run_sql("PRAGMA query_only = OFF")
    assert shown[0]["last_used_at"] is None
    assert "is not noted" in caplog.text
    assert client.get(TOKENS).json()["results"][0]["last_used_at"] == clock.now().isoformat()


def test_the_operator_lists_and_ends_tokens(lab: Laboratory) -> None:
    client = lab.client()
    made = make(client)
    said = io.StringIO()
    call_command("revoke_token", "MIRA", stdout=said)
    assert "balance  write  until 2027-03-01  used: never" in said.getvalue()
    call_command("revoke_token", "MIRA", id=made["id"], stdout=said)
    assert f"Token {made['id']} (balance) of MIRA is revoked." in said.getvalue()
    with pytest.raises(CommandError, match="JONAS has no token"):
        call_command("revoke_token", "JONAS", id=made["id"])
    with pytest.raises(CommandError, match="no person 'NOBODY'"):
        call_command("revoke_token", "NOBODY")
    assert client.get(TOKENS).status_code == 200
    call_command("revoke_token", "MIRA", all=True, stdout=said)
    assert "1 token(s) of MIRA revoked." in said.getvalue()
    assert client.get(TOKENS).status_code == 401


def test_a_token_sees_the_roles_of_this_moment_not_of_its_making(lab: Laboratory) -> None:
    made = make(lab.client())
    Membership.objects.filter(person__code="MIRA").delete()
    assert ApiTestClient(made["token"]).get("/api/v1/projects/").json()["results"] == []
