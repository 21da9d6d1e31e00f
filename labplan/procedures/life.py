"""The life of a procedure: one table, read by every service that changes a state."""

from labplan.base.errors import StateForbids

QUEUED, PLANNED, REFUSED, SHORT = "queued", "planned", "refused", "short"
CONTENDED, FAILED, CANCELLED, APPROVED = "contended", "failed", "cancelled", "approved"
LAPSED, RUNNING, FINISHED, ABANDONED = "lapsed", "running", "finished", "abandoned"

STATES = (
    QUEUED, PLANNED, REFUSED, SHORT, CONTENDED, FAILED, CANCELLED, APPROVED, LAPSED, RUNNING,
    FINISHED, ABANDONED,
)  # fmt: skip

# (state, action) -> the states it may end in
TRANSITIONS: dict[tuple[str, str], frozenset[str]] = {
    (QUEUED, "plan"): frozenset({PLANNED, REFUSED, SHORT, CONTENDED, FAILED}),
    (QUEUED, "cancel"): frozenset({CANCELLED}),
    (PLANNED, "approve"): frozenset({APPROVED}),
    (PLANNED, "lapse"): frozenset({LAPSED}),
    (PLANNED, "cancel"): frozenset({CANCELLED}),
    (APPROVED, "start"): frozenset({RUNNING, SHORT}),
    (APPROVED, "cancel"): frozenset({CANCELLED}),
    (RUNNING, "finish"): frozenset({FINISHED}),
    (RUNNING, "abandon"): frozenset({ABANDONED}),
    (FAILED, "requeue"): frozenset({QUEUED}),
}
ACTIONS = tuple(sorted({action for _, action in TRANSITIONS}))
# What labplan does by itself; all others are for people.
OWN_ACTIONS = frozenset({"plan", "lapse", "requeue"})
SETTLED = frozenset(STATES) - {QUEUED}


def actions_in(state: str) -> tuple[str, ...]:
    """What a person may do in this state."""
    return tuple(
        action for action in ACTIONS if action not in OWN_ACTIONS and (state, action) in TRANSITIONS
    )


def require_action(state: str, action: str) -> frozenset[str]:
    """The states the action may end in; StateForbids (409) when it does not fit the state."""
    allowed = TRANSITIONS.get((state, action))
    if allowed is None:
        possible = ", ".join(actions_in(state)) or "nothing any more"
        raise StateForbids(
            f"A procedure that is {state} cannot be changed by '{action}'; possible: {possible}."
        )
    return allowed


def require_end(state: str, action: str, end: str) -> str:
    """Check a resulting state against the table; any other is an error in the code."""
    if end not in require_action(state, action):
        raise ValueError(f"'{action}' on a {state} procedure never ends in {end}")
    return end
