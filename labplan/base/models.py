"""People, projects, tokens; the outbox, the event log and the memory of repeated requests."""

from typing import Any

from django.contrib.auth.base_user import AbstractBaseUser, BaseUserManager
from django.db import models
from django.db.models import Q

from labplan.base.append_only import AppendOnlyModel
from labplan.base.checks import whole_from
from labplan.base.seal_tables import Seal, SealRun  # noqa: F401 - Django finds models here


def one_of(field: str, choices: type[models.TextChoices], *, name: str) -> models.CheckConstraint:
    """A misspelt role, scope or state must not pass for one of the others."""
    return models.CheckConstraint(condition=Q(**{f"{field}__in": choices.values}), name=name)


class PersonManager(BaseUserManager):
    def create_user(self, code: str, password: str | None = None, **fields: Any) -> "Person":
        person = self.model(code=code, **fields)
        person.set_password(password)
        person.save(using=self._db)
        return person

    def get_by_natural_key(self, code: str) -> "Person":
        return self.get(code=code)


class PersonSiteRole(models.TextChoices):
    NONE = "none"
    ADMINISTRATOR = "administrator"
    AUDITOR = "auditor"


class Person(AbstractBaseUser):
    """Whoever acts. Ledger and records know the code only; the name can be erased."""

    SiteRole = PersonSiteRole
    code = models.SlugField(max_length=24, unique=True)
    site_role = models.CharField(max_length=16, choices=PersonSiteRole, default=PersonSiteRole.NONE)
    is_active = models.BooleanField(default=True)

    USERNAME_FIELD = "code"
    objects = PersonManager()

    class Meta:
        constraints = [one_of("site_role", PersonSiteRole, name="person_site_role_known")]

    def __str__(self) -> str:
        return self.code


class PersonName(models.Model):
    """The one row that says who a code is; erasing it leaves every record valid."""

    person = models.OneToOneField(Person, models.CASCADE, primary_key=True, related_name="named")
    full_name = models.CharField(max_length=120)
    email = models.EmailField(blank=True)


class Project(models.Model):
    code = models.SlugField(max_length=24, unique=True)
    title = models.CharField(max_length=160)
    is_open = models.BooleanField(default=True)
    created_at = models.DateTimeField()

    def __str__(self) -> str:
        return self.code


class MembershipRole(models.TextChoices):
    VIEWER = "viewer"
    CHEMIST = "chemist"
    STOCK_KEEPER = "stock_keeper"
    APPROVER = "approver"
    LEAD = "lead"


class Membership(models.Model):
    Role = MembershipRole
    person = models.ForeignKey(Person, models.CASCADE, related_name="memberships")
    project = models.ForeignKey(Project, models.CASCADE, related_name="memberships")
    role = models.CharField(max_length=16, choices=MembershipRole)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["person", "project"], name="membership_once"),
            one_of("role", MembershipRole, name="membership_role_known"),
        ]


class ApiTokenScope(models.TextChoices):
    READ = "read"
    WRITE = "write"


class ApiToken(models.Model):
    """A token is shown once and kept as its SHA-256."""

    Scope = ApiTokenScope
    person = models.ForeignKey(Person, models.CASCADE, related_name="tokens")
    name = models.CharField(max_length=60)
    digest = models.CharField(max_length=64, unique=True)
    scope = models.CharField(max_length=8, choices=ApiTokenScope)
    created_at = models.DateTimeField()
    expires_at = models.DateTimeField()
    revoked_at = models.DateTimeField(null=True)
    last_used_at = models.DateTimeField(null=True)  # to the hour
    by_login = models.BooleanField(default=False)  # ends when the password is changed

    class Meta:
        constraints = [one_of("scope", ApiTokenScope, name="api_token_scope_known")]


class LoginCountKind(models.TextChoices):
    ADDRESS = "address"
    CODE = "code"


class LoginCount(models.Model):
    """Failed logins of one address or for one code in a quarter of an hour, all processes.

    Neither stands in here: the digest is keyed.
    """

    Kind = LoginCountKind
    kind = models.CharField(max_length=8, choices=LoginCountKind)
    digest = models.CharField(max_length=64)
    quarter = models.BigIntegerField()
    attempts = models.BigIntegerField()

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["kind", "digest", "quarter"], name="login_count_once"),
            one_of("kind", LoginCountKind, name="login_count_kind_known"),
            whole_from("quarter", 0, name="login_count_quarter_whole"),
            whole_from("attempts", 0, name="login_count_attempts_whole"),
        ]


class RememberedAnswer(models.Model):
    """What a request with an Idempotency-Key was answered; written with the work itself."""

    person = models.ForeignKey(Person, models.CASCADE)
    route = models.CharField(max_length=80)
    key = models.CharField(max_length=128)
    fingerprint = models.CharField(max_length=64)
    status = models.PositiveSmallIntegerField(default=0)
    headers = models.TextField(default="{}")
    body = models.TextField(default="")
    created_at = models.DateTimeField()

    class Meta:
        constraints = [
            models.UniqueConstraint(
                fields=["person", "route", "key"], name="remembered_answer_once"
            ),
        ]


class OutboxMessageState(models.TextChoices):
    NEW = "new"
    SENT = "sent"
    DONE = "done"
    DEAD = "dead"


class OutboxMessage(models.Model):
    """Work to be done, written in the transaction that asked for it."""

    State = OutboxMessageState
    topic = models.CharField(max_length=40)
    queue = models.CharField(max_length=20)
    payload = models.TextField()
    request_id = models.CharField(max_length=64, blank=True)  # of the request that asked for it
    state = models.CharField(
        max_length=8, choices=OutboxMessageState, default=OutboxMessageState.NEW
    )
    sends = models.PositiveIntegerField(default=0)  # only the newest copy may be run
    attempts = models.PositiveSmallIntegerField(default=0)  # runs begun
    created_at = models.DateTimeField()
    available_at = models.DateTimeField()
    lease_until = models.DateTimeField(null=True)
    done_at = models.DateTimeField(null=True)
    last_error = models.TextField(default="")

    class Meta:
        constraints = [one_of("state", OutboxMessageState, name="outbox_state_known")]
        indexes = [
            models.Index(
                fields=["available_at", "id"],
                condition=Q(state__in=["new", "sent"]),
                name="outbox_unfinished",
            ),
        ]


class OutboxPause(models.Model):
    """While this row is there, nothing is sent."""

    since = models.DateTimeField()
    reason = models.CharField(max_length=160)

    class Meta:
        constraints = [models.CheckConstraint(condition=Q(id=1), name="outbox_pause_is_one")]


class Event(AppendOnlyModel):
    """What happened to a record or a setting: who, when, from what to what."""

    at = models.DateTimeField()
    actor_code = models.CharField(max_length=24)
    kind = models.CharField(max_length=60)
    subject = models.CharField(max_length=80, db_index=True)
    detail = models.TextField(default="{}")
