"""Waiting for a procedure: real web service, real broker, real database."""

import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from django.core.signals import request_started

from labplan.base import broker as base_broker
from labplan.operations.broker_server import BrokerServer
from labplan.operations.waiting import front, prefer
from labplan.procedures.demo.live import running_server
from tests.laboratory import PROCEDURES, Laboratory, octyl_order
from tests.operations.servers import (
    Client,
    Later,
    Running,
    gunicorn,
    later,
    running_service,
    until,
)


@pytest.fixture
def web(live_lab: Laboratory) -> Iterator[str]:
    """The web service, in a thread of this process."""
    with running_server() as address:
        yield address


@pytest.fixture
def asked() -> Iterator[list[str]]:
    """The paths that the web service was asked for, one entry a request."""
    paths: list[str] = []

    def note(environ: dict[str, Any], **_: Any) -> None:
        paths.append(environ["PATH_INFO"])

    request_started.connect(note)
    yield paths
    request_started.disconnect(note)


@pytest.fixture
def told(broker: BrokerServer, settings: Any, monkeypatch: pytest.MonkeyPatch) -> BrokerServer:
    """The broker, which the services of this process tell of changes."""
    settings.BROKER_URL = broker.address
    monkeypatch.setattr(base_broker, "_quiet_until", 0.0)
    base_broker.client.cache_clear()  # it may know the address of an earlier test
    return broker


@pytest.fixture
def by_hints_only(monkeypatch: pytest.MonkeyPatch) -> None:
    """Who waits may do so for an hour and never looks by itself: only hints can end it in time."""
    monkeypatch.setattr(front, "LOOK_AGAIN_S", 3600.0)
    monkeypatch.setattr(prefer, "LONGEST_WAIT_S", 3600)


@pytest.fixture
def by_looks_only(monkeypatch: pytest.MonkeyPatch) -> None:
    """The time is never up."""
    monkeypatch.setattr(prefer, "LONGEST_WAIT_S", 3600)


def queued(lab: Laboratory, **changes: str) -> str:
    # The client's own keys repeat once it is gone, and a repeated key makes nothing new.
    path: str = lab.client().post(PROCEDURES, octyl_order(**changes), key=str(uuid.uuid4()))[
        "Location"
    ]
    return path


def token(lab: Laboratory, code: str = "MIRA") -> str:
    lab.client(code)
    return lab.tokens[f"{code} write"]


@contextmanager
def waiting(running: Running, path: str, lab: Laboratory, **headers: str) -> Iterator[Later]:
    """A client that is held."""
    before, client = running.waiting, running.client(token(lab))
    held = later(lambda: client.get(path, **{"Prefer": "wait=3600", **headers}))
    until(lambda: running.waiting > before)
    assert held.is_waiting
    yield held


def test_who_waits_is_answered_once_a_hint_comes(
    web: str, told: BrokerServer, live_lab: Laboratory, by_hints_only: None
) -> None:
    path = queued(live_lab)
    with running_service(web, told.address) as running:
        until(lambda: running.service.hints.are_coming)
        with waiting(running, path, live_lab) as held:
            assert live_lab.run_outbox() == 1
            answer = held.answer()
    assert (answer.status, answer.json()["state"]) == (200, "planned")
    assert (answer["Preference-Applied"], answer["Vary"]) == ("wait=3600", "Prefer")
    assert answer["Retry-After"] is None
    assert running.waiting == 0


def test_a_hint_wakes_only_those_whom_it_is_for(
    web: str, told: BrokerServer, live_lab: Laboratory, by_hints_only: None, asked: list[str]
) -> None:
    first, second = queued(live_lab), queued(live_lab)
    with running_service(web, told.address) as running:
        until(lambda: running.service.hints.are_coming)
        with waiting(running, first, live_lab), waiting(running, second, live_lab) as held:
            until(lambda: asked.count(first) == asked.count(second) == 1)
            live_lab.client().post(second + "cancel/", If_Match="*")
            assert held.answer().json()["state"] == "cancelled"
            assert (asked.count(first), asked.count(second)) == (1, 2)
            assert running.waiting == 1


def test_without_a_broker_who_waits_is_answered_too(
    web: str, live_lab: Laboratory, by_looks_only: None
) -> None:
    path = queued(live_lab)
    with running_service(web) as running, waiting(running, path, live_lab) as held:
        assert live_lab.run_outbox() == 1
        assert held.answer().json()["state"] == "planned"


def test_when_the_time_is_up_the_present_answer_is_given(web: str, live_lab: Laboratory) -> None:
    path = queued(live_lab)
    with running_service(web) as running:
        client = running.client(token(live_lab))
        answer = client.get(path, Prefer="wait=1")
        assert (answer.status, answer.json()["state"]) == (200, "queued")
        assert (answer["Retry-After"], answer["Preference-Applied"]) == ("1", "wait=1")
        same = client.get(path, Prefer="wait=1", If_None_Match=answer["ETag"] or "")
        assert (same.status, same.body, same["ETag"]) == (304, b"", answer["ETag"])
        assert (same["Retry-After"], same["Preference-Applied"]) == ("1", "wait=1")


def test_an_answer_that_is_unchanged_is_waited_on_as_well(
    web: str, live_lab: Laboratory, by_looks_only: None
) -> None:
    path = queued(live_lab)
    etag = live_lab.client().get(path)["ETag"]
    with running_service(web) as running:
        with waiting(running, path, live_lab, If_None_Match=etag) as held:
            live_lab.run_outbox()
            answer = held.answer()
        assert (answer.status, answer.json()["state"]) == (200, "planned")
        client = running.client(token(live_lab))
        same = client.get(path, Prefer="wait=5", If_None_Match=answer["ETag"] or "")
    assert (same.status, same["Preference-Applied"], same["Retry-After"]) == (304, "wait=5", None)


def test_what_is_settled_is_answered_at_once_and_asked_for_once(
    web: str, live_lab: Laboratory, asked: list[str]
) -> None:
    path = queued(live_lab)
    live_lab.run_outbox()
    with running_service(web) as running:
        answer = running.client(token(live_lab)).get(path, Prefer="respond-async, wait=1000")
    assert (answer.json()["state"], answer["Preference-Applied"]) == ("planned", "wait=10")
    assert asked.count(path) == 1


def test_waiting_for_no_time_is_not_waiting(
    web: str, live_lab: Laboratory, asked: list[str]
) -> None:
    path = queued(live_lab)
    with running_service(web) as running:
        answer = running.client(token(live_lab)).get(path, Prefer="wait=0")
    assert (answer.json()["state"], answer["Preference-Applied"]) == ("queued", "wait=0")
    assert asked.count(path) == 1


@pytest.mark.parametrize("wish", ["wait=soon", "respond-async", ""])
def test_without_a_readable_wish_nobody_waits(
    wish: str, web: str, live_lab: Laboratory, asked: list[str]
) -> None:
    path = queued(live_lab)
    with running_service(web) as running:
        answer = running.client(token(live_lab)).get(path, Prefer=wish)
    assert (answer.json()["state"], answer["Preference-Applied"]) == ("queued", None)
    assert (answer["Retry-After"], asked.count(path)) == ("1", 1)


@pytest.mark.parametrize("who", ["a stranger", "nobody"])
def test_who_may_not_see_it_is_refused_by_the_web_service_at_once(
    who: str, web: str, live_lab: Laboratory, asked: list[str]
) -> None:
    path = queued(live_lab)
    live_lab.stranger()
    known = token(live_lab, "STRANGER") if who == "a stranger" else ""
    with running_service(web) as running:
        answer = running.client(known).get(path, Prefer="wait=10")
        assert running.waiting == 0
    direct = Client(web, known).get(path)
    assert (answer.status, answer.body) == (direct.status, direct.body)
    assert answer.status == (404 if who == "a stranger" else 401)
    assert (answer["Preference-Applied"], asked.count(path)) == (None, 2)


def test_whoever_loses_the_right_while_waiting_is_told_nothing_more(
    web: str, live_lab: Laboratory, by_looks_only: None
) -> None:
    live_lab.add_member("GUEST", "viewer")
    path, known = queued(live_lab), token(live_lab, "GUEST")
    with running_service(web) as running:
        held = later(lambda: running.client(known).get(path, Prefer="wait=3600"))
        until(lambda: running.waiting)
        live_lab.project().memberships.filter(person__code="GUEST").delete()
        answer = held.answer()
    assert (answer.status, answer["Preference-Applied"]) == (404, None)


def test_one_more_than_may_wait_gets_the_present_answer(
    web: str, live_lab: Laboratory, by_looks_only: None
) -> None:
    path = queued(live_lab)
    with running_service(web, most_waiting=1) as running:
        with waiting(running, path, live_lab) as held:
            answer = running.client(token(live_lab)).get(path, Prefer="wait=10")
            assert (answer.status, answer.json()["state"]) == (200, "queued")
            assert (answer["Retry-After"], answer["Preference-Applied"]) == ("1", None)
            assert answer["Vary"] == "Prefer"
            assert held.is_waiting
            live_lab.run_outbox()
            assert held.answer()["Preference-Applied"] == "wait=3600"
        again = queued(live_lab)
        with waiting(running, again, live_lab) as held:
            live_lab.run_outbox()
            assert held.answer().json()["state"] == "planned"


def test_a_client_that_hangs_up_waits_no_more(
    web: str, live_lab: Laboratory, by_hints_only: None
) -> None:
    path = queued(live_lab)
    with running_service(web, most_waiting=1) as running:
        connection = running.client().connect()
        known = {"Authorization": f"Bearer {token(live_lab)}"}
        connection.request("GET", path, headers={**known, "Prefer": "wait=3600"})
        until(lambda: running.waiting == 1)
        connection.close()
        until(lambda: running.waiting == 0)
        assert len(running.service.hints) == 0
        with waiting(running, path, live_lab) as held:
            assert held.is_waiting


def test_a_broker_may_be_killed_and_started_while_clients_wait(
    web: str, told: BrokerServer, live_lab: Laboratory, by_hints_only: None
) -> None:
    first, second = queued(live_lab), queued(live_lab)
    with running_service(web, told.address) as running:
        until(lambda: running.service.hints.are_coming)
        with waiting(running, first, live_lab) as held, waiting(running, second, live_lab) as other:
            told.stop()
            until(lambda: not running.service.hints.are_coming)
            live_lab.client().post(first + "cancel/", If_Match="*")  # its hint is lost
            assert running.client().get("/api/v1/openapi.json").status == 200
            assert held.is_waiting
            told.start()
            assert held.answer().json()["state"] == "cancelled"  # looked at when it came back
            assert other.is_waiting
            base_broker._quiet_until = 0.0
            until(lambda: running.service.hints.are_coming)
            live_lab.client().post(second + "cancel/", If_Match="*")
            assert other.answer().json()["state"] == "cancelled"


def test_a_broker_that_comes_late_is_found(
    web: str, told: BrokerServer, live_lab: Laboratory, by_hints_only: None
) -> None:
    told.stop()
    path = queued(live_lab)
    with running_service(web, told.address) as running, waiting(running, path, live_lab) as held:
        told.start()
        until(lambda: running.service.hints.are_coming)
        base_broker._quiet_until = 0.0
        live_lab.run_outbox()
        assert held.answer().json()["state"] == "planned"


def test_fifty_wait_and_the_one_web_worker_is_free(
    told: BrokerServer, live_lab: Laboratory, short_folder: Path, by_looks_only: None
) -> None:
    paths, client = [queued(live_lab, product_mass_g="0.300") for _ in range(5)], token(live_lab)
    with gunicorn(short_folder) as web, running_service(web, told.address) as running:
        until(lambda: running.service.hints.are_coming)
        everybody = [
            later(lambda path=path: running.client(client).get(path, Prefer="wait=3600"))
            for path in paths * 10
        ]
        until(lambda: running.waiting == 50)
        for _ in range(20):
            assert running.client(client).get("/api/v1/projects/").status == 200
        assert running.waiting == 50
        assert live_lab.run_outbox() == 5
        answers = [one.answer() for one in everybody]
    assert [a.json()["state"] for a in answers] == ["planned"] * 50
    assert {a["Preference-Applied"] for a in answers} == {"wait=3600"}
    assert [a.json()["links"]["self"] for a in answers] == paths * 10


def test_a_web_service_that_is_restarted_is_not_noticed_by_those_who_wait(
    live_lab: Laboratory, short_folder: Path, by_looks_only: None
) -> None:
    path = queued(live_lab)
    with gunicorn(short_folder) as web:
        service = running_service(web)
        running = service.__enter__()
        held = later(lambda: running.client(token(live_lab)).get(path, Prefer="wait=3600"))
        until(lambda: running.waiting)
    refused = running.client(token(live_lab)).get(path)
    assert (refused.status, refused.json()["code"]) == (503, "web_service_away")
    assert held.is_waiting
    live_lab.run_outbox()
    with gunicorn(short_folder):
        assert held.answer().json()["state"] == "planned"
    service.__exit__(None, None, None)
