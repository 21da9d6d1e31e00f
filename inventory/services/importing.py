"""Read a stock list from CSV: everything or nothing, every error with its row and column."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from django.db import transaction

from inventory.errors import ImportRefused
from inventory.models import Place
from inventory.services.csv_rows import RowErrors, read_rows
from inventory.services.receipt import receive_bottles
from inventory.services.receiving import read_receipts
from inventory.services.stock_row import (
    PLACE_COLUMNS,
    STOCK_COLUMNS,
    STOCK_NEEDED,
    read_code,
    temperature_c,
)
from labplan.base.events import record_event
from labplan.base.rights import Actor, require

MOST_ERRORS_SHOWN = 200


@dataclass(frozen=True)
class ImportResult:
    places: int
    bottles: int


def import_stock(
    *, actor: Actor, bottles_file: Path, places_file: Path | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> ImportResult:  # fmt: skip
    """Import places and bottles from CSV in one transaction.

    Raises NotAllowed, and ImportRefused listing every error; then nothing has changed. A second
    import of the same file is refused: its bottles are there already.
    """
    require(actor, "stock.receive")
    errors = RowErrors()
    with transaction.atomic(durable=True):
        places = _import_places(places_file, errors) if places_file else 0
        rows = read_rows(bottles_file, STOCK_COLUMNS, required=STOCK_NEEDED, errors=errors)
        receipts = read_receipts(rows, progress)
        if errors.found:
            raise ImportRefused(
                f"{len(errors.found)} error(s) in the file; correct them and import it again. "
                "Nothing was changed.",
                errors=tuple(errors.found[:MOST_ERRORS_SHOWN]),
            )
        name = bottles_file.name[:80]
        count = receive_bottles(receipts, actor=actor, reason=f"import of {name}")
        record_event(
            actor_code=actor.code, kind="stock.imported", subject=name,
            after={"places": places, "bottles": count},
        )  # fmt: skip
    return ImportResult(places=places, bottles=count)


def _import_places(path: Path, errors: RowErrors) -> int:
    count, seen = 0, set()
    for row in read_rows(path, PLACE_COLUMNS, required={"code", "name"}, errors=errors):
        before, code = len(errors.found), read_code(row)
        values = {
            "name": row.within("name", 120),
            "is_locked": row.choice("is_locked", ("yes", "no", "")) == "yes",
            "temperature_c": temperature_c(row, "temperature_c"),
        }
        if code and code in seen:
            row.error("code", "place_repeated", f"The place {code} is in the file twice.")
        seen.add(code)
        if len(errors.found) == before:
            _, made = Place.objects.update_or_create(code=code, defaults=values)
            count += made
    return count
