"""Log in with code and password for a token of half a day.

Failures are counted in the database, so that all web processes share the counts: for each code
and for each address, by the quarter of an hour. An attempt is counted before the password is
looked at, so that many at once do not get past the limit, and given back when it was right.
"""

import ipaddress
from datetime import timedelta

from django.conf import settings
from django.contrib.auth import password_validation
from django.core.exceptions import ValidationError
from django.db import connection, transaction
from django.db.models import F
from django.utils.crypto import salted_hmac

from labplan.base import clock
from labplan.base.errors import (
    FieldProblem,
    InvalidValue,
    LoginFailed,
    NotFound,
    TooManyAttempts,
)
from labplan.base.events import record_event
from labplan.base.models import LoginCount, Person
from labplan.base.tokens import NewToken, revoke_all_tokens, store_token

QUARTER_S = 900
MOST_FOR_CODE = 5
MOST_FROM_ADDRESS = 30
LIFETIME = timedelta(hours=12)
_LIMITS = {LoginCount.Kind.CODE: MOST_FOR_CODE, LoginCount.Kind.ADDRESS: MOST_FROM_ADDRESS}


def log_in(*, person_code: str, password: str, address: str, scope: str = "write") -> NewToken:
    """Give a token for a right password.

    Raises TooManyAttempts before anything is looked at, and LoginFailed: in the same words and
    after the same work for a wrong password, an unknown code, somebody inactive or without a
    password. Opens its own transactions.
    """
    keys = {
        LoginCount.Kind.ADDRESS: _digest(LoginCount.Kind.ADDRESS, network_of(address)),
        LoginCount.Kind.CODE: _digest(LoginCount.Kind.CODE, person_code),
    }
    quarter = int(clock.now().timestamp()) // QUARTER_S
    _count_attempt(keys, quarter)
    person = Person.objects.filter(code=person_code, is_active=True).first()
    # A person without a usable password costs one run of the hasher too.
    if not (person or Person(password="!")).check_password(password) or person is None:
        raise LoginFailed("The code or the password is not right.")
    with transaction.atomic(durable=True):
        LoginCount.objects.filter(kind="code", digest=keys[LoginCount.Kind.CODE]).delete()
        LoginCount.objects.filter(
            kind="address", digest=keys[LoginCount.Kind.ADDRESS], quarter=quarter, attempts__gt=0
        ).update(attempts=F("attempts") - 1)
        return store_token(
            person.pk, person.code, name="login", scope=scope, lifetime=LIFETIME, by=person.code,
            by_login=True,
        )  # fmt: skip


def set_password(*, person_code: str, password: str) -> int:
    """For the operator: set a password and end the tokens that were given for the old one.

    Raises NotFound, and InvalidValue with every rule that the password breaks. Returns how many
    tokens were ended.
    """
    person = Person.objects.filter(code=person_code, is_active=True).first()
    if person is None:
        raise NotFound(f"There is no active person with the code {person_code!r}.")
    try:
        password_validation.validate_password(password, person)
    except ValidationError as error:
        lines = tuple(
            FieldProblem("password", str(e.code), " ".join(e.messages)) for e in error.error_list
        )
        raise InvalidValue(" ".join(line.detail for line in lines), errors=lines) from error
    person.set_password(password)
    with transaction.atomic(durable=True):
        person.save(update_fields=["password"])
        record_event(
            actor_code="OPERATOR", kind="person.password_set", subject=f"person {person_code}"
        )
        return revoke_all_tokens(
            person_id=person.pk, code=person_code, by="OPERATOR", only_by_login=True
        )


def network_of(address: str) -> str:
    """What counts as one address: of IPv6 the 64 bits that one household is given."""
    try:
        found = ipaddress.ip_address(address)
    except ValueError:
        return "unknown"
    if isinstance(found, ipaddress.IPv6Address):
        if found.ipv4_mapped is not None:
            return str(found.ipv4_mapped)
        return str(ipaddress.ip_network((found, 64), strict=False))
    return str(found)


def address_of(remote: str, forwarded_for: str) -> str:
    """The caller's address, behind as many proxies of our own as the settings say.

    Each proxy adds at the end of X-Forwarded-For whom it saw; what stands before was written by
    the caller and is not believed.
    """
    hops = [hop.strip() for hop in forwarded_for.split(",") if hop.strip()]
    proxies = settings.OWN_PROXIES
    return hops[-proxies] if 0 < proxies <= len(hops) else remote


def _digest(kind: str, text: str) -> str:
    return salted_hmac(f"labplan.login.{kind}", text, algorithm="sha256").hexdigest()


def _count_attempt(keys: dict[LoginCount.Kind, str], quarter: int) -> None:
    """Count one more for the address and the code; raise TooManyAttempts over a limit."""
    with transaction.atomic(durable=True), connection.cursor() as cursor:
        cursor.execute(
            "INSERT INTO base_logincount (kind, digest, quarter, attempts) "
            "VALUES (%s, %s, %s, 1), (%s, %s, %s, 1) ON CONFLICT (kind, digest, quarter) "
            "DO UPDATE SET attempts = base_logincount.attempts + 1 RETURNING kind, attempts",
            [v for kind in sorted(keys) for v in (kind, keys[kind], quarter)],
        )
        counted = dict(cursor.fetchall())
        if 1 in counted.values():
            LoginCount.objects.filter(quarter__lt=quarter - 1).delete()
    if any(counted[kind] > limit for kind, limit in _LIMITS.items()):
        wait_s = (quarter + 1) * QUARTER_S - int(clock.now().timestamp())
        raise TooManyAttempts(
            f"Too many failed logins for this code or from this address; try again in {wait_s} s.",
            retry_after_s=wait_s,
        )
