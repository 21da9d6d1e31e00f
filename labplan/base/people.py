"""Who a code is, what it may do where, and how it ends."""

from django.db import transaction

from labplan.base.errors import NotFound
from labplan.base.events import record_event
from labplan.base.models import Membership, Person, PersonName, Project
from labplan.base.tokens import revoke_all_tokens


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


def set_member(*, project_code: str, person_code: str, role: str | None) -> str | None:
    """Give a person a role in a project, another role, or (None) none any more.

    Returns the role before. Safe to repeat. Raises NotFound for an unknown code.
    """
    with transaction.atomic(durable=True):
        project = Project.objects.filter(code=project_code).first()
        person = Person.objects.filter(code=person_code).first()
        if project is None or person is None:
            missing = project_code if project is None else person_code
            raise NotFound(f"There is nothing with the code {missing!r}.")
        rows = Membership.objects.filter(project=project, person=person)
        before = rows.values_list("role", flat=True).first()
        if role is None:
            rows.delete()
        else:
            Membership.objects.update_or_create(
                project=project, person=person, defaults={"role": role}
            )
        if before != role:
            record_event(
                actor_code="OPERATOR", kind="project.member_set",
                subject=f"project {project_code}", before={person_code: before},
                after={person_code: role},
            )  # fmt: skip
    return before


def retire_person(*, person_code: str) -> int:
    """Let a person in no more: every token ends at once. Records and memberships stay.

    Returns how many tokens ended; safe to repeat. Raises NotFound.
    """
    with transaction.atomic(durable=True):
        person = Person.objects.select_for_update(no_key=True).filter(code=person_code).first()
        if person is None:
            raise NotFound(f"There is no person with the code {person_code!r}.")
        if person.is_active:
            person.is_active = False
            person.save(update_fields=["is_active"])
            record_event(
                actor_code="OPERATOR", kind="person.retired", subject=f"person {person_code}"
            )
        return revoke_all_tokens(person_id=person.pk, code=person_code, by="OPERATOR")
