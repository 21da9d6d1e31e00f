"""How much of a substance the stockroom never wants to be without."""

from collections.abc import Callable

from django.db import transaction

from inventory.models import Substance
from inventory.quantities import in_words
from labplan.base.errors import NotFound
from labplan.base.events import record_event
from labplan.base.idempotency import Once, Unclaimed
from labplan.base.rights import Actor, require


def set_minimum(
    *, actor: Actor, substance_code: str, measured_by: str, amount: int | None,
    check_version: Callable[[Substance], None], once: Once | None = None,
) -> Substance:  # fmt: skip
    """Set or (with None) take away the minimum, in the base unit of `measured_by`.

    Raises NotAllowed, NotFound and what `check_version` raises. Safe to repeat.
    """
    require(actor, "stock.count")
    claim = once or Unclaimed()
    with transaction.atomic(durable=True):
        claim.insert()
        rows = Substance.objects.select_for_update(no_key=True, of=("self",))
        substance = rows.filter(code=substance_code).first()
        if substance is None:
            raise NotFound(f"There is no substance {substance_code}.")
        check_version(substance)
        before = minimum_in_words(substance)
        substance.minimum = amount
        substance.minimum_measured_by = measured_by if amount is not None else ""
        substance.version += 1
        substance.save(update_fields=["minimum", "minimum_measured_by", "version"])
        record_event(
            actor_code=actor.code, kind="substance.minimum",
            subject=f"substance {substance_code}"[:80], before=before,
            after=minimum_in_words(substance),
        )  # fmt: skip
        claim.remember(substance)
    return substance


def minimum_in_words(substance: Substance) -> str | None:
    if substance.minimum is None:
        return None
    return in_words(substance.minimum_measured_by, substance.minimum)
