"""Make, find and revoke tokens; only their SHA-256 is stored."""

import hashlib
import logging
import secrets
from dataclasses import dataclass
from datetime import datetime, timedelta

from django.db import DatabaseError, transaction
from django.db.models import Q, QuerySet

from labplan.base import clock
from labplan.base.errors import NotFound
from labplan.base.events import record_event
from labplan.base.models import ApiToken, Person
from labplan.base.rights import Actor, actor_for, require

logger = logging.getLogger(__name__)
PREFIX = "lpt_"
DEFAULT_DAYS = 90
# A GET should not have to write each time.
USE_NOTED_EVERY = timedelta(hours=1)


@dataclass(frozen=True)
class NewToken:
    """A token with its text, which cannot be read again later."""

    row: ApiToken
    text: str


def create_token(
    *, person_code: str, name: str, scope: str = "write", days: int = DEFAULT_DAYS
) -> str:
    """For the operator: store a new token of anybody and return its text.

    Raises NotFound for a person who is not there or not active. A repeat makes another token.
    """
    person = Person.objects.filter(code=person_code, is_active=True).first()
    if person is None:
        raise NotFound(f"There is no active person with the code {person_code!r}.")
    with transaction.atomic(durable=True):
        new = store_token(
            person.pk, person.code, name=name, scope=scope, lifetime=timedelta(days=days),
            by="OPERATOR",
        )  # fmt: skip
    return new.text


def make_own_token(*, actor: Actor, name: str, scope: str, days: int) -> NewToken:
    """Make a token of the actor's own. Raises NotAllowed; a repeat makes another token."""
    require(actor, "token.make")
    with transaction.atomic(durable=True):
        return store_token(
            actor.person_id, actor.code, name=name, scope=scope, lifetime=timedelta(days=days),
            by=actor.code,
        )  # fmt: skip


def store_token(
    person_id: int, code: str, *, name: str, scope: str, lifetime: timedelta, by: str,
    by_login: bool = False,
) -> NewToken:  # fmt: skip
    """Store a token and its event in the caller's transaction."""
    text = PREFIX + secrets.token_urlsafe(32)
    created = clock.now()
    row = ApiToken.objects.create(
        person_id=person_id, name=name, digest=digest_of(text), scope=scope, created_at=created,
        expires_at=created + lifetime, by_login=by_login,
    )  # fmt: skip
    record_event(
        actor_code=by, kind="token.made", subject=f"person {code}",
        after={"token": row.pk, "name": name, "scope": scope, "expires_at": row.expires_at},
    )  # fmt: skip
    return NewToken(row, text)


def list_own_tokens(*, actor: Actor) -> QuerySet[ApiToken]:
    require(actor, "token.view")
    return ApiToken.objects.filter(person_id=actor.person_id)


def revoke_own_token(*, actor: Actor, token_id: int) -> ApiToken:
    """End a token of the actor's own at once; any token may end itself. Safe to repeat.

    Raises NotFound for a token that is not there or of somebody else, and NotAllowed.
    """
    if token_id != actor.token_id:
        require(actor, "token.revoke")
    with transaction.atomic(durable=True):
        return _revoke(ApiToken.objects.filter(person_id=actor.person_id), token_id, by=actor.code)


def revoke_token(*, token_id: int) -> ApiToken:
    """For the operator: end anybody's token at once. Raises NotFound; safe to repeat."""
    with transaction.atomic(durable=True):
        return _revoke(ApiToken.objects.all(), token_id, by="OPERATOR")


def revoke_all_tokens(*, person_id: int, code: str, by: str, only_by_login: bool = False) -> int:
    """End every live token of a person in the caller's transaction; return how many."""
    live = ApiToken.objects.filter(person_id=person_id, revoked_at__isnull=True)
    if only_by_login:
        live = live.filter(by_login=True)
    ended = live.update(revoked_at=clock.now())
    if ended:
        record_event(
            actor_code=by, kind="token.revoked", subject=f"person {code}",
            after={"tokens": ended, "only_by_login": only_by_login},
        )  # fmt: skip
    return ended


def _revoke(among: QuerySet[ApiToken], token_id: int, *, by: str) -> ApiToken:
    row = among.select_for_update(of=("self",)).select_related("person").filter(pk=token_id).first()
    if row is None:
        raise NotFound("There is no such token of yours; GET /tokens/ lists them.")
    if row.revoked_at is None:
        row.revoked_at = clock.now()
        row.save(update_fields=["revoked_at"])
        record_event(
            actor_code=by, kind="token.revoked", subject=f"person {row.person.code}",
            after={"token": row.pk},
        )  # fmt: skip
    return row


def find_actor(text: str) -> Actor | None:
    """The actor behind a token that is known, not expired, not revoked, of an active person."""
    token = (
        ApiToken.objects.select_related("person")
        .filter(digest=digest_of(text), revoked_at__isnull=True, person__is_active=True)
        .first()
    )
    instant = clock.now()
    if token is None or token.expires_at <= instant:
        return None
    if token.last_used_at is None or token.last_used_at <= instant - USE_NOTED_EVERY:
        _note_use(token.pk, instant)
    return actor_for(token.person, scope=token.scope, token_id=token.pk)


def _note_use(token_id: int, instant: datetime) -> None:
    """Note when a token was used; a database that takes no writes just now is no refusal."""
    stale = Q(last_used_at__isnull=True) | Q(last_used_at__lte=instant - USE_NOTED_EVERY)
    try:
        with transaction.atomic():
            ApiToken.objects.filter(stale, pk=token_id).update(last_used_at=instant)
    except DatabaseError as error:
        logger.warning("the use of token %s is not noted: %s", token_id, error)


def digest_of(text: str) -> str:
    # 256 random bits need no slow hash; the digest only keeps a stolen table from being used.
    return hashlib.sha256(text.encode()).hexdigest()
