"""Hash every stored document again: what was planned must still be what is stored."""

import json
from collections.abc import Iterator
from dataclasses import dataclass
from decimal import Decimal

from django.db.models import F

from labplan.base.canonical import canonical_bytes, sha256_hex
from labplan.procedures.models import Document, Procedure

# documents are large: few at a time
CHUNK = 50


@dataclass(frozen=True)
class DocumentFault:
    """A document that is not what it was, and whose it is."""

    procedure: str
    where: str
    detail: str


@dataclass(frozen=True)
class DocumentsReport:
    documents: int
    faults: tuple[DocumentFault, ...]


def verify_documents() -> DocumentsReport:
    """Compare the bytes of every document with its hash and with their canonical form.

    Documents are streamed. Nothing is changed.
    """
    faults: list[DocumentFault] = []
    count = 0
    rows = Document.objects.select_related("procedure").order_by("pk")
    for count, document in enumerate(rows.iterator(chunk_size=CHUNK), start=1):  # noqa: B007
        faults += _check(document)
    faults += _of_another_procedure()
    return DocumentsReport(count, tuple(faults))


def _check(document: Document) -> Iterator[DocumentFault]:
    code, where = document.procedure.code, f"document of attempt {document.attempt}"
    body = bytes(document.body)
    found = sha256_hex(body)
    if found != document.sha256:
        detail = f"its SHA-256 is {found}, stored is {document.sha256}"
        yield DocumentFault(code, where, detail)
    if not _is_canonical(body):
        yield DocumentFault(code, where, "its bytes are not canonical JSON")


def _is_canonical(body: bytes) -> bool:
    try:
        # A Decimal comes out as a string, so that a number with a fraction is found as well.
        return canonical_bytes(json.loads(body, parse_float=Decimal)) == body
    except (ValueError, TypeError, RecursionError):
        return False


def _of_another_procedure() -> Iterator[DocumentFault]:
    strays = Procedure.objects.exclude(document=None).exclude(document__procedure=F("pk"))
    for procedure in strays.order_by("pk").iterator(chunk_size=CHUNK):
        yield DocumentFault(
            procedure.code, "link", f"points to document {procedure.document_id} of another one"
        )
