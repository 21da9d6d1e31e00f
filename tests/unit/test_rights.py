"""Role x operation x scope x site role, against a truth table written out by hand."""

import itertools

import pytest

from labplan.base import rights
from labplan.base.errors import NotAllowed
from labplan.base.models import Membership, Person
from labplan.base.rights import Actor, may, require, visible_project_ids

OURS, THEIRS = 7, 12
ROLES = ("viewer", "chemist", "stock_keeper", "approver", "lead", None)
SITE_ROLES = ("none", "administrator", "auditor")

# What each role may do in its own project with a token of scope write. "x" is yes.
#                       viewer chemist keeper approver lead  nobody
IN_PROJECT = {
    "project.view":        "x      x       x      x        x     -",
    "procedure.view":      "x      x       x      x        x     -",
    "procedure.request":   "-      x       -      -        x     -",
    "procedure.cancel":    "-      x       -      -        x     -",
    "reservation.view":    "x      x       x      x        x     -",
    "reservation.release": "-      x       x      -        x     -",
    "reservation.make":    "-      x       -      -        x     -",
    "reservation.use":     "-      x       x      -        x     -",
    "reservation.extend":  "-      x       -      -        x     -",
    "reservation.firm":    "-      -       -      x        x     -",
    "stock.use":           "-      x       x      -        x     -",
    "quota.view":          "x      x       x      x        x     -",
}  # fmt: skip
# What each role, held in any project, allows on the shelf.
ON_THE_SHELF = {
    "stock.view":          "x      x       x      x        x     x",
    "stock.receive":       "-      -       x      -        -     -",
    "movement.view":       "-      -       x      -        -     -",
    "stock.report":        "-      x       x      -        x     -",
    "stock.count":         "-      -       x      -        -     -",
    "quota.set":           "-      -       x      -        -     -",
    "notice.mark":         "x      x       x      x        x     -",
}  # fmt: skip
# What a site role adds, whatever the project: an administrator and an auditor read everything.
READS = {
    "project.view", "procedure.view", "reservation.view", "stock.view", "movement.view",
    "quota.view",
}  # fmt: skip
ADDED_BY_SITE_ROLE = {
    "none": set(),
    "administrator": READS
    | {"stock.receive", "stock.report", "stock.count", "quota.set", "notice.mark"},
    "auditor": READS,
}


def row(table: dict[str, str], operation: str) -> dict[str | None, bool]:
    return dict(zip(ROLES, (mark == "x" for mark in table[operation].split()), strict=True))


def expected(operation: str, role: str | None, scope: str, site_role: str) -> bool:
    """The hand-written tables, then what only looks: a read token, an auditor."""
    if operation not in READS and (scope == "read" or site_role == "auditor"):
        return False
    table = IN_PROJECT if operation in IN_PROJECT else ON_THE_SHELF
    return row(table, operation)[role] or operation in ADDED_BY_SITE_ROLE[site_role]


def actor(role: str | None, scope: str, site_role: str, project_id: int = OURS) -> Actor:
    roles = {} if role is None else {project_id: role}
    return Actor(1, "SOMEBODY", site_role, scope, roles)


MATRIX = list(itertools.product(ROLES, ("read", "write"), SITE_ROLES))


def test_the_table_covers_every_operation_role_and_site_role() -> None:
    assert set(IN_PROJECT) == set(rights.PROJECT_OPERATIONS)
    assert set(ON_THE_SHELF) == set(rights.SITE_OPERATIONS)
    assert set(ROLES) - {None} == set(Membership.Role.values)
    assert set(SITE_ROLES) == set(Person.SiteRole.values)
    assert rights.READING == READS


@pytest.mark.parametrize("operation", [*IN_PROJECT, *ON_THE_SHELF])
def test_who_may_do_it_is_what_the_table_says(operation: str) -> None:
    for role, scope, site_role in MATRIX:
        project_id = OURS if operation in IN_PROJECT else None
        found = may(actor(role, scope, site_role), operation, project_id=project_id)
        wanted = expected(operation, role, scope, site_role)
        assert (role, scope, site_role, found) == (role, scope, site_role, wanted)


@pytest.mark.parametrize("operation", IN_PROJECT)
def test_a_role_counts_in_its_own_project_only(operation: str) -> None:
    for role, scope, site_role in MATRIX:
        somebody = actor(role, scope, site_role, project_id=THEIRS)
        wanted = expected(operation, None, scope, site_role)
        assert may(somebody, operation, project_id=OURS) is wanted
        assert may(somebody, operation) is wanted  # and in no project at all


@pytest.mark.parametrize("operation", IN_PROJECT)
def test_the_projects_listed_are_those_where_it_may_be_done(operation: str) -> None:
    for role, scope, site_role in MATRIX:
        somebody = actor(role, scope, site_role)
        listed = visible_project_ids(somebody, operation)
        for project_id in (OURS, THEIRS):
            is_listed = listed is None or project_id in listed
            assert is_listed is may(somebody, operation, project_id=project_id)


@pytest.mark.parametrize("operation", [*IN_PROJECT, *ON_THE_SHELF])
def test_require_refuses_exactly_what_may_denies(operation: str) -> None:
    for role, scope, site_role in MATRIX:
        somebody = actor(role, scope, site_role)
        if may(somebody, operation, project_id=OURS):
            require(somebody, operation, project_id=OURS)
        else:
            with pytest.raises(NotAllowed):
                require(somebody, operation, project_id=OURS)


# What concerns only who asks: no role is needed, and a token of scope read only looks.
OWN = {"token.view": ("read", "write"), "token.make": ("write",), "token.revoke": ("write",)}


def test_everybody_has_his_own_tokens_whatever_role_he_has() -> None:
    assert set(OWN) == set(rights.OWN_OPERATIONS)
    for operation, scopes in OWN.items():
        for role, scope, site_role in MATRIX:
            somebody = actor(role, scope, site_role)
            assert may(somebody, operation) is (scope in scopes)
            if scope in scopes:
                require(somebody, operation)
            else:
                with pytest.raises(NotAllowed, match="This token may only read"):
                    require(somebody, operation)


def test_a_refusal_says_what_is_missing() -> None:
    with pytest.raises(NotAllowed, match="needs one of these roles in the project: chemist, lead"):
        require(actor("viewer", "write", "none"), "procedure.request", project_id=OURS)
    with pytest.raises(NotAllowed, match="This token may only read"):
        require(actor("lead", "read", "none"), "procedure.request", project_id=OURS)
    with pytest.raises(NotAllowed, match="An auditor only looks"):
        require(actor("lead", "write", "auditor"), "procedure.request", project_id=OURS)


def test_an_operation_nobody_declared_is_an_error_in_the_code() -> None:
    for site_role in ("none", "administrator"):
        with pytest.raises(KeyError):
            may(actor("lead", "write", site_role), "procedure.reqest", project_id=OURS)
