"""The event log: one line for each change of a record or a setting, in its own transaction."""

import json
from typing import Any

from labplan.base import clock
from labplan.base.models import Event


def record_event(
    *, actor_code: str, kind: str, subject: str, before: Any = None, after: Any = None
) -> None:
    """Append one event to the caller's transaction."""
    Event.objects.create(
        at=clock.now(),
        actor_code=actor_code,
        kind=kind,
        subject=subject,
        detail=json.dumps({"before": before, "after": after}, sort_keys=True, default=str),
    )
