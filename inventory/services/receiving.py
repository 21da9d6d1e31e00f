"""Rows of the stock file -> bottles of the stock; one of them by itself, over the API."""

import uuid
from collections.abc import Callable, Mapping, Sequence

from inventory.models import Bottle, Movement, Place
from inventory.services.csv_rows import Row, RowErrors
from inventory.services.once import again_if_overtaken, write_once
from inventory.services.receipt import BottleReceipt, receive_bottles
from inventory.services.stock_row import STOCK_NEEDED, read_receipt
from inventory.services.substances import SubstanceFinder
from labplan.base.errors import StateForbids
from labplan.base.events import record_event
from labplan.base.idempotency import Once
from labplan.base.rights import Actor, require


def read_receipts(
    rows: Sequence[Row], progress: Callable[[int, int], None] | None = None
) -> list[BottleReceipt]:
    """The sound ones of the rows; every error is noted on its row. Makes substances."""
    places = {place.code: place for place in Place.objects.all()}
    finder = SubstanceFinder()
    codes = {row.text("code") for row in rows}
    there = set(Bottle.objects.filter(code__in=codes).values_list("code", flat=True))
    receipts, seen = [], set()
    for number, row in enumerate(rows, start=1):
        code = row.text("code")
        if code and (code in there or code in seen):
            row.error("code", "bottle_exists", f"There is a bottle {code} already.")
        seen.add(code)
        receipt = read_receipt(row, places, finder)
        if receipt is not None:
            receipts.append(receipt)
        if progress:
            progress(number, len(rows))
    return receipts


def receive_bottle(
    *, actor: Actor, fields: Mapping[str, str], operation_id: uuid.UUID | None = None,
    once: Once | None = None,
) -> str:  # fmt: skip
    """Take one bottle into the stock; return its code.

    `fields` are the cells of one line of the stock file, and mean the same. Raises NotAllowed, and
    InvalidValue with every error by its column, also for a code that is taken, be it by somebody
    at the same moment; then nothing has changed. Safe to repeat with the same operation id or
    claim.
    """
    require(actor, "stock.receive")

    def body() -> str:
        row = Row(None, dict(fields), RowErrors())
        row.need(STOCK_NEEDED)
        receipts = read_receipts([row])
        row.errors.refuse()
        receive_bottles(receipts, actor=actor, reason="", operation_id=operation_id)
        [receipt] = receipts
        record_event(
            actor_code=actor.code, kind="bottle.received", subject=f"bottle {receipt.code}",
            after={
                "substance": receipt.substance.code, "place": receipt.place.code,
                "amount": f"{receipt.entered_amount} {receipt.entered_unit}",
            },
        )  # fmt: skip
        return receipt.code

    def earlier(operation: uuid.UUID) -> str:
        line = Movement.objects.filter(operation=operation, kind="receipt").first()
        if line is None:
            raise StateForbids("This operation id belongs to something else; take a new one.")
        return line.bottle.code

    def write() -> str:
        return write_once(body, operation_id=operation_id, once=once, earlier=earlier)

    return again_if_overtaken(write)
