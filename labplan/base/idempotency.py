"""Idempotency-Key: a request sent twice does its work once.

After draft-ietf-httpapi-idempotency-key-header-07 (a draft, expired in April 2026): same key
and same request, same answer; same key and another request, 422; still running, 409. The claim
is a row of the transaction that does the work, so a crash leaves neither.
"""

import json
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Generic, Protocol, TypeVar

from django.db import IntegrityError, OperationalError
from rest_framework.renderers import JSONRenderer
from rest_framework.response import Response

from labplan.base import clock
from labplan.base.canonical import sha256_hex
from labplan.base.errors import KeyMissing, KeyReused, MalformedRequest, StillRunning
from labplan.base.models import RememberedAnswer
from labplan.base.problems import is_lock_timeout
from labplan.base.rights import Actor

Result = TypeVar("Result")
REPLAYED_HEADER = "Idempotency-Replayed"
_KEY = re.compile(r"[\x21-\x7e]{8,128}")
# PostgreSQL names the constraint, SQLite the first of its columns.
_CLAIM_NAMES = ("remembered_answer_once", "base_rememberedanswer.person_id")


class Once(Protocol):
    """What a service does with a claim, both inside its own transaction."""

    def insert(self) -> None: ...

    def remember(self, result: Any) -> None: ...


class Unclaimed:
    """For callers that never repeat a request: commands and tests."""

    def insert(self) -> None:
        return None

    def remember(self, result: Any) -> None:
        return None


@dataclass(frozen=True)
class Claim(Generic[Result]):
    """One key of one person for one route, with the fingerprint of what was asked."""

    person_id: int
    route: str
    key: str
    fingerprint: str
    render: Callable[[Result], Response]

    def insert(self) -> None:
        """Take the key; the unique index arbitrates between two requests at once."""
        RememberedAnswer.objects.create(
            **self._identity(), fingerprint=self.fingerprint, created_at=clock.now()
        )

    def remember(self, result: Result) -> None:
        """Store the answer beside the work."""
        response = self.render(result)
        RememberedAnswer.objects.filter(**self._identity()).update(
            status=response.status_code,
            headers=json.dumps(dict(response.headers)),
            body=JSONRenderer().render(response.data).decode(),
        )

    def remembered(self) -> Response | None:
        """The first answer, or None when nothing was committed; another request is refused."""
        row = RememberedAnswer.objects.filter(**self._identity()).first()
        if row is None:
            return None
        if row.fingerprint != self.fingerprint:
            raise KeyReused(
                "The same Idempotency-Key was sent with another request; "
                "make a new key for a new request."
            )
        headers = {**json.loads(row.headers), REPLAYED_HEADER: "true"}
        return Response(json.loads(row.body), status=row.status, headers=headers)

    def _identity(self) -> dict[str, Any]:
        return {"person_id": self.person_id, "route": self.route, "key": self.key}


def claim_from(request: Any, *, route: str, render: Callable[[Result], Response]) -> Claim[Result]:
    """Read the key of a request; raise KeyMissing or MalformedRequest."""
    actor: Actor = request.user
    given = request.headers.get("Idempotency-Key", "").strip()
    if not given:
        raise KeyMissing(
            "Send a header Idempotency-Key with a new random value (a UUID does), and the same "
            "value again when you repeat this request."
        )
    key = given.strip('"')
    if not _KEY.fullmatch(key):
        raise MalformedRequest(
            "Idempotency-Key must be 8 to 128 printable characters without spaces."
        )
    asked = json.dumps([request.path, request.data], sort_keys=True, default=str)
    return Claim(actor.person_id, route, key, sha256_hex(asked.encode()), render)


def answer_once(
    claim: Claim[Result], *, check_rights: Callable[[], Any], work: Callable[[], Result]
) -> Response:
    """Run `work`, a service that inserts and remembers the claim, or repeat the first answer.

    `check_rights` raises what `work` would raise to somebody without the right. It comes first:
    a remembered answer is only for who could still ask for it.
    """
    check_rights()
    earlier = claim.remembered()
    if earlier is not None:
        return earlier
    try:
        return claim.render(work())
    except IntegrityError as error:
        if not any(name in str(error) for name in _CLAIM_NAMES):
            raise
    except OperationalError as error:
        if not is_lock_timeout(error):
            raise
    earlier = claim.remembered()
    if earlier is None:
        raise StillRunning("The first request with this key has not ended; ask again shortly.")
    return earlier
