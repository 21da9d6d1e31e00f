"""Close what was written since the newest seal with a new one."""

import hashlib
import hmac
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from django.db import IntegrityError, OperationalError, transaction
from django.db.models import F, OuterRef, Subquery
from django.db.models.functions import Coalesce

from labplan.base import clock
from labplan.base.errors import DomainError
from labplan.base.problems import is_lock_timeout
from labplan.base.seal.keys import framed, print_of, seal_key
from labplan.base.seal.registry import Book, books
from labplan.base.seal.rows import Row, RowReader
from labplan.base.seal_tables import MARK_LENGTH, NO_SEAL_BEFORE, Seal, SealRun

MOST_ROWS = 20_000  # in one seal
LONGEST_RUN = 1_000
# On PostgreSQL an earlier number may be committed later. Of a book that is numbered by id so many
# numbers back are looked at again; nothing stays open while as many others are written.
LOOK_BACK = 10_000


class SealKeyChanged(DomainError):
    code = "seal_key_changed"
    title = "The key of the seals is another one"
    status = 503


@dataclass
class _Draft:
    """A seal in the making."""

    key: bytes
    room: int  # rows that still fit
    runs: list[SealRun] = field(default_factory=list)

    @property
    def rows(self) -> int:
        return sum(run.last - run.first + 1 for run in self.runs)


def seal_new() -> int:
    """Seal what was committed and is not sealed yet; return how many rows were sealed.

    Safe to repeat, and to run in several processes at once: the database lets one of them add
    the next seal, and the others return what they had sealed before. Raises SealKeyChanged when
    the newest seal was made with another key. Opens its own transactions, one a seal.
    """
    key, sealed = seal_key(), 0
    while True:
        newest = Seal.objects.order_by("-number").first()
        if newest is not None and newest.key_print != print_of(key):
            raise SealKeyChanged(
                f"Seal {newest.number} was made with the key {newest.key_print}, the one here is "
                f"{print_of(key)}: bring back the file seal-key or LABPLAN_SEAL_KEY."
            )
        draft = _draft(key)
        if not draft.runs or not _append(draft, newest):
            return sealed
        sealed += draft.rows
        if draft.room:
            return sealed


def _draft(key: bytes) -> _Draft:
    """Read and mark what is not sealed, outside any transaction: rows never change."""
    draft = _Draft(key, MOST_ROWS)
    for book in books():
        reader = RowReader(book, key)
        if book.subject is None:
            _take_late(draft, book, reader)
        for subject, last in _with_new_rows(book):
            if not draft.room:
                return draft
            rows = reader.rows_after(subject, last, draft.room)
            _take(draft, book, subject, reader, rows)
    return draft


def _with_new_rows(book: Book) -> Iterable[tuple[int, int]]:
    """Subjects that have unsealed rows, with the number of the last sealed one."""
    if book.subject is None:
        return [(0, _last_sealed(book))]
    rows = book.model._default_manager.filter(**{book.subject: OuterRef("pk")})
    newest = rows.order_by(f"-{book.number}").values(book.number)[:1]
    runs = SealRun.objects.filter(book=book.name, subject=OuterRef("pk"))
    found = book.subject_model._default_manager.annotate(
        newest_row=Subquery(newest),
        sealed_to=Coalesce(Subquery(runs.order_by("-last").values("last")[:1]), 0),
    ).filter(newest_row__gt=F("sealed_to"))
    return found.order_by("pk").values_list("pk", "sealed_to")[:MOST_ROWS]


def _last_sealed(book: Book) -> int:
    runs = SealRun.objects.filter(book=book.name, subject=0)
    return runs.order_by("-last").values_list("last", flat=True).first() or 0


def _take_late(draft: _Draft, book: Book, reader: RowReader) -> None:
    """Take rows whose numbers lie before what is sealed but were committed after it."""
    last = _last_sealed(book)
    since = last - LOOK_BACK
    window = {f"{book.number}__gt": since, f"{book.number}__lte": last}
    there = book.model._default_manager.filter(**window).values_list(book.number, flat=True)
    sealed: set[int] = set()
    runs = SealRun.objects.filter(book=book.name, subject=0, last__gt=since)
    for first, end in runs.values_list("first", "last"):
        sealed.update(range(first, end + 1))
    for first, end in _stretches(sorted(set(there) - sealed)):
        _take(draft, book, 0, reader, reader.rows_within(0, first, min(end, first + MOST_ROWS)))


def _stretches(numbers: list[int]) -> Iterator[tuple[int, int]]:
    """Sorted numbers as (first, last) of consecutive ones."""
    first = 0
    for at, number in enumerate(numbers):
        if at + 1 == len(numbers) or numbers[at + 1] != number + 1:
            yield numbers[first], number
            first = at + 1


def _take(draft: _Draft, book: Book, subject: int, reader: RowReader, rows: Iterable[Row]) -> None:
    """Add the rows to the draft as runs of consecutive numbers."""
    first, codes = 0, list[bytes]()
    for row in rows:
        number = row[reader.number_at]
        if codes and (number != first + len(codes) or len(codes) == LONGEST_RUN):
            draft.runs.append(make_run(draft.key, book.name, subject, first, codes))
            codes = []
        if not draft.room:
            break
        if not codes:
            first = number
        codes.append(reader.code_of(row))
        draft.room -= 1
    if codes:
        draft.runs.append(make_run(draft.key, book.name, subject, first, codes))


def make_run(key: bytes, book: str, subject: int, first: int, codes: list[bytes]) -> SealRun:
    """A run over the rows' codes, not stored yet."""
    last = first + len(codes) - 1
    running = begin_run(key, book, subject, first, last)
    running.update(b"".join(codes))
    return SealRun(
        book=book, subject=subject, first=first, last=last, digest=running.hexdigest(),
        marks="".join(mark_of(code) for code in codes),
    )  # fmt: skip


def mark_of(code: bytes) -> str:
    return code.hex()[:MARK_LENGTH]


def begin_run(key: bytes, book: str, subject: int, first: int, last: int) -> "hmac.HMAC":
    """The digest of a run before its rows: the codes of the rows are to be added in order."""
    return hmac.new(key, framed("run", book, subject, first, last), "sha256")


def digest_of_runs(runs: Iterable[tuple[str, int, int, int, str]]) -> str:
    """One digest of (book, subject, first, last, digest), sorted by the first three."""
    running = hashlib.sha256()
    for run in runs:
        running.update(framed(*run))
    return running.hexdigest()


def digest_of_seal(
    key: bytes, *, number: int, sealed_at: datetime, key_print: str, before: str, runs: int,
    rows: int, all_runs: str,
) -> str:  # fmt: skip
    parts: tuple[Any, ...] = (
        "seal", number, sealed_at.isoformat(), key_print, before, runs, rows, all_runs,
    )  # fmt: skip
    return hmac.digest(key, framed(*parts), "sha256").hex()


def _append(draft: _Draft, newest: Seal | None) -> bool:
    """Store the seal and its runs; False when another process has added this number."""
    draft.runs.sort(key=lambda run: (run.book, run.subject, run.first))
    known = {
        "number": newest.number + 1 if newest else 1,
        "sealed_at": clock.now(),
        "key_print": print_of(draft.key),
        "before": newest.digest if newest else NO_SEAL_BEFORE,
        "runs": len(draft.runs),
        "rows": draft.rows,
    }
    listed = digest_of_runs((r.book, r.subject, r.first, r.last, r.digest) for r in draft.runs)
    seal = Seal(**known, digest=digest_of_seal(draft.key, **known, all_runs=listed))
    try:
        with transaction.atomic(durable=True):
            seal.save(force_insert=True)
            for run in draft.runs:
                run.seal = seal
            SealRun.objects.bulk_create(draft.runs, batch_size=500)
    except IntegrityError:
        if not Seal.objects.filter(number=seal.number).exists():
            raise
        return False
    except OperationalError as error:
        if not is_lock_timeout(error):
            raise
        return False
    return True
