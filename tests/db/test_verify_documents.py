"""The check of the documents finds bytes that are not what was stored, and says whose they are."""

import io
import json

import pytest
from django.core.management import CommandError, call_command
from django.db import connection

from labplan.base import append_only
from labplan.base.canonical import sha256_hex
from labplan.procedures.models import Document, Procedure
from labplan.procedures.services import DocumentFault, verify_documents
from tests.db.bench import ON_POSTGRESQL, run_sql
from tests.operations.house import request_one


@pytest.fixture
def planned(live_lab: object) -> list[Procedure]:
    made = [request_one(), request_one()]
    from labplan.base import outbox

    assert outbox.deliver_waiting() == 2
    return made


def _change(document: Document, **values: object) -> None:
    """Change a row as somebody with the rights of the database's owner could."""
    if ON_POSTGRESQL:
        run_sql("SET CONSTRAINTS ALL IMMEDIATE")
    with append_only.lifted(connection):
        for name, value in values.items():
            run_sql(
                f"UPDATE procedures_document SET {name} = %s WHERE id = %s", [value, document.pk]
            )


def test_untouched_documents_have_no_faults(planned: list[Procedure]) -> None:
    report = verify_documents()
    assert (report.documents, report.faults) == (2, ())
    said = io.StringIO()
    call_command("verify_documents", stdout=said)
    assert said.getvalue() == "2 documents: every hash matches.\n"


def test_one_changed_byte_is_found_and_fails_the_command(planned: list[Procedure]) -> None:
    document = Document.objects.get(procedure=planned[1])
    body = bytes(document.body)
    changed = body.replace(b"labplan", b"labplon", 1)
    assert changed != body
    _change(document, body=changed)
    said, complained = io.StringIO(), io.StringIO()
    with pytest.raises(CommandError) as failed:
        call_command("verify_documents", stdout=said, stderr=complained)
    assert (str(failed.value), failed.value.returncode) == ("2 documents: 1 fault(s).", 1)
    assert said.getvalue() == ""
    assert complained.getvalue() == (
        f"{planned[1].code}, document of attempt 1: its SHA-256 is {sha256_hex(changed)}, "
        f"stored is {document.sha256}\n"
    )


@pytest.mark.parametrize(
    "spoil",
    [
        lambda body: json.dumps(json.loads(body)).encode(),
        lambda body: body + b"\n",
        lambda body: body.replace(b"{", b'{"a":1.5,', 1),
        lambda body: body.replace(b"{", b'{"A":9007199254740993,', 1),
        lambda body: body[:-1],
        lambda body: b"\xff" + body,
    ],
)
def test_bytes_that_are_not_canonical_are_found_under_a_matching_hash(
    planned: list[Procedure], spoil: object
) -> None:
    document = Document.objects.get(procedure=planned[0])
    changed = spoil(bytes(document.body))  # type: ignore[operator]
    _change(document, body=changed, sha256=sha256_hex(changed))
    assert verify_documents().faults == (
        DocumentFault(planned[0].code, "document of attempt 1", "its bytes are not canonical JSON"),
    )


def test_a_document_of_another_procedure_is_found(planned: list[Procedure]) -> None:
    of_another = Document.objects.get(procedure=planned[1])
    Procedure.objects.filter(pk=planned[0].pk).update(document=of_another)
    assert verify_documents().faults == (
        DocumentFault(
            planned[0].code, "link", f"points to document {of_another.pk} of another one"
        ),
    )
