"""Tell whoever waits that a procedure has changed."""

from django.db import transaction

from labplan.base import broker
from labplan.procedures.models import Procedure


def announce_change(procedure: Procedure) -> None:
    """Once the caller's transaction is committed; a hint that may be lost."""
    code = procedure.code
    transaction.on_commit(lambda: broker.say(broker.CHANGED_CHANNEL, code), robust=True)
