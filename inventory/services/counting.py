"""Stock-taking: by gross weight less tare, or by what is measured or counted."""

import uuid
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from pathlib import Path

from django.db.models import F

from inventory.errors import ImportRefused
from inventory.models import Bottle, Movement
from inventory.quantities import AMOUNT_FIELDS, Asked, converted, in_words, quantity_of
from inventory.services.csv_rows import Row, RowErrors, read_rows
from inventory.services.facts import Counted, Fact, write_facts
from inventory.services.importing import MOST_ERRORS_SHOWN
from inventory.services.once import write_once
from inventory.services.reservations import invalid
from inventory.services.using import check_day
from labplan.base.errors import DomainError, FieldProblem, InvalidValue, StateForbids
from labplan.base.events import record_event
from labplan.base.idempotency import Once
from labplan.base.rights import Actor, require

# Common practice: gross and tare on a balance read to 10 mg.
DEFAULT_UNCERTAINTY_UG = 20_000
COUNT_COLUMNS = (
    "bottle", "gross_g", "tare_g", "mass_mg", "volume_ml", "pieces", "uncertainty_mg", "note",
)  # fmt: skip
WORDS = {
    "agrees": "agrees with the book",
    "within_uncertainty": "no discrepancy: inside the uncertainty",
    "under_1_pct": "no discrepancy: under 1 % of the book",
    "corrected": "corrected",
}


@dataclass(frozen=True)
class Count:
    """One bottle: its gross weight (and tare, where it was weighed), or the content itself."""

    bottle_code: str
    gross_ug: int | None = None
    tare_ug: int | None = None
    content: Asked | None = None
    uncertainty_ug: int | None = None
    note: str = ""


@dataclass(frozen=True)
class CountsTaken:
    counted: tuple[Counted, ...]
    cancelled_holds: int


def count_bottles(
    *, actor: Actor, counts: Sequence[Count], reason: str = "stock-take",
    booked_on: date | None = None, operation_id: uuid.UUID | None = None,
    once: Once | None = None,
) -> CountsTaken:  # fmt: skip
    """Compare what is there with the books, all bottles in one transaction.

    A difference inside the uncertainty, or under 1 % of the book, is none; any other is written
    as a correction, and holds that cannot be kept are cancelled. Raises NotAllowed, and
    InvalidValue with every line that cannot be read; then nothing has changed. Safe to repeat
    with the same operation id or claim.
    """
    require(actor, "stock.count")
    check_day(booked_on)

    def body() -> CountsTaken:
        facts = _facts(counts)
        written = write_facts(
            facts, actor=actor, project_id=None, reason=reason, operation_id=operation_id,
            booked_on=booked_on,
        )  # fmt: skip
        _store_tares(counts)
        for counted in written.counted:
            _record(actor, counted)
        return CountsTaken(written.counted, len(written.cancelled))

    return write_once(body, operation_id=operation_id, once=once, earlier=_counted_by)


def read_counts(path: Path) -> list[Count]:
    """Read a file of counts; raise ImportRefused with every error, its row and column."""
    errors = RowErrors()
    rows = read_rows(path, COUNT_COLUMNS, required={"bottle"}, errors=errors)
    counts = [_read_count(row) for row in rows]
    _refuse(errors)
    return counts


def count_from_file(*, actor: Actor, path: Path) -> CountsTaken:
    """Count all bottles of a file, or none: every error is listed with its row."""
    counts = read_counts(path)
    try:
        return count_bottles(actor=actor, counts=counts, reason=f"stock-take {path.name}"[:160])
    except DomainError as error:
        if not error.errors:
            raise
        raise ImportRefused(
            "Nothing was counted; correct the rows listed.",
            errors=tuple(_at_row(line) for line in error.errors),
        ) from error


def _at_row(line: FieldProblem) -> FieldProblem:
    """lines[0].tare_mg of the service is row 2 of a file."""
    number, _, rest = line.field.removeprefix("lines[").partition("]")
    column = rest.lstrip(".") or "bottle"
    return FieldProblem(f"row {int(number) + 2}, {column}", line.code, line.detail)


def _read_count(row: Row) -> Count:
    given = [name for name in ("gross_g", *AMOUNT_FIELDS) if row.text(name)]
    if len(given) != 1:
        row.error("gross_g", "exactly_one", f"Give one of: gross_g, {', '.join(AMOUNT_FIELDS)}.")
    content = None
    for name in AMOUNT_FIELDS:
        value = row.decimal(name, lowest="0", highest="1e12", places=6)
        content = Asked(name, value) if value is not None else content
    return Count(
        row.text("bottle"), _micrograms(row, "gross_g", 1_000_000),
        _micrograms(row, "tare_g", 1_000_000), content,
        _micrograms(row, "uncertainty_mg", 1_000), row.within("note", 160),
    )  # fmt: skip


def _micrograms(row: Row, column: str, factor: int) -> int | None:
    value = row.decimal(column, lowest="0", highest="1e6", places=3 if factor == 1_000 else 6)
    return int(value * factor) if value is not None else None


def _refuse(errors: RowErrors) -> None:
    if errors.found:
        raise ImportRefused(
            f"{len(errors.found)} error(s) in the file; nothing was counted.",
            errors=tuple(errors.found[:MOST_ERRORS_SHOWN]),
        )


def _facts(counts: Sequence[Count]) -> list[Fact]:
    codes = [count.bottle_code for count in counts]
    rows = Bottle.objects.filter(code__in=codes).select_related("form__substance")
    bottles = {bottle.code: bottle for bottle in rows}
    facts, problems = [], []
    for number, count in enumerate(counts):
        field = f"lines[{number}]"
        try:
            if codes.index(count.bottle_code) != number:
                raise invalid(f"{field}.bottle", "repeated", f"{count.bottle_code} stands twice.")
            facts.append(_fact(count, bottles.get(count.bottle_code), field))
        except DomainError as error:
            problems += error.errors
    if problems:
        several = "Correct the lines listed in errors; nothing was counted."
        raise InvalidValue(
            problems[0].detail if len(problems) == 1 else several, errors=tuple(problems)
        )
    return facts


def _fact(count: Count, bottle: Bottle | None, field: str) -> Fact:
    if bottle is None:
        raise invalid(f"{field}.bottle", "unknown_bottle", f"No bottle {count.bottle_code}.")
    uncertainty_ug = count.uncertainty_ug
    if count.content is not None:
        empty = count.content.value == 0
        found = 0 if empty else quantity_of(bottle, count.content, field=field).amount
        return Fact(
            bottle, "correction", found, reason=count.note,
            uncertainty=_in_base_units(bottle, uncertainty_ug or 0, field),
        )  # fmt: skip
    net_ug = _net_ug(count, bottle, field)
    if uncertainty_ug is None:
        uncertainty_ug = DEFAULT_UNCERTAINTY_UG
    return Fact(
        bottle, "correction", _in_base_units(bottle, net_ug, field), reason=count.note,
        uncertainty=_in_base_units(bottle, uncertainty_ug, field),
    )  # fmt: skip


def _net_ug(count: Count, bottle: Bottle, field: str) -> int:
    tare_ug = count.tare_ug if count.tare_ug is not None else bottle.tare_ug
    if count.gross_ug is None:
        raise invalid(field, "exactly_one", "Give the gross weight or what is in the bottle.")
    if tare_ug is None:
        raise invalid(
            f"{field}.tare_mg", "tare_missing",
            f"Nobody has weighed {bottle.code} empty: give its tare, or its content.",
        )  # fmt: skip
    if count.gross_ug < tare_ug:
        raise invalid(
            f"{field}.gross_mg", "below_tare", f"Less than the empty bottle ({tare_ug / 1e6:g} g)."
        )
    return count.gross_ug - tare_ug


def _in_base_units(bottle: Bottle, mass_ug: int, field: str) -> int:
    if bottle.measured_by == "count":
        if mass_ug:
            raise invalid(f"{field}.gross_mg", "not_weighed", f"Count the pieces in {bottle.code}.")
        return 0
    found = converted(bottle, mass_ug, given_by="mass", wanted_by=bottle.measured_by)
    if found is None:
        raise invalid(
            f"{field}.gross_mg", "not_convertible",
            f"{bottle.code} is measured by volume and has no density: give volume_ml.",
        )  # fmt: skip
    return found


def _store_tares(counts: Sequence[Count]) -> None:
    for count in counts:
        if count.tare_ug is not None:
            Bottle.objects.filter(code=count.bottle_code).update(
                tare_ug=count.tare_ug, version=F("version") + 1
            )


def count_in_words(counted: Counted) -> str:
    """What a count found, for a person."""
    measured_by = counted.bottle.measured_by
    book, found = in_words(measured_by, counted.book), in_words(measured_by, counted.found)
    return f"book {book}, found {found}, {WORDS[counted.verdict]}"


def _record(actor: Actor, counted: Counted) -> None:
    measured_by = counted.bottle.measured_by
    record_event(
        actor_code=actor.code, kind="bottle.counted", subject=f"bottle {counted.bottle.code}",
        before=in_words(measured_by, counted.book),
        after={
            "found": in_words(measured_by, counted.found),
            "uncertainty": in_words(measured_by, counted.uncertainty),
            "verdict": counted.verdict,
        },
    )  # fmt: skip


def _counted_by(operation_id: uuid.UUID) -> CountsTaken:
    lines = Movement.objects.filter(operation=operation_id, kind="correction")
    if not lines:
        raise StateForbids("This operation id belongs to something else; take a new one.")
    counted = tuple(
        Counted(
            line.bottle, line.on_hand_after - line.on_hand_change, line.on_hand_after, 0,
            "corrected",
        )
        for line in lines.select_related("bottle")
    )  # fmt: skip
    return CountsTaken(counted, 0)
