"""Who a code is, and how that is forgotten."""

from django.db import transaction

from labplan.base.errors import NotFound
from labplan.base.events import record_event
from labplan.base.models import Person, PersonName


def erase_person_name(*, person_code: str) -> bool:
    """Delete the one row that holds a person's name and mail address; every record stays as it is.

    Returns whether there was one; safe to repeat. Raises NotFound for an unknown code.
    """
    with transaction.atomic(durable=True):
        if not Person.objects.filter(code=person_code).exists():
            raise NotFound(f"There is no person with the code {person_code!r}.")
        erased, _ = PersonName.objects.filter(person__code=person_code).delete()
        if erased:
            record_event(
                actor_code="OPERATOR", kind="person.name_erased", subject=f"person {person_code}"
            )
    return bool(erased)
