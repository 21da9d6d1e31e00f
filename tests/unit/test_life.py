"""Every state x action of a procedure, against a table written out by hand."""

import itertools

import pytest

from labplan.base.errors import StateForbids
from labplan.procedures import life

ACTIONS = ("plan", "approve", "start", "finish", "abandon", "cancel", "lapse", "requeue")
# state -> action -> where it may end; what is not here is forbidden
LIFE = {
    "queued": {
        "plan": {"planned", "refused", "short", "contended", "failed"},
        "cancel": {"cancelled"},
    },
    "planned": {"approve": {"approved"}, "lapse": {"lapsed"}, "cancel": {"cancelled"}},
    "approved": {"start": {"running", "short"}, "cancel": {"cancelled"}},
    "running": {"finish": {"finished"}, "abandon": {"abandoned"}},
    "refused": {},
    "short": {},
    "contended": {},
    "failed": {"requeue": {"queued"}},
    "cancelled": {},
    "lapsed": {},
    "finished": {},
    "abandoned": {},
}
EVERY = list(itertools.product(LIFE, ACTIONS))
ALLOWED = [(state, action) for state, action in EVERY if action in LIFE[state]]
OWN = {"plan", "lapse", "requeue"}  # what labplan does by itself and nobody can ask for
FORBIDDEN = [pair for pair in EVERY if pair not in ALLOWED]


def test_the_table_knows_every_state_and_action() -> None:
    assert set(life.STATES) == set(LIFE)
    assert set(life.ACTIONS) == set(ACTIONS)
    assert (len(ALLOWED), len(FORBIDDEN)) == (10, 86)


@pytest.mark.parametrize(("state", "action"), ALLOWED)
def test_an_action_that_fits_leads_where_the_table_says(state: str, action: str) -> None:
    assert life.require_action(state, action) == LIFE[state][action]
    for end in life.STATES:
        if end in LIFE[state][action]:
            assert life.require_end(state, action, end) == end
        else:
            with pytest.raises(ValueError, match="never ends in"):
                life.require_end(state, action, end)


@pytest.mark.parametrize(("state", "action"), FORBIDDEN)
def test_an_action_that_does_not_fit_is_refused_and_says_what_is_possible(
    state: str, action: str
) -> None:
    with pytest.raises(StateForbids) as refusal:
        life.require_action(state, action)
    assert refusal.value.status == 409
    assert f"that is {state} cannot be changed by '{action}'" in refusal.value.detail
    possible = refusal.value.detail.partition("possible: ")[2].rstrip(".").split(", ")
    assert possible == (sorted(set(LIFE[state]) - OWN) or ["nothing any more"])


@pytest.mark.parametrize("state", LIFE)
def test_the_actions_of_a_state_are_those_of_the_table_that_people_do(state: str) -> None:
    assert list(life.actions_in(state)) == sorted(set(LIFE[state]) - OWN)


@pytest.mark.parametrize(("state", "action"), [("queued", "fly"), ("", "plan"), ("gone", "plan")])
def test_an_unknown_word_is_refused(state: str, action: str) -> None:
    with pytest.raises(StateForbids):
        life.require_action(state, action)


def test_every_state_is_reached_and_queued_again_only_from_failed() -> None:
    reached = {end for actions in LIFE.values() for ends in actions.values() for end in ends}
    assert set(life.STATES) == reached
    assert [state for state in LIFE if "queued" in set().union(*LIFE[state].values())] == ["failed"]
    assert set(LIFE) - {"queued"} == life.SETTLED
