"""What is passed on is passed on as it is, both ways, and what breaks off is not made whole."""

import hashlib
import http.client
import json
import os
import socket
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from labplan.operations.waiting import passing, prefer, server
from tests.api.problems import TYPE_PREFIX
from tests.laboratory import PROCEDURES, Laboratory, octyl_order
from tests.operations.servers import (
    CEILING_S,
    Answer,
    Client,
    Running,
    gunicorn,
    later,
    running_service,
    scripted_web,
    until,
)

BETWEEN_NEIGHBOURS = {"connection", "transfer-encoding", "content-length", "date"}


def of_an_answer(answer: Answer) -> tuple[int, list[tuple[str, str]], bytes]:
    own = {*BETWEEN_NEIGHBOURS, "x-request-id"}  # new for each request
    kept = [(k, v) for k, v in answer.headers if k.lower() not in own]
    return answer.status, kept, answer.body


def assert_refusal(answer: Answer, status: int, code: str) -> dict[str, Any]:
    """A problem in the form of the house."""
    assert (answer.status, answer["Content-Type"]) == (status, "application/problem+json")
    body: dict[str, Any] = answer.json()
    assert set(body) == {"type", "title", "status", "code", "detail", "errors"}
    assert (body["type"], body["status"], body["code"]) == (TYPE_PREFIX + code, status, code)
    assert body["detail"]
    return body


# ---- the real web service, asked both ways ----


def test_every_kind_of_answer_is_the_same_as_the_direct_one(
    live_lab: Laboratory, short_folder: Path
) -> None:
    path = live_lab.client().post(PROCEDURES, octyl_order())["Location"]
    live_lab.run_outbox()
    etag = live_lab.client().get(path)["ETag"]
    json_body = {"Content-Type": "application/json", "Idempotency-Key": "pass-it-on-1"}
    requests: list[tuple[str, str, Any, dict[str, str]]] = [
        ("GET", path, None, {}),
        ("GET", path, None, {"If-None-Match": etag}),
        ("HEAD", path, None, {}),
        ("GET", path + "document/", None, {}),
        ("GET", path + "sheet.pdf?paper=letter", None, {}),
        ("HEAD", path + "sheet.pdf", None, {}),
        ("GET", path + "sheet.html", None, {"Accept": "text/html", "Accept-Encoding": "gzip"}),
        ("GET", "/api/v1/openapi.json", None, {}),
        ("GET", PROCEDURES + "?state=planned&page_size=1", None, {}),
        ("GET", PROCEDURES + "?state=%E2%9C%93", None, {}),
        ("GET", "/nothing/is/../here/%2F%00?a=b", None, {}),
        ("GET", "//api/v1/procedures/", None, {}),
        ("OPTIONS", PROCEDURES, None, {}),
        ("DELETE", path, None, {}),
        ("PUT", path, b"{}", json_body),
        ("POST", PROCEDURES, b"{", json_body),
        ("POST", PROCEDURES, json.dumps(octyl_order(surely=1)).encode(), json_body),
        ("POST", PROCEDURES, json.dumps({"project": "x" * 900_000}).encode(), json_body),
        ("POST", PROCEDURES, b" " * 1_500_000, json_body),
        ("POST", PROCEDURES, b"", json_body),
        ("POST", path + "cancel/", b"{}", json_body),
        ("POST", path + "cancel/", b"{}", {**json_body, "If-Match": '"old"'}),
        ("POST", "/api/v1/routes/", json.dumps(octyl_order(project=None)).encode(), json_body),
    ]
    statuses = set()
    with gunicorn(short_folder) as web, running_service(web) as running:
        for known in (live_lab.tokens["MIRA write"], ""):
            for method, target, body, headers in requests:
                direct = Client(web, known).ask(method, target, body, headers)
                passed = running.client(known).ask(method, target, body, headers)
                assert of_an_answer(passed) == of_an_answer(direct), (method, target)
                statuses.add(direct.status)
    assert statuses >= {200, 304, 400, 401, 404, 405, 412, 413, 422, 428}


def test_a_request_that_makes_something_makes_it_once(
    live_lab: Laboratory, short_folder: Path
) -> None:
    live_lab.client()
    before = live_lab.counts()[0]
    headers = {"Content-Type": "application/json", "Idempotency-Key": "once-and-no-more"}
    body = json.dumps(octyl_order())
    with gunicorn(short_folder) as web, running_service(web) as running:
        client = running.client(live_lab.tokens["MIRA write"])
        first = client.ask("POST", PROCEDURES, body, {**headers, "Prefer": "wait=5"})
        second = client.ask("POST", PROCEDURES, body, headers)
        page = client.get(PROCEDURES + "?page_size=1").json()
    assert (first.status, second.status) == (202, 202)
    assert second["Idempotency-Replayed"] == "true"
    assert first.body == second.body
    assert (first["Preference-Applied"], first["Retry-After"]) == (None, "1")
    assert live_lab.counts()[0] == before + 1
    assert [row["links"]["self"] for row in page["results"]] == [first["Location"]]


@pytest.mark.parametrize("expects", [True, False])
def test_a_body_refused_unread_is_refused_with_the_reason(
    expects: bool, live_lab: Laboratory, short_folder: Path
) -> None:
    """Five megabytes without a token: the web service hangs up before it has read them."""
    headers = {"Content-Type": "application/json", "Idempotency-Key": "far-too-large"}
    if expects:
        headers["Expect"] = "100-continue"
    with gunicorn(short_folder) as web, running_service(web) as running:
        for _ in range(10):
            answer = running.client().ask("POST", PROCEDURES, b" " * 5_000_000, headers)
            assert_refusal(answer, 401, "not_authenticated")


# ---- what the web service gets, to the byte ----


class Recorder:
    """Takes in one whole request at a time and says thanks."""

    def __init__(self, answer: bytes = b"HTTP/1.1 200 OK\r\nContent-Length: 0\r\n\r\n") -> None:
        self.heads: list[bytes] = []
        self.bodies: list[bytes] = []
        self._answer = answer

    def __call__(self, head: bytes, connection: socket.socket) -> None:
        self.heads.append(head)
        length = self.header("Content-Length")
        self.bodies.append(_read(connection, int(length[0])) if length else b"")
        connection.sendall(self._answer)

    def header(self, name: str, which: int = -1) -> list[str]:
        lines = self.heads[which].decode("latin-1").split("\r\n")[1:]
        pairs = [line.partition(": ") for line in lines]
        return [value for key, _, value in pairs if key.lower() == name.lower()]


def _read(connection: socket.socket, length: int) -> bytes:
    read = b""
    while len(read) < length:
        read += connection.recv(65536)
    return read


@pytest.fixture
def recorder() -> Recorder:
    return Recorder()


@pytest.fixture
def running(recorder: Recorder, short_folder: Path) -> Iterator[Running]:
    with scripted_web(short_folder, recorder) as web, running_service(web) as service:
        yield service


def raw(running: Running, request: bytes) -> bytes:
    """All that comes back on a connection for what is sent on it."""
    host, port = running.address.removeprefix("http://").split(":")
    with socket.create_connection((host, int(port)), timeout=CEILING_S) as connection:
        connection.sendall(request)
        read = b""
        while piece := connection.recv(65536):
            read += piece
        return read


def test_headers_go_on_as_they_were_written_but_those_between_neighbours(
    running: Running, recorder: Recorder
) -> None:
    raw(
        running,
        b"GET /a%2Fb//c/../d;x?q=%c3%a9&q=+&e HTTP/1.1\r\n"
        b"Host: lab.example:8443\r\nauthorization: Bearer  secret\r\nX-Odd-cAsE: 1\r\n"
        b'X-Many: one\r\nX-Many: two\r\nX-Request-ID: the-same\r\nCookie: a=b; c="d"\r\n'
        b"Accept-Encoding: br\r\nX-Name: Andr\xc3\xa9\r\n"
        b"Connection: close, X-Private\r\nX-Private: no\r\nKeep-Alive: timeout=5\r\n"
        b"TE: trailers\r\n"
        b"Upgrade: h2c\r\nProxy-Authorization: no\r\nX-Forwarded-For: 192.0.2.7\r\n\r\n",
    )
    head = recorder.heads[0].split(b"\r\n")
    assert head[0] == b"GET /a%2Fb//c/../d;x?q=%c3%a9&q=+&e HTTP/1.1"
    assert sorted(line for line in head[1:] if line) == sorted([
        b"Host: lab.example:8443", b"authorization: Bearer  secret", b"X-Odd-cAsE: 1",
        b"X-Many: one", b"X-Many: two", b"X-Request-ID: the-same", b'Cookie: a=b; c="d"',
        b"Accept-Encoding: br", b"X-Name: Andr\xc3\xa9", b"Connection: close",
        b"X-Forwarded-For: 192.0.2.7, 127.0.0.1", b"X-Forwarded-Proto: http",
    ])  # fmt: skip


def test_what_the_proxy_before_said_of_the_scheme_stays(
    running: Running, recorder: Recorder
) -> None:
    running.client().get("/", X_Forwarded_Proto="https")
    assert recorder.header("X-Forwarded-Proto") == ["https"]


def test_of_the_preferences_only_the_wish_to_wait_stays_here(
    running: Running, recorder: Recorder
) -> None:
    running.client().get("/", Prefer='return=minimal; x="a, wait=3", wait=5, handling=strict')
    assert recorder.header("Prefer") == ['return=minimal; x="a, wait=3", handling=strict']
    running.client().get("/", Prefer="wait=5")
    assert recorder.header("Prefer") == []
    running.client().get("/", Prefer="wait=soon")
    assert recorder.header("Prefer") == ["wait=soon"]
    running.client().ask("HEAD", "/", headers={"Prefer": "wait=5"})
    assert recorder.header("Prefer") == ["wait=5"]


@pytest.mark.parametrize(
    "size", [0, 1, passing.SENT_WHOLE_BYTES, passing.SENT_WHOLE_BYTES + 1, 9_000_000]
)
def test_a_body_of_any_size_arrives_as_it_was_sent(
    size: int, running: Running, recorder: Recorder
) -> None:
    body = os.urandom(size)
    headers = {"Content-Type": "application/x-any", "Content-Encoding": "gzip"}
    assert running.client().ask("POST", "/", body, headers).status == 200
    assert hashlib.sha256(recorder.bodies[0]).digest() == hashlib.sha256(body).digest()
    assert recorder.header("Content-Length") == [str(size)]
    assert recorder.header("Content-Encoding") == ["gzip"]


@pytest.mark.parametrize("size", [0, 5, 3_000_000])
def test_an_answer_of_any_size_and_framing_arrives_as_it_was_sent(
    size: int, short_folder: Path
) -> None:
    body = os.urandom(size)
    framings = {
        "/length": b"Content-Length: %d\r\n\r\n" % size + body,
        "/chunks": b"Transfer-Encoding: chunked\r\n\r\n"
        + (b"%x\r\n" % size + body + b"\r\n" if size else b"") + b"0\r\n\r\n",
        "/close": b"Connection: close\r\n\r\n" + body,
    }  # fmt: skip

    def reply(head: bytes, connection: socket.socket) -> None:
        target = head.split()[1].decode()
        connection.sendall(
            b"HTTP/1.1 203 As Told\r\nContent-Type: application/pdf\r\nContent-Encoding: br\r\n"
            b"Set-Cookie: a=1\r\nSet-Cookie: b=2\r\nKeep-Alive: timeout=1\r\n" + framings[target]
        )

    with scripted_web(short_folder, reply) as web, running_service(web) as running:
        for target in framings:
            answer = running.client().get(target)
            assert (answer.status, answer.body) == (203, body)
            cookies = [value for key, value in answer.headers if key == "Set-Cookie"]
            assert cookies == ["a=1", "b=2"]
            assert (answer["Content-Encoding"], answer["Keep-Alive"]) == ("br", None)


# ---- what breaks ----


def test_a_web_service_that_is_away_is_said_to_be(short_folder: Path) -> None:
    with running_service(f"unix:{short_folder / 'nobody.sock'}") as running:
        for method, headers in (("GET", {}), ("GET", {"Prefer": "wait=5"}), ("POST", {})):
            answer = running.client().ask(method, "/", headers=headers)
            assert_refusal(answer, 503, "web_service_away")
            assert answer["Retry-After"] == "1"


def test_a_web_service_that_hangs_up_is_said_to_have_broken_off(short_folder: Path) -> None:
    replies = {b"/silent": b"", b"/nonsense": b"220 mail\r\n\r\n", b"/half": b"HTTP/1.1 200 OK\r\n"}

    def reply(head: bytes, connection: socket.socket) -> None:
        connection.sendall(replies[head.split()[1]])

    with scripted_web(short_folder, reply) as web, running_service(web) as running:
        for target in replies:
            answer = running.client().ask("POST", target.decode(), b"{}")
            body = assert_refusal(answer, 502, "web_service_broke_off")
            assert "Idempotency-Key" in body["detail"]
            assert answer["Retry-After"] == "1"


@pytest.mark.parametrize(
    "framing",
    [b"Content-Length: 10\r\n\r\nhalf", b"Transfer-Encoding: chunked\r\n\r\n4\r\nhalf\r\n"],
)
def test_half_an_answer_is_not_made_a_whole_one(framing: bytes, short_folder: Path) -> None:
    def reply(head: bytes, connection: socket.socket) -> None:
        connection.sendall(b"HTTP/1.1 200 OK\r\n" + framing)

    with scripted_web(short_folder, reply) as web, running_service(web) as running:
        with pytest.raises((http.client.IncompleteRead, ConnectionError)):
            running.client().get("/")
        assert running.client().connect()


def test_while_the_web_service_is_away_the_last_answer_is_kept_for_who_waits(
    short_folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    recorder = Recorder(
        b"HTTP/1.1 200 OK\r\nRetry-After: 1\r\nX-Kept: yes\r\nContent-Length: 6\r\n\r\nqueued"
    )
    with scripted_web(short_folder, recorder) as web, running_service(web) as running:
        held = later(lambda: running.client().get("/procedures/P-1/", Prefer="wait=3"))
        until(lambda: running.waiting)
        (short_folder / "web.sock").rename(short_folder / "away.sock")
        assert running.client().get("/").status == 503
        answer = held.answer()
        (short_folder / "away.sock").rename(short_folder / "web.sock")
    assert (answer.status, answer.body, answer["X-Kept"]) == (200, b"queued", "yes")
    assert (answer["Retry-After"], answer["Preference-Applied"]) == ("1", "wait=3")


def test_a_client_that_hangs_up_lets_its_request_go(short_folder: Path) -> None:
    begun: list[bytes] = []
    gone: list[bytes] = []

    def reply(head: bytes, connection: socket.socket) -> None:
        begun.append(head)
        gone.append(connection.recv(1))  # empty once the service has closed its side

    with scripted_web(short_folder, reply) as web, running_service(web) as running:
        connection = running.client().connect()
        connection.request("GET", "/")
        until(lambda: begun)
        connection.close()
        assert until(lambda: gone) == [b""]


# ---- bounds ----


def test_a_web_service_that_does_not_answer_is_not_waited_for_for_ever(
    short_folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("labplan.operations.waiting.upstream.SILENT_S", 0.2)

    def reply(head: bytes, connection: socket.socket) -> None:
        connection.recv(1)

    with scripted_web(short_folder, reply) as web, running_service(web) as running:
        answer = running.client().get("/")
    assert_refusal(answer, 504, "web_service_silent")
    assert answer["Retry-After"] == "1"


@pytest.mark.parametrize(
    "head",
    [
        b"GET /%s HTTP/1.1\r\nHost: x\r\n" % (b"a" * 9000),
        b"GET / HTTP/1.1\r\nHost: x\r\nX: %s\r\n" % (b"a" * 9000),
        b"GET / HTTP/1.1\r\nHost: x\r\n" + b"X: a\r\n" * 200,
        b"GET / HTTP/1.1\r\nHost: x\r\nX: caf\xe9\r\n",
        b"GET / HTTP/1.1\r\nHost: x\r\nno colon\r\n",
        b"CONNECT lab:443 HTTP/1.1\r\nHost: lab\r\n",
    ],
)
def test_a_head_that_is_malformed_or_beyond_all_bounds_goes_no_further(
    head: bytes, running: Running, recorder: Recorder
) -> None:
    answered = raw(running, head + b"Connection: close\r\n\r\n")
    assert answered.split(b" ", 2)[1] == b"400"
    assert json.loads(answered.split(b"\r\n\r\n", 1)[1])["code"] == "malformed_request"
    assert recorder.heads == []
    assert running.client().get("/").status == 200


def test_a_method_nobody_knows_is_said_to_be_unknown(running: Running) -> None:
    assert_refusal(running.client().ask("BREW", "/"), 501, "method_unknown")


def test_a_head_that_does_not_come_closes_the_connection(
    running: Running, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(server.LIMITS, "keepalive_timeout", 0.2)
    assert raw(running, b"GET / HTTP/1.1\r\nHost: ") == b""
    assert raw(running, b"") == b""


def test_a_body_that_does_not_come_is_refused_and_takes_no_worker(
    running: Running, recorder: Recorder, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(passing, "CLIENT_SLOW_S", 0.2)
    monkeypatch.setitem(server.LIMITS, "lingering_time", 0.2)
    answered = raw(running, b"POST / HTTP/1.1\r\nHost: x\r\nContent-Length: 9\r\n\r\nhalf")
    assert answered.startswith(b"HTTP/1.1 408 ")
    assert json.loads(answered.split(b"\r\n\r\n", 1)[1])["code"] == "request_too_slow"
    assert recorder.heads == []


@pytest.mark.parametrize("begun", [b"", b"x" * passing.SENT_WHOLE_BYTES])
def test_a_body_that_turns_out_malformed_goes_no_further(
    begun: bytes, running: Running, recorder: Recorder, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It is noticed as one of which nothing more comes."""
    monkeypatch.setattr(passing, "CLIENT_SLOW_S", 0.2)
    monkeypatch.setitem(server.LIMITS, "lingering_time", 0.2)
    host, port = running.address.removeprefix("http://").split(":")
    with socket.create_connection((host, int(port)), timeout=CEILING_S) as connection:
        connection.sendall(
            b"POST / HTTP/1.1\r\nHost: x\r\nTransfer-Encoding: chunked\r\n"
            b"Expect: 100-continue\r\n\r\n"
        )
        assert connection.recv(25) == b"HTTP/1.1 100 Continue\r\n\r\n"
        if begun:
            connection.sendall(b"%x\r\n%s\r\n" % (len(begun), begun))
        connection.sendall(b"no number\r\n")
        answered = b""
        while piece := connection.recv(65536):
            answered += piece
    assert answered.startswith(b"HTTP/1.1 408 ")
    assert recorder.heads == []


def test_a_client_that_does_not_read_is_let_go(
    short_folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(passing, "CLIENT_SLOW_S", 0.2)
    size = 50_000_000

    def reply(head: bytes, connection: socket.socket) -> None:
        connection.sendall(b"HTTP/1.1 200 OK\r\nContent-Length: %d\r\n\r\n" % size)
        try:
            connection.sendall(b"x" * size)
        except OSError:
            cut.append(True)

    cut: list[bool] = []
    with scripted_web(short_folder, reply) as web, running_service(web) as running:
        connection = running.client().connect()
        connection.request("GET", "/")
        assert until(lambda: cut)
        connection.close()


def test_connections_over_the_limit_are_turned_away_in_words(
    running: Running, monkeypatch: pytest.MonkeyPatch
) -> None:
    first = running.client().connect()
    first.request("GET", "/")
    first.getresponse().read()
    monkeypatch.setattr(server, "MOST_CONNECTIONS", 1)
    answer = running.client().get("/")
    assert_refusal(answer, 503, "web_service_away")
    first.close()
    until(lambda: running.client().get("/").status == 200)


def test_a_request_with_a_body_is_not_held(
    short_folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(prefer, "LONGEST_WAIT_S", 3600)
    recorder = Recorder(b"HTTP/1.1 200 OK\r\nRetry-After: 1\r\nContent-Length: 0\r\n\r\n")
    with scripted_web(short_folder, recorder) as web, running_service(web) as running:
        answer = running.client().ask("GET", "/procedures/P-1/", b"x", {"Prefer": "wait=3600"})
    assert (answer.status, answer["Preference-Applied"]) == (200, None)
    assert recorder.bodies == [b"x"]
