"""Make, find and revoke tokens; only their SHA-256 is stored."""

import hashlib
import secrets
from datetime import timedelta

from labplan.base import clock
from labplan.base.errors import NotFound
from labplan.base.models import ApiToken, Person
from labplan.base.rights import Actor, actor_for

PREFIX = "lpt_"
DEFAULT_DAYS = 90


def create_token(
    *, person_code: str, name: str, scope: str = "write", days: int = DEFAULT_DAYS
) -> str:
    """Store a new token and return its text, which cannot be read again later."""
    person = Person.objects.filter(code=person_code, is_active=True).first()
    if person is None:
        raise NotFound(f"There is no active person with the code {person_code!r}.")
    text = PREFIX + secrets.token_urlsafe(32)
    created = clock.now()
    ApiToken.objects.create(
        person=person,
        name=name,
        digest=digest_of(text),
        scope=scope,
        created_at=created,
        expires_at=created + timedelta(days=days),
    )
    return text


def find_actor(text: str) -> Actor | None:
    """The actor behind a token that is known, not expired, not revoked, of an active person."""
    token = (
        ApiToken.objects.select_related("person")
        .filter(digest=digest_of(text), revoked_at__isnull=True, person__is_active=True)
        .first()
    )
    if token is None or token.expires_at <= clock.now():
        return None
    return actor_for(token.person, scope=token.scope)


def digest_of(text: str) -> str:
    # 256 random bits need no slow hash; the digest only keeps a stolen table from being used.
    return hashlib.sha256(text.encode()).hexdigest()
