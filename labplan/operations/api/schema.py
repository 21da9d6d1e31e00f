"""What the health answers hold, for the description of the API."""

from drf_spectacular.utils import extend_schema_view

from labplan.base.api.describe import (
    answer,
    answered,
    component,
    flag,
    list_of,
    number,
    operation,
    record,
    text,
    word,
)

TAG = "Health"
_LIVE = component(
    "Liveness", "The process answers.", {"status": word("Always the same.", ("live",))}
)
_READY = component(
    "Readiness",
    "Whether this process can do its work.",
    {
        "status": word(
            "`not_ready` when a required check fails.",
            ("ready", "ready_with_warnings", "not_ready"),
        ),
        "checks": list_of(
            record(
                {
                    "name": text("What was looked at.", "database"),
                    "ok": flag("Whether it is as it should be."),
                    "required": flag("Whether labplan cannot work without; else it is a warning."),
                    "detail": text("What was found, or what to do.", "It answers."),
                    "duration_ms": number("How long the look took.", 0.4),
                }
            ),
            "Always all of them, in the same order.",
        ),
    },
)
_NEVER_STORED = answered("Cache-Control", "Always `no-store`.", 200)

health_live = extend_schema_view(
    get=operation(
        "health-live", TAG, "Ask whether the process lives", {200: answer(_LIVE, "It does.")},
        description="Looks at nothing else. Needs no token. Also served without the prefix.",
        parameters=[_NEVER_STORED],
    )
)  # fmt: skip
health_ready = extend_schema_view(
    get=operation(
        "health-ready", TAG, "Ask whether it can do its work",
        {
            200: answer(_READY, "It can, perhaps with warnings."),
            503: answer(_READY, "A required check fails: send requests elsewhere."),
        },
        description=(
            "Looks at the database, its migrations and triggers, the broker, the packaged tables, "
            "the engine and the outbox. Needs no token: it holds no data of the laboratory. Also "
            "served without the prefix."
        ),
        parameters=[answered("Cache-Control", "Always `no-store`.", 200, 503)],
    )
)  # fmt: skip
