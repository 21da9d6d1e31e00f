"""What /metrics shows: counts of what happened, figures of what stands in the database."""

import re
from collections.abc import Callable
from datetime import timedelta
from typing import Any

import pytest
from django.db import OperationalError
from prometheus_client.parser import text_string_to_metric_families

from labplan.base import clock, housekeeping, metrics, outbox, tasks
from labplan.base.models import OutboxMessage
from labplan.base.outbox import topics
from labplan.operations import gauges
from labplan.procedures import life
from labplan.procedures.models import Procedure
from tests.json_log import json_log
from tests.laboratory import PROCEDURES, ApiTestClient, Laboratory, octyl_order
from tests.targets import OCTYL_GLUCOSIDE

Key = tuple[str, tuple[tuple[str, str], ...]]
TOPIC = "test.metrics"


def scrape(accept: str = "") -> dict[Key, float]:
    response = ApiTestClient(None).get("/metrics", Accept=accept)
    assert response.status_code == 200
    assert response["Content-Type"].startswith("text/plain; version=")
    assert response["Cache-Control"] == "no-store"
    families = text_string_to_metric_families(response.content.decode())
    return {
        (sample.name, tuple(sorted(sample.labels.items()))): sample.value
        for family in families
        for sample in family.samples
    }


def of(found: dict[Key, float], name: str, **labels: str) -> float:
    return found.get((f"labplan_{name}", tuple(sorted(labels.items()))), 0.0)


def grown(work: Callable[[], Any]) -> Callable[..., float]:
    """By how much a series grew while the work was done."""
    before = scrape()
    work()
    after = scrape()
    return lambda name, **labels: of(after, name, **labels) - of(before, name, **labels)


def test_requests_are_counted_by_route_method_and_status(lab: Laboratory) -> None:
    client, nobody = lab.client(), ApiTestClient(None)

    def work() -> None:
        for code in ("P-22222222", "P-33333333"):
            client.get(f"{PROCEDURES}{code}/")
        nobody.get(PROCEDURES)
        client.get("/one/nobody/serves/")
        client.request("BREW", PROCEDURES)
        client.request("XYZZY", PROCEDURES)

    by = grown(work)
    assert by("http_requests_total", route="procedure-detail", method="GET", status="404") == 2
    assert by("http_requests_total", route="procedure-list", method="GET", status="401") == 1
    assert by("http_requests_total", route="unmatched", method="GET", status="404") == 1
    assert by("http_requests_total", route="procedure-list", method="other", status="405") == 2
    timed = {"route": "procedure-detail", "method": "GET"}
    assert by("http_request_duration_seconds_count", **timed) == 2
    assert by("http_request_duration_seconds_bucket", **timed, le="+Inf") == 2
    assert by("http_request_duration_seconds_sum", **timed) > 0


def test_names_and_labels_follow_the_practice_and_hold_nothing_of_the_laboratory(
    live_lab: Laboratory,
) -> None:
    client = live_lab.client()
    code = client.post(PROCEDURES, octyl_order()).json()["code"]
    live_lab.run_outbox()
    client.get(f"{PROCEDURES}{code}/")
    client.get("/api/v1/bottles/GPA-1/")
    client.get("/api/v1/projects/LECTIN-07/")
    text = ApiTestClient(None).get("/metrics").content.decode()
    for secret in (code, "LECTIN", "MIRA", "GPA-1", "octan", OCTYL_GLUCOSIDE, "lpt_", "sqlite"):
        assert secret not in text
    kinds = dict(re.findall(r"^# TYPE (\S+) (\S+)$", text, re.M))
    assert set(kinds.values()) == {"counter", "histogram", "gauge"}
    for name, kind in kinds.items():
        assert re.fullmatch(r"labplan_[a-z_]+", name)
        assert name.endswith("_total") is (kind == "counter")
        assert name.endswith("_duration_seconds") is (kind == "histogram")
    helped = dict(re.findall(r"^# HELP (\S+) (.+)$", text, re.M))
    assert set(helped) == set(kinds)


def test_looking_leaves_nothing_behind(lab: Laboratory) -> None:
    scrape()
    first, second = scrape(), scrape()
    assert set(first) == set(second)
    text = ApiTestClient(None).get("/metrics").content.decode()
    shown = re.findall(r"^# TYPE (\S+)", text, re.M)
    assert len(shown) == len(set(shown))


def test_the_newer_format_is_given_to_who_asks_for_it(lab: Laboratory) -> None:
    from prometheus_client.openmetrics.parser import text_string_to_metric_families as read

    accept = "application/openmetrics-text;version=1.0.0;q=0.8,text/plain;q=0.2"
    response = ApiTestClient(None).get("/metrics", Accept=accept)
    assert response["Content-Type"].startswith("application/openmetrics-text")
    names = {family.name for family in read(response.content.decode())}
    assert names >= {"labplan_http_requests", "labplan_database_up", "labplan_outbox_paused"}


def test_a_planned_procedure_is_counted_as_run_and_as_settled(live_lab: Laboratory) -> None:
    client = live_lab.client()
    for order in (octyl_order(), octyl_order(product_mass_g="400")):
        assert client.post(PROCEDURES, order).status_code == 202
    by = grown(live_lab.run_outbox)
    assert by("procedures_settled_total", state="planned") == 1
    assert by("procedures_settled_total", state="short") == 1
    assert by("outbox_runs_total", topic="procedure.plan", outcome="done") == 2
    assert by("outbox_run_duration_seconds_count", topic="procedure.plan") == 2
    assert by("procedures", state="planned") == by("procedures", state="short") == 1
    assert by("procedures", state="queued") == -2


def test_a_procedure_that_is_given_up_counts_as_failed(live_lab: Laboratory) -> None:
    live_lab.client().post(PROCEDURES, octyl_order())
    OutboxMessage.objects.update(state="sent", attempts=8, lease_until=clock.now())
    by = grown(lambda: outbox.publish_waiting(lambda message: None))
    assert by("procedures_settled_total", state="failed") == 1
    assert by("outbox_dead_letters") == 1
    assert by("outbox_messages", queue="procedures", state="dead") == 1


@pytest.mark.django_db(transaction=True)
def test_runs_that_fail_and_topics_nobody_knows_are_counted(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    def fails(payload: dict[str, Any], message_id: int) -> None:
        raise ValueError("no")

    monkeypatch.setitem(topics._topics, TOPIC, topics.Topic(fails, topics.DOCUMENTS, 10))
    outbox.enqueue(TOPIC, {})
    for number in range(3):
        outbox.enqueue(f"unheard.of.{number}", {})
    by = grown(outbox.deliver_waiting)
    assert by("outbox_runs_total", topic=TOPIC, outcome="failed") == 1
    assert by("outbox_runs_total", topic="unknown", outcome="failed") == 3
    assert [key for key in scrape() if "unheard" in str(key)] == []


@pytest.mark.django_db(transaction=True)
def test_sweeps_are_counted_with_what_they_found(monkeypatch: pytest.MonkeyPatch) -> None:
    def breaks() -> int:
        raise ValueError("no")

    second = timedelta(seconds=1)
    monkeypatch.setitem(housekeeping._duties, "good", housekeeping.Duty(lambda: 3, second))
    monkeypatch.setitem(housekeeping._duties, "bad", housekeeping.Duty(breaks, second))

    def work() -> None:
        tasks.run_sweep.run("good")
        tasks.run_sweep.run("good")
        with pytest.raises(ValueError, match="no"):
            tasks.run_sweep.run("bad")

    by = grown(work)
    assert by("sweeps_total", sweep="good", outcome="done") == 2
    assert by("sweep_found_total", sweep="good") == 6
    assert by("sweeps_total", sweep="bad", outcome="failed") == 1
    assert by("sweeps_total", sweep="bad", outcome="done") == 0


@pytest.mark.django_db(transaction=True)
def test_the_figures_of_the_outbox_are_those_of_this_moment() -> None:
    def outbox_of(found: dict[Key, float]) -> dict[Key, float]:
        return {key: value for key, value in found.items() if key[0].startswith("labplan_outbox_m")}

    empty = outbox_of(scrape())
    assert len(empty) == len(topics.QUEUES) * 3
    assert set(empty.values()) == {0.0}
    for state in ("new", "new", "sent", "dead", "done"):
        OutboxMessage.objects.create(
            topic="t", queue="documents", payload="{}", state=state, available_at=clock.now(),
            created_at=clock.now() - timedelta(hours=1 if state == "dead" else 0, seconds=90),
        )  # fmt: skip
    found = scrape()
    assert of(found, "outbox_messages", queue="documents", state="new") == 2
    assert of(found, "outbox_messages", queue="documents", state="sent") == 1
    assert of(found, "outbox_messages", queue="documents", state="dead") == 1
    assert sum(outbox_of(found).values()) == 4
    assert of(found, "outbox_oldest_unfinished_age_seconds") == 90
    assert of(found, "outbox_dead_letters") == 1
    assert of(found, "outbox_paused") == 0
    outbox.pause("to see")
    assert of(scrape(), "outbox_paused") == 1


@pytest.mark.django_db(transaction=True)
def test_every_state_of_a_procedure_is_shown_also_without_any() -> None:
    found = {key: value for key, value in scrape().items() if key[0] == "labplan_procedures"}
    assert found == {("labplan_procedures", (("state", state),)): 0.0 for state in life.STATES}
    assert Procedure.objects.count() == 0


@pytest.mark.django_db(transaction=True)
def test_a_database_that_is_away_spoils_no_scrape(monkeypatch: pytest.MonkeyPatch) -> None:
    assert of(scrape(), "database_up") == 1

    def away() -> None:
        raise OperationalError("could not connect to host 10.0.0.7")

    monkeypatch.setattr(gauges.outbox, "outbox_figures", away)
    with json_log() as log:
        found = scrape()
    assert ("labplan_database_up", ()) in found
    assert of(found, "database_up") == 0
    assert [key for key in found if key[0].startswith(("labplan_outbox_m", "labplan_proc"))] == [
        key for key in found if key[0] == "labplan_procedures_settled_total"
    ]
    assert of(found, "http_requests_total", route="metrics", method="GET", status="200") > 0
    assert [line["message"] for line in log()] == [
        "metrics: no figures from the database: OperationalError"
    ]


def test_a_count_that_fails_does_not_fail_the_request(
    lab: Laboratory, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(*_: Any) -> None:
        raise OSError("no space left")

    monkeypatch.setattr(metrics._requests, "labels", full)
    monkeypatch.setattr(metrics, "_complained_at", float("-inf"))
    with json_log() as log:
        assert [lab.client().get(PROCEDURES).status_code for _ in range(3)] == [200] * 3
    complaints = [line["message"] for line in log() if line["level"] == "WARNING"]
    assert complaints == ["metrics: not counted: OSError: no space left"]
