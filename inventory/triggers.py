"""The book of a bottle has no gaps, and each line carries on from the one before it."""

from collections.abc import Iterable

_TABLE = "inventory_movement"
_MESSAGE = "the line does not carry on from the one before it"
# True when the new line is the first and starts from nothing, or follows its predecessor.
_CARRIES_ON = f"""
    (NEW.seq = 1 AND NEW.on_hand_after = NEW.on_hand_change AND NEW.held_after = NEW.held_change
       AND NOT EXISTS (SELECT 1 FROM {_TABLE} m WHERE m.bottle_id = NEW.bottle_id))
    OR EXISTS (SELECT 1 FROM {_TABLE} m WHERE m.bottle_id = NEW.bottle_id
       AND m.seq = NEW.seq - 1
       AND m.on_hand_after + NEW.on_hand_change = NEW.on_hand_after
       AND m.held_after + NEW.held_change = NEW.held_after)
"""


def book_triggers(vendor: str) -> Iterable[str]:
    """Return idempotent SQL for `vendor`: refuse a movement that leaves a gap or a wrong sum."""
    if vendor == "sqlite":
        return [
            f"CREATE TRIGGER IF NOT EXISTS {_TABLE}_carries_on BEFORE INSERT ON {_TABLE} "
            f"WHEN NOT ({_CARRIES_ON}) BEGIN SELECT RAISE(ABORT, '{_MESSAGE}'); END"
        ]
    return [
        f"CREATE OR REPLACE FUNCTION {_TABLE}_check_line() RETURNS trigger LANGUAGE plpgsql AS "
        f"$$ BEGIN IF NOT ({_CARRIES_ON}) THEN RAISE EXCEPTION '{_MESSAGE}' "
        "USING ERRCODE = 'integrity_constraint_violation'; END IF; RETURN NEW; END $$",
        f"CREATE OR REPLACE TRIGGER {_TABLE}_carries_on BEFORE INSERT ON {_TABLE} "
        f"FOR EACH ROW EXECUTE FUNCTION {_TABLE}_check_line()",
    ]
