"""An operation that carries its own id is written once, however often it is sent.

The id stands on every line of the book, so that this holds for good: also after the memory of
Idempotency-Keys has been emptied.
"""

import uuid
from collections.abc import Callable
from typing import Any, TypeVar

from django.db import IntegrityError, transaction

from inventory.models import Movement
from labplan.base.idempotency import Claim, Once, Unclaimed

Result = TypeVar("Result")
# PostgreSQL names the constraint, SQLite the first of its columns.
_NAMES = ("movement_operation_once", "inventory_movement.operation")
# What somebody else may have made since we looked. PostgreSQL only: SQLite has one writer.
_MADE_MEANWHILE = (
    "inventory_bottle_code", "inventory_substance_code", "inventory_substance_inchikey",
    "form_once",
)  # fmt: skip
_MOST_TRIES = 3
_NAMESPACE = uuid.UUID("6f9d4c1e-53c8-4a57-9a5b-8b0d5c1f7e42")


def write_once(
    body: Callable[[], Result], *, operation_id: uuid.UUID | None, once: Once | None,
    earlier: Callable[[uuid.UUID], Result],
) -> Result:  # fmt: skip
    """Run `body` with its claim in one durable transaction.

    When the operation is in the book already, also by a request that ran beside this one, nothing
    is written and `earlier` reads what it has led to.
    """
    claim = once or Unclaimed()
    if operation_id is not None and Movement.objects.filter(operation=operation_id).exists():
        return earlier(operation_id)
    try:
        with transaction.atomic(durable=True):
            claim.insert()
            done = body()
            claim.remember(done)
            return done
    except IntegrityError as error:
        if operation_id is None or not any(name in str(error) for name in _NAMES):
            raise
    return earlier(operation_id)


def operation_of(claim: Claim[Any]) -> uuid.UUID:
    """The operation id that belongs to an Idempotency-Key: the same key, the same id."""
    return uuid.uuid5(_NAMESPACE, f"{claim.person_id}/{claim.route}/{claim.key}")


def again_if_overtaken(write: Callable[[], Result]) -> Result:
    """Run it anew when somebody made the same bottle, substance or form: then it is found."""
    for _ in range(_MOST_TRIES - 1):
        try:
            return write()
        except IntegrityError as error:
            if not any(name in str(error) for name in _MADE_MEANWHILE):
                raise
    return write()
