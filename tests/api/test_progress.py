"""A queued procedure tells how far it is, and no condition on a version hides or blocks that."""

from typing import Any

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from labplan.procedures import progress
from labplan.procedures.models import Procedure
from tests.api.problems import assert_problem
from tests.laboratory import PROCEDURES, ApiTestClient, Laboratory, octyl_order


def ask_for(client: ApiTestClient, **changes: Any) -> str:
    """The address of a new queued procedure."""
    path: str = client.post(PROCEDURES, octyl_order(**changes))["Location"]
    return path


def test_a_queued_procedure_says_that_it_waits_and_when_to_look(lab: Laboratory) -> None:
    client = lab.client()
    shown = client.get(ask_for(client))
    assert shown.json()["progress"] == {
        "phase": "waiting", "text": "Waiting for its turn.", "queued_before": 0,
    }  # fmt: skip
    assert (shown["Retry-After"], shown["Vary"]) == ("1", "Prefer")


def test_what_was_asked_for_before_and_is_queued_is_counted_over_all_projects(
    lab: Laboratory,
) -> None:
    lab.add_member("GUEST", "chemist", project="GLYCAN-12")
    client, guest = lab.client(), lab.client("GUEST")
    paths = [
        ask_for(client), ask_for(guest, project="GLYCAN-12"), ask_for(client), ask_for(client),
    ]  # fmt: skip

    def places() -> list[int | None]:
        of = {paths[1]: guest}
        return [
            of.get(path, client).get(path).json()["progress"]["queued_before"] for path in paths
        ]

    assert places() == [0, 1, 2, 3]
    assert client.get(paths[1]).status_code == 404
    client.post(paths[2] + "cancel/", If_Match="*")
    assert places() == [0, 1, None, 2]
    lab.run_outbox()
    assert places() == [None, None, None, None]


def test_a_settled_procedure_has_ended_and_is_not_to_be_looked_at_again(lab: Laboratory) -> None:
    client = lab.client()
    path = ask_for(client)
    lab.run_outbox()
    shown = client.get(path)
    assert shown.json()["progress"] == {
        "phase": "ended", "text": "Planning has ended.", "queued_before": None,
    }  # fmt: skip
    assert "Retry-After" not in shown
    same = client.get(path, If_None_Match=shown["ETag"])
    assert (same.status_code, "Retry-After" in same, same["Vary"]) == (304, False, "Prefer")


@pytest.mark.parametrize("phase", [p for p in progress.PHASES if p != progress.ENDED])
def test_each_part_of_planning_is_told_in_words(phase: str, lab: Laboratory) -> None:
    client = lab.client()
    path = ask_for(client)
    Procedure.objects.update(phase=phase)
    shown = client.get(path).json()["progress"]
    assert shown == {"phase": phase, "text": progress.PHASES[phase], "queued_before": 0}


def test_unchanged_is_answered_with_the_time_to_look_again(lab: Laboratory) -> None:
    client = lab.client()
    path = ask_for(client)
    etag = client.get(path)["ETag"]
    same = client.get(path, If_None_Match=etag)
    assert (same.status_code, same.content, same["ETag"]) == (304, b"", etag)
    assert (same["Retry-After"], same["Vary"]) == ("1", "Prefer")


def test_if_none_match_hides_neither_a_phase_nor_a_place_in_the_queue(lab: Laboratory) -> None:
    client = lab.client()
    first, second = ask_for(client), ask_for(client)
    etag = client.get(second)["ETag"]
    client.post(first + "cancel/", If_Match="*")
    moved = client.get(second, If_None_Match=etag)
    assert (moved.status_code, moved.json()["progress"]["queued_before"]) == (200, 0)
    Procedure.objects.filter(state="queued").update(phase=progress.SIZING)
    begun = client.get(second, If_None_Match=moved["ETag"])
    assert (begun.status_code, begun.json()["progress"]["phase"]) == (200, "sizing")
    assert client.get(second, If_None_Match=begun["ETag"]).status_code == 304


def test_the_tag_of_the_202_does_not_pass_for_one_of_the_detail(lab: Laboratory) -> None:
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    shown = client.get(accepted["Location"], If_None_Match=accepted["ETag"])
    assert (shown.status_code, "progress" in shown.json()) == (200, True)
    assert "progress" not in accepted.json()


@pytest.mark.parametrize("since", ["nothing", "a place moved", "planning began"])
def test_a_queued_procedure_is_cancelled_by_the_tag_of_any_look_at_that_version(
    since: str, lab: Laboratory
) -> None:
    client = lab.client()
    first, second = ask_for(client), ask_for(client)
    etag = client.get(second)["ETag"]
    if since == "a place moved":
        client.post(first + "cancel/", If_Match="*")
    if since == "planning began":
        Procedure.objects.update(phase=progress.WRITING)
    cancelled = client.post(second + "cancel/", If_Match=etag)
    assert (cancelled.status_code, cancelled.json()["state"]) == (200, "cancelled")


def test_a_tag_of_the_queue_cancels_nothing_that_is_planned(lab: Laboratory) -> None:
    client = lab.client()
    path = ask_for(client)
    etag = client.get(path)["ETag"]
    lab.run_outbox()
    before = lab.counts()
    body = assert_problem(client.post(path + "cancel/", If_Match=etag), 412, "stale_copy")
    assert f"now {client.get(path)['ETag']}." in body["detail"]
    assert (lab.counts(), Procedure.objects.get().state) == (before, "planned")


@pytest.mark.parametrize("pattern", ["W/{tag}", '"{bare}+"', '"procedure-P-22222222-v1+waiting-0"'])
def test_weak_tags_and_tags_of_others_cancel_nothing(pattern: str, lab: Laboratory) -> None:
    client = lab.client()
    path = ask_for(client)
    tag = client.get(path)["ETag"]
    if pattern == '"{bare}+"':
        tag = tag.replace("-v1", "-v2")
    given = pattern.format(tag=tag, bare=tag.strip('"').partition("+")[0])
    assert_problem(client.post(path + "cancel/", If_Match=given), 412, "stale_copy")
    assert Procedure.objects.get().state == "queued"


def test_the_place_in_the_queue_costs_one_query_and_a_list_none(lab: Laboratory) -> None:
    client = lab.client()
    path = ask_for(client)

    def queries(path: str) -> int:
        with CaptureQueriesContext(
            connection,
        ) as caught:
            assert client.get(path).status_code == 200
        return len(caught)

    alone, listed = queries(path), queries(PROCEDURES)
    for _ in range(3):
        ask_for(client)
    assert (queries(path), queries(PROCEDURES)) == (alone, listed)
    lab.run_outbox()
    assert queries(path) == alone - 1
