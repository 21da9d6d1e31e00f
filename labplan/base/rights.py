"""Who may do what. Every service and selector takes an Actor and starts from here."""

from dataclasses import dataclass, field

from labplan.base.errors import NotAllowed
from labplan.base.models import ApiToken, Membership, Person

_ALL = frozenset(Membership.Role.values)

# operation -> the project roles that may do it, in that project
PROJECT_OPERATIONS: dict[str, frozenset[str]] = {
    "project.view": _ALL,
    "procedure.view": _ALL,
    "procedure.request": frozenset({"chemist", "lead"}),
    "procedure.cancel": frozenset({"chemist", "lead"}),
    "reservation.view": _ALL,
    "reservation.release": frozenset({"chemist", "stock_keeper", "lead"}),
    "reservation.make": frozenset({"chemist", "lead"}),
    "reservation.use": frozenset({"chemist", "stock_keeper", "lead"}),
    "reservation.extend": frozenset({"chemist", "lead"}),
    "reservation.firm": frozenset({"approver", "lead"}),
    "stock.use": frozenset({"chemist", "stock_keeper", "lead"}),
    "quota.view": _ALL,
}
# operation -> the roles that may do it if held in any project (a stockroom serves all of them)
SITE_OPERATIONS: dict[str, frozenset[str]] = {
    "stock.view": _ALL,
    "stock.receive": frozenset({"stock_keeper"}),
    "movement.view": frozenset({"stock_keeper"}),
    "stock.report": frozenset({"chemist", "stock_keeper", "lead"}),
    "stock.count": frozenset({"stock_keeper"}),
    "quota.set": frozenset({"stock_keeper"}),
    "notice.mark": _ALL,
}
# What concerns only who asks, so that no role is needed; the scope a token needs for it.
OWN_OPERATIONS: dict[str, str] = {
    "token.view": "read",
    "token.make": "write",
    "token.revoke": "write",
}
READING = frozenset({"project.view", "procedure.view", "reservation.view", "stock.view",
                     "movement.view", "quota.view"})  # fmt: skip
# The free amounts of the shelf are everybody's business.
OPEN_TO_EVERYONE = frozenset({"stock.view"})


@dataclass(frozen=True)
class Actor:
    """Whoever asks, with the roles as they were when the request came in."""

    person_id: int
    code: str
    site_role: str = "none"
    scope: str = "write"
    roles: dict[int, str] = field(default_factory=dict)
    token_id: int | None = None  # of the token the request came with


# For commands that the operator runs on the machine itself: sees everything, moves nothing.
OPERATOR = Actor(person_id=0, code="OPERATOR", site_role="auditor", scope="read")


# For what labplan does by itself, in the book under this code: the lapse of a hold.
LABPLAN = Actor(person_id=0, code="LABPLAN")


def actor_for(
    person: Person, *, scope: str = ApiToken.Scope.WRITE, token_id: int | None = None
) -> Actor:
    """Read the roles of a person once."""
    roles = dict(person.memberships.values_list("project_id", "role"))
    return Actor(person.pk, person.code, person.site_role, scope, roles, token_id)


def may(actor: Actor, operation: str, *, project_id: int | None = None) -> bool:
    """Say whether the actor may do this; a name not in the tables is an error in the code."""
    if operation in OWN_OPERATIONS:
        return OWN_OPERATIONS[operation] in ("read", actor.scope)
    if not _may_at_all(actor, operation):
        return False
    if operation in PROJECT_OPERATIONS:
        sees_all = operation in READING and actor.site_role != "none"
        role = actor.roles.get(project_id) if project_id is not None else None
        return sees_all or role in PROJECT_OPERATIONS[operation]
    allowed = SITE_OPERATIONS[operation]
    if operation in OPEN_TO_EVERYONE or actor.site_role == "administrator":
        return True
    if operation in READING and actor.site_role == "auditor":
        return True
    return any(role in allowed for role in actor.roles.values())


def _may_at_all(actor: Actor, operation: str) -> bool:
    """A token of scope read, and an auditor with any token, only look."""
    return operation in READING or (actor.scope != "read" and actor.site_role != "auditor")


def require(actor: Actor, operation: str, *, project_id: int | None = None) -> None:
    """Raise NotAllowed, saying which roles may do it."""
    if may(actor, operation, project_id=project_id):
        return
    if actor.scope == "read" and operation not in READING:
        raise NotAllowed("This token may only read; make one with scope write.")
    if not _may_at_all(actor, operation):
        raise NotAllowed("An auditor only looks; somebody with a role in the project must do it.")
    roles = PROJECT_OPERATIONS.get(operation) or SITE_OPERATIONS[operation]
    needed = ", ".join(sorted(roles))
    raise NotAllowed(
        f"'{operation}' needs one of these roles in the project: {needed}. "
        "Ask the project's lead for it."
    )


def visible_project_ids(actor: Actor, operation: str) -> frozenset[int] | None:
    """The projects in which the actor may do this; None means all of them."""
    if operation in READING and actor.site_role != "none":
        return None
    if not _may_at_all(actor, operation):
        return frozenset()
    return frozenset(
        project_id
        for project_id, role in actor.roles.items()
        if role in PROJECT_OPERATIONS[operation]
    )
