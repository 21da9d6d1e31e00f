"""What a person is told when something is refused.

Only the text of a DomainError reaches a user; everything else is a plain 500 with a trace id.
"""

from dataclasses import asdict, dataclass
from typing import Any, ClassVar


@dataclass(frozen=True)
class FieldProblem:
    """One line of a refusal: the field it is about, a code for programs, a text for people."""

    field: str
    code: str
    detail: str

    def as_dict(self) -> dict[str, str]:
        return asdict(self)


class DomainError(Exception):
    """A refusal that says what to change. Subclasses set code, title and status."""

    code: ClassVar[str] = "refused"
    title: ClassVar[str] = "The request was refused"
    status: ClassVar[int] = 422

    def __init__(self, detail: str, *, errors: tuple[FieldProblem, ...] = (), **extra: Any) -> None:
        super().__init__(detail)
        self.detail = detail
        self.errors = tuple(errors)
        self.extra = extra

    def __reduce__(self) -> tuple[Any, ...]:
        return (_rebuild, (type(self), self.detail, self.errors, self.extra))


def _rebuild(
    kind: type[DomainError], detail: str, errors: tuple[FieldProblem, ...], extra: dict[str, Any]
) -> DomainError:
    return kind(detail, errors=errors, **extra)


class MalformedRequest(DomainError):
    code = "malformed_request"
    title = "The request could not be read"
    status = 400


class BodyTooLarge(DomainError):
    code = "too_large"
    title = "The body is too large"
    status = 413


class UnknownField(DomainError):
    code = "unknown_field"
    title = "The request names a field that does not exist"
    status = 400


class NotAuthenticated(DomainError):
    code = "not_authenticated"
    title = "No valid token"
    status = 401


class LoginFailed(DomainError):
    code = "login_failed"
    title = "Code and password do not fit"
    status = 401


class TooManyAttempts(DomainError):
    """`retry_after_s` says when to try again."""

    code = "too_many_attempts"
    title = "Too many attempts"
    status = 429


class NotAllowed(DomainError):
    code = "not_allowed"
    title = "Your role does not allow this"
    status = 403


class NotFound(DomainError):
    code = "not_found"
    title = "There is no such thing, or it is not yours to see"
    status = 404


class InvalidValue(DomainError):
    code = "invalid_value"
    title = "A value breaks a rule"
    status = 422


class StateForbids(DomainError):
    code = "state_forbids"
    title = "The present state does not allow this"
    status = 409


class StaleCopy(DomainError):
    code = "stale_copy"
    title = "It has changed since you read it"
    status = 412


class PreconditionMissing(DomainError):
    code = "precondition_missing"
    title = "If-Match is needed here"
    status = 428


class KeyMissing(DomainError):
    code = "idempotency_key_missing"
    title = "Idempotency-Key is needed here"
    status = 400


class KeyReused(DomainError):
    code = "idempotency_key_reused"
    title = "This Idempotency-Key came with another request"
    status = 422


class StillRunning(DomainError):
    code = "request_running"
    title = "The first request with this Idempotency-Key is still running"
    status = 409


class DatabaseAway(DomainError):
    code = "database_away"
    title = "The database does not answer"
    status = 503


class Busy(DomainError):
    code = "busy"
    title = "The stock is busy"
    status = 503
