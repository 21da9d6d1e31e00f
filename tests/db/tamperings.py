"""Ways to change a sealed database behind labplan's back, each told where it must be found.

All of them work as somebody does who owns the database but has not the key. Many are careful:
they set the sums and balances right again, or make the digests anew with a key of their own.
"""

import random
import uuid
from collections.abc import Callable
from dataclasses import dataclass
from datetime import timedelta
from typing import Any

from inventory.models import Movement
from labplan.base.models import Event, Seal, SealRun
from labplan.base.seal.keys import print_of
from labplan.base.seal.registry import get_book
from labplan.base.seal.rows import RowReader
from labplan.base.seal.writing import digest_of_runs, digest_of_seal, make_run
from labplan.procedures.models import Document
from tests.db.bench import rows_of, run_sql

FALSE_KEY = b"a key of the one who tampers, made"


@dataclass(frozen=True)
class Found:
    """Where a tampering must be found: the bottle or book, and a word of the place in it."""

    place: str
    where: str


@dataclass(frozen=True)
class Tampering:
    """`apply` changes the database and says where that must be found.

    It gives None when the random choice was one that changes nothing.
    """

    name: str
    apply: Callable[[random.Random], Found | None]
    needs_paper: bool = False  # only somebody with a printed sheet can find it
    replaces_key: bool = False
    is_one_row: bool = False  # and takes no part in a sum: one fault and no other is reported


def _table(model: Any) -> str:
    return str(model._meta.db_table)


def _set(model: Any, pk: int, **changes: Any) -> None:
    """Change a row; the values go through the model's fields, the rest through raw SQL."""
    from django.db import connection

    columns, values = [], []
    for name, value in changes.items():
        column = model._meta.get_field(name)
        columns.append(f'"{column.column}" = %s')
        values.append(column.get_db_prep_save(value, connection))
    run_sql(
        f'UPDATE "{_table(model)}" SET {", ".join(columns)} WHERE "{model._meta.pk.column}" = %s',
        [*values, pk],
    )


def _delete(model: Any, pk: int) -> None:
    run_sql(f'DELETE FROM "{_table(model)}" WHERE "{model._meta.pk.column}" = %s', [pk])


def _line(rng: random.Random) -> Movement:
    return rng.choice(list(Movement.objects.select_related("bottle").order_by("pk")))


def _place_of(line: Movement) -> Found:
    return Found(line.bottle.code, f"line {line.seq}")


def _other(rng: random.Random, value: Any, values: list[Any]) -> Any:
    return rng.choice([other for other in values if other != value])


# ---- single values ----


def changed_amount(rng: random.Random) -> Found:
    line = _line(rng)
    column = rng.choice(["on_hand_change", "held_change", "on_hand_after", "held_after"])
    step = rng.choice([-1000, -1, 1, 7, 10**6])
    _set(Movement, line.pk, **{column: getattr(line, column) + step})
    return _place_of(line)


def changed_words(rng: random.Random) -> Found:
    """Who, why, what was typed, the moles: nothing of it takes part in any sum."""
    line = _line(rng)
    column, values = rng.choice(
        [
            ("actor_code", ["LEAD", "CHEMIST", "OTHER"]),
            ("reason", ["another reason", "", "A test", line.reason + " "]),
            ("entered_amount", ["99", "0.5", line.entered_amount + "0"]),
            ("entered_unit", ["g", "mg", "kg"]),
            ("amount_nmol", [5, 6, None]),
            ("density_g_per_ml", [None, "0.8271", "1.0001"]),
            ("operation", [uuid.UUID(int=1)]),
            ("project_id", [None, *_projects()]),
        ]
    )
    field = column.removesuffix("_id")
    _set(Movement, line.pk, **{field: _other(rng, getattr(line, column), values)})
    return _place_of(line)


def _projects() -> list[int]:
    return [pk for (pk,) in rows_of("SELECT id FROM base_project")]


def changed_date(rng: random.Random) -> Found:
    line = _line(rng)
    step = timedelta(days=rng.choice([-365, -1, 1]))
    if rng.random() < 0.5:
        _set(Movement, line.pk, booked_on=line.booked_on + step)
    else:
        tick = rng.choice([step, timedelta(microseconds=1)])
        _set(Movement, line.pk, recorded_at=line.recorded_at + tick)
    return _place_of(line)


def changed_event(rng: random.Random) -> Found:
    event = rng.choice(list(Event.objects.order_by("pk")))
    changes = rng.choice(
        [
            {"actor_code": event.actor_code + "X"},
            {"kind": "nothing.happened"},
            {"subject": "person OTHER"},
            {"detail": event.detail.replace("}", ' , "more": 1}')},
            {"at": event.at - timedelta(hours=1)},
        ]
    )
    _set(Event, event.pk, **changes)
    return Found("events", f"event {event.pk}")


def changed_document(rng: random.Random) -> Found:
    document = rng.choice(list(Document.objects.order_by("pk")))
    changes = rng.choice(
        [
            {"body": bytes(document.body) + b" "},
            {"sha256": "f" * 64},
            {"attempt": document.attempt + 5},
            {"created_at": document.created_at + timedelta(seconds=1)},
        ]
    )
    _set(Document, document.pk, **changes)
    return Found("documents", f"document {document.pk}")


# ---- careful: the sums are right afterwards ----


def changed_amount_and_all_sums(rng: random.Random) -> Found:
    """An amount, every sum after it and the balance: re-adding finds nothing."""
    line, step = _line(rng), rng.choice([-500, -1, 1, 1000])
    if line.on_hand_change == 0 or line.kind in ("hold", "release"):
        line = Movement.objects.select_related("bottle").get(bottle=line.bottle_id, seq=1)
    _set(Movement, line.pk, on_hand_change=line.on_hand_change + step)
    run_sql(
        "UPDATE inventory_movement SET on_hand_after = on_hand_after + %s "
        "WHERE bottle_id = %s AND seq >= %s",
        [step, line.bottle_id, line.seq],
    )
    run_sql(
        "UPDATE inventory_balance SET on_hand = on_hand + %s WHERE bottle_id = %s",
        [step, line.bottle_id],
    )
    return _place_of(line)


def cut_tail_of_rows(rng: random.Random) -> Found | None:
    """The last lines of a book go, and the balance is set to what is left."""
    line = _line(rng)
    if line.seq == 1:
        return None
    last = Movement.objects.get(bottle=line.bottle_id, seq=line.seq - 1)
    run_sql(
        "DELETE FROM inventory_movement WHERE bottle_id = %s AND seq >= %s",
        [line.bottle_id, line.seq],
    )
    run_sql(
        "UPDATE inventory_balance SET seq = %s, on_hand = %s, held = %s WHERE bottle_id = %s",
        [last.seq, last.on_hand_after, last.held_after, line.bottle_id],
    )
    return _place_of(line)


# ---- rows that move, change places or go ----


def swapped_lines(rng: random.Random) -> Found | None:
    """Two lines of one book change their numbers."""
    line = _line(rng)
    others = list(Movement.objects.filter(bottle=line.bottle_id).exclude(pk=line.pk).order_by("pk"))
    if not others:
        return None
    other = rng.choice(others)
    # by way of a free number: the pair is unique
    _set(Movement, line.pk, seq=10_000)
    _set(Movement, other.pk, seq=line.seq)
    _set(Movement, line.pk, seq=other.seq)
    return _place_of(line)


def swapped_words(rng: random.Random) -> Found | None:
    """Two lines change who did it, why and when."""
    line, other = _line(rng), _line(rng)
    names = ("actor_code", "reason", "entered_amount", "recorded_at")
    if all(getattr(line, n) == getattr(other, n) for n in names):
        return None
    _set(Movement, line.pk, **{n: getattr(other, n) for n in names})
    _set(Movement, other.pk, **{n: getattr(line, n) for n in names})
    return _place_of(line)


def swapped_events(rng: random.Random) -> Found:
    one, other = rng.sample(list(Event.objects.order_by("pk")), 2)
    names = ("at", "actor_code", "kind", "subject", "detail")
    _set(Event, one.pk, **{n: getattr(other, n) for n in names})
    _set(Event, other.pk, **{n: getattr(one, n) for n in names})
    return Found("events", f"event {one.pk}")


def swapped_documents(rng: random.Random) -> Found:
    one, other = rng.sample(list(Document.objects.order_by("pk")), 2)
    names = ("body", "sha256")
    _set(Document, one.pk, **{n: getattr(other, n) for n in names})
    _set(Document, other.pk, **{n: getattr(one, n) for n in names})
    return Found("documents", f"document {one.pk}")


def moved_line(rng: random.Random) -> Found:
    """The last line of a book becomes the last of another."""
    line = _line(rng)
    line = Movement.objects.filter(bottle=line.bottle_id).select_related("bottle").latest("seq")
    bottles = [pk for (pk,) in rows_of("SELECT id FROM inventory_bottle ORDER BY id")]
    target = _other(rng, line.bottle_id, bottles)
    end = Movement.objects.filter(bottle=target).latest("seq").seq
    run_sql(
        "UPDATE inventory_movement SET bottle_id = %s, seq = %s WHERE id = %s",
        [target, end + 1, line.pk],
    )
    return _place_of(line)


def removed_line(rng: random.Random) -> Found:
    line = _line(rng)
    _delete(Movement, line.pk)
    return _place_of(line)


def removed_event(rng: random.Random) -> Found:
    event = rng.choice(list(Event.objects.order_by("pk")))
    _delete(Event, event.pk)
    return Found("events", f"event {event.pk}")


def removed_last_events(rng: random.Random) -> Found:
    first = rng.choice(list(Event.objects.order_by("pk")))
    run_sql("DELETE FROM base_event WHERE id >= %s", [first.pk])
    return Found("events", f"event {first.pk}")


# ---- the seals themselves ----


def changed_seal(rng: random.Random) -> Found:
    seal = rng.choice(list(Seal.objects.order_by("pk")))
    changes: dict[str, Any] = rng.choice(
        [
            {"sealed_at": seal.sealed_at - timedelta(days=1)},
            {"digest": seal.digest[::-1]},
            {"before": "e" * 64},
            {"rows": seal.rows + 1},
            {"runs": seal.runs + 1, "rows": seal.rows + 1},
            {"key_print": "0123456789abcdef"},
        ]
    )
    _set(Seal, seal.pk, **changes)
    return Found("seals", f"seal {seal.pk}")


def changed_run(rng: random.Random) -> Found:
    """A run says something else: the seal that closed it does not fit any more."""
    run = rng.choice(list(SealRun.objects.order_by("pk")))
    changes: dict[str, Any] = rng.choice(
        [
            {"digest": run.digest[::-1]},
            {"marks": run.marks[::-1] if run.marks != run.marks[::-1] else "0" * len(run.marks)},
            {"book": "nothing"},
            {"subject": run.subject + 1000},
        ]
    )
    _set(SealRun, run.pk, **changes)
    return Found("seals", f"seal {run.seal_id}")


def removed_run(rng: random.Random) -> Found:
    run = rng.choice(list(SealRun.objects.order_by("pk")))
    _delete(SealRun, run.pk)
    return Found("seals", f"seal {run.seal_id}")


def removed_seal_within(rng: random.Random) -> Found:
    number = rng.randrange(1, Seal.objects.count())
    run_sql("DELETE FROM base_sealrun WHERE seal_id = %s", [number])
    run_sql("DELETE FROM base_seal WHERE number = %s", [number])
    return Found("seals", f"seal {number + 1}")


def swapped_seals(rng: random.Random) -> Found:
    one, other = rng.sample(list(Seal.objects.order_by("pk")), 2)
    names = ("sealed_at", "before", "runs", "rows", "digest")
    _set(Seal, one.pk, **{n: getattr(other, n) for n in names})
    _set(Seal, other.pk, **{n: getattr(one, n) for n in names})
    return Found("seals", f"seal {one.pk}")


def recomputed_digests(rng: random.Random) -> Found:
    """A line is changed and every code after it made anew, by the same program, without the key."""
    line = _line(rng)
    _set(Movement, line.pk, actor_code="OTHER")
    run = SealRun.objects.get(
        book="stock", subject=line.bottle_id, first__lte=line.seq, last__gte=line.seq
    )
    reader = RowReader(get_book("stock"), FALSE_KEY)
    rows = reader.rows_within(run.subject, run.first, run.last)
    codes = [reader.code_of(row) for row in rows]
    made = make_run(FALSE_KEY, "stock", run.subject, run.first, codes)
    _set(SealRun, run.pk, digest=made.digest, marks=made.marks)
    claims_the_key = rng.random() < 0.5
    _seal_anew_from(run.seal_id, claims_the_key=claims_the_key)
    return _place_of(line)


def _seal_anew_from(first: int, *, claims_the_key: bool) -> None:
    """The chain from a seal on, made with the false key; it may claim to be made with the true."""
    before = None
    for seal in Seal.objects.filter(number__gte=first).order_by("number"):
        if before is not None:
            seal.before = before
        if not claims_the_key:
            seal.key_print = print_of(FALSE_KEY)
        runs = SealRun.objects.filter(seal=seal).order_by("book", "subject", "first")
        listed = digest_of_runs((r.book, r.subject, r.first, r.last, r.digest) for r in runs)
        known = {
            n: getattr(seal, n)
            for n in ("number", "sealed_at", "key_print", "before", "runs", "rows")
        }
        digest = digest_of_seal(FALSE_KEY, **known, all_runs=listed)
        _set(Seal, seal.pk, before=seal.before, key_print=seal.key_print, digest=digest)
        before = digest


def cut_tail_of_seals(rng: random.Random) -> Found:
    """The newest seals go; the rows may be sealed again by whoever has the key, or go too."""
    first = rng.randrange(1, Seal.objects.count() + 1)
    run_sql("DELETE FROM base_sealrun WHERE seal_id >= %s", [first])
    run_sql("DELETE FROM base_seal WHERE number >= %s", [first])
    return Found("seals", "paper")


def cut_tail_of_seals_and_events(rng: random.Random) -> Found:
    """The newest seal goes, with the events that it alone had closed."""
    number = Seal.objects.count()
    for first, last in SealRun.objects.filter(seal=number, book="events").values_list(
        "first", "last"
    ):
        run_sql("DELETE FROM base_event WHERE id BETWEEN %s AND %s", [first, last])
    run_sql("DELETE FROM base_sealrun WHERE seal_id = %s", [number])
    run_sql("DELETE FROM base_seal WHERE number = %s", [number])
    return Found("seals", "paper")


def replaced_key(rng: random.Random) -> Found:
    """The key beside the database is another one when it is looked at."""
    return Found("seals", "key")


TAMPERINGS = (
    Tampering("changed amount", changed_amount),
    Tampering("changed words", changed_words, is_one_row=True),
    Tampering("changed date", changed_date, is_one_row=True),
    Tampering("changed event", changed_event, is_one_row=True),
    Tampering("changed document", changed_document, is_one_row=True),
    Tampering("changed amount and all sums", changed_amount_and_all_sums),
    Tampering("cut tail of rows", cut_tail_of_rows),
    Tampering("swapped lines", swapped_lines),
    Tampering("swapped words", swapped_words),
    Tampering("swapped events", swapped_events),
    Tampering("swapped documents", swapped_documents),
    Tampering("moved line", moved_line),
    Tampering("removed line", removed_line),
    Tampering("removed event", removed_event),
    Tampering("removed last events", removed_last_events),
    Tampering("changed seal", changed_seal),
    Tampering("changed run", changed_run),
    Tampering("removed run", removed_run),
    Tampering("removed seal within", removed_seal_within),
    Tampering("swapped seals", swapped_seals),
    Tampering("recomputed digests", recomputed_digests),
    Tampering("cut tail of seals", cut_tail_of_seals, needs_paper=True),
    Tampering("cut tail of seals and events", cut_tail_of_seals_and_events, needs_paper=True),
    Tampering("replaced key", replaced_key, replaces_key=True),
)
