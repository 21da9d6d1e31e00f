"""The tables of the seals. A seal closes runs of rows; its own rows never change either."""

from collections.abc import Iterable

from django.db import models
from django.db.models import F, Q
from django.db.models.functions import Length

from labplan.base.append_only import AppendOnlyModel
from labplan.base.checks import digest_long, whole_from

NO_SEAL_BEFORE = "0" * 64
MARK_LENGTH = 8


class Seal(AppendOnlyModel):
    """What was written since the seal before, closed with a key that is not in the database."""

    number = models.BigIntegerField(primary_key=True)
    sealed_at = models.DateTimeField()
    key_print = models.CharField(max_length=16)  # tells one key from another, and nothing else
    before = models.CharField(max_length=64)  # digest of the seal before
    runs = models.BigIntegerField()
    rows = models.BigIntegerField()
    digest = models.CharField(max_length=64)

    class Meta:
        constraints = [
            whole_from("number", 1, name="seal_number_whole"),
            whole_from("runs", 1, name="seal_runs_whole"),
            whole_from("rows", 1, name="seal_rows_whole"),
            digest_long("before", name="seal_before_long"),
            digest_long("digest", name="seal_digest_long"),
            models.CheckConstraint(condition=Q(rows__gte=F("runs")), name="seal_rows_fill_runs"),
        ]


class SealRun(AppendOnlyModel):
    """Rows of one book and subject with consecutive numbers, from first to last."""

    seal = models.ForeignKey(Seal, models.PROTECT, related_name="+")
    book = models.CharField(max_length=24)  # the name under which a table is sealed
    subject = models.BigIntegerField()  # key of the bottle; 0 where a table is one book
    first = models.BigIntegerField()
    last = models.BigIntegerField()
    marks = models.TextField()  # the start of each row's code: tells which row was changed
    digest = models.CharField(max_length=64)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["book", "subject", "last"], name="seal_run_once"),
            whole_from("subject", 0, name="seal_run_subject_whole"),
            whole_from("first", 1, name="seal_run_first_whole"),
            whole_from("last", 1, name="seal_run_last_whole"),
            digest_long("digest", name="seal_run_digest_long"),
            models.CheckConstraint(condition=Q(last__gte=F("first")), name="seal_run_has_rows"),
            models.CheckConstraint(
                condition=models.lookups.Exact(
                    Length("marks"), MARK_LENGTH * (F("last") - F("first") + 1)
                ),
                name="seal_run_row_marked",
            ),
        ]


_CHAIN = "the seal does not carry on from the one before it"
_CARRIES_ON = f"""
    (NEW.number = 1 AND NEW.before = '{NO_SEAL_BEFORE}' AND NOT EXISTS (SELECT 1 FROM base_seal))
    OR EXISTS (SELECT 1 FROM base_seal s
       WHERE s.number = NEW.number - 1 AND s.digest = NEW.before)
"""
_RUN = "the run covers what is sealed"
_IS_NEW = """
    NOT EXISTS (SELECT 1 FROM base_sealrun r WHERE r.book = NEW.book
       AND r.subject = NEW.subject AND r.last >= NEW.first AND r.first <= NEW.last)
"""


def seal_triggers(vendor: str) -> Iterable[str]:
    """Return idempotent SQL for `vendor`: a chain without gaps, no row sealed twice."""
    rules = (("base_seal", _CARRIES_ON, _CHAIN), ("base_sealrun", _IS_NEW, _RUN))
    for table, condition, message in rules:
        yield from _trigger(vendor, table, condition, message)


def _trigger(vendor: str, table: str, condition: str, message: str) -> list[str]:
    if vendor == "sqlite":
        return [
            f"CREATE TRIGGER IF NOT EXISTS {table}_carries_on BEFORE INSERT ON {table} "
            f"WHEN NOT ({condition}) BEGIN SELECT RAISE(ABORT, '{message}'); END"
        ]
    return [
        f"CREATE OR REPLACE FUNCTION {table}_check_row() RETURNS trigger LANGUAGE plpgsql AS "
        f"$$ BEGIN IF NOT ({condition}) THEN RAISE EXCEPTION '{message}' "
        "USING ERRCODE = 'integrity_constraint_violation'; END IF; RETURN NEW; END $$",
        f"CREATE OR REPLACE TRIGGER {table}_carries_on BEFORE INSERT ON {table} "
        f"FOR EACH ROW EXECUTE FUNCTION {table}_check_row()",
    ]
