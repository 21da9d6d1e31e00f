"""Code and password for a token of half a day; and what somebody who guesses learns: nothing."""

import io
from collections.abc import Callable
from datetime import timedelta
from typing import Any

import pytest
from django.contrib.auth import hashers
from django.core.management import CommandError, call_command
from django.test import override_settings

from labplan.base import clock, login
from labplan.base.errors import LoginFailed, TooManyAttempts
from labplan.base.models import ApiToken, Event, LoginCount, Person, PersonName
from tests.api.problems import assert_problem
from tests.db.bench import at_once, rows_of
from tests.laboratory import ApiTestClient, Laboratory

LOGIN = "/api/v1/login/"
PASSWORD = "a heron on one leg"


@pytest.fixture
def guest(lab: Laboratory) -> ApiTestClient:
    """MIRA has a password; JONAS has none; INES has one and is not active."""
    for code in ("MIRA", "INES"):
        login.set_password(person_code=code, password=PASSWORD)
    Person.objects.filter(code="INES").update(is_active=False)
    return ApiTestClient(None)


def attempt(client: ApiTestClient, person: str, password: str = PASSWORD, **headers: str) -> Any:
    return client.post(LOGIN, {"person": person, "password": password}, **headers)


def test_a_right_password_gives_a_token_for_twelve_hours(guest: ApiTestClient) -> None:
    response = attempt(guest, "MIRA")
    assert (response.status_code, response["Cache-Control"]) == (201, "no-store")
    made = response.json()
    assert (made["name"], made["scope"]) == ("login", "write")
    assert made["expires_at"] == (clock.now() + timedelta(hours=12)).isoformat()
    client = ApiTestClient(made["token"])
    assert client.get("/api/v1/projects/").status_code == 200
    with clock.replaced_by(clock.standing_at(clock.now() + timedelta(hours=12))):
        assert client.get("/api/v1/projects/").status_code == 401
    assert Event.objects.filter(kind="token.made", actor_code="MIRA").count() == 1
    reading = guest.post(LOGIN, {"person": "MIRA", "password": PASSWORD, "scope": "read"}).json()
    assert reading["scope"] == "read"


def test_every_failure_is_the_same_answer_after_the_same_work(
    guest: ApiTestClient, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Unknown, inactive, without a password, or wrong: the hasher runs once for each of them."""
    runs = []
    encode = hashers.MD5PasswordHasher.encode

    def counted(self: Any, password: str, salt: str) -> str:
        runs.append(1)
        return encode(self, password, salt)

    monkeypatch.setattr(hashers.MD5PasswordHasher, "encode", counted)
    answers, work = set(), set()
    for person in ("MIRA", "NOBODY", "JONAS", "INES", "mira", ""):
        runs.clear()
        response = attempt(guest, person or "x", "not this one")
        assert_problem(response, 401, "login_failed")
        answers.add(response.content)
        work.add(len(runs))
    assert (len(answers), work) == (1, {1})
    assert ApiToken.objects.filter(by_login=True).count() == 0


def test_after_five_failures_a_code_waits_whoever_asks_and_whether_it_exists(
    guest: ApiTestClient,
) -> None:
    answers = []
    for person in ("MIRA", "NOBODY"):
        for _ in range(login.MOST_FOR_CODE):
            assert attempt(guest, person, "wrong").status_code == 401
        response = attempt(guest, person, PASSWORD)  # the right one learns nothing either
        answers.append(assert_problem(response, 429, "too_many_attempts"))
        assert response["Retry-After"] == str(login.QUARTER_S)  # the clock stands at a full hour
    assert answers[0] == answers[1]
    with clock.replaced_by(clock.standing_at(clock.now() + timedelta(seconds=login.QUARTER_S))):
        assert attempt(guest, "MIRA").status_code == 201


def test_a_right_password_forgets_the_failures_of_its_code(guest: ApiTestClient) -> None:
    for _ in range(3):
        for _ in range(login.MOST_FOR_CODE - 1):
            assert attempt(guest, "MIRA", "wrong").status_code == 401
        assert attempt(guest, "MIRA").status_code == 201
    [(attempts,)] = rows_of("SELECT attempts FROM base_logincount")
    assert attempts == 3 * (login.MOST_FOR_CODE - 1)  # of the address, which keeps its failures


def test_an_address_that_tries_many_codes_waits(guest: ApiTestClient) -> None:
    for number in range(login.MOST_FROM_ADDRESS):
        assert attempt(guest, f"P{number}", "wrong").status_code == 401
    assert_problem(attempt(guest, "MIRA"), 429, "too_many_attempts")
    elsewhere = guest._client.post(
        LOGIN, data={"person": "MIRA", "password": PASSWORD}, content_type="application/json",
        REMOTE_ADDR="203.0.113.9",
    )  # fmt: skip
    assert elsewhere.status_code == 201


def test_a_caller_does_not_choose_his_address(guest: ApiTestClient) -> None:
    for number in range(login.MOST_FROM_ADDRESS):
        attempt(guest, f"P{number}", "wrong", X_Forwarded_For=f"203.0.113.{number}")
    response = attempt(guest, "MIRA", X_Forwarded_For="203.0.113.200")
    assert_problem(response, 429, "too_many_attempts")


@pytest.mark.parametrize(
    ("proxies", "forwarded", "found"),
    [
        (0, "198.51.100.7", "127.0.0.1"),
        (1, "198.51.100.7", "198.51.100.7"),
        (1, "10.9.9.9, 198.51.100.7", "198.51.100.7"),
        (2, "10.9.9.9, 198.51.100.7, 192.0.2.1", "198.51.100.7"),
        (2, "198.51.100.7", "127.0.0.1"),
        (1, "", "127.0.0.1"),
    ],
)
def test_behind_proxies_of_our_own_the_caller_is_found(
    proxies: int, forwarded: str, found: str
) -> None:
    with override_settings(OWN_PROXIES=proxies):
        assert login.address_of("127.0.0.1", forwarded) == found


def test_one_household_is_one_address() -> None:
    assert login.network_of("2001:db8:1:2::1") == login.network_of("2001:db8:1:2:ffff::9")
    assert login.network_of("2001:db8:1:3::1") != login.network_of("2001:db8:1:2::1")
    assert login.network_of("::ffff:192.0.2.1") == login.network_of("192.0.2.1") == "192.0.2.1"
    assert login.network_of("") == login.network_of("not an address") == "unknown"


def test_neither_codes_nor_addresses_stand_in_the_counts(guest: ApiTestClient) -> None:
    attempt(guest, "MIRA", "wrong")
    text = str(rows_of("SELECT * FROM base_logincount"))
    assert "MIRA" not in text
    assert "127.0.0.1" not in text
    assert PASSWORD not in str(rows_of("SELECT * FROM base_event"))


def test_old_counts_are_thrown_away(guest: ApiTestClient) -> None:
    attempt(guest, "MIRA", "wrong")
    with clock.replaced_by(clock.standing_at(clock.now() + timedelta(hours=1))):
        attempt(guest, "MIRA", "wrong")
    assert LoginCount.objects.count() == 2  # of the code and of the address, of now


@pytest.mark.parametrize(
    "body",
    [{}, {"person": "MIRA"}, {"person": "MIRA", "password": ""},
     {"person": "MIRA", "password": "x" * 129}, {"person": "MIRA", "password": "x", "scope": "all"},
     {"person": "MIRA", "password": "x", "remember": True}],
)  # fmt: skip
def test_a_body_that_is_no_login_is_refused_and_not_counted(
    body: dict[str, Any], guest: ApiTestClient
) -> None:
    assert guest.post(LOGIN, body).status_code in (400, 422)
    assert LoginCount.objects.count() == 0


@pytest.mark.django_db(transaction=True)
def test_many_guesses_at_once_do_not_get_past_the_limit() -> None:
    """As from several web processes: each thread has its own connection to the database."""
    Person.objects.create_user("MIRA", password=PASSWORD)

    def guess() -> str:
        try:
            login.log_in(person_code="MIRA", password="wrong", address="192.0.2.1")
        except (LoginFailed, TooManyAttempts) as refusal:
            return refusal.code
        return "in"

    found = at_once(*[guess] * 12)
    assert sorted(found) == ["login_failed"] * 5 + ["too_many_attempts"] * 7
    assert sorted(LoginCount.objects.values_list("kind", "attempts")) == [
        ("address", 12), ("code", 12)
    ]  # fmt: skip


def test_a_new_password_ends_the_tokens_of_the_old_one_and_no_others(guest: ApiTestClient) -> None:
    made = attempt(guest, "MIRA").json()
    kept = ApiTestClient(made["token"]).post("/api/v1/tokens/", {"name": "balance"}).json()
    assert login.set_password(person_code="MIRA", password="another heron, two legs") == 1
    assert ApiTestClient(made["token"]).get("/api/v1/projects/").status_code == 401
    assert ApiTestClient(kept["token"]).get("/api/v1/projects/").status_code == 200
    assert attempt(guest, "MIRA").status_code == 401
    assert attempt(guest, "MIRA", "another heron, two legs").status_code == 201


@pytest.mark.parametrize(
    ("password", "rule"),
    [
        ("short", "at least 12"),
        ("123456789012345", "entirely numeric"),
        ("password1234", "too common"),
        ("mira-mira-mira", "similar to the code"),
    ],
)
def test_a_password_that_breaks_a_rule_is_refused(
    password: str, rule: str, lab: Laboratory, monkeypatch: pytest.MonkeyPatch
) -> None:
    before = Person.objects.get(code="MIRA").password
    monkeypatch.setattr("sys.stdin", io.StringIO(password + "\n"))
    code = "MIRA-MIRA-MIR" if "mira" in password else "MIRA"
    Person.objects.get_or_create(code=code)
    with pytest.raises(CommandError, match=rule):
        call_command("set_password", code, stdin=True)
    assert Person.objects.get(code="MIRA").password == before
    assert Event.objects.filter(kind="person.password_set").count() == 0


def test_the_operator_sets_a_password(lab: Laboratory, monkeypatch: pytest.MonkeyPatch) -> None:
    said, answers = io.StringIO(), iter([PASSWORD, PASSWORD, PASSWORD, "another"])
    ask: Callable[[str], str] = lambda prompt: next(answers)  # noqa: E731
    monkeypatch.setattr("getpass.getpass", ask)
    call_command("set_password", "MIRA", stdout=said)
    assert said.getvalue() == "The password of MIRA is set; 0 token(s) ended.\n"
    assert attempt(ApiTestClient(None), "MIRA").status_code == 201
    with pytest.raises(CommandError, match="do not agree"):
        call_command("set_password", "MIRA")
    monkeypatch.setattr("sys.stdin", io.StringIO(PASSWORD + "\n"))
    with pytest.raises(CommandError, match="no active person"):
        call_command("set_password", "NOBODY", stdin=True)


def test_a_name_is_erased_and_every_record_stays(lab: Laboratory) -> None:
    before, said = lab.counts(), io.StringIO()
    call_command("erase_person_name", "MIRA", stdout=said)
    assert not PersonName.objects.filter(person__code="MIRA").exists()
    assert Person.objects.filter(code="MIRA").exists()
    assert lab.counts() == before
    [event] = Event.objects.filter(kind="person.name_erased")
    assert (event.subject, event.detail) == ("person MIRA", '{"after": null, "before": null}')
    assert "Okonjo" not in str(rows_of("SELECT * FROM base_event"))
    call_command("erase_person_name", "MIRA", stdout=said)
    assert "was not kept" in said.getvalue()
    assert Event.objects.filter(kind="person.name_erased").count() == 1
    with pytest.raises(CommandError, match="no person with the code 'NOBODY'"):
        call_command("erase_person_name", "NOBODY")
