"""Tell whoever waits, and whoever watches, that a procedure has changed."""

import json
import logging

from django.db import transaction

from labplan.base import broker, metrics
from labplan.base.channels import CHANGED_CHANNEL
from labplan.procedures.models import Procedure

logger = logging.getLogger(__name__)
_settled = metrics.counter("procedures_settled", "Procedures settled, by state.", ("state",))


def announce_change(procedure: Procedure) -> None:
    """Once the caller's transaction is committed; a hint that may be lost."""
    code = procedure.code
    transaction.on_commit(lambda: broker.say(CHANGED_CHANNEL, code), robust=True)


def note_settled(procedure: Procedure) -> None:
    """Log and count it, once the caller's transaction is committed."""
    code, state, attempt = procedure.code, procedure.state, procedure.attempt
    reasons = ", ".join(reason["code"] for reason in json.loads(procedure.reasons))

    def note() -> None:
        _count_settled(state)
        logger.info(
            "procedure %s settled: %s", code, state,
            extra={"procedure": code, "state": state, "attempt": attempt, "reasons": reasons},
        )  # fmt: skip

    transaction.on_commit(note, robust=True)


@metrics.never_in_the_way
def _count_settled(state: str) -> None:
    _settled.labels(state).inc()
