"""Walk what is sealed, row by row and seal by seal, and say what is not as it was.

Rows and runs are read side by side in the same order; one run is in memory at a time.
"""

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from operator import itemgetter
from typing import Any

from django.db import OperationalError

from labplan.base.seal.keys import print_of, seal_key
from labplan.base.seal.printed import fault_of_printed, printed_value
from labplan.base.seal.registry import Book, books, get_book
from labplan.base.seal.rows import FETCHED_AT_ONCE, Row, RowReader
from labplan.base.seal.writing import (
    LOOK_BACK,
    begin_run,
    digest_of_runs,
    digest_of_seal,
    mark_of,
)
from labplan.base.seal_tables import MARK_LENGTH, NO_SEAL_BEFORE, Seal, SealRun

SEALS = "seals"
MOST_HELD_BACK = 1_000


@dataclass(frozen=True)
class SealFault:
    """What is not as it was sealed: the bottle or the book, where in it, and what."""

    place: str
    where: str
    detail: str


@dataclass
class SealWalk:
    """One walk. `report` takes each fault as it is found; the counts are whole at its end."""

    report: Callable[[SealFault], None]
    seals: int = 0
    sealed_rows: int = 0
    unsealed_rows: int = 0
    newest: str = ""  # as printed
    _key: bytes = field(default_factory=seal_key)
    # False while not one seal names the key at hand and not one run was made with it
    _is_key_sure: bool = True
    _held_back: list[SealFault] = field(default_factory=list)
    _walked: set[str] = field(default_factory=set)

    def check_chain(self, *, newest: str = "") -> None:
        """Walk the seals themselves; `newest` is the value on a paper that is to be found."""
        self._is_key_sure = self._check_key()
        runs = _Side(_runs_by_seal())
        number, before = 0, NO_SEAL_BEFORE
        for seal in Seal.objects.order_by("number").iterator(chunk_size=FETCHED_AT_ONCE):
            while runs.is_before((seal.number,)):
                self._say(f"seal {runs.head[0]}", "is missing, but its runs are there")
                runs.skip_group()
            if seal.number != number + 1:
                self._say(f"seal {seal.number}", f"follows seal {number}: seals are missing")
            elif seal.before != before:
                self._say(f"seal {seal.number}", f"does not carry on from seal {number}")
            self._check_seal(seal, runs.take_group(seal.number))
            number, before = seal.number, seal.digest
            self.seals += 1
            self.newest = printed_value(seal.number, seal.digest)
        if runs.head is not None:
            self._say(f"seal {runs.head[0]}", "is missing, but its runs are there")
        if newest and (detail := fault_of_printed(newest)):
            self._say("paper", detail)

    def rows(self, name: str, columns: Sequence[str] = ()) -> Iterator[Row]:
        """Walk the rows of a book, giving these columns of each as the database has them."""
        book = get_book(name)
        self._walked.add(name)
        reader = RowReader(book, self._key)
        chosen = [reader.columns.index(column) for column in columns]
        pick = itemgetter(*chosen) if len(chosen) > 1 else tuple
        watch = _BookWatch(self, book, reader)
        rows = reader.all_rows()
        while (row := self._next_row(book, rows, watch)) is not None:
            watch.see(row)
            yield pick(row)
        watch.end()

    def _next_row(self, book: Book, rows: Iterator[Row], watch: "_BookWatch") -> Row | None:
        """The next row; a text that is none ends the walk of its book with a fault."""
        try:
            return next(rows, None)
        except OperationalError as error:
            if "decode" not in str(error):
                raise
            self.report(SealFault(book.name, watch.where, f"what follows cannot be read: {error}"))
            return None

    def check_other_books(self) -> None:
        """Walk every book that was not walked yet."""
        for book in books():
            if book.name not in self._walked:
                for _ in self.rows(book.name):
                    pass

    def _check_key(self) -> bool:
        """Whether the seals can be checked with the key at hand; if not, that is one fault."""
        ours = print_of(self._key)
        if not Seal.objects.exists() or Seal.objects.filter(key_print=ours).exists():
            return True
        theirs = Seal.objects.order_by("-number").values_list("key_print", flat=True).first()
        self._say(
            "key",
            f"the seals were made with the key {theirs}, the one here is {ours}: without theirs "
            "nothing that is sealed can be checked",
        )
        return False

    def _check_seal(self, seal: Seal, runs: Iterable[Row]) -> None:
        counted = 0

        def listed() -> Iterator[tuple[str, int, int, int, str]]:
            nonlocal counted
            for counted, run in enumerate(runs, start=1):  # noqa: B007 - the last is the total
                yield run[1:]

        all_runs = digest_of_runs(listed())
        if counted != seal.runs:
            self._say(f"seal {seal.number}", f"closed {seal.runs} runs, {counted} are there")
        if seal.key_print != print_of(self._key):
            if self._is_key_sure:
                self._say(f"seal {seal.number}", f"names another key, {seal.key_print}")
            return
        made = digest_of_seal(
            self._key, number=seal.number, sealed_at=seal.sealed_at, key_print=seal.key_print,
            before=seal.before, runs=seal.runs, rows=seal.rows, all_runs=all_runs,
        )  # fmt: skip
        if made != seal.digest and counted == seal.runs:
            self._say(f"seal {seal.number}", "is not as it was made, or one of its runs is not")

    def say_of_codes(self, fault: SealFault) -> None:
        """Report what only the key can tell; wait while the key may be the wrong one."""
        if self._is_key_sure:
            self.report(fault)
        elif len(self._held_back) < MOST_HELD_BACK:
            self._held_back.append(fault)

    def be_sure_of_key(self) -> None:
        """A run fits the key: what did not fit it was changed."""
        self._is_key_sure = True
        for fault in self._held_back:
            self.report(fault)
        self._held_back.clear()

    def _say(self, where: str, detail: str) -> None:
        self.report(SealFault(SEALS, where, detail))


class _Side:
    """One sorted stream, looked at one row ahead."""

    def __init__(self, rows: Iterator[Row]) -> None:
        self._rows = rows
        self.head: Row | None = next(rows, None)

    def is_before(self, key: Row) -> bool:
        return self.head is not None and self.head[: len(key)] < key

    def take_group(self, first: Any) -> Iterator[Row]:
        """The rows that begin with `first`."""
        while self.head is not None and self.head[0] == first:
            row, self.head = self.head, next(self._rows, None)
            yield row

    def skip_group(self) -> None:
        if self.head is not None:
            for _ in self.take_group(self.head[0]):
                pass

    def step(self) -> None:
        self.head = next(self._rows, None)


def _runs_by_seal() -> Iterator[Row]:
    rows = SealRun.objects.order_by("seal_id", "book", "subject", "first")
    found = rows.values_list("seal_id", "book", "subject", "first", "last", "digest")
    return found.iterator(chunk_size=FETCHED_AT_ONCE)


def _runs_of(book: Book) -> Iterator[Row]:
    rows = SealRun.objects.filter(book=book.name).order_by("subject", "last")
    found = rows.values_list("subject", "last", "first", "seal_id", "digest", "marks")
    return found.iterator(chunk_size=FETCHED_AT_ONCE)


class _BookWatch:
    """Compares the rows of one book, as they come in order, with its runs."""

    def __init__(self, walk: SealWalk, book: Book, reader: RowReader) -> None:
        self._walk, self._book, self._reader = walk, book, reader
        self._runs = _Side(_runs_of(book))
        self._run: _OpenRun | None = None
        self._loose: tuple[int, int] | None = None  # unsealed rows of this subject so far
        self._subject: int | None = None
        self._number = 0
        self._sealed_to = _last_by_id(book)
        self._fault_of_named = lru_cache(maxsize=1024)(fault_of_printed)
        self._named_at = reader.columns.index(book.seal_named) if book.seal_named else None

    @property
    def where(self) -> str:
        """The row that was seen last."""
        if self._subject is None:
            return "start"
        return f"{self._place(self._subject)}, {self._book.row_word} {self._number}"

    def see(self, row: Row) -> None:
        reader = self._reader
        subject = 0 if reader.subject_at is None else row[reader.subject_at]
        number = row[reader.number_at]
        if not isinstance(subject, int) or not isinstance(number, int):
            self._say_unnumbered(subject, number)
            return
        if subject != self._subject:
            self._subject, self._loose = subject, None
        self._number = number
        self._close_runs_before((subject, number))
        if self._run is None and self._runs.head is not None:
            self._open_run_at(subject, number)
        if self._run is not None and self._run.covers(subject, number):
            self._walk.sealed_rows += 1
            self._run.add(number, reader.code_of(row))
        else:
            self._see_unsealed(number)
        if self._named_at is not None and (named := row[self._named_at]):
            self._check_named(subject, number, str(named))

    def end(self) -> None:
        self._close_runs_before(None)

    def _open_run_at(self, subject: int, number: int) -> None:
        head = self._runs.head
        assert head is not None
        run_subject, _, first, *_ = head
        if run_subject != subject or number < first:
            return
        self._run = _OpenRun(self._walk._key, self._book.name, head)
        if self._loose is not None and self._book.subject is not None:
            self._say_rows(*self._loose, "not sealed, though later ones are")
        self._loose = None
        self._runs.step()

    def _close_runs_before(self, key: tuple[int, int] | None) -> None:
        """End the open run if the rows are past it, and every run without a single row."""
        if self._run is not None and (key is None or (self._run.subject, self._run.last) < key):
            self._end_run(self._run)
            self._run = None
        while self._run is None and (head := self._runs.head) is not None:
            if key is not None and head[:2] >= key:
                return
            self._end_run(_OpenRun(self._walk._key, self._book.name, head))
            self._runs.step()

    def _end_run(self, run: "_OpenRun") -> None:
        in_seal = f"(seal {run.seal})"
        for first, last in run.missing():
            self._say_rows(first, last, f"missing {in_seal}", run.subject)
        if run.is_sound():
            self._walk.be_sure_of_key()
            if run.changed or run.has_odd_marks:
                place = self._place(run.subject)
                detail = f"has changed marks for {place}; the rows are as sealed"
                self._walk.report(SealFault(SEALS, f"seal {run.seal}", detail))
            return
        for number in run.changed:
            self._say_code(run, number, number, f"not as sealed {in_seal}")
        if not run.changed and not run.is_short:
            self._say_code(run, run.first, run.last, f"sealed by a run that was changed {in_seal}")

    def _say_code(self, run: "_OpenRun", first: int, last: int, what: str) -> None:
        self._walk.say_of_codes(self._fault_of_rows(run.subject, first, last, what))

    def _see_unsealed(self, number: int) -> None:
        self._walk.unsealed_rows += 1
        if self._book.subject is None:
            if number < self._sealed_to - LOOK_BACK:
                self._say_rows(number, number, "not sealed, though much later ones are")
        else:
            self._loose = (self._loose[0] if self._loose else number, number)

    def _say_unnumbered(self, subject: Any, number: Any) -> None:
        place = self._book.name if self._book.subject is None else f"{self._book.subject} {subject}"
        where = f"{self._book.row_word} {number!r}"
        self._walk.report(SealFault(place, where, "has no number: it was written past labplan"))

    def _check_named(self, subject: int, number: int, named: str) -> None:
        if detail := self._fault_of_named(named):
            where = f"{self._book.row_word} {number}"
            self._walk.report(SealFault(self._place(subject), where, detail))

    def _say_rows(self, first: int, last: int, what: str, subject: int | None = None) -> None:
        place = self._subject or 0 if subject is None else subject
        self._walk.report(self._fault_of_rows(place, first, last, what))

    def _fault_of_rows(self, subject: int, first: int, last: int, what: str) -> SealFault:
        word = self._book.row_word
        if first == last:
            return SealFault(self._place(subject), f"{word} {first}", f"is {what}")
        return SealFault(self._place(subject), f"{word}s {first} to {last}", f"are {what}")

    def _place(self, subject: int) -> str:
        """The bottle by its code, or the name of the book."""
        if self._book.subject is None:
            return self._book.name
        found = self._book.subject_model._default_manager.filter(pk=subject)
        code = found.values_list(self._book.subject_code, flat=True).first()
        return str(code) if code else f"{self._book.subject} {subject}"


class _OpenRun:
    """A run whose rows are being read."""

    def __init__(self, key: bytes, book: str, stored: Row) -> None:
        subject, last, first, seal, digest, marks = stored
        self.subject, self.first, self.last, self.seal = subject, first, last, seal
        self._digest, self._marks = digest, marks
        self._running = begin_run(key, book, subject, first, last)
        self._next = first
        self._gaps: list[tuple[int, int]] = []
        self.changed: list[int] = []

    def covers(self, subject: int, number: int) -> bool:
        return subject == self.subject and self.first <= number <= self.last

    def add(self, number: int, code: bytes) -> None:
        if number > self._next:
            self._gaps.append((self._next, number - 1))
        at = (number - self.first) * MARK_LENGTH
        if self._marks[at : at + MARK_LENGTH] != mark_of(code) or number < self._next:
            self.changed.append(number)
        self._running.update(code)
        self._next = max(self._next, number + 1)

    def missing(self) -> list[tuple[int, int]]:
        if self._next <= self.last:
            return [*self._gaps, (self._next, self.last)]
        return self._gaps

    @property
    def is_short(self) -> bool:
        return bool(self.missing())

    @property
    def has_odd_marks(self) -> bool:
        return len(self._marks) != MARK_LENGTH * (self.last - self.first + 1)

    def is_sound(self) -> bool:
        return self._running.hexdigest() == self._digest


def _last_by_id(book: Book) -> int:
    if book.subject is not None:
        return 0
    runs = SealRun.objects.filter(book=book.name, subject=0)
    return runs.order_by("-last").values_list("last", flat=True).first() or 0
